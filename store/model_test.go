package store

import (
	"cmp"
	"errors"
	"fmt"
	"maps"
	"slices"
	"testing"

	"go.etcd.io/bbolt"
	"pgregory.net/rapid"

	"platen/pipeline/run"
)

// model is what a store should hold, in the simplest words.
type model struct {
	document    map[string]Ref   // by content and version
	revisions   map[string]int   // by content
	current     map[string]Ref   // by path
	earlier     map[string][]Ref // by path
	names       map[Ref][]string // paths whose current result this is
	repeats     map[Ref]bool
	unannounced map[Ref]bool
	outbox      map[string]bool
}

func newModel() *model {
	return &model{
		map[string]Ref{}, map[string]int{}, map[string]Ref{}, map[string][]Ref{}, map[Ref][]string{},
		map[Ref]bool{}, map[Ref]bool{}, map[string]bool{},
	}
}

// put says what Put should say.
func (m *model) put(d draw) (st Stored) {
	name := fmt.Sprint(d.content, d.version)
	ref, there := m.document[name]
	if !there {
		m.revisions[d.content]++
		ref = Ref{idOf(d.content), m.revisions[d.content]}
		m.document[name] = ref
		m.repeats[ref] = d.repeat()
	}
	st.Ref = ref
	if len(m.names[ref]) == 0 { // it was not there, or nobody's current one
		st.New = true
		m.unannounced[ref] = true
		if m.repeats[ref] {
			m.outbox[eventID(ref, "repeat")] = true
		}
	}
	former, known := m.current[d.path]
	if known && former == ref {
		return st
	}
	m.current[d.path] = ref
	m.names[ref] = append(m.names[ref], d.path)
	if known {
		st.Supersedes = &former
		m.earlier[d.path] = append(m.earlier[d.path], former)
		m.names[former] = slices.DeleteFunc(m.names[former], func(p string) bool { return p == d.path })
	}
	return st
}

// draw is a run file as it is at some moment, and the version that analyses it.
type draw struct{ path, content, version string }

func (d draw) repeat() bool { return d.content == "b" || d.version == "2" }

func (d draw) entry() Entry {
	return entry(d.path, d.content, version(d.version), func(r *run.Result) {
		r.Segments = nil
		if d.repeat() {
			repeat(r)
		}
	})
}

func anyDraw(t *rapid.T) draw {
	return draw{
		path:    rapid.SampledFrom([]string{"/x/1.tsv", "/x/2.tsv", "/y/1.tsv"}).Draw(t, "path"),
		content: rapid.SampledFrom([]string{"a", "b", "c"}).Draw(t, "content"),
		version: rapid.SampledFrom([]string{"1", "2"}).Draw(t, "version"),
	}
}

// Whatever is stored, announced, delivered, closed, crashed and fails to be
// committed in whatever order: the store holds what the model holds, and every
// invariant of Check.
func TestStoreAgreesWithModel(t *testing.T) {
	rapid.Check(t, func(rt *rapid.T) {
		folder := t.TempDir()
		now := clock()
		s, err := Open(folder, Options{Now: now})
		if err != nil {
			rt.Fatal(err)
		}
		defer func() { s.Close() }()
		m := newModel()
		for range rapid.IntRange(1, 12).Draw(rt, "steps") {
			switch act := rapid.SampledFrom([]string{"put", "put", "put", "batch", "fail", "announce", "deliver", "reopen"}).Draw(rt, "act"); act {
			case "put", "batch":
				n := 1
				if act == "batch" {
					n = rapid.IntRange(2, 4).Draw(rt, "n")
				}
				var es []Entry
				var want []Stored
				for range n {
					d := anyDraw(rt)
					es = append(es, d.entry())
					want = append(want, m.put(d))
				}
				got, err := s.Put(es...)
				if err != nil {
					rt.Fatal(err)
				}
				sameStored(rt, got, want)
			case "fail":
				d := anyDraw(rt)
				landed := rapid.Bool().Draw(rt, "landed")
				wrote := false
				good := s.file.commit
				s.file.commit = func(db *bbolt.DB, do func(*bbolt.Tx) error) error {
					err := db.Update(func(tx *bbolt.Tx) error {
						if err := do(tx); err != nil || landed {
							return err
						}
						return errDisk
					})
					if err == nil {
						wrote, err = true, errDisk
					}
					return err
				}
				_, err := s.Put(d.entry())
				s.file.commit = good
				if wrote && !errors.Is(err, errDisk) {
					rt.Fatalf("a failed commit: %v", err)
				}
				got, err := s.Put(d.entry())
				if err != nil {
					rt.Fatalf("after a failed commit: %v", err)
				}
				want := m.put(d)
				if wrote && !want.New {
					want.Supersedes = nil // is told with what is new only
				}
				sameStored(rt, got, []Stored{want})
			case "announce":
				some := subset(rt, slices.SortedFunc(maps.Keys(m.unannounced), byRef))
				for _, r := range some {
					delete(m.unannounced, r)
				}
				if err := s.Announced(some...); err != nil {
					rt.Fatal(err)
				}
			case "deliver":
				for _, id := range subset(rt, slices.Sorted(maps.Keys(m.outbox))) {
					delete(m.outbox, id)
					if err := s.Delivered(id); err != nil {
						rt.Fatal(err)
					}
				}
			case "reopen":
				s.doubt = rapid.Bool().Draw(rt, "as after a crash")
				if err := s.Close(); err != nil {
					rt.Fatal(err)
				}
				if s, err = Open(folder, Options{Now: now}); err != nil {
					rt.Fatal(err)
				}
			}
			m.compare(rt, s)
		}
	})
}

