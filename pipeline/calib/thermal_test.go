package calib

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
)

// oscillator is a thermally driven harmonic oscillator, advanced exactly from
// sample to sample: its state (position, velocity) is a Gaussian process whose
// transition over a step is known in closed form for the mean, and whose noise
// follows from stationarity, covariance C - A C A'.
type oscillator struct {
	a11, a12, a21, a22 float64
	l11, l21, l22      float64
	x, v               float64
	rng                *rand.Rand
}

func newOscillator(ms, f0, q, rate float64, seed uint64) *oscillator {
	w0 := 2 * math.Pi * f0
	g := w0 / (2 * q)
	dt := 1 / rate
	o := &oscillator{rng: rand.New(rand.NewPCG(seed, 1))}
	e := math.Exp(-g * dt)
	var c, s float64 // cos(w dt) and sin(w dt)/w, or their hyperbolic kin
	if d := w0*w0 - g*g; d > 0 {
		w := math.Sqrt(d)
		c, s = math.Cos(w*dt), math.Sin(w*dt)/w
	} else {
		w := math.Sqrt(-d)
		c, s = math.Cosh(w*dt), math.Sinh(w*dt)/w
	}
	o.a11, o.a12 = e*(c+g*s), e*s
	o.a21, o.a22 = -e*w0*w0*s, e*(c-g*s)
	cx, cv := ms, ms*w0*w0
	q11 := cx - o.a11*o.a11*cx - o.a12*o.a12*cv
	q12 := -o.a11*o.a21*cx - o.a12*o.a22*cv
	q22 := cv - o.a21*o.a21*cx - o.a22*o.a22*cv
	o.l11 = math.Sqrt(q11)
	o.l21 = q12 / o.l11
	o.l22 = math.Sqrt(q22 - o.l21*o.l21)
	o.x, o.v = math.Sqrt(cx)*o.rng.NormFloat64(), math.Sqrt(cv)*o.rng.NormFloat64()
	return o
}

func (o *oscillator) next() float64 {
	a, b := o.rng.NormFloat64(), o.rng.NormFloat64()
	x, v := o.x, o.v
	o.x = o.a11*x + o.a12*v + o.l11*a
	o.v = o.a21*x + o.a22*v + o.l21*a + o.l22*b
	return o.x
}

// The oscillator's density integrates to its mean square (equipartition: kT/k),
// and at the resonance is 2 Q ms/(pi f0).
func TestOscillatorIntegral(t *testing.T) {
	for _, q := range []float64{0.7, 1.5, 5, 50} {
		const f0 = 7000.0
		sum := 0.0
		// In ln f the integrand is smooth and vanishes at both ends.
		const h = 1e-4
		for u := -12.0; u < 8; u += h {
			f := f0 * math.Exp(u)
			sum += Oscillator(f, 3, f0, q) * f * h
		}
		if math.Abs(sum-3) > 1e-4*3 { // the cut ends hold some 1e-5
			t.Errorf("Q %g: integral %g, want 3", q, sum)
		}
		if d := Oscillator(f0, 3, f0, q); math.Abs(d/(2*q*3/(math.Pi*f0))-1) > 1e-12 {
			t.Errorf("Q %g: density at resonance %g", q, d)
		}
	}
}

// White noise of variance s^2 has the one-sided density 2 s^2/rate (Parseval),
// and a bin scatters by 1/sqrt(Averages).
func TestWelch(t *testing.T) {
	var s Spectrum
	rng := rand.New(rand.NewPCG(1, 1))
	const rate, sd = 20000.0, 0.3
	for range 400_000 {
		s.Add(5 + sd*rng.NormFloat64()) // the mean must not leak
	}
	p, err := s.PSD(rate)
	if err != nil {
		t.Fatal(err)
	}
	mean, sq := 0.0, 0.0
	n := 0.0
	for _, d := range p.Density[3:] {
		mean += d
		sq += d * d
		n++
	}
	mean /= n
	want := 2 * sd * sd / rate
	// 2,000 bins of 184 averages, correlated by the window: 0.23 %.
	if math.Abs(mean/want-1) > 0.01 {
		t.Errorf("density %g, want %g", mean, want)
	}
	scatter := math.Sqrt(sq/n-mean*mean) / mean * math.Sqrt(p.Averages)
	if scatter < 0.93 || scatter > 1.07 {
		t.Errorf("bins scatter by %.3f of what %g averages should", scatter, p.Averages)
	}
	if _, err := new(Spectrum).PSD(1); err == nil {
		t.Error("a spectrum of nothing")
	}
}

