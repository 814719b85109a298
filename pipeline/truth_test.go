package pipeline_test

import (
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"runtime"
	"slices"
	"sync"
	"testing"

	"platen/pipeline"
	"platen/pipeline/phantom"
	"platen/pipeline/run"
	"platen/qc"
)

// analysed exports a simulated run as text and analyses it in one piece.
func analysed(t testing.TB, s phantom.Spec, set pipeline.Settings) (run.Estimates, phantom.Truth) {
	t.Helper()
	rec, err := phantom.Simulate(s)
	if err != nil {
		t.Fatal(err)
	}
	r := pipeline.Open(s.Name, set)
	r.Feed(text(t, s))
	how := r.Completion()
	if how == run.Growing {
		how = run.BySettling
	}
	e, _ := r.Finish(how)
	return e, rec.Truth()
}

// match returns the found segment that overlaps a true one most.
func match(e run.Estimates, want phantom.Segment) *run.Segment {
	var best *run.Segment
	most := 0.0
	for i := range e.Segments {
		s := &e.Segments[i]
		if o := math.Min(s.ToS, want.ToS) - math.Max(s.FromS, want.FromS); o > most && s.Mode == want.Mode {
			best, most = s, o
		}
	}
	return best
}

func oscillations(tr phantom.Truth) []phantom.Segment {
	var out []phantom.Segment
	for _, s := range tr.Segments {
		if s.Mode == run.Oscillation {
			out = append(out, s)
		}
	}
	return out
}

// exact takes the systematic errors off a rig, so that what remains is noise.
func exact(r phantom.Rig) phantom.Rig {
	r.SpringErrorRel, r.HeightOffsetM, r.RadiusErrorRel, r.DiameterErrorM = 0, 0, 0, 0
	return r
}

// The accuracy that the project promises at ordinary noise: tension within
// 1 %, moduli within 3 % or 2u, phase within 1 degree, volume within 1 % with
// imaging.
func TestAccuracyAtOrdinaryNoise(t *testing.T) {
	cases := []struct {
		height, freq, amplitude, cycles, rate float64
	}{
		{0.5, 1, 0.015, 12, 1000},
		{0.6, 1, 0.0224, 12, 1000},
		{0.7, 1, 0.03, 12, 1000},
		{0.6, 0.2, 0.0224, 6, 200},
		{0.6, 5, 0.0224, 40, 2000},
		{0.6, 1, 0.0224, 12, 50},
	}
	for i, c := range cases {
		t.Run(fmt.Sprintf("height %g, %g Hz, %g samples a second", c.height, c.freq, c.rate), func(t *testing.T) {
			for seed := range uint64(4) {
				s := phantom.Ordinary(100*uint64(i) + seed)
				s.Rig = exact(s.Rig)
				s.Rig.RateHz = c.rate
				s.Rig.FlickerToHz = math.Min(s.Rig.FlickerToHz, c.rate/2)
				s.StartM, s.Protocol = phantom.Course(s.Cell.RadiusM, c.height, c.freq, c.amplitude, c.cycles)
				e, tr := analysed(t, s, pipeline.Defaults())
				want := oscillations(tr)[0]
				got := match(e, want)
				if got == nil || got.StorageNPerM == nil || got.LossNPerM == nil || got.PhaseDeg == nil {
					t.Fatalf("seed %d: no modulus in %+v", seed, e.Segments)
				}
				near := func(name string, q *run.Quantity, truth, rel float64) {
					if d := math.Abs(q.Value/truth - 1); d > rel {
						t.Errorf("seed %d: %s %.5g, truth %.5g: off by %.2g %%", seed, name, q.Value, truth, 100*d)
					}
				}
				near("tension", got.TensionNPerM, want.TensionNPerM, 0.01)
				near("storage", got.StorageNPerM, want.StorageNPerM, 0.03)
				near("loss", got.LossNPerM, want.LossNPerM, 0.03)
				near("frequency", got.FrequencyHz, want.FrequencyHz, 1e-3)
				near("strain amplitude", got.AreaStrainAmplitude, want.AreaStrainAmplitude, 0.01)
				if d := math.Abs(got.PhaseDeg.Value - want.PhaseDeg); d > 1 {
					t.Errorf("seed %d: phase off by %.2g degrees", seed, d)
				}
				near("radius", &e.Volumes[0].RadiusM, tr.RadiusM, 0.01/3)
			}
		})
	}
}

