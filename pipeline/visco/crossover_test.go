package visco

import (
	"math"
	"math/rand/v2"
	"testing"
)

// only is the time of the one crossing of a model.
func only(t *testing.T, m Model, p []float64) float64 {
	t.Helper()
	cs := crossings(Fitted{Model: m, P: p}, 1e-3, 1e3)
	if len(cs) != 1 {
		t.Fatalf("%s %v crosses %d times", m.Name, p, len(cs))
	}
	return 1 / (2 * math.Pi * cs[0].frequency)
}

// Crossovers in closed form: 1/tau of Maxwell, E/eta of Kelvin-Voigt; and two
// values computed elsewhere with mpmath.
func TestCrossings(t *testing.T) {
	for _, c := range []struct {
		name string
		p    []float64
		w    float64
	}{
		{"Maxwell", []float64{1000, 0.05}, 20},
		{"Kelvin-Voigt", []float64{1000, 50}, 20},
		{"flat spectrum", []float64{100, 0.01, 10}, 0.34842206633},
		{twoKelvin, []float64{atOne(500/math.Cos(0.17*math.Pi/2), 0.17), 0.17, atOne(1.5, 1), 1}, 745.379106970},
	} {
		if got := 1 / only(t, model(c.name), c.p); math.Abs(got-c.w) > 2e-11*c.w { // eleven digits
			t.Errorf("%s crosses at %.12g rad/s, want %.12g", c.name, got, c.w)
		}
	}
	// A Zener model crosses where x^2 (Einf+E1) - E1 x + Einf = 0, x = w tau:
	// twice or never.
	x := func(sign float64) float64 { return (1 + sign*math.Sqrt(1-4*0.1*1.1)) / (2 * 1.1) }
	cs := crossings(Fitted{Model: model("Zener"), P: []float64{0.1, 1, 1}}, 1e-3, 1e3)
	if len(cs) != 2 {
		t.Fatalf("Zener crosses at %v", cs)
	}
	for i, want := range []float64{x(-1), x(1)} {
		if got := 2 * math.Pi * cs[i].frequency; math.Abs(got-want) > 1e-11*want || cs[i].rises != (i == 1) {
			t.Errorf("Zener crosses at %+v, want %g rad/s", cs[i], want)
		}
	}
}

// The 95 % interval of the crossover time holds the truth in 91 to 98 % of 200
// synthetic cells of three kinds, with nobody knowing which kind (a true 95 %
// counts 182 to 196 of 200, three binomial standard deviations being 4.6 %).
func TestCrossoverCoverage(t *testing.T) {
	in, open := 0, 0
	const cells = 200
	for seed := range uint64(cells) {
		rng := rand.New(rand.NewPCG(seed, 9))
		time := 0.1 * math.Exp(rng.NormFloat64()/2)
		var m Model
		var p []float64
		switch seed % 3 {
		case 0:
			m, p = model("Maxwell"), []float64{0.01, time}
		case 1:
			m, p = model("fractional Maxwell"), []float64{0.01, time, 0.7 + 0.2*rng.Float64()}
		case 2:
			m, p = model("flat spectrum"), []float64{0.01, time / 30, time * 5}
		}
		s := drawn(m, p, usual, 0.03, rng)
		truth := only(t, m, p)
		r, err := Rank(s)
		if err != nil {
			t.Fatal(err)
		}
		c, err := r.Crossover(s, 200, seed)
		if err != nil {
			t.Fatalf("seed %d: %v", seed, err)
		}
		if math.IsInf(c.High, 1) || c.Low == 0 {
			open++
		}
		if c.Low <= truth && truth <= c.High {
			in++
		}
	}
	t.Logf("%d of %d within the 95 %% interval, %d intervals open", in, cells, open)
	if in < 182 || in > 196 {
		t.Errorf("%d of %d within the 95 %% interval, want 182 to 196", in, cells)
	}
	if open > cells/20 { // an open interval holds the truth too easily
		t.Errorf("%d of %d intervals are open", open, cells)
	}
}

