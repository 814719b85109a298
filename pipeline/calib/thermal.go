package calib

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"
)

// Boltzmann is the Boltzmann constant in J/K, exact in the SI of 2019.
const Boltzmann = 1.380649e-23

// Factors of equipartition for the first mode of a rectangular beam, computed
// from beam theory: the mean square of the first mode's end deflection is
// 0.9707 of kT/k; where the sensor reads the slope of the beam's end and its
// sensitivity was found by pressing on a hard surface, 0.8174.
const (
	FactorDeflection = 0.97068818
	FactorSlope      = 0.81743479
)

// Thermal is a fitted spectrum of thermal noise: a simple harmonic oscillator,
// white noise and 1/f noise. Covariance-based standard uncertainties.
type Thermal struct {
	MeanSquare, UMeanSquare float64 // of the oscillator, unit^2
	Resonance, UResonance   float64 // Hz, undamped
	Quality, UQuality       float64
	White                   float64 // unit^2/Hz
	OneOverF                float64 // unit^2, density at 1 Hz
	Misfit                  float64 // mean squared relative residual over what the averages allow; near 1 for a good fit
}

// Density returns the fitted one-sided density at f in Hz of a record sampled
// at rate, with what lies above half the rate folded back.
func (t Thermal) Density(f, rate float64) float64 {
	return density([]float64{math.Log(t.MeanSquare), math.Log(t.Resonance), math.Log(t.Quality), math.Log(t.White), math.Log(t.OneOverF)}, f, rate)
}

// Oscillator is the one-sided density of a harmonic oscillator of mean square
// ms, integral over all f equal to ms:
//
//	S(f) = (2 ms/(pi f0 Q)) / [(1 - f^2/f0^2)^2 + (f/(f0 Q))^2].
func Oscillator(f, ms, f0, q float64) float64 {
	x := f / f0
	return 2 * ms / (math.Pi * f0 * q) / ((1-x*x)*(1-x*x) + x*x/(q*q))
}

func density(p []float64, f, rate float64) float64 {
	ms, f0, q := math.Exp(p[0]), math.Exp(p[1]), math.Exp(p[2])
	return Oscillator(f, ms, f0, q) + Oscillator(rate-f, ms, f0, q) + math.Exp(p[3]) + math.Exp(p[4])/f
}

// hannBins is by how much neighbouring bins of a Hann window overstate the
// number of independent ones: 1 + 2 (4/9 + 1/36), from the squared
// autocorrelation of its transform.
const hannBins = 1 + 2*(4./9+1./36)

// ErrPeak says that the resonance lies outside the band, or cannot be told from
// the noise.
var ErrPeak = errors.New("the resonance lies outside the recorded band or drowns in the noise: sample at more than four times the resonance, or check the laser and the deflection signal")

// FitThermal fits a spectrum by maximum likelihood. A bin averaged n times is
// gamma distributed about the density S with standard deviation S/sqrt(n), so
// the likelihood is that of a generalised linear model and is maximised by
// weighted least squares with weights 1/S^2, made anew at each step (McCullagh
// and Nelder, Generalized Linear Models, 1989, from memory). A least-squares
// fit of the logarithm would be biased. The resonance must lie below 0.45 of
// the rate and above ten bins.
func FitThermal(s PSD) (Thermal, error) {
	p, err := startingValues(s)
	if err != nil {
		return Thermal{}, err
	}
	const np = 5
	n := len(s.Frequency)
	deviance := func(p []float64) float64 {
		d := 0.0
		for i, f := range s.Frequency {
			m := density(p, f, s.Rate)
			d += s.Density[i]/m + math.Log(m)
		}
		return d
	}
	now := deviance(p)
	j := mat.NewDense(n, np, nil)
	r := mat.NewVecDense(n, nil)
	damping := 1e-3
	for range 200 {
		linearise(s, p, j, r)
		improved := false
		for range 20 {
			step, ok := solve(j, r, damping)
			if !ok {
				damping = math.Max(10*damping, 1e-9)
				continue
			}
			q := make([]float64, np)
			size := 0.0
			for k := range q {
				q[k] = p[k] + math.Max(-1, math.Min(1, step[k]))
				size = math.Max(size, math.Abs(step[k]))
			}
			if d := deviance(q); d < now {
				improved = now-d > 1e-10*math.Abs(now) && size > 1e-9
				p, now = q, d
				damping /= 5
				break
			}
			damping = math.Max(5*damping, 1e-9)
		}
		if !improved {
			break
		}
	}
	linearise(s, p, j, r)
	var normal, inverse mat.Dense
	normal.Mul(j.T(), j)
	// Parameters that the data do not need (no 1/f noise, say) have no
	// curvature; a weak prior of one decade keeps the rest readable.
	for k := range np {
		normal.Set(k, k, normal.At(k, k)+hannBins/(s.Averages*2.3*2.3))
	}
	if err := inverse.Inverse(&normal); err != nil {
		return Thermal{}, fmt.Errorf("the spectrum does not determine the oscillator: %w", err)
	}
	u := func(k int) float64 { return math.Sqrt(inverse.At(k, k) * hannBins / s.Averages) }
	t := Thermal{MeanSquare: math.Exp(p[0]), Resonance: math.Exp(p[1]), Quality: math.Exp(p[2]), White: math.Exp(p[3]), OneOverF: math.Exp(p[4])}
	t.UMeanSquare, t.UResonance, t.UQuality = t.MeanSquare*u(0), t.Resonance*u(1), t.Quality*u(2)
	rss := mat.Dot(r, r)
	t.Misfit = rss * s.Averages / float64(n-np)
	if t.Resonance > 0.45*s.Rate || t.Resonance < 10*s.Frequency[0] || u(0) > 0.3 || Oscillator(t.Resonance, t.MeanSquare, t.Resonance, t.Quality) < t.White {
		return t, ErrPeak
	}
	return t, nil
}

