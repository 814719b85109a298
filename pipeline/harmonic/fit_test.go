package harmonic

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// sineCase is a deterministic record: y = A sin(2 pi f t + phi) + C + drift t +
// e, e uniform of standard deviation sigma from the generator of NIST SP 1065
// (n' = 16807 n mod 2^31-1, first n 1234567890), t = k/fs.
type sineCase struct {
	n                              int
	fs, f, a, phi, c, sigma, drift float64
}

func sineCases() map[string]sineCase {
	return map[string]sineCase{
		"A": {200, 100, 10, 1.5, 0.7, 0.25, 0, 0},
		"B": {200, 100, 10, 1.5, 0.7, 0.25, 0.05, 0},
		"C": {1000, 50, 0.137, 3e-9, -2.1, 1e-8, 2e-10, 0},
		"D": {37, 10, 0.83, 1, 3, -4, 0.2, 0},
		"E": {500, 250, 1, 2, 1, 0.2, 0.1, 0.3},
	}
}

func (c sineCase) record() (Points, []float64) {
	p, y := even(c.n, 1, c.fs), make([]float64, c.n)
	seed := uint64(1234567890)
	for k := range y {
		t := float64(k) / c.fs
		p.T[k] = t
		e := c.sigma * math.Sqrt(12) * (float64(seed)/2147483647 - 0.5)
		seed = 16807 * seed % 2147483647
		y[k] = c.a*math.Sin(2*math.Pi*c.f*t+c.phi) + c.c + c.drift*t + e
	}
	return p, y
}

