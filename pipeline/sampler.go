package pipeline

import (
	"math"
	"slices"
	"sync"

	"platen/pipeline/calib"
	"platen/pipeline/run"
	"platen/pipeline/squeeze"
)

// universalCurve is solved once in a process and never changes after.
var universalCurve = sync.OnceValue(squeeze.NewCurve)

// sampler takes the rows of a run one by one: it resolves force and height
// from what the file has, gives each row its time, watches for clipping, and
// hands condensed points to the segmenter and images to the volume. All its
// state is bounded.
type sampler struct {
	settings Settings
	header   run.Header
	channels channels

	primed bool
	first  []row // rows before the time base is known
	time   *timebase

	perPoint int   // rows joined in one point
	acc      point // the point being gathered, as sums
	segments *segmenter
	label    int32

	spectrum   calib.Spectrum // of a thermal run's deflection
	clip       clipWatch
	images     images
	fromS, toS float64
	seen       int64

	curve      *squeeze.Curve
	contact    *contact
	approaches int // ended approaches looked at for the contact
	cache      map[*track]estimated
}

// row is one sample in SI units; NaN where a channel was not measured.
type row struct {
	stamp, quantum      float64
	force, height       float64
	deflection          float64 // m
	radius, temperature float64
	label               int32
}

// channels tells how force and height are made from what the file has.
type channels struct {
	forcePerM float64 // N/m, to multiply a deflection in m
	metrePerV float64 // m/V, to multiply a deflection in V
	resolved  bool
}

// missingError says that a run lacks a calibration without which its channels
// mean nothing.
type missingError struct{ want, got, fix string }

func (e *missingError) Error() string { return "expected " + e.want + ", got " + e.got + ": " + e.fix }

func newSampler(s Settings, h run.Header) *sampler {
	return &sampler{settings: s, header: h, curve: universalCurve()}
}

// maxPointRate is the rate to which faster sampling is averaged: a sixty-fourth
// of the fastest drive in use (10 Hz, common practice, no source; a declared
// drive frequency raises it) would do, the rest is kept for the shape of ramps.
const maxPointRate = 2048.0

// springConstant returns the spring constant in force and where it is from.
func springConstant(s Settings, h run.Header) (k run.Quantity, source string) {
	switch {
	case h.SpringConstantNPerM != nil:
		return *h.SpringConstantNPerM, "header"
	case s.SpringConstantNPerM > 0:
		return run.Quantity{Value: s.SpringConstantNPerM, U: s.SpringConstantUNPerM}, "settings"
	}
	return run.Quantity{}, "none"
}

func sensitivity(s Settings, h run.Header) (run.Quantity, bool) {
	switch {
	case h.SensitivityMPerV != nil:
		return *h.SensitivityMPerV, true
	case s.SensitivityNmPerV > 0:
		return run.Quantity{Value: s.SensitivityNmPerV * 1e-9, U: s.SensitivityUNmPerV * 1e-9}, true
	}
	return run.Quantity{}, false
}

// resolve decides once, at the first block, how channels become force and
// height.
func (s *sampler) resolve(b *run.Block) error {
	s.channels.resolved = true
	needsDeflectionM := b.Height == nil && b.Drive != nil
	thermal := s.header.Kind == run.KindThermal
	if b.DeflectionV != nil && b.DeflectionM == nil && (b.Force == nil || needsDeflectionM || thermal) {
		q, ok := sensitivity(s.settings, s.header)
		if !ok {
			return &missingError{"a deflection sensitivity", "deflection in volts without one",
				`add a header line such as "# sensitivity [nm/V]: 85 ± 2", or sensitivity_nm_per_v under [analysis] in platen.toml`}
		}
		s.channels.metrePerV = q.Value
	}
	if thermal {
		return nil // it is there to measure the spring constant
	}
	if b.Force == nil || (needsDeflectionM && b.DeflectionM == nil && b.DeflectionV == nil) {
		k, source := springConstant(s.settings, s.header)
		if source == "none" {
			return &missingError{"a spring constant", "a deflection (or a drive position) without one",
				`add a header line such as "# spring constant [N/m]: 0.21 ± 0.01", or spring_constant_n_per_m under [analysis] in platen.toml`}
		}
		s.channels.forcePerM = k.Value
	}
	return nil
}

func (s *sampler) take(b *run.Block) error {
	if !s.channels.resolved {
		if err := s.resolve(b); err != nil {
			return err
		}
	}
	for i := range b.Time {
		r := s.row(b, i)
		if s.primed {
			s.sample(r)
			continue
		}
		s.first = append(s.first, r)
		if len(s.first) == primeRows {
			s.prime()
		}
	}
	return nil
}

// taken returns the number of samples taken so far.
func (s *sampler) taken() int64 { return s.seen + int64(len(s.first)) }

func at(x []float64, i int) float64 {
	if x == nil {
		return math.NaN()
	}
	return x[i]
}

