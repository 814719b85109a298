package watcher

import (
	"bytes"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"platen/pipeline"
	"platen/pipeline/phantom"
	"platen/pipeline/run"
	"platen/store"
	"platen/watcher/folder"
)

// Faults that other programs and disks cause; what each must end in stands in
// the comment of its test (common practice, no source, unless one is named).

// An instrument allocates more room than the run takes and fills it in place:
// the NUL bytes seen meanwhile are not what the file holds in the end.
func TestAllocatedRoomIsFilled(t *testing.T) {
	r := newRig(t, "", func(c *Config) { c.Settle = 2 * time.Second })
	b := export(t, 0, phantom.Silent)
	whole := append(bytes.Clone(b), make([]byte, len(b)/2)...)
	name := filepath.Join(r.export, "room.tsv")
	first := append(bytes.Clone(b[:len(b)/3]), make([]byte, len(whole)-len(b)/3)...)
	if err := os.WriteFile(name, first, 0o644); err != nil {
		t.Fatal(err)
	}
	r.until("it to be read", func() bool { return r.said("Reading room.tsv") == 1 })
	time.Sleep(300 * time.Millisecond) // so that the room has been looked at while it was empty
	f, err := os.OpenFile(name, os.O_WRONLY, 0)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	for at := len(b) / 3; at < len(b); at += 20000 {
		if _, err := f.WriteAt(b[at:min(at+20000, len(b))], int64(at)); err != nil {
			t.Fatal(err)
		}
		time.Sleep(5 * time.Millisecond)
	}
	r.until("a result", func() bool { _, ok := r.of("room.tsv"); return ok })
	got, _ := r.of("room.tsv")
	if want := undisturbed("room.tsv", whole); asText(t, got) != want {
		t.Errorf("%.600s\nwant\n%.600s", asText(t, got), want)
	}
}

// Room is filled after all when it has been given up already and its NUL bytes
// are being read: what the file holds in the end counts.
func TestAllocatedRoomIsFilledLate(t *testing.T) {
	b := export(t, 0, phantom.Silent)
	const room = 2*stepBytes + 1 // so that reading it takes several steps
	var once sync.Once
	var name string
	r := newRig(t, "", func(c *Config) {
		name = filepath.Join(c.Folder, "room.tsv")
		c.open = func(file string, s pipeline.Settings) reading {
			return feedHook{pipeline.Open(file, s), func(p []byte) {
				if bytes.HasSuffix(p, make([]byte, seamBytes)) {
					once.Do(func() { fill(t, name, b[len(b)/2:], int64(len(b)/2)) })
				}
			}}
		}
	})
	first := append(bytes.Clone(b[:len(b)/2]), make([]byte, len(b)-len(b)/2+room)...)
	r.write("room.tsv", first)
	want := undisturbed("room.tsv", append(bytes.Clone(b), make([]byte, room)...))
	r.until("the whole run", func() bool { d, ok := r.of("room.tsv"); return ok && asText(t, d) == want })
	if n := len(r.results()); n != 1 {
		t.Errorf("%d results, one of them of bytes that were never in the file together", n)
	}
}

func fill(t *testing.T, name string, p []byte, at int64) {
	f, err := os.OpenFile(name, os.O_WRONLY, 0)
	if err != nil {
		t.Error(err)
		return
	}
	defer f.Close()
	if _, err := f.WriteAt(p, at); err != nil {
		t.Error(err)
	}
}

// feedHook is a reading of which a test sees what it is fed.
type feedHook struct {
	reading
	fed func([]byte)
}

func (h feedHook) Feed(p []byte) { h.fed(p); h.reading.Feed(p) }