// TestSineRecords: least squares solutions of the five records, computed in
// 40-digit arithmetic (mpmath, own computation; the model is the three- and
// four-parameter fit of IEEE 1057). Columns: cos and sin coefficient, offset at
// t = 0, slope, frequency, sum of squares, and standard uncertainties.
func TestSineRecords(t *testing.T) {
	cases := []struct {
		record                string
		free                  bool
		trend                 int
		a, b, c, slope, f     float64
		rss, sd, uA, uPhi, uF float64
	}{
		{"A", false, 0, 0.96632653085653605, 1.147263280926733, 0.25, 0, 10, 0, 0, 0, 0, 0},
		{"A", true, 0, 0.96632653085653679, 1.1472632809267324, 0.25, 0, 9.9999999999999999, 0, 0, 0, 0, 0},
		{"B", false, 0, 0.97098037873888506, 1.1417669540971286, 0.24822580768420629, 0, 10, 0.50879679709300516, 0.050820516116428095, 0.005082051612, 0.003390721924, 0},
		{"B", true, 0, 0.97920979733413117, 1.1346476520044253, 0.24829282786248647, 0, 9.9988449212176583, 0.50485815043592149, 0.050752407725931499, 0.005075296099, 0.006778935709, 0.0009337073176},
		{"C", false, 0, -2.6000396586766063e-9, -1.5006797675719073e-9, 9.9914550940022047e-9, 0, 0.137, 3.9762657859565814e-17, 1.9970554517560968e-10, 8.712442613e-12, 0.003079567195, 0},
		{"C", true, 0, -2.5878632083080962e-9, -1.5216074091898049e-9, 9.9919328256683331e-9, 0, 0.13712849789584238, 3.9680236585152768e-17, 1.9959858457667684e-10, 8.707725473e-12, 0.006418232611, 8.939238328e-5},
		{"D", false, 0, 0.078036514411598912, -1.0121391633144133, -4.0247224825776523, 0, 0.83, 1.3339399089627531, 0.19807454842608785, 0.04658636381, 0.04487999316, 0},
		{"D", true, 0, 0.11256517532711232, -1.0107663309937751, -4.0251350563380981, 0, 0.8329728456579667, 1.3255023302539535, 0.20041640970844387, 0.04734778022, 0.08628803548, 0.006562088874},
		{"E", false, 0, 1.6876378068419425, 0.97230960212033719, 0.49638641050303123, 0, 1, 17.645880892414958, 0.18842714912665294, 0.01191717929, 0.006118613341, 0},
		{"E", true, 0, 1.6620742140369357, 1.0124852621363662, 0.49037733166514478, 0, 1.0036067645371526, 17.515478096181991, 0.18791876942868885, 0.01190301947, 0.01369337399, 0.001827925768},
		{"E", false, 1, 1.6888398210806056, 1.0679578209569021, 0.19648385795657519, 0.30050355966578761, 1, 4.8830495165822824, 0.099221257280560837, 0.006440201139, 0.003332478016, 0},
		{"E", true, 1, 1.6882124345371535, 1.0688618179076421, 0.19642024976804351, 0.30042767409432239, 1.0000831832487895, 4.8829723789799336, 0.099320645711785052, 0, 0, 0.0009402196807},
	}
	for _, c := range cases {
		t.Run(fmt.Sprintf("%s free=%v trend=%d", c.record, c.free, c.trend), func(t *testing.T) {
			p, y := sineCases()[c.record].record()
			m := Model{Trend: c.trend, Harmonics: 1}
			f := c.f
			if c.free {
				var u float64
				var err error
				f, u, err = RefineFrequency(p, y, sineCases()[c.record].f*1.07, m)
				if err != nil {
					t.Fatal(err)
				}
				// The sum of squares is flat at its minimum, Gauss-Newton stops at
				// rounding: 12 digits of f where u/f is 1e-4 to 1e-2.
				close(t, "frequency", f, c.f, 1e-12*c.f)
				if c.uF > 0 {
					close(t, "u of frequency", u, c.uF, 1e-7*c.uF)
				}
			}
			fit, err := FitSine(p, f, [][]float64{y}, m)
			if err != nil {
				t.Fatal(err)
			}
			ch := fit.Channel(0)
			amp := math.Hypot(c.a, c.b)
			close(t, "cos", real(ch.X[0]), c.a, 1e-10*amp)
			close(t, "sin", -imag(ch.X[0]), c.b, 1e-10*amp)
			close(t, "slope", ch.Slope, c.slope, 1e-10*(1+math.Abs(c.slope))*amp)
			close(t, "offset", ch.Centre-ch.Slope*fit.Centre, c.c, 1e-10*(amp+math.Abs(c.c)))
			if c.rss == 0 {
				if ch.SD > 1e-14 {
					t.Errorf("residual %v of a record without noise", ch.SD)
				}
				return
			}
			close(t, "RSS", ch.RSS, c.rss, 1e-10*c.rss)
			if c.free {
				// A free frequency takes one more degree of freedom than FitSine
				// knows of.
				close(t, "sd", math.Sqrt(ch.RSS/float64(fit.N-fit.basis.columns()-1)), c.sd, 1e-10*c.sd)
				return
			}
			close(t, "sd", ch.SD, c.sd, 1e-10*c.sd)
			if c.trend == 0 {
				// Published to 10 digits. u of amplitude and phase from those of
				// Re and Im and their covariance.
				v, turn := ch.SD*ch.SD, fit.toZero(0)
				aa, bb, ab := fit.solution.Covariance[1][1], fit.solution.Covariance[2][2], fit.solution.Covariance[1][2]
				x := ch.X[0] / turn
				A, B := real(x), -imag(x)
				close(t, "u of amplitude", math.Sqrt(v*(A*A*aa+B*B*bb+2*A*B*ab))/amp, c.uA, 1e-8*c.uA)
				close(t, "u of phase", math.Sqrt(v*(B*B*aa+A*A*bb-2*A*B*ab))/amp/amp, c.uPhi, 1e-8*c.uPhi)
				close(t, "trace of white variances", ch.White.Re[0]*ch.White.Re[0]+ch.White.Im[0]*ch.White.Im[0], c.uA*c.uA+amp*amp*c.uPhi*c.uPhi, 1e-8*amp*amp*c.uPhi*c.uPhi)
			}
		})
	}
}

func close(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s: %.17g, want %.17g within %.2g", what, got, want, tolerance)
	}
}

