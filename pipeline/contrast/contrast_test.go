package contrast

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
)

func near(t *testing.T, what string, got, want, tol float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tol) {
		t.Errorf("%s: %.15g, want %.15g within %g", what, got, want, tol)
	}
}

// Hollander and Wolfe, Nonparametric Statistical Methods, p. 69 f., as in R's
// help(wilcox.test); results of R 4.2.2.
func TestMannWhitneyHollanderWolfe(t *testing.T) {
	x := []float64{0.80, 0.83, 1.89, 1.04, 1.45, 1.38, 1.91, 1.64, 0.73, 1.46}
	y := []float64{1.15, 0.88, 0.90, 0.74, 1.21}
	m := MannWhitney(x, y)
	near(t, "U", m.U, 35, 0)
	near(t, "upper p", m.Upper, 0.127206127206, 1e-11)
	near(t, "two-sided p", m.P, 0.254412254412, 1e-11)
	if !m.Exact {
		t.Error("not exact")
	}
	near(t, "Hodges-Lehmann, y - x", HodgesLehmann(x, y).Value, -0.305, 1e-12)
}

// Conover, Practical Nonparametric Statistics (1999), p. 276, data as in NIST
// Dataplot's RANKSUM.DAT, which has ties; results of R 4.2.2.
func TestMannWhitneyConover(t *testing.T) {
	farm := []float64{14.8, 7.3, 5.6, 6.3, 9.0, 4.2, 10.6, 12.5, 12.9, 16.1, 11.4, 2.7}
	city := []float64{12.7, 14.2, 12.6, 2.1, 17.7, 11.8, 16.9, 7.9, 16.0, 10.6, 5.6, 5.6, 7.6, 11.3, 8.3, 6.7, 3.6, 1.0, 2.4, 6.4, 9.1, 6.7, 18.6, 3.2, 6.2, 6.1, 15.3, 10.6, 1.8, 5.9, 9.9, 10.6, 14.8, 5.0, 2.6, 4.0}
	m := MannWhitney(farm, city)
	near(t, "U", m.U, 243, 0)
	near(t, "two-sided p", m.P, 0.527892418035345, 1e-9)
	if m.Exact {
		t.Error("ties, but called exact")
	}
}

// The exact distribution of U against counts that can be made by hand: for
// n = m = 2 the six orders give U = 0, 1, 2, 2, 3, 4.
func TestUDistribution(t *testing.T) {
	for u, want := range []float64{1, 1, 2, 1, 1} {
		near(t, fmt.Sprint("P(U=", u, ")"), uDistribution(2, 2)[u], want/6, 1e-15)
	}
	sum := 0.0
	for _, p := range uDistribution(20, 30) {
		sum += p
	}
	near(t, "sum", sum, 1, 1e-12)
}

// Kruskal-Wallis of two groups is the square of the Mann-Whitney z without
// continuity correction: for the data of Hollander and Wolfe above R gives
// p = 0.220671361919847.
func TestKruskalWallis(t *testing.T) {
	x := []float64{0.80, 0.83, 1.89, 1.04, 1.45, 1.38, 1.91, 1.64, 0.73, 1.46}
	y := []float64{1.15, 0.88, 0.90, 0.74, 1.21}
	_, p := KruskalWallis(x, y)
	near(t, "p", p, 0.220671361919847, 1e-9)
	// Hollander and Wolfe p. 116 (mucociliary efficiency), as in R's
	// help(kruskal.test): chi-squared 0.7714, p 0.68 (from memory).
	h, p := KruskalWallis([]float64{2.9, 3.0, 2.5, 2.6, 3.2}, []float64{3.8, 2.7, 4.0, 2.4}, []float64{2.8, 3.4, 3.7, 2.2, 2.0})
	near(t, "H", h, 0.7714, 5e-5)
	near(t, "p", p, 0.68, 5e-3)
}

// Holm's procedure by hand: 0.01, 0.02, 0.03, 0.04 times 4, 3, 2, 1, made
// monotonic.
func TestHolm(t *testing.T) {
	got := Holm([]float64{0.04, 0.01, 0.03, 0.02})
	for i, want := range []float64{0.06, 0.04, 0.06, 0.06} {
		near(t, "adjusted p", got[i], want, 1e-15)
	}
}

