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
// sphere of the same volume; offset is added to the heights, and the imaged
// radii are multiplied by scale.
func (im *images) radii(c *squeeze.Curve, offset, scale float64) (t, w, rs []float64) {
	for _, p := range im.points {
		r := c.RadiusFromEquator(p.h+offset, p.f*scale)
		if math.IsNaN(r) || r <= 0 {
			continue // an outline that fits no squeezed sphere at this height
		}
		t, w, rs = append(t, p.t), append(w, p.w), append(rs, r)
	}
	return t, w, rs
}

// imagedRadius is the mean sphere radius over all images. Its uncertainty is
// that of the mean (by batches, so that slow scatter counts), of the scale of
// the images, and of the zero of the height; byOffset is how far the zero's
// uncertainty moves it. Both are moved and looked at: at half height a radius
// that is imaged 1 % too large makes the sphere only some 0.6 % larger.
func imagedRadius(c *squeeze.Curve, im *images, s Settings) (q run.Quantity, byOffset float64, ok bool) {
	_, w, rs := im.radii(c, 0, 1)
	if len(rs) < fewestImages {
		return run.Quantity{}, 0, false
	}
	mean, uMean := weightedBatchMean(w, rs)
	_, w1, scaled := im.radii(c, 0, 1+s.ImagedRadiusUPercent/100)
	_, w2, moved := im.radii(c, s.HeightOffsetUNm*1e-9, 1)
	if len(scaled) == 0 || len(moved) == 0 {
		return run.Quantity{}, 0, false
	}
	byScale := weightedMeanOf(w1, scaled) - mean
	byOffset = weightedMeanOf(w2, moved) - mean
	return run.Quantity{Value: mean, U: math.Sqrt(uMean*uMean + byScale*byScale + byOffset*byOffset)}, byOffset, true
}

func weightedMeanOf(w, x []float64) float64 {
	var sw, sx float64
	for i := range x {
		sw += w[i]
		sx += w[i] * x[i]
	}
	return sx / sw
}

// weightedBatchMean returns the mean and its standard uncertainty from the
// scatter of up to sixteen batches of consecutive values.
func weightedBatchMean(w, x []float64) (mean, u float64) {
	mean = weightedMeanOf(w, x)
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
	t, w, rs := im.radii(c, 0, 1)
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
	if q, _, ok := imagedRadius(c, im, s); ok {
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
