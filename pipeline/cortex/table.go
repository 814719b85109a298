package cortex

import (
	"fmt"
	"math"
	"math/cmplx"

	"platen/pipeline/squeeze"
)

// Table is the kernel made fast: at Chebyshev nodes in ln(1-eta) the operators
// are projected on the displacements that occur (a reduced basis of solutions
// over a grid of moduli and pre-tensions), and ln K_eff is interpolated between
// the nodes. Because K_eff is a stationary value, the error of the projection
// enters squared; complex moduli are solved with, not interpolated over.
//
// Build one per process with NewTable (tens of milliseconds) and share it: it
// is immutable and safe for concurrent use.
type Table struct {
	opt   Options
	x     []float64 // nodes, x = ln(1-eta)
	bary  []float64 // barycentric weights
	forms []form
	curve *squeeze.Curve
	size  int // largest form
}

// The heights for which a Table is made. Within them it is good to 5e-4 of
// K_eff (1e-4 mostly; shown in its test) for |KS/KB| up to 99 (6 with stuck
// plates) and pre-tensions above 1e-3 of Y = 4 KB KS/(KB+KS).
const (
	MinTableRatio = 0.25
	MaxTableRatio = 0.97
)

// stiffest is the largest |KS/KB| that the table is good for.
func stiffest(p Plates) float64 {
	if p == Stuck {
		return 6
	}
	return 99
}

// lowestTension is the smallest gamma0/|Y| that the table is good for.
const lowestTension = 1e-3

const (
	// Stuck plates let K_eff vary faster with the height when the sheet
	// resists shear more than stretch.
	frictionlessNodes, stuckNodes = 18, 32
	// Directions of the reduced basis that carry less than this of the
	// strain energy of every solution are dropped; K_eff feels the product.
	basisCutoff = 1e-4
)

// NewTable builds the table for one kind of plates.
func NewTable(opt Options) (*Table, error) {
	t := &Table{opt: opt, curve: squeeze.NewCurve()}
	nodes := frictionlessNodes
	if opt.Plates == Stuck {
		nodes = stuckNodes
	}
	lo, hi := math.Log(1-MaxTableRatio), math.Log(1-MinTableRatio)
	for i := range nodes {
		c := math.Cos(math.Pi * float64(2*i+1) / (2 * float64(nodes)))
		t.x = append(t.x, (hi+lo)/2+(hi-lo)/2*c)
		w := math.Sin(math.Pi * float64(2*i+1) / (2 * float64(nodes)))
		if i%2 == 1 {
			w = -w
		}
		t.bary = append(t.bary, w)
	}
	for _, x := range t.x {
		eta := -math.Expm1(x)
		s, err := At(eta, opt)
		if err != nil {
			return nil, fmt.Errorf("tabulating the sheet mechanics at height ratio %.3f: %w", eta, err)
		}
		f := s.f.reduce()
		t.forms = append(t.forms, f)
		t.size = max(t.size, f.n)
	}
	return t, nil
}

// reduce projects the form on its solutions over a grid of KS/KB and gamma0/KB.
func (f *form) reduce() form {
	n := f.n
	energy := func(x, y []float64) float64 { // symmetric, positive: B + S + G
		var s float64
		for i := range n {
			row := i * n
			for k := range i {
				s += (f.b[row+k] + f.S[row+k] + f.g[row+k]) * (x[i]*y[k] + x[k]*y[i])
			}
			s += (f.b[row+i] + f.S[row+i] + f.g[row+i]) * x[i] * y[i]
		}
		return s
	}
	work := make([]complex128, n*n+n)
	var snaps [][]float64
	for _, ks := range []float64{0.01, 0.1, 0.5, 2, 20} {
		for _, g := range []float64{3e-4, 3e-3, 3e-2, 0.3, 3} {
			f.response(1, complex(ks, 0), complex(g, 0), work, false)
			y := make([]float64, n)
			for i := range y {
				y[i] = real(work[n*n+i])
			}
			norm := 1 / math.Sqrt(energy(y, y))
			for i := range y {
				y[i] *= norm
			}
			snaps = append(snaps, y)
		}
	}
	// Pivoted Gram-Schmidt: take the worst represented solution each time.
	var basis [][]float64
	for len(snaps) > 0 {
		worst, size := 0, 0.0
		for i, y := range snaps {
			if e := energy(y, y); e > size {
				worst, size = i, e
			}
		}
		if size < basisCutoff*basisCutoff {
			break
		}
		b := snaps[worst]
		snaps[worst] = snaps[len(snaps)-1]
		snaps = snaps[:len(snaps)-1]
		for range 2 { // twice is enough against rounding
			for _, o := range basis {
				c := energy(b, o)
				for i := range b {
					b[i] -= c * o[i]
				}
			}
			norm := 1 / math.Sqrt(energy(b, b))
			for i := range b {
				b[i] *= norm
			}
		}
		basis = append(basis, b)
		for _, y := range snaps {
			c := energy(y, b)
			for i := range y {
				y[i] -= c * b[i]
			}
		}
	}
	k := len(basis)
	r := form{n: k, k0: f.k0, factor: f.factor, s00: f.s00, s: make([]float64, k),
		b: make([]float64, k*k), g: make([]float64, k*k), S: make([]float64, k*k)}
	project := func(m, out []float64) {
		mx := make([]float64, n)
		for i, x := range basis {
			clear(mx)
			for a := range n {
				for c := range a {
					mx[a] += m[a*n+c] * x[c]
					mx[c] += m[a*n+c] * x[a]
				}
				mx[a] += m[a*n+a] * x[a]
			}
			for j, y := range basis[:i+1] {
				for a := range n {
					out[i*k+j] += mx[a] * y[a]
				}
			}
		}
	}
	project(f.b, r.b)
	project(f.S, r.S)
	project(f.g, r.g)
	for i, x := range basis {
		for a := range n {
			r.s[i] += x[a] * f.s[a]
		}
	}
	return r
}

