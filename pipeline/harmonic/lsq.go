package harmonic

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/floats"
)

// blockRows is the number of samples that one orthogonal update takes in.
const blockRows = 64

// rankTolerance is the part of a column, relative to its length, that must be
// left after the columns before it have been taken out. The rounding left of an
// exactly dependent column is below 1e-14 for thousands of samples; the worst
// column of StRD Filip, which must pass, keeps 5e-8.
const rankTolerance = 1e-13

// Accumulator gathers weighted linear least squares in one pass: minimise
// sum w (y - sum_j c_j b_j)^2 for q channels that share the basis b_1..b_p.
//
// It holds the triangular factor R of the weighted basis matrix, Q'y, and the
// products of the residuals. Rows are taken in by blocks: Householder
// reflections of [R; block], so the figures are those of a QR factorisation of
// the whole matrix and not of normal equations, whose condition is squared.
// Memory does not grow with the number of samples and Add allocates nothing.
type Accumulator struct {
	p, q  int
	n     int
	sumW  float64
	r     [][]float64 // p rows of p+q: R (upper triangle) and Q'y
	size  []float64   // p: sum of w b_j^2
	rest  []float64   // q*q: products of what Q leaves of y
	block [][]float64 // p+q columns of blockRows
	fill  int
	err   error
}

// NewAccumulator returns an empty accumulator for p basis functions and q
// channels. Negative or zero p or q is reported by Solve.
func NewAccumulator(p, q int) *Accumulator {
	a := &Accumulator{p: p, q: q}
	if p < 1 || q < 1 {
		a.err = fmt.Errorf("least squares with %d basis functions and %d channels: need at least one of each", p, q)
		return a
	}
	a.r = matrix(p, p+q)
	a.size = make([]float64, p)
	a.rest = make([]float64, q*q)
	a.block = matrix(p+q, blockRows)
	return a
}

func matrix(rows, cols int) [][]float64 {
	all := make([]float64, rows*cols)
	m := make([][]float64, rows)
	for i := range m {
		m[i] = all[i*cols : (i+1)*cols : (i+1)*cols]
	}
	return m
}

// Add takes in one sample: the p values of the basis, its weight (> 0) and the
// q values measured. A sample that is not finite, or of the wrong length, is
// kept as the error of Solve.
func (a *Accumulator) Add(basis []float64, w float64, y []float64) {
	if a.err != nil {
		return
	}
	if len(basis) != a.p || len(y) != a.q {
		a.err = fmt.Errorf("least squares sample %d: %d basis values and %d channels, want %d and %d", a.n, len(basis), len(y), a.p, a.q)
		return
	}
	if !(w > 0) || math.IsInf(w, 0) {
		a.err = fmt.Errorf("least squares sample %d: weight %v, want a finite number above 0", a.n, w)
		return
	}
	s := math.Sqrt(w)
	for j, b := range basis {
		if b-b != 0 {
			a.err = fmt.Errorf("least squares sample %d: basis function %d is %v", a.n, j, b)
			return
		}
		v := s * b
		a.size[j] += v * v
		a.block[j][a.fill] = v
	}
	for k, v := range y {
		if v-v != 0 {
			a.err = fmt.Errorf("least squares sample %d: channel %d is %v", a.n, k, v)
			return
		}
		a.block[a.p+k][a.fill] = s * v
	}
	a.n++
	a.sumW += w
	a.fill++
	if a.fill == blockRows {
		a.absorb()
	}
}

// absorb reflects the block into R. Reflector j touches row j of R and the
// block only, because the rows of R below j are zero in column j.
func (a *Accumulator) absorb() {
	m := a.fill
	for j := 0; j < a.p; j++ {
		v := a.block[j][:m]
		sigma := floats.Dot(v, v)
		if sigma == 0 {
			continue
		}
		row := a.r[j]
		alpha := row[j]
		beta := -math.Copysign(math.Sqrt(alpha*alpha+sigma), alpha)
		tau := (beta - alpha) / beta
		floats.Scale(1/(alpha-beta), v)
		row[j] = beta
		for k := j + 1; k < a.p+a.q; k++ {
			c := a.block[k][:m]
			s := tau * (row[k] + floats.Dot(v, c))
			row[k] -= s
			floats.AddScaled(c, -s, v)
		}
	}
	for k := 0; k < a.q; k++ {
		for l := 0; l <= k; l++ {
			d := floats.Dot(a.block[a.p+k][:m], a.block[a.p+l][:m])
			a.rest[k*a.q+l] += d
			if l != k {
				a.rest[l*a.q+k] += d
			}
		}
	}
	a.fill = 0
}

