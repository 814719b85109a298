package qc

import (
	"fmt"
	"math"

	"platen/pipeline/run"
)

// judgeForceDrift: |slope of the baseline|, N/s, with the uncertainty of the
// straight line through the force before contact and after release. Review or
// repeat; for every kind of run, since the sensor drifts with or without a
// cell.
func judgeForceDrift(c *court) {
	b := c.e.Baseline
	if b == nil {
		return
	}
	s, limit := graded(b.SlopeN.Value, b.SlopeN.U, c.l.ForceDriftReview*1e-12, c.l.ForceDriftRepeat*1e-12)
	if s == "" {
		return
	}
	when := "before contact"
	if b.AfterS > 0 {
		when = "between before contact and after release"
	}
	c.find(s, c.whole(), value{b.SlopeN.Value, b.SlopeN.U, limit, "N/s"},
		fmt.Sprintf("The zero of the force drifts by %.3g pN/s %s (limit %.3g pN/s).", b.SlopeN.Value*1e12, when, limit*1e12),
		"Lift the plate, let the force sensor settle until its zero stands still, then repeat this cell.")
}

// standing yields the segments in which the plate is down on the cell and
// stands or oscillates.
func (c *court) standing(use func(*run.Segment)) {
	for i := range c.e.Segments {
		s := &c.e.Segments[i]
		if (s.Mode == run.Hold || s.Mode == run.Oscillation) && s.HeightRatio != nil && s.HeightRatio.Value < 1 {
			use(s)
		}
	}
}

// judgeHeightDrift: |slope of the height|, m/s, the oscillation taken out, in
// segments that should keep theirs: those on the cell of at least 2 s. Review
// or repeat; cells only.
func judgeHeightDrift(c *court) {
	if !c.cell() {
		return
	}
	c.standing(func(s *run.Segment) {
		q := s.HeightSlopeMPerS
		if q == nil || s.ToS-s.FromS < 2 { // the plate settles after a move
			return
		}
		sev, limit := graded(q.Value, q.U, c.l.HeightDriftReview*1e-9, c.l.HeightDriftRepeat*1e-9)
		if sev == "" {
			return
		}
		c.find(sev, within(s), value{q.Value, q.U, limit, "m/s"},
			fmt.Sprintf("The plate drifts by %.3g nm/s from %.0f s to %.0f s (limit %.3g nm/s).", q.Value*1e9, s.FromS, s.ToS, limit*1e9),
			"Check the plate's height feedback and the temperature of the stage, then repeat this cell.")
	})
}

// judgeTensionDrift: |slope of the tension| over the tension, per s (said per
// minute), in segments on the cell of at least 2 s; errors of the scale cancel.
// Review or repeat while oscillating. A tension that relaxes during a hold is
// what cells do; it is noted, not held against the run. Cells only.
func judgeTensionDrift(c *court) {
	if !c.cell() {
		return
	}
	c.standing(func(s *run.Segment) {
		slope, mean := s.TensionSlope, s.TensionNPerM
		if slope == nil || mean == nil || !(mean.Value > 0) || s.ToS-s.FromS < 2 {
			return
		}
		perMin := 60 * slope.Value / mean.Value
		u := 60 * slope.U / mean.Value
		sev, limit := graded(perMin, u, c.l.TensionDriftReview/100, c.l.TensionDriftRepeat/100)
		if sev == "" {
			return
		}
		advice := "Wait until the tension is steady before oscillating; if it keeps falling, the cell is failing: take another."
		if s.Mode == run.Hold {
			if sev != run.ToRepeat {
				return
			}
			sev, advice = run.Info, "Hold longer before the next movement, until the tension is steady."
		}
		verb := "rises"
		if perMin < 0 {
			verb = "falls"
		}
		c.find(sev, within(s), value{perMin / 60, u / 60, limit / 60, "1/s"},
			fmt.Sprintf("The tension %s by %s a minute from %.0f s to %.0f s (limit %s a minute).", verb, percent(math.Abs(perMin)), s.FromS, s.ToS, percent(limit)),
			advice)
	})
}

