package phantom

import (
	"fmt"
	"math"

	"platen/pipeline/run"
	"platen/pipeline/squeeze"
)

// Recording is a simulated run. It holds no samples: each pass makes them anew,
// the same every time. Passes may run at once.
type Recording struct {
	spec     Spec
	curve    *squeeze.Curve
	legs     []leg
	planned  int64 // samples of the whole protocol
	rows     int64 // rows that the file holds
	header   run.Header
	truth    Truth
	imageRow int64 // an image every so many samples, 0: none
}

// Simulate prepares a run. It fails, naming each, on values that cannot be
// simulated, on a plate that goes below a tenth of the cell's height, and on a
// tension that would fall to zero while the cell is squeezed.
func Simulate(s Spec) (*Recording, error) {
	if err := s.validate(); err != nil {
		return nil, fmt.Errorf("phantom: %s: %w", s.Name, err)
	}
	if err := s.Dialect.validate(); err != nil {
		return nil, fmt.Errorf("phantom: %s: %w", s.Name, err)
	}
	r := &Recording{spec: s, header: s.Header}
	if s.Fault.ByteCount > 0 {
		r.truth = Truth{Findings: s.Expect}
		return r, nil
	}
	r.curve = squeeze.NewCurve()
	r.legs = plan(s.StartM, s.Protocol)
	if len(r.legs) == 0 {
		return nil, fmt.Errorf("phantom: %s: the protocol moves nowhere: want a move of some duration", s.Name)
	}
	end := r.legs[len(r.legs)-1].to
	for i, l := range r.legs {
		// A cell that swells or shrinks is largest at one of its ends.
		if d := 2 * math.Max(s.Cell.radiusAt(l.from), s.Cell.radiusAt(l.to)); l.minM < squeeze.Lowest*d || l.minM <= 0 {
			return nil, fmt.Errorf("phantom: %s: move %d goes down to %g m: want at least %g of the cell's height, %g m", s.Name, i, l.minM, squeeze.Lowest, squeeze.Lowest*d)
		}
	}
	if n := end * s.Rig.RateHz; n > 1e9 {
		return nil, fmt.Errorf("phantom: %s: %g samples: want at most 1e9", s.Name, n)
	}
	r.planned = int64(math.Floor(end*s.Rig.RateHz*(1+1e-12))) + 1
	if e := s.Rig.ImageEveryS; e > 0 {
		r.imageRow = max(1, int64(math.Round(e*s.Rig.RateHz)))
	}
	declared := int64(0)
	for i := range r.planned {
		written, stopped := r.written(i)
		if written {
			declared++
		}
		if written && !stopped {
			r.rows++
		}
	}

	h := &r.header
	if k := s.Rig.SpringConstantNPerM; k > 0 {
		h.SpringConstantNPerM = run.Known(k, s.Rig.SpringConstantUNPerM)
	}
	if u := s.Rig.DiameterUM; u > 0 && s.Cell.RadiusM > 0 {
		h.DiameterM = run.Known(2*s.Cell.RadiusM+s.Rig.DiameterErrorM, u)
	}
	h.Samples = 0
	if s.Dialect.Ending == Declared {
		h.Samples = declared
	}
	var err error
	r.truth, err = r.truthOf()
	return r, err
}

// Spec returns the description that the recording was made from.
func (r *Recording) Spec() Spec { return r.spec }

// Truth returns what an analysis should find.
func (r *Recording) Truth() Truth { return r.truth }

// Header returns what the file says of itself.
func (r *Recording) Header() run.Header { return r.header }

// Samples returns the number of rows that the file holds; 0 for meaningless
// bytes.
func (r *Recording) Samples() int64 { return r.rows }

// time returns the time of sample i.
func (r *Recording) time(i int64) float64 { return float64(i) / r.spec.Rig.RateHz }

// written tells whether sample i is outside the gap, and whether the file has
// stopped before it.
func (r *Recording) written(i int64) (written, stopped bool) {
	t, f := r.time(i), r.spec.Fault
	return f.GapS == 0 || t < f.GapFromS || t >= f.GapFromS+f.GapS, f.StopAtS > 0 && t >= f.StopAtS
}

// pass runs the cell without noise up to where the file stops, and hands over
// every sample with the index of its leg, those inside a gap included.
func (r *Recording) pass(yield func(i int64, leg int, m moment) error) error {
	cell := newMechanics(r.curve, r.spec)
	at := 0
	for i := range r.planned {
		if _, stopped := r.written(i); stopped {
			return nil
		}
		t := r.time(i)
		for at < len(r.legs)-1 && t >= r.legs[at].to {
			at++
		}
		// The last sample stands at the very end of the last leg.
		m := cell.step(t, r.legs[at].at(math.Min(t, r.legs[at].to)))
		if err := yield(i, at, m); err != nil {
			return err
		}
	}
	return nil
}

// blockRows is the number of rows handed over at once.
const blockRows = 512

// Blocks hands over the samples as the instrument records them, in SI units
// and full precision, a few hundred rows at a time. The block is valid during
// the call only. An error from yield ends the pass and is returned. Segment
// holds the index into Truth.Segments: that of the move, a ramp to where the
// plate is already left out. A recording of meaningless bytes has no blocks.
func (r *Recording) Blocks(yield func(*run.Block) error) error {
	if r.spec.Fault.ByteCount > 0 {
		return nil
	}
	var (
		rig     = r.spec.Rig
		force   = newWhite(r.spec.Seed, streamForce, rig.ForceNoiseN)
		slow    = newFlicker(r.spec.Seed, rig)
		height  = newWhite(r.spec.Seed, streamHeight, rig.HeightNoiseM)
		radius  = newWhite(r.spec.Seed, streamRadius, rig.RadiusNoiseM)
		imaging = r.imageRow > 0 && r.spec.Cell.RadiusM > 0
		clip    = r.spec.Fault.ClipAtN
		spring  = 1.0
		b       = &run.Block{}
	)
	if rig.SpringConstantNPerM > 0 {
		spring = 1 / (1 + rig.SpringErrorRel)
	}
	flush := func() error {
		if b.Len() == 0 {
			return nil
		}
		if err := yield(b); err != nil {
			return err
		}
		*b = run.Block{
			FirstRow: b.FirstRow + int64(b.Len()),
			Time:     b.Time[:0], Force: b.Force[:0], Height: b.Height[:0], Radius: b.Radius[:0], Segment: b.Segment[:0],
		}
		return nil
	}
	err := r.pass(func(i int64, leg int, m moment) error {
		// Noise is drawn inside a gap too: the rig goes on.
		f := m.force*spring + rig.ForceOffsetN + rig.ForceDriftNPerS*m.t + force.next() + slow.next()
		h := m.height + rig.HeightOffsetM + height.next()
		image := math.NaN()
		if imaging && i%r.imageRow == 0 {
			noise := radius.next()
			if m.present {
				image = m.equator*(1+rig.RadiusErrorRel) + noise
			}
		}
		if written, _ := r.written(i); !written {
			return nil
		}
		if clip > 0 {
			f = math.Max(-clip, math.Min(clip, f))
		}
		b.Time = append(b.Time, m.t)
		b.Force = append(b.Force, f)
		b.Height = append(b.Height, h)
		if imaging {
			b.Radius = append(b.Radius, image)
		}
		b.Segment = append(b.Segment, int32(leg))
		if b.Len() == blockRows {
			return flush()
		}
		return nil
	})
	if err != nil {
		return err
	}
	return flush()
}
