package harmonic

import (
	"fmt"
	"math"
)

// fewestCycles is how much of a cycle a fit needs; two parts in a hundred are
// left for the rounding of segment borders.
const fewestCycles = 1 - 0.02

// Channel is what the fit says of one channel, in the units of the channel.
// Index 0 of X is the fundamental, 1 the second harmonic.
type Channel struct {
	Mean   float64 // of the trend, over the segment
	Slope  float64 // of the trend per s, at the centre (and on average)
	Centre float64 // value of the trend at the centre

	// X holds the complex amplitudes: x(t) = Re[X_k exp(i k w t)], t as in
	// Points.T.
	X []complex128

	// Standard uncertainties from white noise and from batches, the larger,
	// widened by Student's t; see the package comment. NaN where the segment
	// has too few points (UMean, USlope: 8) or cycles (UX: 3) for batches.
	UMean, USlope float64
	UX            float64 // of the amplitude of the fundamental

	White White

	RSS float64 // sum of W times residual squared
	SD  float64 // residual standard deviation of a raw sample, sqrt(RSS/(points-columns))
}

// White holds standard uncertainties for independent noise of standard
// deviation Channel.SD on every raw sample.
type White struct {
	Mean, Slope float64
	Re, Im      []float64 // of X
}

// Fit is a linear fit of all channels of a segment at one frequency.
type Fit struct {
	Freq   float64 // Hz
	Centre float64 // s, middle of the segment
	FromS  float64
	ToS    float64
	Cycles float64
	N      int     // points
	SumW   float64 // raw samples

	basis    *basis
	solution *Solution
	channels []Channel
	batches  *Batches // nil with fewer than three cycles
}

// Channel returns what was found for channel i, in the order given to FitSine.
func (f *Fit) Channel(i int) Channel { return f.channels[i] }

// Oscillating is the fitted fundamental with its harmonics, without the trend,
// as the mean over w raw samples centred at t (s). A Fit keeps scratch space
// for it: not for concurrent use.
func (f *Fit) Oscillating(channel int, t, w float64) float64 {
	b := f.basis
	var fixed [16]float64
	row := fixed[:]
	if n := b.columns(); n > len(row) {
		row = make([]float64, n)
	}
	row = row[:b.columns()]
	b.at(t, w, row)
	c := f.solution.Coefficients[channel]
	v := 0.0
	for j := 1 + b.Trend; j < len(row); j++ {
		v += c[j] * row[j]
	}
	return v
}

// FitSine fits every channel by weighted linear least squares with a trend and
// the fundamental and harmonics of freq (Hz): the three-parameter sine fit of
// IEEE 1057 with more columns. channels[c][i] belongs to point i.
//
// It fails with less than one cycle, with fewer than one point more than
// columns, with points too far apart for the highest harmonic (fewer than two a
// period), and on values that are not finite.
func FitSine(p Points, freq float64, channels [][]float64, opt Model) (*Fit, error) {
	b, err := prepare(p, freq, channels, opt)
	if err != nil {
		return nil, fmt.Errorf("sine fit: %w", err)
	}
	q := len(channels)
	a := NewAccumulator(opt.columns(), q)
	row, y := make([]float64, opt.columns()), make([]float64, q)
	for i, t := range p.T {
		b.at(t, p.W[i], row)
		for c := range y {
			y[c] = channels[c][i]
		}
		a.Add(row, p.W[i], y)
	}
	s, err := a.Solve()
	if err != nil {
		return nil, fmt.Errorf("sine fit at %g Hz: %w", freq, err)
	}
	from, to := p.bounds()
	f := &Fit{
		Freq: freq, Centre: b.centre, FromS: from, ToS: to, Cycles: (to - from) * freq, N: s.N, SumW: s.SumW,
		basis: b, solution: s, channels: make([]Channel, q),
	}
	for c := range f.channels {
		f.channels[c] = f.describe(c)
	}
	residual := f.residuals(p, channels)
	f.batches = f.divide(p, residual)
	for c := range f.channels {
		ch := &f.channels[c]
		ch.UX = f.amplitudeUncertainty(c)
		ch.UMean, ch.USlope = math.NaN(), math.NaN()
		slow, err := slowness(p, residual[c], ch.SD, opt.Trend)
		if err != nil {
			continue
		}
		dof := float64(s.N - opt.columns())
		ch.UMean, _ = slow.combine(ch.White.Mean*ch.White.Mean, dof, slow.mean)
		if opt.Trend >= 1 {
			half := b.half
			ch.USlope, _ = slow.combine(ch.White.Slope*ch.White.Slope, dof, slow.slope/(half*half))
		}
	}
	return f, nil
}

