package visco

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"
)

// Crossing is the time 1/w at which storage and loss modulus are equal. Where
// the data show no crossing, one of Low and High is finite and not 0: the bound
// that they set.
type Crossing struct {
	Time      float64 // s; NaN where there is only a bound
	Low, High float64 // 95 % interval; 0 or +Inf where that side is open
}

// Crossover finds the crossover time of one fitted model within the measured
// frequencies and a third of a decade beyond, with the 95 % interval of n
// bootstrap series. A drawn series whose crossing is lost counts as one at a
// very long or very short time, whichever its modulus says, so an interval
// reached by more than 2.5 % of them is open on that side. Without a crossing
// the bound is the end of the measured range, for a cortex that flows at long
// times and is elastic at short ones: K' above K” throughout says that the
// crossover lies at a longer time, K” above K' throughout, at a shorter one.
//
// The interval takes the model for granted. Ranking.Crossover does not.
func Crossover(series []Point, f Fitted, n int, seed uint64) (Crossing, error) {
	f.Weight = 1
	return Ranking{Fits: []Fitted{f}}.Crossover(series, n, seed)
}

// lightest is the Akaike weight below which a model has no voice: its few series
// would only roughen the tails.
const lightest = 0.02

// Crossover finds the crossover time of the best model, like the function of
// that name, with an interval that also holds what the choice of the model
// leaves open: the n bootstrap series are shared out among the models by their
// Akaike weights (Burnham and Anderson 2002, multimodel inference; from
// memory).
func (r Ranking) Crossover(series []Point, n int, seed uint64) (Crossing, error) {
	s, err := sorted(series)
	if err != nil {
		return Crossing{}, err
	}
	if len(r.Fits) == 0 {
		return Crossing{}, errors.New("visco: no model, no crossover")
	}
	if n < 20 {
		return Crossing{}, errors.New("visco: a 95 % interval needs a bootstrap of at least 20 series")
	}
	lo, hi := s[0].FrequencyHz, s[len(s)-1].FrequencyHz
	best := r.Fits[0]
	at, found, err := chosen(s, crossings(best, lo/2, hi*2))
	if err != nil {
		return Crossing{}, err
	}
	if !found {
		if k := best.Modulus(math.Sqrt(lo * hi)); real(k) >= imag(k) {
			return Crossing{math.NaN(), 1 / (2 * math.Pi * lo), math.Inf(1)}, nil
		}
		return Crossing{math.NaN(), 0, 1 / (2 * math.Pi * hi)}, nil
	}
	heard := 0.0
	for _, f := range r.Fits {
		if f.Weight >= lightest {
			heard += f.Weight
		}
	}
	var times []float64
	for i, f := range r.Fits {
		share := int(math.Round(float64(n) * f.Weight / heard))
		if f.Weight < lightest || share == 0 {
			continue
		}
		if redraw(s, f, share, seed+uint64(i), func(g Fitted) {
			times = append(times, nearest(g, at, lo/20, hi*20))
		}) < share*9/10 {
			return Crossing{}, fmt.Errorf("visco: many series drawn from %s cannot be fitted", f.Model.Name)
		}
	}
	interval := middle95(times)
	return Crossing{1 / (2 * math.Pi * at.frequency), interval.Low, interval.High}, nil
}

// crossingAt is a crossing of K' and K”; where it rises, K' is the larger at
// higher frequencies.
type crossingAt struct {
	frequency float64
	rises     bool
}

// excess is (K' - K”)/|K*|.
func excess(f Fitted, frequency float64) float64 {
	k := f.Modulus(frequency)
	return (real(k) - imag(k)) / cmplx.Abs(k)
}

// crossings returns all crossings between two frequencies in Hz, by frequency,
// that lie further apart than a twelfth of a decade.
func crossings(f Fitted, from, to float64) []crossingAt {
	var out []crossingAt
	n := int(math.Ceil(12*math.Log10(to/from))) + 1
	h := math.Log(to/from) / float64(n)
	a, da := from, excess(f, from)
	for i := range n {
		b := from * math.Exp(h*float64(i+1))
		db := excess(f, b)
		if (da < 0) != (db < 0) {
			x, y := math.Log(a), math.Log(b)
			for range 40 { // halves a twelfth of a decade to 1e-13
				m := (x + y) / 2
				if (excess(f, math.Exp(m)) < 0) == (da < 0) {
					x = m
				} else {
					y = m
				}
			}
			out = append(out, crossingAt{math.Exp((x + y) / 2), da < 0})
		}
		a, da = b, db
	}
	return out
}

// chosen returns the crossing that the data show. A model may cross twice, as
// the Zener model does, once within the data and once at their edge.
func chosen(s []Point, cs []crossingAt) (c crossingAt, found bool, err error) {
	switch len(cs) {
	case 0:
		return crossingAt{}, false, nil
	case 1:
		return cs[0], true, nil
	}
	changes, at, rises := 0, 0.0, false
	for i := 1; i < len(s); i++ {
		before, after := real(s[i-1].K) < imag(s[i-1].K), real(s[i].K) < imag(s[i].K)
		if before != after {
			changes++
			at, rises = math.Sqrt(s[i-1].FrequencyHz*s[i].FrequencyHz), before
		}
	}
	least := math.Inf(1)
	for _, x := range cs {
		if d := math.Abs(math.Log(x.frequency / at)); x.rises == rises && d < least {
			c, least = x, d
		}
	}
	if changes != 1 || math.IsInf(least, 1) {
		return crossingAt{}, false, fmt.Errorf("visco: storage and loss modulus cross %d times near the measured frequencies: there is no single crossover time", len(cs))
	}
	return c, true, nil
}

// nearest returns the time of the model's crossing nearest to at, of the same
// direction, or 0 or +Inf where it has none between two frequencies: the
// crossing has gone to the side on which the modulus at this frequency leaves
// room for it.
func nearest(f Fitted, at crossingAt, from, to float64) float64 {
	frequency, least := 0.0, math.Inf(1)
	for _, x := range crossings(f, from, to) {
		if d := math.Abs(math.Log(x.frequency / at.frequency)); x.rises == at.rises && d < least {
			frequency, least = x.frequency, d
		}
	}
	switch {
	case frequency > 0:
		return 1 / (2 * math.Pi * frequency)
	case (excess(f, at.frequency) > 0) == at.rises:
		return math.Inf(1)
	}
	return 0
}
