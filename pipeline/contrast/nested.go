package contrast

import (
	"math"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"
)

// Permutation returns the two-sided p of the difference of medians, from n
// random exchanges of the conditions' labels (and the observed one, so that p
// is never 0). Where some session holds both conditions labels are exchanged
// within sessions only, so that differences between sessions cancel; else
// whole sessions exchange theirs, and with few sessions p cannot be small.
func Permutation(a, b []Cell, n int, seed uint64) (p float64, within bool) {
	all := append(slices.Clone(a), b...)
	isB := make([]bool, len(all))
	for i := range b {
		isB[len(a)+i] = true
	}
	shared, _ := sharedSessions(a, b)
	within = shared > 0
	by := map[string][]int{}
	var names []string
	for i, c := range all {
		if by[c.Session] == nil {
			names = append(names, c.Session)
		}
		by[c.Session] = append(by[c.Session], i)
	}
	slices.Sort(names)
	stat := func(isB []bool) float64 {
		var x, y []float64
		for i, c := range all {
			if isB[i] {
				y = append(y, c.Value)
			} else {
				x = append(x, c.Value)
			}
		}
		return math.Abs(median(y) - median(x))
	}
	observed := stat(isB) * (1 - 1e-12)
	rng := rand.New(rand.NewPCG(seed, 0x7065726d))
	labels := slices.Clone(isB)
	atLeast := 1
	for range n {
		if within {
			for _, s := range names {
				idx := by[s]
				rng.Shuffle(len(idx), func(i, j int) { labels[idx[i]], labels[idx[j]] = labels[idx[j]], labels[idx[i]] })
			}
		} else {
			perm := rng.Perm(len(names))
			for i, s := range names {
				from := isB[by[names[perm[i]]][0]]
				for _, k := range by[s] {
					labels[k] = from
				}
			}
		}
		if stat(labels) >= observed {
			atLeast++
		}
	}
	return float64(atLeast) / float64(n+1), within
}

// Nested estimates the difference B - A by a mixed model, value = level +
// difference + session + cell, sessions and cells random and normal. The ratio
// of their variances is found by restricted maximum likelihood; the interval
// uses Student's t with the degrees of freedom of the stratum in which the
// conditions differ: cells within sessions, where a session holds both, else
// sessions (containment). All NaN where there are too few.
func Nested(a, b []Cell) (e Estimate, p, dof float64) {
	e = Estimate{math.NaN(), math.NaN(), math.NaN()}
	type session struct {
		n, nb, sy, sby float64
	}
	by := map[string]*session{}
	var order []*session
	var n, yy float64
	// Centring changes no difference, and keeps sums of squares small.
	centre := mean(append(values(a), values(b)...))
	for k, g := range [][]Cell{a, b} {
		for _, c := range g {
			s := by[c.Session]
			if s == nil {
				s = &session{}
				by[c.Session] = s
				order = append(order, s)
			}
			y := c.Value - centre
			s.n++
			s.sy += y
			if k == 1 {
				s.nb++
				s.sby += y
			}
			yy += y * y
			n++
		}
	}
	shared, all := sharedSessions(a, b)
	dof = float64(all) - 2
	if shared > 0 {
		dof = n - float64(all) - 1
	}
	if dof < 1 || len(a) == 0 || len(b) == 0 {
		return e, math.NaN(), dof
	}
	// For a ratio g of variances the weight matrix of a session of n cells is
	// I - g/(1+g n) 11'; sums over sessions give the generalised least
	// squares.
	solve := func(g float64) (beta, variance, minusLogL float64) {
		var x11, x12, x22, y1, y2, q, logDet float64
		for _, s := range order {
			w := g / (1 + g*s.n)
			x11 += s.n - w*s.n*s.n
			x12 += s.nb - w*s.n*s.nb
			x22 += s.nb - w*s.nb*s.nb
			y1 += s.sy - w*s.n*s.sy
			y2 += s.sby - w*s.nb*s.sy
			q -= w * s.sy * s.sy
			logDet += math.Log1p(g * s.n)
		}
		q += yy
		det := x11*x22 - x12*x12
		if !(det > 0) {
			return math.NaN(), math.NaN(), math.Inf(1)
		}
		level := (x22*y1 - x12*y2) / det
		beta = (x11*y2 - x12*y1) / det
		rss := math.Max(q-level*y1-beta*y2, 1e-300)
		s2 := rss / (n - 2)
		return beta, s2 * x11 / det, (n-2)*math.Log(s2) + logDet + math.Log(det)
	}
	best, least := 0.0, math.Inf(1)
	for _, g := range append([]float64{0}, logspace(1e-4, 1e4, 161)...) {
		if _, _, l := solve(g); l < least {
			best, least = g, l
		}
	}
	beta, variance, _ := solve(best)
	if math.IsNaN(beta) {
		return e, math.NaN(), dof
	}
	t := distuv.StudentsT{Mu: 0, Sigma: 1, Nu: dof}
	se := math.Sqrt(variance)
	q := t.Quantile(0.975)
	return Estimate{beta, beta - q*se, beta + q*se}, 2 * t.Survival(math.Abs(beta)/se), dof
}

