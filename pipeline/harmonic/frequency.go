package harmonic

import (
	"errors"
	"fmt"
	"math"
)

const (
	// scanSpan is how far around the guess, relative to it, the frequency is
	// looked for: a guess 10 % off with room to see the minimum.
	scanSpan = 0.13
	// scanStep is the distance of two frequencies of the scan in units of
	// 1/duration; the minimum has a half width of 1.
	scanStep = 0.2
	// scanPoints is the number of points a cycle that the scan keeps.
	scanPoints = 16
	// fewestGuessed is the number of cycles of the guessed frequency needed:
	// two true cycles and a guess 10 % too low.
	fewestGuessed = 1.75
)

// ErrNoOscillation tells that no sinusoid near the guess stands out of the
// noise.
var ErrNoOscillation = errors.New("no oscillation near the guessed frequency stands out of the noise")

// RefineFrequency returns the frequency (Hz) near guess at which the model fits
// y best, and its standard uncertainty for white noise of the residual's size.
//
// The sum of squares is first scanned from 13 % below to 13 % above the guess
// (trend and fundamental), then refined by the four-parameter sine fit of IEEE
// 1057: Gauss-Newton with the derivative by the frequency as one more column,
// here of all harmonics and of the averaging factor, until the steps are those
// of rounding. The guess may be 10 % off when there are two cycles or more.
//
// It fails with less than 1.75 guessed cycles, with what FitSine refuses, with
// ErrNoOscillation, and when the iteration leaves the minimum found by the scan.
func RefineFrequency(p Points, y []float64, guess float64, opt Model) (freq, u float64, err error) {
	freq, u, err = refine(p, y, guess, opt)
	if err != nil {
		return math.NaN(), math.NaN(), fmt.Errorf("frequency near %g Hz: %w", guess, err)
	}
	return freq, u, nil
}

func refine(p Points, y []float64, guess float64, opt Model) (freq, u float64, err error) {
	b, err := prepare(p, guess, [][]float64{y}, opt)
	if err != nil {
		return 0, 0, err
	}
	for i, v := range y {
		if v-v != 0 {
			return 0, 0, fmt.Errorf("value of point %d is %v", i, v)
		}
	}
	if cycles := 2 * b.half * guess; cycles < fewestGuessed {
		return 0, 0, fmt.Errorf("%.2f cycles in %g s: need at least %g", cycles, 2*b.half, fewestGuessed)
	}
	n := opt.columns()
	if len(y) < n+2 {
		return 0, 0, fmt.Errorf("%d points for %d columns: need at least %d", len(y), n+1, n+2)
	}
	start, tried := scan(p, y, guess, opt)
	omega := 2 * math.Pi * start
	reach := math.Pi / b.half // one scan lobe, 2 pi / duration

	h := 1 + opt.Trend
	row := make([]float64, n+1)
	solve := func(columns int, previous []float64) (*Solution, error) {
		b.setOmega(omega)
		a := NewAccumulator(columns, 1)
		for i, t := range p.T {
			b.at(t, p.W[i], row)
			if columns > n {
				row[n] = b.byOmega(t, row, previous)
			}
			a.Add(row[:columns], p.W[i], y[i:i+1])
		}
		return a.Solve()
	}
	s, err := solve(n, nil)
	if err != nil {
		return 0, 0, err
	}
	variance := s.RSS[0] / float64(s.N-n)
	a2 := s.Coefficients[0][h]*s.Coefficients[0][h] + s.Coefficients[0][h+1]*s.Coefficients[0][h+1]
	gain := (s.Covariance[h][h] + s.Covariance[h+1][h+1]) / 2
	// Of noise alone a2/(2 variance gain) is exponential; the largest of all
	// frequencies tried passes this limit once in a thousand.
	if !(a2 > 2*variance*gain*math.Log(1e3*float64(tried))) {
		return 0, 0, ErrNoOscillation
	}
	last := math.Inf(1)
	for range 60 {
		x := s.Coefficients[0]
		if s, err = solve(n+1, x); err != nil {
			return 0, 0, err
		}
		step := s.Coefficients[0][n] / b.half
		if step-step != 0 || math.Abs(omega+step-2*math.Pi*start) > reach {
			return 0, 0, fmt.Errorf("iteration left %g Hz, the best of the scan: %w", start, ErrNoOscillation)
		}
		// Steps shrink fast until they are rounding and then stay about equal;
		// that far they are below 1e-9 of a turn over the segment.
		if size := math.Abs(step) * b.half; size >= last/2 && size < 1e-8 || step == 0 {
			v := s.RSS[0] / float64(s.N-n-1)
			return omega / (2 * math.Pi), math.Sqrt(v*s.Covariance[n][n]) / b.half / (2 * math.Pi), nil
		} else {
			last = size
		}
		omega += step
	}
	return 0, 0, errors.New("four-parameter fit does not converge; give a better guess or a longer segment")
}

