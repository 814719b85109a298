package qc

import (
	"encoding/json"
	"math"
	"math/rand/v2"
	"reflect"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"testing"

	"pgregory.net/rapid"

	"platen/pipeline/run"
)

func q(v, u float64) *run.Quantity { return &run.Quantity{Value: v, U: u} }
func n(v float64) *float64         { return &v }

// oscillating is a sound oscillation of a sound cell run.
func oscillating() run.Segment {
	return run.Segment{
		Index: 2, Mode: run.Oscillation, FromS: 18, ToS: 30, Cycles: 12, FrequencyHz: q(1, 1e-6),
		HeightRatio: q(0.6, 0.002), HeightSlopeMPerS: q(0, 1e-11), TensionNPerM: q(1e-3, 5e-5), TensionSlope: q(0, 1e-8),
		AreaStrainAmplitude: q(0.01, 1e-4), StorageNPerM: q(12e-3, 6e-4), LossNPerM: q(4e-3, 2e-4),
		StorageScatter: n(1e-5), LossScatter: n(1e-5), TensionScatter: n(1e-6),
		PhaseDeg: q(18, 0.1), SNRdB: n(38), Distortion: n(0.02),
	}
}

// sound is a cell run with nothing wrong.
func sound() run.Estimates {
	return run.Estimates{
		Header: run.Header{Kind: run.KindCell, Cell: "elm-1", Samples: 40000}, Completion: run.ByCount,
		Samples: 40000, FromS: 0, ToS: 40, RateHz: 1000, Sampling: run.Sampling{Even: true},
		Baseline: &run.Baseline{SlopeN: run.Quantity{Value: 1e-12, U: 1e-14}, BeforeS: 5, AfterS: 4, NoiseN: 3e-11},
		Contact:  &run.Contact{TimeS: 5, HeightM: run.Quantity{Value: 19e-6, U: 4e-8}},
		Volumes:  []run.Volume{{Source: run.VolumeImaged, RadiusM: run.Quantity{Value: 9.5e-6, U: 3e-8}}, {Source: run.VolumeContact, RadiusM: run.Quantity{Value: 9.52e-6, U: 1e-7}}},
		Imaged:   &run.ImagedVolume{Images: 400, Interval: run.Interval{FromS: 0, ToS: 40}, Change: run.Quantity{Value: 0.001, U: 0.002}},
		Adhesion: &run.Adhesion{AtS: 36, PullN: run.Quantity{Value: 5e-12, U: 5e-12}, MaxLoadN: 3e-8},
		Segments: []run.Segment{
			{Index: 0, Mode: run.Hold, FromS: 0, ToS: 4, HeightRatio: q(1.1, 0.003)},
			{Index: 1, Mode: run.Hold, FromS: 10, ToS: 18, HeightRatio: q(0.6, 0.002), HeightSlopeMPerS: q(0, 1e-11), TensionNPerM: q(1e-3, 5e-5), TensionSlope: q(-1e-6, 1e-7)},
			oscillating(),
			{Index: 3, Mode: run.Retract, FromS: 34, ToS: 37},
		},
		Ended: 4,
	}
}

func osc(change func(*run.Segment)) func(*run.Estimates) {
	return func(e *run.Estimates) { change(&e.Segments[2]) }
}

