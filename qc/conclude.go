package qc

import (
	"math"
	"time"

	"platen/pipeline/run"
)

// Conclude makes the result document of a finished run. id is the SHA-256 of
// its bytes, file its path below the watched folder.
func Conclude(e run.Estimates, id, file string, l Limits, sw run.Software) run.Result {
	findings := Judge(e, l)
	if findings == nil {
		findings = []run.Finding{}
	}
	h := e.Header
	kind := h.Kind
	if kind == "" {
		kind = run.KindCell
	}
	r := run.Result{
		Schema: run.Schema,
		Run: run.Identity{
			ID: id, File: file, Kind: kind,
			Cell: h.Cell, Session: h.Session, Condition: h.Condition,
			Operator: h.Operator, Medium: h.Medium, Note: h.Note,
			Samples: e.Samples, DurationS: finite(e.ToS - e.FromS),
			Complete: e.Completion != run.Growing && e.Trouble == nil && e.NULTail == 0 && e.Samples >= h.Samples,
		},
		Verdict:     Verdict(findings),
		Findings:    findings,
		Cell:        cellState(e),
		Reference:   e.Reference,
		Segments:    segments(e.Segments),
		Calibration: calibration(e),
		Software:    sw,
	}
	if !h.Started.IsZero() {
		r.Run.Started = h.Started.Format(time.RFC3339Nano)
	}
	return r
}

func cellState(e run.Estimates) *run.CellState {
	if len(e.Volumes) == 0 {
		return nil
	}
	v := e.Volumes[0]
	rs := v.RadiusM
	s := &run.CellState{
		VolumeM3:      run.Known(4*math.Pi/3*rs.Value*rs.Value*rs.Value, 4*math.Pi*rs.Value*rs.Value*rs.U),
		SphereRadiusM: run.Known(rs.Value, rs.U),
		VolumeSource:  v.Source,
	}
	if c := e.Contact; c != nil {
		s.ContactM = run.Known(c.HeightM.Value, c.HeightM.U)
	}
	return s
}

// decay copies a decay all of whose numbers are finite: half a law says nothing.
func decay(d *run.Decay) *run.Decay {
	if d == nil {
		return nil
	}
	for _, x := range []float64{d.PlateauNPerM, d.DropNPerM, d.TimeS, d.Exponent} {
		if run.Number(x) == nil {
			return nil
		}
	}
	out := *d
	if d.EvidenceRatio != nil {
		out.EvidenceRatio = run.Number(*d.EvidenceRatio)
	}
	return &out
}

// segments copies what is finite: one odd number must not spoil a document.
func segments(in []run.Segment) []run.Segment {
	out := make([]run.Segment, len(in))
	for i, s := range in {
		for _, q := range []**run.Quantity{
			&s.HeightM, &s.HeightRatio, &s.HeightSlopeMPerS, &s.ForceN, &s.TensionNPerM, &s.TensionSlope,
			&s.VolumeChange, &s.FrequencyHz, &s.HeightAmplitudeM, &s.ForceAmplitudeN, &s.AreaStrainAmplitude,
			&s.StorageNPerM, &s.LossNPerM, &s.PhaseDeg,
		} {
			if *q != nil {
				*q = run.Known((*q).Value, (*q).U)
			}
		}
		for _, n := range []**float64{&s.SNRdB, &s.Distortion, &s.TensionScatter, &s.StorageScatter, &s.LossScatter} {
			if *n != nil {
				*n = run.Number(**n)
			}
		}
		s.Relaxation = decay(s.Relaxation)
		s.FromS, s.ToS, s.Cycles = finite(s.FromS), finite(s.ToS), finite(s.Cycles)
		out[i] = s
	}
	return out
}

func calibration(e run.Estimates) run.Calibration {
	c := run.Calibration{Source: "none", Corrections: []string{}}
	if e.SpringConstant != nil {
		c.SpringConstantNPerM = run.Known(e.SpringConstant.Value, e.SpringConstant.U)
		c.Source = e.CalibrationSource
	}
	if e.Sensitivity != nil {
		c.SensitivityMPerV = run.Known(e.Sensitivity.Value, e.Sensitivity.U)
	}
	if b := e.Baseline; b != nil {
		c.BaselineN = run.Known(b.OffsetN.Value, b.OffsetN.U)
		c.BaselineSlopeNPerS = run.Known(b.SlopeN.Value, b.SlopeN.U)
		c.Corrections = append(c.Corrections, "baseline")
	}
	return c
}
