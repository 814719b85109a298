package main

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"platen/pipeline/phantom"
	"platen/pipeline/run"
)

// writeSeries writes a run with oscillations at three heights and two
// frequencies, of a cell whose modulus is scaled.
func writeSeries(t *testing.T, file string, seed uint64, name, session, condition string, minute int, stiffer float64) phantom.Cell {
	t.Helper()
	s := phantom.Ordinary(seed)
	s.Rig.RateHz, s.Rig.FlickerToHz = 100, 50
	// One rig, one true spring constant: its error is the same for all cells.
	s.Rig.SpringErrorRel, s.Rig.HeightOffsetM, s.Rig.RadiusErrorRel = 0.02, 0, 0
	s.Cell.ElasticNPerM *= stiffer
	for i := range s.Cell.Arms {
		s.Cell.Arms[i].StiffnessNPerM *= stiffer
	}
	s.Cell.TensionNPerM *= stiffer
	s.Header.Cell, s.Header.Session, s.Header.Condition = name, session, condition
	s.Header.Started = time.Date(2026, 6, 2, 9, minute, 0, 0, time.UTC)
	d := 2 * s.Cell.RadiusM
	s.StartM = d + 2e-6
	s.Protocol = []phantom.Move{phantom.Hold(4)}
	for _, h := range []float64{0.8, 0.68, 0.55} {
		s.Protocol = append(s.Protocol, phantom.Ramp(h*d, 1.5e-6), phantom.Hold(5), phantom.Oscillate(1, 0.02*d, 6), phantom.Oscillate(3, 0.02*d, 12), phantom.Hold(2))
	}
	s.Protocol = append(s.Protocol, phantom.Ramp(s.StartM, 2e-6), phantom.Hold(4))
	b, err := phantom.Text(s)
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(file, b, 0o644); err != nil {
		t.Fatal(err)
	}
	return s.Cell
}

// From run files to the document of a cell and a comparison of conditions,
// through the command line. The simulated cortex is a liquid sheet (its tension
// is uniform), so its bulk modulus is the effective one at every height and its
// shear modulus is zero: a Poisson ratio of 1.
func TestCellsAndCompare(t *testing.T) {
	export, state := t.TempDir(), t.TempDir()
	truth := map[string]phantom.Cell{}
	n := 0
	for session := range 2 {
		for k := range 4 {
			condition, stiffer := "untreated", 1.0
			if k%2 == 1 {
				condition, stiffer = "stiffened", 2.0
			}
			name := fmt.Sprintf("fern-%d", n)
			truth[name] = writeSeries(t, filepath.Join(export, name+".tsv"), uint64(n), name, fmt.Sprintf("dish-%d", session), condition, n, stiffer)
			n++
		}
	}
	settings := filepath.Join(t.TempDir(), "platen.toml")
	if err := os.WriteFile(settings, []byte("[watch]\nsettle_s = 0.5\nsweep_s = 0.5\n[cells]\nbootstrap = 100\n"), 0o644); err != nil {
		t.Fatal(err)
	}
	do := func(args ...string) string {
		t.Helper()
		var out, errs bytes.Buffer
		if code := execute(context.Background(), append([]string{"--settings", settings}, args...), streams{&out, &errs}); code != exitOK {
			t.Fatalf("%v: status %d\n%s%s", args, code, out.String(), errs.String())
		}
		return out.String() + errs.String()
	}
	log := do("watch", "--state", state, "--until-idle", export)
	if strings.Count(log, "cell fern-") != n || !strings.Contains(log, "Poisson ratio") {
		t.Errorf("the log does not tell of the cells:\n%s", log)
	}

	docs := strings.Split(strings.TrimSpace(do("cells", "--state", state, "--json")), "\n")
	if len(docs) != n {
		t.Fatalf("%d cells, want %d", len(docs), n)
	}
	for _, text := range docs {
		var c run.CellResult
		if err := json.Unmarshal([]byte(text), &c); err != nil {
			t.Fatal(err)
		}
		if len(c.Runs) != 1 || len(c.Moduli) != 2 || len(c.FrequencyModels) != 3 || len(c.Effective) != 6 {
			t.Errorf("%s: %d runs, %d frequencies, %d heights, %d moduli", c.Cell, len(c.Runs), len(c.Moduli), len(c.FrequencyModels), len(c.Effective))
			continue
		}
		for _, m := range c.Moduli {
			want := truth[c.Cell].Modulus(m.FrequencyHz)
			q := m.BulkStorageNPerM
			if q == nil {
				t.Errorf("%s at %g Hz: no bulk modulus: %s", c.Cell, m.FrequencyHz, m.Why)
				continue
			}
			// 2 % of the force scale is common to all; the rest is in u.
			if d := math.Abs(q.Value - real(want)); d > 3*q.U {
				t.Errorf("%s at %g Hz: bulk modulus %+v, truth %g", c.Cell, m.FrequencyHz, *q, real(want))
			}
			if p := m.PoissonRatio; p == nil || (p.High < 0.9 && !p.OpenHigh) {
				t.Errorf("%s at %g Hz: Poisson ratio %+v rules out a liquid sheet", c.Cell, m.FrequencyHz, p)
			}
		}
		if len(c.Relaxation) == 0 {
			t.Errorf("%s: no relaxation", c.Cell)
		}
	}
	page := do("cells", "--state", state, "fern-1")
	for _, want := range []string{"cell fern-1, session dish-0, condition stiffened: 1 run(s)", "KB′ ", "Poisson ratio ", "relaxation at 0."} {
		if !strings.Contains(page, want) {
			t.Errorf("the page lacks %q:\n%s", want, page)
		}
	}

	var c run.Comparison
	if err := json.Unmarshal([]byte(do("compare", "--state", state, "--json", "untreated", "stiffened")), &c); err != nil {
		t.Fatal(err)
	}
	if len(c.Quantities) < 3 {
		t.Fatalf("%+v", c)
	}
	for _, q := range c.Quantities[:3] { // tension, storage, loss: all doubled
		p := q.Pairs[0]
		a, b := q.Conditions[0], q.Conditions[1]
		if a.Cells != 4 || b.Cells != 4 || a.Sessions != 2 {
			t.Errorf("%s: %d and %d cells", q.Name, a.Cells, b.Cells)
		}
		if p.Nested == nil || !(p.Nested.Value > 0) || p.PermutationP == nil || !p.Within {
			t.Errorf("%s: %+v", q.Name, p)
		}
		if r := *b.Median / *a.Median; r < 1.4 || r > 2.8 {
			t.Errorf("%s: medians differ by a factor of %.2f, staged 2", q.Name, r)
		}
	}
	page = do("compare", "--state", state, "untreated", "stiffened")
	for _, want := range []string{"tension [mN/m]", "stiffened less untreated:", "cells nested in sessions", "permutation within sessions", "warning: Few cells"} {
		if !strings.Contains(page, want) {
			t.Errorf("the page lacks %q:\n%s", want, page)
		}
	}
	var out, errs bytes.Buffer
	if code := execute(context.Background(), []string{"compare", "--state", state, "untreated", "nonesuch"}, streams{&out, &errs}); code != exitRepeat ||
		!strings.Contains(errs.String(), `no cell of condition "nonesuch" is stored; there are: "stiffened", "untreated"`) {
		t.Errorf("status %d: %s", code, errs.String())
	}
}
