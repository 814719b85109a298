package pipeline

import (
	"math"

	"platen/pipeline/run"
	"platen/pipeline/visco"
)

const (
	// Relaxation is looked for in holds of at least this length.
	shortestRelaxation = 2.0 // s
	// The tension is averaged to this many values: a law of four parameters
	// needs no more, and the fit stays quick.
	relaxationValues = 100
	// A hold has settled when as long again would change the tension by less.
	settledShare = 0.02
)

// relaxation fits the decay of the tension during a hold that follows an
// approach. It returns nil where there is no decay to speak of.
func (f *frame) relaxation(t *track) *run.Decay {
	if t.mode != run.Hold || t.toS-t.fromS < shortestRelaxation || len(t.points) < 2*relaxationValues {
		return nil
	}
	cols, pressed := f.series(t.points)
	if !pressed {
		return nil
	}
	var ts, ys []float64
	n := len(t.points)
	for b := range relaxationValues {
		var w, st, sy float64
		for i := b * n / relaxationValues; i < (b+1)*n/relaxationValues; i++ {
			p := t.points[i]
			w += p.w
			st += p.w * (p.t - t.fromS)
			sy += p.w * cols[colTension][i]
		}
		ts, ys = append(ts, st/w), append(ys, sy/w)
	}
	laws, err := visco.Decay(ts, ys)
	if err != nil {
		return nil
	}
	l := laws[0]
	d := &run.Decay{Law: l.Name, PlateauNPerM: l.Plateau, DropNPerM: l.Drop, TimeS: l.TimeS, Exponent: l.Exponent,
		Settled: l.Settled(t.toS-t.fromS, settledShare)}
	if len(laws) > 1 {
		d.EvidenceRatio = run.Number(math.Exp(math.Min(700, (laws[1].AICc-l.AICc)/2)))
	}
	for _, x := range []float64{d.PlateauNPerM, d.DropNPerM, d.TimeS, d.Exponent} {
		if run.Number(x) == nil {
			return nil
		}
	}
	return d
}
