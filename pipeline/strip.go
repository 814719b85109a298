package pipeline

// point is the mean of w consecutive samples.
type point struct{ t, h, f, w float64 }

// strip holds a stretch of a run condensed to a bounded number of points: each
// is the mean over neighbouring samples, and when the strip is full,
// neighbours are joined two and two. What is kept depends on the samples and
// their order only, not on how the file was cut into writes.
//
// The mean of a sinusoid over w samples is the sinusoid times a known factor,
// which package harmonic puts into its basis: condensing loses no accuracy as
// long as a cycle keeps a dozen points.
type strip struct {
	points []point
	grain  float64 // a joined point weighs at most this
}

// maxPoints bounds a strip: 16,384 points of 32 bytes are 0.5 MB, and leave 32
// points a cycle to the longest oscillation segment (maxCycles).
const maxPoints = 16384

func (s *strip) add(p point) {
	s.points = append(s.points, p)
	for len(s.points) >= maxPoints {
		s.coarsen(len(s.points))
	}
}

// coarsen joins neighbours among the first n points.
func (s *strip) coarsen(n int) {
	if s.grain == 0 {
		s.grain = s.points[0].w
	}
	s.grain *= 2
	kept := joinNeighbours(s.points[:0], s.points[:n], s.grain)
	kept = append(kept, s.points[n:]...)
	s.points = kept
}

// joinNeighbours appends src to dst with neighbours joined two and two where
// the pair weighs at most grain. dst may share src's array.
func joinNeighbours(dst, src []point, grain float64) []point {
	for i := 0; i < len(src); i++ {
		p := src[i]
		if i+1 < len(src) {
			if q := src[i+1]; p.w+q.w <= grain {
				w := p.w + q.w
				p = point{
					t: (p.w*p.t + q.w*q.t) / w,
					h: (p.w*p.h + q.w*q.h) / w,
					f: (p.w*p.f + q.w*q.f) / w,
					w: w,
				}
				i++
			}
		}
		dst = append(dst, p)
	}
	return dst
}

// reduced returns the strip in at most n points (a copy where any are joined).
func (s *strip) reduced(n int) []point {
	pts := s.points
	grain := s.grain
	for len(pts) > n {
		if grain == 0 {
			grain = pts[0].w
		}
		grain *= 2
		pts = joinNeighbours(nil, pts, grain)
	}
	return pts
}
