package cortex

import (
	"fmt"
	"math"
)

// Sheet is an elastic material in the form of a thin isotropic sheet, in plane
// stress.
type Sheet struct {
	Stiffness float64 // E d, N/m: Young's modulus times thickness
	Poisson   float64 // nu, -1..1 for a sheet
}

// IsotropicLimit is the largest Poisson ratio of a sheet cut from a material
// that is isotropic in all three directions (an incompressible one). A sheet
// that is isotropic in its plane only may reach 1.
const IsotropicLimit = 0.5

// Moduli returns the area bulk and area shear modulus,
//
//	KB = E d/(2(1-nu)),   KS = E d/(2(1+nu)).
//
// At nu = 1 KB is infinite, at nu = -1 KS is.
func (s Sheet) Moduli() (kb, ks float64, err error) {
	if !(s.Stiffness >= 0) || math.IsInf(s.Stiffness, 0) {
		return 0, 0, fmt.Errorf("sheet stiffness %g N/m: expected a finite number of zero or more", s.Stiffness)
	}
	if !(s.Poisson >= -1 && s.Poisson <= 1) {
		return 0, 0, fmt.Errorf("Poisson ratio %g: expected -1..1 for a sheet", s.Poisson)
	}
	return s.Stiffness / (2 * (1 - s.Poisson)), s.Stiffness / (2 * (1 + s.Poisson)), nil
}

// SheetFrom is the inverse of Moduli,
//
//	nu = (KB - KS)/(KB + KS),   E d = 4 KB KS/(KB + KS).
func SheetFrom(kb, ks float64) (Sheet, error) {
	if !(kb >= 0 && ks >= 0 && kb+ks > 0) || math.IsInf(kb+ks, 0) {
		return Sheet{}, fmt.Errorf("area moduli %g and %g N/m: expected finite numbers of zero or more, not both zero", kb, ks)
	}
	return Sheet{Stiffness: 4 * kb * (ks / (kb + ks)), Poisson: (kb - ks) / (kb + ks)}, nil
}

// ratioOf returns KS/KB for a Poisson ratio.
func ratioOf(nu float64) float64 { return (1 - nu) / (1 + nu) }