// TestPublishedRecoveries: worked cases of the public QWTB toolbox's tests
// (algorithms FPNLSF, SINAD-ENOB, MFSF, SP-WFFT), as figures.
func TestPublishedRecoveries(t *testing.T) {
	t.Run("four parameters to 1e-10", func(t *testing.T) {
		p := even(10000, 1, 1e4)
		y := make([]float64, len(p.T))
		for i, x := range p.T {
			y[i] = 2*math.Sin(2*math.Pi*100*x+1) + 0.2
		}
		m := Model{Harmonics: 1}
		f, _, err := RefineFrequency(p, y, 100.2, m)
		if err != nil {
			t.Fatal(err)
		}
		fit, err := FitSine(p, f, [][]float64{y}, m)
		if err != nil {
			t.Fatal(err)
		}
		close(t, "frequency", f, 100, 100e-10)
		close(t, "amplitude", cmplx.Abs(fit.Channel(0).X[0]), 2, 2e-10)
		// The sine form lags the cosine by a quarter.
		close(t, "phase", cmplx.Phase(fit.Channel(0).X[0])+math.Pi/2, 1, 1e-10)
		close(t, "offset", fit.Channel(0).Mean, 0.2, 0.2e-10)
	})
	t.Run("SINAD 83.01 dB", func(t *testing.T) {
		// A = 2, sigma = 1e-4, N = 10000: 20 log10(2/(1e-4 sqrt2)) =
		// 83.0102999566 dB. The rms of 10000 values scatters by 0.7 %, 0.06 dB.
		rng := rand.New(rand.NewPCG(83, 1))
		p := even(10000, 1, 1e4)
		y := make([]float64, len(p.T))
		for i, x := range p.T {
			y[i] = 2*math.Sin(2*math.Pi*100*x+1) + 1e-4*rng.NormFloat64()
		}
		fit, err := FitSine(p, 100, [][]float64{y}, Model{Harmonics: 1})
		if err != nil {
			t.Fatal(err)
		}
		close(t, "SINAD", fit.SNRdB(0), 83.0102999566, 0.19)
	})
	t.Run("THD", func(t *testing.T) {
		// [1 .5 .3 .2]: sqrt(.25+.09+.04) = 0.6164414003 with the fourth;
		// Distortion stops after the third: sqrt(.34).
		p := even(1000, 1, 100)
		y := make([]float64, len(p.T))
		for i, x := range p.T {
			for k, a := range []float64{1, 0.5, 0.3, 0.2} {
				y[i] += a * math.Sin(2*math.Pi*float64(k+1)*x+float64(k))
			}
		}
		fit, err := FitSine(p, 1, [][]float64{y}, Model{Harmonics: 4})
		if err != nil {
			t.Fatal(err)
		}
		x := fit.Channel(0).X
		fourth := cmplx.Abs(x[3]) / cmplx.Abs(x[0])
		close(t, "THD", math.Hypot(fit.Distortion(0), fourth), 0.6164414002969, 1e-10)
		close(t, "distortion", fit.Distortion(0), math.Sqrt(0.34), 1e-10)
	})
	t.Run("three samples a cycle", func(t *testing.T) {
		// sin(2 pi t + 1) at 0, 1/3, 2/3, here over two cycles, since a fit
		// needs a spare point: amplitude 1, phase 1 to 1e-14.
		p := even(6, 1, 3)
		y := make([]float64, 6)
		for i, x := range p.T {
			y[i] = math.Sin(2*math.Pi*x + 1)
		}
		fit, err := FitSine(p, 1, [][]float64{y}, Model{Harmonics: 1})
		if err != nil {
			t.Fatal(err)
		}
		close(t, "amplitude", cmplx.Abs(fit.Channel(0).X[0]), 1, 1e-14)
		close(t, "phase", cmplx.Phase(fit.Channel(0).X[0])+math.Pi/2, 1, 1e-14)
		if u := fit.Channel(0).UMean; !math.IsNaN(u) {
			t.Errorf("u of the mean from 6 points: %v, want NaN", u)
		}
	})
}

// TestDriftLeakage: y = d t fitted without a slope puts -d T0/pi into the sine
// coefficient, T0 the period, however many whole cycles there are, and nothing
// into the cosine one; with a slope term both are zero (own derivation, the
// Fourier series of a ramp; 1e-4 for the finite sampling).
func TestDriftLeakage(t *testing.T) {
	for _, cycles := range []int{1, 2, 5, 40} {
		const perCycle, period, d = 1000, 2.0, 0.3
		p := even(cycles*perCycle, 1, perCycle/period)
		y := make([]float64, len(p.T))
		for i, x := range p.T {
			y[i] = d * x
		}
		without, err := FitSine(p, 1/period, [][]float64{y}, Model{Harmonics: 1})
		if err != nil {
			t.Fatal(err)
		}
		x := without.Channel(0).X[0]
		leak := d * period / math.Pi
		close(t, "sine", -imag(x), -leak, 1e-4*leak)
		// Half a sample interval turns the phase a little.
		close(t, "cosine", real(x), 0, 2*math.Pi/perCycle*leak)
		with, err := FitSine(p, 1/period, [][]float64{y}, Model{Trend: 1, Harmonics: 1})
		if err != nil {
			t.Fatal(err)
		}
		if a := cmplx.Abs(with.Channel(0).X[0]); a > 1e-12*leak*float64(cycles) {
			t.Errorf("%d cycles: %v is left in the sinusoid with a slope term", cycles, a)
		}
		close(t, "slope", with.Channel(0).Slope, d, 1e-12)
	}
}

