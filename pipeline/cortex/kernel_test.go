package cortex

import (
	"math"
	"math/cmplx"
	"strings"
	"testing"

	"platen/pipeline/squeeze"
)

var (
	someRatios   = []float64{0.1, 0.2, 0.35, 0.5, 0.65, 0.8, 0.9, 0.95, 0.99}
	someTensions = []float64{1e-4, 1e-3, 0.02, 0.1, 0.5, 5}
)

func effective(t testing.TB, eta, ks, g float64, opt Options) float64 {
	t.Helper()
	k, err := Effective(eta, 1, complex(ks, 0), g, opt)
	if err != nil {
		t.Fatal(err)
	}
	if imag(k) != 0 {
		t.Fatalf("real moduli gave %v", k)
	}
	return real(k)
}

// The quadrature must give back the area, the height and the volume of the
// shape that package squeeze solves by elliptic integrals.
func TestMeridian(t *testing.T) {
	for _, eta := range someRatios {
		m, err := newMeridian(eta, defaultLayer, defaultModes+24)
		if err != nil {
			t.Fatal(err)
		}
		var h, v float64
		a := 2 * m.contact
		for j, w := range m.weight {
			h += 2 * m.gauss[j] * m.sin[j] * m.metric[j]
			v += 2 * math.Pi * w * m.r[j] * m.sin[j]
			a += 4 * math.Pi * w
		}
		for _, c := range []struct {
			name      string
			got, want float64
		}{{"height", h, 2 * eta}, {"volume", v, 4 * math.Pi / 3}, {"area", a, m.area}, {"force", math.Pi * m.rc * m.rc * m.h2, m.force}} {
			// 64 Gauss points on an analytic integrand: rounding is left.
			if e := math.Abs(c.got/c.want - 1); e > 1e-11 {
				t.Errorf("eta %g: %s is off by %.1e", eta, c.name, e)
			}
		}
	}
}

// A sheet without shear stiffness is a soap film with a spring: its shape is
// that of uniform tension and K_eff = KB, whatever the height and pre-tension
// (membrane theory; exact). The kernel builds on that displacement, so the
// other method, which does not, is held to it as well; and the form's own
// reference displacement is tested for the area strain it must have.
func TestNoShearStiffness(t *testing.T) {
	var worst, worstODE float64
	for _, eta := range someRatios {
		for _, g := range someTensions {
			worst = max(worst, math.Abs(effective(t, eta, 0, g, Options{})-1))
			if eta >= 0.2 && eta <= 0.95 {
				k, _ := collocate(t, eta, 1, 0, g, 40)
				worstODE = max(worstODE, math.Abs(k-1))
			}
		}
	}
	t.Logf("|K_eff/KB - 1|: kernel %.1e, collocation %.1e", worst, worstODE)
	if worst > 1e-14 {
		t.Errorf("kernel: %.1e", worst)
	}
	// The collocation loses digits by subtracting gamma0 D' (1e-8 at 5 KB).
	if worstODE > 1e-7 {
		t.Errorf("collocation: %.1e", worstODE)
	}
}

// TestAgainstCollocation compares two discretisations of two forms of the same
// mechanics over the whole range of use.
func TestAgainstCollocation(t *testing.T) {
	var worst float64
	for _, eta := range []float64{0.2, 0.5, 0.7, 0.9, 0.95} {
		for _, g := range []float64{1e-3, 0.02, 0.1, 0.5, 5} {
			for _, ks := range []float64{0.05, 1. / 3, 2} {
				k := effective(t, eta, ks, g, Options{})
				ode, _ := collocate(t, eta, 1, ks, g, 40)
				e := math.Abs(ode/k - 1)
				worst = max(worst, e)
				if e > 1e-8 { // rounding of the collocation, see above
					t.Errorf("eta %g, KS %g, gamma0 %g: %.1e apart", eta, ks, g, e)
				}
			}
		}
	}
	t.Logf("largest difference %.1e", worst)
}

