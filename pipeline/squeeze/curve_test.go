package squeeze

import (
	"math"
	"math/rand/v2"
	"testing"
)

// TestCurveAgainstShape reads the curve at random places and compares it with
// the exact shape, in the bounds that the documentation promises.
func TestCurveAgainstShape(t *testing.T) {
	c := NewCurve()
	rng := rand.New(rand.NewPCG(1, 2))
	var worst [5]float64
	for i := range 40000 {
		e := 0.001 + 0.899*rng.Float64()
		if i%2 == 0 { // as many near the sphere
			e = 0.001 * math.Exp(math.Log(900)*rng.Float64())
		}
		eta := 1 - e
		k := solve(math.Log(eta), guess(e))
		for j, v := range []struct {
			name           string
			got, want, tol float64
		}{
			{"force", c.Force(eta), k.force(), 1e-11},
			{"ln area", c.LnArea(eta), k.lnArea, 1e-11},
			{"equator", c.Equator(eta), k.equator(), 1e-11},
			{"d force", c.DForce(eta), k.dForce(), 1e-9},
			{"d ln area", c.DLnArea(eta), k.dLnArea(), 1e-11},
		} {
			r := relative(v.got, v.want)
			worst[j] = math.Max(worst[j], r)
			if !(r <= v.tol) {
				t.Fatalf("eta %.9f: %s %.15g, want %.15g (off by %.2g)", eta, v.name, v.got, v.want, r)
			}
		}
	}
	t.Logf("worst: force %.1e, ln area %.1e, equator %.1e, d force %.1e, d ln area %.1e", worst[0], worst[1], worst[2], worst[3], worst[4])
}

// TestCurveTable: the curve at the independent figures of byHeight.
func TestCurveTable(t *testing.T) {
	c := NewCurve()
	for _, v := range byHeight {
		tol := 1e-11 + 3e-16/(1-v.eta)
		if r := relative(c.Force(v.eta), v.force); !(r <= tol) {
			t.Errorf("eta %g: force %.15g, want %.15g", v.eta, c.Force(v.eta), v.force)
		}
		if r := relative(c.LnArea(v.eta), math.Log1p(v.gain)); !(r <= 2*tol+gainTolerance(v.q)) {
			t.Errorf("eta %g: ln area %.15g, want %.15g", v.eta, c.LnArea(v.eta), math.Log1p(v.gain))
		}
		if r := relative(c.Equator(v.eta), v.equator); !(r <= 1e-11) {
			t.Errorf("eta %g: equator %.15g, want %.15g", v.eta, c.Equator(v.eta), v.equator)
		}
	}
}

// TestExactDerivatives checks the analytic derivatives of a meridian, which the
// curve is compared with, against differences of the exact shape.
func TestExactDerivatives(t *testing.T) {
	for _, eta := range []float64{0.1, 0.15, 0.3, 0.5, 0.7, 0.9, 0.95, 0.97, 0.99, 0.999} {
		e := 1 - eta
		step := 1e-4 * math.Min(eta, e)
		read := func(x float64) meridian { return solve(math.Log(x), guess(1-x)) }
		k, up, down := read(eta), read(eta+step), read(eta-step)
		for _, v := range []struct {
			name      string
			got, want float64
		}{
			{"force", k.dForce(), (up.force() - down.force()) / (2 * step)},
			{"equator", k.dEquator(), (up.equator() - down.equator()) / (2 * step)},
			{"ln area", k.dLnArea(), (up.lnArea - down.lnArea) / (2 * step)},
		} {
			// Second-order differences: step^2 (1e-8), and rounding over the
			// step where the change is small beside the value (1e-16/1e-7).
			if r := relative(v.got, v.want); !(r < 1e-7) {
				t.Errorf("eta %g: slope of %s %.12g, by differences %.12g", eta, v.name, v.got, v.want)
			}
		}
	}
}

// TestCurveContinuous looks for jumps where pieces meet and where the solver
// takes over near the sphere.
func TestCurveContinuous(t *testing.T) {
	c := NewCurve()
	for i := range pieceCount {
		e := knot(i)
		if e > 1-Lowest {
			break
		}
		eta := 1 - e
		below, above := math.Nextafter(eta, 0), math.Nextafter(eta, 2)
		for _, f := range []struct {
			name string
			read func(float64) float64
			tol  float64
		}{
			// Two steps of eta (up to 1e-16 each) change the force by up to 4e-16/e
			// of itself, ln area by twice that; what pieces differ by where they
			// meet is rounding, for ln area that of the solver, 3e-16/q^2, with q^2
			// about e/8 at the worst.
			{"force", c.Force, 1e-14 + 1e-15/e},
			{"ln area", c.LnArea, 1e-14 + 5e-15/e},
			{"equator", c.Equator, 1e-14},
		} {
			a, b := f.read(below), f.read(above)
			tol := f.tol
			if r := relative(a, b); !(r <= tol) {
				t.Errorf("%s jumps by %.2g at eta = 1 - %g", f.name, r, e)
			}
		}
	}
}