// Each case spoils one thing. Values right at a limit, and values beyond it by
// less than twice their uncertainty, must not fire; limits are the defaults.
var ruleCases = []struct {
	name  string
	spoil func(*run.Estimates)
	rule  string // "" for none
	sev   run.Severity
}{
	{"sound", func(*run.Estimates) {}, "", ""},

	{"drift at the limit", func(e *run.Estimates) { e.Baseline.SlopeN = *q(5e-12, 1e-14) }, "", ""},
	{"drift beyond, but within noise", func(e *run.Estimates) { e.Baseline.SlopeN = *q(8e-12, 2e-12) }, "", ""},
	{"drift", func(e *run.Estimates) { e.Baseline.SlopeN = *q(-8e-12, 1e-12) }, "force-drift", run.ToReview},
	{"strong drift", func(e *run.Estimates) { e.Baseline.SlopeN = *q(30e-12, 1e-12) }, "force-drift", run.ToRepeat},

	{"plate creeps", osc(func(s *run.Segment) { s.HeightSlopeMPerS = q(15e-9, 1e-9) }), "height-drift", run.ToReview},
	{"plate runs away", osc(func(s *run.Segment) { s.HeightSlopeMPerS = q(-50e-9, 1e-9) }), "height-drift", run.ToRepeat},
	{"plate creeps above the cell", func(e *run.Estimates) { e.Segments[0].HeightSlopeMPerS = q(50e-9, 1e-9) }, "", ""},

	{"tension falls", osc(func(s *run.Segment) { s.TensionSlope = q(-0.3*1e-3/60, 1e-8) }), "tension-drift", run.ToReview},
	{"tension falls, not known well", osc(func(s *run.Segment) { s.TensionSlope = q(-0.3*1e-3/60, 0.1*1e-3/60) }), "", ""},
	{"tension collapses", osc(func(s *run.Segment) { s.TensionSlope = q(-0.9*1e-3/60, 1e-8) }), "tension-drift", run.ToRepeat},
	{"tension relaxes during a hold", func(e *run.Estimates) { e.Segments[1].TensionSlope = q(-0.9*1e-3/60, 1e-8) }, "tension-drift", run.Info},

	// 3.2 % are 30 dB and 10 % are 20 dB. The scatter of ten batches is itself
	// known to 2 dB: it counts from 4 dB beyond the limits, 5.1 % and 16 %.
	{"weak signal, not surely", osc(func(s *run.Segment) { s.StorageScatter = n(0.05 * 12.65e-3) }), "", ""},
	{"weak signal", osc(func(s *run.Segment) { s.StorageScatter = n(0.06 * 12.65e-3) }), "low-snr", run.ToReview},
	{"very weak signal, not surely", osc(func(s *run.Segment) { s.StorageScatter = n(0.15 * 12.65e-3) }), "low-snr", run.ToReview},
	{"very weak signal", osc(func(s *run.Segment) { s.StorageScatter = n(0.17 * 12.65e-3) }), "low-snr", run.ToRepeat},
	{"samples drown", osc(func(s *run.Segment) { s.SNRdB = n(2) }), "low-snr", run.ToReview},
	{"no answer", osc(func(s *run.Segment) { s.StorageNPerM, s.LossNPerM, s.PhaseDeg, s.SNRdB = nil, nil, nil, n(-20) }), "low-snr", run.ToRepeat},
	{"two cycles are too early to say", osc(func(s *run.Segment) { s.Cycles = 2.95; s.StorageScatter = n(0.15 * 12.6e-3) }), "", ""},

	{"cell shrinks", func(e *run.Estimates) { e.Imaged.Change = *q(-0.06, 0.005) }, "volume-change", run.ToReview},
	{"cell swells much", func(e *run.Estimates) { e.Segments[2].VolumeChange = q(0.12, 0.01) }, "volume-change", run.ToRepeat},
	{"volume change within noise", func(e *run.Estimates) { e.Imaged.Change = *q(-0.06, 0.02) }, "", ""},
	{"sizes disagree", func(e *run.Estimates) { e.Volumes[1].RadiusM = *q(10.2e-6, 5e-8) }, "volume-disagreement", run.ToReview},
	{"sizes disagree within their uncertainty", func(e *run.Estimates) { e.Volumes[1].RadiusM = *q(10.2e-6, 4e-7) }, "", ""},

	// A bare membrane ruptures at an area strain of 3 to 5 % (BioNumbers
	// 110907): from 3 % on the run is looked at.
	{"strained to rupture of a membrane", osc(func(s *run.Segment) { s.AreaStrainAmplitude = q(0.04, 1e-4) }), "strain-range", run.ToReview},
	{"strained far beyond", osc(func(s *run.Segment) { s.AreaStrainAmplitude = q(0.08, 1e-4) }), "strain-range", run.ToRepeat},
	{"hardly strained", osc(func(s *run.Segment) { s.AreaStrainAmplitude = q(2e-4, 1e-5) }), "strain-range", run.ToReview},

	{"bent loop", osc(func(s *run.Segment) { s.Distortion = n(0.15) }), "distortion", run.ToReview},
	{"broken loop", osc(func(s *run.Segment) { s.Distortion = n(0.4) }), "distortion", run.ToRepeat},

	{"negative phase", osc(func(s *run.Segment) { s.PhaseDeg = q(-5, 1) }), "phase-range", run.ToReview},
	{"negative phase within noise", osc(func(s *run.Segment) { s.PhaseDeg = q(-5, 3) }), "", ""},
	{"phase above 90", osc(func(s *run.Segment) { s.PhaseDeg = q(95, 1) }), "phase-range", run.ToReview},

	{"two cycles", osc(func(s *run.Segment) { s.Cycles = 2 }), "few-cycles", run.ToReview},
	{"three cycles, borders not quite found", osc(func(s *run.Segment) { s.Cycles = 2.95 }), "", ""},

	{"contact lost", func(e *run.Estimates) { e.Losses = []run.Interval{{FromS: 24, ToS: 30}} }, "contact-loss", run.ToRepeat},
	{"a blink", func(e *run.Estimates) { e.Losses = []run.Interval{{FromS: 24, ToS: 24.4}} }, "", ""},

	{"clipped", func(e *run.Estimates) {
		e.Clips = []run.Clip{{Channel: "force", Samples: 400, Longest: 60, Fraction: 0.01, Value: 2e-8}}
	}, "clipping", run.ToRepeat},
	{"clipped once", func(e *run.Estimates) {
		e.Clips = []run.Clip{{Channel: "force", Samples: 12, Longest: 12, Fraction: 0.0003, Value: 2e-8}}
	}, "clipping", run.ToReview},
	{"dead sensor", func(e *run.Estimates) {
		e.Clips = []run.Clip{{Channel: "force", Samples: 40000, Longest: 40000, Fraction: 1, Dead: true}}
	}, "clipping", run.ToRepeat},

	{"one sample lost", func(e *run.Estimates) { e.Sampling.Gaps, e.Sampling.MissingS = 1, 0.001 }, "sample-gap", run.Info},
	{"a gap", func(e *run.Estimates) { e.Sampling.Gaps, e.Sampling.MissingS = 2, 0.4 }, "sample-gap", run.ToReview},
	{"a long gap", func(e *run.Estimates) { e.Sampling.Gaps, e.Sampling.MissingS = 1, 5 }, "sample-gap", run.ToRepeat},

	{"one step back", func(e *run.Estimates) { e.Sampling.Backward = 1 }, "time-order", run.ToReview},
	{"many steps back", func(e *run.Estimates) { e.Sampling.Backward = 9 }, "time-order", run.ToRepeat},

	{"sticks", func(e *run.Estimates) { e.Adhesion.PullN = *q(3e-9, 1e-11) }, "adhesion", run.ToReview},
	{"sticks fast", func(e *run.Estimates) { e.Adhesion.PullN = *q(9e-9, 1e-11) }, "adhesion", run.ToRepeat},
	{"a small pull under a small load", func(e *run.Estimates) { e.Adhesion.PullN, e.Adhesion.MaxLoadN = *q(90e-12, 1e-12), 2e-10 }, "", ""},

	{"nothing touched", func(e *run.Estimates) { e.Contact, e.Segments, e.Adhesion = nil, e.Segments[:1], nil }, "no-contact", run.ToRepeat},
	{"starts in contact", func(e *run.Estimates) { e.Contact, e.Baseline = nil, nil }, "no-contact", run.Info},

	{"cut short", func(e *run.Estimates) { e.Samples = 36000 }, "truncated", run.ToReview},
	{"cut in half", func(e *run.Estimates) { e.Samples = 20000 }, "truncated", run.ToRepeat},
	{"empty tail", func(e *run.Estimates) { e.NULTail = 4096 }, "truncated", run.ToReview},

	{"a broken run", func(e *run.Estimates) {
		e.Trouble = &run.Trouble{Line: 7, Byte: 99, Want: "a number", Got: "x", Fix: "export numbers", IsRun: true}
	}, "unreadable", run.ToRepeat},
	{"no run", func(e *run.Estimates) {
		e.Trouble = &run.Trouble{Want: "text", Got: "a picture", Fix: "move it elsewhere"}
	}, "unreadable", run.ToReview},
}

