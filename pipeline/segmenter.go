package pipeline

import (
	"math"
	"slices"

	"platen/pipeline/run"
)

// track is one stretch of a run in which the plate does one thing.
type track struct {
	strip
	mode  run.Mode
	fromS float64
	toS   float64
	legs  int     // of an oscillation: half cycles seen
	drive float64 // Hz, of an oscillation, roughly
	open  bool
}

// segmenter finds, from the height alone, what the plate did: it stops
// (hold), travels (approach, retract), or goes to and fro (oscillation).
// Nothing has to be declared.
//
// The height is followed from turning point to turning point. A stretch
// between two is a leg; a leg that lingers at its end much longer than a
// sinusoid of its size would is a ramp that has stopped; legs of like size and
// duration that alternate are an oscillation. Samples wait in pending until it
// is clear where they belong, so a segment starts where the movement started
// and not where it was noticed.
type segmenter struct {
	smallest float64 // m, smallest move
	slowest  float64 // m/s, slowest ramp
	tick     float64 // s, interval between points

	theta   float64 // m, height changes below are no move
	tracks  []*track
	cur     *track // open track, last of tracks; nil before the first point
	pending strip
	moving  bool
	centre  float64 // hold: the height held
	noise   secondDifferences

	// while moving
	dir        float64
	extreme    float64
	extremeS   float64
	legFromS   float64
	legFromH   float64
	bandH      float64 // stall: height at the entry of the present band
	bandS      float64
	legs       []leg // complete, not yet given to a track
	meanTravel float64
	meanLast   float64 // mean duration of the oscillation's legs
	dropped    int64   // points beyond maxTracks
}

// leg is a stretch between two turning points or stops.
type leg struct {
	fromS, toS, fromH, toH float64
}

func (l leg) travel() float64 { return math.Abs(l.toH - l.fromH) }
func (l leg) lasts() float64  { return l.toS - l.fromS }

const (
	maxCycles = 512  // of one oscillation segment; a longer one is continued in the next
	maxTracks = 2000 // of one run

	// Legs of an oscillation have like durations and travels. Turning points
	// are found to a few hundredths of a period where the travel is some ten
	// times the smallest move; drives differ by more than a quarter.
	likeDuration = 1.25
	likeTravel   = 1.45

	// An oscillation is small against the plate separation; larger alternate
	// legs are repeated approaches and retracts.
	largestOscillation = 0.3

	shortestStop = 0.25 // s

	longestLeg = 50.0 // s, half a period at 0.01 Hz, the slowest drive in use (common practice, no source)
)

// newSegmenter starts with the scatter of the height learnt from the first
// points of the run.
func newSegmenter(s Settings, tick float64, first []point) *segmenter {
	g := &segmenter{smallest: s.SmallestMoveNm * 1e-9, slowest: s.SlowestRampNmPerS * 1e-9, tick: tick}
	var n secondDifferences
	for _, p := range first {
		n.add(p.h)
	}
	g.theta = math.Max(g.smallest, 6*n.scatter())
	return g
}

// add takes the next point.
func (g *segmenter) add(p point) {
	if g.cur == nil {
		g.centre = p.h
		g.begin(run.Hold, p.t)
	}
	if !g.moving {
		g.addHolding(p)
	} else {
		g.addMoving(p)
	}
}

func (g *segmenter) addHolding(p point) {
	if math.Abs(p.h-g.centre) <= g.theta {
		g.flushTo(math.Inf(1))
		g.give(p)
		// Learn more of the scatter while the plate is known to be still.
		if g.noise.add(p.h); g.noise.n >= 1024 {
			g.theta = math.Max(g.theta, 6*g.noise.scatter())
			g.noise = secondDifferences{}
		}
		return
	}
	g.pend(p)
	if math.Abs(p.h-g.centre) <= 2*g.theta {
		return
	}
	start := g.pending.points[0]
	g.moving = true
	g.noise = secondDifferences{}
	g.dir = math.Copysign(1, p.h-g.centre)
	g.legFromS, g.legFromH = start.t, g.centre
	g.extreme, g.extremeS = p.h, p.t
	g.bandH, g.bandS = p.h, p.t
	g.legs = g.legs[:0]
}

