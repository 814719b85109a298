package pipeline

import (
	"math"
	"slices"

	"platen/pipeline/run"
)

// timebase gives each sample its time. Exporters round their stamps (seven
// digits at 2 kHz repeat from t = 1000 s on), so where the stamps agree with
// an even rate within their own rounding, time is taken from the row number;
// the rate is the one that all stamps so far allow. Where they do not agree,
// the stamps are used as they are.
type timebase struct {
	step float64 // s, usual interval between samples, from the first rows

	even         bool
	t0, q0       float64 // anchor: stamp and its rounding
	n            int64   // rows since the anchor
	lo, hi       float64 // the intervals that all stamps since the first anchor allow
	last         float64 // time given to the last sample
	lastStamp    float64
	shift        float64 // added to stamps after a step backward
	row          int64
	started      bool
	sampling     run.Sampling
	longestGap   float64
	firstBackSet bool
}

// primeRows is the number of rows looked at before the first sample is given
// its time; short runs make do with fewer.
const primeRows = 64

// newTimebase takes the first stamps of a run (at least two) to learn the
// usual interval: their median, which single gaps do not move.
func newTimebase(stamps []float64) *timebase {
	var d []float64
	for i := 1; i < len(stamps); i++ {
		if x := stamps[i] - stamps[i-1]; x > 0 {
			d = append(d, x)
		}
	}
	tb := &timebase{even: true, hi: math.Inf(1)}
	if len(d) > 0 {
		slices.Sort(d)
		tb.step = d[len(d)/2]
		// Coarsely rounded stamps repeat, and then jump: the mean interval is
		// nearer the truth than the median of the jumps.
		if len(d) < (len(stamps)-1)*3/4 {
			tb.step = (stamps[len(stamps)-1] - stamps[0]) / float64(len(stamps)-1)
		}
	}
	tb.sampling.Even = true
	return tb
}

// next returns the time of the next sample, stamped t with rounding unit q.
// gap tells that samples are missing before it.
func (tb *timebase) next(stamp, q float64) (t float64, gap bool) {
	stamp += tb.shift
	row := tb.row
	tb.row++
	if !tb.started {
		tb.started = true
		tb.anchor(stamp, q)
		tb.last, tb.lastStamp = stamp, stamp
		return stamp, false
	}
	tb.n++
	// A printed stamp lies within one unit of the true one, whether the
	// exporter rounds or cuts off; the small term admits the binary rounding
	// of exact stamps.
	tol := q + tb.q0 + 1e-6*tb.step + 4e-16*math.Abs(stamp)
	if tb.even {
		n := float64(tb.n)
		lo := math.Max(tb.lo, (stamp-tb.t0-tol)/n)
		hi := math.Min(tb.hi, (stamp-tb.t0+tol)/n)
		if lo <= hi {
			tb.lo, tb.hi = lo, hi
			t = tb.t0 + n*(lo+hi)/2
			if !(t > tb.last) { // the estimate of the rate moved
				t = math.Nextafter(tb.last, math.Inf(1))
			}
			tb.last, tb.lastStamp = t, stamp
			return t, false
		}
	}
	d := stamp - tb.lastStamp
	switch {
	case d < -(q+1e-9*tb.step) || (d <= 0 && q == 0) || (d <= 0 && !tb.even && -d > q):
		// The clock of the stamps went back (or stood still where the stamps
		// are fine enough to tell): rows are in order, so go on one step on.
		tb.sampling.Backward++
		if !tb.firstBackSet {
			tb.firstBackSet = true
			tb.sampling.FirstBackS, tb.sampling.FirstBackAt = stamp-tb.shift, row
		}
		t = tb.last + tb.step
		tb.shift += t - stamp
		stamp = t
		tb.anchor(stamp, q)
	case d > tb.gapFrom()+tol:
		gap = true
		tb.sampling.Gaps++
		tb.sampling.MissingS += d - tb.step
		if d > tb.longestGap {
			tb.longestGap = d
			tb.sampling.Longest = run.Interval{FromS: tb.last, ToS: stamp}
		}
		t = stamp
		tb.anchor(stamp, q)
	default:
		// Uneven, but neither a gap nor a step back: software-timed stamps.
		if tb.even {
			tb.even = false
			tb.sampling.Even = false
		}
		t = stamp
	}
	if !(t > tb.last) {
		t = tb.last + 1e-3*tb.step
	}
	tb.last, tb.lastStamp = t, stamp
	return t, gap
}

func (tb *timebase) gapFrom() float64 {
	if tb.even {
		return 1.5 * tb.step
	}
	return 2.5 * tb.step // unevenly timed samples come late now and then
}

func (tb *timebase) anchor(t, q float64) { tb.t0, tb.q0, tb.n = t, q, 0 }

// interval returns the sampling interval in s, 0 while unknown.
func (tb *timebase) interval() float64 {
	if tb.even && tb.hi < math.Inf(1) && tb.lo > 0 {
		return (tb.lo + tb.hi) / 2
	}
	return tb.step
}
