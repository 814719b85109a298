package harmonic

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"strings"
	"testing"
)

// TestExpand: t for 95.45 % over 2, JCGM 100:2008 table G.2 (column 95.45 %,
// printed to two decimals, from memory).
func TestExpand(t *testing.T) {
	for dof, want := range map[int]float64{1: 13.97, 2: 4.53, 3: 3.31, 4: 2.87, 5: 2.65, 6: 2.52, 8: 2.37, 10: 2.28, 15: 2.18, 20: 2.13, 30: 2.09, 50: 2.05} {
		close(t, fmt.Sprintf("t for %d degrees of freedom", dof), 2*Expand(1, dof), want, 0.0051)
	}
	close(t, "limit", Expand(3, 1<<30), 3, 1e-9)
	close(t, "just below the limit", Expand(1, 1_900_000), 1, 2e-6)
	for _, dof := range []int{0, -3} {
		if v := Expand(1, dof); !math.IsNaN(v) {
			t.Errorf("%d degrees of freedom: %v, want NaN", dof, v)
		}
	}
}

// TestScatter: the twenty temperatures of JCGM 100:2008, table 1 (4.4.3): mean
// 100.145, s 1.489, s/sqrt(n) 0.333 (from memory).
func TestScatter(t *testing.T) {
	mean, u, dof := Scatter([]float64{
		96.90, 98.18, 98.25, 98.61, 99.03, 99.49, 99.56, 99.74, 99.89, 100.07,
		100.33, 100.42, 100.68, 100.95, 101.11, 101.20, 101.57, 101.84, 102.36, 102.72,
	})
	close(t, "mean", mean, 100.145, 0.0005)
	close(t, "u", u, 0.333, 0.0005)
	if dof != 19 {
		t.Errorf("%d degrees of freedom, want 19", dof)
	}
	if m, u, dof := Scatter([]float64{7}); m != 7 || !math.IsNaN(u) || dof != 0 {
		t.Errorf("one value: %v %v %d", m, u, dof)
	}
	if m, u, dof := Scatter(nil); !math.IsNaN(m) || !math.IsNaN(u) || dof != 0 {
		t.Errorf("no value: %v %v %d", m, u, dof)
	}
}

// TestBatching: whole cycles, between 4 and 32 batches wherever there are four
// cycles.
func TestBatching(t *testing.T) {
	for cycles := 0.0; cycles < 2000; cycles += 0.37 {
		count, each := batching(cycles)
		if float64(count*each) > cycles+0.02 || count > 32 || (cycles >= 4 && count < 4) || each < 1 {
			t.Errorf("%v cycles: %d batches of %d", cycles, count, each)
		}
	}
	for _, c := range [][3]int{{2, 2, 1}, {6, 6, 1}, {12, 12, 1}, {40, 20, 2}, {400, 30, 13}} {
		if count, each := batching(float64(c[0]) - 0.01); count != c[1] || each != c[2] {
			t.Errorf("%d cycles: %d batches of %d, want %d of %d", c[0], count, each, c[1], c[2])
		}
	}
}

// TestModulusExact: without noise K comes out to rounding, whatever trend,
// harmonics, sizes of points and start. Storage modulus cos(delta) and loss
// modulus sin(delta) of the amplitude ratio, stress leading by delta (IUPAC
// Gold Book 12802, 12782).
func TestModulusExact(t *testing.T) {
	const delta, ratio = 0.4, 3.5
	raw := even(6.4*200, 1, 100)
	strain, tension := make([]float64, len(raw.T)), make([]float64, len(raw.T))
	for i := range raw.T {
		raw.T[i] += 31.7
		x := raw.T[i]
		strain[i] = 0.01*math.Cos(math.Pi*x+2) + 1e-4*math.Cos(2*math.Pi*x)
		tension[i] = 0.2 + 0.01*x + 0.01*ratio*math.Cos(math.Pi*x+2+delta)
	}
	p, e := condense(raw, strain, []int{4, 1, 2})
	_, g := condense(raw, tension, []int{4, 1, 2})
	f, err := FitSine(p, 0.5, [][]float64{e, g}, Model{Trend: 2, Harmonics: 3})
	if err != nil {
		t.Fatal(err)
	}
	m, err := Modulus(f, 1, 0)
	if err != nil {
		t.Fatal(err)
	}
	close(t, "storage", real(m.K), ratio*math.Cos(delta), 1e-11)
	close(t, "loss", imag(m.K), ratio*math.Sin(delta), 1e-11)
	if m.Batches != 6 || m.DoF != 5 || !(m.URe < 1e-11) || !(m.UIm < 1e-11) || !(m.UPhase < 1e-11) || !(m.UAbs < 1e-11) {
		t.Errorf("%+v", m)
	}
	for i, x := range p.T {
		// What Oscillating leaves is the trend.
		close(t, "trend", g[i]-f.Oscillating(1, x, p.W[i]), 0.2+0.01*x, 1e-12)
	}
}

