package pipeline

import (
	"math"

	"platen/pipeline/calib"
	"platen/pipeline/run"
)

// blank measures how steady the force is with no cell under the plate: on the
// longest stretch in which the plate stands. It returns nil where that is too
// short.
func blank(tracks []*track, zero *baseline, step float64) *run.Reference {
	var longest *track
	for _, t := range tracks {
		if t.mode == run.Hold && (longest == nil || t.toS-t.fromS > longest.toS-longest.fromS) {
			longest = t
		}
	}
	if longest == nil || len(longest.points) < 64 || !zero.known {
		return nil
	}
	// Points of one weight are readings at an even step.
	w := longest.points[0].w
	var y []float64
	for _, p := range longest.points {
		if p.w == w {
			y = append(y, p.f)
		}
	}
	ref := &run.Reference{ForceNoiseN: run.Number(zero.noise)}
	best := math.Inf(1)
	for _, a := range calib.Allan(y, w*step) {
		ref.Allan = append(ref.Allan, run.AllanPoint{TimeS: a.TimeS, DeviationN: a.Deviation})
		if a.Deviation < best {
			best = a.Deviation
			ref.SteadiestS = run.Number(a.TimeS)
		}
	}
	return ref
}
