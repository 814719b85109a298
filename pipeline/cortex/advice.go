package cortex

import (
	"fmt"
	"math"
	"slices"
)

// information is the Fisher information of a set of heights measured with one
// relative noise of |K_eff| in either component, at the parameters p, with the
// fit's priors times the factors given.
func (f *fit) information(p vector, ratios []float64, noise, scaleFactor, tensionFactor float64) [params][params]float64 {
	b := *f
	b.ratio = nil
	n := len(ratios)
	for _, eta := range ratios { // the scale must not move a height out of the table
		b.ratio = append(b.ratio, min(max(eta, MinTableRatio/p[scale]), MaxTableRatio/p[scale]))
	}
	b.re, b.im = make([]float64, n), make([]float64, n)
	b.r, b.j = make([]float64, 2*n+2), make([]vector, 2*n+2)
	b.ure, b.uim = make([]float64, n), make([]float64, n)
	for i := range n {
		b.ure[i], b.uim[i] = 1, 1
	}
	b.scaleU *= scaleFactor
	b.lnGU *= tensionFactor
	b.evaluate(p, true)
	for i := range n {
		size := math.Hypot(b.r[2*i], b.r[2*i+1]) * noise // residuals of zero data are the model
		for a := range params {
			b.j[2*i][a] /= size
			b.j[2*i+1][a] /= size
		}
	}
	b.normal()
	return b.h
}

// noise is the median relative uncertainty of the measured moduli.
func (f *fit) noise() float64 {
	var rel []float64
	for i := range f.re {
		size := math.Hypot(f.re[i], f.im[i])
		rel = append(rel, f.ure[i]/size, f.uim[i]/size)
	}
	slices.Sort(rel)
	return (rel[(len(rel)-1)/2] + rel[len(rel)/2]) / 2
}

// Suggestion is a further height that would narrow the Poisson ratio.
type Suggestion struct {
	Ratio float64 // height ratio eta
	Now   float64 // u(nu) as expected of the heights so far
	Then  float64 // u(nu) with the further height
}

// Next returns the height ratio between low and high whose measurement would
// narrow the Poisson ratio most: the expected (Fisher) information at the
// fitted moduli, with the median relative noise of the heights so far. It fails
// where the range has no part within MinTableRatio..MaxTableRatio.
func (m *Moduli) Next(low, high float64) (Suggestion, error) {
	f := m.fit.clone()
	// The scale may move a height out of the table.
	low, high = max(low, MinTableRatio/m.at[scale]), min(high, MaxTableRatio/m.at[scale])
	if !(low <= high) {
		return Suggestion{}, fmt.Errorf("no height ratio to choose from: the mechanics is tabulated for %g..%g", MinTableRatio, MaxTableRatio)
	}
	f.evaluate(m.at, true)
	f.normal()
	sofar := f.h
	u := func(h [params][params]float64) float64 { return math.Sqrt(invert(h, f.fixed)[poisson][poisson]) }
	s := Suggestion{Now: u(sofar), Then: math.Inf(1)}
	noise := f.noise()
	steps := max(int(math.Round((high-low)/0.01)), 1)
	for i := range steps + 1 {
		eta := low + (high-low)*float64(i)/float64(steps)
		h := f.information(m.at, []float64{eta}, noise, 1, 1)
		// The priors are in sofar already.
		if f.scaleU > 0 {
			h[scale][scale] -= 1 / (f.scaleU * f.scaleU)
		}
		if f.lnGU > 0 {
			h[lnTension][lnTension] -= 1 / (f.lnGU * f.lnGU)
		}
		for a := range params {
			for b := range params {
				h[a][b] += sofar[a][b]
			}
		}
		if v := u(h); v < s.Then {
			s.Ratio, s.Then = eta, v
		}
	}
	return s, nil
}

// usualHeights spreads n heights over the range in which the moduli can be told
// apart and a plate can usually be held.
func usualHeights(n int) []float64 {
	r := make([]float64, n)
	for i := range r {
		r[i] = 0.5 + 0.4*float64(i)/float64(n-1)
	}
	return r
}

// advise finds what dominates the uncertainty and says what would shrink it.
func (m *Moduli) advise() {
	f := m.fit
	expect := func(ratios []float64, scaleFactor, tensionFactor float64) float64 {
		return math.Sqrt(invert(f.information(m.at, ratios, f.noise(), scaleFactor, tensionFactor), f.fixed)[poisson][poisson])
	}
	now := expect(f.ratio, 1, 1)
	better := expect(usualHeights(len(f.ratio)), 1, 1)
	narrow := slices.Min(f.ratio) > 0.6 || slices.Max(f.ratio) < 0.8
	switch {
	case narrow && now > 2*better:
		m.Dominant = PartRange
	case m.ByScale >= max(m.ByNoise, m.ByTension):
		m.Dominant = PartScale
	case m.ByTension >= m.ByNoise:
		m.Dominant = PartTension
	default:
		m.Dominant = PartNoise
	}
	if !m.Resolved && narrow {
		m.Advice = "not resolved: measure below eta = 0.6 and above 0.8"
		return
	}
	switch m.Dominant {
	case PartRange:
		m.Advice = fmt.Sprintf("the heights span too little: as many heights over eta = 0.5..0.9 would bring u(nu) from %.2g to %.2g", now, better)
	case PartScale:
		m.Advice = fmt.Sprintf("the common scale of the heights dominates: known to a third (image the cell's equator, repeat the contact height) it would bring u(nu) from %.2g to %.2g%s", now, expect(f.ratio, 1./3, 1), m.oneMore())
	case PartTension:
		m.Advice = fmt.Sprintf("the pre-tension dominates: known to a third (hold segments, force baseline) it would bring u(nu) from %.2g to %.2g%s", now, expect(f.ratio, 1, 1./3), m.oneMore())
	default:
		m.Advice = "the noise of the moduli dominates: measure more cycles at each height" + m.oneMore()
	}
	if m.Widened {
		m.Advice += fmt.Sprintf("; the heights disagree by more than their uncertainties (P = %.1g), so the uncertainties were widened: look for a height that stands apart", m.P)
	}
	if g := math.Exp(m.at[lnTension]); g < lowestTension*4*m.BulkStorage.Value*m.ShearStorage.Value/(m.BulkStorage.Value+m.ShearStorage.Value) {
		m.Advice += "; the pre-tension is so low against the moduli that the mechanics is known to some per cent only"
	}
	if !m.Resolved {
		m.Advice = "not resolved: " + m.Advice
	}
}

// oneMore words the best further height.
func (m *Moduli) oneMore() string {
	s, err := m.Next(0.4, 0.92)
	if err != nil {
		return ""
	}
	return fmt.Sprintf("; one more height, at eta = %.2f, would bring it from %.2g to %.2g", s.Ratio, s.Now, s.Then)
}