// With the model known, the interval of one model is right too.
func TestCrossoverOfOneModel(t *testing.T) {
	m := model("Maxwell")
	in := 0
	const cells = 200
	for seed := range uint64(cells) {
		s := drawn(m, []float64{0.01, 0.1}, usual, 0.03, rand.New(rand.NewPCG(seed, 10)))
		r, err := Rank(s, m)
		if err != nil {
			t.Fatal(err)
		}
		c, err := Crossover(s, r.Fits[0], 200, seed)
		if err != nil {
			t.Fatal(err)
		}
		if math.Abs(c.Time-r.Fits[0].P[1]) > 1e-9 {
			t.Errorf("crossover %g of a Maxwell model of tau %g", c.Time, r.Fits[0].P[1])
		}
		if c.Low <= 0.1 && 0.1 <= c.High {
			in++
		}
	}
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
		{"Maxwell", []float64{0.01, 100}, 1 / (2 * math.Pi * 0.1), math.Inf(1)},
		{"Maxwell", []float64{0.01, 1e-3}, 0, 1 / (2 * math.Pi * 10)},
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

// Where a drawn series has lost its crossing, the modulus tells to which side:
// a Maxwell model is elastic above its crossing, Kelvin-Voigt's below it.
func TestLostCrossing(t *testing.T) {
	for _, c := range []struct {
		name string
		p    []float64
		at   crossingAt
		want float64
	}{
		{"Maxwell", []float64{1, 1e4}, crossingAt{1, true}, math.Inf(1)},
		{"Maxwell", []float64{1, 1e-4}, crossingAt{1, true}, 0},
		{"Kelvin-Voigt", []float64{1, 1e-4}, crossingAt{1, false}, 0},
		{"Kelvin-Voigt", []float64{1, 1e4}, crossingAt{1, false}, math.Inf(1)},
		{"Maxwell", []float64{1, 0.2}, crossingAt{1, true}, 0.2},
	} {
		got := nearest(Fitted{Model: model(c.name), P: c.p}, c.at, 0.01, 100)
		if got != c.want && !(math.Abs(got-c.want) < 1e-9) {
			t.Errorf("%s %v: %g, want %g", c.name, c.p, got, c.want)
		}
	}
}

// Models that share the evidence share the interval; one that has none of it
// does not move it.
func TestCrossoverOverModels(t *testing.T) {
	s := drawn(model("Maxwell"), []float64{0.01, 0.1}, usual, 1e-3, rand.New(rand.NewPCG(1, 8)))
	one := func(tau, weight float64) Fitted {
		return Fitted{Model: model("Maxwell"), P: []float64{0.01, tau}, Freedom: 8, Weight: weight}
	}
	for _, c := range []struct{ first, low, high float64 }{{0.5, 0.1, 0.2}, {0.995, 0.1, 0.1}, {0.9, 0.1, 0.2}} {
		x, err := Ranking{Fits: []Fitted{one(0.1, c.first), one(0.2, 1-c.first)}}.Crossover(s, 400, 1)
		// Times are known to about 0.1 %; 1 % is ten times that.
		if err != nil || math.Abs(x.Time-0.1) > 1e-9 || math.Abs(x.Low-c.low) > 1e-3 || math.Abs(x.High-c.high) > 2e-3 {
			t.Errorf("weight %g: %+v, %v", c.first, x, err)
		}
	}
}

// A crossing just inside the data, known badly, is open where it may lie far
// outside; two crossings are not one.
func TestCrossoverOpenAndDouble(t *testing.T) {
	s := drawn(model("power law"), []float64{0.01, 0.48}, usual, 0.1, rand.New(rand.NewPCG(5, 5)))
	r, err := Rank(s, model("fractional Maxwell"))
	if err != nil {
		t.Fatal(err)
	}
	if x, err := r.Crossover(s, 400, 1); err != nil || !(math.IsNaN(x.Time) || math.IsInf(x.High, 1) || x.Low == 0) {
		t.Errorf("a springpot near 1/2, noise 10 %%: %+v, %v", x, err)
	}
	s = drawn(model("Zener"), []float64{0.001, 0.01, 0.15}, usual, 0.01, rand.New(rand.NewPCG(5, 6)))
	if r, err = Rank(s); err != nil {
		t.Fatal(err)
	}
	if x, err := r.Crossover(s, 100, 1); err == nil {
		t.Errorf("two crossings within the data: %+v", x)
	}
	// With one of them at the edge, the other is meant.
	s = drawn(model("Zener"), []float64{0.00004, 0.01, 0.3}, []float64{0.01, 0.03, 0.1, 0.3, 1, 3}, 0.01, rand.New(rand.NewPCG(5, 7)))
	for i := range s {
		if f := s[i].FrequencyHz; (real(s[i].K) > imag(s[i].K)) != (f > 0.5) {
			t.Fatalf("not a series with one crossing: %v", s)
		}
	}
	if r, err = Rank(s); err != nil {
		t.Fatal(err)
	}
	if x, err := r.Crossover(s, 400, 1); err != nil || math.Abs(x.Time-0.3) > 0.02 || !(x.Low < 0.3 && 0.3 < x.High) {
		t.Errorf("a second crossing at the edge: %+v, %v", x, err)
	}
}
