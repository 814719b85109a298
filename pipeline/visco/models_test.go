package visco

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"
)

func model(name string) Model {
	for _, m := range models {
		if m.Name == name {
			return m
		}
	}
	panic(name)
}

// Reference values at several w (rad/s), computed with mpmath at 40 digits from
// the formulas of the textbooks (Ferry 1980; Schiessel et al. 1995); in our own
// parameters. The power law at A = 500 (1 rad/s), a = 0.2 has tan delta =
// tan(pi a/2) = 0.3249196962 at every w.
func TestModelsAgainstReference(t *testing.T) {
	cases := []struct {
		model         string
		p             []float64
		w             float64
		storage, loss float64
	}{
		{"Maxwell", []float64{1000, 0.05}, 0.1, 0.024999375015624609, 4.9998750031249219},
		{"Maxwell", []float64{1000, 0.05}, 10, 200, 400},
		{"Maxwell", []float64{1000, 0.05}, 20, 500, 500},
		{"Maxwell", []float64{1000, 0.05}, 100, 961.53846153846154, 192.30769230769231},
		{"Kelvin-Voigt", []float64{1000, 50}, 20, 1000, 1000},
		{"Kelvin-Voigt", []float64{1000, 50}, 100, 1000, 5000},
		{"Zener", []float64{300, 1000, 0.05}, 0.1, 300.02499937501562, 4.9998750031249219},
		{"Zener", []float64{300, 1000, 0.05}, 0.31622776601683793, 300.24993751562109, 15.807436441731464},
		{"flat spectrum", []float64{100, 0.01, 9.99}, 3, 340.13028312, 150.74843261},
		{"flat spectrum", []float64{100, 0.01, 9.99}, 0.34842206633, 128.78165839, 128.78165839},
		{"flat spectrum", []float64{100, 0.01, 9.99}, 0.1, 34.657309028022265, 78.439816373078144},
	}
	for _, c := range cases {
		k := model(c.model).Modulus(c.w, c.p)
		// Printed to ten digits and more.
		if math.Abs(real(k)-c.storage) > 2e-10*cmplx.Abs(k) || math.Abs(imag(k)-c.loss) > 2e-10*cmplx.Abs(k) {
			t.Errorf("%s at %g: %v, want %v + %vi", c.model, c.w, k, c.storage, c.loss)
		}
	}
	for _, w := range []float64{1e-3, 1, 1e3} {
		k := model("power law").Modulus(w, []float64{500, 0.2})
		if d := imag(k)/real(k) - 0.3249196962329063; math.Abs(d) > 1e-14 {
			t.Errorf("power law at %g: tan delta off by %g", w, d)
		}
	}
	// In series, a spring E and a springpot of exponent 1 are a Maxwell model.
	for _, w := range []float64{0.1, 3, 50} {
		a := model("fractional Maxwell").Modulus(w, []float64{1000, 0.05, 1})
		if b := model("Maxwell").Modulus(w, []float64{1000, 0.05}); cmplx.Abs(a-b) > 1e-12*cmplx.Abs(b) {
			t.Errorf("fractional Maxwell with exponent 1: %v, want %v", a, b)
		}
	}
}

// Limits in closed form: solids and fluids at both ends of the spectrum.
func TestModelLimits(t *testing.T) {
	near := func(what string, got, want, rel float64) {
		t.Helper()
		if math.Abs(got-want) > rel*math.Abs(want) {
			t.Errorf("%s: %g, want %g", what, got, want)
		}
	}
	const low, high = 1e-6, 1e6 // rad/s, six decades from the times below
	m := model("Maxwell").Modulus
	near("Maxwell, slow: eta = E tau", imag(m(low, []float64{2, 0.5}))/low, 1, 1e-9)
	near("Maxwell, fast: E", real(m(high, []float64{2, 0.5})), 2, 1e-9)
	z := model("Zener").Modulus
	near("Zener, slow: Einf", real(z(low, []float64{3, 2, 0.5})), 3, 1e-9)
	near("Zener, fast: Einf+E1", real(z(high, []float64{3, 2, 0.5})), 5, 1e-9)
	// Published (from memory, recomputed): for Einf = 300, E1 = 1000, tau = 0.05
	// the largest tan delta is 0.8006407690 at w = 9.6076892283.
	k := z(9.6076892283, []float64{300, 1000, 0.05})
	near("Zener, largest tan delta", imag(k)/real(k), 0.8006407690, 1e-9)
	f := model("flat spectrum").Modulus
	near("flat spectrum, slow: viscosity H (T - t1)", imag(f(low, []float64{7, 0.1, 0.9}))/low, 7*0.9, 1e-9)
	near("flat spectrum, fast: H ln(T/t1)", real(f(high, []float64{7, 0.1, 0.9})), 7*math.Log(10), 1e-9)
	fm := model("fractional Maxwell").Modulus
	near("fractional Maxwell, fast: E", real(fm(1e12, []float64{4, 1, 0.5})), 4, 1e-5)
}