func TestRules(t *testing.T) {
	fired := map[string]bool{}
	for _, c := range ruleCases {
		t.Run(c.name, func(t *testing.T) {
			e := sound()
			c.spoil(&e)
			fs := Judge(e, Defaults())
			if c.rule == "" {
				if len(fs) != 0 {
					t.Fatalf("found %+v", fs)
				}
				return
			}
			if len(fs) != 1 || fs[0].Rule != c.rule || fs[0].Severity != c.sev {
				t.Fatalf("found %+v, want one %s of %s", fs, c.sev, c.rule)
			}
			fired[c.rule] = true
			f := fs[0]
			// Read aloud: sentences, with what to do.
			for _, s := range []string{f.Message, f.Advice} {
				if len(s) < 10 || !strings.HasSuffix(s, ".") || s[0] < 'A' || s[0] > 'Z' || strings.Contains(s, "%!") {
					t.Errorf("not a sentence: %q", s)
				}
			}
			if v := Verdict(fs); (v == run.Accept) != (c.sev == run.Info) {
				t.Errorf("verdict %s", v)
			}
		})
	}
	for _, r := range Rules() {
		if !fired[r.Name] && r.Name != "thermal-fit" { // see TestThermalFit
			t.Errorf("no case fires %s", r.Name)
		}
	}
}

