package harmonic

import (
	"fmt"
	"math"
)

// flicker relates, for noise with a spectral density of 1/f down to one cycle
// in four segments, the variance of the mean and of the slope of a segment to
// the variance s^2 of the means of its batches about the fitted trend.
type flicker struct {
	mean  float64 // variance of the mean / s^2
	slope float64 // variance of the slope, per half segment, / s^2
	dof   float64 // degrees of freedom of s^2 (the batches are not independent)
}

// flickerTable holds flicker for fewBatches and manyBatches and for a trend of
// degree 0, 1, 2. TestFlickerTable computes the figures from the spectrum.
var flickerTable = [2][3]flicker{
	{{0.452, 0.943, 4.58}, {0.599, 1.250, 4.77}, {0.717, 1.504, 4.39}},
	{{0.363, 0.750, 7.34}, {0.461, 0.953, 8.74}, {0.537, 1.113, 9.21}},
}

const (
	fewBatches  = 8
	manyBatches = 16
	// manyPoints is the number of points from which on there are manyBatches.
	manyPoints = 4 * manyBatches

	// Share of the expected white scatter that is not counted as slow noise.
	// With all of it, slow noise that is as big as the chance scatter of a few
	// batches is missed half of the time, and +-2u held the truth in 89 to
	// 93 % of trials of mixed noise. These shares were chosen by
	// TestMeanSlopeCoverage; they make u up to twice too large for noise that
	// is white.
	fewShare  = 0.6
	manyShare = 0.8
)

// slowNoise is what batches of residuals tell beyond the white-noise figures.
type slowNoise struct {
	excess float64 // variance of a batch mean above what white noise explains
	flicker
}

// slowness divides the segment into 8 batches of equal duration (16 from 64
// points on) and compares the scatter of the batch means of the residuals with
// what independent noise would give: of the variance sd^2 per raw sample, or of
// what neighbouring points show if that is less. The
// excess is taken for 1/f noise, of which the slowest part, that no batch can
// show, is bigger than what white noise would have there.
func slowness(p Points, residual []float64, sd float64, degree int) (slowNoise, error) {
	count, table, share := fewBatches, flickerTable[0][degree], fewShare
	if len(p.T) >= manyPoints {
		count, table, share = manyBatches, flickerTable[1][degree], manyShare
	}
	if len(p.T) < fewBatches {
		return slowNoise{}, fmt.Errorf("%d points: need at least %d, one for each batch", len(p.T), fewBatches)
	}
	from, to := p.bounds()
	var sum, weight [manyBatches]float64
	for i, t := range p.T {
		b := min(max(int(float64(count)*(t-from)/(to-from)), 0), count-1)
		sum[b] += p.W[i] * residual[i]
		weight[b] += p.W[i]
	}
	var scatter, all float64
	filled := 0
	for b := range count {
		if weight[b] == 0 {
			continue
		}
		scatter += sum[b] * sum[b] / weight[b]
		all += weight[b]
		filled++
	}
	dof := float64(filled - 1 - degree)
	if filled < fewBatches/2 {
		return slowNoise{}, fmt.Errorf("points in only %d of %d equal parts of the segment: need them in at least %d", filled, count, fewBatches/2)
	}
	variance := scatter / dof * float64(filled) / all
	white := math.Min(sd*sd, differences(p, residual)) * float64(filled) / all
	table.dof *= dof / float64(count-1-degree)
	return slowNoise{excess: math.Max(0, variance-share*white), flicker: table}, nil
}

// differences is the variance per raw sample that the differences of
// neighbouring points show (von Neumann). Slow noise hardly enters it, so it
// tells the white part of the noise where sd^2 holds both.
func differences(p Points, residual []float64) float64 {
	sum := 0.0
	for i := 1; i < len(residual); i++ {
		d := residual[i] - residual[i-1]
		sum += d * d / (1/p.W[i] + 1/p.W[i-1])
	}
	return sum / float64(len(residual)-1)
}

// combine adds to a white-noise variance (dof whiteDof) the slow part times
// factor, and widens by Student's t for the effective degrees of freedom
// (Welch and Satterthwaite, JCGM 100, G.4.1).
func (s slowNoise) combine(white, whiteDof, factor float64) (u, dof float64) {
	slow := factor * s.excess
	v := white + slow
	if v == 0 {
		return 0, whiteDof
	}
	a, b := white/v, slow/v // squares of v itself may leave the range of float64
	dof = 1 / (a*a/whiteDof + b*b/s.dof)
	return math.Sqrt(v) * studentFactor(math.Max(dof, 1)), dof
}

// MeanSlope fits a straight line to y over a segment without oscillation. It
// returns the mean over the segment and the slope per second, each with a
// standard uncertainty that is already widened by Student's t (+-2u holds
// 95.45 %), and the effective degrees of freedom of the mean.
//
// The uncertainty is the white-noise figure plus, in quadrature, what the means
// of 8 equal parts of the segment (16 from 64 points on) scatter about the line
// beyond it. That excess is taken for 1/f noise reaching down to one cycle in
// four segment lengths. Noise that dies out faster than a part is
// overestimated, white noise by up to a factor of 2. It stops being honest for
// noise that is slower still (a random walk, a drift of the zero): inside one
// segment that cannot be told from a mean and a slope.
//
// It fails with fewer than 8 points, and where gaps leave points in fewer than
// half of the 8 parts.
func MeanSlope(p Points, y []float64) (mean, uMean, slope, uSlope float64, dof int, err error) {
	fail := func(err error) (float64, float64, float64, float64, int, error) {
		nan := math.NaN()
		return nan, nan, nan, nan, 0, fmt.Errorf("mean and slope: %w", err)
	}
	if err := p.check(); err != nil {
		return fail(err)
	}
	if len(y) != len(p.T) {
		return fail(fmt.Errorf("%d values for %d points", len(y), len(p.T)))
	}
	if len(p.T) < fewBatches {
		return fail(fmt.Errorf("%d points: need at least %d, one for each batch", len(p.T), fewBatches))
	}
	from, to := p.bounds()
	centre, half := from+(to-from)/2, (to-from)/2
	a := NewAccumulator(2, 1)
	var row [2]float64
	for i, t := range p.T {
		row = [2]float64{1, (t - centre) / half}
		a.Add(row[:], p.W[i], y[i:i+1])
	}
	s, err := a.Solve()
	if err != nil {
		return fail(err)
	}
	c := s.Coefficients[0]
	residual := make([]float64, len(y))
	for i, t := range p.T {
		residual[i] = y[i] - c[0] - c[1]*(t-centre)/half
	}
	whiteDof := float64(s.N - 2)
	v := s.RSS[0] / whiteDof
	slow, err := slowness(p, residual, math.Sqrt(v), 1)
	if err != nil {
		return fail(err)
	}
	uMean, d := slow.combine(v*s.Covariance[0][0], whiteDof, slow.mean)
	uSlope, _ = slow.combine(v*s.Covariance[1][1], whiteDof, slow.slope)
	return c[0], uMean, c[1] / half, uSlope / half, max(1, int(d)), nil
}