// Handy figures that a user may compare a program of his own with: computed
// by a nonlinear energy method outside this project, to the digits given.
func TestKnownValues(t *testing.T) {
	for _, c := range []struct{ eta, ks, g, want, tol float64 }{
		{0.9, 1. / 3, 0.02, 11, 0.5},
		{0.9, 1. / 3, 0.5, 24, 0.5},
	} {
		if got := effective(t, c.eta, c.ks, c.g, Options{}); math.Abs(got-c.want) > c.tol {
			t.Errorf("eta %g, gamma0 %g: %.2f KB, expected about %g", c.eta, c.g, got, c.want)
		}
	}
}

// K_eff is the minimum of functions linear in KS and in gamma0, so it rises and
// is concave in both, and never falls below KB.
func TestMonotoneAndConcave(t *testing.T) {
	check := func(name string, eta float64, at func(x float64) float64) {
		x := []float64{0.02, 0.05, 0.1, 0.2, 0.4, 0.8, 1.6, 3.2}
		last, slope := at(0.01), math.Inf(1)
		for i, xi := range x {
			before := 0.01
			if i > 0 {
				before = x[i-1]
			}
			k := at(xi)
			s := (k - last) / (xi - before)
			// A slope that underflows the rounding of K says nothing.
			if k < 1 || s < -1e-12 || s > slope+1e-12*k {
				t.Errorf("eta %g, %s %g: K %.12g, slope %.6g after %.6g", eta, name, xi, k, s, slope)
			}
			last, slope = k, s
		}
	}
	for _, eta := range someRatios {
		for _, other := range []float64{0.05, 0.5, 2} {
			check("KS", eta, func(x float64) float64 { return effective(t, eta, x, other, Options{}) })
			check("gamma0", eta, func(x float64) float64 { return effective(t, eta, other, x, Options{}) })
		}
	}
}

// Without pre-tension nothing holds the shape against wrinkle-free shear and
// K_eff tends to KB as (gamma0/Y)^(3/4): boundary-layer analysis at the rim.
func TestVanishingTension(t *testing.T) {
	for _, eta := range []float64{0.4, 0.6, 0.8} {
		k := func(g float64) float64 { return effective(t, eta, 1, g, Options{Modes: 60}) - 1 }
		y := 4 * 1 * 1 / 2.
		slope := math.Log(k(4e-6*y)/k(1.1e-6*y)) / math.Log(4e-6/1.1e-6)
		t.Logf("eta %g: exponent %.4f", eta, slope)
		// The next term is smaller by (gamma0/Y)^(1/4), 4 % here.
		if math.Abs(slope-0.75) > 0.03 {
			t.Errorf("eta %g: exponent %.4f, expected 3/4", eta, slope)
		}
	}
}

// A very flat cell is a disc between plates with a thin rim: K_eff tends to
// KB + 6.68 [KB KS/(KB+KS)] eta^(9/2) whatever the pre-tension (asymptote found
// outside this project, three digits).
func TestFlatCell(t *testing.T) {
	for _, g := range []float64{0.05, 0.5} {
		for _, ks := range []float64{0.3, 2} {
			c := func(eta float64) float64 {
				return (effective(t, eta, ks, g, Options{}) - 1) / (ks / (1 + ks)) / math.Pow(eta, 4.5)
			}
			// A parabola through three heights, read at eta = 0.
			limit := 6*c(0.02) - 8*c(0.03) + 3*c(0.04)
			t.Logf("KS %g, gamma0 %g: %.4f at 0.02, %.4f at 0.04, limit %.4f", ks, g, c(0.02), c(0.04), limit)
			if math.Abs(limit-6.68) > 0.02 { // K_eff - KB is 1e-8 here and keeps 8 digits
				t.Errorf("KS %g, gamma0 %g: constant %.4f, expected 6.68", ks, g, limit)
			}
		}
	}
}

// Near the sphere K_eff grows about as (1-eta)^-2: the area hardly changes
// there, the shape still must.
func TestNearSphereGrowth(t *testing.T) {
	a, b := effective(t, 0.96, 1./3, 0.1, Options{}), effective(t, 0.99, 1./3, 0.1, Options{})
	p := math.Log(b/a) / math.Log(4)
	t.Logf("exponent %.3f", p)
	if p < 1.6 || p > 2.2 { // logarithms of the contact size spoil the power
		t.Errorf("grows as (1-eta)^-%.2f, expected about 2", p)
	}
}