// While a run is being written, rules that need its end are silent, and the
// others speak.
func TestProvisional(t *testing.T) {
	e := sound()
	e.Completion = run.Growing
	e.Samples, e.Contact, e.NULTail = 100, nil, 4096
	e.Segments = e.Segments[:1]
	if fs := Judge(e, Defaults()); len(fs) != 0 {
		t.Errorf("fired early: %+v", fs)
	}
	e = sound()
	e.Completion = run.Growing
	e.Segments[2].Cycles, e.Ended = 2, 2 // the oscillation goes on
	if fs := Judge(e, Defaults()); len(fs) != 0 {
		t.Errorf("fired early: %+v", fs)
	}
	e.Losses = []run.Interval{{FromS: 24, ToS: 30}}
	if fs := Judge(e, Defaults()); len(fs) != 1 || fs[0].Rule != "contact-loss" {
		t.Errorf("%+v", fs)
	}
}

// A run without a cell is not judged as one.
func TestKinds(t *testing.T) {
	for _, kind := range []run.Kind{run.KindBlank, run.KindGlass, run.KindThermal} {
		e := run.Estimates{Header: run.Header{Kind: kind}, Completion: run.ByEndMark, Samples: 10,
			Reference: &run.Reference{SpringConstantNPerM: q(0.2, 0.01), Misfit: n(1)}, Segments: []run.Segment{oscillating()}}
		e.Segments[0].Distortion, e.Segments[0].PhaseDeg, e.Segments[0].Cycles = n(0.9), q(-40, 1), 1
		e.Losses = []run.Interval{{FromS: 1, ToS: 9}}
		if fs := Judge(e, Defaults()); len(fs) != 0 {
			t.Errorf("%s: %+v", kind, fs)
		}
		e.Baseline = &run.Baseline{SlopeN: *q(9e-11, 1e-12)}
		if fs := Judge(e, Defaults()); len(fs) != 1 || fs[0].Rule != "force-drift" {
			t.Errorf("%s: %+v", kind, fs)
		}
	}
}

