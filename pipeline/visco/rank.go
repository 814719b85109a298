package visco

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"
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
}

// Modulus returns the fitted K* at a frequency.
func (f Fitted) Modulus(frequencyHz float64) complex128 {
	return f.Model.Modulus(2*math.Pi*frequencyHz, f.P)
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
// where that is above 1: a misfit means that the weights were too small, or the
// model too simple.
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
	for i := range r.Fits {
		r.Fits[i].EvidenceRatio = math.Exp(math.Min(700, (r.Fits[i].AICc-r.Fits[0].AICc)/2))
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
	return s, nil
}

// fewIterations is enough for a series that determines its model; where it is
// not, parameters run away, and following them is of no use.
const fewIterations = 200

// fit finds the best of the minima reached from several starts.
func fit(s []Point, m Model, starts [][]float64) (Fitted, error) {
	residuals := func(q, r []float64) bool {
		p := outward(m, q)
		for i, x := range s {
			d := m.Modulus(2*math.Pi*x.FrequencyHz, p) - x.K
			r[2*i], r[2*i+1] = real(d)/x.UStorage, imag(d)/x.ULoss
		}
		return true
	}
	best := Minimum{RSS: math.Inf(1)}
	for _, start := range starts {
		min, err := leastSquares(2*len(s), residuals, inward(m, start), fewIterations)
		if err == nil && min.RSS < best.RSS {
			best = min
		}
	}
	if best.P == nil {
		return Fitted{}, errors.New("the data do not determine its parameters")
	}
	f := Fitted{Model: m, P: outward(m, best.P), ChiSquared: best.RSS, Freedom: 2*len(s) - len(best.P)}
	widen := math.Sqrt(math.Max(1, f.ChiSquared/float64(f.Freedom)))
	for i := range f.P {
		slope := f.P[i] // dp/dq of a logarithm
		if m.Parameters[i].Share {
			slope = f.P[i] * (1 - f.P[i])
		}
		f.U = append(f.U, widen*slope*math.Sqrt(best.Covariance.At(i, i)))
	}
	return f, nil
}

// inward maps parameters to the unbounded variables of the solver.
func inward(m Model, p []float64) []float64 {
	q := make([]float64, len(p))
	for i, x := range p {
		if m.Parameters[i].Share {
			q[i] = math.Log(x / (1 - x))
		} else {
			q[i] = math.Log(x)
		}
	}
	return q
}

func outward(m Model, q []float64) []float64 {
	p := make([]float64, len(q))
	for i, x := range q {
		if m.Parameters[i].Share {
			p[i] = 1 / (1 + math.Exp(-x))
		} else {
			p[i] = math.Exp(x)
		}
	}
	return p
}

// Interval is a 95 % interval.
type Interval struct{ Low, High float64 }

// Bootstrap refits a model to n series drawn about the fitted curve with the
// uncertainties of the points, widened like those of the parameters (parametric
// bootstrap; Efron and Tibshirani 1993, from memory), and returns the 95 %
// intervals of its parameters. each, if not nil, is shown every refitted model.
func Bootstrap(series []Point, f Fitted, n int, seed uint64, each func(Fitted)) ([]Interval, error) {
	s, err := sorted(series)
	if err != nil {
		return nil, err
	}
	rng := rand.New(rand.NewPCG(seed, 0x76697363))
	widen := math.Sqrt(math.Max(1, f.ChiSquared/float64(f.Freedom)))
	drawn := slices.Clone(s)
	values := make([][]float64, len(f.P))
	for range n {
		for i, p := range s {
			drawn[i].K = f.Modulus(p.FrequencyHz) + complex(widen*p.UStorage*rng.NormFloat64(), widen*p.ULoss*rng.NormFloat64())
		}
		g, err := fit(drawn, f.Model, [][]float64{f.P})
		if err != nil {
			continue
		}
		for i := range values {
			values[i] = append(values[i], g.P[i])
		}
		if each != nil {
			each(g)
		}
	}
	if len(values[0]) < n/2 {
		return nil, errors.New("visco: most of the drawn series cannot be fitted")
	}
	out := make([]Interval, len(values))
	for i, v := range values {
		out[i] = middle95(v)
	}
	return out, nil
}

// middle95 returns the quantiles 2.5 and 97.5 % of values.
func middle95(v []float64) Interval {
	slices.Sort(v)
	at := func(p float64) float64 {
		x := p * float64(len(v)-1)
		i := int(x)
		if i+1 >= len(v) {
			return v[len(v)-1]
		}
		return v[i] + (x-float64(i))*(v[i+1]-v[i])
	}
	return Interval{at(0.025), at(0.975)}
}

// Crossing is the time 1/w at which storage and loss modulus are equal. Where
// the data show no crossing, one of Low and High is finite: the bound that they
// set.
type Crossing struct {
	Time      float64 // s; NaN where there is only a bound
	Low, High float64 // 95 % interval, or 0 and a bound, or a bound and +Inf
}

// Crossover finds the crossover time of a fitted model within the measured
// frequencies and a third of a decade beyond, with the 95 % interval of n
// bootstrap series. Without a crossing there, the bound is the end of the
// measured range: K' above K” throughout says that the crossover lies at lower
// frequencies, that is, at a longer time.
func Crossover(series []Point, f Fitted, n int, seed uint64) (Crossing, error) {
	s, err := sorted(series)
	if err != nil {
		return Crossing{}, err
	}
	lo, hi := s[0].FrequencyHz, s[len(s)-1].FrequencyHz
	c := Crossing{Time: crossing(f, lo/2, hi*2)}
	if math.IsNaN(c.Time) {
		solid := 0
		for _, p := range s {
			if real(p.K) > imag(p.K) {
				solid++
			}
		}
		switch solid {
		case len(s):
			return Crossing{math.NaN(), 1 / (2 * math.Pi * lo), math.Inf(1)}, nil
		case 0:
			return Crossing{math.NaN(), 0, 1 / (2 * math.Pi * hi)}, nil
		}
		return Crossing{}, errors.New("visco: the model has no single crossing where the data have one")
	}
	var times []float64
	if _, err := Bootstrap(series, f, n, seed, func(g Fitted) {
		if t := crossing(g, lo/20, hi*20); !math.IsNaN(t) {
			times = append(times, t)
		}
	}); err != nil {
		return Crossing{}, err
	}
	if len(times) < n/2 {
		return Crossing{}, errors.New("visco: the crossing is lost in most of the drawn series")
	}
	i := middle95(times)
	c.Low, c.High = i.Low, i.High
	return c, nil
}

// crossing returns 1/w at which K' = K” between two frequencies in Hz, NaN
// where there is none.
func crossing(f Fitted, from, to float64) float64 {
	diff := func(lnF float64) float64 {
		k := f.Modulus(math.Exp(lnF))
		return (real(k) - imag(k)) / cmplx.Abs(k)
	}
	a, b := math.Log(from), math.Log(to)
	da, db := diff(a), diff(b)
	if da == 0 {
		return 1 / (2 * math.Pi * from)
	}
	if !(da*db < 0) {
		return math.NaN()
	}
	for range 100 {
		m := (a + b) / 2
		if d := diff(m); d*da > 0 {
			a = m
		} else {
			b = m
		}
	}
	return 1 / (2 * math.Pi * math.Exp((a+b)/2))
}

// Consistency is the outcome of a Kramers-Kronig check.
type Consistency struct {
	ChiSquared float64
	Freedom    int
	P          float64 // probability of a larger chi-squared from noise alone
}

// KramersKronig tests whether K' and K” of a series belong together: what a
// causal linear material can do is described by models that obey the relations
// by construction, so what the best of them leaves of the data must be noise.
// The models are those of Models and a row of Maxwell elements at fixed times
// with a spring and a dashpot (the linear test after Boukamp, J. Electrochem.
// Soc. 142, 1995, from memory), two elements less than frequencies. The best is
// the one with the largest probability; that makes false alarms rarer than P
// says. It needs at least four frequencies.
func KramersKronig(series []Point) (Consistency, error) {
	s, err := sorted(series)
	if err != nil {
		return Consistency{}, err
	}
	if len(s) < 4 {
		return Consistency{}, errors.New("visco: the Kramers-Kronig check needs at least four frequencies")
	}
	best, err := maxwellRow(s)
	if err != nil {
		return Consistency{}, err
	}
	r, err := Rank(s)
	if err != nil {
		return best, nil
	}
	for _, f := range r.Fits {
		if c := consistency(f.ChiSquared, f.Freedom); c.P > best.P {
			best = c
		}
	}
	return best, nil
}

func consistency(chiSquared float64, freedom int) Consistency {
	return Consistency{chiSquared, freedom, distuv.ChiSquared{K: float64(freedom)}.Survival(chiSquared)}
}

// maxwellRow fits the row of Maxwell elements.
func maxwellRow(s []Point) (Consistency, error) {
	elements := len(s) - 2
	lo, hi := math.Log(2*math.Pi*s[0].FrequencyHz), math.Log(2*math.Pi*s[len(s)-1].FrequencyHz)
	np := elements + 2
	scale := strongest(s)
	min, err := LeastSquares(2*len(s), func(p, r []float64) bool {
		for i, x := range s {
			w := 2 * math.Pi * x.FrequencyHz
			k := complex(p[0], p[1]*w*math.Exp(-hi))
			for e := range elements {
				t := math.Exp(-(lo + (hi-lo)*(float64(e)+0.5)/float64(elements)))
				z := complex(0, w*t)
				k += complex(p[2+e], 0) * z / (1 + z)
			}
			d := k*complex(scale, 0) - x.K
			r[2*i], r[2*i+1] = real(d)/x.UStorage, imag(d)/x.ULoss
		}
		return true
	}, ones(np))
	if err != nil {
		return Consistency{}, err
	}
	return consistency(min.RSS, 2*len(s)-np), nil
}

func ones(n int) []float64 {
	x := make([]float64, n)
	for i := range x {
		x[i] = 1
	}
	return x
}