// Virtual work: dK_eff/dKS = (A/D^2) Int (e1-e2)^2 dA. The left side is a
// difference of the modulus, the right side comes from the strain field of the
// other method. The kernel's own derivatives are held to differences too, and
// to Euler's relation for a function homogeneous of degree one.
func TestVirtualWork(t *testing.T) {
	for _, eta := range []float64{0.3, 0.5, 0.7, 0.9} {
		for _, g := range []float64{0.02, 0.1, 0.5} {
			const ks, d = 0.4, 1e-3
			slope := (effective(t, eta, ks+d, g, Options{}) - effective(t, eta, ks-d, g, Options{})) / (2 * d)
			_, shear := collocate(t, eta, 1, ks, g, 40)
			// The difference is good to d^2/(6 ks^2), about 1e-6.
			if math.Abs(shear/slope-1) > 1e-5 {
				t.Errorf("eta %g, gamma0 %g: (A/D^2) Int (e1-e2)^2 dA = %.9g, dK/dKS = %.9g", eta, g, shear, slope)
			}
		}
	}
	for _, plates := range []Plates{Frictionless, Stuck} {
		for _, eta := range []float64{0.2, 0.5, 0.8, 0.9, 0.97} {
			s, err := At(eta, Options{Plates: plates})
			if err != nil {
				t.Fatal(err)
			}
			kb, ks, g := 1.3+0.4i, 0.4+0.3i, 0.12+0i
			work := make([]complex128, s.f.n*s.f.n+s.f.n)
			r := s.f.response(kb, ks, g, work, true)
			difference := func(a, b, c complex128) complex128 {
				const d = 1e-4
				up := s.f.response(kb+d*a, ks+d*b, g+d*c, work, false).k
				dn := s.f.response(kb-d*a, ks-d*b, g-d*c, work, false).k
				return (up - dn) / (2 * d)
			}
			for _, c := range []struct {
				name      string
				got, want complex128
			}{
				{"KB", r.dKB, difference(1, 0, 0)}, {"KS", r.dKS, difference(0, 1, 0)}, {"gamma0", r.dG, difference(0, 0, 1)},
				{"Euler", kb*r.dKB + ks*r.dKS + g*r.dG, r.k},
			} {
				// The difference is good to d^2 of the curvature, about 1e-7.
				if cmplx.Abs(c.got-c.want) > 1e-6*(cmplx.Abs(c.want)+1e-3) {
					t.Errorf("eta %g, %s: %v, expected %v", eta, c.name, c.got, c.want)
				}
			}
		}
	}
}

// Stuck plates without shear stiffness: only A - 2 A_con may stretch, so
// K_eff = KB A/(A - 2 A_con) exactly; and sticking can only stiffen.
func TestStuckPlates(t *testing.T) {
	for _, eta := range someRatios {
		shape, err := squeeze.FromHeightRatio(eta)
		if err != nil {
			t.Fatal(err)
		}
		a, con := 4*math.Pi*shape.Area, math.Pi*shape.Contact*shape.Contact
		for _, g := range someTensions {
			got, want := effective(t, eta, 0, g, Options{Plates: Stuck}), a/(a-2*con)
			if math.Abs(got/want-1) > 1e-12 {
				t.Errorf("eta %g, gamma0 %g: %.15g, expected %.15g", eta, g, got, want)
			}
			free, stuck := effective(t, eta, 0.4, g, Options{}), effective(t, eta, 0.4, g, Options{Plates: Stuck})
			if !(stuck > free) {
				t.Errorf("eta %g, gamma0 %g: stuck %.6g, frictionless %.6g", eta, g, stuck, free)
			}
		}
	}
}

