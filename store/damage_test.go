package store

import (
	"bytes"
	"errors"
	"math/rand/v2"
	"os"
	"path/filepath"
	"reflect"
	"strconv"
	"strings"
	"testing"
	"time"

	"go.etcd.io/bbolt"
)

// content is everything that can be read from a store.
type content struct {
	Records     []Record
	Paths       map[string]Path
	Unannounced []Record
	Outbox      []Event
}

func contentOf(s *Store) (c content, err error) {
	var errs [4]error
	c.Records, errs[0] = s.Results(Filter{Superseded: true})
	c.Paths, errs[1] = s.Paths()
	c.Unannounced, errs[2] = s.Unannounced()
	c.Outbox, errs[3] = s.Outbox()
	return c, errors.Join(errs[:]...)
}

// sample makes a store that was closed in order, and returns its file and its
// content after the last commit and the one before.
func sample(t *testing.T) (file []byte, last, before content) {
	s := open(t, t.TempDir(), Options{})
	for n := range 10 {
		before = must[content](t)(contentOf(s))
		must[[]Stored](t)(s.Put(crashEntries(n)...))
	}
	last = must[content](t)(contentOf(s))
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	return must[[]byte](t)(os.ReadFile(s.file.path)), last, before
}

// place writes a store file into a folder of its own.
func place(t *testing.T, file []byte) (folder string) {
	folder = t.TempDir()
	if err := os.WriteFile(filepath.Join(folder, "platen.db"), file, 0o600); err != nil {
		t.Fatal(err)
	}
	return folder
}

// judge looks at a store that may be damaged. It is understood, with the
// content it should have, or refused with the reason; it never crashes.
func judge(t *testing.T, what string, folder string, allowed ...content) (refused bool) {
	t.Helper()
	s, err := Read(folder)
	var d *DamagedError
	if err != nil {
		if !errors.As(err, &d) {
			t.Errorf("%s: refused, but not as damaged: %v", what, err)
		}
		return true
	}
	problems, err := s.Check()
	if err != nil {
		t.Errorf("%s: %v", what, err)
	}
	if len(problems) > 0 {
		return true
	}
	got, err := contentOf(s)
	if err != nil {
		t.Errorf("%s: Check finds nothing, but: %v", what, err)
	}
	for _, c := range allowed {
		if reflect.DeepEqual(got, c) {
			return false
		}
	}
	t.Errorf("%s: understood, but with another content", what)
	return false
}

// One bit is flipped somewhere. What bbolt allows for: where the newer of its
// two meta pages is spoiled the store is as before the last commit, as after a
// power cut during that commit.
func TestFlippedBits(t *testing.T) {
	file, last, before := sample(t)
	random := rand.New(rand.NewPCG(3, 4))
	page := os.Getpagesize()
	folder := place(t, file)
	name := filepath.Join(folder, "platen.db")
	refused := 0
	const flips = 150
	for i := range flips {
		at := random.IntN(len(file))
		if i%2 == 0 { // where the structure is
			at = at/page*page + random.IntN(160)
		}
		bad := bytes.Clone(file)
		bad[at] ^= 1 << random.IntN(8)
		if err := os.WriteFile(name, bad, 0o600); err != nil {
			t.Fatal(err)
		}
		if judge(t, "byte "+strconv.Itoa(at), folder, last, before) {
			refused++
		}
		if t.Failed() {
			return
		}
	}
	t.Logf("%d of %d flips in %d bytes were noticed; the others hit free pages", refused, flips, len(file))
	if refused == 0 {
		t.Error("not one was noticed")
	}
}

// A sector of the disk is lost: a page is zeros, or another page's bytes.
func TestLostPages(t *testing.T) {
	file, last, before := sample(t)
	page := os.Getpagesize()
	for at := 0; at < len(file); at += page {
		for _, with := range [][]byte{make([]byte, page), file[3*page : 4*page]} {
			bad := bytes.Clone(file)
			copy(bad[at:], with)
			judge(t, "page at "+strconv.Itoa(at), place(t, bad), last, before)
		}
	}
}

// A branch that leads to its own page, or twice to the same: bbolt would go
// round for ever.
func TestPagesInACircle(t *testing.T) {
	file, last, before := sample(t)
	page := os.Getpagesize()
	branches, refused := 0, 0
	for id := 2; id < len(file)/page; id++ {
		p := file[id*page:]
		if native.Uint16(p[8:]) != branchPage || native.Uint16(p[10:]) < 2 {
			continue
		}
		branches++
		for what, to := range map[string]uint64{"itself": uint64(id), "its sister": native.Uint64(p[pageHeader+element+8:])} {
			bad := bytes.Clone(file)
			native.PutUint64(bad[id*page+pageHeader+8:], to)
			if judge(t, "page "+strconv.Itoa(id)+" leads to "+what, place(t, bad), last, before) {
				refused++
			}
		}
	}
	if refused == 0 {
		t.Errorf("nothing was noticed in %d branch pages", branches)
	}
}

func TestCutShort(t *testing.T) {
	file, last, before := sample(t)
	page := os.Getpagesize()
	refused := 0
	for cut := 0; cut < len(file); cut += page {
		for _, n := range []int{cut, cut + 1, cut + page - 1} {
			if judge(t, "cut at "+strconv.Itoa(n), place(t, file[:n]), last, before) {
				refused++
			}
		}
	}
	if refused == 0 {
		t.Error("no cut was noticed")
	}
}

