package contrast

import (
	"cmp"
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"
)

var standardNormal = distuv.UnitNormal

// RankTest is the outcome of a two-sample rank test.
type RankTest struct {
	U     float64 // of the first sample
	P     float64 // two-sided
	Upper float64 // one-sided: the first sample lies above the second
	Exact bool    // from the exact distribution; else normal with tie and continuity correction
}

// exactUpTo bounds the product of sample sizes up to which the distribution of
// U is enumerated.
const exactUpTo = 2500

// MannWhitney tests whether two samples lie at the same place (Mann and Whitney
// 1947; Wilcoxon's rank sum). Without ties and up to exactUpTo pairs p is
// exact; else it is from the normal distribution with corrections for ties and
// continuity. All values count as independent.
func MannWhitney(a, b []float64) RankTest {
	r, ties := ranks(append(slices.Clone(a), b...))
	n, m := float64(len(a)), float64(len(b))
	sum := 0.0
	for i := range a {
		sum += r[i]
	}
	t := RankTest{U: sum - n*(n+1)/2}
	if ties == 0 && len(a)*len(b) <= exactUpTo {
		t.Exact = true
		f := uDistribution(len(a), len(b))
		below, above := 0.0, 0.0
		for u, p := range f {
			if float64(u) <= t.U {
				below += p
			}
			if float64(u) >= t.U {
				above += p
			}
		}
		t.Upper = above
		t.P = math.Min(1, 2*math.Min(below, above))
		return t
	}
	total := n + m
	sd := math.Sqrt(n * m / 12 * (total + 1 - ties/(total*(total-1))))
	if sd == 0 {
		t.P, t.Upper = 1, 0.5
		return t
	}
	d := t.U - n*m/2
	t.Upper = standardNormal.Survival((d - 0.5) / sd)
	t.P = math.Min(1, 2*standardNormal.Survival((math.Abs(d)-0.5)/sd))
	return t
}

// ranks returns mid-ranks and the sum of t^3 - t over groups of ties.
func ranks(v []float64) (r []float64, ties float64) {
	idx := make([]int, len(v))
	for i := range idx {
		idx[i] = i
	}
	slices.SortStableFunc(idx, func(i, j int) int { return cmp.Compare(v[i], v[j]) })
	r = make([]float64, len(v))
	for i := 0; i < len(idx); {
		j := i
		for j < len(idx) && v[idx[j]] == v[idx[i]] {
			j++
		}
		for k := i; k < j; k++ {
			r[idx[k]] = float64(i+j+1) / 2
		}
		t := float64(j - i)
		ties += t*t*t - t
		i = j
	}
	return r, ties
}

// uDistribution returns the probabilities of U = 0..n m, by the recursion of
// Mann and Whitney: the largest value belongs to one sample or the other.
func uDistribution(n, m int) []float64 {
	// counts[j][u] for i values of the first sample.
	counts := make([][]float64, m+1)
	for j := range counts {
		counts[j] = make([]float64, n*m+1)
		counts[j][0] = 1
	}
	for i := 1; i <= n; i++ {
		next := make([][]float64, m+1)
		for j := range next {
			next[j] = make([]float64, n*m+1)
			for u := range next[j] {
				// Largest from the first sample: it beats all j of the second.
				if u >= j {
					next[j][u] += counts[j][u-j] * float64(i) / float64(i+j)
				}
				if j > 0 {
					next[j][u] += next[j-1][u] * float64(j) / float64(i+j)
				}
			}
		}
		counts = next
	}
	return counts[m]
}

// HodgesLehmann returns the median of all differences b - a and its 95 %
// interval from the distribution of U (Hodges and Lehmann 1963; Moses): exact
// for small samples without regard to ties, else normal.
func HodgesLehmann(a, b []float64) Estimate {
	var d []float64
	for _, x := range a {
		for _, y := range b {
			d = append(d, y-x)
		}
	}
	if len(d) == 0 {
		return Estimate{math.NaN(), math.NaN(), math.NaN()}
	}
	slices.Sort(d)
	e := Estimate{Value: median(d), Low: math.NaN(), High: math.NaN()}
	n, m := len(a), len(b)
	k := 0 // the k-th smallest and largest difference bound the shift
	if n*m <= exactUpTo {
		tail := 0.0
		for u, p := range uDistribution(n, m) {
			if tail += p; tail > 0.025 {
				k = u
				break
			}
		}
	} else {
		sd := math.Sqrt(float64(n*m*(n+m+1)) / 12)
		k = int(float64(n*m)/2 - standardNormal.Quantile(0.975)*sd)
	}
	if k >= 1 {
		e.Low, e.High = d[k-1], d[len(d)-k]
	}
	return e
}

// KruskalWallis tests whether several samples lie at the same place (Kruskal
// and Wallis 1952): H with tie correction and its p from chi-squared.
func KruskalWallis(groups ...[]float64) (h, p float64) {
	var all []float64
	for _, g := range groups {
		all = append(all, g...)
	}
	r, ties := ranks(all)
	n := float64(len(all))
	i := 0
	for _, g := range groups {
		sum := 0.0
		for range g {
			sum += r[i]
			i++
		}
		if len(g) > 0 {
			h += sum * sum / float64(len(g))
		}
	}
	h = 12/(n*(n+1))*h - 3*(n+1)
	if c := 1 - ties/(n*n*n-n); c > 0 {
		h /= c
	} else {
		return 0, 1
	}
	return h, distuv.ChiSquared{K: float64(len(groups) - 1)}.Survival(h)
}

// Holm adjusts p-values for their number (Holm 1979), in their order.
func Holm(ps []float64) []float64 {
	idx := make([]int, len(ps))
	for i := range idx {
		idx[i] = i
	}
	slices.SortStableFunc(idx, func(i, j int) int { return cmp.Compare(ps[i], ps[j]) })
	out := make([]float64, len(ps))
	most := 0.0
	for k, i := range idx {
		most = math.Max(most, math.Min(1, ps[i]*float64(len(ps)-k)))
		out[i] = most
	}
	return out
}

// Trend is the outcome of a Mann-Kendall test.
type Trend struct {
	S, Variance, Z, P float64
}

// MannKendall tests a series, in its order, for a monotonic trend (Mann 1945,
// Kendall 1975): normal approximation with corrections for ties and
// continuity.
func MannKendall(v []float64) Trend {
	var t Trend
	for i := range v {
		for j := i + 1; j < len(v); j++ {
			t.S += float64(cmp.Compare(v[j], v[i]))
		}
	}
	n := float64(len(v))
	t.Variance = n * (n - 1) * (2*n + 5)
	s := slices.Clone(v)
	slices.Sort(s)
	for i := 0; i < len(s); {
		j := i
		for j < len(s) && s[j] == s[i] {
			j++
		}
		k := float64(j - i)
		t.Variance -= k * (k - 1) * (2*k + 5)
		i = j
	}
	t.Variance /= 18
	t.P = 1
	if t.Variance > 0 && t.S != 0 {
		t.Z = (t.S - math.Copysign(1, t.S)) / math.Sqrt(t.Variance)
		t.P = math.Min(1, 2*standardNormal.Survival(math.Abs(t.Z)))
	}
	return t
}

// TheilSen returns the median slope of all pairs of points with different x
// (Theil 1950, Sen 1968), NaN where there is none.
func TheilSen(x, y []float64) float64 {
	var d []float64
	for i := range x {
		for j := i + 1; j < len(x); j++ {
			if x[j] != x[i] {
				d = append(d, (y[j]-y[i])/(x[j]-x[i]))
			}
		}
	}
	return median(d)
}
