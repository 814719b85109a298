package pipeline

import (
	"math"

	"platen/pipeline/harmonic"
	"platen/pipeline/run"
	"platen/pipeline/squeeze"
)

// images holds the imaged equator radii of a run (as point.f) with the height
// at the moment of each.
type images struct{ strip }

func (im *images) add(t, height, radius float64) {
	im.strip.add(point{t: t, h: height, f: radius, w: 1})
}

// fewestImages is the number of images below which no scatter, and so no
// uncertainty, can be told.
const fewestImages = 4

// radii returns, for each image, the time and the radius of the uncompressed
// sphere of the same volume; offset is added to the heights.
func (im *images) radii(c *squeeze.Curve, offset float64) (t, w, rs []float64) {
	for _, p := range im.points {
		r := c.RadiusFromEquator(p.h+offset, p.f)
		if math.IsNaN(r) || r <= 0 {
			continue // an outline that fits no squeezed sphere at this height
		}
		t, w, rs = append(t, p.t), append(w, p.w), append(rs, r)
	}
	return t, w, rs
}

// imagedRadius is the mean sphere radius over all images. Its uncertainty is
// that of the mean (by batches, so that slow scatter counts) and of the scale
// of the image; the part that comes from the height's zero is added by the
// caller, who moves the zero.
func imagedRadius(c *squeeze.Curve, im *images, offset float64, s Settings) (run.Quantity, bool) {
	t, w, rs := im.radii(c, offset)
	if len(rs) < fewestImages {
		return run.Quantity{}, false
	}
	mean, uMean := weightedBatchMean(w, rs)
	_ = t
	scale := s.ImagedRadiusUPercent / 100 * mean
	return run.Quantity{Value: mean, U: math.Hypot(uMean, scale)}, true
}

// weightedBatchMean returns the mean and its standard uncertainty from the
// scatter of up to sixteen batches of consecutive values.
func weightedBatchMean(w, x []float64) (mean, u float64) {
	var sw, sx float64
	for i := range x {
		sw += w[i]
		sx += w[i] * x[i]
	}
	mean = sx / sw
	n := min(16, len(x))
	batches := make([]float64, n)
	weights := make([]float64, n)
	for i := range x {
		b := i * n / len(x)
		batches[b] += w[i] * x[i]
		weights[b] += w[i]
	}
	for b := range batches {
		batches[b] /= weights[b]
	}
	_, u, dof := harmonic.Scatter(batches)
	return mean, harmonic.Expand(u, dof)
}

// imagedCourse is the relative change of the imaged volume over the run, from
// a straight line through ln V.
func imagedCourse(c *squeeze.Curve, im *images) *run.ImagedVolume {
	t, w, rs := im.radii(c, 0)
	if len(rs) < 4*fewestImages {
		return nil
	}
	lnV := make([]float64, len(rs))
	for i, r := range rs {
		lnV[i] = 3 * math.Log(r)
	}
	// Images have no common even grid with w samples each: a step of zero
	// makes the averaging factor of every point one.
	_, _, slope, uSlope, _, err := harmonic.MeanSlope(harmonic.Points{T: t, W: w}, lnV)
	if err != nil {
		return nil
	}
	span := t[len(t)-1] - t[0]
	q := run.Known(math.Expm1(slope*span), uSlope*span)
	if q == nil {
		return nil
	}
	n := 0
	for _, x := range w {
		n += int(x)
	}
	return &run.ImagedVolume{Images: n, Interval: run.Interval{FromS: t[0], ToS: t[len(t)-1]}, Change: *q}
}

// volumes lists the cell's size from every source that the run has, most
// trusted first.
func volumes(c *squeeze.Curve, im *images, h run.Header, contact *contact, s Settings) []run.Volume {
	var out []run.Volume
	offset := s.HeightOffsetUNm * 1e-9
	if q, ok := imagedRadius(c, im, 0, s); ok {
		if moved, ok := imagedRadius(c, im, offset, s); ok {
			q.U = math.Hypot(q.U, moved.Value-q.Value)
		}
		out = append(out, run.Volume{Source: run.VolumeImaged, RadiusM: q})
	}
	if d := h.DiameterM; d != nil && d.Value > 0 {
		out = append(out, run.Volume{Source: run.VolumeDeclared, RadiusM: run.Quantity{Value: d.Value / 2, U: d.U / 2}})
	}
	if contact != nil {
		model := s.ContactRadiusUPercent / 100 * contact.height / 2
		u := math.Sqrt(contact.u*contact.u/4 + model*model + offset*offset/4)
		out = append(out, run.Volume{Source: run.VolumeContact, RadiusM: run.Quantity{Value: contact.height / 2, U: u}})
	}
	return out
}