// Bytes in the middle are written over in place before the run has settled: the
// result is that of what the file holds in the end.
func TestWrittenInPlace(t *testing.T) {
	r := newRig(t, "", func(c *Config) { c.Settle = 2 * time.Second })
	b := export(t, 0, phantom.Silent)
	r.write("a.tsv", b)
	r.until("it to be read", func() bool { return r.said("Reading a.tsv") == 1 })
	time.Sleep(400 * time.Millisecond) // so that all of it has been read
	at := bytes.LastIndexByte(b[:len(b)/2], '\n') + 1
	row := bytes.Clone(b[at : at+bytes.IndexByte(b[at:], '\n')])
	i := bytes.IndexByte(row, '\t') + 1
	row[i] = '9' // another force
	if row[i] == b[at+i] {
		row[i] = '8'
	}
	want := bytes.Clone(b)
	copy(want[at:], row)
	f, err := os.OpenFile(filepath.Join(r.export, "a.tsv"), os.O_WRONLY, 0)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	if _, err := f.WriteAt(row, int64(at)); err != nil {
		t.Fatal(err)
	}
	r.until("a result", func() bool { _, ok := r.of("a.tsv"); return ok })
	if got, _ := r.of("a.tsv"); asText(t, got) != undisturbed("a.tsv", want) {
		t.Errorf("%.400s\nwant\n%.400s", asText(t, got), undisturbed("a.tsv", want))
	}
}

// A folder that is away for a while, as a share that drops, and back with the
// very same files: what was being read is read to its end.
func TestFolderBackWithTheSameFiles(t *testing.T) {
	r := newRig(t, "", nil)
	b := export(t, 0, phantom.Silent)
	f, err := os.Create(filepath.Join(r.export, "a.tsv"))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	if _, err := f.Write(b[:len(b)/2]); err != nil {
		t.Fatal(err)
	}
	r.until("it to be read", func() bool { return r.said("Reading a.tsv") == 1 })
	if err := os.Rename(r.export, r.export+".away"); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { os.RemoveAll(r.export + ".away") })
	if _, err := f.Write(b[len(b)/2:]); err != nil { // the instrument itself still reaches it
		t.Fatal(err)
	}
	r.until("it to be missed", func() bool { return r.said("cannot be read") >= 1 })
	time.Sleep(time.Second) // longer than it takes to give a file up
	if err := os.Rename(r.export+".away", r.export); err != nil {
		t.Fatal(err)
	}
	r.until("the whole run", func() bool { d, ok := r.of("a.tsv"); return ok && asText(t, d) == undisturbed("a.tsv", b) })
	if n := len(r.results()); n != 1 {
		t.Errorf("%d results: a share that drops is no reason to give a run up", n)
	}
}

// A result that the store refuses does not keep back the others.
func TestOneRefusedResultStopsNothing(t *testing.T) {
	r := newRig(t, "", func(c *Config) { c.Store = refusing{c.Store.(*store.Store)} })
	r.write("refused.tsv", export(t, 1, phantom.Declared))
	r.until("the refusal", func() bool { return r.said("refused.tsv", "not today") == 1 })
	r.write("a.tsv", export(t, 0, phantom.Declared))
	r.until("the other verdict", func() bool { return r.said("ACCEPT", "a.tsv") == 1 })
	if r.said("ACCEPT", "refused.tsv") != 0 {
		t.Error("a verdict was said that is not stored")
	}
	r.stop()
	if r.said("1 result") != 1 {
		t.Errorf("the end does not tell what is not stored:\n%s", r.console)
	}
}

// refusing is a store that takes everything but one file.
type refusing struct{ *store.Store }

func (s refusing) Put(es ...store.Entry) ([]store.Stored, error) {
	for _, e := range es {
		if strings.HasSuffix(e.Path, "/refused.tsv") {
			return nil, errors.New("not today: " + e.Path)
		}
	}
	return s.Store.Put(es...)
}