// TestCurveMonotone: pressed further, a cell pushes harder, has more surface
// and is wider, without a ripple.
func TestCurveMonotone(t *testing.T) {
	c := NewCurve()
	f, l, q := c.Force(1), c.LnArea(1), c.Equator(1)
	for eta := 0.9999; eta >= Lowest; eta -= 0.0001 {
		nf, nl, nq := c.Force(eta), c.LnArea(eta), c.Equator(eta)
		if !(nf > f && nl > l && nq > q) {
			t.Fatalf("eta %.4f: not above the value at %.4f", eta, eta+0.0001)
		}
		f, l, q = nf, nl, nq
	}
}

func TestCurveEdges(t *testing.T) {
	c := NewCurve()
	for _, eta := range []float64{1, 1.0000001, 2, 1e300, math.Inf(1)} {
		if c.Force(eta) != 0 || c.LnArea(eta) != 0 || c.Equator(eta) != 1 || c.DForce(eta) != 0 || c.DLnArea(eta) != 0 {
			t.Errorf("eta %g is not a free sphere", eta)
		}
	}
	for _, eta := range []float64{0.0999, 0, -1, math.NaN(), math.Inf(-1)} {
		for _, v := range []float64{c.Force(eta), c.LnArea(eta), c.Equator(eta), c.DForce(eta), c.DLnArea(eta)} {
			if !math.IsNaN(v) {
				t.Errorf("eta %g gives %g", eta, v)
			}
		}
	}
	for _, v := range []float64{c.Force(Lowest), c.LnArea(Lowest), c.Equator(Lowest)} {
		if math.IsNaN(v) {
			t.Error("the curve does not reach its lowest height ratio")
		}
	}
	// Nearest to the sphere that a float64 can be.
	if f := c.Force(math.Nextafter(1, 0)); !(f > 0 && f < 1e-15) {
		t.Errorf("the force vanishes as %g", f)
	}
}

func TestRadiusFromEquator(t *testing.T) {
	c := NewCurve()
	for _, v := range byHeight {
		const rs = 9.37e-6
		// The result follows R/h with a slope of about one.
		if got := c.RadiusFromEquator(2*rs*v.eta, rs*v.equator); !(relative(got, rs) < 1e-10) {
			t.Errorf("eta %g: sphere radius %g, want %g", v.eta, got, rs)
		}
	}
	rng := rand.New(rand.NewPCG(4, 4))
	for range 5000 {
		rs := 1e-6 * math.Exp(4*rng.Float64())
		eta := 0.1001 + 0.8999*rng.Float64()
		s, err := FromHeightRatio(eta)
		if err != nil {
			t.Fatal(err)
		}
		if got := c.RadiusFromEquator(2*rs*eta, rs*s.Equator); !(relative(got, rs) < 1e-10) {
			t.Fatalf("eta %g: sphere radius %g, want %g", eta, got, rs)
		}
	}
	if got := c.RadiusFromEquator(21, 10); got != 10 {
		t.Errorf("a cell that is not squeezed has the radius %g, want that of its equator, 10", got)
	}
	if got := c.RadiusFromEquator(20*(1-1e-12), 10); relative(got, 10) > 1e-11 {
		t.Errorf("hardly squeezed: %g, want 10", got)
	}
	for _, v := range [][2]float64{{0, 1}, {1, 0}, {-1, 1}, {1, -1}, {1e-9, 1}, {math.NaN(), 1}, {1, math.NaN()}, {math.Inf(1), 1}, {1, math.Inf(1)}} {
		if got := c.RadiusFromEquator(v[0], v[1]); !math.IsNaN(got) {
			t.Errorf("height %g and equator %g give %g", v[0], v[1], got)
		}
	}
}

func TestCurveAllocatesNothing(t *testing.T) {
	c := NewCurve()
	var sink float64
	if n := testing.AllocsPerRun(100, func() {
		sink += c.Force(0.6) + c.LnArea(0.6) + c.Equator(0.6) + c.DForce(0.6) + c.Force(1-1e-8) + c.RadiusFromEquator(12e-6, 11e-6)
	}); n != 0 {
		t.Errorf("%v allocations", n)
	}
	if math.IsNaN(sink) {
		t.Error("not a number inside the curve")
	}
}

func BenchmarkNewCurve(b *testing.B) {
	b.ReportAllocs()
	for b.Loop() {
		NewCurve()
	}
}

func BenchmarkCurve(b *testing.B) {
	c := NewCurve()
	var sink float64
	for name, read := range map[string]func(float64) float64{"Force": c.Force, "LnArea": c.LnArea, "Equator": c.Equator, "DForce": c.DForce} {
		b.Run(name, func(b *testing.B) {
			b.ReportAllocs()
			for i := 0; b.Loop(); i++ {
				sink += read(0.5 + 0.2*float64(i&1023)/1024)
			}
		})
	}
	b.Run("RadiusFromEquator", func(b *testing.B) {
		b.ReportAllocs()
		for i := 0; b.Loop(); i++ {
			sink += c.RadiusFromEquator(10+float64(i&1023)/1024, 12)
		}
	})
	_ = sink
}
