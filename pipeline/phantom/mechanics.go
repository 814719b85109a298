package phantom

import (
	"math"

	"platen/pipeline/squeeze"
)

// moment is the true state at one sample.
type moment struct {
	t, height float64
	present   bool    // there is a cell under the plate
	radius    float64 // of the uncompressed sphere
	ratio     float64 // height ratio
	lnArea    float64 // over the sphere
	tension   float64
	force     float64
	equator   float64 // radius
}

// mechanics steps the cell from sample to sample.
type mechanics struct {
	curve   *squeeze.Curve
	cell    Cell
	lostAt  float64   // +Inf: never
	decay   []float64 // exp(-dt/tau) of each arm
	gain    []float64 // K (1 - exp(-dt/tau))/(dt/tau)
	stress  []float64
	lnArea  float64
	started bool
	stuck   bool // an adhering cell that has touched the plate
}

func newMechanics(curve *squeeze.Curve, s Spec) *mechanics {
	m := &mechanics{curve: curve, cell: s.Cell, lostAt: math.Inf(1)}
	if s.Fault.LostAtS > 0 {
		m.lostAt = s.Fault.LostAtS
	}
	for _, a := range s.Cell.Arms {
		x := 1 / (s.Rig.RateHz * a.TimeS)
		m.decay = append(m.decay, math.Exp(-x))
		m.gain = append(m.gain, -a.StiffnessNPerM*math.Expm1(-x)/x)
	}
	m.stress = make([]float64, len(s.Cell.Arms))
	return m
}

// step moves on by one sample interval, to time t and height h. The first step
// finds the arms relaxed.
func (m *mechanics) step(t, h float64) moment {
	now := moment{t: t, height: h}
	if m.cell.RadiusM == 0 {
		return now
	}
	now.present = t < m.lostAt
	now.radius = m.cell.radiusAt(t)
	now.ratio = h / (2 * now.radius)
	now.lnArea = m.curve.LnArea(now.ratio)
	now.equator = now.radius * m.curve.Equator(now.ratio)
	now.tension = m.tension(now.lnArea)

	if now.ratio < 1 {
		now.force = now.tension * now.radius * m.curve.Force(now.ratio)
		m.stuck = m.cell.PullN > 0
	} else if m.stuck {
		now.force = -m.cell.NeckNPerM * (h - 2*now.radius)
		if -now.force > m.cell.PullN {
			now.force, m.stuck = 0, false
		}
	}
	now.force *= math.Max(0, math.Min(1, 1-(t-m.lostAt)/lossS))
	return now
}

// tension steps the arms to a new ln area, taken as straight since the last.
func (m *mechanics) tension(lnArea float64) float64 {
	var d float64
	if m.started {
		d = lnArea - m.lnArea
	}
	m.lnArea, m.started = lnArea, true
	g := m.cell.TensionNPerM + m.cell.ElasticNPerM*lnArea
	for j := range m.stress {
		m.stress[j] = m.stress[j]*m.decay[j] + m.gain[j]*d
		g += m.stress[j]
	}
	return g
}