func TestOrderOfFindings(t *testing.T) {
	e := sound()
	e.Clips = []run.Clip{{Channel: "force", Samples: 400, Longest: 60, Fraction: 0.01, Value: 2e-8}}
	e.Segments[2].Distortion = n(0.4)
	e.Sampling.Gaps, e.Sampling.MissingS = 1, 0.4
	var names []string
	for _, f := range Judge(e, Defaults()) {
		names = append(names, f.Rule)
	}
	// Worst first; of the worst the cause before what it brings about.
	if want := []string{"clipping", "distortion", "sample-gap"}; !slices.Equal(names, want) {
		t.Errorf("%v, want %v", names, want)
	}
}

// The limits that the table of rules names are those of Defaults.
func TestRulesTellTheDefaults(t *testing.T) {
	d := Defaults()
	want := map[string][]float64{
		"force-drift": {d.ForceDriftReview, d.ForceDriftRepeat}, "height-drift": {d.HeightDriftReview, d.HeightDriftRepeat},
		"tension-drift": {d.TensionDriftReview, d.TensionDriftRepeat}, "low-snr": {d.LowSNRReview, d.LowSNRRepeat, d.LowSNRSample},
		"volume-change": {d.VolumeChangeReview, d.VolumeChangeRepeat}, "volume-disagreement": {d.VolumeDisagreement},
		"strain-range": {d.StrainLeast, d.StrainReview, d.StrainRepeat}, "distortion": {d.DistortReview, d.DistortRepeat},
		"phase-range": {0, 90}, "few-cycles": {d.FewestCycles}, "contact-loss": {d.ContactLoss}, "clipping": {d.ClippedRepeat},
		"sample-gap": {d.GapReview, d.GapRepeat}, "time-order": {d.StepsBackRepeat},
		"adhesion": {d.AdhesionReview, d.AdhesionRepeat, d.AdhesionLeast}, "truncated": {d.TruncatedRepeat}, "thermal-fit": {d.ThermalMisfit},
		"no-contact": nil, "unreadable": nil,
	}
	for _, r := range Rules() {
		var got []float64
		for _, s := range regexp.MustCompile(`[0-9]+(\.[0-9]+)?`).FindAllString(r.Limits, -1) {
			v, _ := strconv.ParseFloat(s, 64)
			got = append(got, v)
		}
		w, ok := want[r.Name]
		if !ok || !slices.Equal(got, w) {
			t.Errorf("%s says %q: %v, defaults are %v", r.Name, r.Limits, got, w)
		}
		if r.What == "" || r.Reason == "" || r.Advice == "" {
			t.Errorf("%s: %+v says too little", r.Name, r)
		}
	}
}

func TestLimitsValidate(t *testing.T) {
	if err := Defaults().Validate(); err != nil {
		t.Fatal(err)
	}
	typ := reflect.TypeOf(Limits{})
	for i := range typ.NumField() {
		key := typ.Field(i).Tag.Get("toml")
		if key == "" {
			t.Errorf("%s has no name in the settings file", typ.Field(i).Name)
		}
		l := Defaults()
		reflect.ValueOf(&l).Elem().Field(i).SetFloat(math.NaN())
		if err := l.Validate(); err == nil || !strings.Contains(err.Error(), "limits."+key+" = NaN: must be ") {
			t.Errorf("%s = NaN: %v", key, err)
		}
		l = Defaults()
		reflect.ValueOf(&l).Elem().Field(i).SetFloat(math.Inf(1))
		if err := l.Validate(); err == nil {
			t.Errorf("%s = +Inf was taken", key)
		}
	}
	for _, c := range []struct {
		spoil func(*Limits)
		want  string
	}{
		{func(l *Limits) { l.ForceDriftReview = 25 }, "limits.force_drift_review_pn_per_s = 25: must be from 0 to 20 (force_drift_repeat_pn_per_s)"},
		{func(l *Limits) { l.GapReview = -1 }, "limits.sample_gap_review_ms = -1: must be from 0 to 2000 (sample_gap_repeat_ms)"},
		{func(l *Limits) { l.LowSNRRepeat = 31 }, "limits.low_snr_repeat_db = 31: must be from 0 to 30 (low_snr_review_db)"},
		{func(l *Limits) { l.StrainLeast = 3.5 }, "limits.strain_least_percent = 3.5: must be from 0 to 3 (strain_review_percent)"},
		{func(l *Limits) { l.TruncatedRepeat = 101 }, "limits.truncated_repeat_percent = 101: must be from 0 to 100"},
		{func(l *Limits) { l.ContactLoss = -2 }, "limits.contact_loss_repeat_s = -2: must be 0 or more"},
	} {
		l := Defaults()
		c.spoil(&l)
		if err := l.Validate(); err == nil || err.Error() != c.want {
			t.Errorf("%v, want %s", err, c.want)
		}
	}
}

