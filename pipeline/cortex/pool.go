package cortex

import (
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"
)

// Pooled is the estimate for a condition from several cells that differ and are
// each uncertain.
type Pooled struct {
	Cells     int
	Mean      Quantity // of the cells' true values
	Low, High float64  // 95 % interval of the mean
	Between   float64  // standard deviation of the true values between cells
	// PredictLow and PredictHigh hold a further cell's true value with 95 %
	// probability.
	PredictLow, PredictHigh float64
	Q                       float64 // Cochran's weighted scatter about the mean, Cells-1 degrees of freedom
	P                       float64 // probability of a larger Q were all cells alike

	// The plain median with its distribution-free interval (order
	// statistics); absent (MedianCover 0) with fewer than 6 cells, whose
	// whole range covers less than 95 %.
	Median                float64
	MedianLow, MedianHigh float64
	MedianCover           float64
}

// Pool estimates mean and spread of a quantity over cells by random effects:
// value i is drawn about the mean with variance tau^2 + u_i^2. tau^2 is by
// restricted maximum likelihood, the interval of the mean by Hartung and Knapp
// with Student's t, never narrower than the plain one (Viechtbauer, J. Educ.
// Behav. Stat. 30, 2005; Hartung and Knapp, Stat. Med. 20, 2001; both from
// memory).
//
// It needs two cells with positive uncertainties. A quantity with a skew
// uncertainty (a modulus) is better pooled as its logarithm.
func Pool(cells []Quantity) (*Pooled, error) {
	n := len(cells)
	if n < 2 {
		return nil, fmt.Errorf("%d cells: expected two at least", n)
	}
	var y, v []float64
	for i, c := range cells {
		if math.IsNaN(c.Value) || math.IsInf(c.Value, 0) || !(c.U > 0) || math.IsInf(c.U, 0) {
			return nil, fmt.Errorf("cell %d: %g +- %g: expected a finite value and a positive uncertainty", i+1, c.Value, c.U)
		}
		y, v = append(y, c.Value), append(v, c.U*c.U)
	}
	// Sums of the weights 1/(v + tau2) that everything is made of.
	weigh := func(tau2 float64) (mean, w1, w2, scatter, scatter2 float64) {
		var wy float64
		for i := range y {
			w := 1 / (v[i] + tau2)
			w1 += w
			w2 += w * w
			wy += w * y[i]
		}
		mean = wy / w1
		for i := range y {
			w, d := 1/(v[i]+tau2), y[i]-mean
			scatter += w * d * d
			scatter2 += w * w * d * d
		}
		return
	}
	p := &Pooled{Cells: n}
	var w1, w2, w3, scatter2 float64
	_, _, _, p.Q, _ = weigh(0)
	p.P = distuv.ChiSquared{K: float64(n - 1)}.Survival(p.Q)
	var tau2 float64 // start: the plain variance
	for _, a := range y {
		for _, b := range y {
			tau2 += (a - b) * (a - b) / float64(2*n*(n-1))
		}
	}
	scale := tau2 + slices.Min(v)
	// Fisher scoring on the restricted likelihood, whose score and
	// information with P = W - W 1 1' W / sum w are
	// 2 U = y'PPy - tr P and 2 I = tr PP.
	for range 200 {
		_, w1, w2, _, scatter2 = weigh(tau2)
		w3 = 0
		for i := range v {
			w := 1 / (v[i] + tau2)
			w3 += w * w * w
		}
		next := max(tau2+(scatter2-(w1-w2/w1))/(w2-2*w3/w1+w2*w2/(w1*w1)), 0)
		done := math.Abs(next-tau2) < 1e-10*scale
		if tau2 = next; done {
			break
		}
	}
	mean, w1, _, scatter, _ := weigh(tau2)
	se := math.Sqrt(max(1, scatter/float64(n-1)) / w1)
	t := distuv.StudentsT{Mu: 0, Sigma: 1, Nu: float64(n - 1)}.Quantile(0.975)
	p.Mean, p.Between = Quantity{mean, se}, math.Sqrt(tau2)
	p.Low, p.High = mean-t*se, mean+t*se
	wide := t * math.Sqrt(tau2+se*se)
	p.PredictLow, p.PredictHigh = mean-wide, mean+wide

	slices.Sort(y)
	p.Median = (y[(n-1)/2] + y[n/2]) / 2
	// The k-th values from either end hold the median with probability
	// 1 - 2 P(fewer than k of n below it).
	half := distuv.Binomial{N: float64(n), P: 0.5}
	for k := 1; k <= n/2; k++ {
		if cover := 1 - 2*half.CDF(float64(k-1)); cover >= 0.95 {
			p.MedianLow, p.MedianHigh, p.MedianCover = y[k-1], y[n-k], cover
		}
	}
	return p, nil
}
