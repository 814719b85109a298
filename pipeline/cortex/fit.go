package cortex

import (
	"fmt"
	"math"
)

// The parameters of the fit. Loss moduli are in units of KB', the shear storage
// modulus goes by the Poisson ratio, so that both storage moduli are positive
// by construction.
const (
	lnBulk = iota
	bulkLoss
	poisson
	shearLoss
	scale
	lnTension
	params
)

type vector [params]float64

// fit is one weighted least-squares problem: measured moduli and the two prior
// values, which count as measurements of the nuisance parameters.
type fit struct {
	table    *Table
	curve    curve
	kind     Scale
	ratio    []float64 // supposed height ratios
	re, im   []float64 // measured storage and loss modulus, N/m
	ure, uim []float64 // their standard uncertainties

	scale0, scaleU float64 // prior of the true over the supposed height ratio
	lnG0, lnGU     float64 // prior of ln gamma0
	low, up        vector  // bounds
	fixed          [params]bool

	// What evaluate and normal leave: weighted residuals (two a height, then
	// the two priors), Jacobian, J^T J and J^T r; and room to work.
	r        []float64
	j        []vector
	h        [params][params]float64
	gradient vector
	sweep    *sweep
	w, dw    []float64
}

// curve is the part of squeeze.Curve that a scale error needs.
type curve interface {
	Force(eta float64) float64
	DForce(eta float64) float64
	LnArea(eta float64) float64
}

const noLimit = 1e300

func (t *Table) newFit(points []HeightPoint, prior Prior) (*fit, error) {
	g := prior.Tension
	switch {
	case !(g.Value > 0) || math.IsInf(g.Value, 0) || !(g.U >= 0) || math.IsInf(g.U, 0):
		return nil, fmt.Errorf("pre-tension %g +- %g N/m: expected a positive value and a finite uncertainty; measure the tension in a hold segment", g.Value, g.U)
	case !(prior.ScaleU >= 0 && prior.ScaleU <= 0.1):
		return nil, fmt.Errorf("uncertainty of the height scale %g: expected 0..0.1", prior.ScaleU)
	case prior.Scale < ScaleOfRatio || prior.Scale > ScaleOfHeight:
		return nil, fmt.Errorf("kind of the height scale error = %d: expected ScaleOfRatio, ScaleOfRadius or ScaleOfHeight", prior.Scale)
	}
	n := len(points)
	f := &fit{table: t, curve: t.curve, kind: prior.Scale, scale0: 1, scaleU: prior.ScaleU,
		lnG0: math.Log(g.Value), lnGU: math.Sqrt(math.Log1p(g.U * g.U / (g.Value * g.Value))),
		sweep: t.newSweep(), w: make([]float64, len(t.x)), dw: make([]float64, len(t.x)),
		r: make([]float64, 2*n+2), j: make([]vector, 2*n+2)}
	least, most := math.Inf(1), 0.0
	for i, p := range points {
		if err := checkTableRatio(p.Ratio); err != nil {
			return nil, fmt.Errorf("height %d: %w", i+1, err)
		}
		for _, q := range []Quantity{p.Storage, p.Loss} {
			if math.IsNaN(q.Value) || math.IsInf(q.Value, 0) || !(q.U > 0) || math.IsInf(q.U, 0) {
				return nil, fmt.Errorf("height %d (ratio %g): modulus %g +- %g N/m: expected a finite value and a positive uncertainty", i+1, p.Ratio, q.Value, q.U)
			}
		}
		if !(p.Storage.Value > 0) {
			return nil, fmt.Errorf("height %d (ratio %g): storage modulus %g N/m: expected a positive value; leave the height out", i+1, p.Ratio, p.Storage.Value)
		}
		least, most = min(least, p.Ratio), max(most, p.Ratio)
		f.ratio = append(f.ratio, p.Ratio)
		f.re, f.im = append(f.re, p.Storage.Value), append(f.im, p.Loss.Value)
		f.ure, f.uim = append(f.ure, p.Storage.U), append(f.uim, p.Loss.U)
	}
	if n < 2 || most-least < 1e-6 {
		return nil, fmt.Errorf("%d heights, from ratio %.3g to %.3g: bulk and shear need two different heights at least, one below 0.6 and one above 0.8", n, least, most)
	}
	f.low = vector{-noLimit, -noLimit, nuOf(stiffest(t.opt.Plates)), -noLimit, max(1-6*f.scaleU, MinTableRatio/least), f.lnG0 - 6*f.lnGU}
	f.up = vector{noLimit, noLimit, 1, noLimit, min(1+6*f.scaleU, MaxTableRatio/most), f.lnG0 + 6*f.lnGU}
	f.fixed[scale], f.fixed[lnTension] = f.scaleU == 0, f.lnGU == 0
	return f, nil
}

