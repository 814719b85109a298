// Package phantom simulates a cell under a compression rig. Radius, tension,
// viscoelastic moduli and every fault of the rig are known exactly, so that an
// analysis can be held against the truth.
//
// Ordinary gives the description of one good run; Simulate turns a description
// into a Recording, which streams the samples (Blocks) or the text that the
// instrument would export (WriteTo, Export). Session gives the runs of a
// rehearsal.
//
// # Model
//
// The cell keeps the ideal shape of package squeeze. With L = ln(A/A_sphere)
// from the plate separation h and the sphere radius Rs, its tension is that of
// an elastic element beside Maxwell arms,
//
//	gamma = gamma0 + K_inf L + sum s_j,   ds_j/dt + s_j/tau_j = K_j dL/dt,
//
// and the plates feel F = gamma Rs Force(h/2Rs). The arms are integrated
// exactly for an L that is straight between samples, so the error is of second
// order in the sample interval. The complex modulus that relates the amplitudes
// of gamma and L is therefore known (Ferry, Viscoelastic Properties of
// Polymers, 1980, ch. 3; from memory):
//
//	K*(w) = K_inf + sum K_j i w tau_j/(1 + i w tau_j).
//
// A shrinking cell loses volume at a constant relative rate; A_sphere shrinks
// with it, that is, the cell folds away the surface it no longer needs. An
// adhering cell holds the plate back on the way up through a neck of constant
// stiffness until it breaks.
//
// Left out: drag of the medium, instrument lag, plate compliance, a cell that
// is not round.
//
// Invariants kept here:
//   - A Recording is a pure function of its Spec: every pass gives the same
//     bytes. Randomness comes from Spec.Seed alone, each source of noise from a
//     stream of its own, so that changing one leaves the others as they were.
//   - Memory is bounded whatever the length of the run: a pass holds one block.
package phantom

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"

	"platen/pipeline/run"
)

// Spec describes a run completely.
type Spec struct {
	Name string // of the file, without extension

	// Header is what the file says of itself. Spring constant, diameter and
	// number of samples are filled in from Rig and Protocol.
	Header run.Header

	Cell     Cell // zero: a run without a cell
	Rig      Rig
	StartM   float64 // plate separation at the start
	Protocol []Move
	Fault    Fault
	Dialect  Dialect // how WriteTo writes it
	Seed     uint64

	// Expect names the rules that should trip, none for a clean run.
	Expect []string
}

// Cell is a round cell of known properties.
type Cell struct {
	RadiusM      float64 // of the uncompressed sphere, at the start
	TensionNPerM float64 // at the area of the sphere
	ElasticNPerM float64 // K_inf, the area modulus at zero frequency
	Arms         []Arm

	ShrinkPerS float64 // relative loss of volume per second

	NeckNPerM float64 // stiffness of the neck that an adhering cell draws
	PullN     float64 // at which the neck breaks; 0: no adhesion
}

// Arm is a Maxwell element: a spring in series with a dashpot.
type Arm struct {
	StiffnessNPerM float64
	TimeS          float64 // relaxation time
}

// Modulus returns the complex area modulus K*(f) in N/m. Its imaginary part is
// positive: the tension leads the strain.
func (c Cell) Modulus(frequencyHz float64) complex128 {
	k := complex(c.ElasticNPerM, 0)
	for _, a := range c.Arms {
		x := complex(0, 2*math.Pi*frequencyHz*a.TimeS)
		k += complex(a.StiffnessNPerM, 0) * x / (1 + x)
	}
	return k
}

// radiusAt returns the sphere radius at time t.
func (c Cell) radiusAt(t float64) float64 {
	if c.ShrinkPerS == 0 {
		return c.RadiusM
	}
	return c.RadiusM * math.Exp(-c.ShrinkPerS*t/3)
}

// Rig is the instrument. Its zero value, but for the rate, measures without
// error.
type Rig struct {
	RateHz float64

	// The force is exported as declared spring constant times deflection, so
	// it is wrong by declared over true. 0: none declared, no error.
	SpringConstantNPerM  float64
	SpringConstantUNPerM float64
	SpringErrorRel       float64 // true = declared (1 + error)

	ForceNoiseN float64 // white, rms of a sample
	// Flicker noise of the force: power spectral density level^2 (1 Hz/f)
	// between the two frequencies, flat below, 1/f^2 above; rms
	// level sqrt(ln(to/from)) with the level in N per root hertz at 1 Hz.
	FlickerNPerRootHz             float64
	FlickerFromHz, FlickerToHz    float64
	ForceOffsetN, ForceDriftNPerS float64 // baseline at the start, and its slope

	HeightNoiseM  float64 // white, rms of a sample
	HeightOffsetM float64 // measured minus true

	ImageEveryS    float64 // 0: no imaging
	RadiusNoiseM   float64 // rms of an image
	RadiusErrorRel float64 // imaged = true (1 + error)

	DiameterUM     float64 // standard uncertainty of the declared diameter; 0: none declared
	DiameterErrorM float64 // declared minus true
}