// clone copies what absorb changes, so that Solve in the middle of the samples
// leaves the bits of the final result alone.
func (a *Accumulator) clone() *Accumulator {
	c := *a
	c.r = matrix(a.p, a.p+a.q)
	for i := range c.r {
		copy(c.r[i], a.r[i])
	}
	c.block = matrix(a.p+a.q, blockRows)
	for i := range c.block {
		copy(c.block[i], a.block[i])
	}
	c.rest = append([]float64(nil), a.rest...)
	return &c
}

// Solution is the least squares solution for q channels on p basis functions.
type Solution struct {
	Coefficients [][]float64 // [q][p]
	Covariance   [][]float64 // [p][p] (B'WB)^-1: times the variance of a sample of weight 1 it is the covariance
	RSS          []float64   // [q] weighted residual sum of squares
	Products     [][]float64 // [q][q] weighted sums of products of residuals of two channels; diagonal RSS
	N            int         // samples
	SumW         float64
}

// RankError tells which basis function cannot be told from those before it.
type RankError struct {
	Column int     // index into the basis, from 0
	Left   float64 // part of the column that is not a combination of earlier ones
}

func (e *RankError) Error() string {
	return fmt.Sprintf("least squares: basis function %d is a combination of those before it (only %.2g of it is new); leave it out or give samples that tell it apart", e.Column, e.Left)
}

// Solve returns the solution for the samples so far; more may be added after
// it. It fails on the first bad sample, with fewer samples than basis
// functions, and with a *RankError.
func (a *Accumulator) Solve() (*Solution, error) {
	if a.err != nil {
		return nil, a.err
	}
	if a.n < a.p {
		return nil, fmt.Errorf("least squares: %d samples for %d basis functions, need at least %d", a.n, a.p, a.p)
	}
	c := a.clone()
	c.absorb()
	p, q := a.p, a.q
	for j := range p {
		size := math.Sqrt(a.size[j])
		if d := math.Abs(c.r[j][j]); !(d > rankTolerance*size) {
			left := 0.0
			if size > 0 {
				left = d / size
			}
			return nil, &RankError{Column: j, Left: left}
		}
	}
	s := &Solution{
		Coefficients: matrix(q, p), Covariance: matrix(p, p),
		RSS: make([]float64, q), Products: matrix(q, q), N: a.n, SumW: a.sumW,
	}
	for k := range q {
		x := s.Coefficients[k]
		for i := p - 1; i >= 0; i-- {
			v := c.r[i][p+k]
			for j := i + 1; j < p; j++ {
				v -= c.r[i][j] * x[j]
			}
			x[i] = v / c.r[i][i]
			if x[i]-x[i] != 0 {
				return nil, fmt.Errorf("least squares: channel %d, coefficient %d is out of the range of float64; scale the basis or the data", k, i)
			}
		}
		copy(s.Products[k], c.rest[k*q:(k+1)*q])
		s.RSS[k] = s.Products[k][k]
		if s.RSS[k]-s.RSS[k] != 0 {
			return nil, fmt.Errorf("least squares: the sum of squares of channel %d is out of the range of float64; scale the data", k)
		}
	}
	inv := matrix(p, p) // R^-1, upper triangle
	for j := range p {
		inv[j][j] = 1 / c.r[j][j]
		for i := j - 1; i >= 0; i-- {
			v := 0.0
			for k := i + 1; k <= j; k++ {
				v -= c.r[i][k] * inv[k][j]
			}
			inv[i][j] = v / c.r[i][i]
		}
	}
	for i := range p {
		for j := range p {
			v := 0.0
			for k := max(i, j); k < p; k++ {
				v += inv[i][k] * inv[j][k]
			}
			s.Covariance[i][j] = v
		}
	}
	return s, nil
}
