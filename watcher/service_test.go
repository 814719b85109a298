package watcher

import (
	"bufio"
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"log/slog"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	"go.uber.org/goleak"

	"platen/pipeline"
	"platen/pipeline/phantom"
	"platen/pipeline/run"
	"platen/qc"
	"platen/store"
	"platen/watcher/sessionlog"
)

// childEnv makes the test binary a service of its own, to be killed.
const childEnv = "PLATEN_TEST_SERVICE"

func TestMain(m *testing.M) {
	if args := os.Getenv(childEnv); args != "" {
		dirs := strings.Split(args, "\n")
		serveUntilIdle(dirs[0], dirs[1])
		return
	}
	goleak.VerifyTestMain(m, goleak.IgnoreAnyFunction("github.com/DeRuina/timberjack.(*Logger).millRun"))
}

func serveUntilIdle(export, state string) {
	st, err := store.Open(state, store.Options{})
	if err != nil {
		fmt.Fprintln(os.Stderr, err)
		os.Exit(1)
	}
	log, err := sessionlog.New(sessionlog.Options{Folder: filepath.Join(state, "log"), MaxSizeMB: 1, Keep: 1, Console: slog.NewTextHandler(io.Discard, nil)})
	if err != nil {
		fmt.Fprintln(os.Stderr, err)
		os.Exit(1)
	}
	s, err := New(config(export, st, log))
	if err == nil {
		s.EndWhenIdle()
		err = s.Run(context.Background())
	}
	if err = errors.Join(err, st.Close()); err != nil {
		fmt.Fprintln(os.Stderr, err)
		os.Exit(1)
	}
}

func config(export string, st Store, log *sessionlog.Log) Config {
	return Config{
		Folder: export, Store: st, Log: log,
		Analysis: pipeline.Defaults(), Limits: qc.Defaults(), Software: run.Software{Version: "test"},
		Settle: 300 * time.Millisecond, Sweep: 100 * time.Millisecond, Include: []string{"*.tsv"},
	}
}

// rig is a service under test with its folders.
type rig struct {
	t             *testing.T
	export, state string
	store         *store.Store
	console       *lines
	log           *sessionlog.Log
	service       *Service
	stop          func()
}

// lines collects what a console shows.
type lines struct {
	mu sync.Mutex
	b  bytes.Buffer
}

func (l *lines) Write(p []byte) (int, error) {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.b.Write(p)
}

func (l *lines) String() string {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.b.String()
}

func newRig(t *testing.T, state string, change func(*Config)) *rig {
	t.Helper()
	r := &rig{t: t, export: t.TempDir(), state: state, console: &lines{}}
	if state == "" {
		r.state = t.TempDir()
	}
	r.start(change)
	return r
}

