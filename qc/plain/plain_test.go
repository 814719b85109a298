package plain

import (
	"bytes"
	"strings"
	"testing"

	"platen/pipeline/run"
)

// Rounding to the uncertainty: one significant digit of u, two where it leads
// with 1 or 2 (common practice, no source; the Particle Data Group's rule is
// close to it).
func TestRounded(t *testing.T) {
	for _, c := range []struct {
		v, u        float64
		value, with string
	}{
		{12.3456, 0.4321, "12.3", "0.4"},
		{12.3456, 0.1234, "12.35", "0.12"},
		{12.3456, 0.2949, "12.35", "0.29"},
		{12.3456, 0.2951, "12.3", "0.3"},
		{12.3456, 0.0996, "12.35", "0.10"},
		{12.3456, 0.95, "12.3", "0.9"},
		{1234.5, 45, "1230", "50"},
		{1234.5, 12, "1234", "12"},
		{-0.5, 3, "-0", "3"},
		{0.00012345, 0.0000067, "0.000123", "0.000007"},
		{12.3456, 0, "12.35", ""},
	} {
		v, u := Rounded(c.v, c.u)
		if v != c.value || u != c.with {
			t.Errorf("%g ± %g: %q ± %q, want %q ± %q", c.v, c.u, v, u, c.value, c.with)
		}
	}
	if s := Quantity(&run.Quantity{Value: 12.3456e-3, U: 0.43e-3}, MilliNewtonPerMetre, "mN/m"); s != "12.3 ± 0.4 mN/m" {
		t.Error(s)
	}
	if s := Quantity(nil, 1, "mN/m"); s != "—" {
		t.Error(s)
	}
}

// Names come from files: nothing in them may drive a terminal.
func TestNamesAreHarmless(t *testing.T) {
	r := run.Result{Verdict: run.Repeat, Run: run.Identity{File: "a\x1b[2J\nb\u202e.tsv", Cell: "c\x07\"q\"", Kind: run.KindCell},
		Findings: []run.Finding{{Rule: "x", Severity: run.ToRepeat, Message: "m\x1b[0m.", Advice: "a.\r"}}}
	var b bytes.Buffer
	if err := Summary(&b, r); err != nil {
		t.Fatal(err)
	}
	for _, text := range []string{Line(r), b.String()} {
		for _, bad := range []string{"\x1b", "\x07", "\r", "\u202e"} {
			if strings.Contains(text, bad) {
				t.Errorf("%q holds %q", text, bad)
			}
		}
	}
	if strings.Contains(Line(r), "\n") {
		t.Error("a verdict must be one line")
	}
	if !strings.Contains(Line(r), `c\a"q"`) {
		t.Errorf("%q: quotes need no escape", Line(r))
	}
}

// The headline is the oscillation known best, else the last hold.
func TestHeadline(t *testing.T) {
	q := func(v, u float64) *run.Quantity { return &run.Quantity{Value: v, U: u} }
	r := run.Result{Segments: []run.Segment{
		{Index: 0, Mode: run.Hold, TensionNPerM: q(1, 0.1)},
		{Index: 1, Mode: run.Oscillation, StorageNPerM: q(10, 2)},
		{Index: 2, Mode: run.Oscillation, StorageNPerM: q(10, 1)},
		{Index: 3, Mode: run.Hold, TensionNPerM: q(1, 0.1)},
	}}
	if s := Headline(r); s.Index != 2 {
		t.Errorf("segment %d", s.Index)
	}
	r.Segments[1].StorageNPerM, r.Segments[2].StorageNPerM = nil, nil
	if s := Headline(r); s.Index != 3 {
		t.Errorf("segment %d", s.Index)
	}
	if Headline(run.Result{}) != nil {
		t.Error("a headline of nothing")
	}
}