func (s *sampler) row(b *run.Block, i int) row {
	r := row{stamp: b.Time[i], radius: at(b.Radius, i), temperature: at(b.Temperature, i)}
	if b.TimeQuantum != nil {
		r.quantum = b.TimeQuantum[i]
	}
	if b.Segment != nil {
		r.label = b.Segment[i]
	}
	deflection := math.NaN()
	switch {
	case b.DeflectionM != nil:
		deflection = b.DeflectionM[i]
	case b.DeflectionV != nil && s.channels.metrePerV != 0:
		deflection = b.DeflectionV[i] * s.channels.metrePerV
	}
	r.deflection = deflection
	if b.Force != nil {
		r.force = b.Force[i]
	} else {
		r.force = deflection * s.channels.forcePerM
	}
	switch {
	case b.Height != nil:
		r.height = b.Height[i]
	case b.Drive != nil && !math.IsNaN(deflection):
		r.height = b.Drive[i] - deflection
	case b.Drive != nil:
		r.height = b.Drive[i] - r.force/s.channels.forcePerM
	default:
		r.height = math.NaN()
	}
	if math.IsNaN(r.radius) && b.Area != nil && !math.IsNaN(b.Area[i]) {
		r.radius = math.Sqrt(b.Area[i] / math.Pi)
	}
	return r
}

// prime learns the sampling interval and the scatter of the height from the
// first rows, and then takes them.
func (s *sampler) prime() {
	s.primed = true
	if len(s.first) == 0 {
		return
	}
	stamps := make([]float64, len(s.first))
	heights := make([]point, 0, len(s.first))
	for i, r := range s.first {
		stamps[i] = r.stamp
		if !math.IsNaN(r.height) {
			heights = append(heights, point{h: r.height})
		}
	}
	s.time = newTimebase(stamps)
	s.perPoint = 1
	if s.time.step > 0 {
		rate := math.Max(maxPointRate, 64*s.header.DriveFrequencyHz)
		s.perPoint = max(1, int(1/(s.time.step*rate)))
	}
	s.segments = newSegmenter(s.settings, s.time.step*float64(s.perPoint), heights)
	s.label = s.first[0].label
	for _, r := range s.first {
		s.sample(r)
	}
	s.first = nil
}

// sample takes one row whose time base is known.
func (s *sampler) sample(r row) {
	t, gap := s.time.next(r.stamp, r.quantum)
	if s.seen == 0 {
		s.fromS = t
	}
	s.toS = t
	s.seen++
	if gap || r.label != s.label {
		s.flush()
	}
	if r.label != s.label {
		s.segments.cut(t)
		s.label = r.label
	}
	if s.header.Kind == run.KindThermal {
		if !math.IsNaN(r.deflection) {
			s.spectrum.Add(r.deflection)
		}
		return
	}
	s.clip.add(t, r.force)
	if math.IsNaN(r.height) || math.IsNaN(r.force) {
		return // a thermal record has no height: there is nothing to segment
	}
	s.acc.t += t
	s.acc.h += r.height
	s.acc.f += r.force
	s.acc.w++
	if int(s.acc.w) == s.perPoint {
		s.flush()
	}
	if !math.IsNaN(r.radius) {
		s.images.add(t, r.height, r.radius)
	}
}

// flush hands over the point being gathered, also where it is not full, so
// that no point spans a gap.
func (s *sampler) flush() {
	if s.acc.w == 0 {
		return
	}
	w := s.acc.w
	s.segments.add(point{t: s.acc.t / w, h: s.acc.h / w, f: s.acc.f / w, w: w})
	s.acc = point{}
}

func (s *sampler) finish() {
	if !s.primed {
		s.prime()
	}
	if s.segments == nil {
		return
	}
	s.flush()
	s.segments.cut(s.toS)
}

// clipWatch looks for a force that stands still at its largest or smallest
// value, sample for sample, as a saturated sensor or amplifier makes it.
type clipWatch struct {
	n        int64
	low, top extreme
}

// extreme follows one end of the range.
type extreme struct {
	value        float64
	from, to     float64
	count        int64
	run, longest int64
	last         bool
}

func (c *clipWatch) add(t, f float64) {
	if c.n == 0 {
		c.low = extreme{value: f}
		c.top = extreme{value: f}
	}
	c.n++
	c.top.add(t, f, f > c.top.value)
	c.low.add(t, f, f < c.low.value)
}

func (e *extreme) add(t, f float64, beyond bool) {
	if beyond {
		*e = extreme{value: f}
	}
	if f != e.value {
		e.last = false
		return
	}
	if e.count == 0 {
		e.from = t
	}
	e.to = t
	e.count++
	if !e.last {
		e.run = 0
	}
	e.run++
	e.last = true
	e.longest = max(e.longest, e.run)
}

// clippedRun is the shortest uninterrupted stretch of one and the same extreme
// value that noise cannot make: with two equally likely neighbouring codes it
// would come once in 2^10 samples at an extreme that is not saturated.
const clippedRun = 10

// clips returns what stands still. zero and noise tell the baseline: standing
// still there (a force exported as exactly 0) is not saturation.
func (c *clipWatch) clips(zero, noise float64) []run.Clip {
	if c.n < 2*clippedRun {
		return nil
	}
	if c.low.value == c.top.value {
		return []run.Clip{{Channel: "force", Interval: run.Interval{FromS: c.top.from, ToS: c.top.to},
			Samples: c.n, Longest: c.n, Fraction: 1, Value: c.top.value, Dead: true}}
	}
	var out []run.Clip
	for _, e := range []extreme{c.low, c.top} {
		if e.longest < clippedRun || math.Abs(e.value-zero) <= 6*noise || math.Abs(e.value-zero) <= 1e-3*(c.top.value-c.low.value) {
			continue
		}
		out = append(out, run.Clip{Channel: "force", Interval: run.Interval{FromS: e.from, ToS: e.to},
			Samples: e.count, Longest: e.longest, Fraction: float64(e.count) / float64(c.n), Value: e.value})
	}
	return slices.Clip(out)
}