// Fault is what goes wrong in a run. Times count from its start; 0: does not
// happen.
type Fault struct {
	LostAtS   float64 // the cell slips from under the plate
	ClipAtN   float64 // the sensor does not follow beyond plus and minus this force
	GapFromS  float64
	GapS      float64 // samples missing for this long
	StopAtS   float64 // the file ends here, whatever it declared
	ByteCount int     // the file is this many meaningless bytes
}

// lossS is the time that a cell takes to slip out.
const lossS = 0.1

// OrdinaryRig returns a rig with ordinary noise at 1 kHz, its systematic errors
// drawn by the seed from normal distributions of the uncertainties declared
// (spring constant, diameter), of 30 nm (height) and of 0.3 % (radius). The
// figures are common practice, no source.
func OrdinaryRig(seed uint64) Rig {
	return drawnRig(seed, math.Inf(1))
}

// drawnRig is OrdinaryRig with no error beyond so many standard deviations.
func drawnRig(seed uint64, most float64) Rig {
	rng := rand.New(rand.NewPCG(seed, streamRig))
	draw := func(sd float64) float64 {
		return sd * math.Max(-most, math.Min(most, rng.NormFloat64()))
	}
	r := Rig{
		RateHz:               1000,
		SpringConstantNPerM:  0.21,
		SpringConstantUNPerM: 0.01,
		ForceNoiseN:          30e-12,
		FlickerNPerRootHz:    2e-12,
		FlickerFromHz:        0.01,
		FlickerToHz:          100,
		HeightNoiseM:         2e-9,
		ImageEveryS:          0.1,
		RadiusNoiseM:         40e-9,
		DiameterUM:           0.3e-6,
	}
	r.SpringErrorRel = draw(r.SpringConstantUNPerM / r.SpringConstantNPerM)
	r.HeightOffsetM = draw(30e-9)
	r.RadiusErrorRel = draw(0.003)
	r.DiameterErrorM = draw(r.DiameterUM)
	r.ForceOffsetN = draw(0.2e-9)
	r.ForceDriftNPerS = draw(1e-12)
	return r
}

// OrdinaryCell draws a cell by the seed: radius 9 to 10 um; squeezed to 0.6 of
// its height a tension of 0.4 to 1 mN/m; storage modulus at 1 Hz of 5 to
// 17 mN/m and loss modulus 0.2 to 0.5 of it. It has settled within 8 s.
func OrdinaryCell(seed uint64) Cell {
	rng := rand.New(rand.NewPCG(seed, streamCell))
	between := func(lo, hi float64) float64 { return lo + (hi-lo)*rng.Float64() }
	c := Cell{
		RadiusM:      between(9e-6, 10e-6),
		TensionNPerM: between(0.25e-3, 0.5e-3),
		ElasticNPerM: between(3e-3, 7e-3),
	}
	c.Arms = []Arm{
		{between(1, 1.3) * c.ElasticNPerM, between(0.05, 0.1)},
		{between(0.5, 1) * c.ElasticNPerM, between(0.25, 0.5)},
		{0.3 * c.ElasticNPerM, 1},
	}
	return c
}

// Ordinary returns the description of a clean run with ordinary noise: an
// OrdinaryCell under an OrdinaryRig in the Standard protocol.
func Ordinary(seed uint64) Spec {
	s := Spec{
		Name:   fmt.Sprintf("phantom-%d", seed),
		Header: run.Header{Kind: run.KindCell, Cell: fmt.Sprintf("phantom-%d", seed)},
		Cell:   OrdinaryCell(seed),
		Rig:    OrdinaryRig(seed),
		Seed:   seed,
	}
	s.StartM, s.Protocol = Standard(s.Cell.RadiusM)
	return s
}

