// Package squeeze gives the shape of a round body with a uniform tension and a
// constant volume that is squeezed between two parallel plates without
// sticking: an uncompressed sphere of radius Rs at a plate separation h.
//
// Everything depends on the height ratio eta = h/(2 Rs) alone. Per sample call
// NewCurve once and read Force, LnArea and Equator from it; FromHeightRatio
// and FromContactRatio give one exact shape with everything in it.
//
// Left out: adhesion (the surface meets the plates tangentially here), gravity,
// and any elasticity of the sheet: the shape is that of a uniform tension.
//
// # Equations
//
// The free surface has constant mean curvature H (Young-Laplace) and meets the
// plates tangentially: the nodoid of Delaunay (1841). With psi the angle of the
// tangent, from 0 at the rim of the contact disc (radius rc) to pi/2 at the
// equator (radius R), a = 2 H rc and Q = sqrt(sin^2 psi + a^2),
//
//	r = (sin psi + Q)/(2H),   ds/dpsi = r/Q.
//
// Integrating over the meridian, with J0 = int dpsi/Q, J2 = int sin^2 psi/Q dpsi
// over 0..pi/2, in units of 1/H:
//
//	h = 1 + J2
//	V = (pi/4) [8/3 + a^2 + (4/3) a^2 J0 + (8/3 + a^2/3) J2]
//	A = pi [a^2/2 + 2 + 2 J2 + a^2 J0]     both contact discs included
//	F/gamma = pi a^2/2                     = pi rc^2 2H
//	R = (1 + S)/2,   rc = a/2,             S = sqrt(1 + a^2)
//
// J0 = K(m)/S and J2 = B(m)/S are complete elliptic integrals of parameter
// m = 1/S^2, B = (E - (1-m) K)/m. Near the sphere (small a) all of them are
// written as small departures from the sphere, so that nothing cancels.
//
// Invariants kept here: at constant volume F/gamma = -dA/dh (virtual work) and
// A = H (3V - pi rc^2 h).
package squeeze

import (
	"fmt"
	"math"
)

// Shape is one squeezed shape. Lengths are in units of the sphere radius Rs.
type Shape struct {
	ContactRatio float64 // rc/R
	HeightRatio  float64 // h/(2 Rs)
	Equator      float64 // R/Rs
	Contact      float64 // rc/Rs
	Area         float64 // A/(4 pi Rs^2), both contact discs included
	LnArea       float64 // ln of Area; keeps its relative accuracy where Area is nearly 1
	Force        float64 // F/(gamma Rs)
}

// sphere is the limit of no contact.
var sphere = Shape{HeightRatio: 1, Equator: 1, Area: 1}

// FromContactRatio returns the shape whose contact disc has the radius q times
// that of the equator, 0 <= q < 1. Relative accuracy is about 1e-13, for
// LnArea no better than 3e-16/q^2 (2e-11 at eta = 0.9999).
func FromContactRatio(q float64) (Shape, error) {
	if !(q >= 0 && q < 1) {
		return Shape{}, fmt.Errorf("squeeze: contact ratio %g: want 0 or more and less than 1", q)
	}
	if q == 0 {
		return sphere, nil
	}
	return at(2 * q / ((1 - q) * (1 + q))).shape(), nil
}

// FromHeightRatio returns the shape at the height ratio eta, 0 < eta <= 1, as
// exact as FromContactRatio.
func FromHeightRatio(eta float64) (Shape, error) {
	if !(eta > 0 && eta <= 1) {
		return Shape{}, fmt.Errorf("squeeze: height ratio %g: want more than 0 and at most 1", eta)
	}
	if eta == 1 {
		return sphere, nil
	}
	s := solve(math.Log(eta), guess(1-eta)).shape()
	s.HeightRatio = eta
	return s, nil
}

// meridian holds the integrals over a meridian as departures from the sphere,
// in units of 1/H, and their derivatives with respect to a = 2 H rc.
type meridian struct {
	a, s       float64 // a, sqrt(1 + a^2)
	lnHeight   float64 // ln eta
	dLnHeight  float64 // d ln eta/da
	lnArea     float64 // ln(A/4 pi Rs^2)
	lnRadius   float64 // ln(H Rs)
	dLnRadius  float64 // its derivative
	lengthUnit float64 // 1/(H Rs)
}