// TestRiceBias: without any signal the amplitude is not zero but sd
// sqrt(pi/2) of one quadrature (Rayleigh; the limit of the Rice distribution,
// compare JCGM 102 table 6), while the real and imaginary part have mean zero.
func TestRiceBias(t *testing.T) {
	rng := rand.New(rand.NewPCG(11, 1))
	const trials, n = 1000, 64
	p := even(n, 1, 16)
	y := make([]float64, n)
	var amp, re, im []float64
	for range trials {
		for i := range y {
			y[i] = rng.NormFloat64()
		}
		f, err := FitSine(p, 1, [][]float64{y}, Model{Harmonics: 1})
		if err != nil {
			t.Fatal(err)
		}
		x := f.Channel(0).X[0]
		amp, re, im = append(amp, cmplx.Abs(x)), append(re, real(x)), append(im, imag(x))
	}
	sd := math.Sqrt(2.0 / n)
	mean, u, _ := Scatter(amp)
	close(t, "mean amplitude", mean, sd*math.Sqrt(math.Pi/2), 3*u)
	for _, part := range [][]float64{re, im} {
		mean, u, _ := Scatter(part)
		close(t, "mean of a quadrature", mean, 0, 3*u)
	}
	if _, _, err := RefineFrequency(p, y, 1, Model{Harmonics: 1}); err == nil {
		t.Error("a frequency was found in noise")
	}
}

// TestCramerRao: scatter of amplitude, phase at the first sample and frequency
// over 1000 trials against the bound 2s^2/N, 4s^2(2N-1)/(A^2 N(N+1)),
// 24 s^2/(A^2 N(N^2-1)) per sample squared (Rife and Boorstyn; from memory,
// checked against the inverse of the exact Fisher matrix). A ratio of standard
// deviations scatters by 1/sqrt(2*1000) = 2.2 %, so 1.2 cannot be passed by
// luck, nor 0.9 failed.
func TestCramerRao(t *testing.T) {
	const trials, n, amp, s, f0 = 1000, 400, 1.3, 0.4, 0.0523
	rng := rand.New(rand.NewPCG(5, 1))
	p := even(n, 1, 1)
	y := make([]float64, n)
	var a, phi, w []float64
	m := Model{Harmonics: 1}
	for range trials {
		for i, x := range p.T {
			y[i] = amp*math.Cos(2*math.Pi*f0*x+0.4) + s*rng.NormFloat64()
		}
		f, u, err := RefineFrequency(p, y, f0*1.05, m)
		if err != nil {
			t.Fatal(err)
		}
		if !(u > 0) {
			t.Fatalf("u of frequency %v", u)
		}
		fit, err := FitSine(p, f, [][]float64{y}, m)
		if err != nil {
			t.Fatal(err)
		}
		x := fit.Channel(0).X[0]
		a, phi, w = append(a, cmplx.Abs(x)), append(phi, cmplx.Phase(x)), append(w, 2*math.Pi*f)
	}
	const N = float64(n)
	for _, c := range []struct {
		name  string
		got   []float64
		truth float64
		bound float64
	}{
		{"amplitude", a, amp, 2 * s * s / N},
		{"phase", phi, 0.4, 4 * s * s * (2*N - 1) / (amp * amp * N * (N + 1))},
		{"frequency", w, 2 * math.Pi * f0, 24 * s * s / (amp * amp * N * (N*N - 1))},
	} {
		mean, u, _ := Scatter(c.got)
		ratio := u * math.Sqrt(trials) / math.Sqrt(c.bound)
		t.Logf("%s: scatter %.3f of the bound", c.name, ratio)
		if ratio > 1.2 || ratio < 0.9 {
			t.Errorf("%s: scatter %.3f of the Cramer-Rao bound, want 0.9 to 1.2", c.name, ratio)
		}
		if math.Abs(mean-c.truth) > 4*u {
			t.Errorf("%s: mean %v is off %v by more than four standard uncertainties %v", c.name, mean, c.truth, u)
		}
	}
}

