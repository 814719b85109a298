package visco

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
)

// drawn is a series of a model with relative noise.
func drawn(m Model, p []float64, freqs []float64, rel float64, rng *rand.Rand) []Point {
	var s []Point
	for _, f := range freqs {
		k := m.Modulus(2*math.Pi*f, p)
		u := rel * cmplx.Abs(k)
		s = append(s, Point{f, k + complex(u*rng.NormFloat64(), u*rng.NormFloat64()), u, u})
	}
	return s
}

var usual = []float64{0.1, 0.3, 1, 3, 10} // Hz, common practice, no source

// Materials with moduli of 10 mN/m and times near the measured ones (common
// practice, no source).
var materials = []struct {
	name string
	p    []float64
}{
	{"Maxwell", []float64{0.01, 0.1}},
	{"Kelvin-Voigt", []float64{0.01, 0.001}},
	{"Zener", []float64{0.004, 0.01, 0.15}},
	{"power law", []float64{0.01, 0.2}},
	{"fractional Maxwell", []float64{0.01, 0.1, 0.7}},
	{"flat spectrum", []float64{0.005, 0.02, 3}},
}

func find(t *testing.T, r Ranking, name string) Fitted {
	t.Helper()
	for _, f := range r.Fits {
		if f.Model.Name == name {
			return f
		}
	}
	t.Fatalf("%s was not fitted: %v", name, r.LeftOut)
	return Fitted{}
}

// Every model is recovered from its own series and never lies far behind
// another. The unit of the series changes nothing but the moduli, the
// order of its points nothing at all.
func TestRankRecovers(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	for _, c := range materials {
		m := model(c.name)
		s := drawn(m, c.p, usual, 1e-3, rng)
		r, err := Rank(s)
		if err != nil {
			t.Fatal(err)
		}
		if len(r.LeftOut) > 0 {
			t.Errorf("%s: left out %v", c.name, r.LeftOut)
		}
		f := find(t, r, c.name)
		for i := range c.p {
			// Four standard uncertainties are missed once in 16,000.
			if d := math.Abs(f.P[i] - c.p[i]); d > 4*f.U[i] || !(f.U[i] < 0.05*c.p[i]) {
				t.Errorf("%s: %s = %g ± %g, truth %g", c.name, m.Parameters[i].Name, f.P[i], f.U[i], c.p[i])
			}
		}
		if f.EvidenceRatio > decisive {
			t.Errorf("%s: another model is preferred to the true one by %.0f: %s", c.name, f.EvidenceRatio, r.Fits[0].Model.Name)
		}
		weights := 0.0
		for _, x := range r.Fits {
			weights += x.Weight
			if d := x.Weight*x.EvidenceRatio - r.Fits[0].Weight; math.Abs(d) > 1e-12 {
				t.Errorf("%s: weight and evidence ratio of %s disagree by %g", c.name, x.Model.Name, d)
			}
		}
		if math.Abs(weights-1) > 1e-12 {
			t.Errorf("%s: the weights sum to %g", c.name, weights)
		}
		big := slices.Clone(s)
		slices.Reverse(big)
		for i := range big {
			big[i].K *= 1e6
			big[i].UStorage *= 1e6
			big[i].ULoss *= 1e6
		}
		rBig, err := Rank(big)
		if err != nil {
			t.Fatal(err)
		}
		// Both searches stop a millionth of the uncertainties from the minimum.
		if g := find(t, rBig, c.name); math.Abs(g.ChiSquared-f.ChiSquared) > 1e-6 || math.Abs(g.P[0]/1e6-f.P[0]) > 1e-4*f.U[0] {
			t.Errorf("%s in µN/m: chi-squared %g against %g, %s %g against %g", c.name, g.ChiSquared, f.ChiSquared, m.Parameters[0].Name, g.P[0], f.P[0])
		}
	}
}

// The models are told apart at 1 % noise: each is the best for its
// own series in nearly all draws. (A Maxwell series can be fitted by a Zener
// model too, and by chance better by more than the penalty.)
func TestRankChooses(t *testing.T) {
	for _, c := range materials {
		best := 0
		for seed := range uint64(50) {
			r, err := Rank(drawn(model(c.name), c.p, usual, 0.01, rand.New(rand.NewPCG(seed, 3))))
			if err != nil {
				t.Fatal(err)
			}
			if r.Fits[0].Model.Name == c.name {
				best++
			}
		}
		if best < 45 {
			t.Errorf("%s is the best model of its own series in only %d of 50", c.name, best)
		}
	}
}

