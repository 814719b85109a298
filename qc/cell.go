package qc

import (
	"fmt"
	"math"

	"platen/pipeline/run"
)

// judgeVolumeChange: relative change of the imaged volume, of a line through
// all images and of each segment against the first images; the one furthest out
// of its noise counts. Review or repeat; cells only.
func judgeVolumeChange(c *court) {
	if !c.cell() {
		return
	}
	var worst run.Quantity
	at := c.whole()
	consider := func(q *run.Quantity, s scope) {
		if q != nil && math.Abs(q.Value)-2*q.U > math.Abs(worst.Value)-2*worst.U {
			worst, at = *q, s
		}
	}
	if im := c.e.Imaged; im != nil {
		consider(&im.Change, scope{nil, im.FromS, im.ToS})
	}
	for i := range c.e.Segments {
		s := &c.e.Segments[i]
		w := within(s)
		w.segment = nil // it is one cell: one finding
		consider(s.VolumeChange, w)
	}
	sev, limit := graded(worst.Value, worst.U, c.l.VolumeChangeReview/100, c.l.VolumeChangeRepeat/100)
	if sev == "" {
		return
	}
	verb := "swells"
	if worst.Value < 0 {
		verb = "shrinks"
	}
	c.find(sev, at, value{worst.Value, worst.U, limit, "1"},
		fmt.Sprintf("The cell %s: its imaged volume has changed by %s by %.0f s (limit %s).", verb, percent(worst.Value), at.to, percent(limit)),
		"Check the medium (evaporation, osmolarity, temperature) and look for blebs; repeat on a fresh cell.")
}

// judgeVolumeDisagreement: relative difference of the volumes that two sources
// give, V2/V1 - 1 = (r2/r1)^3 - 1, beyond the limit by more than twice the joint
// uncertainty. Review; cells only.
func judgeVolumeDisagreement(c *court) {
	if !c.cell() {
		return
	}
	vs := c.e.Volumes
	for i := range vs {
		for j := i + 1; j < len(vs); j++ {
			a, b := vs[i].RadiusM, vs[j].RadiusM
			if !(a.Value > 0) || !(b.Value > 0) {
				continue
			}
			diff := math.Pow(b.Value/a.Value, 3) - 1
			u := 3 * (1 + diff) * math.Hypot(a.U/a.Value, b.U/b.Value)
			if !beyond(diff, u, c.l.VolumeDisagreement/100) {
				continue
			}
			c.find(run.ToReview, c.whole(), value{diff, u, c.l.VolumeDisagreement / 100, "1"},
				fmt.Sprintf("The %s volume and the %s volume differ by %s (diameters %.2f and %.2f µm).", vs[j].Source, vs[i].Source, percent(math.Abs(diff)), 2e6*b.Value, 2e6*a.Value),
				"Check the pixel size, the declared diameter, and the zero of the height on bare glass.")
		}
	}
}

// judgeStrainRange: amplitude of the area strain. Above: review or repeat; below
// the least: review. Cells only.
func judgeStrainRange(c *court) {
	c.oscillations(func(s *run.Segment) {
		q := s.AreaStrainAmplitude
		if q == nil {
			return
		}
		if sev, limit := graded(q.Value, q.U, c.l.StrainReview/100, c.l.StrainRepeat/100); sev != "" {
			c.find(sev, within(s), value{q.Value, q.U, limit, "1"},
				fmt.Sprintf("The area is strained by ±%s from %.0f s to %.0f s (limit %s): the cell may not answer in proportion, or tear.", percent(q.Value), s.FromS, s.ToS, percent(limit)),
				"Use a smaller amplitude.")
			return
		}
		if least := c.l.StrainLeast / 100; below(q.Value, q.U, least) {
			c.find(run.ToReview, within(s), value{q.Value, q.U, least, "1"},
				fmt.Sprintf("The area is strained by only ±%s from %.0f s to %.0f s (at least %s).", percent(q.Value), s.FromS, s.ToS, percent(least)),
				"Use a larger amplitude, or press the cell flatter: near the round shape the area hardly changes with height.")
		}
	})
}

