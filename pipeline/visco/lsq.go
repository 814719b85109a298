package visco

import (
	"errors"
	"math"

	"gonum.org/v1/gonum/mat"
)

// Residuals computes n residuals for parameters p into r and reports whether
// the model is defined there.
type Residuals func(p, r []float64) bool

// Minimum is where LeastSquares arrived.
type Minimum struct {
	P          []float64
	RSS        float64
	Covariance *mat.SymDense // unscaled: times the residual variance it is the covariance of P
	Iterations int
}

// ErrNoMinimum says that no minimum was reached.
var ErrNoMinimum = errors.New("visco: the fit does not settle")

const (
	mostIterations = 5000
	// smallStep ends the search: a step, relative to the parameters, that
	// float64 hardly resolves.
	smallStep = 1e-13
	// farthest bounds a step against the parameters, both scaled by their
	// influence.
	farthest = 1.0
)

// LeastSquares minimises the sum of squared residuals from start by the method
// of Levenberg (1944) and Marquardt (1963): steps solve the linearised problem
// with a damping that is scaled by the columns of the Jacobian, each by a QR
// factorisation. The Jacobian is taken by fourth-order central differences.
func LeastSquares(n int, f Residuals, start []float64) (Minimum, error) {
	return leastSquares(n, f, start, mostIterations)
}

// leastSquares gives up after most iterations.
func leastSquares(n int, f Residuals, start []float64, most int) (Minimum, error) {
	np := len(start)
	p := append([]float64(nil), start...)
	r := make([]float64, n)
	if !f(p, r) || !finite(r) {
		return Minimum{}, errors.New("visco: the model is not defined at the starting values")
	}
	rss := sumSquares(r)
	j := mat.NewDense(n, np, nil)
	scale := make([]float64, np)
	trial, rTrial := make([]float64, np), make([]float64, n)
	damping := 1.0
	stalled := 0
	for it := 1; it <= most; it++ {
		if !jacobian(f, p, r, j) {
			return Minimum{}, ErrNoMinimum
		}
		for c := range np {
			scale[c] = math.Max(scale[c], columnNorm(j, c))
		}
		improved, small := false, false
		for range 60 {
			step, ok := dampedStep(j, r, scale, damping)
			if !ok {
				damping = math.Max(damping*4, 1e-12)
				continue
			}
			largest, stepSize, size := 0.0, 0.0, 0.0
			for c := range np {
				trial[c] = p[c] + step[c]
				stepSize = math.Hypot(stepSize, scale[c]*step[c])
				size = math.Hypot(size, scale[c]*p[c])
				largest = math.Max(largest, math.Abs(step[c])/(math.Abs(p[c])+1e-300))
			}
			if stepSize > farthest*size {
				damping *= 3 // a leap into a region where the model is flat
				continue
			}
			if f(trial, rTrial) && finite(rTrial) {
				if s := sumSquares(rTrial); s < rss {
					small = largest < smallStep || rss-s <= 1e-15*rss
					copy(p, trial)
					copy(r, rTrial)
					rss = s
					damping /= 5
					improved = true
					break
				}
			}
			if largest < smallStep {
				break
			}
			damping = math.Max(damping*3, 1e-14)
		}
		if small {
			stalled++
		} else if improved {
			stalled = 0
		}
		if !improved || stalled >= 3 || rss == 0 {
			rss = polish(f, p, r, rss, j)
			return finish(f, p, r, rss, it, j)
		}
	}
	return Minimum{}, ErrNoMinimum
}

// polish takes undamped steps for as long as they get shorter: near the minimum
// the sum of squares is too flat to guide the last digits of the parameters,
// the normal equations are not.
func polish(f Residuals, p, r []float64, rss float64, j *mat.Dense) float64 {
	n := len(r)
	ones := make([]float64, len(p))
	trial, rTrial := make([]float64, len(p)), make([]float64, n)
	last := math.Inf(1)
	for range 20 {
		if !jacobian(f, p, r, j) {
			return rss
		}
		for c := range ones {
			ones[c] = columnNorm(j, c)
		}
		step, ok := dampedStep(j, r, ones, 0)
		if !ok {
			return rss
		}
		size := 0.0
		for c := range p {
			trial[c] = p[c] + step[c]
			size = math.Max(size, math.Abs(step[c])/(math.Abs(p[c])+1e-300))
		}
		if !(size < last) || !f(trial, rTrial) || !finite(rTrial) || sumSquares(rTrial) > rss*(1+1e-12) {
			return rss
		}
		last = size
		copy(p, trial)
		copy(r, rTrial)
		rss = sumSquares(r)
	}
	return rss
}