func TestRankSaysWhatItCannotTell(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	// Two frequencies have room for two parameters.
	r, err := Rank(drawn(model("Maxwell"), []float64{1, 0.1}, []float64{1, 3}, 0.01, rng))
	if err != nil {
		t.Fatal(err)
	}
	for _, m := range Models() {
		left := slices.ContainsFunc(r.LeftOut, func(l string) bool { return strings.HasPrefix(l, m.Name+": 2 frequencies are too few") })
		if left != (len(m.Parameters) > 2) {
			t.Errorf("two frequencies and %s: %v", m.Name, r.LeftOut)
		}
	}
	// Within one decade and with 10 % noise, nobody can tell a weak power law
	// from a solid with a little viscosity.
	r, err = Rank(drawn(model("power law"), []float64{0.01, 0.15}, []float64{1, 2, 4, 8}, 0.1, rng))
	if err != nil || r.Decided {
		t.Errorf("decided for %s by %g (%v)", r.Fits[0].Model.Name, r.Fits[1].EvidenceRatio, err)
	}
	// A Zener model of a solid with a viscosity, without noise: the viscosity is E1 tau, and
	// neither of them alone can be told.
	exact := drawn(model("Kelvin-Voigt"), []float64{0.01, 0.001}, usual, 0.01, rng)
	for i := range exact {
		exact[i].K = model("Kelvin-Voigt").Modulus(2*math.Pi*exact[i].FrequencyHz, []float64{0.01, 0.001})
	}
	r, err = Rank(exact, model("Zener"))
	if err != nil {
		t.Fatal(err)
	}
	if z := r.Fits[0]; !math.IsNaN(z.U[1]) || !math.IsNaN(z.U[2]) || !(z.U[0] < 1e-3) || math.Abs(z.P[0]-0.01) > z.U[0] {
		t.Errorf("Zener for Kelvin-Voigt: %v ± %v", z.P, z.U)
	}
}

// The standard uncertainties mean what they say, and agree with the bootstrap:
// of 300 series of a model with 2 % noise, the truth lies within 1.96 of them in
// 91 to 98 % (three binomial standard deviations are 3.8 %).
func TestUncertainties(t *testing.T) {
	for _, c := range materials {
		m := model(c.name)
		within := make([]int, len(c.p))
		const series = 300
		for seed := range uint64(series) {
			s := drawn(m, c.p, []float64{0.1, 0.2, 0.5, 1, 2, 5, 10}, 0.02, rand.New(rand.NewPCG(seed, 6)))
			r, err := Rank(s, m)
			if err != nil {
				t.Fatal(err)
			}
			f := r.Fits[0]
			for i := range c.p {
				if math.Abs(f.P[i]-c.p[i]) < 1.96*f.U[i] {
					within[i]++
				}
			}
			if seed > 0 {
				continue
			}
			boot, err := Bootstrap(s, f, 800, 1, nil)
			if err != nil {
				t.Fatal(err)
			}
			for i, b := range boot {
				// 800 draws give a half-width to 4 % (one standard deviation), and
				// linear propagation is good to a few per cent here.
				if ratio := (b.High - b.Low) / (2 * 1.96 * f.U[i]); ratio < 0.85 || ratio > 1.18 {
					t.Errorf("%s: bootstrap over linear uncertainty of %s is %.2f", c.name, m.Parameters[i].Name, ratio)
				}
			}
		}
		for i, n := range within {
			if n < series*91/100 || n > series*99/100 {
				t.Errorf("%s: %s within its 95 %% interval in %d of %d", c.name, m.Parameters[i].Name, n, series)
			}
		}
	}
}

// A misfit widens the uncertainties, and nothing narrows them.
func TestMisfitWidens(t *testing.T) {
	m := model("power law")
	s := drawn(m, []float64{0.01, 0.2}, usual, 0.03, rand.New(rand.NewPCG(4, 4)))
	narrow, wide := slices.Clone(s), slices.Clone(s)
	for i := range s {
		narrow[i].UStorage, narrow[i].ULoss = s[i].UStorage/10, s[i].ULoss/10
		wide[i].UStorage, wide[i].ULoss = s[i].UStorage*10, s[i].ULoss*10
	}
	u := func(s []Point) (float64, float64) {
		r, err := Rank(s, m)
		if err != nil {
			t.Fatal(err)
		}
		return r.Fits[0].U[0], r.Fits[0].ChiSquared / float64(r.Fits[0].Freedom)
	}
	u0, chi0 := u(s)
	uNarrow, _ := u(narrow)
	uWide, _ := u(wide)
	// Ten times smaller uncertainties of the points leave what the scatter says.
	if want := u0 / math.Sqrt(math.Max(1, chi0)) * math.Sqrt(chi0); math.Abs(uNarrow-want) > 1e-3*want {
		t.Errorf("a misfit gives %g, want %g", uNarrow, want)
	}
	if want := u0 / math.Sqrt(math.Max(1, chi0)) * 10; math.Abs(uWide-want) > 1e-3*want {
		t.Errorf("too good a fit gives %g, want %g", uWide, want)
	}
}