// linearise computes relative residuals (data - model)/model and the relative
// derivatives of the model by its logarithmic parameters.
func linearise(s PSD, p []float64, j *mat.Dense, r *mat.VecDense) {
	const h = 1e-5
	q := append([]float64(nil), p...)
	for i, f := range s.Frequency {
		m := density(p, f, s.Rate)
		r.SetVec(i, s.Density[i]/m-1)
		for k := range p {
			q[k] = p[k] + h
			up := density(q, f, s.Rate)
			q[k] = p[k] - h
			down := density(q, f, s.Rate)
			q[k] = p[k]
			j.Set(i, k, (up-down)/(2*h*m))
		}
	}
}

func solve(j *mat.Dense, r *mat.VecDense, damping float64) ([]float64, bool) {
	var a mat.Dense
	var b, x mat.VecDense
	a.Mul(j.T(), j)
	b.MulVec(j.T(), r)
	n, _ := a.Dims()
	for k := range n {
		a.Set(k, k, a.At(k, k)*(1+damping)+1e-12)
	}
	if err := x.SolveVec(&a, &b); err != nil {
		return nil, false
	}
	out := make([]float64, n)
	for k := range out {
		out[k] = x.AtVec(k)
		if math.IsNaN(out[k]) {
			return nil, false
		}
	}
	return out, true
}

// startingValues reads the oscillator roughly off the spectrum: the floor from
// its lowest tenth, the resonance from the largest mean over a few bins times
// frequency (which lifts a damped peak over 1/f noise).
func startingValues(s PSD) ([]float64, error) {
	n := len(s.Density)
	const half = 8
	floor, lowest := math.Inf(1), 0
	for i := 0; i+n/20 < n; i += max(1, n/40) {
		m := 0.0
		for _, d := range s.Density[i : i+n/20] {
			m += d / float64(n/20)
		}
		if m < floor {
			floor, lowest = m, i
		}
	}
	best, peak, height := 0.0, 0, 0.0
	for i := half; i+half < n; i++ {
		m := 0.0
		for _, d := range s.Density[i-half : i+half+1] {
			m += d / (2*half + 1)
		}
		if x := (m - 0.9*floor) * s.Frequency[i]; x > best {
			best, peak, height = x, i, m-0.9*floor
		}
	}
	if peak == 0 || !(height > 0) {
		return nil, ErrPeak
	}
	_ = lowest
	// Width at half height gives Q, as far as the peak stands out.
	lo, hi := peak, peak
	for lo > 0 && s.Density[lo]-floor > height/2 {
		lo--
	}
	for hi < n-1 && s.Density[hi]-floor > height/2 {
		hi++
	}
	f0 := s.Frequency[peak]
	q := math.Max(0.7, math.Min(200, f0/math.Max(s.Frequency[hi]-s.Frequency[lo], 3*s.Frequency[0])))
	ms := math.Pi * f0 / (2 * q) * height
	return []float64{math.Log(ms), math.Log(f0), math.Log(q), math.Log(floor * 0.9), math.Log(floor * s.Frequency[0])}, nil
}

// SpringConstant is k = factor kT/<x^2> in N/m, with the relative uncertainties
// of mean square, temperature and deflection sensitivity (twice: it enters
// squared) combined (JCGM 100).
func SpringConstant(t Thermal, factor, temperatureK, uTemperatureK, relSensitivity float64) (k, u float64) {
	k = factor * Boltzmann * temperatureK / t.MeanSquare
	return k, k * math.Sqrt(math.Pow(t.UMeanSquare/t.MeanSquare, 2)+math.Pow(uTemperatureK/temperatureK, 2)+4*relSensitivity*relSensitivity)
}