// finish computes the covariance at the minimum.
func finish(f Residuals, p, r []float64, rss float64, it int, j *mat.Dense) (Minimum, error) {
	if !jacobian(f, p, r, j) {
		return Minimum{}, ErrNoMinimum
	}
	n, np := j.Dims()
	// Columns differ by many orders of magnitude: scale them to unit length
	// before factorising.
	norms := make([]float64, np)
	scaled := mat.NewDense(n, np, nil)
	for c := range np {
		norms[c] = columnNorm(j, c)
		if norms[c] == 0 {
			return Minimum{}, errors.New("visco: a parameter has no influence")
		}
		for i := range n {
			scaled.Set(i, c, j.At(i, c)/norms[c])
		}
	}
	var svd mat.SVD
	if !svd.Factorize(scaled, mat.SVDThin) {
		return Minimum{}, ErrNoMinimum
	}
	var v mat.Dense
	svd.VTo(&v)
	s := svd.Values(nil)
	if s[np-1] < 1e-13*s[0] {
		return Minimum{}, errors.New("visco: the data do not determine all parameters")
	}
	cov := mat.NewSymDense(np, nil)
	for a := range np {
		for b := a; b < np; b++ {
			x := 0.0
			for k := range np {
				x += v.At(a, k) * v.At(b, k) / (s[k] * s[k])
			}
			cov.SetSym(a, b, x/(norms[a]*norms[b]))
		}
	}
	return Minimum{P: p, RSS: rss, Covariance: cov, Iterations: it}, nil
}

// dampedStep solves min |J d + r|^2 + damping |S d|^2.
func dampedStep(j *mat.Dense, r, scale []float64, damping float64) ([]float64, bool) {
	n, np := j.Dims()
	a := mat.NewDense(n+np, np, nil)
	b := mat.NewVecDense(n+np, nil)
	root := math.Sqrt(damping)
	for c := range np {
		s := scale[c]
		if s == 0 {
			s = 1
		}
		for i := range n {
			a.Set(i, c, j.At(i, c)/s)
		}
		a.Set(n+c, c, root)
	}
	for i := range n {
		b.SetVec(i, -r[i])
	}
	var qr mat.QR
	qr.Factorize(a)
	var d mat.VecDense
	if err := qr.SolveVecTo(&d, false, b); err != nil {
		var bad mat.Condition
		if !errors.As(err, &bad) || math.IsInf(float64(bad), 0) {
			return nil, false
		}
	}
	out := make([]float64, np)
	for c := range np {
		s := scale[c]
		if s == 0 {
			s = 1
		}
		out[c] = d.AtVec(c) / s
		if math.IsNaN(out[c]) || math.IsInf(out[c], 0) {
			return nil, false
		}
	}
	return out, true
}

// jacobian takes derivatives by central differences of fourth order; their
// error goes with the fourth power of a step of 1e-4 of the parameter.
func jacobian(f Residuals, p, r []float64, j *mat.Dense) bool {
	n := len(r)
	q := append([]float64(nil), p...)
	var side [4][]float64
	for k := range side {
		side[k] = make([]float64, n)
	}
	for c := range p {
		h := 1e-4 * math.Abs(p[c])
		if h == 0 {
			h = 1e-6
		}
		ok := false
		for range 8 {
			ok = true
			for k, m := range []float64{-2, -1, 1, 2} {
				q[c] = p[c] + m*h
				if !f(q, side[k]) || !finite(side[k]) {
					ok = false
					break
				}
			}
			if ok {
				break
			}
			h /= 10
		}
		q[c] = p[c]
		if !ok {
			return false
		}
		for i := range n {
			j.Set(i, c, (side[0][i]-8*side[1][i]+8*side[2][i]-side[3][i])/(12*h))
		}
	}
	return true
}

func columnNorm(j *mat.Dense, c int) float64 {
	return mat.Norm(j.ColView(c), 2)
}

func sumSquares(r []float64) float64 {
	s := 0.0
	for _, x := range r {
		s += x * x
	}
	return s
}

func finite(r []float64) bool {
	for _, x := range r {
		if math.IsNaN(x) || math.IsInf(x, 0) {
			return false
		}
	}
	return true
}