// sweep holds ln K_eff over the nodes for one set of moduli, with the
// derivatives of ln K_eff after KB, KS, gamma0 and x.
type sweep struct {
	ln, dKB, dKS, dG []complex128
	work             []complex128
}

func (t *Table) newSweep() *sweep {
	n := len(t.x)
	buf := make([]complex128, 4*n+t.size*t.size+t.size)
	return &sweep{buf[:n:n], buf[n : 2*n : 2*n], buf[2*n : 3*n : 3*n], buf[3*n : 4*n : 4*n], buf[4*n:]}
}

func (t *Table) sweep(s *sweep, kb, ks, g complex128) {
	for i := range t.forms {
		r := t.forms[i].response(kb, ks, g, s.work, true)
		s.ln[i] = cmplx.Log(r.k)
		inv := 1 / r.k
		s.dKB[i], s.dKS[i], s.dG[i] = r.dKB*inv, r.dKS*inv, r.dG*inv
	}
}

// weights fills the interpolation weights and their derivatives after x, so
// that f(x) = sum w f_i and f'(x) = sum dw f_i (barycentric form; Berrut and
// Trefethen, SIAM Review 46, 2004, from memory).
func (t *Table) weights(x float64, w, dw []float64) {
	hit := -1
	var sum, dsum float64
	for i, xi := range t.x {
		d := x - xi
		if math.Abs(d) < 1e-9 {
			hit = i
			break
		}
		w[i] = t.bary[i] / d
		dw[i] = -w[i] / d
		sum += w[i]
		dsum += dw[i]
	}
	if hit >= 0 { // too near a node for the quotient: its own row of the differentiation matrix
		var diag float64
		for i, xi := range t.x {
			w[i] = 0
			if i != hit {
				dw[i] = t.bary[i] / t.bary[hit] / (t.x[hit] - xi)
				diag -= dw[i]
			}
		}
		w[hit], dw[hit] = 1, diag
		return
	}
	for i := range w {
		w[i] /= sum
		dw[i] = dw[i]/sum - w[i]*dsum/sum
	}
}

// Effective is the package function Effective read from the table.
func (t *Table) Effective(eta float64, kb, ks complex128, gamma0 float64) (complex128, error) {
	if err := checkModuli(kb, ks, gamma0); err != nil {
		return 0, err
	}
	if err := checkTableRatio(eta); err != nil {
		return 0, err
	}
	if limit := stiffest(t.opt.Plates); cmplx.Abs(ks) > limit*cmplx.Abs(kb) {
		return 0, fmt.Errorf("area shear modulus %v N/m is over %g times the bulk modulus: use the function Effective", ks, limit)
	}
	if y := cmplx.Abs(4 * kb * ks / (kb + ks)); gamma0 < lowestTension*y*(1-1e-9) {
		return 0, fmt.Errorf("pre-tension %g N/m is below %g of the sheet's stiffness %.3g N/m: use the function Effective", gamma0, lowestTension, y)
	}
	s := t.newSweep()
	w, dw := make([]float64, len(t.x)), make([]float64, len(t.x))
	t.sweep(s, kb, ks, complex(gamma0, 0))
	t.weights(math.Log1p(-eta), w, dw)
	var ln complex128
	for i := range w {
		ln += cscale(s.ln[i], w[i])
	}
	return cmplx.Exp(ln), nil
}

func checkTableRatio(eta float64) error {
	if !(eta >= MinTableRatio && eta <= MaxTableRatio) {
		return fmt.Errorf("height ratio %g is outside %g..%g, the heights from which bulk and shear can be told apart", eta, MinTableRatio, MaxTableRatio)
	}
	return nil
}