// nuOf is the inverse of ratioOf.
func nuOf(ratio float64) float64 { return (1 - ratio) / (1 + ratio) }

func (f *fit) moduli(p vector) (kb, ks complex128) {
	k := math.Exp(p[lnBulk])
	return complex(k, k*p[bulkLoss]), complex(k*ratioOf(p[poisson]), k*p[shearLoss])
}

// transfer returns c1, c2 such that a cell of effective modulus K at the true
// ratio s eta is measured as c1 K + c2 gamma0 at the supposed ratio eta. From
// gamma_eff = F/D(h) and ln A(h) taken at the wrong ratio,
//
//	K_m = (A_m D^2/(A D_m^2)) K - gamma0 (A_m/D_m^2) (D' - D_m' D/D_m)
//
// written for the two ways in which the ratio can be wrong.
func (f *fit) transfer(eta, s float64) (c1, c2 float64) {
	if f.kind == ScaleOfRatio {
		return 1, 0
	}
	am, dm, ddm := 4*math.Pi*math.Exp(f.curve.LnArea(eta)), f.curve.Force(eta), f.curve.DForce(eta)/2
	a, d, dd := 4*math.Pi*math.Exp(f.curve.LnArea(s*eta)), f.curve.Force(s*eta), f.curve.DForce(s*eta)/2
	c1, c2 = am*d*d/(a*dm*dm), -am/(dm*dm)*(dd-d/(s*dm)*ddm)
	if f.kind == ScaleOfHeight {
		c1, c2 = s*c1, s*c2
	}
	return c1, c2
}

// evaluate fills the weighted residuals and, if asked, their Jacobian; it
// returns chi-squared.
func (f *fit) evaluate(p vector, jacobian bool) float64 {
	kb, ks := f.moduli(p)
	k, g := real(kb), math.Exp(p[lnTension])
	drho := -2 / ((1 + p[poisson]) * (1 + p[poisson]))
	f.table.sweep(f.sweep, kb, ks, complex(g, 0))
	var chi2 float64
	for i, eta := range f.ratio {
		at := p[scale] * eta
		f.table.weights(math.Log1p(-at), f.w, f.dw)
		v := f.sweep.read(f.w, f.dw)
		c1, c2 := f.transfer(eta, p[scale])
		model := complex(c1, 0)*v.k + complex(c2*g, 0)
		f.r[2*i] = (f.re[i] - real(model)) / f.ure[i]
		f.r[2*i+1] = (f.im[i] - imag(model)) / f.uim[i]
		chi2 += f.r[2*i]*f.r[2*i] + f.r[2*i+1]*f.r[2*i+1]
		if !jacobian {
			continue
		}
		var d [params]complex128
		d[lnBulk] = kb*v.dKB + ks*v.dKS
		d[bulkLoss] = complex(0, k) * v.dKB
		d[poisson] = complex(k*drho, 0) * v.dKS
		d[shearLoss] = complex(0, k) * v.dKS
		d[scale] = v.dX * complex(-eta/(1-at), 0)
		d[lnTension] = complex(g, 0) * v.dG
		for q := range d {
			d[q] *= complex(c1, 0)
		}
		if f.kind != ScaleOfRatio {
			const step = 1e-4
			a1, a2 := f.transfer(eta, p[scale]-step)
			b1, b2 := f.transfer(eta, p[scale]+step)
			d[scale] += v.k*complex((b1-a1)/(2*step), 0) + complex(g*(b2-a2)/(2*step), 0)
			d[lnTension] += complex(c2*g, 0)
		}
		for q := range d {
			f.j[2*i][q], f.j[2*i+1][q] = real(d[q])/f.ure[i], imag(d[q])/f.uim[i]
		}
	}
	n := 2 * len(f.ratio)
	f.r[n], f.r[n+1], f.j[n], f.j[n+1] = 0, 0, vector{}, vector{}
	if f.scaleU > 0 {
		f.r[n] = (f.scale0 - p[scale]) / f.scaleU
		f.j[n][scale] = 1 / f.scaleU
	}
	if f.lnGU > 0 {
		f.r[n+1] = (f.lnG0 - p[lnTension]) / f.lnGU
		f.j[n+1][lnTension] = 1 / f.lnGU
	}
	return chi2 + f.r[n]*f.r[n] + f.r[n+1]*f.r[n+1]
}