// condense joins raw samples into points of the given sizes, repeated.
func condense(p Points, y []float64, sizes []int) (Points, []float64) {
	out := Points{Dt: p.Dt}
	var values []float64
	for i, k := 0, 0; i < len(y); k++ {
		w := min(sizes[k%len(sizes)], len(y)-i)
		var st, sy float64
		for j := range w {
			st += p.T[i+j]
			sy += y[i+j]
		}
		out.T, out.W = append(out.T, st/float64(w)), append(out.W, float64(w))
		values = append(values, sy/float64(w))
		i += w
	}
	return out, values
}

// TestCondensing: points of several samples give the amplitudes, phases, mean,
// slope and frequency of the raw samples. The factors are exact, so only
// rounding is left: 1e-12 of amplitude (the averaging factor shrinks it to 0.6
// at worst, and the offset is up to ten times the amplitude).
func TestCondensing(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		cycles := rapid.Float64Range(2, 20).Draw(t, "cycles")
		sizes := rapid.SliceOfN(rapid.IntRange(1, 12), 1, 8).Draw(t, "sizes")
		phase := rapid.Float64Range(-3, 3).Draw(t, "phase")
		start := rapid.Float64Range(-50, 50).Draw(t, "start")
		const perCycle = 96
		raw := even(int(cycles*perCycle), 1, perCycle)
		y := make([]float64, len(raw.T))
		for i := range y {
			raw.T[i] += start
			x := raw.T[i]
			u := x - start
			y[i] = 10 + 0.3*u - 0.02*u*u
			for k := 1; k <= 3; k++ {
				y[i] += math.Cos(float64(k)*(2*math.Pi*x+phase)) / float64(k*k)
			}
		}
		p, z := condense(raw, y, sizes)
		m := Model{Trend: 2, Harmonics: 3}
		a, err := FitSine(raw, 1, [][]float64{y}, m)
		if err != nil {
			t.Fatal(err)
		}
		b, err := FitSine(p, 1, [][]float64{z}, m)
		if err != nil {
			t.Fatal(err)
		}
		ca, cb := a.Channel(0), b.Channel(0)
		for k := range ca.X {
			want := cmplx.Rect(1/float64((k+1)*(k+1)), float64(k+1)*phase)
			// Time stamps around 50 s carry 1e-14 s, w t 1e-13 rad.
			if cmplx.Abs(cb.X[k]-want) > 3e-12 || cmplx.Abs(ca.X[k]-cb.X[k]) > 3e-12 {
				t.Fatalf("harmonic %d: raw %v, condensed %v, true %v", k+1, ca.X[k], cb.X[k], want)
			}
		}
		if math.Abs(ca.Mean-cb.Mean) > 1e-11 || math.Abs(ca.Slope-cb.Slope) > 1e-11 || math.Abs(a.Centre-b.Centre) > 1e-12 {
			t.Fatalf("mean %v %v, slope %v %v", ca.Mean, cb.Mean, ca.Slope, cb.Slope)
		}
		f, _, err := RefineFrequency(p, z, 1.06, m)
		if err != nil {
			t.Fatal(err)
		}
		if math.Abs(f-1) > 1e-11 {
			t.Fatalf("frequency %.15g, want 1", f)
		}
	})
}

// TestRoughGuess: a guess 10 % off either way is enough from two cycles on.
func TestRoughGuess(t *testing.T) {
	for _, cycles := range []float64{2, 2.5, 3.2, 7, 41.3, 333.3} {
		for _, off := range []float64{-0.1, -0.03, 0, 0.04, 0.1} {
			for _, m := range []Model{{0, 1}, {2, 3}} {
				for phase := 0.0; phase < 6; phase += math.Max(0.7, cycles/20) {
					p := even(int(cycles*24), 1, 24)
					y := make([]float64, len(p.T))
					for i, x := range p.T {
						y[i] = 10 + 0.1*math.Cos(2*math.Pi*x+phase)
						if m.Harmonics > 1 {
							y[i] += 0.01 * math.Cos(4*math.Pi*x+1)
						}
						if m.Trend > 1 {
							y[i] += 0.05 * x
						}
					}
					f, u, err := RefineFrequency(p, y, 1+off, m)
					if err != nil {
						t.Errorf("%v cycles, guess off by %v, %+v, phase %.1f: %v", cycles, off, m, phase, err)
						continue
					}
					// Rounding of 10 against an amplitude of 0.1, spread over
					// the cycles.
					if math.Abs(f-1) > 1e-11 || u > 1e-11 {
						t.Errorf("%v cycles, guess off by %v: frequency %.15g, u %g", cycles, off, f, u)
					}
				}
			}
		}
	}
}

