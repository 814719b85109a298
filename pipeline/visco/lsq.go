package visco

import (
	"errors"
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/lapack/lapack64"
	"gonum.org/v1/gonum/mat"
)

// Residuals computes n residuals, each over its standard uncertainty where
// they are weighted, for parameters p into r and reports whether the model is
// defined there.
type Residuals func(p, r []float64) bool

// Minimum is where LeastSquares arrived.
type Minimum struct {
	P          []float64
	RSS        float64       // sum of squared residuals
	Covariance *mat.SymDense // unscaled: times the residual variance it is the covariance of P
	Iterations int
}

// Why a fit fails. Both come with where it ended, less the covariance.
var (
	ErrNoMinimum    = errors.New("visco: the fit does not settle at a minimum")
	ErrUndetermined = errors.New("visco: the data do not determine all parameters")
)

// LeastSquares minimises the sum of squared residuals from start by the method
// of Levenberg (1944) and Marquardt (1963): each step solves the linearised
// problem, damped in proportion to the columns of the Jacobian, by QR
// factorisation. The Jacobian is taken by fourth-order central differences.
//
// A minimum is accepted where the relative offset of Bates and Watts
// (Technometrics 23, 1981; from memory), the length of the residuals' part
// along the Jacobian against the rest of them, both per degree of freedom, is
// below 1e-4. Residuals at the level of rounding have no meaningful offset: there
// an undamped step below 1e-8 of every parameter is accepted too, or a sum of
// squares below 1e-26 of the first. The covariance comes from the singular
// values of the Jacobian with columns of unit length.
func LeastSquares(n int, f Residuals, start []float64) (Minimum, error) {
	if len(start) == 0 || n < len(start) {
		return Minimum{}, fmt.Errorf("visco: %d values cannot determine %d parameters", n, len(start))
	}
	s := newSearch(problem{n: n, f: f, most: mostIterations}, start)
	if err := s.descend(); err != nil {
		return Minimum{}, err
	}
	s.polish()
	m := Minimum{P: s.p, RSS: s.rss, Iterations: s.iterations}
	if err := s.settled(); err != nil {
		return m, err
	}
	cov, ok := s.covariance()
	if !ok {
		return m, ErrUndetermined
	}
	m.Covariance = cov
	return m, nil
}

const (
	// mostIterations is for the longest way among the NIST sets, MGH10 from its
	// first start, which takes half of it; a usual fit takes a few dozen.
	mostIterations = 20000
	// memory of slopes: with 0.9 and 0.98 too all 27 NIST sets are solved from
	// both starts; with 0.5 and 0.995 one of them is not.
	memory = 0.95
	// smallStep ends the search: a step, relative to the parameters, that
	// float64 hardly resolves.
	smallStep = 1e-13
	// offsetAtMinimum and stepAtMinimum are the tests named at LeastSquares:
	// an offset of 1e-4 is a ten-thousandth of the standard uncertainties, far
	// below what they mean, and far above the error of the Jacobian.
	offsetAtMinimum = 1e-4
	stepAtMinimum   = 1e-8
	// exactFit is the share of the first sum of squares at which nothing but
	// rounding is left.
	exactFit = 1e-26
)

// problem is what is to be minimised, and how.
type problem struct {
	n    int
	f    Residuals
	most int // iterations

	// For parameters that are logarithms. Without them: no bounds, steps
	// limited against the parameters themselves.
	lower, upper []float64
	reach        float64 // longest step of one parameter
	h            float64 // step of two-point differences

	offset float64 // relative offset at which to stop, 0 to go on while there is progress
	flat   float64 // relative progress that, several times over, ends the search
}

// search is the state of one descent; its slices are the workspace of all
// steps.
type search struct {
	problem
	p, r       []float64
	rss        float64
	rssStart   float64
	iterations int
	j          *mat.Dense // n x np
	free       []int      // parameters not held at a bound

	scale, norms, step, trial []float64
	rTrial                    []float64
	side                      [4][]float64

	factor  blas64.General // QR of the scaled free columns of j
	tau     []float64
	qr      []float64 // Q^T (-r)
	stacked blas64.General
	rhs     []float64
	work    []float64
}

