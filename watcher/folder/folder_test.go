package folder

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"sync"
	"testing"
	"time"

	"github.com/fsnotify/fsnotify"
	"go.uber.org/goleak"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

// notes collects what a folder says.
type notes struct {
	mu                             sync.Mutex
	gone, back, overflow, noEvents int
}

func (n *notes) add(x *int) { n.mu.Lock(); *x++; n.mu.Unlock() }

func (n *notes) FolderGone(string, error) { n.add(&n.gone) }
func (n *notes) FolderBack(string)        { n.add(&n.back) }
func (n *notes) Overflow()                { n.add(&n.overflow) }
func (n *notes) NoEvents(string, error)   { n.add(&n.noEvents) }

func (n *notes) get(x *int) int { n.mu.Lock(); defer n.mu.Unlock(); return *x }

// watch follows a folder and keeps what it told.
type watch struct {
	t     *testing.T
	root  string
	notes *notes
	mu    sync.Mutex
	files map[string]File
	swept int
}

func follow(t *testing.T, root string, sweep time.Duration, change func(*Folder)) *watch {
	t.Helper()
	w := &watch{t: t, root: root, notes: &notes{}, files: map[string]File{}}
	f, err := New(root, Options{Sweep: sweep, Include: []string{"*.tsv", "*.csv"}, Exclude: []string{"skip*"}, Notice: w.notes})
	if err != nil {
		t.Fatal(err)
	}
	if change != nil {
		change(f)
	}
	ctx, cancel := context.WithCancel(context.Background())
	batches := make(chan Batch)
	var all sync.WaitGroup
	all.Go(func() { f.Run(ctx, batches); close(batches) })
	all.Go(func() {
		for b := range batches {
			w.mu.Lock()
			for _, x := range b.Files {
				w.files[x.Path] = x
			}
			if b.Swept {
				w.swept++
			}
			for _, p := range b.Gone {
				delete(w.files, p)
			}
			w.mu.Unlock()
		}
	})
	t.Cleanup(func() { cancel(); all.Wait() })
	return w
}

func (w *watch) until(what string, ok func() bool) {
	w.t.Helper()
	for end := time.Now().Add(20 * time.Second); time.Now().Before(end); time.Sleep(5 * time.Millisecond) {
		w.mu.Lock()
		done := ok()
		w.mu.Unlock()
		if done {
			return
		}
	}
	w.t.Fatalf("never: %s; told %v", what, w.files)
}

func (w *watch) write(name, text string) {
	w.t.Helper()
	p := filepath.Join(w.root, name)
	if err := os.MkdirAll(filepath.Dir(p), 0o755); err != nil {
		w.t.Fatal(err)
	}
	if err := os.WriteFile(p, []byte(text), 0o644); err != nil {
		w.t.Fatal(err)
	}
}

// hour makes sure that it is events, not the sweep, that tell.
const hour = time.Hour

func TestEvents(t *testing.T) {
	w := follow(t, t.TempDir(), hour, nil)
	w.until("the first sweep", func() bool { return w.swept == 1 })
	w.write("a.tsv", "1")
	w.until("a new file", func() bool { return w.files["a.tsv"].Size == 1 })
	w.write("a.tsv", "123")
	w.until("growth", func() bool { return w.files["a.tsv"].Size == 3 })
	w.write("a.tsv", "")
	w.until("shrinking", func() bool { x, ok := w.files["a.tsv"]; return ok && x.Size == 0 })
	w.write("b.part", "12")
	if err := os.Rename(filepath.Join(w.root, "b.part"), filepath.Join(w.root, "B.TSV")); err != nil {
		t.Fatal(err)
	}
	w.until("a renamed file", func() bool { return w.files["B.TSV"].Size == 2 })
	w.write("sub/deep/c.csv", "12345") // made and filled at once
	w.until("a file in new folders", func() bool { return w.files["sub/deep/c.csv"].Size == 5 })
	w.write("sub/deep/c.csv", "123456")
	w.until("growth there", func() bool { return w.files["sub/deep/c.csv"].Size == 6 })
	if err := os.Remove(filepath.Join(w.root, "a.tsv")); err != nil {
		t.Fatal(err)
	}
	w.until("going", func() bool { _, ok := w.files["a.tsv"]; return !ok })
}