// validate reports everything that cannot be simulated.
func (s Spec) validate() error {
	var errs []error
	bad := func(what string, v float64, want string) {
		errs = append(errs, fmt.Errorf("%s = %g: want %s", what, v, want))
	}
	positive := func(what string, v float64) {
		if !(v > 0) || math.IsInf(v, 0) {
			bad(what, v, "more than 0")
		}
	}
	notNegative := func(what string, v float64) {
		if !(v >= 0) || math.IsInf(v, 0) {
			bad(what, v, "0 or more")
		}
	}
	finite := func(what string, v float64) {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			bad(what, v, "a finite number")
		}
	}
	if s.Fault.ByteCount < 0 {
		bad("Fault.ByteCount", float64(s.Fault.ByteCount), "0 or more")
	}
	if s.Fault.ByteCount > 0 {
		return errors.Join(errs...)
	}
	notNegative("Cell.RadiusM", s.Cell.RadiusM)
	if s.Cell.RadiusM > 0 {
		positive("Cell.TensionNPerM", s.Cell.TensionNPerM)
	}
	notNegative("Cell.ElasticNPerM", s.Cell.ElasticNPerM)
	for i, a := range s.Cell.Arms {
		notNegative(fmt.Sprintf("Cell.Arms[%d].StiffnessNPerM", i), a.StiffnessNPerM)
		positive(fmt.Sprintf("Cell.Arms[%d].TimeS", i), a.TimeS)
	}
	finite("Cell.ShrinkPerS", s.Cell.ShrinkPerS)
	notNegative("Cell.PullN", s.Cell.PullN)
	if s.Cell.PullN > 0 {
		positive("Cell.NeckNPerM", s.Cell.NeckNPerM)
	}

	r := s.Rig
	positive("Rig.RateHz", r.RateHz)
	for _, v := range []struct {
		what string
		v    float64
	}{
		{"Rig.SpringConstantNPerM", r.SpringConstantNPerM}, {"Rig.SpringConstantUNPerM", r.SpringConstantUNPerM},
		{"Rig.ForceNoiseN", r.ForceNoiseN}, {"Rig.FlickerNPerRootHz", r.FlickerNPerRootHz},
		{"Rig.HeightNoiseM", r.HeightNoiseM}, {"Rig.ImageEveryS", r.ImageEveryS},
		{"Rig.RadiusNoiseM", r.RadiusNoiseM}, {"Rig.DiameterUM", r.DiameterUM},
		{"Fault.LostAtS", s.Fault.LostAtS}, {"Fault.ClipAtN", s.Fault.ClipAtN},
		{"Fault.GapFromS", s.Fault.GapFromS}, {"Fault.GapS", s.Fault.GapS}, {"Fault.StopAtS", s.Fault.StopAtS},
	} {
		notNegative(v.what, v.v)
	}
	positive("1 + Rig.SpringErrorRel", 1+r.SpringErrorRel)
	positive("1 + Rig.RadiusErrorRel", 1+r.RadiusErrorRel)
	for _, v := range []struct {
		what string
		v    float64
	}{
		{"Rig.ForceOffsetN", r.ForceOffsetN}, {"Rig.ForceDriftNPerS", r.ForceDriftNPerS},
		{"Rig.HeightOffsetM", r.HeightOffsetM}, {"Rig.DiameterErrorM", r.DiameterErrorM},
	} {
		finite(v.what, v.v)
	}
	if r.FlickerNPerRootHz > 0 {
		positive("Rig.FlickerFromHz", r.FlickerFromHz)
		if !(r.FlickerToHz >= 2*r.FlickerFromHz) || r.FlickerToHz > r.RateHz/2 {
			bad("Rig.FlickerToHz", r.FlickerToHz, "at least twice FlickerFromHz and at most half the rate")
		}
	}
	positive("StartM", s.StartM)
	if len(s.Protocol) == 0 {
		errs = append(errs, errors.New("Protocol is empty: want one move or more"))
	}
	for i, m := range s.Protocol {
		what := fmt.Sprintf("Protocol[%d].", i)
		switch {
		case m.FrequencyHz != 0:
			positive(what+"FrequencyHz", m.FrequencyHz)
			positive(what+"Cycles", m.Cycles)
			notNegative(what+"AmplitudeM", m.AmplitudeM)
			if m.FrequencyHz > r.RateHz/4 {
				bad(what+"FrequencyHz", m.FrequencyHz, "at most a quarter of the rate")
			}
		case m.SpeedMPerS != 0:
			positive(what+"SpeedMPerS", m.SpeedMPerS)
			positive(what+"ToM", m.ToM)
		default:
			positive(what+"DurationS", m.DurationS)
		}
	}
	return errors.Join(errs...)
}