// +-2u must hold the truth in 93 to 97.5 % of 300 runs, for each quantity at
// each level of noise. With a true 95.45 % the count has a standard deviation
// of 3.6 runs (binomial), so these marks lie 2.0 below and 1.7 above the 286.4
// expected: the seeds are fixed, and other seeds may count a little outside.
// Systematic errors are drawn, run by run, from the uncertainties declared.
func TestCoverage(t *testing.T) {
	if testing.Short() {
		t.Skip("300 runs at three noise levels")
	}
	levels := []struct {
		name   string
		scale  float64
		pink   bool
		amount int
	}{
		{"a third of ordinary noise, white", 1. / 3, false, 300},
		{"ordinary noise, white and 1/f", 1, true, 300},
		{"three times ordinary noise, white and 1/f", 3, true, 300},
	}
	names := []string{"tension", "storage", "loss", "phase", "radius"}
	for li, level := range levels {
		t.Run(level.name, func(t *testing.T) {
			z := make([][]float64, len(names))
			var mu sync.Mutex
			seeds := make(chan uint64)
			var wg sync.WaitGroup
			for range runtime.GOMAXPROCS(0) {
				wg.Go(func() {
					for seed := range seeds {
						s := phantom.Ordinary(uint64(li)*10000 + seed)
						s.Rig.RateHz = 200
						s.Rig.ForceNoiseN *= level.scale
						s.Rig.HeightNoiseM *= level.scale
						s.Rig.RadiusNoiseM *= level.scale
						s.Rig.FlickerNPerRootHz *= level.scale
						if !level.pink {
							s.Rig.FlickerNPerRootHz = 0
						}
						s.StartM, s.Protocol = phantom.Course(s.Cell.RadiusM, 0.6, 1, 0.0224, 8)
						e, tr := analysed(t, s, pipeline.Defaults())
						want := oscillations(tr)[0]
						got := match(e, want)
						if got == nil || got.StorageNPerM == nil {
							t.Errorf("seed %d: no modulus", seed)
							continue
						}
						score := func(q *run.Quantity, truth float64) float64 { return (q.Value - truth) / q.U }
						zs := []float64{
							score(got.TensionNPerM, want.TensionNPerM),
							score(got.StorageNPerM, want.StorageNPerM),
							score(got.LossNPerM, want.LossNPerM),
							score(got.PhaseDeg, want.PhaseDeg),
							score(&e.Volumes[0].RadiusM, tr.RadiusM),
						}
						mu.Lock()
						for i := range zs {
							z[i] = append(z[i], zs[i])
						}
						mu.Unlock()
					}
				})
			}
			for seed := range uint64(level.amount) {
				seeds <- seed
			}
			close(seeds)
			wg.Wait()
			for i, name := range names {
				in, mean, sd := 0.0, 0.0, 0.0
				for _, x := range z[i] {
					if math.Abs(x) <= 2 {
						in++
					}
					mean += x / float64(len(z[i]))
					sd += x * x / float64(len(z[i]))
				}
				share := in / float64(len(z[i]))
				t.Logf("%-8s %.1f %% within 2u; mean score %+.2f, rms %.2f", name, 100*share, mean, math.Sqrt(sd))
				if share < 0.93 || share > 0.975 {
					t.Errorf("%s: %.1f %% of %d runs within 2u, want 93 to 97.5 %%", name, 100*share, len(z[i]))
				}
			}
		})
	}
}

// Every staged fault of the rehearsal is found, and no clean run is held back.
func TestSessionsAreJudgedAsStaged(t *testing.T) {
	for seed := range uint64(8) {
		for _, s := range phantom.Session(seed) {
			e, _ := analysed(t, s, pipeline.Defaults())
			fs := qc.Judge(e, qc.Defaults())
			for _, want := range s.Expect {
				if !slices.ContainsFunc(fs, func(f run.Finding) bool { return f.Rule == want && f.Severity != run.Info }) {
					t.Errorf("seed %d, %s: %s not found in %v", seed, s.Name, want, fs)
				}
			}
			if v := qc.Verdict(fs); (v == run.Accept) != (len(s.Expect) == 0) {
				t.Errorf("seed %d, %s (staged: %v): %s %v", seed, s.Name, s.Expect, v, fs)
			}
		}
	}
}

// How the bytes were cut into writes, and whether anybody looked in between,
// changes not one bit of the result.
func TestChunksDoNotMatter(t *testing.T) {
	specs := phantom.Session(3)
	for _, s := range []phantom.Spec{specs[0], specs[5], specs[7], specs[10], specs[11]} {
		s.Rig.RateHz, s.Rig.FlickerToHz = 100, 50
		whole := text(t, s)
		document := func(cut func() int, look bool) string {
			r := pipeline.Open(s.Name, pipeline.Defaults())
			for p := whole; len(p) > 0; {
				n := min(len(p), cut())
				r.Feed(p[:n])
				p = p[n:]
				if look {
					r.Estimates()
				}
			}
			e, id := r.Finish(run.BySettling)
			text, err := json.Marshal(qc.Conclude(e, id, s.Name, qc.Defaults(), run.Software{}))
			if err != nil {
				t.Fatal(err)
			}
			return string(text)
		}
		want := document(func() int { return len(whole) }, false)
		rng := rand.New(rand.NewPCG(5, 5))
		for name, got := range map[string]string{
			"single bytes":              document(func() int { return 1 }, false),
			"random pieces, looked at":  document(func() int { return 1 + rng.IntN(40000) }, true),
			"small pieces, not a block": document(func() int { return 777 }, false),
		} {
			if got != want {
				t.Errorf("%s: %s gives another document\n%s\n%s", s.Name, name, want, got)
			}
		}
	}
}
