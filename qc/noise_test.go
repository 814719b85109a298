package qc

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"platen/pipeline/run"
)

// measured is a rule that compares a value of known uncertainty with limits:
// how to put the value into otherwise sound estimates, and the default limits
// in the unit of the estimate. Signs are both tried where the rule takes the
// absolute value.
type measured struct {
	rule           string
	put            func(e *run.Estimates, v, u float64)
	review, repeat float64 // repeat 0: there is none
	signed         bool    // only positive values count
}

var measurements = []measured{
	{"force-drift", func(e *run.Estimates, v, u float64) { e.Baseline.SlopeN = *q(v, u) }, 5e-12, 20e-12, false},
	{"height-drift", osc2(func(s *run.Segment, v, u float64) { s.HeightSlopeMPerS = q(v, u) }), 10e-9, 40e-9, false},
	// 20 and 60 % a minute of the 1 mN/m of the sound oscillation.
	{"tension-drift", osc2(func(s *run.Segment, v, u float64) { s.TensionSlope = q(v, u) }), 0.2e-3 / 60, 0.6e-3 / 60, false},
	{"volume-change", func(e *run.Estimates, v, u float64) { e.Imaged.Change = *q(v, u) }, 0.04, 0.08, false},
	// The volume goes with the cube of the radius: V2/V1 = 1 + v.
	{"volume-disagreement", func(e *run.Estimates, v, u float64) {
		e.Volumes[0].RadiusM.U = 0
		r := e.Volumes[0].RadiusM.Value * math.Cbrt(1+v)
		e.Volumes[1].RadiusM = *q(r, u/(3*(1+v))*r)
	}, 0.05, 0, false},
	{"strain-range", osc2(func(s *run.Segment, v, u float64) { s.AreaStrainAmplitude = q(v, u) }), 0.03, 0.06, true},
	{"phase-range", osc2(func(s *run.Segment, v, u float64) { s.PhaseDeg = q(v, u) }), 90, 0, true},
	{"phase-range", osc2(func(s *run.Segment, v, u float64) { s.PhaseDeg = q(-v, u) }), 0, 0, true},
	{"adhesion", func(e *run.Estimates, v, u float64) {
		e.Adhesion.PullN, e.Adhesion.MaxLoadN = *q(v*30e-9, u*30e-9), 30e-9
	}, 0.05, 0.20, true},
	// Of 1 nN of load 100 pN are 10 %: the floor counts, not the 5 %.
	{"adhesion", func(e *run.Estimates, v, u float64) {
		e.Adhesion.PullN, e.Adhesion.MaxLoadN = *q(v, u), 1e-9
	}, 100e-12, 200e-12, true},
}

func osc2(put func(*run.Segment, float64, float64)) func(*run.Estimates, float64, float64) {
	return func(e *run.Estimates, v, u float64) { put(&e.Segments[2], v, u) }
}

func severityOf(fs []run.Finding, rule string) run.Severity {
	for _, f := range fs {
		if f.Rule == rule {
			return f.Severity
		}
	}
	return ""
}

// Around each limit, with noise: right at it, beyond it by less than twice the
// uncertainty, and beyond it by more.
func TestAroundTheLimits(t *testing.T) {
	for _, m := range measurements {
		u := m.review / 100
		if u == 0 {
			u = 1
		}
		type step struct {
			v, u float64
			want run.Severity
		}
		steps := []step{
			{m.review - u, u, ""},
			{m.review, u, ""},
			{m.review + 1.9*u, u, ""},
			{m.review + 2.1*u, u, run.ToReview},
		}
		if m.repeat > 0 {
			steps = append(steps,
				step{m.repeat, u, run.ToReview},
				step{m.repeat + 1.9*u, u, run.ToReview},
				step{m.repeat + 2.1*u, u, run.ToRepeat},
				step{m.repeat + 2.1*u, m.repeat, ""})
		}
		for _, s := range steps {
			for _, sign := range []float64{1, -1} {
				if sign < 0 && (m.signed || m.rule == "volume-disagreement") {
					continue
				}
				e := sound()
				m.put(&e, sign*s.v, s.u)
				fs := Judge(e, Defaults())
				if got := severityOf(fs, m.rule); got != s.want || (s.want == "" && len(fs) > 0) {
					t.Errorf("%s: %g with u %g gives %q, want %q (%+v)", m.rule, sign*s.v, s.u, got, s.want, fs)
				}
			}
		}
	}
}

