package cell

import (
	"encoding/json"
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"strings"
	"sync"
	"testing"

	"platen/pipeline/cortex"
	"platen/pipeline/run"
)

var tables = sync.OnceValues(NewTables)

func table(t testing.TB) *Tables {
	t.Helper()
	x, err := tables()
	if err != nil {
		t.Fatal(err)
	}
	return x
}

// sheet is a cell of known bulk and shear modulus, both of one Zener shape.
type sheet struct {
	bulk, shear, tension, radius float64
}

func (s sheet) at(freq float64) (kb, ks complex128) {
	x := complex(0, 2*math.Pi*freq*0.1)
	shape := 0.5 + 0.8*x/(1+x)
	return complex(s.bulk, 0) * shape, complex(s.shear, 0) * shape
}

// document is the document of a run with one oscillation, as the analysis
// would write it, with relative noise on the modulus.
func (s sheet) document(t testing.TB, n int, ratio, freq, noise, scale float64, rng *rand.Rand) run.Result {
	t.Helper()
	kb, ks := s.at(freq)
	k, err := cortex.Effective(ratio, kb, ks, s.tension, cortex.Options{})
	if err != nil {
		t.Fatal(err)
	}
	u := noise * cmplx.Abs(k)
	k += complex(u*rng.NormFloat64(), u*rng.NormFloat64())
	q := func(v, u float64) *run.Quantity { return &run.Quantity{Value: v, U: u} }
	ut := 0.002 * s.tension
	return run.Result{
		Schema: run.Schema, Verdict: run.Accept,
		Run: run.Identity{ID: fmt.Sprintf("%064d", n), Kind: run.KindCell, Cell: "reed-1", Session: "reed", Condition: "untreated",
			Started: fmt.Sprintf("2026-06-02T10:%02d:00Z", n%60)},
		Cell:        &run.CellState{SphereRadiusM: q(s.radius, 0.005*s.radius), VolumeSource: run.VolumeImaged},
		Calibration: run.Calibration{SpringConstantNPerM: q(0.21, 0.01), Source: "header"},
		Segments: []run.Segment{{
			Mode: run.Oscillation, HeightRatio: q(ratio*scale, 0.005*ratio), FrequencyHz: q(freq, 1e-5),
			TensionNPerM: q(s.tension, 0.05*s.tension), TensionScatter: &ut,
			StorageNPerM: q(real(k), 0.05*real(k)), LossNPerM: q(imag(k), 0.05*imag(k)),
			StorageScatter: &u, LossScatter: &u,
		}},
	}
}

var (
	heights = []float64{0.5, 0.58, 0.66, 0.74, 0.82, 0.9}
	usualHz = []float64{0.1, 0.3, 1, 3, 10}
)

func (s sheet) documents(t testing.TB, hs, fs []float64, noise float64, seed uint64) []run.Result {
	rng := rand.New(rand.NewPCG(seed, 1))
	var out []run.Result
	for _, h := range hs {
		for _, f := range fs {
			out = append(out, s.document(t, len(out)+1, h, f, noise, 1, rng))
		}
	}
	return out
}

// Bulk, shear and Poisson ratio of a synthetic cell whose effective moduli come
// from the sheet's mechanics (checked in package cortex) are found again.
func TestGatherFindsTheSheet(t *testing.T) {
	s := sheet{bulk: 10e-3, shear: 5e-3, tension: 1e-3, radius: 9.5e-6}
	c := table(t).Gather(s.documents(t, heights, usualHz, 0.01, 2), Defaults(), run.Software{})
	if len(c.Runs) != 30 || len(c.Moduli) != 5 || len(c.FrequencyModels) != 6 {
		t.Fatalf("%d runs, %d frequencies, %d heights", len(c.Runs), len(c.Moduli), len(c.FrequencyModels))
	}
	truth := (s.bulk - s.shear) / (s.bulk + s.shear)
	for _, m := range c.Moduli {
		kb, ks := s.at(m.FrequencyHz)
		for _, x := range []struct {
			name string
			q    *run.Quantity
			want float64
		}{{"KB'", m.BulkStorageNPerM, real(kb)}, {"KB''", m.BulkLossNPerM, imag(kb)}, {"KS'", m.ShearStorageNPerM, real(ks)}, {"KS''", m.ShearLossNPerM, imag(ks)}} {
			if x.q == nil || math.Abs(x.q.Value-x.want) > 3*x.q.U {
				t.Errorf("%g Hz: %s %+v, truth %g", m.FrequencyHz, x.name, x.q, x.want)
			}
		}
		p := m.PoissonRatio
		if p == nil || p.Low > truth || p.High < truth || !m.Resolved {
			t.Errorf("%g Hz: Poisson ratio %+v (resolved %v), truth %.3f", m.FrequencyHz, p, m.Resolved, truth)
		}
		if m.PoissonRatioOther == nil || m.PoissonRatioOther.Value == p.Value {
			t.Errorf("%g Hz: the other kind of plates is not shown apart: %+v", m.FrequencyHz, m.PoissonRatioOther)
		}
		if m.DominantUncertainty == "" {
			t.Error("what dominates is not said")
		}
	}
	for _, f := range c.FrequencyModels {
		found := false
		for _, m := range f.Models {
			found = found || (m.Model == "Zener" && m.EvidenceRatio < 10)
		}
		if !found {
			t.Errorf("at %.2f the true model is ruled out: %+v", f.HeightRatio, f.Models)
		}
		if f.KramersKronig == nil || !f.KramersKronig.Consistent {
			t.Errorf("at %.2f: %+v", f.HeightRatio, f.KramersKronig)
		}
	}
	if _, err := json.Marshal(c); err != nil {
		t.Error(err)
	}
}

