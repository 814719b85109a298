package pipeline

import (
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"platen/pipeline/run"
)

// plate builds a height record from moves, sample by sample.
type plate struct {
	rate   float64
	noise  float64
	rng    *rand.Rand
	points []point
	h      float64
}

func newPlate(rate, noise float64, seed uint64) *plate {
	return &plate{rate: rate, noise: noise, h: 22e-6, rng: rand.New(rand.NewPCG(seed, 7))}
}

func (p *plate) now() float64 { return float64(len(p.points)) / p.rate }

func (p *plate) put(h float64) {
	p.points = append(p.points, point{t: p.now(), h: h + p.noise*p.rng.NormFloat64(), w: 1})
}

func (p *plate) hold(seconds, creep float64) {
	n := int(seconds * p.rate)
	for i := range n {
		p.put(p.h + creep*float64(i)/p.rate)
	}
	p.h += creep * seconds
}

func (p *plate) ramp(to, speed float64) {
	from := p.h
	n := max(1, int(math.Abs(to-from)/speed*p.rate))
	for i := range n {
		p.put(from + (to-from)*float64(i)/float64(n))
	}
	p.h = to
}

func (p *plate) oscillate(f, amplitude, cycles float64) {
	n := int(cycles / f * p.rate)
	for i := range n {
		p.put(p.h + amplitude*math.Sin(2*math.Pi*f*float64(i)/p.rate))
	}
}

func segmented(p *plate) []*track {
	g := newSegmenter(Defaults(), 1/p.rate, p.points[:min(len(p.points), primeRows)])
	for _, x := range p.points {
		g.add(x)
	}
	g.cut(p.now())
	return g.tracks
}

func modes(ts []*track) string {
	var s []string
	for _, t := range ts {
		s = append(s, string(t.mode))
	}
	return strings.Join(s, " ")
}

// A usual session protocol over the range of drives in use (0.01 to 10 Hz,
// common practice, no source), at rates from 20 samples a cycle up.
func TestSegmentsOfAUsualRun(t *testing.T) {
	for _, f := range []float64{0.02, 0.05, 0.2, 1, 3, 10} {
		for _, amplitude := range []float64{80e-9, 200e-9, 600e-9} {
			for _, perCycle := range []float64{20, 100, 1000} {
				rate := f * perCycle
				if rate < 20 || rate > 2000 {
					continue
				}
				t.Run(fmt.Sprintf("%g Hz %g nm %g a cycle", f, amplitude*1e9, perCycle), func(t *testing.T) {
					p := newPlate(rate, 1.5e-9, uint64(perCycle))
					cycles := 6.0
					p.hold(3, 0)
					p.ramp(12e-6, 1e-6)
					from := p.now()
					p.hold(5, -2e-9)
					start := p.now()
					p.oscillate(f, amplitude, cycles)
					end := p.now()
					p.hold(math.Max(2, 1/f), 0)
					p.ramp(23e-6, 2e-6)
					p.hold(3, 0)
					ts := segmented(p)
					if got, want := modes(ts), "hold approach hold oscillation hold retract hold"; got != want {
						t.Fatalf("got %s\nwant %s", got, want)
					}
					// Where the start of the oscillation lies is known to the
					// time it takes to move by a few of the smallest moves.
					tol := 0.15/f + 3/rate + 0.05
					if d := math.Abs(ts[3].fromS - start); d > tol {
						t.Errorf("oscillation found %.3g s off its start (allowed %.3g)", d, tol)
					}
					if d := math.Abs(ts[3].toS - end); d > tol+0.1/f {
						t.Errorf("oscillation ends %.3g s off", d)
					}
					if d := math.Abs(ts[2].fromS - from); d > 0.3 {
						t.Errorf("hold found %.3g s off its start", d)
					}
					if r := ts[3].drive / f; r < 0.8 || r > 1.25 {
						t.Errorf("drive %.3g Hz, want %.3g", ts[3].drive, f)
					}
					var w float64
					for _, x := range ts {
						for _, q := range x.points {
							w += q.w
						}
					}
					if int(w) != len(p.points) {
						t.Errorf("%d samples went in, %g came out", len(p.points), w)
					}
				})
			}
		}
	}
}

func TestSegmentsOfSteppedProtocols(t *testing.T) {
	cases := []struct {
		name string
		make func(p *plate)
		want string
	}{
		{"three heights", func(p *plate) {
			p.hold(2, 0)
			for _, h := range []float64{16e-6, 14e-6, 12e-6} {
				p.ramp(h, 1e-6)
				p.hold(4, 0)
				p.oscillate(1, 250e-9, 5)
				p.hold(2, 0)
			}
			p.ramp(23e-6, 2e-6)
		}, "hold approach hold oscillation hold approach hold oscillation hold approach hold oscillation hold retract"},
		{"three frequencies, one after the other", func(p *plate) {
			p.ramp(13e-6, 1e-6)
			p.hold(3, 0)
			p.oscillate(0.5, 300e-9, 5)
			p.oscillate(1, 300e-9, 8)
			p.oscillate(3, 300e-9, 12)
			p.hold(2, 0)
		}, "approach hold oscillation oscillation oscillation hold"},
		{"only a hold, creeping", func(p *plate) { p.hold(120, -3e-9) }, "hold"},
		{"two cycles only", func(p *plate) {
			p.ramp(13e-6, 1e-6)
			p.hold(3, 0)
			p.oscillate(1, 300e-9, 2)
			p.hold(3, 0)
		}, "approach hold oscillation hold"},
		{"repeated presses are no oscillation", func(p *plate) {
			for range 3 {
				p.ramp(13e-6, 2e-6)
				p.ramp(22e-6, 2e-6)
			}
		}, "approach retract approach retract approach retract"},
		{"starts while oscillating", func(p *plate) {
			p.h = 12e-6
			p.oscillate(1, 300e-9, 8)
			p.hold(3, 0)
		}, "oscillation hold"},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			p := newPlate(500, 2e-9, 3)
			c.make(p)
			if got := modes(segmented(p)); got != c.want {
				t.Errorf("got  %s\nwant %s", got, c.want)
			}
		})
	}
}

// A day of one hold, and of one oscillation, must not grow the memory.
func TestSegmenterIsBounded(t *testing.T) {
	g := newSegmenter(Defaults(), 1e-2, nil)
	for i := range 3_000_000 {
		tm := float64(i) / 100
		g.add(point{t: tm, h: 12e-6 + 200e-9*math.Sin(2*math.Pi*tm), w: 1})
	}
	g.cut(30000)
	n := 0
	for _, x := range g.tracks {
		n += cap(x.points)
		if x.mode == run.Oscillation && x.legs > 2*maxCycles {
			t.Errorf("segment of %d half cycles", x.legs)
		}
	}
	// 16 tracks at full size, the older ones at no less than 16 points a cycle.
	if limit := 16*2*maxPoints + len(g.tracks)*2*(16*maxCycles); n > limit {
		t.Errorf("%d points kept, limit %d", n, limit)
	}
}