func contains(s string, parts ...string) bool {
	for _, p := range parts {
		if !strings.Contains(s, p) {
			return false
		}
	}
	return true
}

func raisedBy(rule string, s run.Severity) []run.Finding {
	return []run.Finding{{Rule: rule, Severity: s}}
}

// Raised once, raised once more when it becomes worse, cleared once after two
// seconds without, and never chattering.
func TestTracker(t *testing.T) {
	var tr Tracker
	changes := func(fs []run.Finding) (raised, cleared int) {
		for _, c := range tr.Update(fs) {
			if c.Raised {
				raised++
			} else {
				cleared++
			}
		}
		return raised, cleared
	}
	step := func(fs []run.Finding, raised, cleared int) {
		t.Helper()
		if r, c := changes(fs); r != raised || c != cleared {
			t.Errorf("%d raised, %d cleared; want %d, %d", r, c, raised, cleared)
		}
	}
	step(raisedBy("x", run.ToReview), 1, 0)
	step(raisedBy("x", run.ToReview), 0, 0)
	step(raisedBy("x", run.ToRepeat), 1, 0)
	step(raisedBy("x", run.ToReview), 0, 0)
	step(raisedBy("info", run.Info), 0, 0)
	for range clearAfter - 2 {
		step(nil, 0, 0)
	}
	step(nil, 0, 1)
	step(nil, 0, 0)

	// What comes back milder is shown as it is, and its getting worse again is
	// said; after that it stays.
	step(raisedBy("x", run.ToReview), 1, 0)
	step(raisedBy("x", run.ToRepeat), 1, 0)
	for range 3 * clearAfter {
		step(nil, 0, 0)
	}
	step(raisedBy("x", run.ToRepeat), 0, 0)

	// The same rule in two segments is two warnings, cleared in their order.
	tr = Tracker{}
	two := append(raisedBy("x", run.ToReview), raisedBy("x", run.ToReview)...)
	for i := range two {
		two[i].Segment = &[]int{4 - i}[0]
	}
	step(two, 2, 0)
	for range clearAfter - 1 {
		step(nil, 0, 0)
	}
	var order []int
	for _, c := range tr.Update(nil) {
		order = append(order, *c.Finding.Segment)
	}
	if !slices.Equal(order, []int{3, 4}) {
		t.Errorf("cleared in the order %v", order)
	}
}

// A value that dithers about a limit for an hour, with noise and a slow swing,
// judged four times a second: one raise, one clearing, one raise more, and an
// escalation in each stretch at most.
func TestTrackerDoesNotChatter(t *testing.T) {
	for _, c := range []struct {
		name       string
		centre     float64 // pN/s; limits 5 and 20
		mostRaises int
	}{{"about review", 5, 2}, {"about repeat", 20, 4}, {"far below", 1, 0}} {
		for seed := range uint64(3) {
			rng := rand.New(rand.NewPCG(3, seed))
			var tr Tracker
			raised, cleared := 0, 0
			for i := range 4 * 3600 {
				e := sound()
				swing := 0.2 * math.Sin(float64(i)/200)
				e.Baseline.SlopeN = *q((c.centre*(1+swing)+0.3*rng.NormFloat64())*1e-12, 0.3e-12)
				for _, ch := range tr.Update(Judge(e, Defaults())) {
					if ch.Raised {
						raised++
					} else {
						cleared++
					}
				}
			}
			if raised > c.mostRaises || cleared > 1 || (raised == 0) != (c.mostRaises == 0) {
				t.Errorf("%s, seed %d: raised %d times, cleared %d", c.name, seed, raised, cleared)
			}
		}
	}
}