// Every model obeys the Kramers-Kronig relations. With the instantaneous
// modulus taken off, K'(w) - K'(inf) = (2/pi) P int x K”(x)/(w^2 - x^2) dx up
// to sign; in the subtracted form below the integrand has no singularity, and
// the integral over ln x converges for all models with bounded K' at zero
// frequency:
//
//	K'(w) - K'(0) = (2 w^2/pi) int_0^inf [K''(x)/x - K''(w)/w]/(w^2 - x^2) dx.
func TestModelsObeyKramersKronig(t *testing.T) {
	for _, c := range []struct {
		name string
		p    []float64
		zero float64 // K'(0)
	}{
		{"Maxwell", []float64{2, 0.5}, 0},
		{"Zener", []float64{3, 2, 0.5}, 3},
		{"power law", []float64{2, 0.3}, 0},
		{"fractional Maxwell", []float64{2, 0.5, 0.6}, 0},
		{"flat spectrum", []float64{2, 0.01, 3}, 0},
	} {
		m := model(c.name)
		for _, w := range []float64{0.3, 2, 11} {
			g := func(x float64) float64 { return imag(m.Modulus(x, c.p)) / x }
			gw := g(w)
			// x = w e^u; the two halves of the integral around u = 0 are taken
			// together by a trapezoid rule that never hits u = 0.
			const h, reach = 1e-3, 60.0
			sum := 0.0
			for u := -reach + h/2; u < reach; u += h {
				x := w * math.Exp(u)
				sum += (g(x) - gw) / (w*w - x*x) * x * h
			}
			got := 2*w*w/math.Pi*sum + c.zero
			want := real(m.Modulus(w, c.p))
			// The rule is good to h^2; the power law's tail beyond e^60 is
			// below e^-18.
			if math.Abs(got-want) > 1e-4*cmplx.Abs(m.Modulus(w, c.p)) {
				t.Errorf("%s at %g: K' %g from K'', want %g", c.name, w, got, want)
			}
		}
	}
}

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

// Every model is recovered from its own series, and, where it differs enough
// from the others, chosen.
func TestRankRecovers(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	for _, c := range []struct {
		name string
		p    []float64
	}{
		{"Maxwell", []float64{0.01, 0.1}},
		{"Kelvin-Voigt", []float64{0.01, 0.001}},
		{"Zener", []float64{0.004, 0.01, 0.15}},
		{"power law", []float64{0.01, 0.2}},
	} {
		m := model(c.name)
		r, err := Rank(drawn(m, c.p, usual, 1e-3, rng))
		if err != nil {
			t.Fatal(err)
		}
		f := r.Fits[0]
		for _, x := range r.Fits {
			if x.Model.Name == c.name {
				f = x
			}
		}
		for i := range c.p {
			if d := math.Abs(f.P[i] - c.p[i]); d > 4*f.U[i] || f.U[i] > 0.05*c.p[i] {
				t.Errorf("%s: %s = %g ± %g, truth %g", c.name, m.Parameters[i].Name, f.P[i], f.U[i], c.p[i])
			}
		}
		if f.EvidenceRatio > decisive {
			t.Errorf("%s: another model is preferred to the true one by %.0f: %s", c.name, f.EvidenceRatio, r.Fits[0].Model.Name)
		}
	}
	// Two frequencies tell no four-parameter story.
	r, err := Rank(drawn(model("Maxwell"), []float64{1, 0.1}, []float64{1, 3}, 0.01, rng))
	if err != nil || len(r.LeftOut) == 0 {
		t.Errorf("%+v, %v", r.LeftOut, err)
	}
	// Within one decade and with 10 % noise, nobody can tell a weak power law
	// from a solid with a little viscosity: it is said.
	r, err = Rank(drawn(model("power law"), []float64{0.01, 0.15}, []float64{1, 2, 4, 8}, 0.1, rng))
	if err != nil || r.Decided {
		t.Errorf("decided for %s by %g (%v)", r.Fits[0].Model.Name, r.Fits[1].EvidenceRatio, err)
	}
}

