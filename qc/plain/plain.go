// Package plain writes quantities and results as a lab writes them: value ±
// standard uncertainty, rounded to the uncertainty, in the units of the bench.
//
// Start with Line for the verdict in one line and Summary for a page. The
// package formats only: it judges and computes nothing.
package plain

import (
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"

	"platen/pipeline/run"
)

// Quantity writes q times scale with its unit, "—" where q is nil. The
// uncertainty gets one significant digit, or two where its leading digit is 1
// or 2, so that rounding changes it by at most a fifth; the value ends at the
// same digit.
func Quantity(q *run.Quantity, scale float64, unit string) string {
	if q == nil {
		return "—"
	}
	v, u := q.Value*scale, q.U*scale
	value, uncertainty := Rounded(v, u)
	if uncertainty == "" {
		return value + space(unit)
	}
	return value + " ± " + uncertainty + space(unit)
}

func space(unit string) string {
	if unit == "" || unit == "°" {
		return unit
	}
	return " " + unit
}

// Rounded writes a value and its standard uncertainty to the digits that the
// uncertainty allows. Without an uncertainty, four significant digits are
// given and the second string is empty.
func Rounded(v, u float64) (value, uncertainty string) {
	if !(u > 0) || math.IsInf(u, 0) {
		return strconv.FormatFloat(v, 'g', 4, 64), ""
	}
	exp := int(math.Floor(math.Log10(u)))
	digits := 1
	// 2.95 rounds to 3: decide after rounding to two digits.
	if lead := math.Round(u/math.Pow(10, float64(exp-1))) / 10; lead < 2.95 {
		digits = 2
	} else if lead >= 9.95 {
		exp++
		digits = 2
	}
	decimals := digits - 1 - exp
	if decimals >= 0 {
		return strconv.FormatFloat(v, 'f', decimals, 64), strconv.FormatFloat(u, 'f', decimals, 64)
	}
	unit := math.Pow(10, float64(-decimals))
	return strconv.FormatFloat(math.Round(v/unit)*unit, 'f', 0, 64), strconv.FormatFloat(math.Round(u/unit)*unit, 'f', 0, 64)
}

// Headline returns the segment that stands for the run: the oscillation whose
// modulus is known best, else the last hold with a tension; nil where there is
// neither.
func Headline(r run.Result) *run.Segment {
	var best, hold *run.Segment
	least := math.Inf(1)
	for i := range r.Segments {
		s := &r.Segments[i]
		switch {
		case s.StorageNPerM != nil && s.StorageNPerM.Value != 0:
			if u := math.Abs(s.StorageNPerM.U / s.StorageNPerM.Value); u < least {
				best, least = s, u
			}
		case s.Mode == run.Hold && s.TensionNPerM != nil:
			hold = s
		}
	}
	if best != nil {
		return best
	}
	return hold
}

// Units of the bench.
const (
	MilliNewtonPerMetre = 1e3
	NanoNewton          = 1e9
	Micrometre          = 1e6
	Picolitre           = 1e15 // 1 pL = 1e-15 m^3
)

// Name is what a person calls the run: its cell where it names one, else its
// file.
func Name(r run.Result) string {
	if r.Run.Cell != "" {
		return r.Run.Cell
	}
	return Text(r.Run.File)
}

// Line is the verdict in one line: verdict, cell, file, tension, storage and
// loss modulus, and, where it is not accept, the worst finding and its advice.
func Line(r run.Result) string {
	var b strings.Builder
	fmt.Fprintf(&b, "%s  %s", strings.ToUpper(string(r.Verdict)), Text(Name(r)))
	if r.Run.Cell != "" {
		fmt.Fprintf(&b, " (%s)", Text(r.Run.File))
	}
	if s := Headline(r); s != nil {
		b.WriteString(": ")
		b.WriteString(numbers(s))
	} else if r.Run.Kind != run.KindCell {
		fmt.Fprintf(&b, ": %s run", r.Run.Kind)
		if x := r.Reference; x != nil {
			b.WriteString(reference(*x))
		}
	}
	if r.Verdict != run.Accept && len(r.Findings) > 0 {
		f := r.Findings[0]
		fmt.Fprintf(&b, " — %s %s", Text(f.Message), Text(f.Advice))
	}
	return b.String()
}

func numbers(s *run.Segment) string {
	parts := []string{"tension " + Quantity(s.TensionNPerM, MilliNewtonPerMetre, "mN/m")}
	if s.StorageNPerM != nil {
		parts = append(parts,
			"K′ "+Quantity(s.StorageNPerM, MilliNewtonPerMetre, "mN/m"),
			"K″ "+Quantity(s.LossNPerM, MilliNewtonPerMetre, "mN/m"),
			"at "+frequency(s.FrequencyHz))
	}
	return strings.Join(parts, ", ")
}