// Whatever the estimates, the document can be written, and says nothing that is
// not finite.
func TestConcludeAlwaysMarshals(t *testing.T) {
	odd := rapid.OneOf(rapid.Float64(), rapid.SampledFrom([]float64{math.NaN(), math.Inf(1), math.Inf(-1), 0, -1, 1e300}))
	quantity := rapid.Custom(func(r *rapid.T) *run.Quantity {
		if rapid.Bool().Draw(r, "absent") {
			return nil
		}
		return q(odd.Draw(r, "v"), odd.Draw(r, "u"))
	})
	number := rapid.Custom(func(r *rapid.T) *float64 {
		if rapid.Bool().Draw(r, "absent") {
			return nil
		}
		return n(odd.Draw(r, "n"))
	})
	decays := rapid.Custom(func(r *rapid.T) *run.Decay {
		if rapid.Bool().Draw(r, "absent") {
			return nil
		}
		return &run.Decay{Law: "exponential", PlateauNPerM: odd.Draw(r, "plateau"), DropNPerM: odd.Draw(r, "drop"), TimeS: odd.Draw(r, "time"), Exponent: odd.Draw(r, "exponent"), EvidenceRatio: number.Draw(r, "evidence")}
	})
	rapid.Check(t, func(r *rapid.T) {
		e := run.Estimates{
			Header:     run.Header{Kind: rapid.SampledFrom([]run.Kind{run.KindCell, run.KindBlank, ""}).Draw(r, "kind"), Samples: rapid.Int64Range(0, 9).Draw(r, "declared")},
			Completion: rapid.SampledFrom([]run.Completion{run.Growing, run.ByCount}).Draw(r, "how"),
			Samples:    rapid.Int64Range(0, 9).Draw(r, "samples"), FromS: odd.Draw(r, "from"), ToS: odd.Draw(r, "to"),
		}
		e.Sampling = run.Sampling{Gaps: rapid.IntRange(0, 3).Draw(r, "gaps"), MissingS: odd.Draw(r, "missing"), Backward: rapid.IntRange(0, 9).Draw(r, "back"), FirstBackS: odd.Draw(r, "at")}
		if x := quantity.Draw(r, "slope"); x != nil {
			e.Baseline = &run.Baseline{SlopeN: *x, OffsetN: *x, RefS: odd.Draw(r, "ref")}
		}
		if x := quantity.Draw(r, "radius"); x != nil {
			e.Volumes = []run.Volume{{Source: run.VolumeImaged, RadiusM: *x}, {Source: run.VolumeContact, RadiusM: run.Quantity{Value: odd.Draw(r, "r"), U: odd.Draw(r, "ru")}}}
			e.Adhesion = &run.Adhesion{AtS: odd.Draw(r, "a"), PullN: *x, MaxLoadN: odd.Draw(r, "load")}
			e.Imaged = &run.ImagedVolume{Change: *x}
			e.Clips = []run.Clip{{Channel: "force", Fraction: odd.Draw(r, "f"), Value: odd.Draw(r, "c")}}
			e.Losses = []run.Interval{{FromS: odd.Draw(r, "l1"), ToS: odd.Draw(r, "l2")}}
		}
		for i := range rapid.IntRange(0, 3).Draw(r, "segments") {
			e.Segments = append(e.Segments, run.Segment{
				Index: i, Mode: rapid.SampledFrom([]run.Mode{run.Hold, run.Oscillation}).Draw(r, "mode"), FromS: odd.Draw(r, "s"), ToS: odd.Draw(r, "e"), Cycles: odd.Draw(r, "cycles"),
				HeightM: quantity.Draw(r, "h"), HeightRatio: quantity.Draw(r, "eta"), HeightSlopeMPerS: quantity.Draw(r, "hs"), TensionNPerM: quantity.Draw(r, "g"), TensionSlope: quantity.Draw(r, "gs"),
				AreaStrainAmplitude: quantity.Draw(r, "eps"), StorageNPerM: quantity.Draw(r, "k1"), LossNPerM: quantity.Draw(r, "k2"), PhaseDeg: quantity.Draw(r, "ph"),
				Relaxation: decays.Draw(r, "decay"), SNRdB: number.Draw(r, "snr"), Distortion: number.Draw(r, "thd"), StorageScatter: number.Draw(r, "u1"), LossScatter: number.Draw(r, "u2"),
			})
		}
		doc := Conclude(e, "id", "file", Defaults(), run.Software{})
		if _, err := json.Marshal(doc); err != nil {
			r.Fatal(err)
		}
		if again := Conclude(e, "id", "file", Defaults(), run.Software{}); len(again.Findings) != len(doc.Findings) || again.Verdict != doc.Verdict {
			r.Fatal("the same estimates are judged differently")
		}
	})
}