// The 95 % interval of the crossover time holds the truth in 91 to 98 % of 200
// synthetic cells (a true 95 % counts 182 to 196 of 200, three binomial
// standard deviations being 4.6 %).
func TestCrossoverCoverage(t *testing.T) {
	m := model("fractional Maxwell")
	in := 0
	const cells = 200
	for seed := range uint64(cells) {
		rng := rand.New(rand.NewPCG(seed, 9))
		p := []float64{0.01, 0.05 * math.Exp(rng.NormFloat64()/2), 0.7 + 0.2*rng.Float64()}
		s := drawn(m, p, usual, 0.03, rng)
		truth := crossing(Fitted{Model: m, P: p}, 0.01, 100)
		f, err := fit(s, m, m.starts(s))
		if err != nil {
			t.Fatal(err)
		}
		c, err := Crossover(s, f, 200, seed)
		if err != nil {
			t.Fatalf("seed %d: %v", seed, err)
		}
		if c.Low <= truth && truth <= c.High {
			in++
		}
	}
	t.Logf("%d of %d within the 95 %% interval", in, cells)
	if in < 182 || in > 196 {
		t.Errorf("%d of %d within the 95 %% interval, want 182 to 196", in, cells)
	}
}

// Where the data show no crossing they give a bound.
func TestCrossoverBound(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 3))
	for _, c := range []struct {
		name string
		p    []float64
		low  float64
		high float64
	}{
		{"power law", []float64{0.01, 0.2}, 1 / (2 * math.Pi * 0.1), math.Inf(1)},
		{"power law", []float64{0.01, 0.8}, 0, 1 / (2 * math.Pi * 10)},
	} {
		s := drawn(model(c.name), c.p, usual, 0.01, rng)
		r, err := Rank(s, model(c.name))
		if err != nil {
			t.Fatal(err)
		}
		x, err := Crossover(s, r.Fits[0], 100, 1)
		if err != nil || !math.IsNaN(x.Time) || math.Abs(x.Low-c.low) > 1e-12 || (x.High != c.high && math.Abs(x.High-c.high) > 1e-12) {
			t.Errorf("%v: %+v, %v", c.p, x, err)
		}
	}
}

// The check fires on noise as seldom as its probability says, and on a lag
// between the channels or an exchanged sign nearly always.
func TestKramersKronig(t *testing.T) {
	fires := func(spoil func(*Point)) float64 {
		n := 0
		const series = 60
		for seed := range uint64(series) {
			rng := rand.New(rand.NewPCG(seed, 4))
			s := drawn(model("Zener"), []float64{0.004, 0.01, 0.15}, []float64{0.1, 0.2, 0.5, 1, 2, 5, 10}, 0.01, rng)
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
		}
		return float64(n) / series
	}
	// A true 1 % counts at most 4 of 60 (binomial, one in 2,000).
	if share := fires(func(*Point) {}); share > 4.5/60 {
		t.Errorf("fires on %.1f %% of clean series", 100*share)
	}
	lag := func(p *Point) { p.K *= cmplx.Rect(1, 2*math.Pi*p.FrequencyHz*0.03) } // 30 ms
	if share := fires(lag); share < 0.9 {
		t.Errorf("sees a lag of 30 ms in only %.0f %%", 100*share)
	}
	sign := func(p *Point) { p.K = cmplx.Conj(p.K) }
	if share := fires(sign); share < 0.9 {
		t.Errorf("sees an exchanged sign in only %.0f %%", 100*share)
	}
}

func TestDecay(t *testing.T) {
	laws := map[string]func(x float64) float64{
		"exponential":           func(x float64) float64 { return math.Exp(-x / 2) },
		"stretched exponential": func(x float64) float64 { return math.Exp(-math.Pow(x/2, 0.4)) },
		"power law":             func(x float64) float64 { return math.Pow(1+x/0.05, -0.3) },
	}
	for name, law := range laws {
		rng := rand.New(rand.NewPCG(8, 8))
		var ts, ys []float64
		for i := range 200 {
			x := 0.05 * float64(i)
			ts = append(ts, x)
			ys = append(ys, 5e-4+3e-4*law(x)+2e-7*rng.NormFloat64())
		}
		got, err := Decay(ts, ys)
		if err != nil {
			t.Fatal(err)
		}
		if got[0].Name != name {
			t.Errorf("%s was taken for %s (AICc %g against %g)", name, got[0].Name, got[0].AICc, got[1].AICc)
		}
		for _, x := range []float64{0.1, 1, 9} {
			// The scatter of single values; the curve is known better.
			if d := math.Abs(got[0].At(x) - 5e-4 - 3e-4*law(x)); d > 2e-7 {
				t.Errorf("%s at %g s off by %g", name, x, d)
			}
		}
	}
	l := Law{Plateau: 1, Drop: 1, TimeS: 1, Exponent: 1, remaining: func(x float64) float64 { return math.Exp(-x) }}
	if l.Settled(0.5, 0.02) || !l.Settled(6, 0.02) {
		t.Error("settling is told wrongly")
	}
	if _, err := Decay(make([]float64, 20), make([]float64, 20)); err == nil {
		t.Error("a decay was found in zeros")
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
	} {
		if _, err := Rank(s); err == nil {
			t.Errorf("%s: no error", name)
		}
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