// oscillations yields the segments with an oscillation.
func (c *court) oscillations(use func(*run.Segment)) {
	if !c.cell() {
		return
	}
	for i := range c.e.Segments {
		if s := &c.e.Segments[i]; s.Mode == run.Oscillation {
			use(s)
		}
	}
}

// modulus returns |K*| and the part of its uncertainty that scatters from
// cycle to cycle.
func modulus(s *run.Segment) (k, u float64, ok bool) {
	if s.StorageNPerM == nil || s.LossNPerM == nil || s.StorageScatter == nil || s.LossScatter == nil {
		return 0, 0, false
	}
	// Of the scatter of a complex number, the part along it counts; the larger
	// of the two components is never too small.
	return math.Hypot(s.StorageNPerM.Value, s.LossNPerM.Value), math.Max(*s.StorageScatter, *s.LossScatter), true
}

// decibel is the factor from a relative change of an amplitude to dB.
const decibel = 20 / math.Ln10

// freedom is the least number of degrees of freedom on which the scatter of a
// modulus rests: one less than the batches that package harmonic makes of this
// many cycles (one cycle each below 16, then two or more), after it has left
// out the first cycle.
func freedom(cycles float64) float64 {
	whole := math.Floor(cycles) - 2
	if whole < 16 {
		return math.Max(2, whole-1)
	}
	return math.Min(whole/2-1, 15)
}

// uOfScatterDB is the standard uncertainty of a ratio in dB whose denominator is
// a sample standard deviation: relative 1/sqrt(2 nu) (JCGM 100, E.4.3).
func uOfScatterDB(cycles float64) float64 { return decibel / math.Sqrt(2*freedom(cycles)) }

// uOfSampleSNR is the standard uncertainty in dB of snr_db over n samples: that
// of the rms residual, relative 1/sqrt(2n), and that of the fitted amplitude,
// relative (sigma/A) sqrt(2/n) = 10^(-snr/20)/sqrt(n).
func (c *court) uOfSampleSNR(s *run.Segment) float64 {
	n := math.Max(c.e.RateHz*(s.ToS-s.FromS), s.Cycles)
	return decibel * math.Sqrt((0.5+math.Pow(10, -*s.SNRdB/10))/n)
}

// judgeLowSNR: 20 log10(|K*|/u), dB, u the part of the uncertainty of |K*| that
// scatters from cycle to cycle. The ratio of single samples (snr_db, of the form
// of SINAD in IEEE 1057) says little about a modulus that is averaged over
// thousands of them, so it is the modulus that is judged first; but where single
// samples drown, nobody can see whether hum or a jolt hides in the noise, so
// snr_db has a limit of its own. A scatter over few cycles is itself known
// badly: both ratios count with their own uncertainty. Review or repeat; cells
// only, since without a cell there is nothing that should answer.
func judgeLowSNR(c *court) {
	c.oscillations(func(s *run.Segment) {
		const advice = "Use a larger amplitude (within the strain limit) or more cycles, or a softer sensor, and repeat this cell."
		k, u, ok := modulus(s)
		if !ok {
			// Too weak an answer, once there has been time for one.
			// A lost cell answers nothing; that is said by contact-loss.
			if c.lostIn(s) || !c.silent(s) || s.HeightRatio == nil || s.HeightRatio.Value >= 1 {
				return
			}
			c.find(run.ToRepeat, within(s), value{*s.SNRdB, c.uOfSampleSNR(s), 0, "dB"},
				fmt.Sprintf("The force does not follow the oscillation from %.0f s to %.0f s: it is lost in the noise.", s.FromS, s.ToS), advice)
			return
		}
		if s.Cycles < c.l.FewestCycles || k <= 0 || u <= 0 {
			return
		}
		db, uDB := 20*math.Log10(k/u), uOfScatterDB(s.Cycles)
		sev, limit := run.Severity(""), c.l.LowSNRReview
		switch {
		case below(db, uDB, c.l.LowSNRRepeat):
			sev, limit = run.ToRepeat, c.l.LowSNRRepeat
		case below(db, uDB, c.l.LowSNRReview):
			sev = run.ToReview
		case s.SNRdB != nil && below(*s.SNRdB, c.uOfSampleSNR(s), c.l.LowSNRSample):
			c.find(run.ToReview, within(s), value{*s.SNRdB, c.uOfSampleSNR(s), c.l.LowSNRSample, "dB"},
				fmt.Sprintf("The signal is weak: from %.0f s to %.0f s the force of the oscillation hardly stands out of the noise (%.0f dB, limit %.0f dB).", s.FromS, s.ToS, *s.SNRdB, c.l.LowSNRSample),
				advice)
			return
		default:
			return
		}
		c.find(sev, within(s), value{db, uDB, limit, "dB"},
			fmt.Sprintf("The signal is weak: from %.0f s to %.0f s the modulus scatters by %s from cycle to cycle (%.0f dB, limit %.0f dB).", s.FromS, s.ToS, percent(u/k), db, limit),
			advice)
	})
}

