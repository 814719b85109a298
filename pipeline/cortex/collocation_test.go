package cortex

import (
	"math"
	"testing"

	"gonum.org/v1/gonum/mat"

	"platen/pipeline/squeeze"
)

// collocate is the membrane theory of shells solved in its other form: the
// first-order equilibrium equations for u, w, n1 and beta (package comment) at
// Chebyshev points of psi = a sinh(bt), with pressure and disc strain as extra
// unknowns, and the modulus from the plate force. It shares with the kernel
// neither the variables, nor the energy, nor the discretisation. The second
// result is (A/D^2) Int (e1-e2)^2 dA over both halves of the cell.
func collocate(t testing.TB, eta, kb, ks, g float64, n int) (modulus, shear float64) {
	t.Helper()
	shape, err := squeeze.FromHeightRatio(eta)
	if err != nil {
		t.Fatal(err)
	}
	rc, R := shape.Contact, shape.Equator
	h2 := 2 * R / (R*R - rc*rc)
	a := min(h2*rc, 0.3, math.Pow(g/(4*kb*ks/(kb+ks)+1e-9), 0.25))
	b := math.Asinh(math.Pi / 2 / a)

	// Chebyshev points on 0..1 and their differentiation matrix (Trefethen,
	// Spectral Methods in MATLAB, 2000, ch. 6; from memory). Integrals go by
	// Clenshaw-Curtis weights found from the moments.
	x := make([]float64, n+1)
	for i := range x {
		x[i] = (1 - math.Cos(math.Pi*float64(i)/float64(n))) / 2
	}
	c := func(i int) float64 {
		s := 1 - 2*float64(i%2)
		if i == 0 || i == n {
			s *= 2
		}
		return s
	}
	d := mat.NewDense(n+1, n+1, nil)
	for i := range x {
		var sum float64
		for j := range x {
			if i != j {
				v := c(i) / c(j) / (x[i] - x[j])
				d.Set(i, j, v)
				sum += v
			}
		}
		d.Set(i, i, -sum)
	}
	cheb := mat.NewDense(n+1, n+1, nil)
	moments := mat.NewVecDense(n+1, nil)
	for k := range x {
		for j := range x {
			cheb.Set(k, j, math.Cos(float64(k)*math.Pi*float64(n-j)/float64(n)))
		}
		if k%2 == 0 {
			moments.SetVec(k, 1/(1-float64(k*k)))
		}
	}
	var quadrature mat.VecDense
	if err := quadrature.SolveVec(cheb, moments); err != nil {
		t.Fatal(err)
	}

	// Unknowns: u, w, n1, beta at each point, then p1, c.
	size := 4*(n+1) + 2
	m, rhs := mat.NewDense(size, size, nil), mat.NewVecDense(size, nil)
	at := func(field, j int) int { return field*(n+1) + j }
	const u, w, n1, beta = 0, 1, 2, 3
	p1, disc := size-2, size-1
	add := func(i, j int, v float64) { m.Set(i, j, m.At(i, j)+v) }
	row := 0
	radius, length := make([]float64, n+1), make([]float64, n+1) // r and ds/dt
	type linear struct{ u, n1 float64 }                          // coefficients of a local linear expression
	for j := range x {
		psi := a * math.Sinh(b*x[j])
		sin, cos := math.Sincos(psi)
		root := math.Hypot(sin, h2*rc)
		r := (sin + root) / h2
		ds := r / root * a * b * math.Cosh(b*x[j])
		radius[j], length[j] = r, ds
		k2 := sin / r
		k1 := h2 - k2
		e1 := linear{u: -(kb - ks) / (kb + ks) / r, n1: 1 / (kb + ks)}
		n2 := linear{u: (kb-ks)*e1.u + (kb+ks)/r, n1: (kb - ks) * e1.n1}

		volume := 4*n + 4
		q := quadrature.AtVec(j) * ds
		add(volume, at(u, j), q*(2*r*sin+r*r*sin*e1.u))
		add(volume, at(n1, j), q*r*r*sin*e1.n1)
		add(volume, at(beta, j), q*r*r*cos)

		// Four equations at each point but one of the ends, where a boundary
		// condition stands instead: u, w, n1 at the rim, beta at the equator.
		eq := func(field int, skip int, terms func(i int)) {
			if j == skip {
				return
			}
			for k := range x {
				add(row, at(field, k), d.At(j, k)/ds)
			}
			terms(row)
			row++
		}
		eq(u, 0, func(i int) {
			add(i, at(u, j), -e1.u*cos)
			add(i, at(n1, j), -e1.n1*cos)
			add(i, at(beta, j), sin)
		})
		eq(w, 0, func(i int) {
			add(i, at(u, j), -e1.u*sin)
			add(i, at(n1, j), -e1.n1*sin)
			add(i, at(beta, j), -cos)
		})
		eq(n1, 0, func(i int) {
			add(i, at(u, j), -cos/r*n2.u)
			add(i, at(n1, j), -cos/r*(n2.n1-1))
		})
		eq(beta, n, func(i int) {
			add(i, at(u, j), -(g*k1*e1.u-k2*n2.u+g*sin/(r*r))/g)
			add(i, at(n1, j), -(g*k1*e1.n1-k2*n2.n1-k1)/g)
			add(i, at(beta, j), cos/r)
			add(i, p1, -1/g)
		})
	}
	if row != 4*n {
		t.Fatalf("%d equations, expected %d", row, 4*n)
	}
	add(row, at(u, 0), 1)
	add(row, disc, -rc)
	row++
	add(row, at(w, 0), 1)
	row++
	add(row, at(n1, 0), 1)
	add(row, disc, -2*kb)
	row++
	add(row, at(beta, n), 1)
	row++
	row++ // the volume, filled above
	add(row, at(w, n), 1)
	rhs.SetVec(row, 0.5)

	var y mat.VecDense
	if err := y.SolveVec(m, rhs); err != nil {
		if _, bad := err.(mat.Condition); !bad {
			t.Fatal(err)
		}
	}
	force := math.Pi * (y.AtVec(p1)*rc*rc + 2*h2*g*rc*y.AtVec(at(u, 0)) - 2*g*rc*y.AtVec(at(beta, 0)))
	curve := squeeze.NewCurve()
	dDdh := curve.DForce(eta) / 2 // h = 2 eta Rs
	factor := 4 * math.Pi * shape.Area / (shape.Force * shape.Force)
	for j := range x {
		e2 := y.AtVec(at(u, j)) / radius[j]
		e1 := (y.AtVec(at(n1, j)) - (kb-ks)*e2) / (kb + ks)
		shear += factor * 4 * math.Pi * quadrature.AtVec(j) * length[j] * radius[j] * (e1 - e2) * (e1 - e2)
	}
	return -factor * (force - g*dDdh), shear
}
