package visco

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"slices"
)

// Point is the complex modulus at one frequency with the standard
// uncertainties of its parts, in N/m.
type Point struct {
	FrequencyHz     float64
	K               complex128
	UStorage, ULoss float64
}

// Fitted is one model fitted to a series.
type Fitted struct {
	Model         Model
	P             []float64 // in the order of Model.Parameters
	U             []float64 // standard uncertainties; NaN where the data do not tell
	ChiSquared    float64
	Freedom       int
	AICc          float64
	EvidenceRatio float64 // of the best model over this one
	Weight        float64 // Akaike weight: this one's share of the evidence of all
}

// Modulus returns the fitted K* at a frequency.
func (f Fitted) Modulus(frequencyHz float64) complex128 {
	return f.Model.Modulus(2*math.Pi*frequencyHz, f.P)
}

// widen is what the uncertainties of the points are multiplied by where the
// fit is worse than they allow: a misfit means that they were too small, or the
// model too simple. A fit that is better than they allow earns nothing, since
// with few points that is luck.
func (f Fitted) widen() float64 {
	if f.Freedom < 1 {
		return 1
	}
	return math.Sqrt(math.Max(1, f.ChiSquared/float64(f.Freedom)))
}

// Ranking holds the fitted models, best first.
type Ranking struct {
	Fits    []Fitted
	Decided bool     // the best stands out by decisive or is the only one
	LeftOut []string // models not fitted, with the reason
}

// decisive is the evidence ratio at which the best model stands out. Burnham
// and Anderson (2002, from memory) find little support for models that lie four
// to seven units of AIC behind; a ratio of 10 is 4.6 units.
const decisive = 10

// Rank fits the models (all of Models where none are given) to a series, real
// and imaginary part together, weighted by the uncertainties, and orders them
// by the Akaike criterion corrected for small samples,
//
//	AICc = chi^2 + 2k + 2k(k+1)/(n-k-1),  n = two values a frequency.
//
// A model with too many parameters for the series is left out and says so.
// Standard uncertainties are those of the weights, times sqrt(chi^2/freedom)
// where that is above 1; a parameter that the data do not tell, because it lies
// beyond every frequency or its uncertainty is a factor of twenty and more, has
// NaN.
func Rank(series []Point, ms ...Model) (Ranking, error) {
	s, err := sorted(series)
	if err != nil {
		return Ranking{}, err
	}
	if len(ms) == 0 {
		ms = models
	}
	var r Ranking
	n := 2 * len(s)
	for _, m := range ms {
		k := len(m.Parameters)
		if n-k-1 < 1 {
			r.LeftOut = append(r.LeftOut, fmt.Sprintf("%s: %d frequencies are too few for %d parameters", m.Name, len(s), k))
			continue
		}
		f, err := fit(s, m, m.starts(s))
		if err != nil {
			r.LeftOut = append(r.LeftOut, fmt.Sprintf("%s: %v", m.Name, err))
			continue
		}
		f.AICc = f.ChiSquared + 2*float64(k) + 2*float64(k*(k+1))/float64(n-k-1)
		r.Fits = append(r.Fits, f)
	}
	if len(r.Fits) == 0 {
		return r, fmt.Errorf("visco: no model fits %d frequencies", len(s))
	}
	slices.SortStableFunc(r.Fits, func(a, b Fitted) int { return cmp.Compare(a.AICc, b.AICc) })
	all := 0.0
	for i := range r.Fits {
		r.Fits[i].EvidenceRatio = math.Exp(math.Min(700, (r.Fits[i].AICc-r.Fits[0].AICc)/2))
		all += 1 / r.Fits[i].EvidenceRatio
	}
	for i := range r.Fits {
		r.Fits[i].Weight = 1 / r.Fits[i].EvidenceRatio / all
	}
	r.Decided = len(r.Fits) == 1 || r.Fits[1].EvidenceRatio >= decisive
	return r, nil
}

// sorted checks a series and returns it by frequency.
func sorted(series []Point) ([]Point, error) {
	if len(series) < 2 {
		return nil, errors.New("visco: a series needs at least two frequencies")
	}
	s := slices.Clone(series)
	slices.SortFunc(s, func(a, b Point) int { return cmp.Compare(a.FrequencyHz, b.FrequencyHz) })
	for _, p := range s {
		if !(p.FrequencyHz > 0) || !(p.UStorage > 0) || !(p.ULoss > 0) || cmplx.IsNaN(p.K) || cmplx.IsInf(p.K) ||
			math.IsInf(p.UStorage, 0) || math.IsInf(p.ULoss, 0) || math.IsInf(p.FrequencyHz, 0) {
			return nil, fmt.Errorf("visco: the point at %g Hz has no finite modulus with positive uncertainties", p.FrequencyHz)
		}
	}
	if s[0].FrequencyHz == s[len(s)-1].FrequencyHz {
		return nil, errors.New("visco: a series needs at least two different frequencies")
	}
	if strongest(s) == 0 {
		return nil, errors.New("visco: the modulus is zero at all frequencies")
	}
	return s, nil
}