func (r *rig) start(change func(*Config)) {
	r.t.Helper()
	var err error
	if r.store, err = store.Open(r.state, store.Options{}); err != nil {
		r.t.Fatal(err)
	}
	r.log, err = sessionlog.New(sessionlog.Options{Folder: filepath.Join(r.state, "log"), MaxSizeMB: 1, Keep: 2, Console: slog.NewTextHandler(r.console, nil)})
	if err != nil {
		r.t.Fatal(err)
	}
	c := config(r.export, r.store, r.log)
	if change != nil {
		change(&c)
	}
	if r.service, err = New(c); err != nil {
		r.t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	ended := make(chan error, 1)
	go func() { ended <- r.service.Run(ctx) }()
	r.stop = sync.OnceFunc(func() {
		cancel()
		if err := <-ended; err != nil {
			r.t.Error(err)
		}
		if err := r.log.Close(); err != nil {
			r.t.Error(err)
		}
		if err := r.store.Close(); err != nil {
			r.t.Error(err)
		}
	})
	r.t.Cleanup(r.stop)
}

// until waits for a condition, far longer than it can take on a busy machine.
func (r *rig) until(what string, ok func() bool) {
	r.t.Helper()
	for end := time.Now().Add(30 * time.Second); time.Now().Before(end); time.Sleep(10 * time.Millisecond) {
		if ok() {
			return
		}
	}
	r.t.Fatalf("never: %s; the console shows\n%s", what, r.console)
}

func (r *rig) results() []store.Record {
	r.t.Helper()
	rs, err := r.store.Results(store.Filter{Superseded: true})
	if err != nil {
		r.t.Fatal(err)
	}
	return rs
}

// of returns the current result of a file, and whether there is one.
func (r *rig) of(name string) (run.Result, bool) {
	for _, x := range r.results() {
		if x.SupersededBy == nil && slices.ContainsFunc(x.Paths, func(p string) bool { return strings.HasSuffix(p, "/"+name) }) {
			return x.Result, true
		}
	}
	return run.Result{}, false
}

func (r *rig) write(name string, b []byte) {
	r.t.Helper()
	if err := os.WriteFile(filepath.Join(r.export, name), b, 0o644); err != nil {
		r.t.Fatal(err)
	}
}

// said counts the lines of the console that hold all words.
func (r *rig) said(words ...string) int {
	n := 0
	for line := range strings.Lines(r.console.String()) {
		if !slices.ContainsFunc(words, func(w string) bool { return !strings.Contains(line, w) }) {
			n++
		}
	}
	return n
}

// export is a short run of a session spec, as its instrument exports it.
func export(t testing.TB, i int, ending phantom.Ending) []byte {
	t.Helper()
	s := phantom.Session(5)[i]
	s.Rig.RateHz, s.Rig.FlickerToHz = 50, 25
	s.Dialect.Ending = ending
	b, err := phantom.Text(s)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

// undisturbed is the document that the analysis gives of finished bytes.
func undisturbed(name string, b []byte) string {
	p := pipeline.Open(name, pipeline.Defaults())
	p.Feed(b)
	how := p.Completion()
	if how == run.Growing {
		how = run.BySettling
	}
	e, id := p.Finish(how)
	text, _ := json.Marshal(qc.Conclude(e, id, name, qc.Defaults(), run.Software{Version: "test"}))
	return string(text)
}

func asText(t *testing.T, r run.Result) string {
	t.Helper()
	b, err := json.Marshal(r)
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}

// However a run is written, its document is that of the finished file, byte for
// byte, there is one, and it is said once.
func TestGrowingRunsGiveTheSameDocument(t *testing.T) {
	r := newRig(t, "", nil)
	for i, ending := range []phantom.Ending{phantom.Declared, phantom.EndMark, phantom.Silent} {
		name := fmt.Sprintf("run%d.tsv", i)
		b := export(t, 0, ending)
		f, err := os.Create(filepath.Join(r.export, name))
		if err != nil {
			t.Fatal(err)
		}
		rng := rand.New(rand.NewPCG(uint64(i), 1))
		for p := b; len(p) > 0; {
			n := min(len(p), 1+rng.IntN(4000))
			if _, err := f.Write(p[:n]); err != nil {
				t.Fatal(err)
			}
			p = p[n:]
			time.Sleep(2 * time.Millisecond) // so that the service sees it grow
		}
		if err := f.Close(); err != nil {
			t.Fatal(err)
		}
		r.until("a result of "+name, func() bool { _, ok := r.of(name); return ok })
		r.until("a verdict", func() bool { return r.said("ACCEPT", name) == 1 })
		got, _ := r.of(name)
		if want := undisturbed(name, b); asText(t, got) != want {
			t.Errorf("%s:\n%s\nwant\n%s", name, asText(t, got), want)
		}
	}
	if n := len(r.results()); n != 3 {
		t.Errorf("%d results of three files", n)
	}
}

// What goes wrong is said while the run is still being written, once.
func TestWarningsComeBeforeTheVerdict(t *testing.T) {
	r := newRig(t, "", nil)
	b := export(t, 5, phantom.Declared) // the cell is lost half way
	cut := len(b) * 9 / 10
	r.write("lost.tsv", b[:cut])
	r.until("a warning", func() bool { return r.said("Contact was lost", "level=WARN") == 1 })
	if _, ok := r.of("lost.tsv"); ok {
		t.Fatal("a verdict before the run was over")
	}
	f, err := os.OpenFile(filepath.Join(r.export, "lost.tsv"), os.O_APPEND|os.O_WRONLY, 0)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := f.Write(b[cut:]); err != nil {
		t.Fatal(err)
	}
	f.Close()
	r.until("a verdict", func() bool { return r.said("REPEAT", "Contact was lost") == 1 })
	if n := r.said("level=WARN", "Contact was lost"); n != 1 {
		t.Errorf("warned %d times", n)
	}
}

// The export folder is only ever read.
func TestExportFolderIsOnlyRead(t *testing.T) {
	before := t.TempDir()
	r := newRig(t, "", nil)
	os.MkdirAll(filepath.Join(r.export, "sub"), 0o755)
	files := map[string][]byte{"a.tsv": export(t, 0, phantom.Declared), "sub/b.tsv": export(t, 6, phantom.EndMark), "c.tsv": []byte("nonsense"), "notes.md": []byte("x")}
	for name, b := range files {
		r.write(name, b)
	}
	_ = before
	look := func() string {
		var s strings.Builder
		filepath.WalkDir(r.export, func(p string, d fs.DirEntry, err error) error {
			info, err := d.Info()
			if err != nil {
				t.Fatal(err)
			}
			text := ""
			if !d.IsDir() {
				b, _ := os.ReadFile(p)
				text = string(b)
			}
			fmt.Fprintln(&s, p, info.Mode(), info.ModTime(), len(text), text)
			return nil
		})
		return s.String()
	}
	was := look()
	r.until("three results", func() bool { return len(r.results()) == 3 })
	r.stop()
	if now := look(); now != was {
		t.Error("the export folder has changed")
	}
	// And the state folder may not lie in it.
	st, err := store.Open(t.TempDir(), store.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer st.Close()
	if _, err := New(config(filepath.Dir(st.Folder()), st, r.log)); err == nil || !strings.Contains(err.Error(), "lies in the export folder") {
		t.Errorf("a state folder in the export folder: %v", err)
	}
}

// A changed file is analysed again; what it replaces stays readable. The same
// bytes under another name are the same result.
func TestChangedFiles(t *testing.T) {
	r := newRig(t, "", nil)
	good, bad := export(t, 0, phantom.Declared), export(t, 6, phantom.Declared)
	r.write("a.tsv", good)
	r.until("accept", func() bool { d, ok := r.of("a.tsv"); return ok && d.Verdict == run.Accept })
	r.write("a.tsv", bad)
	r.until("repeat", func() bool { d, ok := r.of("a.tsv"); return ok && d.Verdict == run.Repeat })
	if n := len(r.results()); n != 2 {
		t.Errorf("%d results, want the new and the old", n)
	}
	r.until("what it replaces", func() bool { return r.said("REPEAT", "replaces the result") == 1 })

	r.write("copy.tsv", bad)
	r.until("the copy to be known", func() bool { _, ok := r.of("copy.tsv"); return ok })
	if n := len(r.results()); n != 2 {
		t.Errorf("%d results, want 2: the copy is no other run", n)
	}
	// Shorter, and of the same size with other bytes.
	r.write("a.tsv", good[:len(good)/2])
	r.until("truncated", func() bool { d, ok := r.of("a.tsv"); return ok && strings.Contains(asText(t, d), "truncated") })
	other := bytes.Replace(bytes.Clone(good[:len(good)/2]), []byte("willow-01"), []byte("willow-99"), 1)
	time.Sleep(20 * time.Millisecond) // a file system's clock may be coarse
	r.write("a.tsv", other)
	r.until("the other cell", func() bool { d, ok := r.of("a.tsv"); return ok && d.Run.Cell == "willow-99" })
}

// A restart goes on where it was: nothing is read, stored or said twice.
func TestRestart(t *testing.T) {
	r := newRig(t, "", nil)
	r.write("a.tsv", export(t, 0, phantom.Declared))
	r.until("a verdict", func() bool { return r.said("ACCEPT") == 1 })
	r.stop()
	was := len(r.results0())
	r.console = &lines{}
	r.start(nil)
	r.write("b.tsv", export(t, 1, phantom.Declared))
	r.until("the new one", func() bool { return r.said("ACCEPT", "b.tsv") == 1 })
	if n := r.said("ACCEPT", "a.tsv"); n != 0 {
		t.Errorf("the old verdict was said %d times more", n)
	}
	if n := len(r.results()); n != was+1 {
		t.Errorf("%d results after the restart, want %d", n, was+1)
	}
}

// results0 reads the results of a stopped service's store.
func (r *rig) results0() []store.Record {
	r.t.Helper()
	st, err := store.Read(r.state)
	if err != nil {
		r.t.Fatal(err)
	}
	rs, err := st.Results(store.Filter{Superseded: true})
	if err != nil {
		r.t.Fatal(err)
	}
	return rs
}

// A crash between commit and announcement: the verdict is said at the next
// start.
func TestUnannouncedIsSaid(t *testing.T) {
	state := t.TempDir()
	st, err := store.Open(state, store.Options{})
	if err != nil {
		t.Fatal(err)
	}
	var doc run.Result
	if err := json.Unmarshal([]byte(undisturbed("old.tsv", export(t, 0, phantom.Declared))), &doc); err != nil {
		t.Fatal(err)
	}
	if _, err := st.Put(store.Entry{Path: "/elsewhere/old.tsv", Result: doc}); err != nil {
		t.Fatal(err)
	}
	st.Close()
	r := newRig(t, state, nil)
	r.until("the verdict", func() bool { return r.said("ACCEPT", "old.tsv") == 1 })
	r.stop()
	r.console = &lines{}
	r.start(nil)
	r.until("the start", func() bool { return r.said("Watching") == 1 })
	if r.said("old.tsv") != 0 {
		t.Error("said again")
	}
}

// failing is a store whose disk is full for a while.
type failing struct {
	*store.Store
	mu    sync.Mutex
	fails bool
	tries int
}

func (f *failing) Put(es ...store.Entry) ([]store.Stored, error) {
	f.mu.Lock()
	defer f.mu.Unlock()
	f.tries++
	if f.fails {
		return nil, errors.New("no space left on device")
	}
	return f.Store.Put(es...)
}

// Nothing is announced that is not on disk; trouble is said once, and the end of
// it.
func TestStoreTrouble(t *testing.T) {
	var f *failing
	r := newRig(t, "", func(c *Config) {
		f = &failing{Store: c.Store.(*store.Store), fails: true}
		c.Store = f
	})
	r.write("a.tsv", export(t, 0, phantom.Declared))
	r.until("two tries", func() bool { f.mu.Lock(); defer f.mu.Unlock(); return f.tries >= 2 })
	if r.said("ACCEPT") != 0 {
		t.Error("a verdict was said that is not stored")
	}
	if n := r.said("no space left on device"); n != 1 {
		t.Errorf("the trouble was said %d times", n)
	}
	f.mu.Lock()
	f.fails = false
	f.mu.Unlock()
	r.until("the verdict", func() bool { return r.said("ACCEPT") == 1 && r.said("can be stored again") == 1 })
}

// Bad entries each end in a stored result that says why; the service goes on.
func TestBadEntries(t *testing.T) {
	r := newRig(t, "", nil)
	good := export(t, 0, phantom.Declared)
	r.write("empty.tsv", nil)
	r.write("header.tsv", []byte("# kind: cell\n"))
	r.write("picture.tsv", []byte("\x89PNG\r\n\x1a\n\x00\x00"))
	r.write("tail.tsv", append(bytes.Clone(good[:len(good)/2]), make([]byte, 5000)...))
	r.write("line.tsv", bytes.Repeat([]byte("9"), 8<<20))
	r.write("new\nline\u202e<script>.tsv", []byte("x"))
	if err := os.Mkdir(filepath.Join(r.export, "folder.tsv"), 0o755); err != nil {
		t.Fatal(err)
	}
	if err := os.Symlink(".", filepath.Join(r.export, "loop.tsv")); err != nil {
		t.Fatal(err)
	}
	if err := os.Symlink("/etc/passwd", filepath.Join(r.export, "out.tsv")); err != nil {
		t.Fatal(err)
	}
	names := []string{"empty.tsv", "header.tsv", "picture.tsv", "tail.tsv", "line.tsv", "new\nline\u202e<script>.tsv", "folder.tsv", "loop.tsv", "out.tsv"}
	for _, name := range names {
		r.until(fmt.Sprintf("a result of %q", name), func() bool { _, ok := r.of(name); return ok })
		d, _ := r.of(name)
		if d.Verdict == run.Accept || d.Run.Complete || len(d.Findings) == 0 || d.Findings[0].Message == "" || d.Findings[0].Advice == "" {
			t.Errorf("%q: %s", name, asText(t, d))
		}
		if strings.Contains(asText(t, d), "root:") {
			t.Error("a link out of the folder was read")
		}
	}
	r.write("good.tsv", good)
	r.until("the good one", func() bool { return r.said("ACCEPT", "good.tsv") == 1 })
	if strings.Contains(r.console.String(), "\u202e") {
		t.Error("a name drives the terminal")
	}
}

// A file that goes away while it is read ends in a result; one that has its
// result keeps it.
func TestVanishingFiles(t *testing.T) {
	r := newRig(t, "", nil)
	b := export(t, 0, phantom.Declared)
	r.write("gone.tsv", b[:len(b)/2])
	r.until("it to be read", func() bool { return r.said("Reading gone.tsv") == 1 })
	if err := os.Remove(filepath.Join(r.export, "gone.tsv")); err != nil {
		t.Fatal(err)
	}
	r.until("a result", func() bool { _, ok := r.of("gone.tsv"); return ok })
	if d, _ := r.of("gone.tsv"); d.Run.Complete || d.Verdict == run.Accept {
		t.Errorf("%s", asText(t, d))
	}
	r.write("done.tsv", b)
	r.until("a verdict", func() bool { return r.said("ACCEPT", "done.tsv") == 1 })
	if err := os.Remove(filepath.Join(r.export, "done.tsv")); err != nil {
		t.Fatal(err)
	}
	r.write("next.tsv", export(t, 1, phantom.Declared))
	r.until("the next", func() bool { return r.said("ACCEPT", "next.tsv") == 1 })
	if d, ok := r.of("done.tsv"); !ok || d.Verdict != run.Accept {
		t.Error("the result went away with its file")
	}
}

// The folder is removed and made anew: said once, and taken up again.
func TestFolderComesBack(t *testing.T) {
	r := newRig(t, "", nil)
	r.until("the start", func() bool { return r.said("Watching") == 1 })
	if err := os.RemoveAll(r.export); err != nil {
		t.Fatal(err)
	}
	r.until("it to be missed", func() bool { return r.said("cannot be read") == 1 })
	if err := os.Mkdir(r.export, 0o755); err != nil {
		t.Fatal(err)
	}
	r.until("it to be back", func() bool { return r.said("is back") == 1 })
	r.write("a.tsv", export(t, 0, phantom.Declared))
	r.until("a verdict", func() bool { return r.said("ACCEPT") == 1 })
	if n := r.said("cannot be read"); n != 1 {
		t.Errorf("said %d times", n)
	}
}

// Killed at random instants while runs are written, and started again: at the
// end every file has exactly one current result, that of the undisturbed
// analysis.
func TestKill(t *testing.T) {
	exportDir, state := t.TempDir(), t.TempDir()
	want := map[string]string{}
	var names []string
	contents := map[string][]byte{}
	for i := range 9 {
		name := fmt.Sprintf("run%d.tsv", i)
		b := export(t, i, phantom.EndMark)
		names = append(names, name)
		contents[name] = b
		want[name] = undisturbed(name, b)
	}
	written := make(chan struct{})
	go func() { // the instrument
		defer close(written)
		for _, name := range names {
			f, err := os.Create(filepath.Join(exportDir, name))
			if err != nil {
				return
			}
			for p := contents[name]; len(p) > 0; {
				n := min(len(p), 3000)
				f.Write(p[:n])
				p = p[n:]
				time.Sleep(3 * time.Millisecond)
			}
			f.Close()
		}
	}()
	child := func() *exec.Cmd {
		c := exec.Command(os.Args[0])
		c.Env = append(os.Environ(), childEnv+"="+exportDir+"\n"+state)
		c.Stderr = os.Stderr
		if err := c.Start(); err != nil {
			t.Fatal(err)
		}
		return c
	}
	rng := rand.New(rand.NewPCG(11, 11))
	const kills = 15
	for range kills {
		c := child()
		time.Sleep(time.Duration(20+rng.IntN(250)) * time.Millisecond)
		c.Process.Signal(syscall.SIGKILL)
		c.Wait()
	}
	<-written
	if err := child().Wait(); err != nil {
		t.Fatal(err)
	}
	st, err := store.Read(state)
	if err != nil {
		t.Fatal(err)
	}
	if ps, err := st.Check(); err != nil || len(ps) > 0 {
		t.Errorf("%v %v", ps, err)
	}
	rs, err := st.Results(store.Filter{})
	if err != nil {
		t.Fatal(err)
	}
	if len(rs) != len(names) {
		t.Errorf("%d current results of %d files", len(rs), len(names))
	}
	for _, x := range rs {
		if got := asText(t, x.Result); got != want[x.Result.Run.File] {
			t.Errorf("%s differs from the undisturbed result\n%s\n%s", x.Result.Run.File, got, want[x.Result.Run.File])
		}
	}
	// Every verdict was said at least once.
	f, err := os.Open(filepath.Join(state, "log", sessionlog.FileName))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	said := map[string]int{}
	sc := bufio.NewScanner(f)
	sc.Buffer(nil, 1<<20)
	for sc.Scan() {
		var e struct{ Event, ID string }
		if json.Unmarshal(sc.Bytes(), &e) == nil && e.Event == sessionlog.EventVerdict {
			said[e.ID]++
		}
	}
	for _, x := range rs {
		if said[x.ID] == 0 {
			t.Errorf("the verdict of %s was never said", x.Result.Run.File)
		}
	}
}
