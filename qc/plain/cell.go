package plain

import (
	"fmt"
	"io"
	"strings"

	"platen/pipeline/run"
)

// CellLine is what the runs of a cell tell together, in one line, with the
// advice for the next.
func CellLine(c run.CellResult) string {
	var parts []string
	if m := bestModuli(c); m != nil && m.PoissonRatio != nil {
		parts = append(parts, fmt.Sprintf("bulk modulus %s, shear modulus %s at %.3g Hz, Poisson ratio %s (95 %%: %s)",
			Quantity(m.BulkStorageNPerM, MilliNewtonPerMetre, "mN/m"), Quantity(m.ShearStorageNPerM, MilliNewtonPerMetre, "mN/m"),
			m.FrequencyHz, Quantity(&run.Quantity{Value: m.PoissonRatio.Value, U: m.PoissonRatio.U}, 1, ""), Range(*m.PoissonRatio)))
	}
	if x := Crossover(c.Crossover); x != "" {
		parts = append(parts, "crossover "+x)
	}
	parts = append(parts, fmt.Sprintf("%d run(s)", len(c.Runs)))
	return strings.Join(parts, "; ") + ". " + c.Advice
}

// bestModuli is the entry with most heights.
func bestModuli(c run.CellResult) *run.SheetModuli {
	var best *run.SheetModuli
	for i := range c.Moduli {
		if m := &c.Moduli[i]; m.PoissonRatio != nil && (best == nil || m.Heights > best.Heights) {
			best = m
		}
	}
	return best
}

// Range writes a 95 % interval; an open end is one that the data do not set.
func Range(i run.Interval95) string {
	end := func(v float64, open bool) string {
		if open {
			return "open"
		}
		return fmt.Sprintf("%.2f", v)
	}
	return end(i.Low, i.OpenLow) + " to " + end(i.High, i.OpenHigh)
}

// Crossover writes a crossover time, or the bound that the data give.
func Crossover(c *run.Crossover) string {
	switch {
	case c == nil:
		return ""
	case c.Value != nil && c.Low != nil && c.High != nil:
		return fmt.Sprintf("%.3g s (95 %%: %.3g to %.3g s)", *c.Value, *c.Low, *c.High)
	case c.Value != nil:
		return fmt.Sprintf("%.3g s", *c.Value)
	case c.Low != nil:
		return fmt.Sprintf("longer than %.3g s", *c.Low)
	case c.High != nil:
		return fmt.Sprintf("shorter than %.3g s", *c.High)
	}
	return ""
}

// ratio writes an evidence ratio; beyond a million nobody compares.
func ratio(x float64) string {
	if x > 1e6 {
		return "over a million"
	}
	return fmt.Sprintf("%.3g", x)
}

// CellSummary writes a page about a cell.
func CellSummary(w io.Writer, c run.CellResult) error {
	p := &printer{w: w}
	p.printf("cell %s", Text(c.Cell))
	if c.Session != "" {
		p.printf(", session %s", Text(c.Session))
	}
	if c.Condition != "" {
		p.printf(", condition %s", Text(c.Condition))
	}
	p.printf(": %d run(s)", len(c.Runs))
	if n := len(c.LeftOut); n > 0 {
		p.printf(", %d left out (to be repeated)", n)
	}
	p.printf("\n")
	if c.TensionNPerM != nil && c.TensionRatio != nil {
		p.printf("  tension %s at %.2f of the diameter\n", Quantity(c.TensionNPerM, MilliNewtonPerMetre, "mN/m"), c.TensionRatio.Value)
	}
	for _, m := range c.Moduli {
		p.printf("  %.3g Hz, %d height(s): ", m.FrequencyHz, m.Heights)
		if m.PoissonRatio == nil {
			p.printf("%s\n", Text(m.Why))
			continue
		}
		p.printf("KB′ %s, KB″ %s, KS′ %s, KS″ %s mN/m\n", Quantity(m.BulkStorageNPerM, MilliNewtonPerMetre, ""), Quantity(m.BulkLossNPerM, MilliNewtonPerMetre, ""),
			Quantity(m.ShearStorageNPerM, MilliNewtonPerMetre, ""), Quantity(m.ShearLossNPerM, MilliNewtonPerMetre, ""))
		resolved := ""
		if !m.Resolved {
			resolved = ", NOT resolved"
		}
		p.printf("      Poisson ratio %s (95 %%: %s)%s; most uncertain through the %s\n",
			Quantity(&run.Quantity{Value: m.PoissonRatio.Value, U: m.PoissonRatio.U}, 1, ""), Range(*m.PoissonRatio), resolved, m.DominantUncertainty)
		if o := m.PoissonRatioOther; o != nil {
			p.printf("      with the other kind of plates it would be %s\n", Quantity(&run.Quantity{Value: o.Value, U: o.U}, 1, ""))
		}
		if m.Why != "" {
			p.printf("      %s\n", Text(m.Why))
		}
	}
	for _, f := range c.FrequencyModels {
		p.printf("  at %.2f of the diameter, %d frequencies: ", f.HeightRatio, f.Frequencies)
		if len(f.Models) == 0 {
			p.printf("%s\n", Text(f.Why))
			continue
		}
		for i, m := range f.Models[:min(2, len(f.Models))] {
			if i > 0 {
				p.printf("; next %s (evidence ratio %s)", m.Model, ratio(m.EvidenceRatio))
				continue
			}
			p.printf("%s", m.Model)
			for j, x := range m.Parameters {
				sep := ", "
				if j == 0 {
					sep = " "
				}
				u := 0.0
				if x.U != nil {
					u = *x.U
				}
				scale, unit := 1.0, x.Unit
				if unit == "N/m" {
					scale, unit = MilliNewtonPerMetre, "mN/m"
				} else if unit == "1" {
					unit = ""
				}
				p.printf("%s%s = %s", sep, x.Name, Quantity(&run.Quantity{Value: x.Value, U: u}, scale, unit))
			}
		}
		if f.Why != "" {
			p.printf("; %s", f.Why)
		}
		p.printf("\n")
	}
	if x := Crossover(c.Crossover); x != "" {
		p.printf("  crossover time %s\n", x)
	}
	for _, r := range c.Relaxation {
		settled := "had settled"
		if !r.Settled {
			settled = "had NOT settled"
		}
		p.printf("  relaxation at %.2f of the diameter: %s, %.3g s; the tension %s\n", r.HeightRatio, r.Law, r.TimeS, settled)
	}
	for _, f := range c.Findings {
		p.printf("  %s: %s: %s %s\n", f.Severity, f.Rule, f.Message, f.Advice)
	}
	p.printf("  %s\n", c.Advice)
	return p.err
}