// fit finds the best of the minima reached from several starts.
func fit(s []Point, m Model, starts [][]float64) (Fitted, error) {
	best := lowest(s, m, starts)
	if best == nil {
		return Fitted{}, ErrNoMinimum
	}
	f := Fitted{Model: m, P: outward(m, best.p, nil), ChiSquared: best.rss, Freedom: 2*len(s) - len(best.p)}
	cov, _ := best.covariance() // what it does not tell is untold
	widen := f.widen()
	slopes := make([]float64, len(f.P))
	for i := range f.P {
		u := math.NaN()
		if own := widen * math.Sqrt(cov.At(i, i)); own < untold {
			slopesAt(m, f.P, i, slopes)
			v := 0.0
			for a, x := range slopes {
				for b, y := range slopes {
					// A parameter without influence has no covariance.
					if c := cov.At(a, b); x != 0 && y != 0 && !math.IsNaN(c) {
						v += x * c * y
					}
				}
			}
			u = widen * math.Sqrt(v)
		}
		f.U = append(f.U, u)
	}
	return f, nil
}

// untold is the uncertainty of a logarithm, a factor of twenty, from which on a
// parameter counts as not told by the data.
const untold = 3.0

// How far parameters may run: a modulus this factor above and below the
// strongest one, a time this factor beyond the measured 1/w, a logit so far
// from a half. There they stand for "zero" or "infinite": the modulus at the
// measured frequencies no longer feels them, to better than any measurement.
const (
	farModulus = 1e6
	farTime    = 1e4
	farLogit   = 12.0
)

// lowest descends from all starts and returns where the sum is lowest, nil
// where none of them settled.
func lowest(s []Point, m Model, starts [][]float64) *search {
	k := math.Log(strongest(s))
	short, long := -math.Log(2*math.Pi*s[len(s)-1].FrequencyHz)-math.Log(farTime), -math.Log(2*math.Pi*s[0].FrequencyHz)+math.Log(farTime)
	np := len(m.Parameters)
	lower, upper := make([]float64, np), make([]float64, np)
	for i, p := range m.Parameters {
		switch {
		case p.Share:
			lower[i], upper[i] = -farLogit, farLogit
		case p.Unit == "s":
			lower[i], upper[i] = short, long
		case p.Unit == "N s/m":
			lower[i], upper[i] = short+k-math.Log(farModulus), long+k+math.Log(farModulus)
		default:
			lower[i], upper[i] = k-math.Log(farModulus), k+math.Log(farModulus)
		}
	}
	p := make([]float64, np)
	pr := problem{
		n: 2 * len(s),
		f: func(q, r []float64) bool {
			outward(m, q, p)
			for i, x := range s {
				d := m.Modulus(2*math.Pi*x.FrequencyHz, p) - x.K
				r[2*i], r[2*i+1] = real(d)/x.UStorage, imag(d)/x.ULoss
			}
			return true
		},
		most: 500, lower: lower, upper: upper,
		reach: 2,    // e^2 a step
		h:     1e-4, // of logarithms: the error of the slopes is 1e-9
		// A millionth of the standard uncertainties.
		offset: 1e-6, flat: 1e-7,
	}
	var best *search
	for _, start := range starts {
		q := inward(m, start)
		for i := range q {
			q[i] = math.Max(lower[i], math.Min(upper[i], q[i]))
		}
		x := newSearch(pr, q)
		if err := x.descend(); err == nil && (best == nil || x.rss < best.rss) {
			best = x
		}
	}
	return best
}

// inward maps parameters to the variables of the solver: logarithms (of the
// excess over another parameter), logits of shares.
func inward(m Model, p []float64) []float64 {
	q := make([]float64, len(p))
	for i, x := range p {
		switch e := m.Parameters[i].exceeds; {
		case m.Parameters[i].Share:
			q[i] = math.Log(x / (1 - x))
		case e > 0:
			q[i] = math.Log(math.Max(x-p[e-1], 1e-9*x))
		default:
			q[i] = math.Log(x)
		}
	}
	return q
}

// outward maps back, into p where it is not nil.
func outward(m Model, q, p []float64) []float64 {
	if p == nil {
		p = make([]float64, len(q))
	}
	for i, x := range q {
		switch e := m.Parameters[i].exceeds; {
		case m.Parameters[i].Share:
			p[i] = 1 / (1 + math.Exp(-x))
		case e > 0:
			p[i] = p[e-1] + math.Exp(x)
		default:
			p[i] = math.Exp(x)
		}
	}
	return p
}

// slopesAt fills in the derivatives of parameter i by all of the solver's
// variables.
func slopesAt(m Model, p []float64, i int, slopes []float64) {
	clear(slopes)
	switch e := m.Parameters[i].exceeds; {
	case m.Parameters[i].Share:
		slopes[i] = p[i] * (1 - p[i])
	case e > 0:
		slopes[e-1], slopes[i] = p[e-1], p[i]-p[e-1]
	default:
		slopes[i] = p[i]
	}
}
