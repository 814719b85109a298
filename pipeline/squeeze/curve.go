package squeeze

import "math"

// Lowest is the lowest height ratio that a Curve knows: a cell of 10 um radius
// squeezed to 2 um, flatter than runs go (common practice, no source).
const Lowest = 0.1

// The knots of a Curve are uniform in a binary logarithm of e = 1 - eta: each
// octave of e, from 2^-octaves to 1, is cut into pieces of equal width. The
// piece is read off the bits of e without computing a logarithm, and the
// logarithmic singularity at e = 0, where the contact vanishes, always stays
// many pieces away.
const (
	octaves     = 12 // below e = 2^-12 (5 nm for a cell of 10 um radius) the shape is solved
	pieceBits   = 6  // 64 pieces an octave
	mantissa    = 52 // bits of a float64's fraction
	firstPiece  = (1023 - octaves) << pieceBits
	pieceCount  = octaves << pieceBits
	pieceShift  = mantissa - pieceBits
	inPieceMask = 1<<pieceShift - 1
	oneBits     = 1023 << mantissa
)

// degree of the pieces. One piece of one function fills a cache line.
const degree = 7

// piece is a polynomial sum over k of p[k] x^k, x from -1 to 1 over the piece.
type piece [degree + 1]float64

// Curve is the universal curve of squeezed shapes over the height ratio:
// polynomials of degree 7 through the exact shape at the Chebyshev-Lobatto
// points of each piece, continuous from piece to piece.
//
// Force, LnArea and Equator agree with the exact shape to 1e-11 relative over
// 0.1 <= eta <= 0.999, DForce to 1e-9; above eta = 0.3 a hundred times better,
// but for LnArea, whose solver keeps 3e-16/q^2 (2e-12 at 0.999). A Curve is
// immutable: any number of goroutines may read it.
type Curve struct {
	force, lnArea, equator [pieceCount]piece
}

// NewCurve solves the shapes that the curve runs through: some 6000, about four
// milliseconds.
func NewCurve() *Curve {
	c := new(Curve)
	var x [degree + 1]float64 // from -1 to 1
	for j := range x {
		x[j] = -math.Cos(math.Pi * float64(j) / degree)
	}
	toMonomials := inverseVandermonde(x)

	a := guess(math.Ldexp(1, -octaves))
	for i := range pieceCount {
		left, right := knot(i), knot(i+1)
		if left > 1-Lowest {
			break // never read
		}
		var f, l, q [degree + 1]float64
		for j := range x {
			e := left + (right-left)*(1+x[j])/2
			k := solve(math.Log1p(-e), a)
			a = k.a
			f[j], l[j], q[j] = k.force(), k.lnArea, k.equator()
		}
		c.force[i] = through(&f, &toMonomials)
		c.lnArea[i] = through(&l, &toMonomials)
		c.equator[i] = through(&q, &toMonomials)
	}
	return c
}

// through returns the polynomial through the values y. The first value is
// taken off for the while: the matrix, whose elements reach 100, multiplies the
// rounding of what it is given.
func through(y *[degree + 1]float64, toMonomials *[degree + 1][degree + 1]float64) (p piece) {
	for n := range p {
		for j := range y {
			p[n] += toMonomials[n][j] * (y[j] - y[0])
		}
	}
	p[0] += y[0]
	return p
}

// knot returns e at the left end of piece i.
func knot(i int) float64 {
	return math.Float64frombits(uint64(firstPiece+i) << pieceShift)
}

// inverseVandermonde returns the matrix that takes the values of a polynomial
// at x to its coefficients: the coefficients of the Lagrange basis.
func inverseVandermonde(x [degree + 1]float64) (m [degree + 1][degree + 1]float64) {
	for j := range x {
		basis := piece{1}
		for i := range x {
			if i == j {
				continue
			}
			d := x[j] - x[i]
			for n := degree; n >= 0; n-- {
				var lower float64
				if n > 0 {
					lower = basis[n-1]
				}
				basis[n] = (lower - x[i]*basis[n]) / d
			}
		}
		for n := range basis {
			m[n][j] = basis[n]
		}
	}
	return m
}

// locate returns the piece that holds e and the place in it from -1 to 1. It
// must be called with 2^-octaves <= e < 1 only.
func locate(e float64) (i int, x float64) {
	bits := math.Float64bits(e)
	i = int(bits>>pieceShift) - firstPiece
	x = 2*math.Float64frombits(oneBits|bits&inPieceMask<<pieceBits) - 3
	return i, x
}

// at sums the polynomial, in pairs so that few steps wait for one another.
func (p *piece) at(x float64) float64 {
	x2 := x * x
	x4 := x2 * x2
	return (p[0] + p[1]*x + (p[2]+p[3]*x)*x2) + (p[4]+p[5]*x+(p[6]+p[7]*x)*x2)*x4
}

