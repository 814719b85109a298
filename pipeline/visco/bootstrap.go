package visco

import (
	"errors"
	"math"
	"math/rand/v2"
	"slices"
)

// Interval is a 95 % interval.
type Interval struct{ Low, High float64 }

// Bootstrap refits a model to n series drawn about the fitted curve with the
// uncertainties of the points, widened like those of the parameters (parametric
// bootstrap; Efron and Tibshirani 1993, from memory), and returns the 95 %
// intervals of its parameters. each, if not nil, is shown every refitted model
// (parameters and chi-squared, no uncertainties). Points are not drawn with
// replacement: of five frequencies, that leaves too few different ones.
func Bootstrap(series []Point, f Fitted, n int, seed uint64, each func(Fitted)) ([]Interval, error) {
	s, err := sorted(series)
	if err != nil {
		return nil, err
	}
	if n < 20 {
		return nil, errors.New("visco: a 95 % interval needs a bootstrap of at least 20 series")
	}
	values := make([][]float64, len(f.P))
	refitted := redraw(s, f, n, seed, func(g Fitted) {
		for i, x := range g.P {
			values[i] = append(values[i], x)
		}
		if each != nil {
			each(g)
		}
	})
	if refitted < n*9/10 {
		return nil, errors.New("visco: many of the drawn series cannot be fitted")
	}
	out := make([]Interval, len(values))
	for i, v := range values {
		out[i] = middle95(v)
	}
	return out, nil
}

// redraw shows each n refitted models and returns how many could be fitted.
func redraw(s []Point, f Fitted, n int, seed uint64, each func(Fitted)) (refitted int) {
	rng := rand.New(rand.NewPCG(seed, 0x76697363))
	widen := f.widen()
	drawn := slices.Clone(s)
	curve := make([]complex128, len(s))
	for i, p := range s {
		curve[i] = f.Modulus(p.FrequencyHz)
	}
	for range n {
		for i, p := range s {
			drawn[i].K = curve[i] + complex(widen*p.UStorage*rng.NormFloat64(), widen*p.ULoss*rng.NormFloat64())
		}
		x := lowest(drawn, f.Model, [][]float64{f.P})
		if x == nil {
			continue
		}
		refitted++
		each(Fitted{Model: f.Model, P: outward(f.Model, x.p, nil), ChiSquared: x.rss, Freedom: f.Freedom})
	}
	return refitted
}

// middle95 returns the quantiles 2.5 and 97.5 % of values, of which some may be
// infinite.
func middle95(v []float64) Interval {
	slices.Sort(v)
	at := func(p float64) float64 {
		x := p * float64(len(v)-1)
		i := int(x)
		if i+1 >= len(v) || v[i] == v[i+1] {
			return v[i]
		}
		if math.IsInf(v[i+1], 1) {
			return v[i+1]
		}
		return v[i] + (x-float64(i))*(v[i+1]-v[i])
	}
	return Interval{at(0.025), at(0.975)}
}