func (g *segmenter) addMoving(p point) {
	g.pend(p)
	if g.dir*(p.h-g.extreme) > 0 {
		g.extreme, g.extremeS = p.h, p.t
	} else if g.dir*(g.extreme-p.h) > 2*g.theta {
		g.turned(leg{g.legFromS, g.extremeS, g.legFromH, g.extreme})
		g.legFromS, g.legFromH = g.extremeS, g.extreme
		g.dir = -g.dir
		g.extreme, g.extremeS = p.h, p.t
	}
	if math.Abs(p.h-g.bandH) > g.theta {
		g.bandH, g.bandS = p.h, p.t
		if g.creeping() && p.t-g.legFromS > longestLeg {
			g.stopped(p.t) // too slow for any drive: the hold creeps
		}
		return
	}
	if p.t-g.bandS >= g.stopAfter() {
		g.stopped(g.bandS)
	}
}

// creeping tells whether the present movement is, so far, too slow for a ramp.
// It may still turn out to be the first leg of a slow oscillation.
func (g *segmenter) creeping() bool {
	return g.moving && len(g.legs) == 0 && g.cur.open && g.cur.mode == run.Hold &&
		math.Abs(g.extreme-g.legFromH) < math.Max(4*g.theta, g.slowest*(g.extremeS-g.legFromS))
}

// view returns the tracks as they stand. A hold that creeps is shown with its
// newest points although these are still pending.
func (g *segmenter) view() []*track {
	if g.cur == nil {
		return nil
	}
	ts := slices.Clone(g.tracks)
	if n := len(g.pending.points); n > 0 && (!g.moving || g.creeping()) {
		v := *g.cur
		v.points = append(slices.Clone(v.points), g.pending.points...)
		v.toS = g.pending.points[n-1].t
		ts[len(ts)-1] = &v
	}
	return slices.DeleteFunc(ts, func(t *track) bool { return len(t.points) == 0 })
}

// stopAfter returns how long the height must stand still for the plate to have
// stopped: twice as long as a sinusoid of the present leg's size and duration
// would linger within the smallest move of its turning point,
// (2/pi) sqrt(2 theta/A) of half a period.
func (g *segmenter) stopAfter() float64 {
	l := leg{g.legFromS, g.bandS, g.legFromH, g.bandH}
	if l.travel() < 2*g.theta && len(g.legs) > 0 {
		l = g.legs[len(g.legs)-1]
	}
	linger := 0.0
	if a := l.travel() / 2; a > 0 && l.lasts() > 0 {
		linger = 2 * (2 / math.Pi) * math.Sqrt(2*g.theta/math.Max(a, g.theta)) * l.lasts()
	}
	if g.oscillating() {
		linger = math.Max(linger, 0.6*g.meanLast)
	}
	return max(shortestStop, 5*g.tick, linger)
}

func (g *segmenter) oscillating() bool {
	return g.cur.open && g.cur.mode == run.Oscillation
}

// turned takes a leg that ended in a turning point.
func (g *segmenter) turned(l leg) {
	g.legs = append(g.legs, l)
	if g.oscillating() {
		if len(g.legs) == 1 && g.like(l) {
			g.growOscillation(l)
			return
		}
		if len(g.legs) < 2 {
			return // one odd leg may be the last part of a cycle
		}
		g.cur.close(g.legs[0].fromS)
	}
	if n := len(g.legs); n >= 4 && alike(g.legs[n-4:]) {
		g.beginOscillation(n - 4)
	}
}

// like tells whether a leg continues the present oscillation.
func (g *segmenter) like(l leg) bool {
	return within(l.travel(), g.meanTravel, likeTravel) && within(l.lasts(), g.meanLast, likeDuration)
}

func within(x, mean, factor float64) bool { return x >= mean/factor && x <= mean*factor }

// alike tells whether consecutive legs form an oscillation.
func alike(legs []leg) bool {
	var travel, lasts float64
	n := float64(len(legs))
	for _, l := range legs {
		travel += l.travel() / n
		lasts += l.lasts() / n
	}
	for _, l := range legs {
		if !within(l.travel(), travel, likeTravel) || !within(l.lasts(), lasts, likeDuration) ||
			l.travel() > largestOscillation*math.Max(l.fromH, l.toH) {
			return false
		}
	}
	return true
}