// The annual flow of the Nile 1871 to 1970 (R's dataset Nile); results of R
// 4.2.2 and SciPy 1.10.1. EPA QA/G-9S p. 109: printed values. Kendall's exact
// figures for ties: Kendall (1976) p. 55 has x in order of time.
func TestTrends(t *testing.T) {
	nile := []float64{
		1120, 1160, 963, 1210, 1160, 1160, 813, 1230, 1370, 1140, 995, 935, 1110, 994, 1020, 960, 1180, 799, 958, 1140,
		1100, 1210, 1150, 1250, 1260, 1220, 1030, 1100, 774, 840, 874, 694, 940, 833, 701, 916, 692, 1020, 1050, 969,
		831, 726, 456, 824, 702, 1120, 1100, 832, 764, 821, 768, 845, 864, 862, 698, 845, 744, 796, 1040, 759,
		781, 865, 845, 944, 984, 897, 822, 1010, 771, 676, 649, 846, 812, 742, 801, 1040, 860, 874, 848, 890,
		744, 749, 838, 1050, 918, 986, 797, 923, 975, 815, 1020, 906, 901, 1170, 912, 746, 919, 718, 714, 740,
	}
	k := MannKendall(nile)
	near(t, "Nile S", k.S, -1387, 0)
	near(t, "Nile Var S", k.Variance, 112728.33333333333, 1e-9)
	near(t, "Nile z", k.Z, -4.1280665228441, 1e-10)
	near(t, "Nile p", k.P, 3.65826292166434e-05, 1e-12)
	x := make([]float64, len(nile))
	for i := range x {
		x[i] = float64(i)
	}
	near(t, "Nile slope", TheilSen(x, nile), -2.6, 1e-12)
	k = MannKendall([]float64{10, 10, 10, 5, 10, 20, 18, 17, 15, 24, 15})
	near(t, "EPA S", k.S, 22, 0)
	near(t, "EPA Var S", k.Variance, 155.33, 0.005)
	near(t, "EPA z", k.Z, 1.685, 5e-4)
}

// NIST/SEMATECH e-Handbook 1.3.5.17.1 (Grubbs' test data): median 201.37, MAD
// 0.995, modified z of the last 29.96; all others are below 1.4.
func TestModifiedZ(t *testing.T) {
	v := []float64{199.31, 199.53, 200.19, 200.82, 201.92, 201.95, 202.18, 245.57}
	z := ModifiedZ(v)
	near(t, "z of 245.57", z[7], 29.9627, 1e-3)
	if m := slices.Max(z[:7]); m > 1.4 {
		t.Errorf("largest of the others %g", m)
	}
	var cells []Cell
	for i, x := range v {
		cells = append(cells, Cell{Name: fmt.Sprint("c", i), Value: x})
	}
	if s := Summarise(cells); s.Cells != 8 || !slices.Equal(s.Outliers, []string{"c7"}) {
		t.Errorf("%+v", s)
	}
}

// Order statistics for the median: with ten values the second smallest and
// largest hold it with 97.85 % (binomial tables).
func TestMedianInterval(t *testing.T) {
	v := []float64{1, 2, 3, 4, 5, 6, 7, 8, 9, 10}
	low, high, cover := medianInterval(v)
	near(t, "low", low, 2, 0)
	near(t, "high", high, 9, 0)
	near(t, "cover", cover, 0.978515625, 1e-12)
	if _, _, c := medianInterval(v[:5]); c != 0 {
		t.Errorf("five values cover %g", c)
	}
}

// experiment draws cells of two conditions in sessions.
func experiment(rng *rand.Rand, sessions, cells int, between, shift float64) (a, b []Cell) {
	for s := range sessions {
		level := between * rng.NormFloat64()
		for i := range cells {
			name := fmt.Sprint("s", s)
			a = append(a, Cell{Session: name, Order: float64(2 * i), Value: 10 + level + rng.NormFloat64()})
			b = append(b, Cell{Session: name, Order: float64(2*i + 1), Value: 10 + level + shift + rng.NormFloat64()})
		}
	}
	return a, b
}

