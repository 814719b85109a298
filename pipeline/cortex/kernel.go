package cortex

import (
	"fmt"
	"math"
	"math/cmplx"
)

// The height ratios for which the mechanics is computed.
const (
	MinRatio = 0.02
	MaxRatio = 0.99
)

// Plates says how the cortex meets the plates.
type Plates int

// Frictionless contact lets the sheet slide over the plate; Stuck holds every
// point that has touched it.
const (
	Frictionless Plates = iota
	Stuck
)

// Options of the kernel. The zero value is right for most uses.
type Options struct {
	Plates Plates
	Modes  int // polynomial modes per displacement field, 8..120; 0 means 32
}

const defaultModes = 32

// Section holds the operators of a cell squeezed to one height ratio. They do
// not depend on the moduli, so one Section serves any number of them. It is
// immutable and safe for concurrent use.
type Section struct {
	eta float64
	f   form
}

// form is the modulus over a space of displacements y, added to that of a sheet
// without shear stiffness:
//
//	KB k0 + factor [KS (s00 + 2 s.y + y.S y) + KB y.B y + gamma0 y.G y]
//
// K_eff is its stationary value.
type form struct {
	n       int
	k0      float64   // K_eff/KB without shear stiffness
	factor  float64   // 4 pi A/D^2
	s00     float64   // shear energy of the reference displacement
	s       []float64 // its coupling to the space
	b, g, S []float64 // n x n, lower triangles used: area strain, pre-tension, shear strain
}

// At prepares the operators for height ratio eta.
func At(eta float64, opt Options) (*Section, error) {
	return at(eta, opt, defaultLayer)
}

// defaultLayer is the length in psi over which the grid is refined at the rim.
const defaultLayer = 0.3

func at(eta float64, opt Options, layer float64) (*Section, error) {
	n := opt.Modes
	if n == 0 {
		n = defaultModes
	}
	if n < 8 || n > 120 {
		return nil, fmt.Errorf("modes = %d: expected 8..120, or 0 for the default", opt.Modes)
	}
	if opt.Plates != Frictionless && opt.Plates != Stuck {
		return nil, fmt.Errorf("plates = %d: expected Frictionless or Stuck", opt.Plates)
	}
	m, err := newMeridian(eta, layer, n+24)
	if err != nil {
		return nil, err
	}
	return &Section{eta: eta, f: assemble(m, n, opt.Plates)}, nil
}

// modes returns the Legendre polynomials P_k(2t-1), k < n, and their integrals
// from 0 to t, at the points t; row k belongs to polynomial k.
func modes(n int, t []float64) (p, ip [][]float64) {
	p, ip = make([][]float64, n+1), make([][]float64, n)
	for k := range p {
		p[k] = make([]float64, len(t))
		for j, tj := range t {
			x := 2*tj - 1
			switch k {
			case 0:
				p[k][j] = 1
			case 1:
				p[k][j] = x
			default:
				p[k][j] = (float64(2*k-1)*x*p[k-1][j] - float64(k-1)*p[k-2][j]) / float64(k)
			}
		}
	}
	for k := range ip {
		ip[k] = make([]float64, len(t))
		for j, tj := range t {
			if k == 0 {
				ip[k][j] = tj
			} else { // (2k+1) Int P_k dx = P_k+1 - P_k-1, and dx = 2 dt
				ip[k][j] = (p[k+1][j] - p[k-1][j]) / float64(2*(2*k+1))
			}
		}
	}
	return p[:n], ip
}

