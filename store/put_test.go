package store

import (
	"encoding/json"
	"errors"
	"math"
	"os"
	"reflect"
	"slices"
	"strings"
	"testing"

	"go.etcd.io/bbolt"

	"platen/pipeline/run"
)

func TestResultComesBackAsItWasStored(t *testing.T) {
	folder := t.TempDir()
	s := open(t, folder, Options{})
	e := entry("/x/a.tsv", "a", repeat)
	st := putOne(t, s, e)
	if !st.New || st.Supersedes != nil || st.Revision != 1 || st.ID != idOf("a") {
		t.Errorf("stored as %+v", st)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	s = open(t, folder, Options{})
	r := must[Record](t)(s.Revision(st.Ref))
	if !reflect.DeepEqual(r.Result, e.Result) {
		t.Errorf("came back as\n%+v\nof\n%+v", r.Result, e.Result)
	}
	want := Path{e.Path, e.Size, e.ModTimeNs, e.Fingerprint, st.Ref, nil}
	if p, ok, err := s.Known(e.Path); err != nil || !ok || !reflect.DeepEqual(p, want) {
		t.Errorf("known as %+v, %v, %v", p, ok, err)
	}
	if all := must[map[string]Path](t)(s.Paths()); !reflect.DeepEqual(all, map[string]Path{e.Path: want}) {
		t.Errorf("paths: %+v", all)
	}
	if _, ok, err := s.Known("/x/other.tsv"); ok || err != nil {
		t.Errorf("a path that was never stored: %v, %v", ok, err)
	}
	inOrder(t, s)
}

func TestSameAgainChangesNothing(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	e := entry("/x/a.tsv", "a", repeat)
	st := putOne(t, s, e)
	before := must[[]byte](t)(os.ReadFile(s.file.path))
	again := putOne(t, s, e)
	if again.New || again.Supersedes != nil || again.Ref != st.Ref {
		t.Errorf("the second time: %+v", again)
	}
	if !slices.Equal(before, must[[]byte](t)(os.ReadFile(s.file.path))) {
		t.Error("the file has changed")
	}
	// A file that was touched is remembered with its new time.
	e.ModTimeNs++
	if st := putOne(t, s, e); st.New {
		t.Error("a touched file has a new result")
	}
	if p, _, _ := s.Known(e.Path); p.ModTimeNs != e.ModTimeNs || len(p.Earlier) != 0 {
		t.Errorf("after the touch: %+v", p)
	}
	if all := must[[]Record](t)(s.Results(Filter{Superseded: true})); len(all) != 1 {
		t.Errorf("%d results", len(all))
	}
	inOrder(t, s)
}

func TestChangedFileSupersedes(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	first := putOne(t, s, entry("/x/a.tsv", "a"))
	second := putOne(t, s, entry("/x/a.tsv", "b"))
	third := putOne(t, s, entry("/x/a.tsv", "b", version("2")))
	if !second.New || second.Supersedes == nil || *second.Supersedes != first.Ref {
		t.Errorf("second: %+v", second)
	}
	if third.ID != second.ID || third.Revision != 2 || *third.Supersedes != second.Ref {
		t.Errorf("third: %+v", third)
	}
	p, _, _ := s.Known("/x/a.tsv")
	if p.Current != third.Ref || !slices.Equal(p.Earlier, []Ref{first.Ref, second.Ref}) {
		t.Errorf("path: %+v", p)
	}
	for old, by := range map[Ref]Ref{first.Ref: second.Ref, second.Ref: third.Ref} {
		r := must[Record](t)(s.Revision(old))
		if r.SupersededBy == nil || *r.SupersededBy != by || len(r.Paths) != 0 {
			t.Errorf("%s: superseded by %v, paths %v", old, r.SupersededBy, r.Paths)
		}
	}
	if revisions := must[[]Record](t)(s.Get(second.ID[:8])); len(revisions) != 2 {
		t.Errorf("%d revisions", len(revisions))
	}
	inOrder(t, s)

	// Back to bytes that were there: the old result is current again, and news.
	if err := s.Announced(first.Ref, second.Ref, third.Ref); err != nil {
		t.Fatal(err)
	}
	back := putOne(t, s, entry("/x/a.tsv", "a"))
	if back.Ref != first.Ref || !back.New || *back.Supersedes != third.Ref {
		t.Errorf("back: %+v", back)
	}
	if r := must[Record](t)(s.Revision(first.Ref)); r.SupersededBy != nil {
		t.Errorf("current again, but superseded by %v", r.SupersededBy)
	}
	if left := must[[]Record](t)(s.Unannounced()); len(left) != 1 || left[0].Ref != first.Ref {
		t.Errorf("to announce after going back: %s", refs(left))
	}
	inOrder(t, s)
}

func TestSameBytesUnderTwoNames(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	a := entry("/x/a.tsv", "a")
	b := entry("/x/b.tsv", "a")
	b.Result.Run.File = "dish/b.tsv"
	first, second := putOne(t, s, a), putOne(t, s, b)
	if second.New || second.Ref != first.Ref {
		t.Errorf("second name: %+v", second)
	}
	r := must[Record](t)(s.Revision(first.Ref))
	if !slices.Equal(r.Paths, []string{a.Path, b.Path}) {
		t.Errorf("names: %v", r.Paths)
	}
	// One of them changes: the other still has the result.
	putOne(t, s, entry("/x/a.tsv", "c"))
	if r := must[Record](t)(s.Revision(first.Ref)); r.SupersededBy != nil || !slices.Equal(r.Paths, []string{b.Path}) {
		t.Errorf("after one changed: %v, superseded by %v", r.Paths, r.SupersededBy)
	}
	inOrder(t, s)
}

func TestManyInOneTransaction(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	st := must[[]Stored](t)(s.Put(entry("/x/a.tsv", "a"), entry("/x/b.tsv", "a"), entry("/x/a.tsv", "b"), entry("/x/c.tsv", "c", repeat)))
	if !st[0].New || st[1].New || !st[2].New || *st[2].Supersedes != st[0].Ref || !st[3].New {
		t.Errorf("stored as %+v", st)
	}
	inOrder(t, s)

	// One that cannot be stored: none is.
	bad := entry("/x/e.tsv", "e")
	bad.Result.Segments[0].FromS = math.NaN()
	if _, err := s.Put(entry("/x/d.tsv", "d"), bad); err == nil || !strings.Contains(err.Error(), "/x/e.tsv") {
		t.Errorf("NaN: %v", err)
	}
	if _, ok, _ := s.Known("/x/d.tsv"); ok {
		t.Error("half a batch was stored")
	}
	for name, e := range map[string]Entry{
		"no path": entry("", "e"),
		"NUL":     entry("a\x00b", "e"),
		"id":      entry("/x/e.tsv", "e", func(r *run.Result) { r.Run.ID = "e" }),
	} {
		if _, err := s.Put(e); err == nil {
			t.Errorf("%s: stored", name)
		}
	}
	if st, err := s.Put(); st != nil || err != nil {
		t.Errorf("nothing put: %v, %v", st, err)
	}
}

// File names on Unix are bytes (POSIX.1-2017, 3.170 Filename: any but NUL and
// slash), and header texts may be as odd.
func TestNamesThatAreNotText(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	odd := func(r *run.Result) {
		r.Run.Cell = "\xff\xfe"
		r.Run.Session = "a\x00b" + strings.Repeat("long", 20000)
	}
	for _, path := range []string{"/x/\xb5m.tsv", "/x/\xc2\xb5m.tsv", "/x/\ufffdm.tsv", "/x/\xffm.tsv", "/x/ <b>\"\n.tsv"} {
		e := entry(path, path, odd)
		first := putOne(t, s, e)
		if again := putOne(t, s, e); again.New || again.Ref != first.Ref {
			t.Errorf("%q: stored twice", path)
		}
		if r := must[Record](t)(s.Revision(first.Ref)); !slices.Equal(r.Paths, []string{path}) {
			t.Errorf("%q came back as %q", path, r.Paths)
		}
		if p, ok, _ := s.Known(path); !ok || p.Path != path {
			t.Errorf("%q is known as %q", path, p.Path)
		}
	}
	if all := must[[]Record](t)(s.Results(Filter{Session: result("").Run.Session})); len(all) != 0 {
		t.Errorf("%d results under another session", len(all))
	}
	inOrder(t, s)
}

func TestFileNameEscapes(t *testing.T) {
	for _, bad := range []string{`"\u0000"`, `"\u0000f"`, `"\u0000zz"`} {
		var n fileName
		if err := json.Unmarshal([]byte(bad), &n); err == nil {
			t.Errorf("%s was read as %q", bad, n)
		}
	}
}

func TestAnnouncements(t *testing.T) {
	folder := t.TempDir()
	s := open(t, folder, Options{})
	a := putOne(t, s, entry("/x/a.tsv", "a"))
	b := putOne(t, s, entry("/x/b.tsv", "b", repeat))
	if left := must[[]Record](t)(s.Unannounced()); len(left) != 2 || left[0].Ref != a.Ref || left[1].Ref != b.Ref {
		t.Errorf("unannounced: %s", refs(left))
	}
	if err := s.Announced(a.Ref); err != nil {
		t.Fatal(err)
	}
	s.Close()
	s = open(t, folder, Options{})
	if left := must[[]Record](t)(s.Unannounced()); len(left) != 1 || left[0].Ref != b.Ref {
		t.Errorf("after the first: %s", refs(left))
	}
	if err := errors.Join(s.Announced(b.Ref, b.Ref), s.Announced()); err != nil {
		t.Fatal(err)
	}
	if left := must[[]Record](t)(s.Unannounced()); len(left) != 0 {
		t.Errorf("after both: %s", refs(left))
	}
}

func TestOutbox(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	putOne(t, s, entry("/x/a.tsv", "a"))
	b := putOne(t, s, entry("/x/b.tsv", "b", repeat))
	c := putOne(t, s, entry("/x/c.tsv", "c", repeat))
	due := must[[]Event](t)(s.Outbox())
	if len(due) != 2 || due[0].Run != b.Ref || due[1].Run != c.Ref || due[0].ID != b.ID+"/000001/repeat" || due[0].Kind != "repeat" {
		t.Fatalf("due: %+v", due)
	}
	inOrder(t, s)
	if err := errors.Join(s.Delivered(due[0].ID), s.Delivered(due[0].ID)); err != nil {
		t.Fatal(err)
	}
	if left := must[[]Event](t)(s.Outbox()); len(left) != 1 || left[0] != due[1] {
		t.Errorf("left: %+v", left)
	}
}

var errDisk = errors.New("input/output error")

// A commit may fail before its last page is written or after.
func TestFailedCommit(t *testing.T) {
	for _, landed := range []bool{false, true} {
		s := open(t, t.TempDir(), Options{})
		old := putOne(t, s, entry("/x/a.tsv", "a"))
		good := s.file.commit
		s.file.commit = func(db *bbolt.DB, do func(*bbolt.Tx) error) error {
			if landed {
				return errors.Join(good(db, do), errDisk)
			}
			return db.Update(func(tx *bbolt.Tx) error { return errors.Join(do(tx), errDisk) })
		}
		st, err := s.Put(entry("/x/a.tsv", "b", repeat))
		if !errors.Is(err, errDisk) || st != nil {
			t.Fatalf("landed %v: %v, %v", landed, st, err)
		}
		if !s.doubt {
			t.Error("the store is not in doubt")
		}
		s.file.commit = good
		again := putOne(t, s, entry("/x/a.tsv", "b", repeat))
		if !again.New || s.doubt {
			t.Errorf("landed %v: the second attempt: %+v, doubt %v", landed, again, s.doubt)
		}
		if again.Supersedes == nil || *again.Supersedes != old.Ref {
			t.Errorf("landed %v: the second attempt supersedes %v, want %s", landed, again.Supersedes, old.Ref)
		}
		if third := putOne(t, s, entry("/x/a.tsv", "b", repeat)); third.New {
			t.Errorf("landed %v: new once more", landed)
		}
		if r := must[Record](t)(s.Revision(old.Ref)); r.SupersededBy == nil || *r.SupersededBy != again.Ref {
			t.Errorf("landed %v: the old one is superseded by %v", landed, r.SupersededBy)
		}
		if all := must[[]Record](t)(s.Results(Filter{Superseded: true})); len(all) != 2 {
			t.Errorf("landed %v: %s", landed, refs(all))
		}
		inOrder(t, s)
	}
}

// The system refuses the write itself: the file was opened without the right.
func TestFailedWrite(t *testing.T) {
	folder := t.TempDir()
	s := open(t, folder, Options{})
	putOne(t, s, entry("/x/a.tsv", "a"))
	before := must[[]byte](t)(os.ReadFile(s.file.path))
	good := s.file.open
	s.file.open = func(name string, _ int, perm os.FileMode) (*os.File, error) {
		return os.OpenFile(name, os.O_RDONLY, perm)
	}
	if st, err := s.Put(entry("/x/b.tsv", "b")); err == nil || st != nil || !s.doubt {
		t.Errorf("stored without a write: %v, %v, doubt %v", st, err, s.doubt)
	}
	// Ended in doubt, the store is checked at the next start.
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	if _, err := os.Stat(s.lock.owner); err != nil {
		t.Errorf("no mark of a store in doubt: %v", err)
	}
	s.file.open = good
	if !slices.Equal(before, must[[]byte](t)(os.ReadFile(s.file.path))) {
		t.Error("the file has changed")
	}
	s = open(t, folder, Options{})
	if _, ok, _ := s.Known("/x/b.tsv"); ok {
		t.Error("what failed is there")
	}
}

// A failed commit that left the store damaged: nothing is written on top.
func TestFailedCommitThatDamages(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	a := putOne(t, s, entry("/x/a.tsv", "a"))
	good := s.file.commit
	s.file.commit = func(db *bbolt.DB, do func(*bbolt.Tx) error) error {
		return errors.Join(db.Update(func(tx *bbolt.Tx) error {
			return errors.Join(do(tx), tx.Bucket(bucketResults).Delete(a.key()))
		}), errDisk)
	}
	s.Put(entry("/x/b.tsv", "b"))
	s.file.commit = good
	before := must[[]byte](t)(os.ReadFile(s.file.path))
	for range 2 {
		var d *DamagedError
		if _, err := s.Put(entry("/x/c.tsv", "c")); !errors.As(err, &d) {
			t.Errorf("put on a damaged store: %v", err)
		}
	}
	if !slices.Equal(before, must[[]byte](t)(os.ReadFile(s.file.path))) {
		t.Error("the damaged file has changed")
	}
}

// The CRC-32C of 32 zero bytes is 0x8A9136AA: RFC 3720 (iSCSI), appendix B.4.
func TestChecksum(t *testing.T) {
	zeros := make([]byte, 32)
	for cut := range zeros {
		if s := sum(zeros[:cut], zeros[cut:]); s != "\n8a9136aa" {
			t.Errorf("cut at %d: %q", cut, s)
		}
	}
	v, err := encode([]byte("k"), map[string]int{"a": 1})
	if err != nil {
		t.Fatal(err)
	}
	for i := range v {
		for bit := range 8 {
			w := slices.Clone(v)
			w[i] ^= 1 << bit
			if x, err := decode[map[string]int]([]byte("k"), w); err == nil {
				t.Errorf("byte %d, bit %d: read as %v", i, bit, x)
			}
		}
		if x, err := decode[map[string]int]([]byte("k"), v[:i]); err == nil {
			t.Errorf("cut at %d: read as %v", i, x)
		}
	}
	if x, err := decode[map[string]int]([]byte("l"), v); err == nil {
		t.Errorf("under another key: read as %v", x)
	}
}
