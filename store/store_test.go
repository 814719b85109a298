package store

import (
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"os"
	"testing"
	"time"

	"go.uber.org/goleak"

	"platen/pipeline/run"
)

// TestMain also plays the other process, where a test starts this binary anew
// with childEnv set.
func TestMain(m *testing.M) {
	switch os.Getenv(childEnv) {
	case "":
		goleak.VerifyTestMain(m)
	case "hold":
		childHolds()
	case "put":
		childPuts()
	default:
		panic("unknown role " + os.Getenv(childEnv))
	}
}

const childEnv = "PLATEN_STORE_TEST_CHILD"

// idOf is the id of a run with these bytes.
func idOf(content string) string {
	sum := sha256.Sum256([]byte(content))
	return hex.EncodeToString(sum[:])
}

func q(v, u float64) *run.Quantity { return run.Known(v, u) }

// result is the document of a run with this content: about as large as a real
// one with an approach, a hold and one oscillation.
func result(content string) run.Result {
	seg := func(i int, m run.Mode) run.Segment {
		return run.Segment{
			Index: i, Mode: m, FromS: float64(10 * i), ToS: float64(10*i + 10),
			HeightM: q(1.05e-5, 2e-8), HeightRatio: q(0.5, 0.003), ForceN: q(2.1e-8, 3e-10),
			TensionNPerM: q(1.5e-3, 4e-5), StorageNPerM: q(2.25e-3, 3e-5), LossNPerM: q(7.5e-4, 2e-5),
			PhaseDeg: q(18.4, 0.5), FrequencyHz: q(0.2, 1e-4), Cycles: 12, SNRdB: run.Number(31.5),
		}
	}
	return run.Result{
		Schema: run.Schema,
		Run: run.Identity{
			ID: idOf(content), File: "dish/" + content + ".tsv", Kind: run.KindCell, Cell: "K7-03", Session: "dish-2",
			Started: "2026-03-14T10:22:31+01:00", Samples: 120000, DurationS: 60, Complete: true,
		},
		Verdict:     run.Accept,
		Findings:    []run.Finding{},
		Segments:    []run.Segment{seg(0, run.Approach), seg(1, run.Hold), seg(2, run.Oscillation)},
		Calibration: run.Calibration{SpringConstantNPerM: q(0.21, 0.02), Source: "header", Corrections: []string{"baseline"}},
		Software:    run.Software{Version: "test", Settings: idOf("settings")},
	}
}

// entry is that document as the result of a file.
func entry(path, content string, change ...func(*run.Result)) Entry {
	e := Entry{Path: path, Size: int64(len(content)), ModTimeNs: 1, Fingerprint: idOf("print of " + content), Result: result(content)}
	for _, c := range change {
		c(&e.Result)
	}
	return e
}

func repeat(r *run.Result) { r.Verdict = run.Repeat }

func version(v string) func(*run.Result) {
	return func(r *run.Result) { r.Software.Version = v }
}

func must[T any](t testing.TB) func(T, error) T {
	return func(x T, err error) T {
		t.Helper()
		if err != nil {
			t.Fatal(err)
		}
		return x
	}
}

// clock ticks by a second at each look.
func clock() func() time.Time {
	now := time.Date(2026, 3, 14, 9, 0, 0, 0, time.UTC)
	return func() time.Time {
		now = now.Add(time.Second)
		return now
	}
}

// open opens a store and closes it at the end of the test.
func open(t testing.TB, folder string, o Options) *Store {
	t.Helper()
	if o.Now == nil {
		o.Now = clock()
	}
	s, err := Open(folder, o)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { s.Close() })
	return s
}

// inOrder fails the test where an invariant is broken.
func inOrder(t testing.TB, s *Store) {
	t.Helper()
	for _, p := range must[[]Problem](t)(s.Check()) {
		t.Errorf("Check: %s", p)
	}
}

// putOne stores one entry.
func putOne(t testing.TB, s *Store, e Entry) Stored {
	t.Helper()
	return must[[]Stored](t)(s.Put(e))[0]
}

func refs(rs []Record) string {
	out := ""
	for _, r := range rs {
		out += fmt.Sprintf("%s:%d ", r.Result.Run.File, r.Revision)
	}
	return out
}