func TestFrequencyUncertainty(t *testing.T) {
	rng := rand.New(rand.NewPCG(6, 1))
	const trials = 500
	raw := even(1024, 1, 64)
	in := 0
	y := make([]float64, len(raw.T))
	m := Model{Trend: 2, Harmonics: 2}
	for range trials {
		for i, x := range raw.T {
			y[i] = math.Sin(2*math.Pi*x) + 0.2*rng.NormFloat64()
		}
		p, z := condense(raw, y, []int{1, 3, 2})
		f, u, err := RefineFrequency(p, z, 0.95, m)
		if err != nil {
			t.Fatal(err)
		}
		if math.Abs(f-1) <= 2*u {
			in++
		}
	}
	// Three binomial standard deviations, 0.93 %.
	if c := float64(in) / trials; c < 0.926 || c > 0.983 {
		t.Errorf("+-2u holds the frequency in %.1f %%, want 95.45 +- 2.8", 100*c)
	}
}

func TestFitRefuses(t *testing.T) {
	good := even(200, 1, 20)
	ys := make([]float64, 200)
	for i, x := range good.T {
		ys[i] = math.Sin(2 * math.Pi * x)
	}
	bad := func(change func(p *Points, y []float64)) (Points, []float64) {
		p := Points{T: append([]float64(nil), good.T...), W: append([]float64(nil), good.W...), Dt: good.Dt}
		y := append([]float64(nil), ys...)
		change(&p, y)
		return p, y
	}
	cases := []struct {
		name   string
		change func(p *Points, y []float64)
		freq   float64
		m      Model
		want   string
	}{
		{"less than a cycle", nil, 0.05, Model{0, 1}, "need at least one"},
		{"above Nyquist", nil, 15, Model{0, 1}, "points a cycle"},
		{"third harmonic above Nyquist", nil, 4, Model{0, 3}, "harmonic 3 needs more than 6"},
		{"few points", func(p *Points, _ []float64) { p.T, p.W = p.T[:9], p.W[:9] }, 3, Model{2, 3}, "need at least 10"},
		{"negative frequency", nil, -1, Model{0, 1}, "above 0"},
		{"NaN frequency", nil, math.NaN(), Model{0, 1}, "above 0"},
		{"cubic trend", nil, 1, Model{3, 1}, "want 0, 1 or 2"},
		{"no harmonic", nil, 1, Model{0, 0}, "Harmonics must be at least 1"},
		{"NaN value", func(_ *Points, y []float64) { y[7] = math.NaN() }, 1, Model{0, 1}, "NaN"},
		{"NaN time", func(p *Points, _ []float64) { p.T[7] = math.NaN() }, 1, Model{0, 1}, "time of point 7"},
		{"time goes back", func(p *Points, _ []float64) { p.T[7] = p.T[5] }, 1, Model{0, 1}, "is before that of the point before"},
		{"time stands", func(p *Points, _ []float64) { clear(p.T) }, 1, Model{0, 1}, "finite duration"},
		{"weight", func(p *Points, _ []float64) { p.W[7] = 0.5 }, 1, Model{0, 1}, "weight of point 7"},
		{"missing weights", func(p *Points, _ []float64) { p.W = p.W[1:] }, 1, Model{0, 1}, "199 weights"},
		{"step", func(p *Points, _ []float64) { p.Dt = -1 }, 1, Model{0, 1}, "sampling step"},
	}
	for _, c := range cases {
		p, y := good, ys
		if c.change != nil {
			p, y = bad(c.change)
		}
		y = y[:len(p.T)]
		if _, err := FitSine(p, c.freq, [][]float64{y}, c.m); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: FitSine: %v, want %q", c.name, err, c.want)
		}
		if _, _, err := RefineFrequency(p, y, c.freq, c.m); err == nil {
			t.Errorf("%s: RefineFrequency: no error", c.name)
		}
	}
	if _, err := FitSine(good, 1, nil, Model{0, 1}); err == nil {
		t.Error("no channel: no error")
	}
	if _, err := FitSine(good, 1, [][]float64{ys[:5]}, Model{0, 1}); err == nil {
		t.Error("short channel: no error")
	}
	if _, err := FitSine(Points{}, 1, [][]float64{{}}, Model{0, 1}); err == nil {
		t.Error("no points: no error")
	}
	if _, _, err := RefineFrequency(even(33, 1, 20), ys[:33], 1, Model{0, 1}); err == nil || !strings.Contains(err.Error(), "at least 1.75") {
		t.Errorf("1.65 cycles: %v", err)
	}
}