// With the true value right at the limit for review, noise may fire a rule in
// at most 2.28 % of runs: one-sided two standard deviations, tables of the
// normal distribution. Of 10,000 seeded runs that is 228 expected, standard
// deviation 14.9 (binomial), so 228 ± 45 at three standard deviations. The
// volume from two radii is a shade off normal, the rest is exact.
func TestFalseAlarms(t *testing.T) {
	const runs, most, least = 10000, 273, 183
	for i, m := range measurements {
		t.Run(fmt.Sprint(m.rule, i), func(t *testing.T) {
			rng := rand.New(rand.NewPCG(1, uint64(i)))
			u := m.review / 50
			if u == 0 {
				u = 1
			}
			fired := 0
			for range runs {
				e := sound()
				m.put(&e, m.review+u*rng.NormFloat64(), u)
				if severityOf(Judge(e, Defaults()), m.rule) != "" {
					fired++
				}
			}
			if fired > most || fired < least {
				t.Errorf("fired in %d of %d runs, expected about 228", fired, runs)
			}
		})
	}
}

// The scatter that low-snr compares is itself estimated, from a handful of
// batches: with the true scatter right at the limit it is drawn as sigma times
// sqrt(chi-squared(nu)/nu), the law of a sample standard deviation of normal
// values, for storage and loss part each. nu is what package harmonic leaves
// at these numbers of cycles (first cycle settled, one batch a cycle below 16
// cycles, two from there on).
func TestFalseAlarmsOfLowSNR(t *testing.T) {
	const runs, most = 10000, 273 // as above
	chi := func(rng *rand.Rand, nu int) float64 {
		var sum float64
		for range nu {
			z := rng.NormFloat64()
			sum += z * z
		}
		return math.Sqrt(sum / float64(nu))
	}
	for _, c := range []struct {
		cycles float64
		nu     int
	}{{3.2, 2}, {5, 2}, {8, 5}, {12, 9}, {20, 8}, {40, 18}, {100, 23}} {
		rng := rand.New(rand.NewPCG(7, uint64(c.nu)))
		k := math.Hypot(12e-3, 4e-3)
		sigma := k / math.Pow(10, 30./20)
		fired := 0
		for range runs {
			e := sound()
			s := &e.Segments[2]
			s.Cycles = c.cycles
			s.StorageScatter, s.LossScatter = n(sigma*chi(rng, c.nu)), n(sigma*chi(rng, c.nu))
			if severityOf(Judge(e, Defaults()), "low-snr") != "" {
				fired++
			}
		}
		if fired > most {
			t.Errorf("%g cycles: fired in %d of %d runs, at most 2.28 %% are allowed", c.cycles, fired, runs)
		}
	}
}

// snr_db has the form of SINAD (IEEE 1057: 20 log10 of the rms of the sine over
// the rms residual; definition seen in a public implementation). With its true
// value right at the limit for single samples, white noise fires the rule in
// at most 2.28 % of segments; simulated sample by sample.
func TestFalseAlarmsOfSingleSamples(t *testing.T) {
	const (
		samples, cycles = 400, 12.0
		runs            = 4000
		most            = 120 // 91 expected, binomial standard deviation 9.4: three of them
	)
	rng := rand.New(rand.NewPCG(11, 12))
	limit := Defaults().LowSNRSample
	sigma := 1 / math.Sqrt2 / math.Pow(10, limit/20) // of a sine of amplitude 1
	fired := 0
	for range runs {
		var y [samples]float64
		var a, b float64
		for i := range y {
			s, c := math.Sincos(2 * math.Pi * cycles * float64(i) / samples)
			y[i] = c + sigma*rng.NormFloat64()
			a += 2 * y[i] * c / samples
			b += 2 * y[i] * s / samples
		}
		var rss float64
		for i := range y {
			s, c := math.Sincos(2 * math.Pi * cycles * float64(i) / samples)
			r := y[i] - a*c - b*s
			rss += r * r
		}
		e := sound()
		e.RateHz = samples / 12.0 // the oscillation lasts 12 s
		e.Segments[2].SNRdB = n(20 * math.Log10(math.Hypot(a, b)/math.Sqrt2/math.Sqrt(rss/samples)))
		if severityOf(Judge(e, Defaults()), "low-snr") != "" {
			fired++
		}
	}
	if fired > most || fired < 40 {
		t.Errorf("fired in %d of %d segments, expected about 91", fired, runs)
	}
}