// silent tells whether the force does not follow an oscillation of enough
// cycles: less of it at the drive frequency than of anything else.
func (c *court) silent(s *run.Segment) bool {
	return s.SNRdB != nil && s.Cycles >= c.l.FewestCycles && below(*s.SNRdB, c.uOfSampleSNR(s), 0)
}

// judgeDistortion: rms of harmonics 2 and 3 of the tension over the
// fundamental. Noise in the harmonics is as large as in the fundamental, whose
// scatter is known. Where it is not (too few cycles, or the plate all but off
// the cell), the whole residual bounds what noise can put there; where that is
// not known either, nothing is said. Review or repeat; cells only.
func judgeDistortion(c *court) {
	c.oscillations(func(s *run.Segment) {
		if s.Distortion == nil || s.Cycles < 2 {
			return
		}
		var u float64
		if k, uk, ok := modulus(s); ok && k > 0 {
			u = math.Sqrt2 * uk / k
		} else if s.SNRdB != nil {
			u = math.Pow(10, -*s.SNRdB/20)
		} else {
			return
		}
		sev, limit := graded(*s.Distortion, u, c.l.DistortReview/100, c.l.DistortRepeat/100)
		if sev == "" {
			return
		}
		c.find(sev, within(s), value{*s.Distortion, u, limit, "1"},
			fmt.Sprintf("The tension does not follow the strain in proportion from %.0f s to %.0f s: %s of harmonics (limit %s).", s.FromS, s.ToS, percent(*s.Distortion), percent(limit)),
			"Use a smaller amplitude, and see whether the plate leaves the cell within a cycle.")
	})
}

// judgePhaseRange: phase of the modulus, degrees, outside 0 to 90. Review; cells
// only: that of a blank run is the drag's, about 90 on either side.
func judgePhaseRange(c *court) {
	c.oscillations(func(s *run.Segment) {
		q := s.PhaseDeg
		if q == nil {
			return
		}
		limit := 90.0
		switch {
		case below(q.Value, q.U, 0):
			limit = 0
		case q.Value-2*q.U > 90:
		default:
			return
		}
		c.find(run.ToReview, within(s), value{q.Value, q.U, limit, "deg"},
			fmt.Sprintf("The phase is %.3g ± %.2g degrees from %.0f s to %.0f s; a passive cell lies between 0 and 90.", q.Value, q.U, s.FromS, s.ToS),
			"Check the sign of force and height, the drag of the medium (blank run) and the lag between the two channels.")
	})
}

// judgeFewCycles: cycles of an oscillation that is over. Review; cells only.
func judgeFewCycles(c *court) {
	c.oscillations(func(s *run.Segment) {
		if s.Index >= c.e.Ended && !c.over {
			return
		}
		if s.Cycles == 0 || s.Cycles >= c.l.FewestCycles-0.1 { // borders are found to a tenth of a cycle
			return
		}
		c.find(run.ToReview, within(s), value{s.Cycles, 0, c.l.FewestCycles, "cycles"},
			fmt.Sprintf("Only %.1f cycles from %.0f s to %.0f s (at least %.0f are needed).", s.Cycles, s.FromS, s.ToS, c.l.FewestCycles),
			"Record more cycles: their scatter is what tells how well the modulus is known.")
	})
}