// reading is K_eff at one height with its derivatives.
type reading struct{ k, dKB, dKS, dG, dX complex128 }

func (s *sweep) read(w, dw []float64) reading {
	var v reading
	var ln complex128
	for i, c := range w {
		ln += cscale(s.ln[i], c)
		v.dX += cscale(s.ln[i], dw[i])
		v.dKB += cscale(s.dKB[i], c)
		v.dKS += cscale(s.dKS[i], c)
		v.dG += cscale(s.dG[i], c)
	}
	v.k = exp(ln)
	v.dX *= v.k
	v.dKB *= v.k
	v.dKS *= v.k
	v.dG *= v.k
	return v
}

func exp(z complex128) complex128 {
	r := math.Exp(real(z))
	s, c := math.Sincos(imag(z))
	return complex(r*c, r*s)
}

// normal forms J^T J and J^T r.
func (f *fit) normal() {
	f.h, f.gradient = [params][params]float64{}, vector{}
	for i := range f.j {
		row := &f.j[i]
		for a := range params {
			f.gradient[a] += row[a] * f.r[i]
			for b := range a + 1 {
				f.h[a][b] += row[a] * row[b]
			}
		}
	}
	for a := range params {
		for b := range a {
			f.h[b][a] = f.h[a][b]
		}
	}
}

// minimise runs the method of Levenberg and Marquardt (Marquardt, SIAM J. 11,
// 1963; from memory) with a projection on the bounds: a parameter at a bound
// that the gradient pushes outward is held there.
func (f *fit) minimise(p vector) (vector, float64) {
	for a := range params {
		p[a] = min(max(p[a], f.low[a]), f.up[a])
	}
	chi2 := f.evaluate(p, true)
	lambda := 1e-3
	for range 60 {
		f.normal()
		held := f.fixed
		for a := range params {
			if p[a] <= f.low[a] && f.gradient[a] < 0 || p[a] >= f.up[a] && f.gradient[a] > 0 {
				held[a] = true
			}
		}
		h, gradient := f.h, f.gradient
		improved := false
		for range 12 {
			m, step := h, gradient
			for a := range params {
				m[a][a] *= 1 + lambda
				if held[a] || m[a][a] == 0 {
					for b := range params {
						m[a][b], m[b][a] = 0, 0
					}
					m[a][a], step[a] = 1, 0
				}
			}
			if !cholesky(&m) {
				lambda *= 10
				continue
			}
			substitute(&m, &step)
			q := p
			for a := range params {
				if !held[a] {
					q[a] = min(max(p[a]+step[a], f.low[a]), f.up[a])
				}
			}
			next := f.evaluate(q, true)
			if next < chi2 {
				gain := chi2 - next
				p, chi2 = q, next
				lambda = max(lambda/10, 1e-12)
				improved = gain > 1e-5 // of one standard deviation squared
				break
			}
			if next-chi2 < 1e-7 {
				break
			}
			lambda = max(lambda, 1e-5) * 10
		}
		if !improved {
			break
		}
	}
	return p, chi2
}