// assemble builds the form over n modes for the normal displacement and n for
// the tangential one (one less each where a constraint takes it).
func assemble(m *meridian, n int, plates Plates) form {
	np := len(m.t)
	p, ip := modes(n, m.t)
	dot := func(a, b []float64) float64 {
		var s float64
		for j, w := range m.weight {
			s += w * a[j] * b[j]
		}
		return s
	}
	row := func(f func(j int) float64) []float64 {
		v := make([]float64, np)
		for j := range v {
			v[j] = f(j)
		}
		return v
	}
	one := row(func(int) float64 { return 1 })

	// Normal modes vanish at the rim; mode 0 is spent on keeping the volume.
	vol := make([]float64, n)
	for k := range vol {
		vol[k] = dot(one, ip[k])
	}
	w, dw := make([][]float64, n-1), make([][]float64, n-1)
	for k := 1; k < n; k++ {
		c := vol[k] / vol[0]
		w[k-1] = row(func(j int) float64 { return ip[k][j] - c*ip[0][j] })
		dw[k-1] = row(func(j int) float64 { return (p[k][j] - c*p[0][j]) / m.metric[j] })
	}
	bend := row(func(j int) float64 { return m.kappa1[j]*m.kappa1[j] + m.kappa2[j]*m.kappa2[j] })
	second := func(wi, dwi, wj, dwj []float64) float64 {
		var s float64
		for j, q := range m.weight {
			s += q * (dwi[j]*dwj[j] - bend[j]*wi[j]*wj[j])
		}
		return s
	}

	// Reference displacement per unit dh, seen from the mid-plane: the plate
	// moves away by 1/2, the volume stays, the area is stationary.
	tilt := (-m.rc*m.rc/4 - dot(one, one)/2) / vol[0]
	w0 := row(func(j int) float64 { return 0.5 + tilt*ip[0][j] })
	dw0 := row(func(j int) float64 { return tilt / m.metric[j] })
	a := make([]complex128, (n-1)*(n-1))
	rhs := make([]complex128, n-1)
	gw := make([]float64, (n-1)*(n-1))
	for i := range w {
		rhs[i] = complex(-second(w[i], dw[i], w0, dw0), 0)
		for k := 0; k <= i; k++ {
			gw[i*(n-1)+k] = second(w[i], dw[i], w[k], dw[k])
			a[i*(n-1)+k] = complex(gw[i*(n-1)+k], 0)
		}
	}
	solveSymmetric(n-1, a, rhs)
	for i, y := range rhs {
		for j := range w0 {
			w0[j] += real(y) * w[i][j]
		}
	}
	// Its area strain tau is uniform over what may stretch, and r v follows
	// from (r v)' = r (tau - 2 H w) with v = 0 at the equator.
	k0 := 1.0
	if plates == Stuck {
		k0 = m.area / (m.area - 2*m.contact)
	}
	tau := -m.force / m.area * k0
	rv := make([]float64, np)
	for k := range n {
		var c float64
		for j := range m.t {
			c += m.gauss[j] * p[k][j] * m.r[j] * (tau - m.h2*w0[j]) * m.metric[j]
		}
		c *= float64(2*k + 1)
		for j := range rv {
			end := 0.0
			if k == 0 {
				end = 1
			}
			rv[j] -= c * (end - ip[k][j])
		}
	}
	d0 := row(func(j int) float64 { // e1 - e2
		return tau - 2*(rv[j]/(m.r[j]*m.r[j])*m.cos[j]+m.kappa2[j]*w0[j])
	})

	// Strains of the modes: normal first, then tangential (zero at the equator).
	var sum, diff [][]float64
	var rim []float64
	for k := range w {
		sum = append(sum, row(func(j int) float64 { return m.h2 * w[k][j] }))
		diff = append(diff, row(func(j int) float64 { return (m.kappa1[j] - m.kappa2[j]) * w[k][j] }))
		rim = append(rim, 0)
	}
	for k := range n {
		end := 0.0
		if k == 0 {
			if plates == Stuck {
				continue
			}
			end = 1
		}
		e1 := row(func(j int) float64 { return -p[k][j] / m.metric[j] })
		e2 := row(func(j int) float64 { return (end - ip[k][j]) * m.cos[j] / m.r[j] })
		sum = append(sum, row(func(j int) float64 { return e1[j] + e2[j] }))
		diff = append(diff, row(func(j int) float64 { return e1[j] - e2[j] }))
		rim = append(rim, end)
	}
	size := len(sum)
	f := form{
		n: size, k0: k0, factor: 4 * math.Pi * m.area / (m.force * m.force),
		s00: dot(d0, d0), s: make([]float64, size),
		b: make([]float64, size*size), g: make([]float64, size*size), S: make([]float64, size*size),
	}
	for i := range size {
		f.s[i] = dot(diff[i], d0)
		for k := 0; k <= i; k++ {
			// A disc of radius rc stretched by v/rc has area strain 2 v/rc.
			f.b[i*size+k] = dot(sum[i], sum[k]) + 2*rim[i]*rim[k]
			f.S[i*size+k] = dot(diff[i], diff[k])
		}
	}
	for i := range n - 1 {
		for k := 0; k <= i; k++ {
			f.g[i*size+k] = gw[i*(n-1)+k]
		}
	}
	return f
}

// solveSymmetric overwrites x with the solution of A x = x, A complex
// symmetric with positive definite real part, lower triangle given row by row
// and overwritten with its factors L D L^T. No pivoting is needed for such
// matrices (Higham, Factorizing complex symmetric matrices with positive
// definite real and imaginary parts, Math. Comp. 67, 1998; from memory).
func solveSymmetric(n int, a, x []complex128) {
	for j := range n {
		aj := a[j*n : j*n+j+1]
		// aj holds L(j,k) D(k) for k < j after the loop over k.
		for k := range j {
			ak := a[k*n : k*n+k+1]
			s := aj[k]
			for l := range k {
				s -= aj[l] * ak[l]
			}
			aj[k] = s
		}
		d := aj[j]
		for k := range j {
			l := aj[k] * a[k*n+k] // the diagonal holds 1/D
			d -= l * aj[k]
			aj[k] = l
		}
		aj[j] = 1 / d
		for k := range j {
			x[j] -= aj[k] * x[k]
		}
	}
	for j := n - 1; j >= 0; j-- {
		s := x[j] * a[j*n+j]
		for k := j + 1; k < n; k++ {
			s -= a[k*n+j] * x[k]
		}
		x[j] = s
	}
}

