package harmonic

import (
	"errors"
	"fmt"
	"math"
)

// Points is one segment of a run: point i is the mean of W[i] consecutive raw
// samples centred at T[i] (s); raw samples are Dt (s) apart. T does not go back.
// Dt = 0 says that there is no even time base; a point then counts as a single
// reading of weight W.
type Points struct {
	T, W []float64
	Dt   float64
}

// mostSamples is the largest count that float64 holds exactly.
const mostSamples = 1 << 53

// check fails on points that no fit can use.
func (p Points) check() error {
	if len(p.T) != len(p.W) {
		return fmt.Errorf("%d times and %d weights: want as many", len(p.T), len(p.W))
	}
	if len(p.T) < 2 {
		return fmt.Errorf("%d points: need at least 2", len(p.T))
	}
	if !(p.Dt >= 0) || math.IsInf(p.Dt, 0) {
		return fmt.Errorf("sampling step %v s: want a finite number, 0 where there is no even time base", p.Dt)
	}
	for i, t := range p.T {
		if t-t != 0 {
			return fmt.Errorf("time of point %d is %v", i, t)
		}
		if w := p.W[i]; !(w >= 1 && w <= mostSamples) {
			return fmt.Errorf("weight of point %d is %v: want the number of raw samples, 1 to 2^53", i, w)
		}
		if i > 0 && t < p.T[i-1] {
			return fmt.Errorf("time of point %d (%v s) is before that of the point before (%v s)", i, t, p.T[i-1])
		}
	}
	if from, to := p.bounds(); p.T[0] == p.T[len(p.T)-1] || to-from-(to-from) != 0 {
		return fmt.Errorf("times from %v to %v s: want a finite duration", p.T[0], p.T[len(p.T)-1])
	}
	return nil
}

// bounds returns the stretch of time that the points stand for: the raw samples
// with half a step on either side.
func (p Points) bounds() (from, to float64) {
	n := len(p.T)
	from, to = p.T[0], p.T[n-1]
	if p.Dt > 0 {
		return from - p.W[0]*p.Dt/2, to + p.W[n-1]*p.Dt/2
	}
	half := (to - from) / float64(n-1) / 2
	return from - half, to + half
}

// Model says what is fitted beside the fundamental.
type Model struct {
	Trend     int // degree of the trend: 0, 1 or 2
	Harmonics int // 1: the fundamental alone; 3: up to the third
}

func (m Model) check() error {
	if m.Trend < 0 || m.Trend > 2 {
		return fmt.Errorf("trend of degree %d: want 0, 1 or 2", m.Trend)
	}
	if m.Harmonics < 1 {
		return errors.New("no harmonic to fit: Harmonics must be at least 1, the fundamental")
	}
	return nil
}

// columns is the number of basis functions.
func (m Model) columns() int { return 1 + m.Trend + 2*m.Harmonics }

// basis evaluates the basis at points: Legendre polynomials of the time within
// the segment, then cos and sin of each harmonic about its centre.
type basis struct {
	Model
	centre, half float64 // s
	omega        float64 // rad/s
	dt           float64 // s

	width float64   // the W that factor and slope belong to
	d     []float64 // Dirichlet factors
	dd    []float64 // their derivatives by omega, s
}

func newBasis(p Points, freq float64, m Model) *basis {
	from, to := p.bounds()
	return &basis{
		Model: m, centre: from + (to-from)/2, half: (to - from) / 2, omega: 2 * math.Pi * freq, dt: p.Dt,
		d: make([]float64, m.Harmonics), dd: make([]float64, m.Harmonics),
	}
}

// setOmega moves the basis to another angular frequency.
func (b *basis) setOmega(omega float64) { b.omega, b.width = omega, 0 }

// average prepares the factors for points of w samples. Points of equal w
// follow one another, so this runs seldom.
func (b *basis) average(w float64) {
	b.width = w
	for i := range b.d {
		x := float64(i+1) * b.omega * b.dt / 2
		b.d[i], b.dd[i] = dirichlet(x, w)
		b.dd[i] *= float64(i+1) * b.dt / 2
	}
}

// dirichlet returns sin(wx)/(w sin x) and its derivative by x.
func dirichlet(x, w float64) (d, slope float64) {
	if w == 1 || x == 0 {
		return 1, 0
	}
	if math.Abs(w*x) < 1e-4 {
		// Taylor: the next terms are below 1e-16 and, of the slope, 1e-8 of it.
		s := (w*w - 1) / 3
		return 1 - s*x*x/2, -s * x
	}
	sx, cx := math.Sincos(x)
	sw, cw := math.Sincos(w * x)
	return sw / (w * sx), (w*cw*sx - sw*cx) / (w * sx * sx)
}

// at writes the trend and harmonic columns for a point.
func (b *basis) at(t, w float64, out []float64) {
	if w != b.width {
		b.average(w)
	}
	u := (t - b.centre) / b.half
	out[0] = 1
	if b.Trend >= 1 {
		out[1] = u
	}
	if b.Trend >= 2 {
		step := b.dt / b.half
		out[2] = (3*(u*u+(w*w-1)*step*step/12) - 1) / 2
	}
	s1, c1 := math.Sincos(b.omega * (t - b.centre))
	s, c := s1, c1
	h := out[1+b.Trend:]
	for k := range b.d {
		if k > 0 {
			s, c = s*c1+c*s1, c*c1-s*s1
		}
		h[2*k], h[2*k+1] = b.d[k]*c, b.d[k]*s
	}
}
