package pipeline

import (
	"math"

	"platen/pipeline/harmonic"
	"platen/pipeline/run"
)

// baseline is the force with no cell under the plate: a straight line in time.
type baseline struct {
	ref           float64 // s
	offset, slope float64 // N at ref, N/s
	uOffset       float64 // at ref
	uSlope        float64
	wander        float64 // N, what batches of it scatter beyond the line
	noise         float64 // N, rms of single samples
	before, after float64 // s of free force
	known         bool
}

// at returns the baseline at time t.
func (b *baseline) at(t float64) float64 { return b.offset + b.slope*(t-b.ref) }

// uAt returns the standard uncertainty of the baseline at time t.
func (b *baseline) uAt(t float64) float64 {
	return math.Sqrt(b.uOffset*b.uOffset + math.Pow((t-b.ref)*b.uSlope, 2) + b.wander*b.wander)
}

// freeBatches is the number of stretches that each side, before contact and
// after release, is divided into.
const freeBatches = 8

// fitBaseline fits a line through the free force before contact and after
// release. The slope is drawn towards zero by the settings' prior, with the
// weight that one more observation of that uncertainty has: a second of free
// force before a minute of contact tells little about drift.
//
// Uncertainties come from the scatter of stretch means about the line, never
// below that of white noise. Slow wander between the stretches, which the line
// cannot take out, is the Allan deviation at the length of a stretch (NIST
// SP 1065) and is added at every time.
func fitBaseline(before, after []point, s Settings) *baseline {
	type batch struct{ t, f, n float64 }
	var batches []batch
	var noise, count, samples float64
	var allan, pairs float64
	for _, side := range [][]point{before, after} {
		if len(side) < 2*freeBatches {
			continue
		}
		first := len(batches)
		for b := range freeBatches {
			var k batch
			for _, p := range side[b*len(side)/freeBatches : (b+1)*len(side)/freeBatches] {
				k.t += p.w * p.t
				k.f += p.w * p.f
				k.n += p.w
			}
			k.t /= k.n
			k.f /= k.n
			batches = append(batches, k)
		}
		for i := first + 1; i < len(batches); i++ {
			d := batches[i].f - batches[i-1].f
			allan += d * d / 2
			pairs++
		}
		for i := 1; i < len(side); i++ {
			// Neighbouring points differ by the noise of both.
			d := side[i].f - side[i-1].f
			noise += d * d / (1/side[i].w + 1/side[i-1].w)
			count++
		}
		for _, p := range side {
			samples += p.w
		}
	}
	if len(batches) == 0 {
		return &baseline{wander: s.ZeroForceUPN * 1e-12}
	}
	line := &baseline{known: true, before: span(before), after: span(after), noise: math.Sqrt(noise / count)}
	var sw, st, sf float64
	for _, k := range batches {
		sw += k.n
		st += k.n * k.t
		sf += k.n * k.f
	}
	line.ref = st / sw
	mean := sf / sw
	var stt, stf float64
	for _, k := range batches {
		stt += k.n * (k.t - line.ref) * (k.t - line.ref)
		stf += k.n * (k.t - line.ref) * (k.f - mean)
	}
	// Residual variance of a single sample, as the stretches show it: first
	// with the slope the data want, to weigh the prior against them.
	residual := func(slope float64) float64 {
		var r float64
		for _, k := range batches {
			d := k.f - mean - slope*(k.t-line.ref)
			r += k.n * d * d
		}
		return math.Max(r/float64(len(batches)-2), line.noise*line.noise)
	}
	prior := s.DriftPriorPNPerS * 1e-12
	variance := residual(stf / stt)
	pull := variance / (prior * prior)
	line.offset = mean
	line.slope = stf / (stt + pull)
	variance = residual(line.slope)
	dof := len(batches) - 2
	line.uOffset = harmonic.Expand(math.Sqrt(variance/sw), dof)
	line.uSlope = harmonic.Expand(math.Sqrt(variance/(stt+pull)), dof)
	// What white noise makes of neighbouring stretches is in uOffset already.
	perBatch := sw / float64(len(batches))
	line.wander = math.Sqrt(math.Max(0, allan/pairs-line.noise*line.noise/perBatch))
	return line
}

func span(ps []point) float64 {
	if len(ps) < 2 {
		return 0
	}
	return ps[len(ps)-1].t - ps[0].t
}

// freeForce gathers the points at which the plate is surely free of the cell:
// before the first touch, and after the plate has left it for good. diameter
// is the largest that the cell may have.
func freeForce(tracks []*track, kind run.Kind, touch *contact, diameter float64) (before, after []point) {
	if kind != run.KindCell {
		// No cell: the plate is free whenever it stands.
		for _, t := range tracks {
			if t.mode == run.Hold {
				before = append(before, t.points...)
			}
		}
		return before, nil
	}
	if diameter == 0 {
		return nil, nil
	}
	pressed := false
	lastPressed := 0
	for i, t := range tracks {
		if t.points[len(t.points)-1].h < diameter || t.points[0].h < diameter {
			lastPressed = i
		}
	}
	for i, t := range tracks {
		for _, p := range t.points {
			switch {
			case p.h < diameter:
				pressed = true
			case !pressed && p.h > 1.02*diameter && (touch == nil || p.t < touch.time):
				before = append(before, p)
			case pressed && i > lastPressed && t.mode == run.Hold && p.h > 1.05*diameter:
				after = append(after, p)
			}
		}
	}
	if len(after) == 0 && pressed {
		// The record ends on the way up: its last, highest fifth will do.
		if t := tracks[len(tracks)-1]; t.mode == run.Retract {
			top := t.points[len(t.points)-1].h
			for _, p := range t.points[len(t.points)*4/5:] {
				if top > 1.15*diameter && p.h > 1.1*diameter {
					after = append(after, p)
				}
			}
		}
	}
	return before, after
}