func byRef(a, b Ref) int { return cmp.Or(cmp.Compare(a.ID, b.ID), cmp.Compare(a.Revision, b.Revision)) }

func subset[T any](t *rapid.T, all []T) (some []T) {
	for _, x := range all {
		if rapid.Bool().Draw(t, "this one") {
			some = append(some, x)
		}
	}
	return some
}

func sameStored(t *rapid.T, got, want []Stored) {
	t.Helper()
	show := func(all []Stored) (out string) {
		for _, st := range all {
			out += fmt.Sprintf("%s new %v supersedes %v; ", st.Ref, st.New, st.Supersedes)
		}
		return out
	}
	if g, w := show(got), show(want); g != w {
		t.Fatalf("stored as %s\nwant %s", g, w)
	}
}

func (m *model) compare(t *rapid.T, s *Store) {
	problems, err := s.Check()
	if err != nil || len(problems) > 0 {
		t.Fatalf("Check: %v, %v", problems, err)
	}
	c, err := contentOf(s)
	if err != nil {
		t.Fatal(err)
	}
	if len(c.Records) != len(m.document) || len(c.Paths) != len(m.current) {
		t.Fatalf("%d results under %d paths, want %d under %d", len(c.Records), len(c.Paths), len(m.document), len(m.current))
	}
	for _, r := range c.Records {
		names := slices.Sorted(slices.Values(m.names[r.Ref]))
		if got := slices.Sorted(slices.Values(r.Paths)); !slices.Equal(got, names) || (r.SupersededBy == nil) != (len(names) > 0) {
			t.Fatalf("%s: names %v, superseded by %v; want names %v", r.Ref, got, r.SupersededBy, names)
		}
		if want, ok := m.document[fmt.Sprint(contentWithID(r.ID), r.Result.Software.Version)]; !ok || want != r.Ref {
			t.Fatalf("%s holds the document of version %s, which is %s", r.Ref, r.Result.Software.Version, want)
		}
	}
	for path, p := range c.Paths {
		if p.Current != m.current[path] || !slices.Equal(p.Earlier, m.earlier[path]) {
			t.Fatalf("%s: %v after %v, want %v after %v", path, p.Current, p.Earlier, m.current[path], m.earlier[path])
		}
	}
	left := map[Ref]bool{}
	for _, r := range c.Unannounced {
		left[r.Ref] = true
	}
	due := map[string]bool{}
	for _, e := range c.Outbox {
		due[e.ID] = true
	}
	if !maps.Equal(left, m.unannounced) || !maps.Equal(due, m.outbox) {
		t.Fatalf("to announce %v, due %v; want %v and %v", left, due, m.unannounced, m.outbox)
	}
}

// contentWithID undoes idOf for the contents of anyDraw.
func contentWithID(id string) string {
	for _, c := range []string{"a", "b", "c"} {
		if idOf(c) == id {
			return c
		}
	}
	return ""
}