// TestConvergence prints the error against the number of modes: it falls
// geometrically (a spectral method), so each step down the table must gain at
// least a factor 10 until rounding.
func TestConvergence(t *testing.T) {
	counts := []int{8, 12, 16, 24, 32}
	t.Logf("relative error with %v modes", counts)
	for _, eta := range []float64{0.02, 0.2, 0.5, 0.9, 0.99} {
		for _, g := range []float64{1.1e-6, 1e-4, 1e-2, 0.5} {
			ref := effective(t, eta, 1./3, g, Options{Modes: 80})
			var errs []float64
			for _, n := range counts {
				errs = append(errs, math.Abs(effective(t, eta, 1./3, g, Options{Modes: n})/ref-1))
			}
			t.Logf("eta %4.2f gamma0 %6g: %8.1e", eta, g, errs)
			for i := 1; i < len(errs); i++ {
				if errs[i] > 1e-12 && errs[i] > errs[i-1]/10 {
					t.Errorf("eta %g, gamma0 %g: %d modes leave %.1e after %.1e", eta, g, counts[i], errs[i], errs[i-1])
				}
			}
			if last := errs[len(errs)-1]; last > 1e-8 {
				t.Errorf("eta %g, gamma0 %g: default modes leave %.1e", eta, g, last)
			}
		}
	}
}

// thiele is the continued-fraction interpolant through (x, y), evaluated at z
// (Abramowitz and Stegun 25.2.50; from memory).
func thiele(x, y []float64, z complex128) complex128 {
	n := len(x)
	c := append([]float64(nil), y...)
	for k := 1; k < n; k++ {
		for i := n - 1; i >= k; i-- {
			c[i] = (x[i] - x[k-1]) / (c[i] - c[k-1])
		}
	}
	v := complex(c[n-1], 0)
	for k := n - 2; k >= 0; k-- {
		v = complex(c[k], 0) + (z-complex(x[k], 0))/v
	}
	return v
}

// K_eff is an analytic function of the moduli. Continued from real values of
// KS, solved by the other method, it must meet the complex kernel; and the
// kernel must satisfy the Cauchy-Riemann equations.
func TestComplexModuli(t *testing.T) {
	for _, eta := range []float64{0.5, 0.7, 0.9} {
		const g = 0.1
		var x, y []float64
		for i := range 7 {
			ks := 0.15 * math.Pow(1.6, float64(i))
			k, _ := collocate(t, eta, 1, ks, g, 32)
			x, y = append(x, ks), append(y, k)
		}
		for _, z := range []complex128{cmplx.Rect(0.5, 0.4), cmplx.Rect(0.7, -0.6), 1 + 0.5i} {
			k, err := Effective(eta, 1, z, g, Options{})
			if err != nil {
				t.Fatal(err)
			}
			c := thiele(x, y, z)
			t.Logf("eta %g, KS %.3f: kernel %.8f, continued %.8f", eta, z, k, c)
			// Seven points continue the function to some 1e-6.
			if cmplx.Abs(c/k-1) > 3e-5 {
				t.Errorf("eta %g, KS %v: %v, continued from the real line %v", eta, z, k, c)
			}
			// Complex KB too: by homogeneity K(KB, KS, g) = KB K(1, KS/KB, g/KB),
			// and a common phase of all three is a common phase of K.
			const d = 1e-4
			at := func(dz complex128) complex128 {
				v, err := Effective(eta, 1+0.3i+dz, z, g, Options{})
				if err != nil {
					t.Fatal(err)
				}
				return v
			}
			along, across := (at(d)-at(-d))/(2*d), (at(d*1i)-at(-d*1i))/(2*d*1i)
			if cmplx.Abs(along-across) > 1e-6*cmplx.Abs(along) {
				t.Errorf("eta %g, KS %v: derivative after KB is %v along the real and %v along the imaginary axis", eta, z, along, across)
			}
		}
	}
}