func TestConclude(t *testing.T) {
	e := sound()
	d := Conclude(e, "abc", "a/b.tsv", Defaults(), run.Software{Version: "v"})
	if !d.Run.Complete || d.Verdict != run.Accept || d.Run.ID != "abc" || d.Findings == nil || d.Segments == nil {
		t.Errorf("%+v", d)
	}
	// V = 4/3 pi r^3, u(V) = 4 pi r^2 u(r).
	if v := d.Cell.VolumeM3; math.Abs(v.Value/3.5914e-15-1) > 1e-4 || math.Abs(v.U/(4*math.Pi*9.5e-6*9.5e-6*3e-8)-1) > 1e-12 {
		t.Errorf("volume %+v", v)
	}
	for name, spoil := range map[string]func(*run.Estimates){
		"growing":    func(e *run.Estimates) { e.Completion = run.Growing },
		"short":      func(e *run.Estimates) { e.Samples = 39999 },
		"empty tail": func(e *run.Estimates) { e.NULTail = 1 },
		"trouble":    func(e *run.Estimates) { e.Trouble = &run.Trouble{Want: "a", Got: "b", Fix: "c"} },
	} {
		e := sound()
		spoil(&e)
		if Conclude(e, "", "", Defaults(), run.Software{}).Run.Complete {
			t.Errorf("%s: called complete", name)
		}
	}
}

// A thermal run must give a spring constant from a spectrum that is one.
func TestThermalFit(t *testing.T) {
	for _, c := range []struct {
		name string
		ref  *run.Reference
		sev  run.Severity
	}{
		{"good", &run.Reference{SpringConstantNPerM: q(0.2, 0.01), Misfit: n(1.1)}, ""},
		{"at the limit", &run.Reference{SpringConstantNPerM: q(0.2, 0.01), Misfit: n(2)}, ""},
		{"badly fitted", &run.Reference{SpringConstantNPerM: q(0.2, 0.01), Misfit: n(3)}, run.ToReview},
		{"without a peak", &run.Reference{Why: "it drowns"}, run.ToRepeat},
		{"without a deflection", nil, run.ToRepeat},
	} {
		e := run.Estimates{Header: run.Header{Kind: run.KindThermal}, Completion: run.ByCount, Samples: 9, Reference: c.ref}
		fs := Judge(e, Defaults())
		if (c.sev == "") != (len(fs) == 0) || (c.sev != "" && (fs[0].Rule != "thermal-fit" || fs[0].Severity != c.sev)) {
			t.Errorf("%s: %+v", c.name, fs)
		}
		e.Completion = run.Growing
		if fs := Judge(e, Defaults()); len(fs) != 0 {
			t.Errorf("%s, growing: %+v", c.name, fs)
		}
	}
}
