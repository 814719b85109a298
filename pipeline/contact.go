package pipeline

import (
	"math"
	"slices"

	"platen/pipeline/harmonic"
	"platen/pipeline/run"
	"platen/pipeline/squeeze"
)

// contact is the first touch of plate and cell.
type contact struct {
	time   float64 // s
	height float64 // m, plate separation at the touch: the cell's diameter
	u      float64 // m, from the scatter of the fit only
}

// findContact looks, on the approaches in order, for the height from which the
// force rises as that of a squeezed round cell. It returns nil where none
// does.
func findContact(c *squeeze.Curve, tracks []*track) *contact {
	for i, t := range tracks {
		if t.mode != run.Approach || t.open {
			continue
		}
		var before []point
		if i > 0 && tracks[i-1].mode == run.Hold {
			before = tracks[i-1].reduced(512)
		}
		if k := fitContact(c, before, t.reduced(1024)); k != nil {
			return k
		}
	}
	return nil
}

// fitContact fits the force on the way down with
//
//	F = b0 + b1 t + f(h/D) (g0 + g1 ln A(h/D)),  D the unknown diameter,
//
// f and A of the squeezed shape (zero for h > D): a tension that grows with
// area. For given D this is linear; D is found by the residual sum of squares.
// Only the first part of the squeeze is used, so that what the cell does later
// (relaxation, limits of its elasticity) does not move the touch.
func fitContact(c *squeeze.Curve, before, down []point) *contact {
	guess, ok := firstRise(before, down)
	if !ok {
		return nil
	}
	var pts []point
	pts = append(pts, before...)
	for _, p := range down {
		if p.h > 0.8*guess {
			pts = append(pts, p)
		}
	}
	if len(pts) < 16 {
		return nil
	}
	rss := func(d float64) (float64, *harmonic.Solution) {
		acc := harmonic.NewAccumulator(4, 1)
		t0 := down[0].t
		for _, p := range pts {
			eta := p.h / d
			f := c.Force(eta)
			acc.Add([]float64{1, p.t - t0, f, f * c.LnArea(eta)}, p.w, []float64{p.f})
		}
		sol, err := acc.Solve()
		if err != nil {
			return math.Inf(1), nil
		}
		return sol.RSS[0], sol
	}
	lo, hi := 0.88*guess, math.Min(1.25*guess, math.Max(down[0].h, guess))
	const steps = 48
	best, bestRSS := math.NaN(), math.Inf(1)
	for i := 0; i <= steps; i++ {
		d := lo + (hi-lo)*float64(i)/steps
		if r, _ := rss(d); r < bestRSS {
			best, bestRSS = d, r
		}
	}
	if math.IsNaN(best) {
		return nil
	}
	width := (hi - lo) / steps
	best = goldenMinimum(func(d float64) float64 { r, _ := rss(d); return r }, best-width, best+width)
	bestRSS, sol := rss(best)
	if sol == nil || sol.Coefficients[0][2] <= 0 {
		return nil // the force falls where it should rise
	}
	// Standard uncertainty from the curvature of the residual sum of squares:
	// it grows by one residual variance at one standard uncertainty.
	variance := bestRSS / float64(len(pts)-5)
	step := width / 2
	above, _ := rss(best + step)
	below, _ := rss(best - step)
	curvature := (above + below - 2*bestRSS) / (step * step)
	if !(curvature > 0) {
		return nil
	}
	k := &contact{height: best, u: math.Sqrt(2 * variance / curvature)}
	k.time = down[len(down)-1].t
	for i, p := range down {
		if p.h <= best {
			k.time = p.t
			if i > 0 {
				if q := down[i-1]; q.h > p.h {
					k.time = q.t + (p.t-q.t)*(q.h-best)/(q.h-p.h)
				}
			}
			break
		}
	}
	return k
}

// firstRise finds roughly the height at which the force leaves its baseline
// for good: means of eight points stay above the baseline by four standard
// deviations of such means, and end well above it.
func firstRise(before, down []point) (height float64, ok bool) {
	const group = 8
	if len(down) < 4*group {
		return 0, false
	}
	type mean struct{ h, f float64 }
	var free []float64
	for i := 0; i+group <= len(before); i += group {
		free = append(free, meanForce(before[i:i+group]))
	}
	var means []mean
	for i := 0; i+group <= len(down); i += group {
		g := down[i : i+group]
		means = append(means, mean{h: g[0].h, f: meanForce(g)})
	}
	for _, m := range means[:max(4, len(means)/10)] {
		free = append(free, m.f)
	}
	slices.Sort(free)
	zero := free[len(free)/2]
	dev := make([]float64, len(free))
	for i, f := range free {
		dev[i] = math.Abs(f - zero)
	}
	slices.Sort(dev)
	// 1.4826 turns the median absolute deviation of normal values into their
	// standard deviation.
	scatter := 1.4826 * dev[len(dev)/2]
	last := means[len(means)-1].f
	if last-zero <= 8*scatter || last <= zero {
		return 0, false
	}
	limit := zero + math.Max(4*scatter, 0.01*(last-zero))
	for i := len(means) - 1; i >= 0; i-- {
		if means[i].f <= limit {
			if i+1 >= len(means) {
				return 0, false
			}
			return means[i+1].h, true
		}
	}
	return 0, false // above the baseline from the start: the touch is not in the record
}

func meanForce(ps []point) float64 {
	var s, w float64
	for _, p := range ps {
		s += p.w * p.f
		w += p.w
	}
	return s / w
}

// goldenMinimum finds the minimum of f on [a, b] by golden-section search, to
// a hundred-thousandth of the interval.
func goldenMinimum(f func(float64) float64, a, b float64) float64 {
	const ratio = 0.6180339887498949 // (sqrt(5)-1)/2
	c, d := b-ratio*(b-a), a+ratio*(b-a)
	fc, fd := f(c), f(d)
	for stop := 1e-5 * (b - a); b-a > stop; {
		if fc < fd {
			b, d, fd = d, c, fc
			c = b - ratio*(b-a)
			fc = f(c)
		} else {
			a, c, fc = c, d, fd
			d = a + ratio*(b-a)
			fd = f(d)
		}
	}
	return (a + b) / 2
}