// at integrates the meridian for a > 0.
func at(a float64) meridian {
	aa := a * a
	s := math.Sqrt(1 + aa)
	c := complete(1/(1+aa), aa/(1+aa), s)

	// J2 = 1 - delta, delta = a^2 g, so H h/2 = 1 - delta/2,
	// 3 H^3 V/(4 pi) = 1 + v and H^2 A/(4 pi) = 1 + w.
	delta := aa * c.g
	v := aa/4*(1+c.j0) - (0.5+aa/16)*delta
	w := aa/8 + aa/4*c.j0 - delta/2
	dDelta := a * c.d / (s * s * s)
	dv := a/2*(1+c.j0) - a/4*c.e/s - a/8*delta - (0.5+aa/16)*dDelta

	k := meridian{a: a, s: s}
	lnV := math.Log1p(v)
	k.lnRadius = lnV / 3
	k.dLnRadius = dv / (3 * (1 + v))
	k.lengthUnit = math.Exp(-k.lnRadius)
	k.lnHeight = math.Log1p(-delta/2) - k.lnRadius
	k.dLnHeight = -dDelta/(2-delta) - k.dLnRadius
	if aa < 0.1 {
		// The parts of first order in a^2 cancel: w - 2v/3 is taken together,
		// what the logarithms add is of second order.
		first := aa * (c.j0/12 - c.g/6 - 1.0/24 + delta/24)
		k.lnArea = first + (math.Log1p(w) - w) - 2.0/3*(lnV-v)
	} else {
		k.lnArea = math.Log1p(w) - 2.0/3*lnV
	}
	return k
}

func (k meridian) force() float64   { return math.Pi / 2 * k.a * k.a * k.lengthUnit }
func (k meridian) equator() float64 { return (1 + k.s) / 2 * k.lengthUnit }

// dForce returns d force/d eta.
func (k meridian) dForce() float64 {
	return k.force() * (2/k.a - k.dLnRadius) / (k.dLnHeight * math.Exp(k.lnHeight))
}

// dEquator returns d equator/d eta.
func (k meridian) dEquator() float64 {
	d := k.a / k.s / 2 * k.lengthUnit
	return (d - k.equator()*k.dLnRadius) / (k.dLnHeight * math.Exp(k.lnHeight))
}

// dLnArea returns d lnArea/d eta by virtual work: dA = -(F/gamma) dh.
func (k meridian) dLnArea() float64 {
	return -k.force() / (2 * math.Pi) * math.Exp(-k.lnArea)
}

func (k meridian) shape() Shape {
	return Shape{
		ContactRatio: k.a / (1 + k.s),
		HeightRatio:  math.Exp(k.lnHeight),
		Equator:      k.equator(),
		Contact:      k.a / 2 * k.lengthUnit,
		Area:         math.Exp(k.lnArea),
		LnArea:       k.lnArea,
		Force:        k.force(),
	}
}

// guess returns a near the solution for e = 1 - eta; the contact ratio goes
// about as e^0.64 (a fit to the exact shape, good to 15 % for e of 0.001 and
// more).
func guess(e float64) float64 {
	q := math.Pow(e, 0.64)
	return 2 * q / ((1 - q) * (1 + q))
}

// solve finds the meridian with the given ln eta < 0 by Newton's method on
// ln(-ln eta) as a function of ln a, which is nearly straight, kept between
// bounds that close in.
func solve(lnEta, a float64) meridian {
	target := math.Log(-lnEta)
	lo, hi := 0.0, math.Inf(1)
	if !(a > 0) || math.IsInf(a, 0) {
		a = 1
	}
	for range 60 {
		k := at(a)
		excess := math.Log(-k.lnHeight) - target
		// One rounding of ln eta moves the logarithm by about this much.
		if math.Abs(excess) < 4e-16*math.Max(1, math.Abs(target)) {
			return k
		}
		if excess > 0 {
			hi = a
		} else {
			lo = a
		}
		step := excess * k.lnHeight / (k.dLnHeight * a)
		next := a * math.Exp(-step)
		if !(next > lo && next < hi) {
			switch {
			case lo == 0:
				next = hi / 4
			case math.IsInf(hi, 1):
				next = lo * 4
			default:
				next = math.Sqrt(lo * hi)
			}
		}
		if math.Abs(step) < 1e-9 {
			// Convergence is quadratic: what remains is below rounding.
			return at(next)
		}
		a = next
	}
	return at(a)
}