// The spring constant of a 10 s record is found within 3 % at Q from 1.5 to 50,
// its uncertainty holds the truth, and the resonance and the quality factor are
// found too.
func TestSpringConstantFromThermalNoise(t *testing.T) {
	const k, temperature = 0.2, 298.15
	ms := Boltzmann * temperature / k // the phantom's beam has one mode only
	for _, c := range []struct{ q, f0, rate float64 }{{1.5, 3000, 40000}, {3, 5000, 50000}, {10, 8000, 50000}, {50, 12000, 50000}} {
		t.Run(fmt.Sprintf("Q %g", c.q), func(t *testing.T) {
			scores := 0.0
			const records = 6
			for seed := range uint64(records) {
				o := newOscillator(ms, c.f0, c.q, c.rate, 100+seed)
				rng := rand.New(rand.NewPCG(seed, 2))
				var s Spectrum
				slow := 0.0
				for range int(10 * c.rate) {
					slow += -slow*1e-3 + 1e-13*rng.NormFloat64() // slow noise
					s.Add(1e-7 + o.next() + slow + 3e-12*rng.NormFloat64())
				}
				p, err := s.PSD(c.rate)
				if err != nil {
					t.Fatal(err)
				}
				f, err := FitThermal(p)
				if err != nil {
					t.Fatal(err)
				}
				got, u := SpringConstant(f, 1, temperature, 0, 0)
				if math.Abs(got/k-1) > 0.03 {
					t.Errorf("k %.4g ± %.2g, truth %g", got, u, k)
				}
				scores += math.Pow((got-k)/u, 2) / records
				if math.Abs(f.Resonance/c.f0-1) > 0.02 || math.Abs(f.Quality/c.q-1) > 0.1 {
					t.Errorf("resonance %g, quality %g; truth %g, %g", f.Resonance, f.Quality, c.f0, c.q)
				}
			}
			// The mean of six squared scores: chi-squared/6, 99.9 % below 3.7.
			if scores > 3.7 || scores < 0.06 {
				t.Errorf("mean squared score %.2g: the uncertainty is not honest", scores)
			}
		})
	}
}

// The beam's modes share kT/k: factors published as 0.971 and 0.817, from
// memory; the rms thermal force sqrt(kT k) at 25 C and 0.2 N/m is 28.7 pN.
func TestFactors(t *testing.T) {
	if math.Abs(FactorDeflection-0.971) > 5e-4 || math.Abs(FactorSlope-0.817) > 5e-4 {
		t.Error("factors")
	}
	if f := math.Sqrt(Boltzmann * 298.15 * 0.2); math.Abs(f-28.7e-12) > 0.05e-12 {
		t.Errorf("%g N", f)
	}
	k, u := SpringConstant(Thermal{MeanSquare: 2e-20, UMeanSquare: 2e-22}, FactorSlope, 300, 3, 0.02)
	// Relative: 1 % mean square, 1 % temperature, twice 2 % sensitivity.
	if math.Abs(u/k-math.Sqrt(1e-4+1e-4+16e-4)) > 1e-12 {
		t.Errorf("%g ± %g", k, u)
	}
}

// Without a resonance in the band there is no spring constant.
func TestNoPeak(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 3))
	var s Spectrum
	for range 200_000 {
		s.Add(1e-11 * rng.NormFloat64())
	}
	p, err := s.PSD(20000)
	if err != nil {
		t.Fatal(err)
	}
	if f, err := FitThermal(p); !errors.Is(err, ErrPeak) {
		t.Errorf("%+v, %v", f, err)
	}
}
