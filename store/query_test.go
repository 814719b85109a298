package store

import (
	"bytes"
	"errors"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"

	"platen/pipeline/run"
)

func TestListing(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	run1 := func(name, session, cell, started string, v run.Verdict) Entry {
		return entry("/x/"+name, name, func(r *run.Result) {
			r.Run.File, r.Run.Session, r.Run.Cell, r.Run.Started, r.Verdict = name, session, cell, started, v
		})
	}
	// Stored in this order; the clock says 2026-03-14 09:00 UTC.
	for _, e := range []Entry{
		run1("late", "s1", "c1", "2026-03-14T12:00:00+01:00", run.Accept),    // 11:00 UTC
		run1("early", "s1", "c2", "2026-03-14T10:30:00.5+02:00", run.Repeat), // 08:30:00.5 UTC
		run1("old", "s10", "c1", "1969-12-31T23:59:59Z", run.Review),         // before 1970
		run1("undated", "s1", "c1", "", run.Accept),                          // by arrival: 09:00 UTC
		run1("twin", "s1", "c1", "2026-03-14T12:00:00+01:00", run.Repeat),    // as late, but later here
		run1("none", "", "", "2026-03-14T08:30:00.6Z", run.Accept),
	} {
		putOne(t, s, e)
	}
	changed := run1("early", "s1", "c2", "2026-03-14T10:30:00.5+02:00", run.Accept)
	changed.Result.Run.ID = idOf("early, exported again")
	putOne(t, s, changed)
	for _, c := range []struct {
		f    Filter
		want string
	}{
		{Filter{}, "old:1 early:1 none:1 undated:1 late:1 twin:1 "},
		{Filter{Superseded: true}, "old:1 early:1 early:1 none:1 undated:1 late:1 twin:1 "},
		{Filter{Session: "s1"}, "early:1 undated:1 late:1 twin:1 "},
		{Filter{Session: "s1", Superseded: true}, "early:1 early:1 undated:1 late:1 twin:1 "},
		{Filter{Session: "s10"}, "old:1 "},
		{Filter{Session: "s"}, ""},
		{Filter{Cell: "c1"}, "old:1 undated:1 late:1 twin:1 "},
		{Filter{Cell: "c1", Session: "s1"}, "undated:1 late:1 twin:1 "},
		{Filter{Cell: "c1", Session: "s1", Verdict: run.Repeat}, "twin:1 "},
		{Filter{Verdict: run.Repeat}, "twin:1 "},
		{Filter{Verdict: run.Repeat, Superseded: true}, "early:1 twin:1 "},
		{Filter{Verdict: "rep"}, ""},
	} {
		if got := refs(must[[]Record](t)(s.Results(c.f))); got != c.want {
			t.Errorf("%+v: %s, want %s", c.f, got, c.want)
		}
	}
	inOrder(t, s)
}

func TestGet(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	if _, err := s.Get(""); !errors.Is(err, ErrNone) {
		t.Errorf("empty store: %v", err)
	}
	a := putOne(t, s, entry("/x/a.tsv", "a"))
	putOne(t, s, entry("/x/a.tsv", "a", version("2")))
	b := putOne(t, s, entry("/x/b.tsv", "b"))
	if a.ID[0] == b.ID[0] {
		t.Fatal("the test needs ids that begin otherwise")
	}
	for _, prefix := range []string{a.ID, a.ID[:1], string(bytes.ToUpper([]byte(a.ID[:20])))} {
		if rs := must[[]Record](t)(s.Get(prefix)); len(rs) != 2 || rs[0].Revision != 1 || rs[1].Revision != 2 || rs[0].ID != a.ID {
			t.Errorf("%s: %s", prefix, refs(rs))
		}
	}
	if _, err := s.Get(""); !errors.Is(err, ErrSeveral) {
		t.Errorf("two ids: %v", err)
	}
	if _, err := s.Get("zz"); !errors.Is(err, ErrNone) {
		t.Errorf("none: %v", err)
	}
	if _, err := s.Revision(Ref{a.ID, 3}); !errors.Is(err, ErrNone) {
		t.Errorf("no such revision: %v", err)
	}
}

func TestSnapshotIsAStore(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	putOne(t, s, entry("/x/a.tsv", "a", repeat))
	var copied bytes.Buffer
	if err := s.Snapshot(&copied); err != nil {
		t.Fatal(err)
	}
	want := must[[]Record](t)(s.Results(Filter{}))
	putOne(t, s, entry("/x/b.tsv", "b"))

	folder := t.TempDir()
	if err := os.WriteFile(filepath.Join(folder, "platen.db"), copied.Bytes(), 0o600); err != nil {
		t.Fatal(err)
	}
	r := must[*Store](t)(Read(folder))
	inOrder(t, r)
	if got := must[[]Record](t)(r.Results(Filter{})); !reflect.DeepEqual(got, want) {
		t.Errorf("the copy has %s, want %s", refs(got), refs(want))
	}
	// A failing target is the target's fault.
	var d *DamagedError
	if err := s.Snapshot(failing{}); err == nil || !strings.Contains(err.Error(), errDisk.Error()) || errors.As(err, &d) {
		t.Errorf("failing target: %v", err)
	}
	putOne(t, s, entry("/x/c.tsv", "c"))
}

type failing struct{}

func (failing) Write([]byte) (int, error) { return 0, errDisk }