// reference says what a reference run measured, "" where nothing.
func reference(x run.Reference) string {
	s := ""
	if x.SpringConstantNPerM != nil {
		s = fmt.Sprintf(", spring constant %s, resonance %s, quality factor %s",
			Quantity(x.SpringConstantNPerM, 1, "N/m"), Quantity(x.ResonanceHz, 1e-3, "kHz"), Quantity(x.QualityFactor, 1, ""))
	}
	if x.ForceNoiseN != nil {
		s += fmt.Sprintf(", force noise %.3g pN a sample", 1e12**x.ForceNoiseN)
	}
	if x.SteadiestS != nil {
		for _, a := range x.Allan {
			if a.TimeS == *x.SteadiestS {
				s += fmt.Sprintf(", steadiest averaged over %.2g s (%.2g pN)", a.TimeS, 1e12*a.DeviationN)
			}
		}
	}
	return s
}

// frequency is known far better than anybody wants to read.
func frequency(q *run.Quantity) string {
	if q == nil {
		return "—"
	}
	return strconv.FormatFloat(q.Value, 'g', 4, 64) + " Hz"
}

// Text makes a string from a file safe for a terminal: control characters are
// shown, not obeyed.
func Text(s string) string {
	clean := strconv.Quote(s)
	clean = clean[1 : len(clean)-1]
	return strings.NewReplacer(`\"`, `"`, `\\`, `\`).Replace(clean)
}

// Summary writes a page about a run.
func Summary(w io.Writer, r run.Result) error {
	p := &printer{w: w}
	p.printf("%s  %s\n", strings.ToUpper(string(r.Verdict)), Text(r.Run.File))
	var facts []string
	add := func(name, value string) {
		if value != "" {
			facts = append(facts, name+" "+Text(value))
		}
	}
	add("cell", r.Run.Cell)
	add("session", r.Run.Session)
	add("condition", r.Run.Condition)
	add("started", r.Run.Started)
	if len(facts) > 0 {
		p.printf("  %s\n", strings.Join(facts, ", "))
	}
	complete := "complete"
	if !r.Run.Complete {
		complete = "NOT complete"
	}
	p.printf("  %s run, %d samples in %.2f s, %s\n", r.Run.Kind, r.Run.Samples, r.Run.DurationS, complete)
	if c := r.Cell; c != nil {
		diameter := c.SphereRadiusM
		if diameter != nil {
			diameter = &run.Quantity{Value: 2 * diameter.Value, U: 2 * diameter.U}
		}
		p.printf("  cell volume %s, diameter %s (from %s)\n",
			Quantity(c.VolumeM3, Picolitre, "pL"), Quantity(diameter, Micrometre, "µm"), sourceName(c.VolumeSource))
	}
	if x := r.Reference; x != nil && reference(*x) != "" {
		p.printf("  %s\n", strings.TrimPrefix(reference(*x), ", "))
	}
	for _, s := range r.Segments {
		p.segment(s)
	}
	for _, f := range r.Findings {
		p.printf("  %s: %s: %s\n      %s\n", f.Severity, f.Rule, Text(f.Message), Text(f.Advice))
	}
	p.printf("  id %s\n", r.Run.ID)
	return p.err
}

func sourceName(s run.VolumeSource) string {
	switch s {
	case run.VolumeImaged:
		return "images"
	case run.VolumeDeclared:
		return "the declared diameter"
	case run.VolumeContact:
		return "the first contact"
	}
	return string(s)
}

func lacking(s run.Segment) string {
	if s.Mode == run.Oscillation {
		return "modulus"
	}
	return "tension"
}

type printer struct {
	w   io.Writer
	err error
}

func (p *printer) printf(format string, args ...any) {
	if p.err == nil {
		_, p.err = fmt.Fprintf(p.w, format, args...)
	}
}

func (p *printer) segment(s run.Segment) {
	if s.Why != "" {
		defer func() { p.printf("              no %s: %s\n", lacking(s), Text(s.Why)) }()
	}
	p.printf("  %-11s %7.2f – %7.2f s", s.Mode, s.FromS, s.ToS)
	if s.HeightM != nil {
		p.printf("  height %s", Quantity(s.HeightM, Micrometre, "µm"))
	}
	if s.HeightRatio != nil && s.HeightRatio.Value < 1 {
		p.printf(" (%.3f of the diameter)", s.HeightRatio.Value)
	}
	p.printf("\n")
	const indent = "              "
	if s.TensionNPerM != nil {
		p.printf("%stension %s", indent, Quantity(s.TensionNPerM, MilliNewtonPerMetre, "mN/m"))
		if s.ForceN != nil {
			p.printf(", force %s", Quantity(s.ForceN, NanoNewton, "nN"))
		}
		if s.VolumeChange != nil {
			p.printf(", volume %+.1f %%", 100*s.VolumeChange.Value)
		}
		p.printf("\n")
	}
	if s.StorageNPerM != nil {
		p.printf("%sK′ %s, K″ %s, phase %s at %s, %.1f cycles, strain ±%s\n", indent,
			Quantity(s.StorageNPerM, MilliNewtonPerMetre, "mN/m"), Quantity(s.LossNPerM, MilliNewtonPerMetre, "mN/m"),
			Quantity(s.PhaseDeg, 1, "°"), frequency(s.FrequencyHz), s.Cycles, Quantity(s.AreaStrainAmplitude, 100, "%"))
	}
}