// judgeContactLoss: time without force though the plate is down, s, summed over
// the run; the analysis has found each stretch beyond its own noise. Repeat;
// cells only.
func judgeContactLoss(c *court) {
	if !c.cell() {
		return
	}
	var lost float64
	for _, l := range c.e.Losses {
		lost += l.ToS - l.FromS
	}
	if !(lost > c.l.ContactLoss) {
		return
	}
	first, last := c.e.Losses[0], c.e.Losses[len(c.e.Losses)-1]
	c.find(run.ToRepeat, scope{nil, first.FromS, last.ToS}, value{lost, 0, c.l.ContactLoss, "s"},
		fmt.Sprintf("Contact was lost at %.0f s: the plate is down but the cell carries no force.", first.FromS),
		"See whether the cell has slipped out or burst; centre it (or take another) and repeat from the approach.")
}

// lostIn tells whether contact was lost during a segment.
func (c *court) lostIn(s *run.Segment) bool {
	for _, l := range c.e.Losses {
		if l.ToS > s.FromS && l.FromS < s.ToS {
			return true
		}
	}
	return false
}

// judgeAdhesion: pull on the plate as it leaves, over the largest load. It waits
// until the plate has left once: until then pull and zero of the force still
// move. Review or repeat; cells only.
func judgeAdhesion(c *court) {
	a := c.e.Adhesion
	if a == nil || !(c.over || c.ended(run.Retract)) || !c.cell() || !(a.MaxLoadN > 0) || !beyond(a.PullN.Value, a.PullN.U, c.l.AdhesionLeast*1e-12) {
		return
	}
	rel, u := a.PullN.Value/a.MaxLoadN, a.PullN.U/a.MaxLoadN
	sev, limit := graded(rel, u, c.l.AdhesionReview/100, c.l.AdhesionRepeat/100)
	if sev == "" {
		return
	}
	c.find(sev, scope{nil, a.AtS, a.AtS}, value{rel, u, limit, "1"},
		fmt.Sprintf("The cell sticks to the plate: it pulls with %.2g nN as the plate leaves at %.0f s, %s of the largest load (limit %s).", 1e9*a.PullN.Value, a.AtS, percent(rel), percent(limit)),
		"Clean the plate and coat it afresh against adhesion; repeat on a fresh cell.")
}

// judgeNoContact: a cell run that is over and in which the plate never touched
// a cell. It is said earlier only where the plate has come down and oscillates
// without an answer; a mere stop on the way down says nothing. Repeat, or info
// where only the zero of the force is not known; cells only.
func judgeNoContact(c *court) {
	if !c.cell() || c.e.Trouble != nil || c.e.Samples == 0 {
		return
	}
	pressed, unanswered := false, false
	for i := range c.e.Segments {
		s := &c.e.Segments[i]
		pressed = pressed || s.TensionNPerM != nil
		unanswered = unanswered || (s.Mode == run.Oscillation && c.silent(s))
	}
	if !c.over {
		if c.e.Contact == nil && !pressed && unanswered && c.ended(run.Approach) {
			c.find(run.ToRepeat, c.whole(), value{},
				"The plate oscillates but has not pressed on a cell: the force did not rise on the way down.",
				"Stop, find the cell under the plate, or go lower, and repeat.")
		}
		return
	}
	switch {
	case c.e.Contact == nil && !pressed && len(c.e.Volumes) == 0 && !c.approached():
		c.find(run.ToRepeat, c.whole(), value{},
			"No tension: the size of the cell is not known (no images, no declared diameter, and no approach on which the plate first touches it).",
			`Add a header line such as "# diameter [um]: 19.4 ± 0.3", export the imaged radius, or record the approach from above the cell.`)
	case c.e.Contact == nil && !pressed:
		c.find(run.ToRepeat, c.whole(), value{},
			"The plate never pressed on a cell: the force does not rise on any approach.",
			"Find the cell under the plate, or go lower, and repeat.")
	case c.e.Baseline == nil:
		c.find(run.Info, c.whole(), value{},
			"The plate is never free of the cell in this run: the zero of the force is taken as exported.",
			"Record a few seconds above the cell before the approach.")
	}
}

func (c *court) approached() bool {
	for _, s := range c.e.Segments {
		if s.Mode == run.Approach {
			return true
		}
	}
	return false
}

// ended tells whether a segment of this mode is over.
func (c *court) ended(m run.Mode) bool {
	for _, s := range c.e.Segments[:min(max(0, c.e.Ended), len(c.e.Segments))] {
		if s.Mode == m {
			return true
		}
	}
	return false
}