// beginOscillation opens an oscillation with legs[i:], and with the part of a
// cycle before them where there is one; earlier legs are ramps.
func (g *segmenter) beginOscillation(i int) {
	like := g.legs[i:]
	g.meanTravel, g.meanLast = 0, 0
	for _, l := range like {
		g.meanTravel += l.travel() / float64(len(like))
		g.meanLast += l.lasts() / float64(len(like))
	}
	if i > 0 && g.partOfCycle(g.legs[i-1]) {
		i--
	}
	from := g.legs[i].fromS
	if i == 1 && g.cur.mode == run.Oscillation && g.legs[0].travel() < g.meanTravel*likeTravel {
		// The drive changed its frequency within this leg: one part belongs to
		// either oscillation, parted where the leg crosses its middle.
		from = g.crossing(g.legs[0])
		g.flushTo(from)
		g.cur.toS = from
	} else {
		for _, l := range g.legs[:i] {
			g.giveRamp(l)
		}
	}
	rest := slices.Clone(g.legs[i:])
	g.begin(run.Oscillation, from)
	for _, l := range rest {
		g.growOscillation(l)
	}
}

// crossing returns when a pending leg passes the middle of its travel.
func (g *segmenter) crossing(l leg) float64 {
	middle, down := (l.fromH+l.toH)/2, l.toH < l.fromH
	for _, p := range g.pending.points {
		if p.t > l.fromS && (p.h < middle) == down {
			return p.t
		}
	}
	return l.fromS
}

// partOfCycle tells whether a leg can be the first or last part of the present
// oscillation.
func (g *segmenter) partOfCycle(l leg) bool {
	return l.travel() < g.meanTravel*likeTravel && l.lasts() < g.meanLast*likeDuration
}

func (g *segmenter) growOscillation(l leg) {
	g.flushTo(l.toS)
	g.cur.legs++
	// The running mean follows a slow change of amplitude over some ten legs.
	a := 1 / math.Min(float64(g.cur.legs), 10)
	if g.like(l) {
		g.meanTravel += a * (l.travel() - g.meanTravel)
		g.meanLast += a * (l.lasts() - g.meanLast)
	}
	g.cur.drive = 1 / (2 * g.meanLast)
	g.legs = g.legs[:0]
	if g.cur.legs >= 2*maxCycles {
		g.cur.close(l.toS)
		g.begin(run.Oscillation, l.toS)
	}
}

// stopped ends a movement at time t: the plate stands.
func (g *segmenter) stopped(t float64) {
	if l := (leg{g.legFromS, t, g.legFromH, g.bandH}); l.lasts() > 0 {
		g.legs = append(g.legs, l)
	}
	g.resolve()
	if g.cur.open && g.cur.mode != run.Hold {
		g.cur.close(t)
	}
	if !g.cur.open {
		g.begin(run.Hold, t)
	}
	g.moving = false
	g.centre = g.bandH
	g.flushTo(math.Inf(1))
}

// resolve gives all complete legs to tracks, when no more will come.
func (g *segmenter) resolve() {
	if g.oscillating() {
		for len(g.legs) > 0 && (g.like(g.legs[0]) || g.partOfCycle(g.legs[0])) {
			l := g.legs[0]
			rest := slices.Clone(g.legs[1:])
			g.growOscillation(l)
			g.legs = append(g.legs[:0], rest...)
		}
	}
	if len(g.legs) == 0 {
		return
	}
	if g.oscillating() {
		g.cur.close(g.legs[0].fromS)
	}
	// A short oscillation: two or three like legs, with parts around them.
	for n := min(3, len(g.legs)); n >= 2; n-- {
		for i := 0; i+n <= len(g.legs); i++ {
			if alike(g.legs[i : i+n]) {
				after := slices.Clone(g.legs[i+n:])
				g.legs = g.legs[:i+n]
				g.beginOscillation(i)
				g.legs = append(g.legs[:0], after...)
				g.resolve()
				return
			}
		}
	}
	for _, l := range g.legs {
		g.giveRamp(l)
	}
	g.legs = g.legs[:0]
}

