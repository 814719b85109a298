package phantom

import (
	"errors"
	"math"
	"math/cmplx"
	"reflect"
	"strings"
	"testing"

	"gonum.org/v1/gonum/dsp/fourier"
	"gonum.org/v1/gonum/stat"

	"platen/pipeline/run"
	"platen/pipeline/squeeze"
)

func simulate(t *testing.T, s Spec) *Recording {
	t.Helper()
	r, err := Simulate(s)
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// quiet returns an ordinary cell under a rig without noise or error.
func quiet(seed uint64) Spec {
	s := Ordinary(seed)
	s.Rig = Rig{RateHz: 1000, ImageEveryS: 0.1}
	return s
}

// columns gathers all blocks of a recording.
func columns(t *testing.T, r *Recording) run.Block {
	t.Helper()
	var all run.Block
	if err := r.Blocks(func(b *run.Block) error {
		if b.FirstRow != int64(all.Len()) {
			t.Fatalf("block begins at row %d after %d rows", b.FirstRow, all.Len())
		}
		all.Time = append(all.Time, b.Time...)
		all.Force = append(all.Force, b.Force...)
		all.Height = append(all.Height, b.Height...)
		all.Radius = append(all.Radius, b.Radius...)
		all.Segment = append(all.Segment, b.Segment...)
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	if int64(all.Len()) != r.Samples() {
		t.Fatalf("%d rows, Samples says %d", all.Len(), r.Samples())
	}
	return all
}

// measuredModulus is the ratio of the amplitudes of tension and ln area at the
// drive frequency, by correlation over the last whole cycles of the
// oscillation.
func measuredModulus(t *testing.T, r *Recording, cycles float64) complex128 {
	t.Helper()
	var gamma, area complex128
	err := r.pass(func(_ int64, leg int, m moment) error {
		l := r.legs[leg]
		if l.mode != run.Oscillation || m.t < l.to-cycles/l.FrequencyHz-1e-9 || m.t > l.to-1e-9 {
			return nil
		}
		e := cmplx.Exp(complex(0, -2*math.Pi*l.FrequencyHz*m.t))
		gamma += complex(m.tension, 0) * e
		area += complex(m.lnArea, 0) * e
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	return gamma / area
}

// TestModulus: the simulated tension and area have the amplitude ratio of the
// generalized Maxwell model. The numbers beside are the model's values computed
// by hand for K_inf = 4, arms (6, 0.1 s) and (4, 0.4 s), in mN/m, at 1 Hz:
// w tau = 0.62832 and 2.51327, so K' = 4 + 6*0.28304 + 4*0.86333 = 9.1516 and
// K" = 6*0.45047 + 4*0.34350 = 4.0768.
func TestModulus(t *testing.T) {
	cell := Cell{RadiusM: 9.5e-6, TensionNPerM: 0.5e-3, ElasticNPerM: 4e-3, Arms: []Arm{{6e-3, 0.1}, {4e-3, 0.4}}}
	if k := cell.Modulus(1); math.Abs(real(k)-9.1516e-3) > 1e-7 || math.Abs(imag(k)-4.0768e-3) > 1e-7 {
		t.Errorf("K*(1 Hz) = %v, want (9.1516 + 4.0768i) mN/m", k)
	}
	for _, f := range []float64{0.5, 1, 2} {
		s := quiet(1)
		s.Cell = cell
		// The transient of the slowest arm is down to exp(-10/f/0.4 s), 4e-6,
		// when the last 10 of 20 cycles begin; at 0.5 and 1 Hz less. Round times
		// let the samples fall evenly on the cycles.
		s.StartM = 12e-6
		s.Protocol = []Move{Hold(8), Oscillate(f, 0.4e-6, 20)}
		got, want := measuredModulus(t, simulate(t, s), 10), cell.Modulus(f)
		// The straight line between samples errs by (w dt)^2/12, 1.3e-5 at 2 Hz.
		if r := cmplx.Abs(got/want - 1); !(r < 1e-4) {
			t.Errorf("%g Hz: K* = %v, want %v (off by %.2g)", f, got, want, r)
		}
	}
}

// TestModulusConverges: the error of the integration falls as the square of
// the sample interval.
func TestModulusConverges(t *testing.T) {
	var off [2]float64
	for i, rate := range []float64{250, 500} {
		s := quiet(1)
		s.Rig.RateHz = rate
		s.StartM = 12e-6
		s.Protocol = []Move{Hold(8), Oscillate(10, 0.1e-6, 100)}
		off[i] = cmplx.Abs(measuredModulus(t, simulate(t, s), 10)/s.Cell.Modulus(10) - 1)
	}
	if ratio := off[0] / off[1]; math.Abs(ratio-4) > 0.2 {
		t.Errorf("errors %.3g and %.3g at 250 and 500 Hz: a ratio of %.2f, want 4", off[0], off[1], ratio)
	}
}

// TestRelaxation: an arm under a constant rate of ln area has the stress
// K rate tau (1 - exp(-t/tau)), and decays with tau afterwards, both exact
// whatever the sample interval.
func TestRelaxation(t *testing.T) {
	s := Spec{Cell: Cell{RadiusM: 1, TensionNPerM: 1, Arms: []Arm{{3, 0.7}}}, Rig: Rig{RateHz: 10}}
	m := newMechanics(squeeze.NewCurve(), s)
	const rate = 0.02
	for i := range 41 {
		now := float64(i) / 10
		lnA := rate * math.Min(now, 2)
		want := 1 + 3*rate*0.7*(1-math.Exp(-math.Min(now, 2)/0.7))
		if now > 2 {
			want = 1 + (3*rate*0.7*(1-math.Exp(-2/0.7)))*math.Exp(-(now-2)/0.7)
		}
		if got := m.tension(lnA); math.Abs(got-want) > 1e-14 {
			t.Errorf("%.1f s: tension %.15g, want %.15g", now, got, want)
		}
	}
}

// TestForceAndShape: what a rig without error records is the exact shape: the
// imaged radius and height give back the cell's radius, and the force is
// tension times that of the shape.
func TestForceAndShape(t *testing.T) {
	s := quiet(7)
	s.Cell.Arms = nil // so that the tension follows from the area alone
	b := columns(t, simulate(t, s))
	squeezed := 0
	for i := range b.Time {
		if b.Height[i] >= 2*s.Cell.RadiusM {
			if b.Force[i] != 0 {
				t.Fatalf("%g s: force %g N though the plate does not touch", b.Time[i], b.Force[i])
			}
			continue
		}
		squeezed++
		if i%7 != 0 {
			continue
		}
		shape, err := squeeze.FromHeightRatio(b.Height[i] / (2 * s.Cell.RadiusM))
		if err != nil {
			t.Fatal(err)
		}
		want := (s.Cell.TensionNPerM + s.Cell.ElasticNPerM*shape.LnArea) * s.Cell.RadiusM * shape.Force
		// The universal curve is good to 1e-11.
		if math.Abs(b.Force[i]/want-1) > 1e-10 {
			t.Fatalf("%g s: force %g N, want %g N", b.Time[i], b.Force[i], want)
		}
		if r := b.Radius[i]; !math.IsNaN(r) && math.Abs(r/(s.Cell.RadiusM*shape.Equator)-1) > 1e-10 {
			t.Fatalf("%g s: radius %g m, want %g m", b.Time[i], r, s.Cell.RadiusM*shape.Equator)
		}
	}
	if squeezed < 20000 {
		t.Errorf("only %d samples with the cell squeezed", squeezed)
	}
}

func TestShrinking(t *testing.T) {
	s := quiet(3)
	s.Cell.ShrinkPerS = 0.005
	r := simulate(t, s)
	b := columns(t, r)
	curve := squeeze.NewCurve()
	volume := func(i int) float64 { return math.Pow(curve.RadiusFromEquator(b.Height[i], b.Radius[i]), 3) }
	last := b.Len() - 1
	for math.IsNaN(b.Radius[last]) {
		last--
	}
	want := math.Exp(-0.005 * b.Time[last])
	if got := volume(last) / volume(0); math.Abs(got/want-1) > 1e-9 {
		t.Errorf("the imaged volume falls to %.9f, want %.9f", got, want)
	}
	if got := 1 + r.Truth().VolumeChange; math.Abs(got/want-1) > 1e-3 { // the last image is up to 0.1 s early
		t.Errorf("the truth tells a volume of %.6f, want %.6f", got, want)
	}
}

// TestTruthOfSegments compares the truth with means over the samples.
func TestTruthOfSegments(t *testing.T) {
	s := quiet(11)
	r := simulate(t, s)
	b := columns(t, r)
	truth := r.Truth()
	modes := []run.Mode{run.Hold, run.Approach, run.Hold, run.Oscillation, run.Hold, run.Retract, run.Hold}
	if len(truth.Segments) != len(modes) {
		t.Fatalf("%d segments, want %d", len(truth.Segments), len(modes))
	}
	for i, g := range truth.Segments {
		if g.Mode != modes[i] {
			t.Errorf("segment %d is of mode %q, want %q", i, g.Mode, modes[i])
		}
		var heights, tensions []float64
		for j := range b.Time {
			if int(b.Segment[j]) != i {
				continue
			}
			heights = append(heights, b.Height[j])
			if shape, err := squeeze.FromHeightRatio(b.Height[j] / (2 * s.Cell.RadiusM)); err == nil && shape.Force > 0 {
				tensions = append(tensions, b.Force[j]/(s.Cell.RadiusM*shape.Force))
			}
		}
		if want := stat.Mean(heights, nil); math.Abs(g.HeightM/want-1) > 1e-9 {
			t.Errorf("segment %d: mean height %g m, want %g m", i, g.HeightM, want)
		}
		if loaded := len(tensions) == len(heights); loaded != g.Loaded {
			t.Errorf("segment %d: loaded is %v", i, g.Loaded)
		}
		if !g.Loaded {
			continue
		}
		if want := stat.Mean(tensions, nil); math.Abs(g.TensionNPerM/want-1) > 1e-9 {
			t.Errorf("segment %d: mean tension %g N/m, want %g N/m", i, g.TensionNPerM, want)
		}
	}
	if want := 4 * math.Pi / 3 * math.Pow(s.Cell.RadiusM, 3); math.Abs(truth.VolumeM3/want-1) > 1e-12 {
		t.Errorf("volume %g m^3, want %g m^3", truth.VolumeM3, want)
	}
	// One sample of the approach at 1.5 um/s and 1 kHz is 1.5 nm.
	if d := truth.ContactM - 2*s.Cell.RadiusM; math.Abs(d) > 1.5e-9 {
		t.Errorf("contact %g m off the cell's diameter", d)
	}
	if at := 4 + 2/1.5; math.Abs(truth.ContactS-at) > 2e-3 {
		t.Errorf("contact at %g s, want %g s", truth.ContactS, at)
	}
}

// TestOrdinary: what the package promises of an ordinary run, for many seeds.
func TestOrdinary(t *testing.T) {
	for seed := range uint64(40) {
		s := Ordinary(seed)
		truth := simulate(t, s).Truth()
		var g Segment
		for _, x := range truth.Segments {
			if x.Mode == run.Oscillation {
				g = x
			}
		}
		in := func(what string, v, lo, hi float64) {
			if !(v >= lo && v <= hi) {
				t.Errorf("seed %d: %s %g, want %g to %g", seed, what, v, lo, hi)
			}
		}
		in("radius", truth.RadiusM, 9e-6, 10e-6)
		in("tension", g.TensionNPerM, 0.4e-3, 1e-3)
		in("height ratio", g.HeightRatio, 0.599, 0.601)
		in("storage modulus", g.StorageNPerM, 5e-3, 17e-3)
		in("loss over storage", g.LossNPerM/g.StorageNPerM, 0.2, 0.5)
		in("area strain", g.AreaStrainAmplitude, 0.0099, 0.0101)
		in("force", g.ForceN, 5e-9, 40e-9)
		in("cycles", g.Cycles, 12, 12)
	}
}

// free returns a run without a cell under a still plate.
func free(seconds float64) Spec {
	return Spec{Name: "free", Header: run.Header{Kind: run.KindBlank}, Rig: Rig{RateHz: 1000}, StartM: 20e-6, Protocol: []Move{Hold(seconds)}, Seed: 5}
}

func TestWhiteNoise(t *testing.T) {
	s := free(60)
	s.Rig.ForceNoiseN, s.Rig.HeightNoiseM = 30e-12, 2e-9
	b := columns(t, simulate(t, s))
	// The standard error of an rms over 60,001 samples is 0.3 %.
	if sd := stat.StdDev(b.Force, nil); math.Abs(sd/30e-12-1) > 0.012 {
		t.Errorf("force noise %g N rms, want 30 pN", sd)
	}
	if sd := stat.StdDev(b.Height, nil); math.Abs(sd/2e-9-1) > 0.012 {
		t.Errorf("height noise %g m rms, want 2 nm", sd)
	}
	if c := stat.Correlation(b.Force[1:], b.Force[:len(b.Force)-1], nil); math.Abs(c) > 4/math.Sqrt(60000) {
		t.Errorf("neighbouring samples are correlated by %g", c)
	}
	if c := stat.Correlation(b.Force, b.Height, nil); math.Abs(c) > 4/math.Sqrt(60000) {
		t.Errorf("force and height noise are correlated by %g", c)
	}
}

// TestFlickerNoise: the one-sided power spectral density, by Welch's method
// (periodograms under a Hann window, half overlapped; IEEE Trans. Audio
// Electroacoust. 15 (1967) 70), is level^2/f inside the band and bends
// at its ends, and the variance is level^2 ln(to/from).
func TestFlickerNoise(t *testing.T) {
	const rate, level = 1000, 2e-12
	s := free(600)
	s.Rig.FlickerNPerRootHz, s.Rig.FlickerFromHz, s.Rig.FlickerToHz = level, 0.05, 200
	b := columns(t, simulate(t, s))

	const n = 1 << 14
	fft := fourier.NewFFT(n)
	window := make([]float64, n)
	var power float64
	for i := range window {
		window[i] = 0.5 - 0.5*math.Cos(2*math.Pi*float64(i)/n)
		power += window[i] * window[i]
	}
	psd := make([]float64, n/2+1)
	count := 0.0
	piece := make([]float64, n)
	for from := 0; from+n <= len(b.Force); from += n / 2 {
		mean := stat.Mean(b.Force[from:from+n], nil)
		for i := range piece {
			piece[i] = (b.Force[from+i] - mean) * window[i]
		}
		for k, c := range fft.Coefficients(nil, piece) {
			psd[k] += 2 * (real(c)*real(c) + imag(c)*imag(c)) / (rate * power)
		}
		count++
	}
	for _, band := range [][2]float64{{0.3, 1}, {1, 3}, {3, 10}, {10, 50}} {
		var sum, bins, expected float64
		for k := range psd {
			if f := float64(k) * rate / n; f >= band[0] && f < band[1] {
				// Corners from and to apart: the integral of the parts' spectra.
				ends := 2 / math.Pi * (math.Atan(200/f) - math.Atan(0.05/f))
				expected += level * level * ends
				sum += psd[k] / count * f
				bins++
			}
		}
		// 72 half-overlapped pieces times 11 bins or more, one in two of them
		// independent: a standard error of 5 % in the lowest band, less in the
		// others. The corners an octave apart ripple by less than 1 %.
		if r := sum / expected; math.Abs(r-1) > 4*0.05*math.Sqrt(11/bins)+0.02 {
			t.Errorf("%g to %g Hz: the power is %.3f of that expected", band[0], band[1], r)
		}
	}
	// 600 s hold some 250 correlation times of the slowest part, which has a
	// twelfth of the variance: a standard error of about 2 %.
	if r := stat.Variance(b.Force, nil) / (level * level * math.Log(200/0.05)); math.Abs(r-1) > 0.08 {
		t.Errorf("variance %.3f of level^2 ln(to/from), want 1", r)
	}
}

// TestSystematicErrors: each error of the rig moves what it should by the
// amount stated.
func TestSystematicErrors(t *testing.T) {
	plain := columns(t, simulate(t, quiet(2)))
	s := quiet(2)
	s.Rig.SpringConstantNPerM, s.Rig.SpringErrorRel = 0.21, 0.04
	s.Rig.ForceOffsetN, s.Rig.ForceDriftNPerS = 3e-10, 2e-12
	s.Rig.HeightOffsetM, s.Rig.RadiusErrorRel = 25e-9, 0.01
	s.Rig.DiameterUM, s.Rig.DiameterErrorM = 0.3e-6, -0.2e-6
	r := simulate(t, s)
	b := columns(t, r)
	for i := range b.Time {
		// Too stiff a spring bends less: declared over true is 1/1.04.
		if want := plain.Force[i]/1.04 + 3e-10 + 2e-12*b.Time[i]; math.Abs(b.Force[i]-want) > 1e-20 {
			t.Fatalf("%g s: force %g N, want %g N", b.Time[i], b.Force[i], want)
		}
		if want := plain.Height[i] + 25e-9; math.Abs(b.Height[i]-want) > 1e-20 {
			t.Fatalf("%g s: height %g m, want %g m", b.Time[i], b.Height[i], want)
		}
		if math.IsNaN(plain.Radius[i]) != (i%100 != 0) || math.IsNaN(plain.Radius[i]) != math.IsNaN(b.Radius[i]) {
			t.Fatalf("row %d: images are not every 0.1 s", i)
		}
		if want := plain.Radius[i] * 1.01; math.Abs(b.Radius[i]-want) > 1e-20 {
			t.Fatalf("%g s: radius %g m, want %g m", b.Time[i], b.Radius[i], want)
		}
	}
	if k := r.Truth().SpringConstantNPerM; math.Abs(k-0.2184) > 1e-12 {
		t.Errorf("true spring constant %g N/m, want 0.2184", k)
	}
	if d := r.Header().DiameterM; d == nil || math.Abs(d.Value-(2*s.Cell.RadiusM-0.2e-6)) > 1e-15 || d.U != 0.3e-6 {
		t.Errorf("declared diameter %v", d)
	}
}

// TestDrawnErrors: over many seeds the errors of the ordinary rig have the
// standard deviations that it declares.
func TestDrawnErrors(t *testing.T) {
	const n = 4000
	var spring, diameter, height, radius []float64
	for seed := range uint64(n) {
		r := OrdinaryRig(seed)
		spring = append(spring, r.SpringErrorRel*r.SpringConstantNPerM)
		diameter = append(diameter, r.DiameterErrorM)
		height = append(height, r.HeightOffsetM)
		radius = append(radius, r.RadiusErrorRel)
	}
	for _, c := range []struct {
		name string
		x    []float64
		sd   float64
	}{{"spring constant", spring, 0.01}, {"diameter", diameter, 0.3e-6}, {"height", height, 30e-9}, {"radius", radius, 0.003}} {
		mean, sd := stat.MeanStdDev(c.x, nil)
		// Four standard errors of mean and standard deviation.
		if math.Abs(mean) > 4*c.sd/math.Sqrt(n) || math.Abs(sd/c.sd-1) > 4/math.Sqrt(2*n) {
			t.Errorf("%s: errors %g ± %g, want 0 ± %g", c.name, mean, sd, c.sd)
		}
	}
}

func TestDeterminism(t *testing.T) {
	text := func(s Spec) string {
		var b strings.Builder
		if _, err := simulate(t, s).WriteTo(&b); err != nil {
			t.Fatal(err)
		}
		return b.String()
	}
	s := Ordinary(9)
	first := text(s)
	if text(s) != first {
		t.Error("the same description gave another file")
	}
	r := simulate(t, s)
	if a, b := columns(t, r), columns(t, r); !reflect.DeepEqual(a.Force, b.Force) || !reflect.DeepEqual(a.Height, b.Height) {
		t.Error("two passes over one recording differ")
	}
	other := s
	other.Seed++
	if text(other) == first {
		t.Error("another seed gave the same file")
	}
	// Streams are apart: no height noise leaves the force as it was.
	still := s
	still.Rig.HeightNoiseM = 0
	if a, b := columns(t, r), columns(t, simulate(t, still)); !reflect.DeepEqual(a.Force, b.Force) || reflect.DeepEqual(a.Height, b.Height) {
		t.Error("the noise of the height moves that of the force")
	}
	if !reflect.DeepEqual(Session(4), Session(4)) || reflect.DeepEqual(Session(4), Session(5)) {
		t.Error("a session is not a function of its seed")
	}
}

func TestBlocksStopsOnError(t *testing.T) {
	stop := errors.New("enough")
	calls := 0
	err := simulate(t, Ordinary(1)).Blocks(func(*run.Block) error { calls++; return stop })
	if !errors.Is(err, stop) || calls != 1 {
		t.Errorf("%d calls, error %v", calls, err)
	}
}

func TestHeightIsContinuous(t *testing.T) {
	s := quiet(1)
	s.Protocol = []Move{Hold(0.5), Ramp(15e-6, 1e-6), Oscillate(2, 0.3e-6, 3.3), Ramp(12e-6, 2e-6), Ramp(12e-6, 1e-6), Oscillate(0.5, 0.2e-6, 2), Ramp(s.StartM, 3e-6)}
	b := columns(t, simulate(t, s))
	for i := 1; i < b.Len(); i++ {
		// The fastest moves: 2 pi 2 Hz 0.3 um = 3.8 um/s, a sample is 1 ms.
		if d := math.Abs(b.Height[i] - b.Height[i-1]); d > 3.8e-9 {
			t.Fatalf("the plate jumps by %g m at %g s", d, b.Time[i])
		}
	}
	if got := b.Height[b.Len()-1]; math.Abs(got-s.StartM) > 3e-9 {
		t.Errorf("the plate ends at %g m, want %g m", got, s.StartM)
	}
}

func TestRefused(t *testing.T) {
	for _, c := range []struct {
		name  string
		spoil func(*Spec)
		want  string
	}{
		{"no rate", func(s *Spec) { s.Rig.RateHz = 0 }, "Rig.RateHz"},
		{"radius", func(s *Spec) { s.Cell.RadiusM = math.NaN() }, "Cell.RadiusM"},
		{"no tension", func(s *Spec) { s.Cell.TensionNPerM = 0 }, "Cell.TensionNPerM"},
		{"arm", func(s *Spec) { s.Cell.Arms[1].TimeS = 0 }, "Cell.Arms[1].TimeS"},
		{"neck", func(s *Spec) { s.Cell.PullN = 1e-9 }, "Cell.NeckNPerM"},
		{"noise", func(s *Spec) { s.Rig.ForceNoiseN = -1 }, "Rig.ForceNoiseN"},
		{"flicker", func(s *Spec) { s.Rig.FlickerToHz = 900 }, "Rig.FlickerToHz"},
		{"no moves", func(s *Spec) { s.Protocol = nil }, "Protocol is empty"},
		{"hold", func(s *Spec) { s.Protocol[0].DurationS = -1 }, "Protocol[0].DurationS"},
		{"speed", func(s *Spec) { s.Protocol[1].SpeedMPerS = -1 }, "Protocol[1].SpeedMPerS"},
		{"frequency", func(s *Spec) { s.Protocol[3].FrequencyHz = 400 }, "Protocol[3].FrequencyHz"},
		{"too low", func(s *Spec) { s.Protocol[1].ToM = 1e-6 }, "goes down to"},
		{"slack", func(s *Spec) { s.Cell.TensionNPerM = 1e-6; s.Cell.ElasticNPerM = 0; s.Protocol[5].SpeedMPerS = 50e-6 }, "go slack"},
		{"too long", func(s *Spec) { s.Protocol[0].DurationS = 1e9 }, "samples"},
		{"nowhere", func(s *Spec) { s.Protocol = []Move{Ramp(s.StartM, 1e-6)} }, "moves nowhere"},
		{"dialect", func(s *Spec) { s.Dialect = Dialect{Delimiter: ',', DecimalComma: true} }, "decimal sign"},
		{"bytes", func(s *Spec) { s.Fault.ByteCount = -1 }, "Fault.ByteCount"},
	} {
		s := Ordinary(1)
		c.spoil(&s)
		_, err := Simulate(s)
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: error %v, want one about %q", c.name, err, c.want)
		}
	}
}

func BenchmarkBlocks(b *testing.B) {
	r, err := Simulate(Ordinary(1))
	if err != nil {
		b.Fatal(err)
	}
	b.ReportAllocs()
	for b.Loop() {
		if err := r.Blocks(func(*run.Block) error { return nil }); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(float64(r.Samples())*float64(b.N)/b.Elapsed().Seconds(), "samples/s")
}
