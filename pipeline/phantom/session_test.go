package phantom

import (
	"math"
	"slices"
	"testing"
	"unicode/utf8"

	"gonum.org/v1/gonum/stat"

	"platen/pipeline/run"
)

// TestSession measures on the exported samples that each fault is there, well
// beyond what ordinary noise does, and that the clean runs have none.
func TestSession(t *testing.T) {
	for seed := range uint64(3) {
		specs := Session(seed)
		want := [][]string{nil, nil, {"force-drift"}, {"low-snr"}, {"volume-change"}, {"contact-loss"}, {"clipping"}, {"sample-gap"}, {"adhesion"}, nil, {"truncated"}, {"unreadable"}}
		if len(specs) != len(want) {
			t.Fatalf("%d runs, want %d", len(specs), len(want))
		}
		names := map[string]bool{}
		for i, s := range specs {
			names[s.Name] = true
			r := simulate(t, s)
			truth := r.Truth()
			if !slices.Equal(truth.Findings, want[i]) {
				t.Errorf("%s: should trip %q, want %q", s.Name, truth.Findings, want[i])
			}
			if s.Fault.ByteCount > 0 {
				garbage := written(t, s)
				if len(garbage) != s.Fault.ByteCount || utf8.ValidString(garbage) {
					t.Errorf("%s: %d bytes that could be text", s.Name, len(garbage))
				}
				continue
			}
			m := measure(t, r)
			has := func(rule string) bool { return slices.Contains(want[i], rule) }
			if blank := r.Header().Kind == run.KindBlank; blank {
				if i != 9 || math.Abs(m.afterN-m.beforeN) > 0.1e-9 || m.largestN > 1e-9 || truth.MaxForceN != 0 {
					t.Errorf("%s: not a blank: %+v", s.Name, m)
				}
				continue
			}
			check := func(what string, there, faulty bool) {
				if there != faulty {
					t.Errorf("seed %d, %s: %s is %v: %+v", seed, s.Name, what, there, m)
				}
			}
			// The limits stand far from both the clean and the faulty runs.
			check("drift over 1 nN", m.whole && math.Abs(m.afterN-m.beforeN) > 1e-9, has("force-drift"))
			check("signal below twice the noise", m.amplitudeN < 2*s.Rig.ForceNoiseN, has("low-snr"))
			check("volume changed by 10 %", truth.VolumeChange < -0.1, has("volume-change"))
			check("force gone in the oscillation", m.restingN < 0.1*truth.MaxForceN, has("contact-loss"))
			check("5 % of samples at one value", m.still > 0.05, has("clipping"))
			check("gap over 1 s", m.gapS > 1, has("sample-gap"))
			check("pull over a fifth of the load", m.pullN > truth.MaxForceN/5, has("adhesion"))
			check("rows fewer than declared", r.Samples() < r.Header().Samples, has("truncated"))
		}
		if len(names) != len(specs) {
			t.Error("two runs have one name")
		}
	}
}

// measured is read off the samples alone.
type measured struct {
	whole           bool    // the run has its last move
	beforeN, afterN float64 // mean force of the first and the last hold
	amplitudeN      float64 // of the force at the drive frequency
	restingN        float64 // least mean force of a cycle, above the baseline
	still           float64 // fraction of samples equal to the largest force
	gapS            float64
	pullN           float64 // below the baseline on the way up, mean of 20 samples
	largestN        float64
}

func measure(t *testing.T, r *Recording) measured {
	t.Helper()
	b := columns(t, r)
	last := len(r.Spec().Protocol) - 1
	force := make([][]float64, last+1)
	times := make([][]float64, last+1)
	m := measured{largestN: math.Inf(-1)}
	for i := range b.Time {
		k := b.Segment[i]
		force[k] = append(force[k], b.Force[i])
		times[k] = append(times[k], b.Time[i])
		m.largestN = math.Max(m.largestN, b.Force[i])
		if i > 0 {
			m.gapS = math.Max(m.gapS, b.Time[i]-b.Time[i-1])
		}
	}
	for _, f := range b.Force {
		if f == m.largestN {
			m.still += 1 / float64(b.Len())
		}
	}
	m.beforeN = stat.Mean(force[0], nil)
	if m.whole = len(force[last]) > 0; m.whole {
		m.afterN = stat.Mean(force[last], nil)
		up := force[last-1]
		for i := 0; i+20 <= len(up); i++ {
			m.pullN = math.Max(m.pullN, m.beforeN-stat.Mean(up[i:i+20], nil))
		}
		// A steady drift is no pull.
		m.pullN -= math.Max(0, m.beforeN-m.afterN)
	}
	const oscillation = 3
	var c, s float64
	f := force[oscillation]
	mean := stat.Mean(f, nil)
	for i := range f {
		c += 2 * (f[i] - mean) * math.Cos(2*math.Pi*times[oscillation][i]) / float64(len(f))
		s += 2 * (f[i] - mean) * math.Sin(2*math.Pi*times[oscillation][i]) / float64(len(f))
	}
	m.amplitudeN = math.Hypot(c, s)
	m.restingN = math.Inf(1)
	for i := 0; i+sessionRateHz <= len(f); i += sessionRateHz {
		m.restingN = math.Min(m.restingN, stat.Mean(f[i:i+sessionRateHz], nil)-m.beforeN)
	}
	return m
}

// TestSessionSize keeps a rehearsal modest: runs of 40 s or so, about a
// megabyte each.
func TestSessionSize(t *testing.T) {
	total := 0
	for _, s := range Session(1) {
		total += len(written(t, s))
		if d := s.Header.Started; d.IsZero() {
			t.Errorf("%s has no time of start", s.Name)
		}
		r := simulate(t, s)
		if n := len(r.legs); n > 0 {
			if end := r.legs[n-1].to; end < 38 || end > 60 {
				t.Errorf("%s takes %g s, want 40 to 60", s.Name, end)
			}
		}
	}
	if total > 15e6 {
		t.Errorf("the session writes %d bytes, want less than 15 MB", total)
	}
}
