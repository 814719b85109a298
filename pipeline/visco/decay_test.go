package visco

import (
	"math"
	"math/rand/v2"
	"testing"
)

var decays = []struct {
	name    string
	t, b    float64
	formula func(x float64) float64
}{
	{"exponential", 2, 1, func(x float64) float64 { return math.Exp(-x / 2) }},
	{"stretched exponential", 2, 0.4, func(x float64) float64 { return math.Exp(-math.Pow(x/2, 0.4)) }},
	{"power law", 0.05, 0.3, func(x float64) float64 { return math.Pow(1+x/0.05, -0.3) }},
}

// relaxing is a tension of 0.5 mN/m that falls from 0.8 mN/m, over 10 s.
func relaxing(law func(float64) float64, u float64, rng *rand.Rand) (ts, ys []float64) {
	for i := range 200 {
		x := 0.05 * float64(i)
		ts = append(ts, x)
		ys = append(ys, 5e-4+3e-4*law(x)+u*rng.NormFloat64())
	}
	return ts, ys
}

func TestDecay(t *testing.T) {
	for _, c := range decays {
		ts, ys := relaxing(c.formula, 2e-7, rand.New(rand.NewPCG(8, 8)))
		got, err := Decay(ts, ys)
		if err != nil {
			t.Fatal(err)
		}
		l := got[0]
		if l.Name != c.name {
			t.Errorf("%s was taken for %s (AICc %g against %g)", c.name, l.Name, l.AICc, got[1].AICc)
			continue
		}
		for _, p := range []struct{ got, u, want float64 }{
			{l.Plateau, l.UPlateau, 5e-4}, {l.Drop, l.UDrop, 3e-4}, {l.TimeS, l.UTimeS, c.t}, {l.Exponent, l.UExponent, c.b},
		} {
			if math.Abs(p.got-p.want) > 4*p.u { // missed once in 16,000
				t.Errorf("%s: %g ± %g, want %g", c.name, p.got, p.u, p.want)
			}
		}
		for _, x := range []float64{0.1, 1, 9} {
			// The scatter of single values; the curve is known better.
			if d := math.Abs(l.At(x) - 5e-4 - 3e-4*c.formula(x)); d > 2e-7 {
				t.Errorf("%s at %g s off by %g", c.name, x, d)
			}
		}
	}
}

// The standard uncertainties mean what they say: over 200 records the truth
// lies within 1.96 of them in 91 to 98 % (three binomial standard deviations
// are 4.6 %). Half of the values are ten times as noisy as the other half, and
// weighted so.
func TestDecayUncertainty(t *testing.T) {
	const records = 200
	within := map[string]int{}
	weighted, plain := 0.0, 0.0
	for seed := range uint64(records) {
		rng := rand.New(rand.NewPCG(seed, 8))
		ts, ys := relaxing(decays[0].formula, 0, rng)
		w := make([]float64, len(ts))
		for i := range ys {
			u := 2e-6
			if i%2 == 1 {
				u = 2e-5
			}
			ys[i] += u * rng.NormFloat64()
			w[i] = 1 / (u * u)
		}
		root := make([]float64, len(w))
		for i := range w {
			root[i] = math.Sqrt(w[i])
		}
		l, ok := laws[0].fit(ts, ys, root, 1)
		p, okPlain := laws[0].fit(ts, ys, ones(len(w)), 1)
		if !ok || !okPlain {
			t.Fatalf("seed %d: no fit", seed)
		}
		for what, d := range map[string]float64{
			"plateau": (l.Plateau - 5e-4) / l.UPlateau, "drop": (l.Drop - 3e-4) / l.UDrop, "time": (l.TimeS - 2) / l.UTimeS,
		} {
			if math.Abs(d) < 1.96 {
				within[what]++
			}
		}
		weighted += l.UTimeS
		plain += p.UTimeS
		if seed > 0 {
			continue
		}
		// Only ratios of weights count, and FitDecay finds the same.
		all, err := FitDecay(ts, ys, w)
		if err != nil {
			t.Fatal(err)
		}
		for _, x := range all {
			// The searches stop at a millionth of the uncertainties.
			if x.Name == l.Name && (math.Abs(x.TimeS-l.TimeS) > 1e-4*l.UTimeS || math.Abs(x.UTimeS-l.UTimeS) > 1e-4*l.UTimeS) {
				t.Errorf("FitDecay finds %g ± %g, fit %g ± %g", x.TimeS, x.UTimeS, l.TimeS, l.UTimeS)
			}
		}
	}
	for _, what := range []string{"plateau", "drop", "time"} {
		if n := within[what]; n < 182 || n > 197 {
			t.Errorf("%s within its 95 %% interval in %d of %d", what, n, records)
		}
	}
	// In theory a factor of 5.05: the mean of the variances 1 and 100 is 50.5,
	// that of the weighted values 2/(1 + 1/100), and sqrt(50.5/1.98) = 5.05.
	if ratio := plain / weighted; ratio < 4.5 || ratio > 5.5 {
		t.Errorf("weights win a factor of %.2f", ratio)
	}
}

func TestSettled(t *testing.T) {
	l := Law{Plateau: 1, Drop: 1, TimeS: 1, Exponent: 1, remaining: func(x float64) float64 { return math.Exp(-x) }}
	// 1 + e^-t falls by less than 2 % of itself from t to 2t from t = 3.85 on.
	for at, want := range map[float64]bool{0.5: false, 3.8: false, 3.9: true, 6: true} {
		if l.Settled(at, 0.02) != want {
			t.Errorf("settled at %g: %v", at, !want)
		}
	}
}

func TestBadDecay(t *testing.T) {
	rng := rand.New(rand.NewPCG(8, 9))
	ts, ys := relaxing(decays[0].formula, 2e-7, rng)
	with := func(x []float64, i int, v float64) []float64 {
		y := append([]float64(nil), x...)
		y[i] = v
		return y
	}
	for name, c := range map[string][3][]float64{
		"nothing":            {nil, nil, nil},
		"few":                {ts[:11], ys[:11], nil},
		"lengths":            {ts, ys[1:], nil},
		"weights":            {ts, ys, ts[1:]},
		"weight of zero":     {ts, ys, ts},
		"NaN":                {ts, with(ys, 3, math.NaN()), nil},
		"infinite time":      {with(ts, 199, math.Inf(1)), ys, nil},
		"time goes back":     {with(ts, 100, 1), ys, nil},
		"before the step":    {with(ts, 0, -1), ys, nil},
		"all zero":           {ts, make([]float64, len(ts)), nil},
		"no stretch of time": {make([]float64, len(ts)), ys, nil},
	} {
		if l, err := FitDecay(c[0], c[1], c[2]); err == nil {
			t.Errorf("%s: %+v", name, l[0])
		}
	}
	// A straight line is no decay.
	for i := range ys {
		ys[i] = 5e-4 - 1e-6*ts[i] + 2e-9*rng.NormFloat64()
	}
	if l, err := Decay(ts, ys); err == nil {
		t.Errorf("a straight line decays: %+v", l[0])
	}
}

func ones(n int) []float64 {
	x := make([]float64, n)
	for i := range x {
		x[i] = 1
	}
	return x
}
