package visco

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
)

func TestProbe(t *testing.T) {
	truths := []struct {
		name string
		p    []float64
	}{
		{"Maxwell", []float64{0.01, 0.1}},
		{"Maxwell", []float64{0.01, 0.159}},
		{"Kelvin-Voigt", []float64{0.01, 0.001}},
		{"Zener", []float64{0.004, 0.01, 0.15}},
		{"power law", []float64{0.01, 0.2}},
		{"fractional Maxwell", []float64{0.01, 0.1, 0.7}},
		{"flat spectrum", []float64{0.005, 0.001, 3}},
		{"flat spectrum", []float64{0.005, 0.02, 3}},
	}
	for _, rel := range []float64{0.01, 0.03} {
		for _, c := range truths {
			m := model(c.name)
			left := map[string]int{}
			best := map[string]int{}
			kk, n := 0, 60
			cover, bound, none := 0, 0, 0
			truth := crossing(Fitted{Model: m, P: c.p}, 0.05, 20)
			for seed := range uint64(n) {
				rng := rand.New(rand.NewPCG(seed, 77))
				s := drawn(m, c.p, usual, rel, rng)
				r, err := Rank(s)
				if err != nil {
					t.Fatal(err)
				}
				for _, l := range r.LeftOut {
					left[l]++
				}
				best[r.Fits[0].Model.Name]++
				if k, err := KramersKronig(s); err == nil && k.P < 0.01 {
					kk++
				}
				x, err := Crossover(s, r.Fits[0], 100, 1)
				if err != nil {
					none++
				} else if math.IsNaN(x.Time) {
					bound++
				} else if x.Low <= truth && truth <= x.High {
					cover++
				}
			}
			fmt.Println(rel, c.name, c.p, "best", best, "left", left, "kk<.01:", kk, "cross", truth, "cover", cover, "bound", bound, "err", none, "of", n)
		}
	}
}
