package phantom

import (
	"math"
	"math/rand/v2"
)

// Streams of random numbers, one a purpose: the second word of the PCG seed.
const (
	streamRig = iota + 1
	streamCell
	streamForce
	streamFlicker
	streamHeight
	streamRadius
	streamBytes
	streamSession
)

// white is Gaussian noise, independent from sample to sample.
type white struct {
	rng *rand.Rand
	rms float64
}

func newWhite(seed, stream uint64, rms float64) white {
	return white{rand.New(rand.NewPCG(seed, stream)), rms}
}

func (w white) next() float64 {
	if w.rms == 0 {
		return 0
	}
	return w.rms * w.rng.NormFloat64()
}

// flicker is a sum of first-order low-pass filtered white noises whose corner
// frequencies stand an octave or less apart and whose variances are equal:
// each adds S(f) = (2/pi) v fc/(fc^2 + f^2), which sums to v/(f ln r) for
// corners a factor r apart (M. S. Keshner, Proc. IEEE 70 (1982) 212, from
// memory).
type flicker struct {
	rng          *rand.Rand
	decay, drive []float64
	state        []float64
}

func newFlicker(seed uint64, r Rig) *flicker {
	f := &flicker{rng: rand.New(rand.NewPCG(seed, streamFlicker))}
	if r.FlickerNPerRootHz == 0 {
		return f
	}
	n := math.Ceil(math.Log2(r.FlickerToHz / r.FlickerFromHz))
	ratio := math.Log(r.FlickerToHz/r.FlickerFromHz) / n // ln r
	sd := r.FlickerNPerRootHz * math.Sqrt(ratio)         // times root 1 Hz
	for j := range int(n) {
		corner := r.FlickerFromHz * math.Exp(ratio*(float64(j)+0.5))
		x := 2 * math.Pi * corner / r.RateHz
		f.decay = append(f.decay, math.Exp(-x))
		f.drive = append(f.drive, sd*math.Sqrt(-math.Expm1(-2*x)))
		f.state = append(f.state, sd*f.rng.NormFloat64()) // stationary from the start
	}
	return f
}

func (f *flicker) next() float64 {
	var sum float64
	for j := range f.state {
		f.state[j] = f.state[j]*f.decay[j] + f.drive[j]*f.rng.NormFloat64()
		sum += f.state[j]
	}
	return sum
}
