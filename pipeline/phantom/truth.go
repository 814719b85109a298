package phantom

import (
	"fmt"
	"math"

	"platen/pipeline/run"
)

// Truth is what an analysis of the run should find. All in SI units.
type Truth struct {
	Kind run.Kind

	RadiusM             float64 // of the uncompressed cell at the start; 0: no cell
	VolumeM3            float64 // at the start
	VolumeChange        float64 // relative, over the run
	ContactM            float64 // plate separation at first contact, 0: never touched
	ContactS            float64 // its time
	SpringConstantNPerM float64 // the true one, 0: not declared
	BaselineN           float64 // at the start
	BaselineSlopeNPerS  float64
	MaxForceN           float64 // on the cell
	PullN               float64 // most that the cell held the plate back

	Segments []Segment // of the samples that the file holds

	Findings []string // rules that should trip; none: a clean run
}

// Segment is the truth of one move.
type Segment struct {
	Mode       run.Mode
	FromS, ToS float64

	HeightM     float64 // mean
	HeightRatio float64 // mean
	// Loaded: the cell was squeezed during all of the segment. The fields
	// below are zero otherwise.
	Loaded       bool
	ForceN       float64 // mean
	TensionNPerM float64 // mean

	// Of an oscillation:
	FrequencyHz         float64
	Cycles              float64
	HeightAmplitudeM    float64
	AreaStrainAmplitude float64 // of ln area at the drive frequency
	StorageNPerM        float64
	LossNPerM           float64
	PhaseDeg            float64
}

// truthOf runs the cell once without noise.
func (r *Recording) truthOf() (Truth, error) {
	s := r.spec
	t := Truth{
		Kind:               r.header.Kind,
		RadiusM:            s.Cell.RadiusM,
		BaselineN:          s.Rig.ForceOffsetN,
		BaselineSlopeNPerS: s.Rig.ForceDriftNPerS,
		Findings:           s.Expect,
	}
	if t.Kind == "" {
		t.Kind = run.KindCell
	}
	if k := s.Rig.SpringConstantNPerM; k > 0 {
		t.SpringConstantNPerM = k * (1 + s.Rig.SpringErrorRel)
	}
	t.VolumeM3 = 4 * math.Pi / 3 * math.Pow(s.Cell.RadiusM, 3)
	type sums struct {
		n                              float64
		height, ratio, force, gamma    float64
		loaded                         bool
		cos, sin, lnArea, areaC, areaS float64
	}
	all := make([]sums, len(r.legs))
	for i := range all {
		all[i].loaded = s.Cell.RadiusM > 0
	}
	last := 0.0
	err := r.pass(func(i int64, leg int, m moment) error {
		if m.present && m.ratio < 1 && !(m.tension > 0) {
			return fmt.Errorf("phantom: %s: the tension falls to %.3g N/m at %.3f s: the cell would go slack; give it more tension or slower moves", s.Name, m.tension, m.t)
		}
		k := &all[leg]
		k.n++
		k.height += m.height
		k.ratio += m.ratio
		k.force += m.force
		k.gamma += m.tension
		k.loaded = k.loaded && m.present && m.ratio < 1
		phase := 2 * math.Pi * r.legs[leg].FrequencyHz * (m.t - r.legs[leg].from)
		k.areaC += m.lnArea * math.Cos(phase)
		k.areaS += m.lnArea * math.Sin(phase)
		if m.present && m.ratio < 1 && t.ContactM == 0 {
			t.ContactM, t.ContactS = 2*m.radius, m.t
		}
		t.MaxForceN = math.Max(t.MaxForceN, m.force)
		t.PullN = math.Max(t.PullN, -m.force)
		last = m.t
		return nil
	})
	if err != nil {
		return Truth{}, err
	}
	if s.Cell.ShrinkPerS != 0 {
		t.VolumeChange = math.Expm1(-s.Cell.ShrinkPerS * last)
	}
	for i, l := range r.legs {
		k := all[i]
		if k.n == 0 {
			continue // the file stops before
		}
		g := Segment{Mode: l.mode, FromS: l.from, ToS: math.Min(l.to, last+1/s.Rig.RateHz), HeightM: k.height / k.n, HeightRatio: k.ratio / k.n, Loaded: k.loaded}
		if l.mode == run.Oscillation {
			g.FrequencyHz, g.Cycles, g.HeightAmplitudeM = l.FrequencyHz, (g.ToS-g.FromS)*l.FrequencyHz, l.AmplitudeM
		}
		if k.loaded {
			g.ForceN, g.TensionNPerM = k.force/k.n, k.gamma/k.n
			if l.mode == run.Oscillation {
				m := s.Cell.Modulus(l.FrequencyHz)
				g.AreaStrainAmplitude = 2 * math.Hypot(k.areaC, k.areaS) / k.n
				g.StorageNPerM, g.LossNPerM = real(m), imag(m)
				g.PhaseDeg = math.Atan2(imag(m), real(m)) * 180 / math.Pi
			}
		}
		t.Segments = append(t.Segments, g)
	}
	return t, nil
}