// prepare checks what was given to a fit.
func prepare(p Points, freq float64, channels [][]float64, m Model) (*basis, error) {
	if err := m.check(); err != nil {
		return nil, err
	}
	if err := p.check(); err != nil {
		return nil, err
	}
	if !(freq > 0) || math.IsInf(freq, 0) {
		return nil, fmt.Errorf("frequency %v Hz: want a finite number above 0", freq)
	}
	if len(channels) == 0 {
		return nil, fmt.Errorf("no channel to fit")
	}
	for c := range channels {
		if len(channels[c]) != len(p.T) {
			return nil, fmt.Errorf("channel %d has %d values for %d points", c, len(channels[c]), len(p.T))
		}
	}
	from, to := p.bounds()
	cycles := (to - from) * freq
	if cycles < fewestCycles {
		return nil, fmt.Errorf("%.2f cycles of %g Hz in %g s: need at least one", cycles, freq, to-from)
	}
	if n := m.columns(); len(p.T) <= n {
		return nil, fmt.Errorf("%d points for %d columns: need at least %d", len(p.T), n, n+1)
	}
	if per := float64(len(p.T)) / cycles; per <= 2*float64(m.Harmonics) {
		return nil, fmt.Errorf("%.2f points a cycle: harmonic %d needs more than %d", per, m.Harmonics, 2*m.Harmonics)
	}
	return newBasis(p, freq, m), nil
}

// describe turns the coefficients of one channel into its figures.
func (f *Fit) describe(c int) Channel {
	b, s, m := f.basis, f.solution, f.basis.Model
	x := s.Coefficients[c]
	v := s.RSS[c] / float64(s.N-m.columns())
	ch := Channel{
		Mean: x[0], Centre: x[0], RSS: s.RSS[c], SD: math.Sqrt(v),
		X:     make([]complex128, m.Harmonics),
		White: White{Re: make([]float64, m.Harmonics), Im: make([]float64, m.Harmonics)},
	}
	ch.White.Mean = math.Sqrt(v * s.Covariance[0][0])
	ch.White.Slope = math.NaN()
	if m.Trend >= 1 {
		ch.Slope = x[1] / b.half
		ch.White.Slope = math.Sqrt(v*s.Covariance[1][1]) / b.half
	}
	if m.Trend >= 2 {
		ch.Centre -= x[2] / 2 // P2(0) = -1/2
	}
	for k := range ch.X {
		i := 1 + m.Trend + 2*k
		turn := f.toZero(k)
		ch.X[k] = complex(x[i], -x[i+1]) * turn
		// Re = A cos + B sin, Im = A sin - B cos of the angle turned through.
		cos, sin := real(turn), imag(turn)
		aa, bb, ab := s.Covariance[i][i], s.Covariance[i+1][i+1], s.Covariance[i][i+1]
		ch.White.Re[k] = math.Sqrt(v * math.Max(0, cos*cos*aa+sin*sin*bb+2*sin*cos*ab))
		ch.White.Im[k] = math.Sqrt(v * math.Max(0, sin*sin*aa+cos*cos*bb-2*sin*cos*ab))
	}
	return ch
}

// toZero is the factor that takes the complex amplitude of harmonic k+1 from
// the centre of the segment to t = 0.
func (f *Fit) toZero(k int) complex128 {
	s, c := math.Sincos(-float64(k+1) * f.basis.omega * f.Centre)
	return complex(c, s)
}

// residuals returns what the fit leaves of every channel.
func (f *Fit) residuals(p Points, channels [][]float64) [][]float64 {
	out := matrix(len(channels), len(p.T))
	row := make([]float64, f.basis.columns())
	for i, t := range p.T {
		f.basis.at(t, p.W[i], row)
		for c := range channels {
			v := channels[c][i]
			for j, x := range f.solution.Coefficients[c] {
				v -= x * row[j]
			}
			out[c][i] = v
		}
	}
	return out
}

// Distortion is the rms of harmonics 2 and 3 over that of the fundamental
// (total harmonic distortion of IEEE 1241, cut off after the third). Noise
// alone makes it about sqrt(2) times White.Re over the amplitude for each
// harmonic, never zero. NaN where no second harmonic was fitted or the
// fundamental is zero.
func (f *Fit) Distortion(channel int) float64 {
	x := f.channels[channel].X
	if len(x) < 2 {
		return math.NaN()
	}
	sum := 0.0
	for _, h := range x[1:min(3, len(x))] {
		sum += real(h)*real(h) + imag(h)*imag(h)
	}
	a := magnitude(x[0])
	if a == 0 {
		return math.NaN()
	}
	return math.Sqrt(sum) / a
}

// SNRdB is 20 log10[(A/sqrt2)/rms residual] with A the amplitude of the
// fundamental and the rms residual that of a raw sample, sqrt(RSS/points): the
// form of SINAD in IEEE 1057 and 1241. Fitted harmonics and trend are not part
// of the residual: with Harmonics 1 and Trend 0 it is SINAD, with more it is the
// signal to noise ratio without harmonics (see Distortion for those). The rms
// of a raw sample is right for noise that is white between raw samples. +Inf
// where nothing is left.
func (f *Fit) SNRdB(channel int) float64 {
	c := f.channels[channel]
	return 20 * math.Log10(magnitude(c.X[0])/math.Sqrt2/math.Sqrt(c.RSS/float64(f.N)))
}

func magnitude(x complex128) float64 { return math.Hypot(real(x), imag(x)) }
