package pipeline

import (
	"math"

	"platen/pipeline/harmonic"
	"platen/pipeline/run"
	"platen/pipeline/squeeze"
)

// frame is what turns force and height of a sample into tension and area: the
// cell's size, the zero of force and of height, and the force scale.
type frame struct {
	curve  *squeeze.Curve
	radius float64 // m, of the uncompressed sphere; 0: not known
	offset float64 // m, added to every height
	zero   *baseline
	shift  float64 // N, added to the baseline
	step   float64 // s, sampling interval

	// Standard uncertainties common to the whole run (type B, JCGM 100).
	uRadius float64
	uOffset float64
	uScale  float64 // relative, of the force

	// radiusPerOffset is how the radius moves when the height's zero does.
	radiusPerOffset float64
}

// touching is the height ratio above which force over shape function says
// nothing: a cell squeezed by less than half a percent.
const touching = 0.995

// columns of a segment's series.
const (
	colHeight = iota
	colForce
	colTension
	colStrain
)

// series computes height, force, tension and area strain (A over its mean,
// minus 1) for each point. ok is false where the plate is off the cell for
// more than a hundredth of the time: there is no tension then.
func (f *frame) series(pts []point) (cols [4][]float64, ok bool) {
	for i := range cols {
		cols[i] = make([]float64, len(pts))
	}
	var off, all, area float64
	for i, p := range pts {
		h := p.h + f.offset
		force := p.f - f.zero.at(p.t) - f.shift
		cols[colHeight][i], cols[colForce][i] = h, force
		all += p.w
		if f.radius == 0 {
			continue
		}
		eta := h / (2 * f.radius)
		if !(eta < touching) {
			off += p.w
			continue
		}
		cols[colTension][i] = force / (f.radius * f.curve.Force(eta))
		a := math.Exp(f.curve.LnArea(eta))
		cols[colStrain][i] = a
		area += p.w * a
	}
	if f.radius == 0 || off > 0.01*all {
		return cols, false
	}
	area /= all - off
	for i := range cols[colStrain] {
		if a := cols[colStrain][i]; a != 0 {
			cols[colStrain][i] = a/area - 1
		}
	}
	return cols, true
}

func pointsOf(pts []point, step float64) harmonic.Points {
	p := harmonic.Points{T: make([]float64, len(pts)), W: make([]float64, len(pts)), Dt: step}
	for i, q := range pts {
		p.T[i], p.W[i] = q.t, q.w
	}
	return p
}

// segment estimates everything about one track. Points beyond budget are
// joined first; the final estimate gets them all.
func (f *frame) segment(t *track, budget int) run.Segment {
	seg := run.Segment{Mode: t.mode, FromS: t.fromS, ToS: t.toS}
	pts := t.reduced(max(budget, 16*t.legs/2))
	if len(pts) < 4 {
		seg.Why = "too few samples"
		return seg
	}
	switch t.mode {
	case run.Oscillation:
		f.oscillation(&seg, t, pts)
	case run.Hold:
		f.hold(&seg, pts)
	default:
		cols, _ := f.series(pts)
		p := pointsOf(pts, f.step)
		if m, _, s, us, _, err := harmonic.MeanSlope(p, cols[colHeight]); err == nil {
			seg.HeightM = run.Known(m, f.uOffset)
			seg.HeightSlopeMPerS = run.Known(s, us)
		}
	}
	if h := seg.HeightM; h != nil && f.radius > 0 {
		eta := h.Value / (2 * f.radius)
		// Height and radius err together where the radius comes from images
		// taken at these heights.
		du := (1 - eta*2*f.radiusPerOffset) / (2 * f.radius) * f.uOffset
		seg.HeightRatio = run.Known(eta, math.Hypot(du, eta*f.uRadius/f.radius))
	}
	return seg
}

