package cortex

import (
	"math"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"
)

// Interval is a 95 % interval of the Poisson ratio. An end that is Open lies at
// the bound of what a sheet can have (or the model can tell apart): the data do
// not limit it.
type Interval struct {
	Low, High         float64
	OpenLow, OpenHigh bool
}

const resolvedWidth = 0.75

// profile finds where chi-squared, minimised over all else, has risen by the
// 95 % point of one degree of freedom (3.84, times widen): the likelihood ratio
// interval. Ends that are not reached are returned beyond the bounds. found is
// the best point met.
func (f *fit) profile(best vector, chi2, widen float64) (lo, hi float64, found vector, lowest float64) {
	rise := math.Sqrt(widen * distuv.ChiSquared{K: 1}.Quantile(0.95))
	found, lowest = best, chi2
	was := f.fixed[poisson]
	f.fixed[poisson] = true
	defer func() { f.fixed[poisson] = was }()

	side := func(bound float64) (float64, bool) {
		p := best
		// The root of chi-squared's rise is nearly linear in nu: secant
		// steps within a bracket.
		rootAt := func(nu float64) float64 {
			p[poisson] = nu
			q, c := f.minimise(p)
			if c < lowest {
				found, lowest = q, c
			}
			p = q
			return math.Sqrt(max(c-chi2, 0)) - rise
		}
		inner, outer := best[poisson], bound
		fin, fout := -rise, rootAt(bound)
		if fout <= 0 {
			return bound, false
		}
		p = best
		sd := math.Sqrt(max(f.covariance(best)[poisson][poisson], 1e-12))
		guess := inner + math.Copysign(rise*sd, bound-inner)
		for range 40 {
			if !((guess-inner)*(guess-outer) < 0) {
				guess = (inner + outer) / 2
			}
			v := rootAt(guess)
			if math.Abs(v) < 1e-3*rise || math.Abs(outer-inner) < 1e-6 {
				break
			}
			if v < 0 {
				inner, fin = guess, v
			} else {
				outer, fout = guess, v
			}
			next := inner - fin*(outer-inner)/(fout-fin)
			// A far end makes the secant crawl; the other estimate is the
			// line from the minimum through the newest point.
			if line := best[poisson] + (guess-best[poisson])*rise/(v+rise); (line-inner)*(line-outer) < 0 {
				next = line
			}
			guess = next
		}
		return guess, true
	}
	var ok bool
	if lo, ok = side(f.low[poisson]); !ok {
		lo = math.Inf(-1)
	}
	if hi, ok = side(f.up[poisson]); !ok {
		hi = math.Inf(1)
	}
	return lo, hi, found, lowest
}

// interval clips the ends to what a sheet can have.
func (f *fit) interval(lo, hi float64) Interval {
	v := Interval{Low: lo, High: hi}
	if lo <= f.low[poisson]+1e-9 {
		v.Low, v.OpenLow = -1, true
	}
	if hi >= 1-1e-9 {
		v.High, v.OpenHigh = 1, true
	}
	return v
}

// parts splits u(nu) by what exact knowledge of the nuisance parameters would
// take away, from the normal equations that covariance has left. What only both
// together take away is shared in proportion.
func (f *fit) parts() (noise, byScale, byTension float64) {
	known := func(names ...int) float64 {
		fixed := f.fixed
		for _, a := range names {
			fixed[a] = true
		}
		return invert(f.h, fixed)[poisson][poisson]
	}
	all, bare := known(), known(scale, lnTension)
	a, b := max(all-known(scale), 0), max(all-known(lnTension), 0)
	rest := max(all-bare, 0)
	if a+b > 0 {
		byScale, byTension = math.Sqrt(rest*a/(a+b)), math.Sqrt(rest*b/(a+b))
	}
	return math.Sqrt(bare), byScale, byTension
}

// bootstrap draws measurements and prior values about the fit and fits them
// again (parametric bootstrap; Efron and Tibshirani 1993, from memory). The
// larger of its spread and the linear uncertainty is kept: half the middle
// 68 % is used for the spread, as KS may run away in single samples.
func (f *fit) bootstrap(m *Moduli, widen float64, opt InferOptions) {
	rng := rand.New(rand.NewPCG(opt.Seed, 0x5eed))
	f.evaluate(m.at, false)
	b := *f
	n := len(f.ratio)
	b.re, b.im = make([]float64, n), make([]float64, n)
	mean := make([]float64, 2*n)
	for i := range n {
		mean[2*i] = f.re[i] - f.r[2*i]*f.ure[i]
		mean[2*i+1] = f.im[i] - f.r[2*i+1]*f.uim[i]
	}
	noise := math.Sqrt(widen)
	var draws [5][]float64
	for range opt.Bootstrap {
		for i := range n {
			b.re[i] = mean[2*i] + noise*f.ure[i]*rng.NormFloat64()
			b.im[i] = mean[2*i+1] + noise*f.uim[i]*rng.NormFloat64()
		}
		b.scale0 = m.at[scale] + noise*f.scaleU*rng.NormFloat64()
		b.lnG0 = m.at[lnTension] + noise*f.lnGU*rng.NormFloat64()
		p, _ := b.minimise(m.at)
		kb, ks := b.moduli(p)
		for i, v := range []float64{real(kb), imag(kb), real(ks), imag(ks), p[poisson]} {
			draws[i] = append(draws[i], v)
		}
	}
	quantile := func(s []float64, p float64) float64 {
		x := p * float64(len(s)-1)
		i := min(int(x), len(s)-2)
		if i < 0 {
			return s[0]
		}
		return s[i] + (x-float64(i))*(s[i+1]-s[i])
	}
	for i, q := range []*Quantity{&m.BulkStorage, &m.BulkLoss, &m.ShearStorage, &m.ShearLoss, &m.Poisson} {
		slices.Sort(draws[i])
		q.U = max(q.U, (quantile(draws[i], 0.8413)-quantile(draws[i], 0.1587))/2)
	}
	v := f.interval(quantile(draws[4], 0.025), quantile(draws[4], 0.975))
	m.PoissonBootstrap = &v
}
