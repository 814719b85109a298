// Package contrast compares conditions: groups of cells, each cell one value
// however many runs it had, nested in sessions.
//
// Start with Compare, which gathers everything a fair comparison of two
// conditions needs; the rest are its parts, usable alone. Values are never
// removed: outliers are marked.
//
// Cells of one session share a dish, a day and a rig. Tests that take all cells
// for independent (MannWhitney) are shown, but the answer that counts them
// honestly is that of Nested and of Permutation, which shuffles within
// sessions.
package contrast

import (
	"cmp"
	"fmt"
	"math"
	"slices"
)

// Cell is one cell's value.
type Cell struct {
	Name    string
	Session string
	Order   float64 // when it was measured, any unit; NaN where not known
	Value   float64
}

// Summary describes one condition.
type Summary struct {
	Cells, Sessions int
	Median          float64
	// Low and High bound the median with Cover probability (order
	// statistics, no distribution assumed); Cover is 0 with fewer than six
	// cells, whose whole range covers less than 95 %.
	Low, High, Cover float64
	Mean             float64
	BetweenCells     float64 // standard deviation between cells of a session
	BetweenSessions  float64 // standard deviation between sessions; NaN with one session
	Outliers         []string
}

// Summarise describes one condition.
func Summarise(cells []Cell) Summary {
	v := values(cells)
	s := Summary{Cells: len(cells), BetweenCells: math.NaN(), BetweenSessions: math.NaN()}
	if len(v) == 0 {
		s.Median, s.Mean = math.NaN(), math.NaN()
		return s
	}
	s.Median, s.Mean = median(v), mean(v)
	s.Low, s.High, s.Cover = medianInterval(v)
	z := ModifiedZ(v)
	for i, c := range cells {
		if len(v) >= fewestMarked && math.Abs(z[i]) > outlying {
			s.Outliers = append(s.Outliers, c.Name)
		}
	}
	by := sessions(cells)
	s.Sessions = len(by)
	s.BetweenCells, s.BetweenSessions = components(by)
	return s
}

func values(cells []Cell) []float64 {
	v := make([]float64, len(cells))
	for i, c := range cells {
		v[i] = c.Value
	}
	return v
}

func mean(v []float64) float64 {
	s := 0.0
	for _, x := range v {
		s += x
	}
	return s / float64(len(v))
}

func median(v []float64) float64 {
	s := slices.Clone(v)
	slices.Sort(s)
	n := len(s)
	if n == 0 {
		return math.NaN()
	}
	return (s[(n-1)/2] + s[n/2]) / 2
}

// medianInterval returns the narrowest symmetric pair of order statistics that
// holds the median with at least 95 %: P = 1 - 2 sum_{i<k} C(n,i)/2^n.
func medianInterval(v []float64) (low, high, cover float64) {
	s := slices.Clone(v)
	slices.Sort(s)
	n := len(s)
	below := math.Pow(0.5, float64(n))
	term, tail := below, below
	k := 0
	for i := 1; 1-2*tail >= 0.95 && i <= n/2; i++ {
		k = i
		cover = 1 - 2*tail
		term *= float64(n-i+1) / float64(i)
		tail += term
	}
	if k == 0 {
		return 0, 0, 0
	}
	return s[k-1], s[n-k], cover
}

// outlying is the modified z-score beyond which a value is marked (Iglewicz and
// Hoaglin, How to Detect and Handle Outliers, 1993; from memory).
const outlying = 3.5

// fewestMarked is the number of values below which none is marked: the median
// deviation of a handful is too often small by chance.
const fewestMarked = 6

// ModifiedZ returns 0.6745 (x - median)/MAD of each value (Iglewicz and
// Hoaglin), zeros where the MAD is 0.
func ModifiedZ(v []float64) []float64 {
	m := median(v)
	d := make([]float64, len(v))
	for i, x := range v {
		d[i] = math.Abs(x - m)
	}
	mad := median(d)
	z := make([]float64, len(v))
	for i, x := range v {
		if mad > 0 {
			z[i] = 0.6745 * (x - m) / mad
		}
	}
	return z
}

// sessions groups values by session, in the order of the names.
func sessions(cells []Cell) [][]float64 {
	by := map[string][]float64{}
	for _, c := range cells {
		by[c.Session] = append(by[c.Session], c.Value)
	}
	var names []string
	for n := range by {
		names = append(names, n)
	}
	slices.Sort(names)
	var out [][]float64
	for _, n := range names {
		out = append(out, by[n])
	}
	return out
}