// TestBatchesFollowTheSignal: an amplitude and an offset that change in steps
// between batches come out batch by batch.
func TestBatchesFollowTheSignal(t *testing.T) {
	p := even(8*64, 1, 64)
	y, ref := make([]float64, len(p.T)), make([]float64, len(p.T))
	amp := func(b int) float64 { return 2 + 0.1*float64(b%3) }
	for i, x := range p.T {
		b := int(p.T[i])
		ref[i] = math.Cos(2 * math.Pi * x)
		y[i] = amp(b)*math.Cos(2*math.Pi*x-0.3) + 0.01*float64(b%2)
	}
	f, err := FitSine(p, 1, [][]float64{y, ref}, Model{Harmonics: 1})
	if err != nil {
		t.Fatal(err)
	}
	b, err := f.Batches()
	if err != nil {
		t.Fatal(err)
	}
	if b.Count != 8 || b.Cycles != 1 {
		t.Fatalf("%d batches of %d cycles", b.Count, b.Cycles)
	}
	// The segment begins half a sample before t = 0: that sample's worth of a
	// neighbour may sit in a batch, 1/64 of a step of 0.1 at most.
	for i, x := range b.X[0] {
		if d := cmplx.Abs(x - cmplx.Rect(amp(i), -0.3)); d > 0.2/64 {
			t.Errorf("batch %d: %v, want amplitude %v", i, x, amp(i))
		}
		close(t, "offset", b.Mean[0][i], 0.01*float64(i%2), 0.2/64)
	}
	m, err := Modulus(f, 0, 1)
	if err != nil {
		t.Fatal(err)
	}
	var abs []float64
	for i := range b.X[0] {
		abs = append(abs, cmplx.Abs(b.X[0][i]/b.X[1][i]))
	}
	_, u, dof := Scatter(abs)
	// Two ways to the same scatter, but for the finite gain of 64 points.
	close(t, "u of |K|", m.UAbs, Expand(u, dof), 0.01*m.UAbs)
}

func TestModulusRefuses(t *testing.T) {
	rng := rand.New(rand.NewPCG(4, 1))
	fit := func(cycles float64, strain float64) *Fit {
		p := even(int(cycles*40), 1, 40)
		a, b := make([]float64, len(p.T)), make([]float64, len(p.T))
		for i, x := range p.T {
			s := math.Cos(2 * math.Pi * x)
			a[i], b[i] = s+0.1*rng.NormFloat64(), strain*s+0.001*rng.NormFloat64()
		}
		f, err := FitSine(p, 1, [][]float64{a, b}, Model{Trend: 1, Harmonics: 1})
		if err != nil {
			t.Fatal(err)
		}
		return f
	}
	if _, err := Modulus(fit(2.5, 1), 0, 1); err == nil || !strings.Contains(err.Error(), "at least 3 whole cycles") {
		t.Errorf("2.5 cycles: %v", err)
	}
	if _, err := Modulus(fit(6, 0), 0, 1); err == nil || !strings.Contains(err.Error(), "does not oscillate") {
		t.Errorf("no strain: %v", err)
	}
	if _, err := Modulus(fit(6, 1), 0, 2); err == nil || !strings.Contains(err.Error(), "the fit has 2") {
		t.Errorf("no such channel: %v", err)
	}
	if f := fit(2.5, 1); !math.IsNaN(f.Channel(0).UX) {
		t.Errorf("u of an amplitude from 2.5 cycles: %v, want NaN", f.Channel(0).UX)
	}
}

// TestModulusWithGap: batches without samples drop out; what is left counts.
func TestModulusWithGap(t *testing.T) {
	rng := rand.New(rand.NewPCG(8, 1))
	all := even(10*40, 1, 40)
	p := Points{Dt: all.Dt}
	var a, b []float64
	for i, x := range all.T {
		if x > 3 && x < 5 {
			continue
		}
		p.T, p.W = append(p.T, x), append(p.W, all.W[i])
		a = append(a, math.Cos(2*math.Pi*x+0.2)+0.1*rng.NormFloat64())
		b = append(b, math.Cos(2*math.Pi*x))
	}
	f, err := FitSine(p, 1, [][]float64{a, b}, Model{Trend: 2, Harmonics: 3})
	if err != nil {
		t.Fatal(err)
	}
	m, err := Modulus(f, 0, 1)
	if err != nil {
		t.Fatal(err)
	}
	if m.Batches != 8 || cmplx.Abs(m.K-cmplx.Rect(1, 0.2)) > 4*m.UAbs {
		t.Errorf("%+v, want 8 batches and K near %v", m, cmplx.Rect(1, 0.2))
	}
}

