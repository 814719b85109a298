package qc

import (
	"fmt"
	"strings"
	"unicode"
	"unicode/utf8"

	"platen/pipeline/run"
)

// judgeClipping: share of samples that stand still at the extreme of a channel;
// a count, without noise. Review or repeat for force and deflection; review for
// the height, whose cut peaks spoil an amplitude but not the load. A channel
// that never changes is no measurement: repeat. For every kind of run.
func judgeClipping(c *court) {
	for _, k := range c.e.Clips {
		at := scope{nil, k.FromS, k.ToS}
		if k.Dead {
			c.find(run.ToRepeat, at, value{k.Fraction, 0, c.l.ClippedRepeat / 100, "1"},
				fmt.Sprintf("The %s never changes: all %d samples are the same.", k.Channel, k.Samples),
				"Check that the sensor is connected and the right channel is exported.")
			continue
		}
		sev, limit := graded(k.Fraction, 0, c.l.ClippedReview/100, c.l.ClippedRepeat/100)
		if sev == "" {
			continue
		}
		extreme, advice := fmt.Sprintf("%.4g nN", 1e9*k.Value), "Lower the sensor's gain, its offset or the load, and repeat this cell."
		switch k.Channel {
		case "deflection":
			extreme = fmt.Sprintf("%.4g µm", 1e6*k.Value)
		case "height":
			sev, limit = run.ToReview, c.l.ClippedReview/100
			extreme, advice = fmt.Sprintf("%.4g µm", 1e6*k.Value), "Move the oscillation away from the end of the plate's travel."
		}
		c.find(sev, at, value{k.Fraction, 0, limit, "1"},
			fmt.Sprintf("The %s is clipped at %s: %d samples from %.0f s to %.0f s stand still there.", k.Channel, extreme, k.Samples, k.FromS, k.ToS),
			advice)
	}
}

// times says how often.
func times(n int) string {
	if n == 1 {
		return "once"
	}
	return fmt.Sprintf("%d times", n)
}

// judgeSampleGap: time missing between samples, s. Info below the limit for
// review; for every kind of run.
func judgeSampleGap(c *court) {
	s := c.e.Sampling
	if s.Gaps == 0 {
		return
	}
	sev, limit := graded(s.MissingS, 0, c.l.GapReview*1e-3, c.l.GapRepeat*1e-3)
	if sev == "" {
		sev = run.Info
	}
	c.find(sev, scope{nil, s.Longest.FromS, s.Longest.ToS}, value{s.MissingS, 0, limit, "s"},
		fmt.Sprintf("Samples are missing %s, %.0f ms in all; the longest gap is at %.2f s.", times(s.Gaps), 1e3*s.MissingS, s.Longest.FromS),
		"Close other programs on the instrument's computer; write to a local disk.")
}

// judgeTimeOrder: number of time stamps that step back beyond their rounding.
// Any is for review, more than the limit to repeat; for every kind of run.
func judgeTimeOrder(c *court) {
	s := c.e.Sampling
	if s.Backward == 0 {
		return
	}
	sev := run.ToReview
	if float64(s.Backward) > c.l.StepsBackRepeat {
		sev = run.ToRepeat
	}
	c.find(sev, scope{nil, s.FirstBackS, c.e.ToS}, value{float64(s.Backward), 0, c.l.StepsBackRepeat, "steps"},
		fmt.Sprintf("Time goes backward %s, first at sample %d (%.4g s): rows are out of order or written twice.", times(s.Backward), s.FirstBackAt+1, s.FirstBackS),
		"Export the run again; if it stays so, look for a clock that is set while recording.")
}

// judgeThermal: whether a thermal run gives a spring constant, and how well the
// fitted spectrum describes the measured one: mean squared residual over what
// the averages allow. Repeat or review; thermal runs only, once they are over.
func judgeThermal(c *court) {
	r := c.e.Reference
	if c.e.Header.Kind != run.KindThermal || !c.over || c.e.Trouble != nil {
		return
	}
	switch {
	case r == nil || r.SpringConstantNPerM == nil:
		why := "there is no deflection in it"
		if r != nil && r.Why != "" {
			why = r.Why
		}
		c.find(run.ToRepeat, c.whole(), value{}, fmt.Sprintf("No spring constant from this thermal run: %s.", why),
			"Record at least ten seconds of the free sensor's deflection, far from any surface.")
	case r.Misfit != nil && *r.Misfit > c.l.ThermalMisfit:
		c.find(run.ToReview, c.whole(), value{*r.Misfit, 0, c.l.ThermalMisfit, "1"},
			fmt.Sprintf("The spectrum is not that of one free resonance: it scatters %.2g times as much about the fit as noise allows (limit %.2g).", *r.Misfit, c.l.ThermalMisfit),
			"Look for hum, a second resonance, or a surface nearby, and record again.")
	}
}

// judgeTruncated: share of the declared samples that are missing, or NUL bytes at
// the end, once the run is over. Review, or repeat where more than the limit is
// missing; for every kind of run.
func judgeTruncated(c *court) {
	if !c.over || c.e.Trouble != nil {
		return
	}
	declared := c.e.Header.Samples
	if declared > c.e.Samples {
		missing := 1 - float64(c.e.Samples)/float64(declared)
		sev, limit := graded(missing, 0, 0, c.l.TruncatedRepeat/100)
		c.find(sev, c.whole(), value{missing, 0, limit, "1"},
			fmt.Sprintf("The file ends early: %d of %d declared samples are there.", c.e.Samples, declared),
			"See whether the export was stopped or the disk is full; export again if the instrument still has the run.")
		return
	}
	if c.e.NULTail > 0 {
		c.find(run.ToReview, c.whole(), value{},
			fmt.Sprintf("The file ends in %d empty (NUL) bytes: it was allocated but not written to its end.", c.e.NULTail),
			"See whether the instrument's program or computer stopped while writing; export again.")
	}
}

// judgeUnreadable: bytes that are no run, or no longer one. Repeat where it was
// one; review where it may never have been meant to be.
func judgeUnreadable(c *court) {
	t := c.e.Trouble
	if t == nil {
		return
	}
	sev := run.ToReview
	if t.IsRun {
		sev = run.ToRepeat
	}
	where := ""
	switch {
	case t.Line > 0:
		where = fmt.Sprintf(" in line %d (byte %d)", t.Line, t.Byte)
	case t.Byte > 0:
		where = fmt.Sprintf(" at byte %d", t.Byte)
	}
	c.find(sev, c.whole(), value{},
		fmt.Sprintf("Cannot be read as a run%s: expected %s, got %s.", where, t.Want, t.Got), sentence(t.Fix))
}

// sentence makes a sentence of a phrase.
func sentence(s string) string {
	r, n := utf8.DecodeRuneInString(s)
	if n == 0 {
		return s
	}
	s = string(unicode.ToUpper(r)) + s[n:]
	if !strings.HasSuffix(s, ".") {
		s += "."
	}
	return s
}
