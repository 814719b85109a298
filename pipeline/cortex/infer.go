package cortex

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// Quantity is a value with its standard uncertainty (JCGM 100).
type Quantity struct{ Value, U float64 }

// HeightPoint is the effective area modulus of a cell at one height. The
// uncertainties are those that differ from height to height (noise); what is
// common to all heights goes into Prior.
type HeightPoint struct {
	Ratio         float64  // height ratio eta
	Storage, Loss Quantity // N/m
}

// Scale says what a common error of the height ratios comes from. Moduli that
// were computed from force and height with the shape at the wrong ratio are
// spoilt as well: by 6 % at eta = 0.5 and 29 % at 0.9 where the ratio is 1 % too
// large, which undoes part of the error in the Poisson ratio.
type Scale int

// ScaleOfRatio: only the abscissa is wrong, the moduli are right as they are.
// ScaleOfRadius: the sphere radius is wrong by a factor, the heights are right;
// the case of moduli from this program.
// ScaleOfHeight: the heights are wrong by a factor, the radius is right.
const (
	ScaleOfRatio Scale = iota
	ScaleOfRadius
	ScaleOfHeight
)

// Prior is what is known beside the moduli. It is carried through the fit as
// nuisance parameters.
type Prior struct {
	// Tension is gamma0, N/m, the pre-tension of the cortex. It enters as
	// log-normal, so that it stays positive.
	Tension Quantity
	// ScaleU is the standard uncertainty of the common factor of all height
	// ratios; 0.01 is usual. 0 means that it is known exactly.
	ScaleU float64
	Scale  Scale
}

// InferOptions of the inference. The zero value gives profile-likelihood
// intervals and no bootstrap.
type InferOptions struct {
	Bootstrap int    // parametric bootstrap samples, 0 for none
	Seed      uint64 // of the bootstrap
}

// Part names a source of the uncertainty of the Poisson ratio.
type Part string

// The sources of uncertainty.
const (
	PartNoise   Part = "noise of the moduli"
	PartScale   Part = "height scale"
	PartTension Part = "pre-tension"
	PartRange   Part = "range of heights"
)

// Moduli is the answer for one cell at one frequency.
type Moduli struct {
	Heights                 int
	BulkStorage, BulkLoss   Quantity // KB', KB'', N/m
	ShearStorage, ShearLoss Quantity // KS', KS'', N/m
	Poisson                 Quantity // (KB'-KS')/(KB'+KS')
	PoissonInterval         Interval // by profile likelihood, 95 %
	PoissonBootstrap        *Interval
	ComplexPoisson          complex128 // (KB*-KS*)/(KB*+KS*)
	HeightScale, Tension    Quantity   // the nuisance parameters as the fit leaves them

	// Parts of the linear u(nu); their squares add to its square. ByNoise is
	// what would remain if scale and pre-tension were known exactly, the
	// others are what knowing them would take away.
	ByNoise, ByScale, ByTension float64
	Dominant                    Part

	ChiSquared float64
	Freedom    int
	P          float64 // probability of a larger ChiSquared when model and uncertainties are right
	// Widened is set where the fit is so bad (P < 0.01) that all
	// uncertainties were multiplied by the Birge ratio sqrt(chi2/freedom).
	Widened bool

	// Resolved tells that the interval of the Poisson ratio is shorter than
	// 0.75, half of what an isotropic material can have (-1..0.5). Where it
	// is not, bulk and shear should not be quoted apart.
	Resolved bool
	Advice   string

	fit *fit
	at  vector
}

// Infer fits complex bulk and shear moduli to the effective moduli of one cell
// at several heights and one frequency, with the pre-tension and the common
// scale of the heights as nuisance parameters.
//
// It needs two different heights at least, within MinTableRatio..MaxTableRatio,
// and positive uncertainties. An answer that the heights cannot give has
// Resolved false and Advice saying what to measure.
func (t *Table) Infer(points []HeightPoint, prior Prior, opt InferOptions) (*Moduli, error) {
	f, err := t.newFit(points, prior)
	if err != nil {
		return nil, err
	}
	if opt.Bootstrap < 0 {
		return nil, fmt.Errorf("bootstrap samples = %d: expected zero or more", opt.Bootstrap)
	}
	best, chi2 := f.search()
	m := &Moduli{Heights: len(points), fit: f}
	m.Freedom = 2*len(points) - 4

	var lo, hi float64
	widen := 1.0
	for range 4 { // again where the profile finds a better minimum
		m.P = 1
		if m.Freedom > 0 {
			m.P = distuv.ChiSquared{K: float64(m.Freedom)}.Survival(chi2)
		}
		widen, m.Widened = 1, false
		if m.P < 0.01 {
			widen, m.Widened = chi2/float64(m.Freedom), true
		}
		var found vector
		var better float64
		lo, hi, found, better = f.profile(best, chi2, widen)
		if better > chi2-1e-3 {
			break
		}
		best, chi2 = f.minimise(found)
	}
	m.ChiSquared, m.at = chi2, best
	m.PoissonInterval = f.interval(lo, hi)

	kb, ks := f.moduli(best)
	m.ComplexPoisson = (kb - ks) / (kb + ks)
	cov := f.covariance(best)
	factor := math.Sqrt(widen)
	u := func(d vector) float64 { // of a function with gradient d
		var s float64
		for a := range params {
			for b := range params {
				s += d[a] * cov[a][b] * d[b]
			}
		}
		return factor * math.Sqrt(max(s, 0))
	}
	k, rho := real(kb), ratioOf(best[poisson])
	drho := -2 / ((1 + best[poisson]) * (1 + best[poisson]))
	m.BulkStorage = Quantity{k, u(vector{lnBulk: k})}
	m.BulkLoss = Quantity{imag(kb), u(vector{lnBulk: imag(kb), bulkLoss: k})}
	m.ShearStorage = Quantity{real(ks), u(vector{lnBulk: k * rho, poisson: k * drho})}
	m.ShearLoss = Quantity{imag(ks), u(vector{lnBulk: imag(ks), shearLoss: k})}
	m.Poisson = Quantity{best[poisson], u(vector{poisson: 1})}
	m.HeightScale = Quantity{best[scale], u(vector{scale: 1})}
	g := math.Exp(best[lnTension])
	m.Tension = Quantity{g, u(vector{lnTension: g})}

	m.ByNoise, m.ByScale, m.ByTension = f.parts()
	m.ByNoise, m.ByScale, m.ByTension = factor*m.ByNoise, factor*m.ByScale, factor*m.ByTension

	if opt.Bootstrap > 0 {
		f.bootstrap(m, widen, opt)
	}
	m.Resolved = m.PoissonInterval.High-m.PoissonInterval.Low < resolvedWidth
	m.advise()
	return m, nil
}