// hold estimates a stretch in which the plate stands.
func (f *frame) hold(seg *run.Segment, pts []point) {
	cols, pressed := f.series(pts)
	p := pointsOf(pts, f.step)
	mean, u, slope, uSlope, _, err := harmonic.MeanSlope(p, cols[colHeight])
	if err != nil {
		seg.Why = err.Error()
		return
	}
	seg.HeightM = run.Known(mean, math.Hypot(u, f.uOffset))
	seg.HeightSlopeMPerS = run.Known(slope, uSlope)
	middle := (seg.FromS + seg.ToS) / 2
	if m, u, _, _, _, err := harmonic.MeanSlope(p, cols[colForce]); err == nil {
		seg.ForceN = run.Known(m, math.Sqrt(u*u+math.Pow(f.zero.uAt(middle), 2)+math.Pow(m*f.uScale, 2)))
	}
	if !pressed {
		if f.radius == 0 {
			seg.Why = f.notPressed()
		}
		return
	}
	m, u, s, us, _, err := harmonic.MeanSlope(p, cols[colTension])
	if err != nil {
		seg.Why = err.Error()
		return
	}
	seg.TensionScatter = run.Number(u)
	b := f.common(middle, func(g *frame) ([]float64, bool) {
		c, ok := g.series(pts)
		return []float64{weightedMean(pts, c[colTension])}, ok
	})
	if b == nil {
		seg.Why = whyNoCommon
		return
	}
	seg.TensionNPerM = run.Known(m, math.Sqrt(u*u+b[0]*b[0]+math.Pow(m*f.uScale, 2)))
	seg.TensionSlope = run.Known(s, math.Hypot(us, math.Abs(s)*f.uScale))
}

// notPressed says why a segment has no tension.
func (f *frame) notPressed() string {
	if f.radius == 0 {
		return "the size of the cell is not known"
	}
	return "the plate is off the cell, or hardly touches it"
}

const whyNoCommon = "within the uncertainty of the cell's size the plate may be off the cell"

func weightedMean(pts []point, x []float64) float64 {
	var s, w float64
	for i, p := range pts {
		s += p.w * x[i]
		w += p.w
	}
	return s / w
}

// An oscillation that has enough cycles is fitted without its first one: what
// the start of the movement excites dies away there. The last tenth of a cycle
// is left out always, because the stop is noticed only when the plate has left
// the sinusoid.
const (
	settleCycles = 1.0
	fewestFitted = 3.0
	stopCycles   = 0.1
)

// sinusoidal returns the points of an oscillation that are fitted.
func sinusoidal(pts []point, from, to, freq float64) []point {
	start := stopCycles
	if (to-from)*freq >= settleCycles+fewestFitted {
		start = settleCycles
	}
	from += start / freq
	to -= stopCycles / freq
	for len(pts) > 0 && pts[0].t < from {
		pts = pts[1:]
	}
	for len(pts) > 0 && pts[len(pts)-1].t > to {
		pts = pts[:len(pts)-1]
	}
	return pts
}

