package pipeline

import (
	"math"
	"slices"

	"gonum.org/v1/gonum/stat"

	"platen/pipeline/run"
)

// provisionalBudget is the number of points a segment is judged by while its
// run is being written, so that looking costs milliseconds.
const provisionalBudget = 2048

// estimate fills e with what the samples so far tell.
func (s *sampler) estimate(e *run.Estimates, set Settings) {
	e.FromS, e.ToS = s.fromS, s.toS
	if s.time != nil {
		e.Sampling = s.time.sampling
		if dt := s.time.interval(); dt > 0 {
			e.RateHz = 1 / dt
		}
	}
	if k, source := springConstant(set, e.Header); source != "none" {
		e.SpringConstant, e.CalibrationSource = &k, source
	}
	if q, ok := sensitivity(set, e.Header); ok && s.channels.metrePerV != 0 {
		e.Sensitivity = &q
	}
	if e.Header.Kind == run.KindThermal {
		if e.Completion != run.Growing {
			e.Reference = s.thermal(e, set)
		}
		return
	}
	if s.segments == nil {
		return
	}
	final := e.Completion != run.Growing
	tracks := s.segments.view()
	if len(tracks) == 0 {
		e.Clips = s.clip.clips(0, 0)
		return
	}

	cell := e.Header.Kind == run.KindCell
	var touch *contact
	if cell {
		touch = s.touch(tracks)
		if touch != nil {
			e.Contact = &run.Contact{TimeS: touch.time, HeightM: run.Quantity{Value: touch.height,
				U: math.Hypot(touch.u, set.HeightOffsetUNm*1e-9)}}
		}
		e.Volumes = volumes(s.curve, &s.images, e.Header, touch, set)
		e.Imaged = imagedCourse(s.curve, &s.images)
	}

	// The plate is free only where the largest size that any source gives
	// says so.
	var diameter float64
	for _, v := range e.Volumes {
		diameter = math.Max(diameter, 2*v.RadiusM.Value)
	}
	before, after := freeForce(tracks, e.Header.Kind, touch, diameter)
	zero := fitBaseline(before, after, set)
	if zero.known {
		e.Baseline = &run.Baseline{
			RefS:    zero.ref,
			OffsetN: run.Quantity{Value: zero.offset, U: math.Hypot(zero.uOffset, zero.wander)},
			SlopeN:  run.Quantity{Value: zero.slope, U: zero.uSlope},
			BeforeS: zero.before, AfterS: zero.after, NoiseN: zero.noise,
		}
	}
	e.Clips = s.clip.clips(zero.offset, zero.noise)
	if e.Header.Kind == run.KindBlank && final {
		e.Reference = blank(tracks, zero, s.time.interval())
	}

	f := s.frame(e, zero, set)
	budget := maxPoints
	if !final {
		budget = provisionalBudget
	}
	e.Segments = make([]run.Segment, len(tracks))
	for i, t := range tracks {
		seg := s.segmentOf(f, t, budget, final)
		seg.Index = i
		seg.VolumeChange = s.volumeChange(f, t)
		if final && i > 0 && tracks[i-1].mode == run.Approach {
			seg.Relaxation = f.relaxation(t)
		}
		e.Segments[i] = seg
		if !t.open && e.Ended == i {
			e.Ended = i + 1
		}
	}
	if cell && f.radius > 0 {
		e.Losses = losses(f, tracks)
		for i := range e.Segments {
			dropLost(&e.Segments[i], e.Losses)
		}
		e.Adhesion = adhesion(f, tracks)
	}
}

// frame puts together what turns force and height into tension and area.
func (s *sampler) frame(e *run.Estimates, zero *baseline, set Settings) *frame {
	f := &frame{curve: s.curve, zero: zero, uOffset: set.HeightOffsetUNm * 1e-9}
	if s.time != nil {
		f.step = s.time.interval()
	}
	if k := e.SpringConstant; k != nil && k.Value > 0 {
		f.uScale = k.U / k.Value
	}
	if q := e.Sensitivity; q != nil && q.Value > 0 {
		f.uScale = math.Hypot(f.uScale, q.U/q.Value)
	}
	if len(e.Volumes) == 0 {
		return f
	}
	v := e.Volumes[0]
	f.radius, f.uRadius = v.RadiusM.Value, v.RadiusM.U
	switch v.Source {
	case run.VolumeImaged:
		// The part of u that comes from the height's zero is moved together
		// with the heights themselves (see common).
		if _, d, ok := imagedRadius(s.curve, &s.images, set); ok && f.uOffset > 0 {
			f.radiusPerOffset = d / f.uOffset
			f.uRadius = math.Sqrt(math.Max(0, f.uRadius*f.uRadius-d*d))
		}
	case run.VolumeContact:
		f.radiusPerOffset = 0.5
		f.uRadius = math.Sqrt(math.Max(0, f.uRadius*f.uRadius-f.uOffset*f.uOffset/4))
	}
	return f
}

// touch returns the first contact. It is looked for again only when another
// approach has ended.
func (s *sampler) touch(tracks []*track) *contact {
	n := 0
	for _, t := range tracks {
		if t.mode == run.Approach && !t.open {
			n++
		}
	}
	if s.contact == nil && n > s.approaches {
		s.contact = findContact(s.curve, tracks)
		s.approaches = n
	}
	return s.contact
}

// estimated is a segment's estimate with what it was made from.
type estimated struct {
	points       int
	radius, zero float64
	segment      run.Segment
}