// With conditions in different sessions, taking all cells for independent finds
// differences that are not there; the nested model keeps its level of 5 %: of
// 400 experiments 3 to 7 % (binomial: 2.0 standard deviations either side).
func TestNestedKeepsItsLevel(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 1))
	nested, naive := 0, 0
	const experiments = 400
	for range experiments {
		a, _ := experiment(rng, 5, 6, 1, 0)
		b, _ := experiment(rng, 5, 6, 1, 0)
		for i := range b {
			b[i].Session += "b"
		}
		if _, p, _ := Nested(a, b); p < 0.05 {
			nested++
		}
		if MannWhitney(values(a), values(b)).P < 0.05 {
			naive++
		}
	}
	t.Logf("false alarms: nested %d, all cells as independent %d of %d", nested, naive, experiments)
	if nested < 12 || nested > 28 {
		t.Errorf("the nested model alarms %d times of %d", nested, experiments)
	}
	if naive < 40 {
		t.Errorf("taking cells for independent alarms only %d times of %d: the test shows nothing", naive, experiments)
	}
}

// Where sessions hold both conditions, the interval of the nested model holds
// the true difference in 95 % (of 400: 372 to 388, two standard deviations), and
// permutation within sessions sees what differences between sessions would
// hide.
func TestWithinSessions(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 2))
	in, seen, hidden := 0, 0, 0
	const experiments = 400
	for i := range experiments {
		a, b := experiment(rng, 4, 5, 4, 1.2)
		e, _, _ := Nested(a, b)
		if e.Low <= 1.2 && 1.2 <= e.High {
			in++
		}
		if i < 40 {
			if p, within := Permutation(a, b, 400, uint64(i)); within && p < 0.05 {
				seen++
			}
			if MannWhitney(values(a), values(b)).P < 0.05 {
				hidden++
			}
		}
	}
	if in < 372 || in > 388 {
		t.Errorf("%d of %d intervals hold the difference", in, experiments)
	}
	if seen <= hidden {
		t.Errorf("within sessions %d of 40 seen, across all cells %d", seen, hidden)
	}
}

// A balanced design has a closed form: the difference of means, its variance
// from the cells within sessions.
func TestNestedBalanced(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 3))
	a, b := experiment(rng, 3, 4, 2, 0.5)
	e, _, dof := Nested(a, b)
	near(t, "difference", e.Value, mean(values(b))-mean(values(a)), 1e-9)
	near(t, "degrees of freedom", dof, 24-3-1, 0)
	p := PairedSessions(a, b)
	near(t, "paired", p.Value, e.Value, 1e-9)
}

func TestCompareWarns(t *testing.T) {
	rng := rand.New(rand.NewPCG(4, 4))
	has := func(c Comparison, words string) bool {
		return slices.ContainsFunc(c.Warnings, func(w string) bool { return strings.Contains(w, words) })
	}
	a, b := experiment(rng, 4, 6, 0.5, 1)
	good := Compare(a, b, Options{Permutations: 500, Difference: 1})
	if len(good.Warnings) != 0 {
		t.Errorf("a sound experiment is warned of: %v", good.Warnings)
	}
	if good.CellsNeeded < 10 || good.CellsNeeded > 40 {
		// Two normal samples one standard deviation apart need 18 each for 80 %
		// by a Mann-Whitney test (Noether 1987, from memory: 17.1/0.955).
		t.Errorf("%d cells needed for a difference of one standard deviation", good.CellsNeeded)
	}
	if c := Compare(a[:3], b[:3], Options{Permutations: 100}); !has(c, "Few cells") || !has(c, "one session") {
		t.Errorf("%v", c.Warnings)
	}
	other := slices.Clone(b)
	for i := range other {
		other[i].Session += "x"
	}
	if c := Compare(a, other, Options{Permutations: 100}); !has(c, "No session holds both") || c.Within {
		t.Errorf("%v", c.Warnings)
	}
	// All of B after all of A, and everything rising with time.
	var da, db []Cell
	for i := range 12 {
		da = append(da, Cell{Session: "s", Order: float64(i), Value: 0.2*float64(i) + 0.1*rng.NormFloat64()})
		db = append(db, Cell{Session: "s", Order: float64(12 + i), Value: 0.2*float64(12+i) + 0.1*rng.NormFloat64()})
	}
	if c := Compare(da, db, Options{Permutations: 100}); !has(c, "Measure them alternately") {
		t.Errorf("%v", c.Warnings)
	}
	if c := Compare(nil, b, Options{}); !has(c, "no cells") {
		t.Errorf("%v", c.Warnings)
	}
}

func BenchmarkCompare(b *testing.B) {
	x, y := experiment(rand.New(rand.NewPCG(5, 5)), 5, 8, 1, 1)
	b.ReportAllocs()
	for b.Loop() {
		Compare(x, y, Options{})
	}
}
