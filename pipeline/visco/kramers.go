package visco

import (
	"errors"
	"math"
	"slices"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"
)

// Consistency is the outcome of a Kramers-Kronig check.
type Consistency struct {
	ChiSquared float64
	Freedom    int
	P          float64 // probability of a larger chi-squared from noise alone
}

// KramersKronig tests whether K' and K” of a series belong together. With five
// to ten frequencies the integrals cannot be taken. Instead K' and K” are
// fitted together by what every passive relaxing material is made of, Maxwell
// elements, a spring and a dashpot with coefficients that are not negative: the
// relations hold for each of them, so what is left of the data must be noise.
// (Boukamp, J. Electrochem. Soc. 142, 1995, does so for impedances with few
// elements of either sign; a dense row of positive ones, twelve a decade to two
// decades beyond the measured times, also holds the materials that a few
// elements cannot describe. Both from memory.)
//
// Given which coefficients are positive, chi-squared has as many degrees of
// freedom as there are values less positive coefficients (the conditional test
// of order-restricted inference, Wollan and Dykstra 1986, from memory). For
// materials of one or two elements, which lie on the edge of what positive
// coefficients can do, that is not exact: where P is below 5 %, the models of
// Models are tried as well and the largest probability counts.
//
// Calling a series inconsistent for P < p has about a share p of false alarms
// or fewer, where noise is as large as the uncertainties say: shown by
// simulation in the tests. A modulus that falls with frequency, as the inertia
// of a plate makes it, a loss below zero, and a lag that adds or takes away
// phase fail the check. It needs at least four different frequencies.
func KramersKronig(series []Point) (Consistency, error) {
	s, err := sorted(series)
	if err != nil {
		return Consistency{}, err
	}
	different := 1
	for i := 1; i < len(s); i++ {
		if s[i].FrequencyHz > s[i-1].FrequencyHz {
			different++
		}
	}
	if different < 4 {
		return Consistency{}, errors.New("visco: the Kramers-Kronig check needs at least four frequencies")
	}
	a, b := relaxingMaterial(s)
	rss, positive, err := nonNegative(a, b)
	if err != nil {
		return Consistency{}, err
	}
	c := Consistency{rss, b.Len() - positive, 1}
	if c.Freedom > 0 {
		c.P = survival(rss, c.Freedom)
	}
	if c.P < 0.05 {
		if r, err := Rank(s); err == nil {
			for _, f := range r.Fits {
				if p := survival(f.ChiSquared, f.Freedom); p > c.P {
					c = Consistency{f.ChiSquared, f.Freedom, p}
				}
			}
		}
	}
	return c, nil
}

func survival(chiSquared float64, freedom int) float64 {
	return distuv.ChiSquared{K: float64(freedom)}.Survival(chiSquared)
}

const (
	timesPerDecade = 12    // a Maxwell element between two of the row is then matched to 0.1 %
	timesBeyond    = 100.0 // farther out, elements are like the spring and the dashpot to a part in 10^4
)

// relaxingMaterial returns the weighted columns of dashpot, Maxwell elements
// from fast to slow, and spring, each of unit length, and the weighted data.
func relaxingMaterial(s []Point) (*mat.Dense, *mat.VecDense) {
	short, long := 1/(2*math.Pi*s[len(s)-1].FrequencyHz*timesBeyond), timesBeyond/(2*math.Pi*s[0].FrequencyHz)
	n := int(math.Ceil(timesPerDecade * math.Log10(long/short)))
	a, b := mat.NewDense(2*len(s), n+3, nil), mat.NewVecDense(2*len(s), nil)
	for i, x := range s {
		w := 2 * math.Pi * x.FrequencyHz
		set := func(c int, k complex128) {
			a.Set(2*i, c, real(k)/x.UStorage)
			a.Set(2*i+1, c, imag(k)/x.ULoss)
		}
		set(0, complex(0, w*short))
		for e := range n + 1 {
			set(1+e, element(1, w*short*math.Pow(long/short, float64(e)/float64(n))))
		}
		set(n+2, 1)
		b.SetVec(2*i, real(x.K)/x.UStorage)
		b.SetVec(2*i+1, imag(x.K)/x.ULoss)
	}
	for c := range n + 3 {
		col := a.ColView(c).(*mat.VecDense)
		col.ScaleVec(1/mat.Norm(col, 2), col)
	}
	return a, b
}

// nonNegative minimises |A x - b|^2 for x >= 0 by the active set method of
// Lawson and Hanson (Solving Least Squares Problems, 1974, chapter 23; from
// memory) and returns the minimum and how many x are positive. The columns of A
// have unit length.
func nonNegative(a *mat.Dense, b *mat.VecDense) (rss float64, positive int, err error) {
	m, n := a.Dims()
	x := make([]float64, n)
	in := make([]bool, n)
	rest := mat.NewVecDense(m, nil)
	rest.CloneFromVec(b)
	var slope mat.VecDense
	small := 1e-10 * mat.Norm(b, 2)
	for range 3 * n {
		slope.MulVec(a.T(), rest)
		next := -1
		for c := range n {
			if !in[c] && slope.AtVec(c) > small && (next < 0 || slope.AtVec(c) > slope.AtVec(next)) {
				next = c
			}
		}
		if next < 0 || positive == m {
			return mat.Dot(rest, rest), positive, nil
		}
		in[next] = true
		for {
			var cols []int
			for c := range n {
				if in[c] {
					cols = append(cols, c)
				}
			}
			y, ok := solveColumns(a, b, cols)
			if !ok || x[next] == 0 && y[slices.Index(cols, next)] <= 0 {
				// Rounding: the column brings nothing that the others have not.
				in[next] = false
				return mat.Dot(rest, rest), positive, nil
			}
			// Go towards y until the first coefficient is zero.
			step, last := 1.0, -1
			for k, c := range cols {
				if y[k] > 0 {
					continue
				}
				t := 0.0
				if x[c] > 0 {
					t = x[c] / (x[c] - y[k])
				}
				if t < step || last < 0 {
					step, last = t, c
				}
			}
			for k, c := range cols {
				x[c] += step * (y[k] - x[c])
			}
			if last < 0 {
				break
			}
			for _, c := range cols {
				if c == last || x[c] <= 0 {
					x[c], in[c] = 0, false
				}
			}
		}
		positive = 0
		rest.CloneFromVec(b)
		for c := range n {
			if in[c] {
				positive++
				rest.AddScaledVec(rest, -x[c], a.ColView(c))
			}
		}
	}
	return 0, 0, errors.New("visco: the Kramers-Kronig check does not settle")
}

// solveColumns is the plain least squares fit of some columns.
func solveColumns(a *mat.Dense, b *mat.VecDense, cols []int) ([]float64, bool) {
	m, _ := a.Dims()
	if len(cols) > m {
		return nil, false
	}
	sub := mat.NewDense(m, len(cols), nil)
	for k, c := range cols {
		for i := range m {
			sub.Set(i, k, a.At(i, c))
		}
	}
	var qr mat.QR
	qr.Factorize(sub)
	var y mat.VecDense
	if err := qr.SolveVecTo(&y, false, b); err != nil {
		var ill mat.Condition
		if !errors.As(err, &ill) || math.IsInf(float64(ill), 0) {
			return nil, false
		}
	}
	return y.RawVector().Data, true
}