// Rights that are withdrawn: said once, an unreadable result that asks for the
// rights, others go on; when they are back the run is analysed at once and its
// result replaces that one.
func TestRightsWithdrawnAndBack(t *testing.T) {
	var denied atomic.Bool
	denied.Store(true)
	r := newRig(t, "", func(c *Config) {
		c.file = func(folder, p string) (*os.File, error) {
			if p == "a.tsv" && denied.Load() {
				return nil, &fs.PathError{Op: "openat", Path: p, Err: fs.ErrPermission}
			}
			return openBelow(folder, p)
		}
	})
	b := export(t, 0, phantom.Declared)
	r.write("a.tsv", b)
	r.write("b.tsv", export(t, 1, phantom.Declared))
	r.until("the other verdict", func() bool { return r.said("ACCEPT", "b.tsv") == 1 })
	r.until("an unreadable result", func() bool { _, ok := r.of("a.tsv"); return ok })
	d, _ := r.of("a.tsv")
	if d.Verdict == run.Accept || d.Run.Complete || !strings.Contains(asText(t, d), "right to read it") {
		t.Errorf("%s", asText(t, d))
	}
	r.until("it to be said", func() bool { return r.said("a.tsv cannot be read for now") == 1 })
	denied.Store(false)
	if err := os.Chmod(filepath.Join(r.export, "a.tsv"), 0o600); err != nil {
		t.Fatal(err)
	}
	r.until("the true result", func() bool { d, ok := r.of("a.tsv"); return ok && asText(t, d) == undisturbed("a.tsv", b) })
	r.until("what it replaces", func() bool { return r.said("ACCEPT", "a.tsv", "replaces the result") == 1 })
	if n := r.said("cannot be read for now"); n != 1 {
		t.Errorf("said %d times", n)
	}
}

// The run that changed last is stepped first, so that a backlog never stands
// before the one that is being written.
func TestNewestFirst(t *testing.T) {
	s := &Service{files: map[string]*follower{}, open: map[*follower]bool{}}
	now := time.Now()
	for i, age := range []time.Duration{3, 1, 4, 2} {
		f := &follower{s: s, path: fmt.Sprint(i), changed: now.Add(-age * time.Second)}
		f.told.Store(&folder.File{})
		f.wake(now)
	}
	s.lineUp()
	var order string
	for f := s.next(); f != nil; f = s.next() {
		order += f.path
		f.busy = true
	}
	if order != "1302" {
		t.Errorf("stepped in the order %s, want 1302", order)
	}
	// One of which there is more to read comes before older ones that wait.
	s.working = 4
	for f := range s.open {
		if f.path != "3" {
			s.stepped(f)
		}
	}
	for f := range s.open {
		if f.path == "3" {
			s.stepped(f)
		}
	}
	if f := s.next(); f == nil || f.path != "1" {
		t.Errorf("%+v is next, want 1", f)
	}
}

// A failure of the analysis itself is the result of that file, asks to be
// reported, is in the log with its stack, and the other files go on.
func TestFailureOfTheAnalysis(t *testing.T) {
	var opened atomic.Int32
	r := newRig(t, "", func(c *Config) {
		c.open = func(name string, s pipeline.Settings) reading {
			opened.Add(1)
			if name == "bad.tsv" {
				return brokenReading{}
			}
			return pipeline.Open(name, s)
		}
	})
	r.write("bad.tsv", []byte("anything"))
	r.write("good.tsv", export(t, 0, phantom.Declared))
	r.until("the good one", func() bool { return r.said("ACCEPT", "good.tsv") == 1 })
	r.until("a result of the bad one", func() bool { _, ok := r.of("bad.tsv"); return ok })
	d, _ := r.of("bad.tsv")
	if d.Verdict == run.Accept || d.Run.Complete || !strings.Contains(asText(t, d), "Please report this") {
		t.Errorf("%s", asText(t, d))
	}
	log, err := os.ReadFile(filepath.Join(r.state, "log", "session.jsonl"))
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Contains(log, []byte("brokenReading")) {
		t.Error("the log has no stack")
	}

	// What is stored and unchanged is not opened again.
	r.stop()
	opened.Store(0)
	r.console = &lines{}
	r.start(func(c *Config) {
		c.open = func(name string, s pipeline.Settings) reading {
			opened.Add(1)
			return pipeline.Open(name, s)
		}
	})
	r.write("next.tsv", export(t, 1, phantom.Declared))
	r.until("the next", func() bool { return r.said("ACCEPT", "next.tsv") == 1 })
	// bad.tsv has no result of its bytes, so it is tried again: a newer version
	// may not fail on it.
	r.until("two to be read", func() bool { return opened.Load() >= 2 })
	if n := opened.Load(); n != 2 {
		t.Errorf("%d files were read after the restart, want next.tsv and bad.tsv", n)
	}
}