// segmentOf returns the estimate of a track; while the run is being written,
// that of an ended one is made again only when the cell's size or the force's
// zero has moved noticeably.
func (s *sampler) segmentOf(f *frame, t *track, budget int, final bool) run.Segment {
	if final {
		return f.segment(t, budget)
	}
	zero := f.zero.at((t.fromS + t.toS) / 2)
	if c, ok := s.cache[t]; ok && !t.open && c.points == len(t.points) &&
		math.Abs(c.radius-f.radius) <= 1e-3*f.radius &&
		math.Abs(c.zero-zero) <= 0.2*f.zero.uAt((t.fromS+t.toS)/2) {
		return c.segment
	}
	seg := f.segment(t, budget)
	if !t.open {
		if s.cache == nil {
			s.cache = map[*track]estimated{}
		}
		s.cache[t] = estimated{len(t.points), f.radius, zero, seg}
	}
	return seg
}

// volumeChange compares the imaged volume during a track with that of the
// run's first images.
func (s *sampler) volumeChange(f *frame, t *track) *run.Quantity {
	ts, w, rs := s.images.radii(s.curve, 0, 1)
	if len(rs) < 4*fewestImages {
		return nil
	}
	first := max(fewestImages, len(rs)/10)
	base, uBase := weightedBatchMean(w[:first], rs[:first])
	var in, wIn []float64
	for i, at := range ts {
		if i >= first && at >= t.fromS && at <= t.toS {
			in, wIn = append(in, rs[i]), append(wIn, w[i])
		}
	}
	if len(in) < fewestImages {
		return nil
	}
	r, u := weightedBatchMean(wIn, in)
	ratio := math.Pow(r/base, 3)
	return run.Known(ratio-1, 3*ratio*math.Hypot(u/r, uBase/base))
}

// lossWindow is the shortest stretch over which a loss of contact is judged.
const lossWindow = 0.5 // s

// losses finds stretches in which the cell carries no force though the plate
// is well down on it: the tension falls below a tenth of the run's usual, and
// the force is within twice its uncertainty of the baseline.
func losses(f *frame, tracks []*track) []run.Interval {
	type window struct {
		from, to, force, tension float64
		n                        float64
	}
	var ws []window
	var usual []float64
	for _, t := range tracks {
		if t.mode != run.Hold && t.mode != run.Oscillation {
			continue
		}
		width := lossWindow
		if t.drive > 0 {
			width = math.Max(width, 1/t.drive) // whole cycles: their troughs are no loss
		}
		var w window
		for i, p := range t.points {
			eta := (p.h + f.offset) / (2 * f.radius)
			if eta > 0.97 {
				continue
			}
			if w.n == 0 {
				w.from = p.t
			}
			w.to = p.t
			force := p.f - f.zero.at(p.t)
			w.force += p.w * force
			w.tension += p.w * force / (f.radius * f.curve.Force(eta))
			w.n += p.w
			if p.t-w.from >= width || (i == len(t.points)-1 && p.t-w.from >= width/2) {
				w.force /= w.n
				w.tension /= w.n
				ws = append(ws, w)
				usual = append(usual, w.tension)
				w = window{}
			}
		}
	}
	if len(usual) < 3 {
		return nil
	}
	// The upper quartile: a cell lost early in the run must not set the usual.
	slices.Sort(usual)
	limit := 0.1 * stat.Quantile(0.75, stat.Empirical, usual, nil)
	var out []run.Interval
	for _, w := range ws {
		u := f.zero.uAt(w.from) + f.zero.noise/math.Sqrt(w.n)
		if w.tension > limit || w.force > 2*u+0.1*limit*f.radius {
			continue
		}
		if n := len(out); n > 0 && w.from-out[n-1].ToS < lossWindow {
			out[n-1].ToS = w.to
			continue
		}
		out = append(out, run.Interval{FromS: w.from, ToS: w.to})
	}
	return out
}

// dropLost takes back what an average over a loss of contact would say of the
// cell.
func dropLost(s *run.Segment, lost []run.Interval) {
	for _, l := range lost {
		if l.ToS <= s.FromS || l.FromS >= s.ToS {
			continue
		}
		s.TensionNPerM, s.TensionSlope, s.TensionScatter, s.Relaxation = nil, nil, nil, nil
		s.AreaStrainAmplitude, s.Distortion, s.PhaseDeg = nil, nil, nil
		s.StorageNPerM, s.LossNPerM, s.StorageScatter, s.LossScatter = nil, nil, nil, nil
		s.Why = "contact was lost"
	}
}

// pullWindow is the stretch over which the pull of an adhering cell is
// averaged.
const pullWindow = 0.05 // s

// adhesion finds the largest pull on the plate while it leaves the cell.
func adhesion(f *frame, tracks []*track) *run.Adhesion {
	var out *run.Adhesion
	var load float64
	for _, t := range tracks {
		for _, p := range t.points {
			load = math.Max(load, p.f-f.zero.at(p.t))
		}
		if t.mode != run.Retract {
			continue
		}
		var sum, n, from float64
		for i, p := range t.points {
			if n == 0 {
				from = p.t
			}
			sum += p.w * (p.f - f.zero.at(p.t))
			n += p.w
			if p.t-from < pullWindow && i < len(t.points)-1 {
				continue
			}
			if pull := -sum / n; out == nil || pull > out.PullN.Value {
				u := math.Hypot(f.zero.uAt(p.t), f.zero.noise/math.Sqrt(n))
				out = &run.Adhesion{AtS: from, PullN: run.Quantity{Value: pull, U: u}}
			}
			sum, n = 0, 0
		}
	}
	if out != nil {
		out.MaxLoadN = load
		if out.PullN.Value <= 0 {
			return nil
		}
	}
	return out
}
