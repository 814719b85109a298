package harmonic

import (
	"math"

	"gonum.org/v1/gonum/stat"
	"gonum.org/v1/gonum/stat/distuv"
)

// Scatter returns the mean of independent values of equal weight, its standard
// uncertainty s/sqrt(n) (JCGM 100, 4.2.3) and the degrees of freedom n-1. With
// fewer than two values the uncertainty is NaN, with none the mean too.
func Scatter(values []float64) (mean, uMean float64, dof int) {
	n := len(values)
	if n == 0 {
		return math.NaN(), math.NaN(), 0
	}
	if n == 1 {
		return values[0], math.NaN(), 0
	}
	mean, sd := stat.MeanStdDev(values, nil)
	return mean, sd / math.Sqrt(float64(n)), n - 1
}

// Expand widens a standard uncertainty known with dof degrees of freedom so
// that plus and minus twice the result holds 95.45 %: u t_95.45(dof)/2
// (JCGM 100, G.3 and table G.2). With no degree of freedom it is NaN.
func Expand(u float64, dof int) float64 {
	if dof < 1 {
		return math.NaN()
	}
	return u * studentFactor(float64(dof))
}

// studentFactor is t_95.45(dof)/2, for dof >= 1 that need not be whole.
func studentFactor(dof float64) float64 {
	// Beyond this the factor differs from 1 by less than 1e-6 and the quantile
	// by the incomplete beta function costs more than it tells.
	if dof > 2e6 {
		return 1
	}
	upper := (1 + math.Erf(math.Sqrt2)) / 2 // 0.977249868, two sigma of the normal
	return distuv.StudentsT{Mu: 0, Sigma: 1, Nu: dof}.Quantile(upper) / 2
}
