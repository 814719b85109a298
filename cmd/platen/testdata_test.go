package main

import (
	"flag"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"platen/pipeline/phantom"
	"platen/pipeline/run"
)

var update = flag.Bool("update", false, "write the files of testdata/runs and the golden files anew")

const runsFolder = "../../testdata/runs"

// made lists the simulated files of testdata/runs; the others there are made by
// hand. Rows are few, so that the files stay small enough to be looked at.
func made() map[string]phantom.Spec {
	slow := func(s phantom.Spec) phantom.Spec {
		s.Rig.RateHz, s.Rig.FlickerToHz, s.Rig.ImageEveryS = 25, 12.5, 0.4
		return s
	}
	session := phantom.Session(42)
	specs := map[string]phantom.Spec{}
	for i, name := range []string{
		"accept_good_cell", "accept_end_mark", "repeat_force_drift", "review_low_snr", "repeat_volume_change",
		"repeat_contact_loss", "repeat_clipping", "review_sample_gap", "repeat_adhesion", "accept_blank",
		"repeat_truncated",
	} {
		specs[name+".tsv"] = slow(session[i])
	}
	// A clipped peak must last ten samples to be told from noise.
	clipped := specs["repeat_clipping.tsv"]
	clipped.Rig.RateHz = 50
	specs["repeat_clipping.tsv"] = clipped
	comma := slow(session[0])
	comma.Dialect = phantom.Dialect{Delimiter: ';', DecimalComma: true, CRLF: true, Encoding: phantom.Latin1, MicroSign: true, Ending: phantom.Silent}
	specs["accept_decimal_comma.csv"] = comma
	raw := slow(session[1])
	raw.Dialect = phantom.Dialect{Deflection: true, SectionArea: true, Segments: true}
	specs["accept_raw_channels.tsv"] = raw
	return specs
}

// What a file's name promises, its verdict must keep; a name that promises
// nothing fails.
func TestRunsGetThePromisedVerdict(t *testing.T) {
	if *update {
		for name, s := range made() {
			text, err := phantom.Text(s)
			if err != nil {
				t.Fatal(err)
			}
			if err := os.WriteFile(filepath.Join(runsFolder, name), text, 0o644); err != nil {
				t.Fatal(err)
			}
		}
	}
	entries, err := os.ReadDir(runsFolder)
	if err != nil {
		t.Fatal(err)
	}
	if len(entries) < 15 {
		t.Errorf("only %d files in %s", len(entries), runsFolder)
	}
	s := defaultSettings()
	for _, e := range entries {
		t.Run(e.Name(), func(t *testing.T) {
			r, err := checkFile(filepath.Join(runsFolder, e.Name()), &s)
			if err != nil {
				t.Fatal(err)
			}
			promise, rest, _ := strings.Cut(e.Name(), "_")
			switch promise {
			case "accept", "review", "repeat":
				if string(r.Verdict) != promise || unreadable(r) {
					t.Errorf("%s: %+v", r.Verdict, r.Findings)
				}
			case "unreadable":
				if !unreadable(r) || r.Verdict == run.Accept || r.Run.Complete {
					t.Errorf("%s, complete %v: %+v", r.Verdict, r.Run.Complete, r.Findings)
				}
			default:
				t.Fatalf("the name promises nothing: start it with accept_, review_, repeat_ or unreadable_")
			}
			// The name of a repeat or review says which rule must have tripped.
			if promise == "repeat" || promise == "review" {
				rule := strings.ReplaceAll(strings.TrimSuffix(rest, filepath.Ext(rest)), "_", "-")
				if !strings.Contains(rules(r.Findings), rule) {
					t.Errorf("found %s, want %s", rules(r.Findings), rule)
				}
			}
		})
	}
}