func newSearch(pr problem, start []float64) *search {
	n, np := pr.n, len(start)
	s := &search{problem: pr, p: slices.Clone(start), j: mat.NewDense(n, np, nil)}
	pool := make([]float64, 7*n+7*np+n*np+2*np*np+64*(n+np))
	take := func(k int) []float64 {
		x := pool[:k:k]
		pool = pool[k:]
		return x
	}
	s.r, s.rTrial, s.qr = take(n), take(n), take(n)
	for k := range s.side {
		s.side[k] = take(n)
	}
	s.scale, s.norms, s.step, s.trial, s.tau = take(np), take(np), take(np), take(np), take(np)
	s.rhs = take(2 * np)
	s.factor.Data, s.stacked.Data = take(n*np), take(2*np*np)
	s.work = pool
	for c := range np {
		s.free = append(s.free, c)
	}
	return s
}

// descend goes down until a step brings nothing more.
func (s *search) descend() error {
	if !s.f(s.p, s.r) || !finite(s.r) {
		return errors.New("visco: the model is not defined at the starting values")
	}
	s.rss = sumSquares(s.r)
	s.rssStart = s.rss
	damping, stalled, slow := 1.0, 0, 0
	for s.iterations = 1; s.iterations <= s.most; s.iterations++ {
		if s.rss == 0 {
			return nil
		}
		if !s.linearise() {
			return ErrNoMinimum
		}
		if len(s.free) == 0 || s.offset > 0 && s.relativeOffset() <= s.offset {
			return nil
		}
		improved, small := false, false
		was := s.rss
		for range 60 {
			if !s.dampedStep(damping) {
				damping = math.Max(damping*4, 1e-12)
				continue
			}
			largest, ok := s.try()
			if !ok {
				damping *= 3 // a leap into a region where the model is flat
				continue
			}
			if s.f(s.trial, s.rTrial) && finite(s.rTrial) {
				if rss := sumSquares(s.rTrial); rss < s.rss {
					small = largest < smallStep || s.rss-rss <= 1e-15*s.rss
					copy(s.p, s.trial)
					copy(s.r, s.rTrial)
					s.rss = rss
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
		if was-s.rss < s.flat*was {
			slow++
		} else {
			slow = 0
		}
		if !improved || stalled >= 3 || slow >= 4 {
			return nil
		}
	}
	return ErrNoMinimum
}

// try proposes p + step, within bounds, and returns the largest relative change
// of a parameter. It refuses steps that are too long.
func (s *search) try() (largest float64, ok bool) {
	length, size := 0.0, 0.0
	for c, d := range s.step {
		if s.reach > 0 {
			d = math.Max(-s.reach, math.Min(s.reach, d))
		}
		x := s.p[c] + d
		if s.lower != nil {
			x = math.Max(s.lower[c], math.Min(s.upper[c], x))
		}
		d = x - s.p[c]
		s.trial[c] = x
		length = math.Hypot(length, s.scale[c]*d)
		size = math.Hypot(size, s.scale[c]*s.p[c])
		largest = math.Max(largest, math.Abs(d)/(math.Abs(s.p[c])+1e-300))
	}
	return largest, s.reach > 0 || length <= size
}

// linearise computes the Jacobian, holds parameters at bounds they press
// against, and factorises the rest: afterwards factor holds R and qr Q^T (-r).
func (s *search) linearise() bool {
	if !s.jacobian() {
		return false
	}
	np := len(s.p)
	s.free = s.free[:0]
	for c := range np {
		norm, slope := 0.0, 0.0
		for i := range s.n {
			x := s.j.At(i, c)
			norm += x * x
			slope += x * s.r[i]
		}
		s.norms[c] = math.Sqrt(norm)
		if s.reach > 0 {
			s.scale[c] = s.norms[c]
		} else {
			// Remembering a steep slope keeps steps short in a narrow valley
			// (Moré 1978, from memory, who never forgets); forgetting it slowly
			// lets them grow where the valley widens.
			s.scale[c] = math.Max(memory*s.scale[c], s.norms[c])
		}
		if s.scale[c] == 0 {
			s.scale[c] = 1
		}
		held := s.lower != nil && (s.p[c] <= s.lower[c] && slope > 0 || s.p[c] >= s.upper[c] && slope < 0)
		if !held {
			s.free = append(s.free, c)
		}
	}
	s.factorise(s.scale)
	return true
}

func (s *search) factorise(scale []float64) {
	nf := len(s.free)
	if nf == 0 {
		return
	}
	s.factor = blas64.General{Rows: s.n, Cols: nf, Stride: nf, Data: s.factor.Data[:s.n*nf]}
	for i := range s.n {
		for k, c := range s.free {
			s.factor.Data[i*nf+k] = s.j.At(i, c) / scale[c]
		}
		s.qr[i] = -s.r[i]
	}
	lapack64.Geqrf(s.factor, s.tau[:nf], s.work, len(s.work))
	lapack64.Ormqr(blas.Left, blas.Trans, s.factor, s.tau[:nf], column(s.qr), s.work, len(s.work))
}

func column(x []float64) blas64.General {
	return blas64.General{Rows: len(x), Cols: 1, Stride: 1, Data: x}
}

// relativeOffset is that of Bates and Watts.
func (s *search) relativeOffset() float64 {
	nf := len(s.free)
	along, across := sumSquares(s.qr[:nf]), sumSquares(s.qr[nf:])
	if along == 0 {
		return 0
	}
	return math.Sqrt(along / float64(nf) / (across / float64(max(1, s.n-nf))))
}

// dampedStep solves min |J d + r|^2 + damping |S d|^2 from the factors of J.
func (s *search) dampedStep(damping float64) bool {
	nf := len(s.free)
	s.stacked = blas64.General{Rows: 2 * nf, Cols: nf, Stride: nf, Data: s.stacked.Data[:2*nf*nf]}
	clear(s.stacked.Data)
	for k := range nf {
		copy(s.stacked.Data[k*nf+k:(k+1)*nf], s.factor.Data[k*nf+k:(k+1)*nf])
		s.stacked.Data[(nf+k)*nf+k] = math.Sqrt(damping)
	}
	rhs := s.rhs[:2*nf]
	copy(rhs, s.qr[:nf])
	clear(rhs[nf:])
	lapack64.Geqrf(s.stacked, s.tau[:nf], s.work, len(s.work))
	lapack64.Ormqr(blas.Left, blas.Trans, s.stacked, s.tau[:nf], column(rhs), s.work, len(s.work))
	most, least := 0.0, math.Inf(1)
	for k := range nf {
		x := math.Abs(s.stacked.Data[k*nf+k])
		most, least = math.Max(most, x), math.Min(least, x)
	}
	if !(least > 1e-15*most) {
		return false
	}
	blas64.Trsv(blas.NoTrans, blas64.Triangular{Uplo: blas.Upper, Diag: blas.NonUnit, N: nf, Stride: nf, Data: s.stacked.Data},
		blas64.Vector{N: nf, Inc: 1, Data: rhs})
	clear(s.step)
	for k, c := range s.free {
		s.step[c] = rhs[k] / s.scale[c]
	}
	return finite(s.step)
}

// polish takes undamped steps for as long as they get shorter: near the minimum
// the sum of squares is too flat, and too rough from rounding, to guide the last
// digits of the parameters; the normal equations are not.
func (s *search) polish() {
	last := math.Inf(1)
	for range 20 {
		size, ok := s.undamped()
		if !ok || !(size < last) || !s.f(s.trial, s.rTrial) || !finite(s.rTrial) || sumSquares(s.rTrial) > s.rss*(1+1e-9) {
			return
		}
		last = size
		copy(s.p, s.trial)
		copy(s.r, s.rTrial)
		s.rss = sumSquares(s.r)
	}
}

// undamped puts p and the undamped step into trial and returns the largest
// relative change of a parameter.
func (s *search) undamped() (size float64, ok bool) {
	if !s.jacobian() {
		return 0, false
	}
	for c := range s.p {
		s.scale[c] = columnNorm(s.j, c)
		if s.scale[c] == 0 {
			return 0, false
		}
	}
	s.factorise(s.scale)
	if !s.dampedStep(0) {
		return 0, false
	}
	for c, d := range s.step {
		s.trial[c] = s.p[c] + d
		size = math.Max(size, math.Abs(d)/(math.Abs(s.p[c])+1e-300))
	}
	return size, true
}

// settled tells whether p is a minimum, by the tests named at LeastSquares.
func (s *search) settled() error {
	if s.rss <= exactFit*s.rssStart {
		return nil
	}
	size, ok := s.undamped()
	if !ok {
		return ErrUndetermined
	}
	if s.relativeOffset() > offsetAtMinimum && size > stepAtMinimum {
		return ErrNoMinimum
	}
	return nil
}

// covariance is the inverse of J^T J. Where the data do not determine all
// parameters it is not ok: those without any influence have rows and columns of
// NaN, those that only a combination of is determined have huge variances.
// Parameters at a bound take part, because the others lean on them.
func (s *search) covariance() (cov *mat.SymDense, ok bool) {
	np := len(s.p)
	cov = mat.NewSymDense(np, nil)
	for a := range np {
		for b := a; b < np; b++ {
			cov.SetSym(a, b, math.NaN())
		}
	}
	if !s.jacobian() {
		return cov, false
	}
	var felt []int
	for c := range np {
		if s.norms[c] = columnNorm(s.j, c); s.norms[c] > 0 {
			felt = append(felt, c)
		}
	}
	if len(felt) == 0 {
		return cov, false
	}
	// Columns differ by many orders of magnitude: scale them to unit length
	// before factorising.
	scaled := mat.NewDense(s.n, len(felt), nil)
	for k, c := range felt {
		for i := range s.n {
			scaled.Set(i, k, s.j.At(i, c)/s.norms[c])
		}
	}
	var svd mat.SVD
	if !svd.Factorize(scaled, mat.SVDThin) {
		return cov, false
	}
	var v mat.Dense
	svd.VTo(&v)
	values := svd.Values(nil)
	ok = len(felt) == np
	for k := range values {
		if least := 1e-13 * values[0]; values[k] < least {
			values[k], ok = least, false
		}
	}
	for a, ca := range felt {
		for b := a; b < len(felt); b++ {
			x := 0.0
			for k, value := range values {
				x += v.At(a, k) * v.At(b, k) / (value * value)
			}
			cov.SetSym(ca, felt[b], x/(s.norms[ca]*s.norms[felt[b]]))
		}
	}
	return cov, ok
}

// jacobian takes derivatives by central differences: of fourth order with steps
// of 1e-4 of the parameter, or of two points h apart either way, whose error
// goes with h squared.
func (s *search) jacobian() bool {
	for c, p := range s.p {
		if s.h > 0 {
			s.p[c] = p + s.h
			ok := s.f(s.p, s.side[1])
			s.p[c] = p - s.h
			ok = s.f(s.p, s.side[0]) && ok
			s.p[c] = p
			if !ok || !finite(s.side[0]) || !finite(s.side[1]) {
				return false
			}
			for i := range s.n {
				s.j.Set(i, c, (s.side[1][i]-s.side[0][i])/(2*s.h))
			}
			continue
		}
		h := 1e-4 * math.Abs(p)
		if h == 0 {
			h = 1e-6
		}
		ok := false
		for range 8 {
			ok = true
			for k, m := range [4]float64{-2, -1, 1, 2} {
				s.p[c] = p + m*h
				if !s.f(s.p, s.side[k]) || !finite(s.side[k]) {
					ok = false
					break
				}
			}
			if ok {
				break
			}
			h /= 10
		}
		s.p[c] = p
		if !ok {
			return false
		}
		for i := range s.n {
			s.j.Set(i, c, (s.side[0][i]-8*s.side[1][i]+8*s.side[2][i]-s.side[3][i])/(12*h))
		}
	}
	return true
}

func columnNorm(j *mat.Dense, c int) float64 {
	return mat.Norm(j.ColView(c), 2)
}

func sumSquares(r []float64) float64 { return floats.Dot(r, r) }

func finite(r []float64) bool {
	for _, x := range r {
		if math.IsNaN(x) || math.IsInf(x, 0) {
			return false
		}
	}
	return true
}
