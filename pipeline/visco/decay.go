package visco

import (
	"errors"
	"math"
)

// Law is a law of decay with what was fitted.
type Law struct {
	Name      string // "exponential", "stretched exponential" or "power law"
	Plateau   float64
	Drop      float64 // above the plateau at t = 0
	TimeS     float64
	Exponent  float64 // 1 for the exponential
	AICc      float64
	remaining func(t float64) float64
}

// At returns the fitted value at time t in s after the start.
func (l Law) At(t float64) float64 { return l.Plateau + l.Drop*l.remaining(t) }

// Decay fits three laws to a quantity that decays after a step, t in s after
// it, best first by AICc:
//
//	y0 + d exp(-t/T),  y0 + d exp(-(t/T)^b) (Kohlrausch),  y0 + d (1 + t/T)^-b.
//
// The scatter about the law is its own weight; values are means of like numbers
// of samples. It needs twelve values.
func Decay(t, y []float64) ([]Law, error) {
	n := len(y)
	if n < 12 || len(t) != n {
		return nil, errors.New("visco: a decay needs at least twelve values")
	}
	span := t[n-1]
	if !(span > 0) {
		return nil, errors.New("visco: a decay needs a stretch of time")
	}
	scale := 0.0
	for _, v := range y {
		scale = math.Max(scale, math.Abs(v))
	}
	if scale == 0 {
		return nil, errors.New("visco: all values are zero")
	}
	kinds := []struct {
		name  string
		extra bool
		shape func(x, b float64) float64 // x = t/T
	}{
		{"exponential", false, func(x, _ float64) float64 { return math.Exp(-x) }},
		{"stretched exponential", true, func(x, b float64) float64 { return math.Exp(-math.Pow(x, b)) }},
		{"power law", true, func(x, b float64) float64 { return math.Pow(1+x, -b) }},
	}
	var out []Law
	for _, kind := range kinds {
		var best *Minimum
		for _, t0 := range []float64{span / 30, span / 6, span} {
			start := []float64{y[n-1] / scale, (y[0] - y[n-1]) / scale, math.Log(t0)}
			if start[1] == 0 {
				start[1] = 1e-3
			}
			if kind.extra {
				start = append(start, 0) // exponent 1/(1+e^-0) = 1/2, times 1.5
			}
			m, err := leastSquares(n, func(p, r []float64) bool {
				b := exponent(p)
				for i := range y {
					r[i] = p[0] + p[1]*kind.shape(t[i]/math.Exp(p[2]), b) - y[i]/scale
				}
				return true
			}, start, fewIterations)
			// A time far beyond the record, or far below its first value, is a
			// straight line in disguise: not a decay that the data show.
			if err == nil && math.Exp(m.P[2]) < 10*span && (best == nil || m.RSS < best.RSS) {
				best = &m
			}
		}
		if best == nil || best.RSS == 0 {
			continue
		}
		k := float64(len(best.P)) + 1 // and the scatter
		l := Law{Name: kind.name, Plateau: best.P[0] * scale, Drop: best.P[1] * scale, TimeS: math.Exp(best.P[2]), Exponent: exponent(best.P)}
		l.AICc = float64(n)*math.Log(best.RSS/float64(n)) + 2*k + 2*k*(k+1)/(float64(n)-k-1)
		l.remaining = func(t float64) float64 { return kind.shape(t/l.TimeS, l.Exponent) }
		i := 0
		for i < len(out) && out[i].AICc <= l.AICc {
			i++
		}
		out = append(out[:i], append([]Law{l}, out[i:]...)...)
	}
	if len(out) == 0 {
		return nil, errors.New("visco: no law of decay describes the values")
	}
	return out, nil
}

// exponent keeps exponents between 0 and 1.5.
func exponent(p []float64) float64 {
	if len(p) < 4 {
		return 1
	}
	return 1.5 / (1 + math.Exp(-p[3]))
}

// Settled tells whether a decay has come to rest by time t: going on for as
// long again would change the value by less than share of it.
func (l Law) Settled(t, share float64) bool {
	now := l.At(t)
	return now != 0 && math.Abs(l.At(2*t)-now) <= share*math.Abs(now)
}