// Noise alone puts something into the harmonics, also where the segment is too
// short for a scatter of the modulus: distortion of a pure sine in noise.
func TestNoiseIsNoDistortion(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 6))
	const samples = 60
	fired := 0
	for range 2000 {
		const sigma = 0.25
		var x [3]struct{ re, im float64 }
		var rss float64
		for k := range x {
			// Amplitudes of a least-squares fit to N samples: sigma sqrt(2/N).
			x[k].re = sigma * math.Sqrt(2./samples) * rng.NormFloat64()
			x[k].im = sigma * math.Sqrt(2./samples) * rng.NormFloat64()
		}
		x[0].re++
		for range samples {
			r := sigma * rng.NormFloat64()
			rss += r * r
		}
		a := math.Hypot(x[0].re, x[0].im)
		e := sound()
		s := &e.Segments[2]
		s.Cycles, e.Ended, e.Completion = 2.5, 2, run.Growing
		s.StorageNPerM, s.LossNPerM, s.StorageScatter, s.LossScatter, s.PhaseDeg = nil, nil, nil, nil, nil
		s.SNRdB = n(20 * math.Log10(a/math.Sqrt2/math.Sqrt(rss/samples)))
		s.Distortion = n(math.Sqrt(x[1].re*x[1].re+x[1].im*x[1].im+x[2].re*x[2].re+x[2].im*x[2].im) / a)
		if severityOf(Judge(e, Defaults()), "distortion") != "" {
			fired++
		}
	}
	if fired > 66 { // 46 expected at the most (2.28 %), plus three binomial standard deviations of 6.7
		t.Errorf("noise was called distortion in %d of 2000 segments", fired)
	}
	// A loop that is broken shows, however short.
	e := sound()
	s := &e.Segments[2]
	s.Cycles, e.Ended, e.Completion = 2.5, 2, run.Growing
	s.StorageNPerM, s.LossNPerM, s.StorageScatter, s.LossScatter, s.PhaseDeg = nil, nil, nil, nil, nil
	s.Distortion = n(0.4)
	if got := severityOf(Judge(e, Defaults()), "distortion"); got != run.ToRepeat {
		t.Errorf("a broken loop of two cycles: %q", got)
	}
}

// Each case of TestRules again on runs without a cell, and while the run is
// being written: what the table of rules says of both holds.
func TestWhereAndWhenRulesApply(t *testing.T) {
	rules := map[string]Rule{}
	for _, r := range Rules() {
		rules[r.Name] = r
	}
	for _, c := range ruleCases {
		if c.rule == "" {
			continue
		}
		for _, kind := range []run.Kind{run.KindBlank, run.KindGlass, run.KindThermal} {
			e := sound()
			c.spoil(&e)
			e.Header.Kind = kind
			want := c.sev
			if rules[c.rule].Cell {
				want = ""
			}
			if got := severityOf(Judge(e, Defaults()), c.rule); got != want {
				t.Errorf("%s, %s run: %q, want %q", c.name, kind, got, want)
			}
		}
		e := sound()
		c.spoil(&e)
		e.Completion = run.Growing
		want := c.sev
		if !rules[c.rule].WhileRun || c.rule == "no-contact" { // see TestRulesThatWait
			want = ""
		}
		if got := severityOf(Judge(e, Defaults()), c.rule); got != want {
			t.Errorf("%s, while written: %q, want %q", c.name, got, want)
		}
	}
}