// response is an effective modulus and its derivatives, all analytic.
type response struct {
	k, dKB, dKS, dG complex128
}

// response solves for the stationary value; work holds n*n+n entries.
func (f *form) response(kb, ks, g complex128, work []complex128, slopes bool) response {
	n := f.n
	a, y := work[:n*n], work[n*n:n*n+n]
	for i := range n {
		y[i] = complex(f.s[i], 0)
		for k := i * n; k <= i*n+i; k++ {
			a[k] = cscale(kb, f.b[k]) + cscale(ks, f.S[k]) + cscale(g, f.g[k])
		}
	}
	solveSymmetric(n, a, y)
	var sy complex128
	for i := range n {
		sy += cscale(y[i], f.s[i])
	}
	fac := complex(f.factor, 0)
	r := response{k: complex(f.k0, 0)*kb + fac*ks*(complex(f.s00, 0)-ks*sy)}
	if !slopes {
		return r
	}
	var yb, yg, ys complex128
	for i := range n {
		var b, g, s complex128
		row := i * n
		for k := range i {
			b += cscale(y[k], f.b[row+k])
			g += cscale(y[k], f.g[row+k])
			s += cscale(y[k], f.S[row+k])
		}
		d := y[i] / 2
		yb += 2 * y[i] * (b + cscale(d, f.b[row+i]))
		yg += 2 * y[i] * (g + cscale(d, f.g[row+i]))
		ys += 2 * y[i] * (s + cscale(d, f.S[row+i]))
	}
	r.dKB = complex(f.k0, 0) + fac*ks*ks*yb
	r.dKS = fac * (complex(f.s00, 0) - 2*ks*sy + ks*ks*ys)
	r.dG = fac * ks * ks * yg
	return r
}

// cscale is z times a real number, without the multiplications by zero that
// complex(x, 0) would cost.
func cscale(z complex128, x float64) complex128 {
	return complex(real(z)*x, imag(z)*x)
}

// Effective returns the effective area modulus of a cell squeezed to height
// ratio eta, with area bulk modulus kb, area shear modulus ks and pre-tension
// gamma0, all in N/m (or all in one other unit). See the package comment for
// the equations.
//
// The real parts of kb and ks must be positive (ks may be zero); gamma0 must
// be positive. The relative error is below 1e-8; with gamma0 below 1e-6 |Y|,
// Y = 4 KB KS/(KB+KS), the layer at the rim is too thin and an error says so.
func Effective(eta float64, kb, ks complex128, gamma0 float64, opt Options) (complex128, error) {
	if err := checkModuli(kb, ks, gamma0); err != nil {
		return 0, err
	}
	s, err := at(eta, opt, layerOf(kb, ks, gamma0))
	if err != nil {
		return 0, err
	}
	return s.Effective(kb, ks, gamma0)
}

// layerOf is the grid's refinement length for the layer at the rim, whose
// width is about (gamma0/Y)^(1/4).
func layerOf(kb, ks complex128, gamma0 float64) float64 {
	y := cmplx.Abs(4 * kb * ks / (kb + ks))
	if y == 0 {
		return defaultLayer
	}
	return min(defaultLayer, math.Pow(gamma0/y, 0.25))
}

func checkModuli(kb, ks complex128, gamma0 float64) error {
	for _, z := range []complex128{kb, ks} {
		if cmplx.IsNaN(z) || cmplx.IsInf(z) {
			return fmt.Errorf("modulus %v is not finite", z)
		}
	}
	if math.IsInf(gamma0, 0) {
		return fmt.Errorf("pre-tension %g N/m is not finite", gamma0)
	}
	switch {
	case !(real(kb) > 0):
		return fmt.Errorf("area bulk modulus %v N/m: expected a positive real part", kb)
	case !(real(ks) >= 0):
		return fmt.Errorf("area shear modulus %v N/m: expected a real part of zero or more", ks)
	case !(gamma0 > 0):
		return fmt.Errorf("pre-tension %g N/m: expected a positive number (the sheet mechanics is singular without)", gamma0)
	}
	if y := cmplx.Abs(4 * kb * ks / (kb + ks)); gamma0 < 1e-6*y {
		return fmt.Errorf("pre-tension %g N/m is below 1e-6 of the sheet's stiffness %.3g N/m: the layer at the rim cannot be resolved", gamma0, y)
	}
	return nil
}

// Effective is the package function Effective at the section's height.
func (s *Section) Effective(kb, ks complex128, gamma0 float64) (complex128, error) {
	if err := checkModuli(kb, ks, gamma0); err != nil {
		return 0, err
	}
	work := make([]complex128, s.f.n*s.f.n+s.f.n)
	return s.f.response(kb, ks, complex(gamma0, 0), work, false).k, nil
}