// oscillation estimates the moduli of a stretch in which the plate goes to and
// fro.
func (f *frame) oscillation(seg *run.Segment, t *track, pts []point) {
	model := harmonic.Model{Trend: 2, Harmonics: 3}
	pts = sinusoidal(pts, seg.FromS, seg.ToS, t.drive)
	if len(pts) < 4 {
		seg.Why = "too few samples"
		return
	}
	cols, pressed := f.series(pts)
	p := pointsOf(pts, f.step)
	freq, uFreq, err := harmonic.RefineFrequency(p, cols[colHeight], t.drive, model)
	if err != nil {
		seg.Why = err.Error()
		return
	}
	seg.FrequencyHz = run.Known(freq, uFreq)
	seg.Cycles = (seg.ToS - seg.FromS) * freq
	fit, err := harmonic.FitSine(p, freq, cols[:], model)
	if err != nil {
		seg.Why = err.Error()
		return
	}
	middle := (seg.FromS + seg.ToS) / 2
	height, force := fit.Channel(colHeight), fit.Channel(colForce)
	seg.HeightM = run.Known(height.Mean, math.Hypot(height.UMean, f.uOffset))
	seg.HeightSlopeMPerS = run.Known(height.Slope, height.USlope)
	seg.ForceN = run.Known(force.Mean, math.Sqrt(force.UMean*force.UMean+math.Pow(f.zero.uAt(middle), 2)+math.Pow(force.Mean*f.uScale, 2)))
	seg.HeightAmplitudeM = amplitude(fit, colHeight, 0)
	seg.ForceAmplitudeN = amplitude(fit, colForce, f.uScale)
	seg.SNRdB = run.Number(fit.SNRdB(colForce))
	if !pressed {
		seg.Why = f.notPressed()
		return
	}
	seg.AreaStrainAmplitude = amplitude(fit, colStrain, 0)
	seg.Distortion = run.Number(fit.Distortion(colTension))

	tension := fit.Channel(colTension)
	uTension := tension.UMean
	if _, u, _, _, _, err := harmonic.MeanSlope(p, residuals(fit, colTension, p, cols[colTension])); err == nil {
		uTension = math.Max(uTension, u)
	}
	modulus, err := harmonic.Modulus(fit, colTension, colStrain)
	if err != nil {
		seg.Why = err.Error()
		return
	}
	k := modulus.K
	phase := func(k complex128) float64 { return math.Atan2(imag(k), real(k)) * 180 / math.Pi }

	// How the common errors move tension, moduli, phase and strain.
	few := pts
	if len(few) > 2048 {
		few = (&strip{points: pts}).reduced(max(2048, 16*t.legs/2))
	}
	b := f.common(middle, func(g *frame) ([]float64, bool) {
		cols, ok := g.series(few)
		if !ok {
			return nil, false
		}
		fit, err := harmonic.FitSine(pointsOf(few, f.step), freq, cols[colTension:], model)
		if err != nil {
			return nil, false
		}
		g1, e1 := fit.Channel(0).X[0], fit.Channel(1).X[0]
		k := g1 / e1
		return []float64{fit.Channel(0).Mean, real(k), imag(k), phase(k), math.Hypot(real(e1), imag(e1))}, true
	})
	if b == nil {
		seg.Why = whyNoCommon
		return
	}
	seg.TensionScatter = run.Number(uTension)
	seg.StorageScatter = run.Number(modulus.URe)
	seg.LossScatter = run.Number(modulus.UIm)
	scaled := func(v, a, b float64) *run.Quantity {
		return run.Known(v, math.Sqrt(a*a+b*b+v*v*f.uScale*f.uScale))
	}
	seg.TensionNPerM = scaled(tension.Mean, uTension, b[0])
	seg.TensionSlope = run.Known(tension.Slope, math.Hypot(tension.USlope, tension.Slope*f.uScale))
	seg.StorageNPerM = scaled(real(k), modulus.URe, b[1])
	seg.LossNPerM = scaled(imag(k), modulus.UIm, b[2])
	seg.PhaseDeg = run.Known(phase(k), math.Hypot(modulus.UPhase*180/math.Pi, b[3]))
	if a := seg.AreaStrainAmplitude; a != nil {
		a.U = math.Hypot(a.U, b[4])
	}
}

// residuals is what the sinusoid and its harmonics leave of a channel: the
// trend and the noise, whose batches tell how well the mean is known.
func residuals(fit *harmonic.Fit, channel int, p harmonic.Points, y []float64) []float64 {
	r := make([]float64, len(y))
	for i := range y {
		r[i] = y[i] - fit.Oscillating(channel, p.T[i], p.W[i])
	}
	return r
}

func amplitude(fit *harmonic.Fit, channel int, uScale float64) *run.Quantity {
	c := fit.Channel(channel)
	a := math.Hypot(real(c.X[0]), imag(c.X[0]))
	return run.Known(a, math.Hypot(c.UX, a*uScale))
}

// common returns the standard uncertainties of estimates that come from errors
// common to the run: radius, zero of the height, zero of the force at time t.
// Each is moved by its standard uncertainty up and down; half the difference
// is its contribution (JCGM 100, 5.1.3 note 2). It returns nil where the
// estimate fails on either side.
func (f *frame) common(t float64, estimate func(*frame) ([]float64, bool)) []float64 {
	moves := []struct{ radius, offset, shift float64 }{
		{radius: f.uRadius},
		{radius: f.uOffset * f.radiusPerOffset, offset: f.uOffset},
		{shift: f.zero.uAt(t)},
	}
	var sum []float64
	for _, m := range moves {
		if m.radius == 0 && m.offset == 0 && m.shift == 0 {
			continue
		}
		up, down := *f, *f
		up.radius, up.offset, up.shift = f.radius+m.radius, f.offset+m.offset, f.shift+m.shift
		down.radius, down.offset, down.shift = f.radius-m.radius, f.offset-m.offset, f.shift-m.shift
		a, ok := estimate(&up)
		b, ok2 := estimate(&down)
		if !ok || !ok2 {
			return nil
		}
		if sum == nil {
			sum = make([]float64, len(a))
		}
		for i := range a {
			d := (a[i] - b[i]) / 2
			sum[i] += d * d
		}
	}
	if sum == nil {
		e, ok := estimate(f)
		if !ok {
			return nil
		}
		sum = make([]float64, len(e))
	}
	for i := range sum {
		sum[i] = math.Sqrt(sum[i])
	}
	return sum
}