// giveRamp puts a leg on a track of its own; creep and small moves belong to
// the hold.
func (g *segmenter) giveRamp(l leg) {
	if l.travel() < 4*g.theta || l.travel() < g.slowest*l.lasts() {
		if !g.cur.open || g.cur.mode != run.Hold {
			g.begin(run.Hold, l.fromS)
		}
		g.flushTo(l.toS)
		return
	}
	mode := run.Approach
	if l.toH > l.fromH {
		mode = run.Retract
	}
	g.begin(mode, l.fromS)
	g.flushTo(l.toS)
	g.cur.close(l.toS)
}

// begin opens a new track at time t and closes the one before.
func (g *segmenter) begin(mode run.Mode, t float64) {
	if g.cur != nil {
		if g.cur.open {
			g.cur.close(t)
		}
		if len(g.cur.points) == 0 { // nothing happened on it
			g.tracks = g.tracks[:len(g.tracks)-1]
		}
	}
	next := &track{mode: mode, fromS: t, toS: t, open: true}
	if len(g.tracks) == 1 && g.cur.mode == run.Hold && t-g.cur.fromS < shortestStop {
		// The run started in the midst of a movement.
		next.strip, next.fromS = g.cur.strip, g.cur.fromS
		g.tracks = g.tracks[:0]
	}
	g.cur = next
	g.tracks = append(g.tracks, next)
	g.thin()
}

func (t *track) close(at float64) {
	t.open = false
	t.toS = at
}

// give puts a point on the open track.
func (g *segmenter) give(p point) {
	if len(g.tracks) > maxTracks {
		g.dropped++
		return
	}
	g.cur.add(p)
	g.cur.toS = p.t
}

// flushTo moves pending points up to time t to the open track.
func (g *segmenter) flushTo(t float64) {
	n := 0
	for _, p := range g.pending.points {
		if p.t > t {
			break
		}
		g.give(p)
		n++
	}
	g.pending.points = slices.Delete(g.pending.points, 0, n)
	if len(g.pending.points) == 0 {
		g.pending.grain = 0
	}
}

// pend keeps a point until it is clear where it belongs. The newest quarter
// stays as fine as it came: a movement that starts now must be seen finely
// however long the present leg has been.
func (g *segmenter) pend(p point) {
	g.pending.points = append(g.pending.points, p)
	if len(g.pending.points) >= maxPoints {
		g.pending.coarsen(maxPoints * 3 / 4)
	}
}

// thin bounds the memory of many tracks: the older, the coarser, never below
// sixteen points a cycle.
func (g *segmenter) thin() {
	for _, step := range []struct{ back, points int }{{16, 2048}, {256, 256}} {
		i := len(g.tracks) - 1 - step.back
		if i < 0 {
			continue
		}
		if t := g.tracks[i]; len(t.points) > step.points {
			t.points = slices.Clone(t.reduced(max(step.points, 8*t.legs)))
		}
	}
}

// cut ends whatever is going on at time t, as at the end of the run or where
// the exporter marks a new segment.
func (g *segmenter) cut(t float64) {
	if g.cur == nil {
		return
	}
	if g.moving {
		l := leg{g.legFromS, t, g.legFromH, g.extreme}
		if n := len(g.pending.points); n > 0 && l.travel() >= 2*g.theta {
			g.legs = append(g.legs, l)
		}
		g.resolve()
		if len(g.pending.points) > 0 && !g.cur.open {
			g.begin(run.Hold, g.pending.points[0].t)
		}
		g.moving = false
	}
	g.flushTo(math.Inf(1))
	if g.cur.open {
		g.cur.close(t)
	}
	if len(g.cur.points) == 0 {
		g.tracks = g.tracks[:len(g.tracks)-1]
	}
}

// secondDifferences estimates the scatter of a smooth series from its second
// differences, which a ramp does not touch: for white noise of standard
// deviation s they scatter by sqrt(6) s, and half of them are smaller than
// 0.6745 times that (normal quartile).
type secondDifferences struct {
	a, b float64
	n    int
	d    []float64
}

func (s *secondDifferences) add(x float64) {
	if s.n >= 2 && len(s.d) < 1024 {
		s.d = append(s.d, math.Abs(x-2*s.b+s.a))
	}
	s.a, s.b = s.b, x
	s.n++
}

func (s *secondDifferences) scatter() float64 {
	if len(s.d) == 0 {
		return 0
	}
	d := slices.Clone(s.d)
	slices.Sort(d)
	return d[len(d)/2] / (0.6745 * math.Sqrt(6))
}
