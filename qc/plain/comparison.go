package plain

import (
	"fmt"
	"io"
	"strings"

	"platen/pipeline/run"
)

// quantityNames tells people what a quantity is, its bench unit and scale.
var quantityNames = map[string]struct {
	name, unit string
	scale      float64
}{
	"tension_n_per_m":       {"tension", "mN/m", MilliNewtonPerMetre},
	"storage_n_per_m":       {"storage modulus K′", "mN/m", MilliNewtonPerMetre},
	"loss_n_per_m":          {"loss modulus K″", "mN/m", MilliNewtonPerMetre},
	"bulk_storage_n_per_m":  {"bulk modulus KB′", "mN/m", MilliNewtonPerMetre},
	"shear_storage_n_per_m": {"shear modulus KS′", "mN/m", MilliNewtonPerMetre},
	"poisson_ratio":         {"Poisson ratio", "", 1},
}

// ComparisonPage writes a page about a comparison.
func ComparisonPage(w io.Writer, c run.Comparison) error {
	p := &printer{w: w}
	for _, x := range c.Warnings {
		p.printf("warning: %s\n", Text(x))
	}
	warned := map[string]bool{}
	for _, q := range c.Quantities {
		n, ok := quantityNames[q.Name]
		if !ok {
			n.name, n.scale = q.Name, 1
		}
		p.printf("%s", n.name)
		if n.unit != "" {
			p.printf(" [%s]", n.unit)
		}
		if q.FrequencyHz > 0 {
			p.printf(" at %.3g Hz", q.FrequencyHz)
		}
		if q.HeightRatio > 0 {
			p.printf(", %.2f of the diameter", q.HeightRatio)
		}
		p.printf("\n")
		for _, s := range q.Conditions {
			p.printf("  %-24s %d cell(s) in %d session(s)", Text(s.Condition), s.Cells, s.Sessions)
			if s.Median != nil {
				p.printf(", median %.4g", *s.Median*n.scale)
			}
			if s.MedianLow != nil && s.MedianHigh != nil {
				p.printf(" (95 %%: %.4g to %.4g)", *s.MedianLow*n.scale, *s.MedianHigh*n.scale)
			}
			if s.Pooled != nil {
				p.printf(", mean of the cells' true values %s", Quantity(&run.Quantity{Value: s.Pooled.Value, U: s.Pooled.U}, n.scale, ""))
			}
			if s.BetweenCells != nil {
				p.printf(", sd between cells %.2g", *s.BetweenCells*n.scale)
			}
			if s.BetweenSessions != nil {
				p.printf(", between sessions %.2g", *s.BetweenSessions*n.scale)
			}
			if len(s.Outliers) > 0 {
				p.printf(", far out: %s", Text(strings.Join(s.Outliers, ", ")))
			}
			p.printf("\n")
		}
		if q.KruskalP != nil {
			p.printf("  all conditions: Kruskal–Wallis p = %.2g\n", *q.KruskalP)
		}
		for _, x := range q.Pairs {
			p.printf("  %s less %s:\n", Text(x.Second), Text(x.First))
			line := func(name string, r *run.Range95, ps ...string) {
				if r == nil {
					return
				}
				p.printf("    %-34s %+.3g", name, r.Value*n.scale)
				if r.Low != nil && r.High != nil {
					p.printf(" (95 %%: %+.3g to %+.3g)", *r.Low*n.scale, *r.High*n.scale)
				}
				for _, s := range ps {
					p.printf("%s", s)
				}
				p.printf("\n")
			}
			line("cells nested in sessions", x.Nested, prob(", p = ", x.NestedP))
			line("session means", x.Sessions)
			line("median shift (Hodges–Lehmann)", x.Shift, prob(", Mann–Whitney p = ", x.MannWhitneyP), prob(", after Holm ", x.HolmP))
			if x.PermutationP != nil {
				how := "of whole sessions"
				if x.Within {
					how = "within sessions"
				}
				p.printf("    permutation %s: p = %.2g\n", how, *x.PermutationP)
			}
			if x.CellsNeeded > 0 {
				p.printf("    cells needed a condition to see it (80 %% power): %d\n", x.CellsNeeded)
			}
			for _, s := range x.Warnings {
				if !warned[s] {
					warned[s] = true
					p.printf("    warning: %s\n", Text(s))
				}
			}
		}
	}
	return p.err
}

func prob(before string, p *float64) string {
	if p == nil {
		return ""
	}
	return fmt.Sprintf("%s%.2g", before, *p)
}