// cholesky overwrites the lower triangle; it reports false where the matrix is
// not positive definite.
func cholesky(m *[params][params]float64) bool {
	for a := range params {
		for b := range a + 1 {
			s := m[a][b]
			for c := range b {
				s -= m[a][c] * m[b][c]
			}
			if a != b {
				m[a][b] = s / m[b][b]
				continue
			}
			if !(s > 0) {
				return false
			}
			m[a][a] = math.Sqrt(s)
		}
	}
	return true
}

func substitute(m *[params][params]float64, x *vector) {
	for a := range params {
		for b := range a {
			x[a] -= m[a][b] * x[b]
		}
		x[a] /= m[a][a]
	}
	for a := params - 1; a >= 0; a-- {
		for b := a + 1; b < params; b++ {
			x[a] -= m[b][a] * x[b]
		}
		x[a] /= m[a][a]
	}
}

// search starts from several Poisson ratios and keeps the best minimum.
func (f *fit) search() (vector, float64) {
	lowest := 0
	highest := 0
	for i, eta := range f.ratio {
		if eta < f.ratio[lowest] {
			lowest = i
		}
		if eta > f.ratio[highest] {
			highest = i
		}
	}
	var best vector
	chi2 := math.Inf(1)
	for _, nu := range []float64{0.9, 0.4, -0.2, -0.6} {
		p := vector{poisson: nu, scale: 1, lnTension: f.lnG0, lnBulk: math.Log(f.re[lowest]),
			bulkLoss: f.im[lowest] / f.re[lowest], shearLoss: ratioOf(nu) * f.im[highest] / f.re[highest]}
		// KB scales the curve: a few steps of the weighted mean ratio.
		for range 4 {
			f.evaluate(p, false)
			var top, bottom float64
			for i := range f.re {
				model := f.re[i] - f.r[2*i]*f.ure[i]
				top += f.re[i] * model / (f.ure[i] * f.ure[i])
				bottom += model * model / (f.ure[i] * f.ure[i])
			}
			if ratio := top / bottom; ratio > 0 && !math.IsInf(ratio, 0) {
				p[lnBulk] += math.Log(ratio)
			}
		}
		if p, c := f.minimise(p); c < chi2 {
			best, chi2 = p, c
		}
	}
	return best, chi2
}

// covariance is (J^T J)^-1 with the fixed parameters held and none at a bound.
// A direction that the data do not see gets a large but finite variance.
func (f *fit) covariance(p vector) [params][params]float64 {
	f.evaluate(p, true)
	f.normal()
	return invert(f.h, f.fixed)
}

func invert(h [params][params]float64, fixed [params]bool) (c [params][params]float64) {
	var size vector
	for a := range params {
		size[a] = math.Sqrt(h[a][a])
		if fixed[a] || size[a] == 0 {
			size[a] = 0
		}
	}
	for a := range params {
		for b := range params {
			if size[a] == 0 || size[b] == 0 {
				h[a][b] = 0
			} else {
				h[a][b] /= size[a] * size[b]
			}
		}
		h[a][a] += 1e-13
		if size[a] == 0 {
			h[a][a] = 1
		}
	}
	// Entries are at most 1, so a ridge of 6 always does; only numbers that
	// are not finite get past it.
	for ridge := 1e-13; ridge < 1e2; ridge *= 10 {
		m := h
		for a := range params {
			m[a][a] += ridge
		}
		if !cholesky(&m) {
			continue
		}
		for a := range params {
			if size[a] == 0 {
				continue
			}
			var e vector
			e[a] = 1
			substitute(&m, &e)
			for b := range params {
				if size[b] != 0 {
					c[b][a] = e[b] / (size[a] * size[b])
				}
			}
		}
		return c
	}
	for a := range params {
		for b := range params {
			c[a][b] = math.NaN()
		}
	}
	return c
}

// clone is a fit that shares nothing that evaluation writes to.
func (f *fit) clone() *fit {
	c := *f
	n := len(f.ratio)
	c.sweep, c.w, c.dw = f.table.newSweep(), make([]float64, len(f.w)), make([]float64, len(f.dw))
	c.r, c.j = make([]float64, 2*n+2), make([]vector, 2*n+2)
	return &c
}
