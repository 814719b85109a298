package visco

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// The check calls a series of a real material inconsistent, at P < 0.01, no
// more often than in one of a hundred, for materials inside and outside of
// Models, and sees an exchanged sign, a lag and an inertia.
func TestKramersKronig(t *testing.T) {
	type material struct {
		name string
		p    []float64
	}
	all := []material{
		{twoMaxwell, []float64{0.01, 0.8, 0.02, 0.1}},
		{twoKelvin, []float64{0.002, 0.8, 0.01, 0.1}},
		{twoKelvin, []float64{0.001, 1, 0.01, 0.17}}, // power law with viscosity
	}
	for _, m := range materials {
		all = append(all, material{m.name, m.p})
	}
	below := 0 // P < 0.2, of all series
	fires := func(m material, freqs []float64, rel float64, series int, spoil func(*Point)) int {
		n := 0
		for seed := range uint64(series) {
			s := drawn(model(m.name), m.p, freqs, rel, rand.New(rand.NewPCG(seed, 4)))
			for i := range s {
				spoil(&s[i])
			}
			c, err := KramersKronig(s)
			if err != nil {
				t.Fatal(err)
			}
			if c.P < 0.01 {
				n++
			}
			if c.P < 0.2 {
				below++
			}
		}
		return n
	}
	lag := func(s float64) func(*Point) {
		return func(p *Point) { p.K *= cmplx.Rect(1, 2*math.Pi*p.FrequencyHz*s) }
	}
	const clean, spoiled = 100, 6
	for _, freqs := range [][]float64{usual, {0.1, 0.2, 0.5, 1, 2, 5, 10}} {
		for _, rel := range []float64{0.003, 0.03} {
			total, low := 0, 0
			for _, m := range all {
				below = 0
				n := fires(m, freqs, rel, clean, func(*Point) {})
				total += n
				low += below
				// A true 1 % counts 7 or more of 100 once in 14,000.
				if n > 6 {
					t.Errorf("%s, %d frequencies, noise %g: %d false alarms of %d", m.name, len(freqs), rel, n, clean)
				}
				// In at least two of three: what a lag of 30 ms does at 10 Hz is
				// 108 degrees.
				for what, spoil := range map[string]func(*Point){
					"an exchanged sign":             func(p *Point) { p.K = cmplx.Conj(p.K) },
					"a lag of 30 ms":                lag(-0.03),
					"a lag of 30 ms the other way":  lag(0.03),
					"an inertia of 10 mN/m at 5 Hz": func(p *Point) { p.K -= complex(0.01*p.FrequencyHz*p.FrequencyHz/25, 0) },
				} {
					if n := fires(m, freqs, rel, spoiled, spoil); n < spoiled*2/3 {
						t.Errorf("%s, %d frequencies, noise %g: %s is seen in %d of %d", m.name, len(freqs), rel, what, n, spoiled)
					}
				}
			}
			// Of 900, a true 1 % counts 18 three standard deviations too many.
			if total > 18 {
				t.Errorf("%d frequencies, noise %g: %d false alarms of %d", len(freqs), rel, total, clean*len(all))
			}
			// A check that is too sure of everything would see little: P below
			// 0.2 must be as frequent as it says, within a factor of two: the degrees of
			// freedom are exact only given the positive coefficients.
			if share := float64(low) / float64(clean*len(all)); share < 0.1 || share > 0.4 {
				t.Errorf("%d frequencies, noise %g: P < 0.2 in %.0f %%", len(freqs), rel, 100*share)
			}
			t.Logf("%d frequencies, noise %g: P < 0.01 in %.2f %%, P < 0.2 in %.1f %%", len(freqs), rel,
				100*float64(total)/float64(clean*len(all)), 100*float64(low)/float64(clean*len(all)))
		}
	}
	if _, err := KramersKronig([]Point{{1, 1, 1, 1}, {2, 1, 1, 1}, {3, 1, 1, 1}, {3, 1, 1, 1}}); err == nil {
		t.Error("three frequencies were enough")
	}
}

// The minimum with non-negative coefficients is the lowest of all subsets of
// columns whose plain least squares fit is positive.
func TestNonNegative(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 2))
	for range 300 {
		const m, n = 6, 5
		a, b := mat.NewDense(m, n, nil), mat.NewVecDense(m, nil)
		for i := range m {
			for c := range n {
				a.Set(i, c, rng.NormFloat64()+0.5)
			}
			b.SetVec(i, rng.NormFloat64())
		}
		for c := range n {
			col := a.ColView(c).(*mat.VecDense)
			col.ScaleVec(1/mat.Norm(col, 2), col)
		}
		least, columns := mat.Dot(b, b), 0
	subsets:
		for set := 1; set < 1<<n; set++ {
			var cols []int
			for c := range n {
				if set>>c&1 == 1 {
					cols = append(cols, c)
				}
			}
			x, ok := solveColumns(a, b, cols)
			if !ok {
				continue
			}
			rest := mat.NewVecDense(m, nil)
			rest.CloneFromVec(b)
			for k, c := range cols {
				if x[k] < 0 {
					continue subsets
				}
				rest.AddScaledVec(rest, -x[k], a.ColView(c))
			}
			if rss := mat.Dot(rest, rest); rss < least {
				least, columns = rss, len(cols)
			}
		}
		rss, positive, err := nonNegative(a, b)
		if err != nil || math.Abs(rss-least) > 1e-9 || positive != columns {
			t.Fatalf("%g with %d columns, want %g with %d (%v)", rss, positive, least, columns, err)
		}
	}
}