// byOmega is the derivative of the model by omega, in units of 1/half, for the
// coefficients x; row holds the basis at t.
func (b *basis) byOmega(t float64, row, x []float64) float64 {
	tau := t - b.centre
	h := 1 + b.Trend
	v := 0.0
	for k := range b.d {
		ac, as := row[h+2*k], row[h+2*k+1]
		A, B := x[h+2*k], x[h+2*k+1]
		v += float64(k+1) * tau * (B*ac - A*as)
		if b.d[k] != 0 {
			v += b.dd[k] / b.d[k] * (A*ac + B*as)
		}
	}
	return v / b.half
}

// scan returns the frequency with the smallest sum of squares of trend and
// fundamental over a grid, and the number of frequencies tried. The trend
// columns are made orthonormal once; for each frequency cos and sin are freed
// of them by their inner products, which leaves a 2 x 2 system.
func scan(p Points, y []float64, guess float64, opt Model) (best float64, tried int) {
	p, y = thin(p, y, 1/(guess*scanPoints))
	from, to := p.bounds()
	b := newBasis(p, guess, Model{Trend: opt.Trend, Harmonics: 1})
	n := 1 + opt.Trend
	q := matrix(n, len(y))
	row := make([]float64, n+2)
	for i, t := range p.T {
		b.at(t, p.W[i], row)
		for j := range n {
			q[j][i] = row[j]
		}
	}
	dot := func(a, b []float64) (s float64) {
		for i, w := range p.W {
			s += w * a[i] * b[i]
		}
		return s
	}
	y = append([]float64(nil), y...)
	free := func(v, of []float64) {
		d := dot(v, of)
		for i := range v {
			v[i] -= d * of[i]
		}
	}
	for j := range q {
		for k := range j {
			free(q[j], q[k])
		}
		size := math.Sqrt(dot(q[j], q[j]))
		for i := range q[j] {
			q[j][i] /= size
		}
		free(y, q[j])
	}
	steps := int(math.Ceil(scanSpan * guess * (to - from) / scanStep))
	gain := math.Inf(-1)
	best = guess
	for k := -steps; k <= steps; k++ {
		f := guess * (1 + scanSpan*float64(k)/float64(steps))
		omega := 2 * math.Pi * f
		var cc, ss, cs, cy, sy float64
		var qc, qs [3]float64
		for i, t := range p.T {
			s, c := math.Sincos(omega * (t - b.centre))
			wc, ws := p.W[i]*c, p.W[i]*s
			cc += wc * c
			ss += ws * s
			cs += wc * s
			cy += wc * y[i]
			sy += ws * y[i]
			for j := range q {
				qc[j] += wc * q[j][i]
				qs[j] += ws * q[j][i]
			}
		}
		for j := range q {
			cc -= qc[j] * qc[j]
			ss -= qs[j] * qs[j]
			cs -= qc[j] * qs[j]
		}
		// What the fundamental takes from the sum of squares.
		if g := (cy*cy*ss - 2*cy*sy*cs + sy*sy*cc) / (cc*ss - cs*cs); g > gain {
			gain, best = g, f
		}
	}
	return best, 2*steps + 1
}

// thin joins neighbouring points into points of about the given duration (s).
// Good enough to find a lobe, not to fit.
func thin(p Points, y []float64, duration float64) (Points, []float64) {
	var out Points
	var values []float64
	var w, wt, wy, since float64
	for i, t := range p.T {
		if w > 0 && t-since >= duration {
			out.T, out.W, values = append(out.T, wt/w), append(out.W, w), append(values, wy/w)
			w, wt, wy = 0, 0, 0
		}
		if w == 0 {
			since = t
		}
		w += p.W[i]
		wt += p.W[i] * t
		wy += p.W[i] * y[i]
	}
	out.T, out.W, values = append(out.T, wt/w), append(out.W, w), append(values, wy/w)
	return out, values
}