// Without any file events the sweep finds everything.
func TestSweepAlone(t *testing.T) {
	w := follow(t, t.TempDir(), 20*time.Millisecond, func(f *Folder) {
		f.makeWatcher = func() (*fsnotify.Watcher, error) { return nil, errors.New("no inotify here") }
	})
	w.write("a.tsv", "1")
	w.write("sub/b.tsv", "12")
	w.until("both", func() bool { return len(w.files) == 2 })
	w.write("a.tsv", "123")
	w.until("growth", func() bool { return w.files["a.tsv"].Size == 3 })
	if n := w.notes.get(&w.notes.noEvents); n != 1 {
		t.Errorf("said %d times that there are no events", n)
	}
}

func TestWhatIsTakenForARun(t *testing.T) {
	root := t.TempDir()
	for _, name := range []string{"a.tsv", ".hidden.tsv", "c.tsv~", "notes.md", "skip-me.tsv", ".git/d.tsv"} {
		os.MkdirAll(filepath.Dir(filepath.Join(root, name)), 0o755)
		if err := os.WriteFile(filepath.Join(root, name), nil, 0o644); err != nil {
			t.Fatal(err)
		}
	}
	os.Mkdir(filepath.Join(root, "dir.tsv"), 0o755)
	os.Symlink("a.tsv", filepath.Join(root, "link.tsv"))
	os.Symlink("..", filepath.Join(root, "loop"))
	w := follow(t, root, 20*time.Millisecond, nil)
	w.until("three entries", func() bool { return len(w.files) == 3 })
	for name, odd := range map[string]string{"a.tsv": "", "dir.tsv": "a folder", "link.tsv": "a link"} {
		if x, ok := w.files[name]; !ok || x.Odd != odd {
			t.Errorf("%s: %+v, want %q", name, x, odd)
		}
	}
}

// More events than the queue holds: the overflow is said, and the sweep that
// follows finds what was lost.
func TestOverflow(t *testing.T) {
	root, n := t.TempDir(), &notes{}
	f, err := New(root, Options{Include: []string{"*.tsv"}, Notice: n})
	if err != nil {
		t.Fatal(err)
	}
	f.sweep()
	for i := range 2000 {
		if err := os.WriteFile(filepath.Join(root, fmt.Sprintf("run-%04d.tsv", i)), nil, 0o644); err != nil {
			t.Fatal(err)
		}
	}
	if b := f.failed(fsnotify.ErrEventOverflow); len(b.Files) != 2000 || !b.Swept {
		t.Errorf("%d of 2000 files found", len(b.Files))
	}
	if n.overflow != 1 {
		t.Errorf("said %d times", n.overflow)
	}
}

// A folder removed and made anew, and one that cannot be listed, are said once
// and taken up again; their files do not count as gone meanwhile.
func TestFolderGoneAndBack(t *testing.T) {
	root := filepath.Join(t.TempDir(), "export")
	os.Mkdir(root, 0o755)
	w := follow(t, root, 20*time.Millisecond, nil)
	w.write("a.tsv", "1")
	w.until("a file", func() bool { return len(w.files) == 1 })
	away := root + "-away"
	if err := os.Rename(root, away); err != nil {
		t.Fatal(err)
	}
	w.until("it to be missed", func() bool { return w.notes.get(&w.notes.gone) == 1 })
	if len(w.files) != 1 {
		t.Error("files of a lost folder count as gone")
	}
	if err := os.Rename(away, root); err != nil {
		t.Fatal(err)
	}
	w.until("it to be back", func() bool { return w.notes.get(&w.notes.back) == 1 })
	w.write("b.tsv", "12")
	w.until("a new file", func() bool { return len(w.files) == 2 })
	if n := w.notes.get(&w.notes.gone); n != 1 {
		t.Errorf("said %d times", n)
	}
}

func TestNewNeedsAFolder(t *testing.T) {
	if _, err := New(filepath.Join(t.TempDir(), "none"), Options{}); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("%v", err)
	}
	file := filepath.Join(t.TempDir(), "file")
	os.WriteFile(file, nil, 0o644)
	if _, err := New(file, Options{}); err == nil {
		t.Error("a file was taken for a folder")
	}
}

// The standing cost of a folder of ten thousand finished files.
func BenchmarkSweepOfFinishedFiles(b *testing.B) {
	root := b.TempDir()
	for i := range 10000 {
		if err := os.WriteFile(filepath.Join(root, fmt.Sprintf("run-%05d.tsv", i)), nil, 0o644); err != nil {
			b.Fatal(err)
		}
	}
	f, err := New(root, Options{Include: []string{"*.tsv"}, Notice: &notes{}})
	if err != nil {
		b.Fatal(err)
	}
	f.sweep()
	for p, s := range f.files {
		s.changed = s.changed.Add(-2 * stillAfter)
		f.files[p] = s
	}
	for b.Loop() {
		f.sweep()
	}
}
