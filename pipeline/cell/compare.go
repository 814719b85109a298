package cell

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"time"

	"platen/pipeline/contrast"
	"platen/pipeline/cortex"
	"platen/pipeline/run"
)

// CompareOptions are the choices of Compare.
type CompareOptions struct {
	Difference float64 // relative difference of the medians for the power, such as 0.2; 0: the observed shift
	Seed       uint64
}

// Compare compares two or more conditions over the documents of cells: the
// tension, the effective modulus at the height and frequency that most cells
// share, and, where cells have them, bulk and shear modulus and Poisson ratio
// at the frequency most shared.
func Compare(cells []run.CellResult, conditions []string, o CompareOptions, sw run.Software) run.Comparison {
	out := run.Comparison{Schema: run.ComparisonSchema, Conditions: conditions, Quantities: []run.QuantityComparison{}, Warnings: []string{}, Software: sw}
	var used []run.CellResult
	for _, c := range cells {
		if slices.Contains(conditions, c.Condition) {
			used = append(used, c)
		}
	}
	for _, name := range conditions {
		if !slices.ContainsFunc(used, func(c run.CellResult) bool { return c.Condition == name }) {
			out.Warnings = append(out.Warnings, fmt.Sprintf("No cell of condition %q is stored.", name))
		}
	}
	for _, q := range quantities(used) {
		out.Quantities = append(out.Quantities, compareOne(used, conditions, q, o))
	}
	return out
}

// quantity picks one number from a cell's document, nil where it has none.
type quantity struct {
	name             string
	ratio, frequency float64
	of               func(run.CellResult) *run.Quantity
}

func quantities(cells []run.CellResult) []quantity {
	qs := []quantity{{name: "tension_n_per_m", of: func(c run.CellResult) *run.Quantity { return c.TensionNPerM }}}
	if ratio, freq, ok := mostShared(cells); ok {
		pick := func(c run.CellResult) *run.EffectiveModulus {
			for i, e := range c.Effective {
				if like(e.HeightRatio, ratio, 2*sameRatio) && like(e.FrequencyHz, freq, sameFrequency) {
					return &c.Effective[i]
				}
			}
			return nil
		}
		qs = append(qs,
			quantity{"storage_n_per_m", ratio, freq, func(c run.CellResult) *run.Quantity {
				if e := pick(c); e != nil {
					return e.StorageNPerM
				}
				return nil
			}},
			quantity{"loss_n_per_m", ratio, freq, func(c run.CellResult) *run.Quantity {
				if e := pick(c); e != nil {
					return e.LossNPerM
				}
				return nil
			}})
	}
	if freq, ok := mostResolved(cells); ok {
		pick := func(of func(run.SheetModuli) *run.Quantity) func(run.CellResult) *run.Quantity {
			return func(c run.CellResult) *run.Quantity {
				for _, m := range c.Moduli {
					if m.Resolved && like(m.FrequencyHz, freq, sameFrequency) {
						return of(m)
					}
				}
				return nil
			}
		}
		qs = append(qs,
			quantity{"bulk_storage_n_per_m", 0, freq, pick(func(m run.SheetModuli) *run.Quantity { return m.BulkStorageNPerM })},
			quantity{"shear_storage_n_per_m", 0, freq, pick(func(m run.SheetModuli) *run.Quantity { return m.ShearStorageNPerM })},
			quantity{"poisson_ratio", 0, freq, pick(func(m run.SheetModuli) *run.Quantity {
				if m.PoissonRatio == nil {
					return nil
				}
				return &run.Quantity{Value: m.PoissonRatio.Value, U: m.PoissonRatio.U}
			})})
	}
	return qs
}

func like(a, b, share float64) bool { return math.Abs(a-b) <= share*b }

// mostShared returns the height and frequency at which most cells have an
// effective modulus.
func mostShared(cells []run.CellResult) (ratio, freq float64, ok bool) {
	most := 0
	for _, c := range cells {
		for _, e := range c.Effective {
			n := 0
			for _, d := range cells {
				if slices.ContainsFunc(d.Effective, func(x run.EffectiveModulus) bool {
					return like(x.HeightRatio, e.HeightRatio, 2*sameRatio) && like(x.FrequencyHz, e.FrequencyHz, sameFrequency)
				}) {
					n++
				}
			}
			if n > most {
				most, ratio, freq = n, e.HeightRatio, e.FrequencyHz
			}
		}
	}
	return ratio, freq, most > 0
}

// mostResolved returns the frequency at which most cells have bulk and shear
// apart, if at least two do.
func mostResolved(cells []run.CellResult) (freq float64, ok bool) {
	most := 1
	for _, c := range cells {
		for _, m := range c.Moduli {
			if !m.Resolved {
				continue
			}
			n := 0
			for _, d := range cells {
				if slices.ContainsFunc(d.Moduli, func(x run.SheetModuli) bool {
					return x.Resolved && like(x.FrequencyHz, m.FrequencyHz, sameFrequency)
				}) {
					n++
				}
			}
			if n > most {
				most, freq = n, m.FrequencyHz
			}
		}
	}
	return freq, most > 1
}