// Rules that need something to be over wait for it, and no longer.
func TestRulesThatWait(t *testing.T) {
	sticky := sound()
	sticky.Completion = run.Growing
	sticky.Adhesion.PullN = *q(9e-9, 1e-11)
	sticky.Ended = 3 // the plate is still leaving
	if fs := Judge(sticky, Defaults()); len(fs) != 0 {
		t.Errorf("adhesion before the plate has left: %+v", fs)
	}
	sticky.Ended = 4
	if fs := Judge(sticky, Defaults()); severityOf(fs, "adhesion") != run.ToRepeat {
		t.Errorf("adhesion when the plate has left: %+v", fs)
	}

	missed := func() run.Estimates {
		e := sound()
		e.Completion, e.Contact, e.Adhesion, e.Ended = run.Growing, nil, nil, 2
		e.Segments = e.Segments[:3]
		e.Segments[1].Mode = run.Approach
		for i := range e.Segments {
			s := &e.Segments[i]
			s.TensionNPerM, s.TensionSlope, s.HeightRatio, s.HeightSlopeMPerS = nil, nil, nil, nil
			s.StorageNPerM, s.LossNPerM, s.AreaStrainAmplitude, s.PhaseDeg, s.Distortion = nil, nil, nil, nil, nil
		}
		e.Segments[2].SNRdB, e.Segments[2].Cycles = n(-15), 4
		return e
	}
	for _, c := range []struct {
		name   string
		change func(*run.Estimates)
		want   run.Severity
	}{
		{"oscillating above nothing", func(*run.Estimates) {}, run.ToRepeat},
		{"too few cycles to say", func(e *run.Estimates) { e.Segments[2].Cycles = 2 }, ""},
		{"still going down", func(e *run.Estimates) { e.Ended = 1 }, ""},
		{"stopped on the way down", func(e *run.Estimates) { e.Segments[2].Mode = run.Hold }, ""},
		{"the force follows", func(e *run.Estimates) { e.Segments[2].SNRdB = n(20) }, ""},
		{"touched", func(e *run.Estimates) { e.Contact = &run.Contact{TimeS: 5} }, ""},
		{"a blank", func(e *run.Estimates) { e.Header.Kind = run.KindBlank }, ""},
	} {
		e := missed()
		c.change(&e)
		if got := severityOf(Judge(e, Defaults()), "no-contact"); got != c.want {
			t.Errorf("%s: %q, want %q", c.name, got, c.want)
		}
	}
}

// What stands still is named with its own unit, and a height that stands still
// costs less than a force that does.
func TestClippingByChannel(t *testing.T) {
	for _, c := range []struct {
		channel string
		value   float64
		sev     run.Severity
		says    string
	}{
		{"force", 20e-9, run.ToRepeat, "20 nN"},
		{"deflection", 1.5e-6, run.ToRepeat, "1.5 µm"},
		{"height", 18e-6, run.ToReview, "18 µm"},
	} {
		e := sound()
		e.Clips = []run.Clip{{Channel: c.channel, Interval: run.Interval{FromS: 12, ToS: 30}, Samples: 400, Longest: 60, Fraction: 0.01, Value: c.value}}
		fs := Judge(e, Defaults())
		if len(fs) != 1 || fs[0].Severity != c.sev || !contains(fs[0].Message, c.says, c.channel, "from 12 s to 30 s") {
			t.Errorf("%s: %+v, want %s and %q", c.channel, fs, c.sev, c.says)
		}
		e.Clips[0].Dead = true
		if fs := Judge(e, Defaults()); len(fs) != 1 || fs[0].Severity != run.ToRepeat || !contains(fs[0].Message, c.channel) {
			t.Errorf("dead %s: %+v", c.channel, fs)
		}
	}
}

// Judging twice gives the same findings in the same order.
func TestSameFindingsInSameOrder(t *testing.T) {
	e := sound()
	for _, c := range ruleCases {
		if c.sev != "" && !slices.Contains([]string{"no-contact", "unreadable"}, c.rule) {
			c.spoil(&e)
		}
	}
	first := Judge(e, Defaults())
	if len(first) < 10 {
		t.Fatalf("only %d findings", len(first))
	}
	for range 20 {
		again := Judge(e, Defaults())
		for i := range first {
			a, b := first[i], again[i]
			if a.Rule != b.Rule || a.Severity != b.Severity || a.Message != b.Message || a.FromS != b.FromS {
				t.Fatalf("%+v, then %+v", a, b)
			}
		}
	}
}
