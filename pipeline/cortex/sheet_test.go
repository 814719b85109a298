package cortex

import (
	"math"
	"testing"
)

// Thin sheets of E = 1000, d = 0.2: the classical relations of plane stress
// (Landau and Lifshitz, Theory of Elasticity, sections 5 and 13; figures
// computed outside this project). G is the shear modulus of the bulk material,
// so KS must be G d.
func TestSheet(t *testing.T) {
	for _, c := range []struct{ nu, kb, ks, g float64 }{
		{0, 100, 100, 500},
		{0.2, 125, 83.33333333333333, 416.6666666666667},
		{0.3, 142.85714285714286, 76.92307692307692, 384.6153846153846},
		{0.45, 181.8181818181818, 68.96551724137931, 344.82758620689657},
		{IsotropicLimit, 200, 66.66666666666667, 333.3333333333333},
	} {
		kb, ks, err := Sheet{Stiffness: 1000 * 0.2, Poisson: c.nu}.Moduli()
		if err != nil {
			t.Fatal(err)
		}
		near := func(name string, got, want float64) {
			if math.Abs(got-want) > 1e-13*math.Max(1, math.Abs(want)) { // the table has 16 digits
				t.Errorf("nu %g: %s = %.16g, expected %.16g", c.nu, name, got, want)
			}
		}
		near("KB", kb, c.kb)
		near("KS", ks, c.ks)
		near("KS", ks, c.g*0.2)
		s, err := SheetFrom(c.kb, c.ks)
		if err != nil {
			t.Fatal(err)
		}
		near("nu", s.Poisson, c.nu)
		near("E d", s.Stiffness, 200)
		near("KS/KB", ratioOf(c.nu), c.ks/c.kb)
	}
	// The ends: no shear stiffness is nu = 1, no bulk stiffness nu = -1.
	if s, err := SheetFrom(1, 0); err != nil || s.Poisson != 1 || s.Stiffness != 0 {
		t.Errorf("no shear: %+v, %v", s, err)
	}
	if s, err := SheetFrom(0, 1); err != nil || s.Poisson != -1 || s.Stiffness != 0 {
		t.Errorf("no bulk: %+v, %v", s, err)
	}
	for _, s := range []Sheet{{-1, 0}, {1, 1.1}, {1, -1.1}, {math.NaN(), 0}, {1, math.NaN()}, {math.Inf(1), 0}} {
		if _, _, err := s.Moduli(); err == nil {
			t.Errorf("%+v: accepted", s)
		}
	}
	for _, c := range [][2]float64{{0, 0}, {-1, 2}, {2, -1}, {math.NaN(), 1}, {1, math.Inf(1)}} {
		if _, err := SheetFrom(c[0], c[1]); err == nil {
			t.Errorf("%v: accepted", c)
		}
	}
}
