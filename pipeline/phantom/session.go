package phantom

import (
	"fmt"
	"math"
	"math/rand/v2"
	"time"

	"platen/pipeline/run"
	"platen/pipeline/squeeze"
)

// sessionRateHz keeps the files of a rehearsal at about a megabyte.
const sessionRateHz = 500

// Session returns the runs of a rehearsal in the order in which the rig makes
// them: an afternoon with one dish in which nearly everything goes wrong once.
//
//	01, 02   good cells
//	03       the baseline drifts
//	04       a soft cell, a small amplitude and a shaking table: weak signal
//	05       a cell that shrinks
//	06       the cell slips out during the oscillation
//	07       the force sensor reaches its range
//	08       samples are missing
//	09       the cell sticks to the plate
//	10       a blank, no cell
//	11       the export breaks off
//	12       a file that is no run
//
// Systematic errors of the rig are common to the session and lie within 1.5
// standard deviations, so that the good cells are clean by any fair rule.
// Spec.Expect names the rules that should trip.
func Session(seed uint64) []Spec {
	// From here on every draw comes in a fixed order.
	rng := rand.New(rand.NewPCG(seed, streamSession))
	rig := drawnRig(rng.Uint64(), 1.5)
	rig.RateHz = sessionRateHz
	started := time.Date(2026, 6, 2, 13, 40, 0, 0, time.FixedZone("", 2*3600))

	var specs []Spec
	for i := range 12 {
		s := Spec{Seed: rng.Uint64(), Rig: rig}
		s.Name = fmt.Sprintf("willow-%02d", i+1)
		s.Cell = OrdinaryCell(s.Seed)
		s.StartM, s.Protocol = Standard(s.Cell.RadiusM)
		s.Header = run.Header{
			Kind:      run.KindCell,
			Cell:      s.Name,
			Session:   "willow-dish-1",
			Condition: "untreated",
			Operator:  "rehearsal",
			Medium:    "L-15",
			Started:   started.Add(time.Duration(i) * 4 * time.Minute),
		}
		// What is declared of the diameter is measured anew on each cell.
		s.Rig.DiameterErrorM = s.Rig.DiameterUM * math.Max(-1.5, math.Min(1.5, rng.NormFloat64()))
		specs = append(specs, s)
	}
	blame := func(i int, rule string) *Spec {
		specs[i].Expect = []string{rule}
		return &specs[i]
	}

	specs[1].Dialect.Ending = EndMark

	s := blame(2, "force-drift") // a warming sensor: 6 nN over the run
	s.Rig.ForceDriftNPerS = 150e-12

	s = blame(3, "low-snr") // signal and noise about equal
	s.Header.Condition = "blebbistatin 20 uM"
	s.Cell.TensionNPerM, s.Cell.ElasticNPerM = 0.15e-3, 1.5e-3
	s.Cell.Arms = []Arm{{1.5e-3, 0.08}, {1e-3, 0.3}}
	s.Rig.ForceNoiseN = 300e-12
	s.StartM, s.Protocol = Course(s.Cell.RadiusM, 0.6, 1, 0.006, 12)

	s = blame(4, "volume-change") // a sixth of the volume
	s.Header.Condition = "sucrose 150 mM"
	s.Cell.ShrinkPerS = 0.004

	s = blame(5, "contact-loss")
	s.Fault.LostAtS = fraction(*s, 0.45)
	s.Dialect.Ending = EndMark

	s = blame(6, "clipping") // the mean force fits into the range, its peaks do not
	curve := squeeze.NewCurve()
	settled := s.Cell.TensionNPerM + s.Cell.ElasticNPerM*curve.LnArea(0.6)
	s.Fault.ClipAtN = 1.08 * settled * s.Cell.RadiusM * curve.Force(0.6)

	s = blame(7, "sample-gap")
	s.Fault.GapFromS, s.Fault.GapS = fraction(*s, 0.6), 1.7

	s = blame(8, "adhesion") // a third of the load
	s.Header.Condition = "no passivation"
	s.Cell.PullN, s.Cell.NeckNPerM = 8e-9, 6e-3
	s.Dialect.Ending = Silent

	s = &specs[9]
	s.Header.Kind, s.Header.Cell, s.Header.Condition = run.KindBlank, "", ""
	s.Cell = Cell{}

	s = blame(10, "truncated")
	s.Fault.StopAtS = fraction(*s, 0.5)

	s = blame(11, "unreadable")
	s.Fault.ByteCount = 20000
	return specs
}

// fraction returns the time at a fraction of the oscillation of s.
func fraction(s Spec, x float64) float64 {
	for _, l := range plan(s.StartM, s.Protocol) {
		if l.mode == run.Oscillation {
			return l.from + x*(l.to-l.from)
		}
	}
	return 0
}