// TestNothingPanics: whatever numbers come in, there is an error or figures
// that are finite (uncertainties may be NaN, not known).
func TestNothingPanics(t *testing.T) {
	odd := []float64{math.NaN(), math.Inf(1), math.Inf(-1), 0, -1, 1e300, -1e300, 1e-300, 5e-324}
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.IntRange(0, 90).Draw(t, "n")
		p := Points{Dt: rapid.SampledFrom([]float64{0, 0.1, 0.05}).Draw(t, "dt")}
		y, z := make([]float64, n), make([]float64, n)
		for i := range n {
			p.T, p.W = append(p.T, 0.1*float64(i)), append(p.W, float64(1+i%3))
			y[i] = math.Sin(0.1 * float64(i) * 6)
			z[i] = math.Cos(0.1*float64(i)*6) + 0.01*float64(i%5)
		}
		for range rapid.IntRange(0, 3).Draw(t, "spoiled") {
			if n == 0 {
				break
			}
			i := rapid.IntRange(0, n-1).Draw(t, "i")
			v := rapid.SampledFrom(odd).Draw(t, "v")
			[][]float64{p.T, p.W, y, z}[rapid.IntRange(0, 3).Draw(t, "which")][i] = v
		}
		freq, m := 0.95, Model{Trend: rapid.IntRange(0, 2).Draw(t, "trend"), Harmonics: rapid.IntRange(1, 5).Draw(t, "harmonics")}
		if rapid.IntRange(0, 3).Draw(t, "odd model") == 0 {
			freq = rapid.SampledFrom(odd).Draw(t, "freq")
			m = Model{Trend: rapid.IntRange(-1, 3).Draw(t, "odd trend"), Harmonics: rapid.IntRange(-1, 20).Draw(t, "odd harmonics")}
		}
		finite := func(what string, values ...float64) {
			for _, v := range values {
				if v-v != 0 {
					t.Fatalf("%s: %v without an error", what, values)
				}
			}
		}
		if f, u, err := RefineFrequency(p, y, freq, m); err == nil {
			finite("frequency", f, u)
		}
		if mean, u, slope, us, _, err := MeanSlope(p, z); err == nil {
			finite("mean and slope", mean, u, slope, us)
		}
		f, err := FitSine(p, freq, [][]float64{y, z}, m)
		if err != nil {
			return
		}
		c := f.Channel(0)
		finite("channel", c.Mean, c.Slope, c.Centre, c.RSS, c.SD, real(c.X[0]), imag(c.X[0]))
		if k, err := Modulus(f, 0, 1); err == nil {
			finite("modulus", real(k.K), imag(k.K), k.URe, k.UIm)
		}
	})
}

// benchSegment is 16,000 points of four channels over 100 cycles.
func benchSegment() (Points, [][]float64) {
	rng := rand.New(rand.NewPCG(9, 1))
	p := even(16000, 4, 640)
	c := matrix(4, 16000)
	for i, x := range p.T {
		for k := range c {
			c[k][i] = math.Cos(2*math.Pi*x+float64(k)) + 0.1*rng.NormFloat64()
		}
	}
	return p, c
}

func BenchmarkFitSine(b *testing.B) {
	p, c := benchSegment()
	b.ReportAllocs()
	for b.Loop() {
		if _, err := FitSine(p, 1, c, Model{Trend: 2, Harmonics: 3}); err != nil {
			b.Fatal(err)
		}
	}
}

func BenchmarkRefineFrequency(b *testing.B) {
	p, c := benchSegment()
	b.ReportAllocs()
	for b.Loop() {
		if _, _, err := RefineFrequency(p, c[0], 1.05, Model{Trend: 2, Harmonics: 3}); err != nil {
			b.Fatal(err)
		}
	}
}