type brokenReading struct{}

func (brokenReading) Feed([]byte)                                   { panic("index out of range") }
func (brokenReading) Completion() run.Completion                    { return run.Growing }
func (brokenReading) Estimates() run.Estimates                      { return run.Estimates{} }
func (brokenReading) Finish(run.Completion) (run.Estimates, string) { return run.Estimates{}, "" }

// A link to a run inside the folder is that run under a second name; so the
// operator is not told that it is unreadable.
func TestLinkInsideTheFolder(t *testing.T) {
	r := newRig(t, "", nil)
	r.write("a.tsv", export(t, 0, phantom.Declared))
	if err := os.Symlink("a.tsv", filepath.Join(r.export, "b.tsv")); err != nil {
		t.Fatal(err)
	}
	r.until("both names", func() bool { _, a := r.of("a.tsv"); _, b := r.of("b.tsv"); return a && b })
	rs := r.results()
	if len(rs) != 1 || len(rs[0].Paths) != 2 || rs[0].Result.Verdict != run.Accept {
		t.Errorf("%d results: %+v", len(rs), rs)
	}
}

// The snapshot tells of what is being written, and no longer when it is over.
func TestSnapshot(t *testing.T) {
	r := newRig(t, "", func(c *Config) { c.Settle = time.Minute })
	b := export(t, 5, phantom.Declared) // the cell is lost half way
	r.write("lost.tsv", b[:len(b)*9/10])
	var g []Growing
	r.until("it to grow with its warning", func() bool {
		g = r.service.Snapshot()
		return len(g) == 1 && slices.ContainsFunc(g[0].Findings, func(f run.Finding) bool { return f.Rule == "contact-loss" })
	})
	if g[0].File != "lost.tsv" || g[0].Cell == "" || g[0].Samples == 0 || g[0].Bytes != int64(len(b)*9/10) {
		t.Errorf("%+v", g[0])
	}
	r.write("lost.tsv", b)
	r.until("a verdict", func() bool { return r.said("REPEAT", "lost.tsv") == 1 })
	if g := r.service.Snapshot(); len(g) != 0 {
		t.Errorf("still growing: %+v", g)
	}
}

// BenchmarkManyFinishedFiles follows a folder with very many small finished
// files until all have results.
func BenchmarkManyFinishedFiles(b *testing.B) {
	for _, n := range []int{1000, 4000} {
		b.Run(fmt.Sprint(n), func(b *testing.B) {
			for b.Loop() {
				b.StopTimer()
				export, state := b.TempDir(), b.TempDir()
				old := time.Now().Add(-time.Hour)
				for i := range n {
					name := filepath.Join(export, fmt.Sprintf("%05d.tsv", i))
					if err := os.WriteFile(name, fmt.Appendf(nil, "nonsense %d\n", i), 0o644); err != nil {
						b.Fatal(err)
					}
					os.Chtimes(name, old, old)
				}
				b.StartTimer()
				serveUntilIdle(export, state)
			}
			b.ReportMetric(float64(b.Elapsed().Microseconds())/float64(b.N*n), "µs/file")
		})
	}
}
