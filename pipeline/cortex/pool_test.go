package cortex

import (
	"math"
	"math/rand/v2"
	"testing"
)

// The thirteen BCG vaccine trials (Colditz et al., JAMA 271, 1994) are the
// usual worked example of random effects: log risk ratio from the counts
// (ill, well) of the treated and of the controls. Results by restricted maximum
// likelihood as the R package metafor prints them (Viechtbauer, J. Stat. Softw.
// 36(3), 2010): mean -0.7145, standard error 0.1798, tau^2 0.3132, Q 152.2330.
// Counts and results are from memory; they confirm each other.
func TestPoolPublished(t *testing.T) {
	counts := [][4]float64{
		{4, 119, 11, 128}, {6, 300, 29, 274}, {3, 228, 11, 209}, {62, 13536, 248, 12619}, {33, 5036, 47, 5761},
		{180, 1361, 372, 1079}, {8, 2537, 10, 619}, {505, 87886, 499, 87892}, {29, 7470, 45, 7232},
		{17, 1699, 65, 1600}, {186, 50448, 141, 27197}, {5, 2493, 3, 2338}, {27, 16886, 29, 17825},
	}
	var q []Quantity
	for _, c := range counts {
		treated, control := c[0]+c[1], c[2]+c[3]
		q = append(q, Quantity{math.Log(c[0] / treated / (c[2] / control)), math.Sqrt(1/c[0] - 1/treated + 1/c[2] - 1/control)})
	}
	p, err := Pool(q)
	if err != nil {
		t.Fatal(err)
	}
	var plain float64 // the standard error without Hartung and Knapp's factor
	for _, c := range q {
		plain += 1 / (c.U*c.U + p.Between*p.Between)
	}
	for _, c := range []struct {
		name            string
		got, want, half float64 // half of the last digit printed
	}{
		{"mean", p.Mean.Value, -0.7145, 5e-5}, {"tau^2", p.Between * p.Between, 0.3132, 5e-5},
		{"Q", p.Q, 152.2330, 5e-5}, {"standard error", 1 / math.Sqrt(plain), 0.1798, 5e-5},
	} {
		if !(math.Abs(c.got-c.want) <= c.half*1.001) {
			t.Errorf("%s = %.6f, published %.4f", c.name, c.got, c.want)
		}
	}
	t.Logf("%+v", *p)
}

// Order statistics: with 6 values the whole range holds the median with
// probability 1 - 2/64 = 0.96875, with 5 only 0.9375 (binomial distribution).
func TestPoolMedian(t *testing.T) {
	q := []Quantity{{3, 1}, {1, 1}, {2, 1}, {6, 1}, {5, 1}, {4, 1}}
	p, err := Pool(q)
	if err != nil {
		t.Fatal(err)
	}
	if p.Median != 3.5 || p.MedianLow != 1 || p.MedianHigh != 6 || math.Abs(p.MedianCover-0.96875) > 1e-12 {
		t.Errorf("median of six: %+v", *p)
	}
	if p, err = Pool(q[:5]); err != nil || p.MedianCover != 0 || p.Median != 3 {
		t.Errorf("median of five: %+v, %v", *p, err)
	}
}

// Cells drawn as the model says must have their mean in the interval 95 times
// of 100: of 1000 experiments, 925..972 (binomial, 99.9 %). The interval is
// never narrower than the plain one and so may cover a little more.
func TestPoolCoverage(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 4))
	for _, tau := range []float64{0, 0.05, 0.2} {
		in := 0
		for range 1000 {
			var q []Quantity
			for range 8 {
				u := 0.03 + 0.1*rng.Float64()
				q = append(q, Quantity{0.3 + tau*rng.NormFloat64() + u*rng.NormFloat64(), u})
			}
			p, err := Pool(q)
			if err != nil {
				t.Fatal(err)
			}
			if p.Low <= 0.3 && 0.3 <= p.High {
				in++
			}
		}
		t.Logf("spread %g: %d of 1000", tau, in)
		high := 972
		if tau < 0.1 {
			high = 1000 // conservative where the cells hardly differ
		}
		if in < 925 || in > high {
			t.Errorf("spread %g: %d of 1000 intervals hold the truth", tau, in)
		}
	}
}

func TestPoolRefuses(t *testing.T) {
	for name, q := range map[string][]Quantity{
		"one cell": {{1, 1}}, "NaN": {{1, 1}, {math.NaN(), 1}}, "no uncertainty": {{1, 1}, {2, 0}}, "infinite uncertainty": {{1, 1}, {2, math.Inf(1)}},
	} {
		if _, err := Pool(q); err == nil {
			t.Errorf("%s: accepted", name)
		}
	}
	// Equal values are legal: no spread, and an interval from the uncertainties.
	p, err := Pool([]Quantity{{2, 0.1}, {2, 0.1}, {2, 0.1}})
	if err != nil || p.Between != 0 || !(p.High > 2) {
		t.Errorf("equal cells: %+v, %v", p, err)
	}
}