// components estimates the standard deviations within and between sessions by
// one-way analysis of variance with random effects (method of moments, uneven
// groups; Searle, Casella and McCulloch, Variance Components, 1992, from
// memory).
func components(by [][]float64) (within, between float64) {
	n, sum, sq := 0, 0.0, 0.0
	ss := 0.0
	for _, g := range by {
		m := mean(g)
		for _, x := range g {
			ss += (x - m) * (x - m)
		}
		n += len(g)
		sum += m * float64(len(g))
		sq += float64(len(g) * len(g))
	}
	k := len(by)
	if n-k < 1 {
		within = math.NaN()
	} else {
		within = math.Sqrt(ss / float64(n-k))
	}
	if k < 2 || math.IsNaN(within) {
		return within, math.NaN()
	}
	grand := sum / float64(n)
	ssb := 0.0
	for _, g := range by {
		d := mean(g) - grand
		ssb += float64(len(g)) * d * d
	}
	n0 := (float64(n) - sq/float64(n)) / float64(k-1)
	return within, math.Sqrt(math.Max(0, (ssb/float64(k-1)-within*within)/n0))
}

// Comparison is what can fairly be said of two conditions. Shifts are B minus
// A.
type Comparison struct {
	A, B        Summary
	MannWhitney RankTest
	Shift       Estimate // Hodges and Lehmann
	Permutation float64  // two-sided p of the difference of medians, shuffled within sessions where possible
	Within      bool     // it was
	Nested      Estimate // mixed model: cells nested in sessions
	NestedP     float64
	NestedDoF   float64
	Paired      *Estimate // of session means, where at least three sessions have both conditions
	CellsNeeded int       // cells a condition for 80 % power at the observed shift; 0 where more than 500 or not to be told
	Warnings    []string
}

// Estimate is a value with its 95 % interval; NaN where not to be told.
type Estimate struct{ Value, Low, High float64 }

// Options are the choices of Compare.
type Options struct {
	Permutations int // default 5000
	Seed         uint64
	Difference   float64 // for the power; 0: the observed shift
}

// Compare compares condition B with condition A.
func Compare(a, b []Cell, o Options) Comparison {
	if o.Permutations == 0 {
		o.Permutations = 5000
	}
	c := Comparison{A: Summarise(a), B: Summarise(b)}
	nan := Estimate{math.NaN(), math.NaN(), math.NaN()}
	c.Shift, c.Nested, c.NestedP, c.Permutation = nan, nan, math.NaN(), math.NaN()
	c.MannWhitney.P = math.NaN()
	warn := func(format string, args ...any) { c.Warnings = append(c.Warnings, fmt.Sprintf(format, args...)) }
	if len(a) == 0 || len(b) == 0 {
		warn("One condition has no cells: nothing can be compared.")
		return c
	}
	va, vb := values(a), values(b)
	c.MannWhitney = MannWhitney(va, vb)
	c.Shift = HodgesLehmann(va, vb)
	c.Permutation, c.Within = Permutation(a, b, o.Permutations, o.Seed)
	c.Nested, c.NestedP, c.NestedDoF = Nested(a, b)
	c.Paired = PairedSessions(a, b)
	diff := o.Difference
	if diff == 0 {
		diff = c.Shift.Value
	}
	c.CellsNeeded = CellsNeeded(a, b, diff, 0.8, o.Seed)

	if len(a) < 5 || len(b) < 5 {
		warn("Few cells (%d and %d): a test can hardly reach significance, and an absent difference means little.", len(a), len(b))
	}
	shared, all := sharedSessions(a, b)
	switch {
	case all == 1:
		warn("All cells are of one session: how much sessions differ is not known, so the result holds for that session only.")
	case shared == 0:
		warn("No session holds both conditions: a difference between sessions cannot be told from one between conditions.")
	}
	if w := ConfoundedWithDrift(a, b); w != "" {
		warn("%s", w)
	}
	return c
}

func sharedSessions(a, b []Cell) (shared, all int) {
	in := map[string]int{}
	for _, c := range a {
		in[c.Session] |= 1
	}
	for _, c := range b {
		in[c.Session] |= 2
	}
	for _, x := range in {
		if x == 3 {
			shared++
		}
	}
	return shared, len(in)
}

// ConfoundedWithDrift warns where a difference may be one of time: the two
// conditions were measured at different times of their sessions (Mann-Whitney
// of the order, p < 0.05), and within the conditions the value trends with
// order (Mann-Kendall, p < 0.05, of the values less the median of their
// condition). Without orders it says nothing.
func ConfoundedWithDrift(a, b []Cell) string {
	var oa, ob []float64
	type point struct{ order, value float64 }
	var ps []point
	for k, g := range [][]Cell{a, b} {
		m := median(values(g))
		for _, c := range g {
			if math.IsNaN(c.Order) {
				continue
			}
			if k == 0 {
				oa = append(oa, c.Order)
			} else {
				ob = append(ob, c.Order)
			}
			ps = append(ps, point{c.Order, c.Value - m})
		}
	}
	if len(oa) < 3 || len(ob) < 3 || MannWhitney(oa, ob).P >= 0.05 {
		return ""
	}
	slices.SortStableFunc(ps, func(x, y point) int { return cmp.Compare(x.order, y.order) })
	v := make([]float64, len(ps))
	for i, p := range ps {
		v[i] = p.value
	}
	if k := MannKendall(v); k.P < 0.05 {
		return "The conditions were measured at different times, and within each the value drifts with time: the difference may be the rig's or the dish's drift. Measure them alternately."
	}
	return ""
}