func logspace(lo, hi float64, n int) []float64 {
	out := make([]float64, n)
	for i := range out {
		out[i] = lo * math.Pow(hi/lo, float64(i)/float64(n-1))
	}
	return out
}

// PairedSessions returns the mean difference of session means over the sessions
// that hold both conditions, with its interval by Student's t; nil with fewer
// than three such sessions.
func PairedSessions(a, b []Cell) *Estimate {
	means := func(cells []Cell) map[string]float64 {
		sum, n := map[string]float64{}, map[string]float64{}
		for _, c := range cells {
			sum[c.Session] += c.Value
			n[c.Session]++
		}
		for s := range sum {
			sum[s] /= n[s]
		}
		return sum
	}
	ma, mb := means(a), means(b)
	var names []string
	for s := range ma {
		if _, ok := mb[s]; ok {
			names = append(names, s)
		}
	}
	if len(names) < 3 {
		return nil
	}
	slices.Sort(names)
	var d []float64
	for _, s := range names {
		d = append(d, mb[s]-ma[s])
	}
	m, ss := mean(d), 0.0
	for _, x := range d {
		ss += (x - m) * (x - m)
	}
	k := float64(len(d))
	half := distuv.StudentsT{Mu: 0, Sigma: 1, Nu: k - 1}.Quantile(0.975) * math.Sqrt(ss/(k-1)/k)
	return &Estimate{m, m - half, m + half}
}

// CellsNeeded returns how many cells a condition are needed for a Mann-Whitney
// test to see a difference at p < 0.05 with the given power, by simulation:
// values are drawn from the observed ones about their condition's median. It
// returns 0 where more than 500 would be needed, or where the observed values
// tell nothing (fewer than four a condition, no spread, no difference).
func CellsNeeded(a, b []Cell, difference, power float64, seed uint64) int {
	if len(a) < 4 || len(b) < 4 || !(math.Abs(difference) > 0) {
		return 0
	}
	var pool []float64
	spread := false
	for _, g := range [][]Cell{a, b} {
		m := median(values(g))
		for _, c := range g {
			pool = append(pool, c.Value-m)
			spread = spread || c.Value != m
		}
	}
	if !spread {
		return 0
	}
	const draws = 300
	sees := func(n int) bool {
		rng := rand.New(rand.NewPCG(seed, uint64(n)))
		x, y := make([]float64, n), make([]float64, n)
		hits := 0
		for range draws {
			for i := range n {
				x[i] = pool[rng.IntN(len(pool))]
				y[i] = pool[rng.IntN(len(pool))] + difference
			}
			if MannWhitney(x, y).P < 0.05 {
				hits++
			}
		}
		return float64(hits) >= power*draws
	}
	lo, hi := 3, 4
	for !sees(hi) {
		lo = hi
		if hi *= 2; hi > 512 {
			return 0
		}
	}
	for hi-lo > 1 {
		if m := (lo + hi) / 2; sees(m) {
			hi = m
		} else {
			lo = m
		}
	}
	if hi > 500 {
		return 0
	}
	return hi
}