func compareOne(cells []run.CellResult, conditions []string, q quantity, o CompareOptions) run.QuantityComparison {
	out := run.QuantityComparison{Name: q.name, HeightRatio: q.ratio, FrequencyHz: q.frequency, Pairs: []run.Pair{}}
	order := orders(cells)
	groups := make([][]contrast.Cell, len(conditions))
	for i, name := range conditions {
		var pooled []cortex.Quantity
		for k, c := range cells {
			v := q.of(c)
			if c.Condition != name || v == nil {
				continue
			}
			groups[i] = append(groups[i], contrast.Cell{Name: c.Cell, Session: c.Session, Order: order[k], Value: v.Value})
			pooled = append(pooled, cortex.Quantity{Value: v.Value, U: v.U})
		}
		out.Conditions = append(out.Conditions, summary(name, groups[i], pooled))
	}
	if len(conditions) > 2 {
		var vs [][]float64
		for _, g := range groups {
			if len(g) > 0 {
				vs = append(vs, valuesOf(g))
			}
		}
		if len(vs) > 2 {
			_, p := contrast.KruskalWallis(vs...)
			out.KruskalP = run.Number(p)
		}
	}
	var ps []float64
	for i := range conditions {
		for j := i + 1; j < len(conditions); j++ {
			c := contrast.Compare(groups[i], groups[j], contrast.Options{Seed: o.Seed, Difference: o.Difference * c50(groups[i])})
			ps = append(ps, c.MannWhitney.P)
			out.Pairs = append(out.Pairs, pair(conditions[i], conditions[j], c))
		}
	}
	if len(conditions) > 2 && !slices.ContainsFunc(ps, math.IsNaN) {
		for i, p := range contrast.Holm(ps) {
			out.Pairs[i].HolmP = run.Number(p)
		}
	}
	return out
}

func valuesOf(g []contrast.Cell) []float64 {
	var v []float64
	for _, c := range g {
		v = append(v, c.Value)
	}
	return v
}

func c50(g []contrast.Cell) float64 {
	if len(g) == 0 {
		return 0
	}
	return math.Abs(contrast.Summarise(g).Median)
}

// orders returns when each cell was measured, in s after the first of its
// session; NaN where a run names no start.
func orders(cells []run.CellResult) []float64 {
	first := map[string]time.Time{}
	at := make([]time.Time, len(cells))
	for i, c := range cells {
		t, err := time.Parse(time.RFC3339Nano, c.StartedAt)
		if err != nil {
			continue
		}
		at[i] = t
		if f, ok := first[c.Session]; !ok || t.Before(f) {
			first[c.Session] = t
		}
	}
	out := make([]float64, len(cells))
	for i, c := range cells {
		out[i] = math.NaN()
		if !at[i].IsZero() {
			out[i] = at[i].Sub(first[c.Session]).Seconds()
		}
	}
	return out
}

func summary(name string, g []contrast.Cell, pooled []cortex.Quantity) run.ConditionSummary {
	s := contrast.Summarise(g)
	out := run.ConditionSummary{Condition: name, Cells: s.Cells, Sessions: s.Sessions, Median: run.Number(s.Median),
		BetweenCells: run.Number(s.BetweenCells), BetweenSessions: run.Number(s.BetweenSessions), Outliers: s.Outliers}
	if s.Cover > 0 {
		out.MedianLow, out.MedianHigh = run.Number(s.Low), run.Number(s.High)
	}
	if len(pooled) >= 2 {
		if p, err := cortex.Pool(pooled); err == nil && run.Known(p.Mean.Value, p.Mean.U) != nil {
			out.Pooled = &run.Interval95{Value: p.Mean.Value, U: p.Mean.U, Low: p.Low, High: p.High}
			out.TrueSpread = run.Number(p.Between)
		}
	}
	return out
}

func pair(first, second string, c contrast.Comparison) run.Pair {
	return run.Pair{
		First: first, Second: second,
		MannWhitneyP: run.Number(c.MannWhitney.P), Exact: c.MannWhitney.Exact, Shift: ranged(c.Shift),
		PermutationP: run.Number(c.Permutation), Within: c.Within,
		Nested: ranged(c.Nested), NestedP: run.Number(c.NestedP), NestedDoF: dof(c.NestedDoF),
		Sessions: rangedPointer(c.Paired), CellsNeeded: c.CellsNeeded, Warnings: c.Warnings,
	}
}

func dof(x float64) *float64 {
	if x < 1 {
		return nil
	}
	return run.Number(x)
}

func ranged(e contrast.Estimate) *run.Range95 {
	if run.Number(e.Value) == nil {
		return nil
	}
	return &run.Range95{Value: e.Value, Low: run.Number(e.Low), High: run.Number(e.High)}
}

func rangedPointer(e *contrast.Estimate) *run.Range95 {
	if e == nil {
		return nil
	}
	return ranged(*e)
}

// Conditions returns the conditions of cells, by name.
func Conditions(cells []run.CellResult) []string {
	var out []string
	for _, c := range cells {
		if c.Condition != "" && !slices.Contains(out, c.Condition) {
			out = append(out, c.Condition)
		}
	}
	slices.SortFunc(out, cmp.Compare[string])
	return out
}