func TestTable(t *testing.T) {
	for _, plates := range []Plates{Frictionless, Stuck} {
		opt := Options{Plates: plates}
		table, err := NewTable(opt)
		if err != nil {
			t.Fatal(err)
		}
		var worst, low float64
		for _, phase := range []float64{0, 0.5, -0.8} {
			for _, ks := range []float64{0.005, 0.05, 1. / 3, 2, 5, 90} {
				if ks > stiffest(plates) {
					continue
				}
				for _, g := range []float64{5e-3, 0.01, 0.1, 1, 10} {
					z := cmplx.Rect(ks, phase)
					for eta := MinTableRatio; eta <= MaxTableRatio; eta += 0.0399 {
						a, err := table.Effective(eta, 1, z, g)
						if err != nil {
							t.Fatal(err)
						}
						b, err := Effective(eta, 1, z, g, opt)
						if err != nil {
							t.Fatal(err)
						}
						e := cmplx.Abs(a/b - 1)
						if g < 1e-2 && ks > 1 {
							low = max(low, e)
						} else {
							worst = max(worst, e)
						}
					}
				}
			}
		}
		t.Logf("plates %d: largest relative error %.1e; %.1e for stiff sheets of low pre-tension", plates, worst, low)
		// Sixty times below the 3 % noise of a good measurement.
		if worst > 5e-4 || low > 5e-4 {
			t.Errorf("plates %d: table is off by %.1e, %.1e at low pre-tension", plates, worst, low)
		}
	}
}

// The table must refuse what it is not good for rather than answer.
func TestTableLimits(t *testing.T) {
	table, err := NewTable(Options{Plates: Stuck})
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		eta, ks, g float64
		want       string
	}{
		{0.2, 1, 1, "height ratio 0.2"},
		{0.98, 1, 1, "height ratio 0.98"},
		{0.5, 7, 1, "shear modulus"},
		{0.5, 1, 1e-4, "pre-tension"},
	} {
		if _, err := table.Effective(c.eta, 1, complex(c.ks, 0), c.g); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%+v: error %v", c, err)
		}
	}
}

func TestRefusedInput(t *testing.T) {
	table, err := NewTable(Options{})
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		name   string
		eta    float64
		kb, ks complex128
		g      float64
		opt    Options
		want   string
	}{
		{"too flat", 0.01, 1, 1, 1, Options{}, "height ratio 0.01"},
		{"not squeezed", 1, 1, 1, 1, Options{}, "height ratio 1"},
		{"NaN height", math.NaN(), 1, 1, 1, Options{}, "height ratio NaN"},
		{"no bulk", 0.5, 0, 1, 1, Options{}, "area bulk modulus"},
		{"negative shear", 0.5, 1, -1, 1, Options{}, "area shear modulus"},
		{"infinite shear", 0.5, 1, cmplx.Inf(), 1, Options{}, "not finite"},
		{"NaN bulk", 0.5, cmplx.NaN(), 1, 1, Options{}, "not finite"},
		{"no tension", 0.5, 1, 1, 0, Options{}, "pre-tension"},
		{"NaN tension", 0.5, 1, 1, math.NaN(), Options{}, "pre-tension"},
		{"thin layer", 0.5, 1, 1, 1e-7, Options{}, "layer at the rim"},
		{"modes", 0.5, 1, 1, 1, Options{Modes: 4}, "modes = 4"},
		{"plates", 0.5, 1, 1, 1, Options{Plates: 7}, "plates = 7"},
	} {
		if _, err := Effective(c.eta, c.kb, c.ks, c.g, c.opt); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: error %v, expected one with %q", c.name, err, c.want)
		}
		if c.opt == (Options{}) {
			if _, err := table.Effective(c.eta, c.kb, c.ks, c.g); err == nil || !strings.Contains(err.Error(), c.want) {
				t.Errorf("%s: table error %v, expected one with %q", c.name, err, c.want)
			}
		}
	}
}

func BenchmarkEffective(b *testing.B) {
	b.ReportAllocs()
	for b.Loop() {
		if _, err := Effective(0.7, 1+0.2i, 0.3+0.1i, 0.1, Options{}); err != nil {
			b.Fatal(err)
		}
	}
}

func BenchmarkNewTable(b *testing.B) {
	b.ReportAllocs()
	for b.Loop() {
		if _, err := NewTable(Options{}); err != nil {
			b.Fatal(err)
		}
	}
}

func BenchmarkSweep(b *testing.B) {
	table, err := NewTable(Options{})
	if err != nil {
		b.Fatal(err)
	}
	s := table.newSweep()
	b.ReportAllocs()
	for b.Loop() {
		table.sweep(s, 1+0.2i, 0.3+0.1i, 0.1)
	}
}