// slopeAt returns the derivative with respect to x.
func (p *piece) slopeAt(x float64) float64 {
	s := degree * p[degree]
	for n := degree - 1; n > 0; n-- {
		s = s*x + float64(n)*p[n]
	}
	return s
}

// dxde returns dx/de for the piece that holds e: 2 over its width.
func dxde(e float64) float64 {
	_, exp := math.Frexp(e) // e = f 2^exp, f from 1/2 to 1
	return math.Ldexp(1, pieceBits+2-exp)
}

// nearest is 1 - eta at which the pieces begin; nearer to the sphere the shape
// is solved each time.
const nearest = 1.0 / (1 << octaves)

// Force returns F/(gamma Rs) at the height ratio eta: 0 for eta of 1 and more
// (no contact), NaN below Lowest.
func (c *Curve) Force(eta float64) float64 {
	e := 1 - eta
	if e >= nearest && e <= 1-Lowest {
		i, x := locate(e)
		return c.force[i].at(x)
	}
	return outside(e, 0, meridian.force)
}

// LnArea returns ln(A/(4 pi Rs^2)): 0 for eta of 1 and more, NaN below Lowest.
func (c *Curve) LnArea(eta float64) float64 {
	e := 1 - eta
	if e >= nearest && e <= 1-Lowest {
		i, x := locate(e)
		return c.lnArea[i].at(x)
	}
	return outside(e, 0, func(k meridian) float64 { return k.lnArea })
}

// Equator returns R/Rs: 1 for eta of 1 and more, NaN below Lowest.
func (c *Curve) Equator(eta float64) float64 {
	e := 1 - eta
	if e >= nearest && e <= 1-Lowest {
		i, x := locate(e)
		return c.equator[i].at(x)
	}
	return outside(e, 1, meridian.equator)
}

// DForce returns the derivative of Force with respect to eta: 0 for eta of 1
// and more, NaN below Lowest. It falls to 0 only slowly towards eta = 1, as
// -4 pi/ln(1/(1-eta)).
func (c *Curve) DForce(eta float64) float64 {
	e := 1 - eta
	if e >= nearest && e <= 1-Lowest {
		i, x := locate(e)
		return -c.force[i].slopeAt(x) * dxde(e)
	}
	return outside(e, 0, meridian.dForce)
}

// DLnArea returns the derivative of LnArea with respect to eta, by virtual work
// -Force/(2 pi Area): 0 for eta of 1 and more, NaN below Lowest.
func (c *Curve) DLnArea(eta float64) float64 {
	e := 1 - eta
	if e >= nearest && e <= 1-Lowest {
		i, x := locate(e)
		return -c.force[i].at(x) / (2 * math.Pi) * math.Exp(-c.lnArea[i].at(x))
	}
	return outside(e, 0, meridian.dLnArea)
}

// outside answers where there are no pieces.
func outside(e, free float64, read func(meridian) float64) float64 {
	switch {
	case e <= 0:
		return free
	case e < nearest:
		return read(solve(math.Log1p(-e), guess(e)))
	}
	return math.NaN() // eta below Lowest, or not a number
}

// RadiusFromEquator returns the sphere radius Rs of the cell whose equator has
// the radius R at the plate separation h (both in one unit, that of the
// result): the solution of R/h = Equator(eta)/(2 eta), which falls with eta.
// It returns R where h >= 2R (not squeezed), and NaN where h or R is not
// positive and finite or eta would lie below Lowest.
func (c *Curve) RadiusFromEquator(h, R float64) float64 {
	if !(h > 0 && R > 0) || math.IsInf(h, 0) || math.IsInf(R, 0) {
		return math.NaN()
	}
	if h >= 2*R {
		return R
	}
	target := math.Log(2 * R / h)
	if target > math.Log(c.Equator(Lowest)/Lowest)+1e-12 {
		return math.NaN()
	}
	// Newton's method on ln(Equator/eta) against ln eta, whose slope lies
	// between -1 and -3/2.
	lnEta := -target / 1.2
	for range 20 {
		eta := math.Max(Lowest, math.Exp(lnEta))
		e := 1 - eta
		equator, slope := 1.0, 0.0
		switch {
		case e >= nearest && e <= 1-Lowest:
			i, x := locate(e)
			equator = c.equator[i].at(x)
			slope = -c.equator[i].slopeAt(x) * dxde(e)
		case e > 0:
			k := solve(math.Log1p(-e), guess(e))
			equator, slope = k.equator(), k.dEquator()
		}
		step := (math.Log(equator/eta) - target) / (eta*slope/equator - 1)
		lnEta = math.Log(eta) - step
		if math.Abs(step) < 1e-10 { // quadratic: the next step would be nothing
			break
		}
	}
	return h / 2 * math.Exp(-lnEta)
}
