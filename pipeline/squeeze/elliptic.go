package squeeze

import (
	"math"

	"gonum.org/v1/gonum/mathext"
)

// integrals are the complete elliptic integrals that a meridian needs, for the
// parameter m = 1/s^2 = 1 - mc and a^2 = mc/m.
type integrals struct {
	j0 float64 // K/s
	g  float64 // (1 - B/s)/a^2, the departure of J2 from the sphere's
	d  float64 // D = (K - E)/m
	e  float64 // E
}

// complete returns the integrals for m + mc = 1, both more than 0 and both
// given so that neither is rounded near 1, and s = 1/sqrt(m).
//
// For mc of 0.1 and more, B and D come from gonum (T. Fukushima, J. Comput.
// Appl. Math. 282 (2015) 71). Below, g would cancel; there K and (E-1)/mc are
// summed from their expansions about m = 1 (NIST DLMF 19.12.1 and 19.12.2):
//
//	K       = sum c_n^2 mc^n (L - b_n)
//	(E-1)/mc = 1/2 sum c_n^2 (2n+1)/(n+1) mc^n (L - b_n - 1/((2n+1)(2n+2)))
//
// with L = ln(4/sqrt(mc)), c_n = (1/2)_n/n!, b_n = sum over j = 1..n of
// 2/((2j-1)(2j)); (1/2)_n (3/2)_n/((2)_n n!) = c_n^2 (2n+1)/(n+1).
func complete(m, mc, s float64) integrals {
	if mc >= 0.1 {
		b, d := mathext.CompleteB(m), mathext.CompleteD(m)
		return integrals{j0: (b + d) / s, g: (1 - b/s) * m / mc, d: d, e: b + mc*d}
	}
	var k, e1 float64
	l := math.Log(4 / math.Sqrt(mc))
	power, b := 1.0, 0.0 // c_n^2 mc^n and b_n
	for n := 0.0; power > 1e-18; n++ {
		t := 1 / ((2*n + 1) * (2*n + 2))
		k += power * (l - b)
		e1 += power * (2*n + 1) / (n + 1) / 2 * (l - b - t)
		b += 2 * t
		r := (2*n + 1) / (2*n + 2)
		power *= r * r * mc
	}
	j0 := k / s
	e := 1 + mc*e1
	return integrals{
		j0: j0,
		g:  j0 - e1/s - 1/(s+1),
		d:  (k - e) * s * s,
		e:  e,
	}
}
