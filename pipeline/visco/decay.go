package visco

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"slices"
)

// Law is a law of decay with what was fitted. Standard uncertainties are NaN
// where the data do not tell.
type Law struct {
	Name      string // "exponential", "stretched exponential" or "power law"
	Plateau   float64
	Drop      float64 // above the plateau at t = 0
	TimeS     float64
	Exponent  float64 // 1 for the exponential
	UPlateau  float64
	UDrop     float64
	UTimeS    float64
	UExponent float64 // 0 for the exponential
	AICc      float64
	remaining func(t float64) float64
}

// At returns the fitted value at time t in s after the start.
func (l Law) At(t float64) float64 { return l.Plateau + l.Drop*l.remaining(t) }

// Decay is FitDecay without weights.
func Decay(t, y []float64) ([]Law, error) { return FitDecay(t, y, nil) }

// law is a law of decay that FitDecay tries.
type law struct {
	name      string
	stretches bool                       // has an exponent of its own
	shape     func(x, b float64) float64 // x = t/T
}

var laws = []law{
	{"exponential", false, func(x, _ float64) float64 { return math.Exp(-x) }},
	{"stretched exponential", true, func(x, b float64) float64 { return math.Exp(-math.Pow(x, b)) }},
	{"power law", true, func(x, b float64) float64 { return math.Pow(1+x, -b) }},
}

// fewestValues of a decay leave seven degrees of freedom to the largest law.
const fewestValues = 12

// FitDecay fits three laws to a quantity that decays after a step, t in s after
// it, ascending, best first by AICc:
//
//	y0 + d exp(-t/T),  y0 + d exp(-(t/T)^b) (Kohlrausch),  y0 + d (1 + t/T)^-b,  0 < b < 1.5.
//
// w holds weights, in proportion to 1/u^2 of the values; nil for equal ones.
// Only their ratios count: the scatter about the law sets the scale of the
// uncertainties, because the noise of a tension is not white and its own
// uncertainty rarely known. Noise that lasts from one value to the next still
// makes uncertainties too small; take means over stretches longer than it
// lasts. It needs twelve values; a law whose time lies beyond ten times the
// record, or below a tenth of its first interval, is a straight line or a step
// in disguise and is not returned.
func FitDecay(t, y, w []float64) ([]Law, error) {
	n := len(y)
	switch {
	case len(t) != n || w != nil && len(w) != n:
		return nil, fmt.Errorf("visco: %d times and %d weights for %d values of a decay", len(t), len(w), n)
	case n < fewestValues:
		return nil, fmt.Errorf("visco: a decay needs at least twelve values, not %d", n)
	case !finite(t) || !finite(y) || !finite(w):
		return nil, errors.New("visco: a value of the decay is not finite")
	case t[0] < 0 || !slices.IsSorted(t) || t[0] == t[n-1]:
		return nil, errors.New("visco: the times of a decay must ascend from the step")
	}
	scale, all := 0.0, 0.0
	for i, v := range y {
		scale = math.Max(scale, math.Abs(v))
		if w != nil {
			if !(w[i] > 0) {
				return nil, fmt.Errorf("visco: weight %g of value %d is not positive", w[i], i)
			}
			all += w[i]
		}
	}
	if scale == 0 {
		return nil, errors.New("visco: all values are zero")
	}
	root := make([]float64, n)
	for i := range root {
		root[i] = 1
		if w != nil {
			root[i] = math.Sqrt(w[i] / all * float64(n))
		}
	}
	var out []Law
	for _, kind := range laws {
		if l, ok := kind.fit(t, y, root, scale); ok {
			out = append(out, l)
		}
	}
	if len(out) == 0 {
		return nil, errors.New("visco: no law of decay describes the values")
	}
	slices.SortStableFunc(out, func(a, b Law) int { return cmp.Compare(a.AICc, b.AICc) })
	return out, nil
}

// fit fits one law; y is scaled to 1, the time is a logarithm.
func (kind law) fit(t, y, root []float64, scale float64) (Law, bool) {
	n := len(y)
	span := t[n-1]
	exponent := func(p []float64) float64 {
		if !kind.stretches {
			return 1
		}
		return 1.5 / (1 + math.Exp(-p[3]))
	}
	shortest, longest := math.Log((t[1]-t[0])/10), math.Log(10*span)
	if t[1] == t[0] {
		shortest = math.Log(span / float64(n) / 10)
	}
	big := math.Inf(1)
	np := 3
	if kind.stretches {
		np = 4
	}
	pr := problem{
		n: n,
		f: func(p, r []float64) bool {
			b, time := exponent(p), math.Exp(p[2])
			for i := range y {
				r[i] = root[i] * (p[0] + p[1]*kind.shape(t[i]/time, b) - y[i]/scale)
			}
			return true
		},
		most:  500,
		lower: []float64{-big, -big, shortest, -farLogit}[:np],
		upper: []float64{big, big, longest, farLogit}[:np],
		reach: 2, h: 1e-5, offset: 1e-6, flat: 1e-7,
	}
	var best *search
	for _, t0 := range []float64{span / 100, span / 30, span / 6, span} {
		start := []float64{y[n-1] / scale, (y[0] - y[n-1]) / scale, math.Max(shortest, math.Log(t0)), 0}[:np]
		if start[1] == 0 {
			start[1] = 1e-3
		}
		x := newSearch(pr, start)
		if err := x.descend(); err == nil && (best == nil || x.rss < best.rss) {
			best = x
		}
	}
	if best == nil || best.rss == 0 || best.p[2] <= shortest || best.p[2] >= longest {
		return Law{}, false
	}
	k := float64(np) + 1 // and the scatter
	l := Law{Name: kind.name, Plateau: best.p[0] * scale, Drop: best.p[1] * scale, TimeS: math.Exp(best.p[2]), Exponent: exponent(best.p)}
	l.AICc = float64(n)*math.Log(best.rss/float64(n)) + 2*k + 2*k*(k+1)/(float64(n)-k-1)
	l.remaining = func(t float64) float64 { return kind.shape(t/l.TimeS, l.Exponent) }
	cov, ok := best.covariance()
	u := func(i int, slope float64) float64 {
		if !ok {
			return math.NaN()
		}
		return slope * math.Sqrt(cov.At(i, i)*best.rss/float64(n-np))
	}
	l.UPlateau, l.UDrop, l.UTimeS = u(0, scale), u(1, scale), u(2, l.TimeS)
	if kind.stretches {
		l.UExponent = u(3, l.Exponent*(1-l.Exponent/1.5))
	}
	return l, true
}

// Settled tells whether a decay has come to rest by time t: going on for as
// long again would change the value by less than share of it.
func (l Law) Settled(t, share float64) bool {
	now := l.At(t)
	return now != 0 && math.Abs(l.At(2*t)-now) <= share*math.Abs(now)
}