// TestChannelCoverage: +-2u of mean, slope and amplitude of FitSine under white
// and 1/f noise, as TestModulusCoverage and TestMeanSlopeCoverage.
func TestChannelCoverage(t *testing.T) {
	const trials, cycles, perCycle = 1000, 12, 32
	p := even(cycles*perCycle, 1, perCycle)
	y := make([]float64, len(p.T))
	for _, alpha := range []float64{0, 1} {
		rng := rand.New(rand.NewPCG(21, uint64(alpha)))
		var mean, slope, amp int
		for range trials {
			noise := flickerNoise(rng, len(y), 4, alpha)
			for i, x := range p.T {
				y[i] = 3 + 0.1*(x-(cycles-1.0/perCycle)/2) + 2*math.Cos(2*math.Pi*x+1) + 0.3*noise[i]
			}
			f, err := FitSine(p, 1, [][]float64{y}, Model{Trend: 2, Harmonics: 3})
			if err != nil {
				t.Fatal(err)
			}
			c := f.Channel(0)
			if math.Abs(c.Mean-3) <= 2*c.UMean {
				mean++
			}
			if math.Abs(c.Slope-0.1) <= 2*c.USlope {
				slope++
			}
			if math.Abs(cmplx.Abs(c.X[0])-2) <= 2*c.UX {
				amp++
			}
			if c.UMean < c.White.Mean || c.USlope < c.White.Slope {
				t.Fatalf("below the white-noise figure: %+v", c)
			}
		}
		t.Logf("1/f^%v: mean %.1f %%, slope %.1f %%, amplitude %.1f %%", alpha, float64(mean)/trials*100, float64(slope)/trials*100, float64(amp)/trials*100)
		for name, n := range map[string]int{"mean": mean, "slope": slope, "amplitude": amp} {
			if c := float64(n) / trials; c < 0.93 || c > 0.995 {
				t.Errorf("1/f^%v, %s: +-2u holds the truth in %.1f %%, want 93 to 99.5 %%", alpha, name, 100*c)
			}
		}
	}
}

func TestMeanSlopeExact(t *testing.T) {
	raw := even(1000, 1, 50)
	y := make([]float64, 1000)
	for i, x := range raw.T {
		y[i] = 4e-6 + 2e-9*x
	}
	p, z := condense(raw, y, []int{3, 1, 8})
	mean, u, slope, uSlope, dof, err := MeanSlope(p, z)
	if err != nil {
		t.Fatal(err)
	}
	// The middle of the raw samples: 9.99 s.
	close(t, "mean", mean, 4e-6+2e-9*9.99, 1e-19)
	close(t, "slope", slope, 2e-9, 1e-20)
	if !(u < 1e-19) || !(uSlope < 1e-19) || dof < 1 {
		t.Errorf("u %v, u of slope %v, %d degrees of freedom", u, uSlope, dof)
	}
}

func TestMeanSlopeRefuses(t *testing.T) {
	seven := even(7, 1, 1)
	if _, _, _, _, _, err := MeanSlope(seven, make([]float64, 7)); err == nil || !strings.Contains(err.Error(), "at least 8") {
		t.Errorf("7 points: %v", err)
	}
	if _, _, _, _, _, err := MeanSlope(even(9, 1, 1), make([]float64, 8)); err == nil || !strings.Contains(err.Error(), "8 values for 9 points") {
		t.Errorf("short: %v", err)
	}
	if _, _, _, _, _, err := MeanSlope(even(9, 1, 1), []float64{1, 2, 3, 4, math.Inf(1), 5, 6, 7, 8}); err == nil || !strings.Contains(err.Error(), "sample 4: channel 0 is +Inf") {
		t.Errorf("infinite: %v", err)
	}
	gap := even(20, 1, 1)
	gap.T[19] = 1000
	if _, _, _, _, _, err := MeanSlope(gap, make([]float64, 20)); err == nil || !strings.Contains(err.Error(), "only 2 of 8") {
		t.Errorf("one point far off: %v", err)
	}
}

func BenchmarkModulus(b *testing.B) {
	p, c := benchSegment()
	f, err := FitSine(p, 1, c, Model{Trend: 2, Harmonics: 3})
	if err != nil {
		b.Fatal(err)
	}
	b.ReportAllocs()
	for b.Loop() {
		if _, err := Modulus(f, 0, 1); err != nil {
			b.Fatal(err)
		}
	}
}

func BenchmarkMeanSlope(b *testing.B) {
	p, c := benchSegment()
	b.ReportAllocs()
	for b.Loop() {
		if _, _, _, _, _, err := MeanSlope(p, c[0]); err != nil {
			b.Fatal(err)
		}
	}
}