func TestDamagedStoreIsRefusedOrSetAside(t *testing.T) {
	file, _, _ := sample(t)
	page := os.Getpagesize()
	spoiled := bytes.Clone(file)
	clear(spoiled[2*page:])
	for name, bad := range map[string][]byte{
		"empty":     {},
		"text":      []byte("this is not a store"),
		"long text": []byte(strings.Repeat("this is not a store\n", 5000)),
		"cut":       file[:5*page],
		"spoiled":   spoiled,
	} {
		folder := place(t, bad)
		path := filepath.Join(folder, "platen.db")
		var d *DamagedError
		if _, err := Open(folder, Options{}); !errors.As(err, &d) || !strings.Contains(err.Error(), "platen.db.damaged") {
			t.Errorf("%s: opened: %v", name, err)
		}
		if !bytes.Equal(must[[]byte](t)(os.ReadFile(path)), bad) {
			t.Errorf("%s: it has changed", name)
		}
		// Twice within a second: no name is used again.
		at := func() time.Time { return time.Date(2026, 3, 14, 23, 59, 59, 0, time.FixedZone("", 3600)) }
		aside := path + ".damaged-20260314T225959Z"
		for _, want := range []string{aside, aside + "-2"} {
			s := open(t, folder, Options{SetAside: true, Now: at})
			if s.SetAside() != want || !bytes.Equal(must[[]byte](t)(os.ReadFile(want)), bad) {
				t.Errorf("%s: set aside as %q, want %q with the same bytes", name, s.SetAside(), want)
			}
			putOne(t, s, entry("/x/a.tsv", "a"))
			inOrder(t, s)
			s.Close()
			if err := os.WriteFile(path, bad, 0o600); err != nil {
				t.Fatal(err)
			}
		}
	}
	// A store in order is not set aside.
	if s := open(t, place(t, file), Options{SetAside: true}); s.SetAside() != "" {
		t.Errorf("set aside without need: %s", s.SetAside())
	}
}

// Many kinds of damage at many places, met by a service that starts: whether it
// understands the store or refuses it, not one byte of it changes; what it
// understands is what was stored.
func TestOpenNeverChangesWhatItFinds(t *testing.T) {
	file, last, before := sample(t)
	random := rand.New(rand.NewPCG(5, 6))
	refused, understood := 0, 0
	for i := range 120 {
		bad := bytes.Clone(file)
		at := random.IntN(len(bad))
		what := ""
		switch i % 4 {
		case 0:
			bad = bad[:at]
			what = "cut"
		case 1:
			bad[at] ^= 1 << random.IntN(8)
			what = "bit"
		case 2:
			clear(bad[at:min(len(bad), at+512)])
			what = "sector of zeros"
		case 3:
			for j := range bad[at:min(len(bad), at+16)] {
				bad[at+j] = byte(random.Uint32())
			}
			what = "16 bytes of noise"
		}
		what += " at " + strconv.Itoa(at)
		folder := place(t, bad)
		crashed := random.IntN(2) == 0
		if crashed {
			if err := os.WriteFile(filepath.Join(folder, "platen.owner"), nil, 0o600); err != nil {
				t.Fatal(err)
			}
		}
		s, err := Open(folder, Options{})
		var d *DamagedError
		switch {
		case err == nil:
			c, err := contentOf(s)
			if err == nil && !reflect.DeepEqual(c, last) && !reflect.DeepEqual(c, before) {
				t.Errorf("%s: understood, but with another content", what)
			}
			// A store that was closed in order is not read through at the start:
			// damage inside a value is met when that is read.
			if err != nil && (crashed || !errors.As(err, &d)) {
				t.Errorf("%s: opened (checked: %v), but: %v", what, crashed, err)
			}
			s.Close()
			understood++
		case errors.As(err, &d):
			refused++
		default:
			t.Errorf("%s: refused, but not as damaged: %v", what, err)
		}
		if !bytes.Equal(must[[]byte](t)(os.ReadFile(filepath.Join(folder, "platen.db"))), bad) {
			t.Fatalf("%s: the file has changed", what)
		}
	}
	t.Logf("%d refused, %d understood", refused, understood)
	if refused == 0 || understood == 0 {
		t.Error("the damage was all of one kind")
	}
}

// The mark of a service that did not end in order makes the next look through
// everything; without it the start is fast.
func TestUncleanEndTriggersTheCheck(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	putOne(t, s, entry("/x/a.tsv", "a"))
	if err := s.update(func(tx *bbolt.Tx) error { return tx.Bucket(byCell.bucket).Put([]byte("x"), []byte("x")) }); err != nil {
		t.Fatal(err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	clean := open(t, s.folder, Options{})
	if err := clean.Close(); err != nil {
		t.Fatal(err)
	}
	for _, mark := range []string{"", "half a no", `{"pid":1}`} {
		if err := os.WriteFile(s.lock.owner, []byte(mark), 0o600); err != nil {
			t.Fatal(err)
		}
		// The refusal leaves the mark: the next start looks again.
		for range 2 {
			var d *DamagedError
			if _, err := Open(s.folder, Options{}); !errors.As(err, &d) || !strings.Contains(d.Reason, "cells: ") {
				t.Errorf("mark %q: %v", mark, err)
			}
		}
	}
}