func TestBadSeries(t *testing.T) {
	for name, s := range map[string][]Point{
		"none":        nil,
		"one":         {{1, 1, 1, 1}},
		"twice":       {{1, 1, 1, 1}, {1, 1, 1, 1}},
		"no u":        {{1, 1, 0, 1}, {2, 1, 1, 1}},
		"not finite":  {{1, complex(math.NaN(), 1), 1, 1}, {2, 1, 1, 1}},
		"frequency 0": {{0, 1, 1, 1}, {2, 1, 1, 1}},
		"zero":        {{1, 0, 1, 1}, {2, 0, 1, 1}},
	} {
		if _, err := Rank(s); err == nil {
			t.Errorf("%s: no error", name)
		}
		if _, err := KramersKronig(s); err == nil {
			t.Errorf("%s: no error of the Kramers-Kronig check", name)
		}
		if _, err := Bootstrap(s, Fitted{Model: model("Maxwell"), P: []float64{1, 1}, Freedom: 1}, 100, 1, nil); err == nil {
			t.Errorf("%s: no error of the bootstrap", name)
		}
		if _, err := Crossover(s, Fitted{Model: model("Maxwell"), P: []float64{1, 1}, Freedom: 1}, 100, 1); err == nil {
			t.Errorf("%s: no error of the crossover", name)
		}
	}
}

// Nothing that can be written as a series panics or gives a number that is not
// one: moduli of any sign and size, frequencies decades apart.
func TestRankNeverPanics(t *testing.T) {
	rng := rand.New(rand.NewPCG(12, 12))
	for range 60 {
		var s []Point
		for range 2 + rng.IntN(5) {
			k := complex(rng.NormFloat64(), rng.NormFloat64()) * complex(math.Exp(10*rng.NormFloat64()), 0)
			u := cmplx.Abs(k) * math.Exp(3*rng.NormFloat64())
			s = append(s, Point{math.Exp(4 * rng.NormFloat64()), k, u, u})
		}
		r, err := Rank(s, append(Models(), WiderModels()...)...)
		if err != nil {
			continue
		}
		for _, f := range r.Fits {
			if !finite(f.P) || !finite([]float64{f.AICc, f.ChiSquared, f.EvidenceRatio, f.Weight}) {
				t.Errorf("%s: %+v", f.Model.Name, f)
			}
			for _, u := range f.U {
				if math.IsInf(u, 0) || u < 0 {
					t.Errorf("%s: uncertainty %g", f.Model.Name, u)
				}
			}
		}
		if c, err := KramersKronig(s); err == nil && !(c.P >= 0 && c.P <= 1) {
			t.Errorf("Kramers-Kronig %+v", c)
		}
		_, _ = r.Crossover(s, 20, 1) // an error is an answer too
	}
}

// One cell: five frequencies, all models, 400 bootstrap series of the best.
func BenchmarkSeries(b *testing.B) {
	s := drawn(model("Zener"), []float64{0.004, 0.01, 0.15}, usual, 0.03, rand.New(rand.NewPCG(1, 1)))
	b.ReportAllocs()
	for b.Loop() {
		r, err := Rank(s)
		if err != nil {
			b.Fatal(err)
		}
		if _, err := Bootstrap(s, r.Fits[0], 400, 1, nil); err != nil {
			b.Fatal(err)
		}
	}
}

// All that a cell's series is asked: ranking, bootstrap of 400, crossover with
// another 400, Kramers-Kronig check.
func BenchmarkCell(b *testing.B) {
	s := drawn(model("flat spectrum"), []float64{0.005, 0.02, 3}, usual, 0.03, rand.New(rand.NewPCG(1, 1)))
	b.ReportAllocs()
	for b.Loop() {
		r, err := Rank(s)
		if err != nil {
			b.Fatal(err)
		}
		if _, err := Bootstrap(s, r.Fits[0], 400, 1, nil); err != nil {
			b.Fatal(err)
		}
		if _, err := r.Crossover(s, 400, 1); err != nil {
			b.Fatal(err)
		}
		if _, err := KramersKronig(s); err != nil {
			b.Fatal(err)
		}
	}
}

func ExampleRank() {
	s := drawn(model("power law"), []float64{0.01, 0.2}, usual, 1e-3, rand.New(rand.NewPCG(1, 1)))
	r, err := Rank(s)
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Println(r.Fits[0].Model.Name)
	// Output: power law
}