// The order in which runs come changes nothing.
func TestGatherIsPure(t *testing.T) {
	s := sheet{bulk: 10e-3, shear: 5e-3, tension: 1e-3, radius: 9.5e-6}
	docs := s.documents(t, heights[:3], usualHz[:2], 0.02, 3)
	want, _ := json.Marshal(table(t).Gather(docs, Defaults(), run.Software{}))
	rand.New(rand.NewPCG(1, 1)).Shuffle(len(docs), func(i, j int) { docs[i], docs[j] = docs[j], docs[i] })
	got, _ := json.Marshal(table(t).Gather(docs, Defaults(), run.Software{}))
	if string(got) != string(want) {
		t.Errorf("got\n%s\nwant\n%s", got, want)
	}
}

// The advice follows what is there: first another height, then the one that
// narrows most, at last none.
func TestAdvice(t *testing.T) {
	s := sheet{bulk: 10e-3, shear: 5e-3, tension: 1e-3, radius: 9.5e-6}
	set := Defaults()
	one := table(t).Gather(s.documents(t, []float64{0.6}, []float64{1}, 0.02, 4), set, run.Software{})
	if one.Enough || !strings.Contains(one.Advice, "0.90 of the diameter") {
		t.Errorf("after one height: %q", one.Advice)
	}
	if m := one.Moduli[0]; m.PoissonRatio != nil || !strings.Contains(m.Why, "at least 3 are needed") {
		t.Errorf("one height gives %+v", m)
	}
	narrow := table(t).Gather(s.documents(t, []float64{0.6, 0.63, 0.66}, []float64{1}, 0.02, 4), set, run.Software{})
	if narrow.Enough || !strings.Contains(narrow.Advice, "would narrow the Poisson ratio most") {
		t.Errorf("after a narrow range: %q, %+v", narrow.Advice, narrow.Moduli[0])
	}
	bad := s.documents(t, []float64{0.6}, []float64{1}, 0.02, 4)
	bad[0].Verdict = run.Repeat
	out := table(t).Gather(bad, set, run.Software{})
	if len(out.Runs) != 0 || len(out.LeftOut) != 1 || !strings.Contains(out.Advice, "No modulus yet") {
		t.Errorf("a run to repeat: %+v", out)
	}
	if c := table(t).Gather([]run.Result{{Run: run.Identity{Kind: run.KindBlank}}}, set, run.Software{}); c != nil {
		t.Errorf("a blank run makes a cell: %+v", c)
	}
}

// A lag between the channels turns the phase of fast oscillations only, which
// no linear material does.
func TestGatherSeesALag(t *testing.T) {
	s := sheet{bulk: 10e-3, shear: 5e-3, tension: 1e-3, radius: 9.5e-6}
	docs := s.documents(t, []float64{0.6}, []float64{0.1, 0.2, 0.5, 1, 2, 5, 10}, 0.01, 5)
	for i := range docs {
		seg := &docs[i].Segments[0]
		k := complex(seg.StorageNPerM.Value, seg.LossNPerM.Value) * cmplx.Rect(1, 2*math.Pi*seg.FrequencyHz.Value*0.03)
		seg.StorageNPerM.Value, seg.LossNPerM.Value = real(k), imag(k)
	}
	c := table(t).Gather(docs, Defaults(), run.Software{})
	if len(c.Findings) != 1 || c.Findings[0].Rule != "kramers-kronig" {
		t.Errorf("a lag of 30 ms: %+v", c.Findings)
	}
}

// A cell's full inference: 6 heights, 5 frequencies, 400 bootstrap series.
func BenchmarkGather(b *testing.B) {
	s := sheet{bulk: 10e-3, shear: 5e-3, tension: 1e-3, radius: 9.5e-6}
	docs := s.documents(b, heights, usualHz, 0.03, 6)
	x := table(b)
	b.ReportAllocs()
	for b.Loop() {
		x.Gather(docs, Defaults(), run.Software{})
	}
}
