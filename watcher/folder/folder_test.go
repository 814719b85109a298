package folder

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"maps"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"github.com/fsnotify/fsnotify"
	"go.uber.org/goleak"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

// never is a sweep so rare that only events can tell of a change.
const never = time.Hour

// listener follows a folder and keeps what it was told.
type listener struct {
	t    *testing.T
	root string
	f    *Folder

	mu     sync.Mutex
	files  map[string]File
	times  map[string]int // how often a file was told
	sweeps int
	notes  []string
}

func (l *listener) note(s string) { l.mu.Lock(); defer l.mu.Unlock(); l.notes = append(l.notes, s) }

func (l *listener) FolderGone(dir string, err error) { l.note("gone " + filepath.Base(dir)) }
func (l *listener) FolderBack(dir string)            { l.note("back " + filepath.Base(dir)) }
func (l *listener) Overflow()                        { l.note("overflow") }
func (l *listener) NoEvents(dir string, err error)   { l.note("no events: " + err.Error()) }

func listen(t *testing.T, sweep time.Duration, change func(*Folder)) *listener {
	t.Helper()
	root, err := filepath.EvalSymlinks(t.TempDir())
	if err != nil {
		t.Fatal(err)
	}
	return listenAt(t, root, sweep, change)
}

func listenAt(t *testing.T, root string, sweep time.Duration, change func(*Folder)) *listener {
	t.Helper()
	l := &listener{t: t, root: root, files: map[string]File{}, times: map[string]int{}}
	var err error
	l.f, err = New(root, Options{Sweep: sweep, Include: []string{"*.tsv"}, Exclude: []string{"test*"}, Notice: l})
	if err != nil {
		t.Fatal(err)
	}
	if change != nil {
		change(l.f)
	}
	ctx, cancel := context.WithCancel(t.Context())
	batches := make(chan Batch)
	var all sync.WaitGroup
	all.Go(func() {
		if err := l.f.Run(ctx, batches); err != nil {
			t.Error(err)
		}
		close(batches)
	})
	all.Go(func() {
		for b := range batches {
			l.mu.Lock()
			if b.Swept {
				l.sweeps++
			}
			for _, f := range b.Files {
				l.files[f.Path] = f
				l.times[f.Path]++
			}
			for _, p := range b.Gone {
				delete(l.files, p)
			}
			l.mu.Unlock()
		}
	})
	t.Cleanup(func() { cancel(); all.Wait() })
	l.until("the first sweep", func() bool { return l.sweeps > 0 })
	return l
}

// until waits for a condition, far longer than it can take on a busy machine.
func (l *listener) until(what string, ok func() bool) {
	l.t.Helper()
	for end := time.Now().Add(20 * time.Second); time.Now().Before(end); time.Sleep(5 * time.Millisecond) {
		l.mu.Lock()
		is := ok()
		l.mu.Unlock()
		if is {
			return
		}
	}
	l.mu.Lock()
	defer l.mu.Unlock()
	l.t.Fatalf("never: %s; told of %v, notes %q", what, l.files, l.notes)
}

func (l *listener) untilTold(p string, size int64) {
	l.t.Helper()
	l.until(fmt.Sprintf("%s with %d bytes", p, size), func() bool { f, ok := l.files[p]; return ok && f.Size == size && f.Odd == "" })
}

func (l *listener) write(p, text string) {
	l.t.Helper()
	full := filepath.Join(l.root, filepath.FromSlash(p))
	if err := os.MkdirAll(filepath.Dir(full), 0o755); err != nil {
		l.t.Fatal(err)
	}
	if err := os.WriteFile(full, []byte(text), 0o644); err != nil {
		l.t.Fatal(err)
	}
}

func (l *listener) must(err error) {
	l.t.Helper()
	if err != nil {
		l.t.Fatal(err)
	}
}

// noted counts the notes that begin so.
func (l *listener) noted(s string) int {
	n := 0
	for _, x := range l.notes {
		if strings.HasPrefix(x, s) {
			n++
		}
	}
	return n
}

// With events alone: new files, growth, removal, and sub-folders made and
// filled at once.
func TestEvents(t *testing.T) {
	l := listen(t, never, nil)
	l.write("a.tsv", "1")
	l.untilTold("a.tsv", 1)
	l.write("a.tsv", "123")
	l.untilTold("a.tsv", 3)
	l.write("x/y/z/deep.tsv", "12")
	l.untilTold("x/y/z/deep.tsv", 2)
	l.write("x/y/late.tsv", "1234")
	l.untilTold("x/y/late.tsv", 4)
	l.must(os.Remove(filepath.Join(l.root, "a.tsv")))
	l.until("a.tsv to be gone", func() bool { _, ok := l.files["a.tsv"]; return !ok })
}

// Rights that are given back are told, though size and time stay.
func TestRights(t *testing.T) {
	l := listen(t, never, nil)
	l.write("a.tsv", "1")
	l.untilTold("a.tsv", 1)
	before := func() int { l.mu.Lock(); defer l.mu.Unlock(); return l.times["a.tsv"] }()
	l.must(os.Chmod(filepath.Join(l.root, "a.tsv"), 0o400))
	l.until("it to be told again", func() bool { return l.times["a.tsv"] > before })
}

// A sub-folder that is replaced by another of the same name is watched like the
// first.
func TestSubFolderReplaced(t *testing.T) {
	l := listen(t, never, nil)
	l.write("sub/a.tsv", "1")
	l.untilTold("sub/a.tsv", 1)
	l.must(os.Rename(filepath.Join(l.root, "sub"), filepath.Join(l.root, "old")))
	l.write("sub/b.tsv", "12")
	l.untilTold("sub/b.tsv", 2)
	l.write("sub/b.tsv", "123")
	l.untilTold("sub/b.tsv", 3)
	l.untilTold("old/a.tsv", 1)
}

// Without any events the sweep finds everything; that there are none is said
// once.
func TestNoEvents(t *testing.T) {
	l := listen(t, 20*time.Millisecond, func(f *Folder) {
		f.events = func() (*fsnotify.Watcher, error) { return nil, errors.New("no space left on device") }
	})
	l.write("sub/a.tsv", "1")
	l.untilTold("sub/a.tsv", 1)
	l.write("sub/a.tsv", "12")
	l.untilTold("sub/a.tsv", 2)
	l.must(os.RemoveAll(filepath.Join(l.root, "sub")))
	l.until("it to be gone", func() bool { return len(l.files) == 0 })
	if n := l.noted("no events: no space left"); n != 1 {
		t.Errorf("said %d times", n)
	}
}

// An overflow of the event queue names no file (measured: it arrives once,
// after the events before it): the whole folder is looked through at once.
func TestOverflow(t *testing.T) {
	var w *fsnotify.Watcher
	l := listen(t, never, func(f *Folder) {
		f.events = func() (_ *fsnotify.Watcher, err error) {
			w, err = fsnotify.NewWatcher()
			return w, err
		}
	})
	l.must(w.Remove(l.root)) // so that its events are lost
	l.write("lost/a.tsv", "1")
	w.Errors <- fsnotify.ErrEventOverflow
	l.untilTold("lost/a.tsv", 1)
	if n := l.noted("overflow"); n != 1 {
		t.Errorf("said %d times", n)
	}
}

// What is a run goes by the name, in any case.
func TestNames(t *testing.T) {
	l := listen(t, 20*time.Millisecond, nil)
	for _, p := range []string{"a.tsv", "B.TSV", "no.pdf", ".hidden.tsv", "c.tsv~", "test1.tsv", "Test2.tsv", ".git/d.tsv", "sub.tsv/e.tsv", "z.tsv"} {
		l.write(p, "1")
	}
	l.untilTold("z.tsv", 1)
	l.untilTold("sub.tsv/e.tsv", 1)
	l.until("the folder named like a run", func() bool { return l.files["sub.tsv"].Odd == "a folder" })
	l.mu.Lock()
	defer l.mu.Unlock()
	got := slices.Sorted(maps.Keys(l.files))
	if want := []string{"B.TSV", "a.tsv", "sub.tsv", "sub.tsv/e.tsv", "z.tsv"}; !slices.Equal(got, want) {
		t.Errorf("told of %q, want %q", got, want)
	}
}

// A link to a file inside is that file; loops are not entered; what is outside
// stays there.
func TestLinks(t *testing.T) {
	outside := filepath.Join(t.TempDir(), "secret.tsv")
	if err := os.WriteFile(outside, []byte("12345"), 0o644); err != nil {
		t.Fatal(err)
	}
	l := listen(t, 20*time.Millisecond, nil)
	l.write("dir/a.tsv", "1")
	for name, to := range map[string]string{
		"second.tsv": "dir/a.tsv", "dir/up": "..", "self.tsv": "self.tsv", "round.tsv": "dir/up",
		"out.tsv": outside, "out": filepath.Dir(outside), "nowhere.tsv": "missing",
	} {
		l.must(os.Symlink(to, filepath.Join(l.root, name)))
	}
	l.untilTold("second.tsv", 1)
	l.write("dir/a.tsv", "123")
	l.untilTold("second.tsv", 3)
	l.untilTold("dir/a.tsv", 3)
	for _, p := range []string{"self.tsv", "round.tsv", "out.tsv", "nowhere.tsv"} {
		l.until(p+" to be refused", func() bool { return l.files[p].Odd == "a link" })
	}
	l.mu.Lock()
	defer l.mu.Unlock()
	if len(l.files) != 6 {
		t.Errorf("told of %v", l.files)
	}
}

// A sub-folder that cannot be listed is said once, its files are not taken for
// gone, and when it is back they are told again: what became of them meanwhile
// does not show in size and time.
func TestUnreadableSubFolder(t *testing.T) {
	var denied atomic.Bool
	l := listen(t, 20*time.Millisecond, func(f *Folder) {
		f.list = func(dir string) ([]fs.DirEntry, error) {
			if denied.Load() && filepath.Base(dir) == "sub" {
				return nil, fs.ErrPermission
			}
			return os.ReadDir(dir)
		}
	})
	l.write("sub/a.tsv", "1")
	l.untilTold("sub/a.tsv", 1)
	denied.Store(true)
	l.until("it to be said", func() bool { return l.noted("gone sub") > 0 })
	var then int
	l.until("some sweeps", func() bool { then = max(then, l.sweeps); return l.noted("gone sub") > 0 })
	l.write("b.tsv", "1")
	l.untilTold("b.tsv", 1)
	l.until("some more sweeps", func() bool { return l.sweeps > then+5 })
	l.untilTold("sub/a.tsv", 1)
	before := func() int { l.mu.Lock(); defer l.mu.Unlock(); return l.times["sub/a.tsv"] }()
	denied.Store(false)
	l.until("it to be back", func() bool { return l.noted("back sub") == 1 && l.times["sub/a.tsv"] > before })
	if n := l.noted("gone sub"); n != 1 {
		t.Errorf("said %d times", n)
	}
}

// The folder itself goes away and comes back, as itself and as another one.
func TestRootAwayAndBack(t *testing.T) {
	parent, err := filepath.EvalSymlinks(t.TempDir())
	if err != nil {
		t.Fatal(err)
	}
	root := filepath.Join(parent, "root")
	if err := os.Mkdir(root, 0o755); err != nil {
		t.Fatal(err)
	}
	l := listenAt(t, root, 20*time.Millisecond, nil)
	l.write("sub/a.tsv", "1")
	l.untilTold("sub/a.tsv", 1)

	l.must(os.Rename(root, root+".away"))
	l.until("it to be missed", func() bool { return l.noted("gone root") == 1 })
	l.untilTold("sub/a.tsv", 1)
	l.must(os.Rename(root+".away", root))
	l.until("it to be back", func() bool { return l.noted("back root") == 1 && l.times["sub/a.tsv"] == 2 })

	l.must(os.RemoveAll(root))
	l.until("it to be missed again", func() bool { return l.noted("gone root") == 2 })
	l.must(os.Mkdir(root, 0o755))
	l.write("sub/b.tsv", "12")
	l.untilTold("sub/b.tsv", 2)
	l.until("the old file to be gone", func() bool { _, ok := l.files["sub/a.tsv"]; return !ok })
	l.until("it to be said to be back", func() bool { return l.noted("back root") == 2 })
}

// A file that has been still for long is looked at in every so many sweeps
// only, but it is looked at.
func TestStillFilesAreSwept(t *testing.T) {
	root := t.TempDir()
	f, err := New(root, Options{Include: []string{"*.tsv"}, Notice: &listener{}})
	if err != nil {
		t.Fatal(err)
	}
	name := filepath.Join(root, "a.tsv")
	if err := os.WriteFile(name, []byte("1"), 0o644); err != nil {
		t.Fatal(err)
	}
	if b := f.sweep(); len(b.Files) != 1 {
		t.Fatalf("%+v", b)
	}
	f.age()
	if err := os.WriteFile(name, []byte("12"), 0o644); err != nil {
		t.Fatal(err)
	}
	for i := range thoroughEvery {
		switch b := f.sweep(); {
		case len(b.Files) == 1 && b.Files[0].Size == 2:
			return
		case len(b.Files)+len(b.Gone) > 0:
			t.Fatalf("sweep %d: %+v", i, b)
		}
	}
	t.Error("its growth was never told")
}

// age makes all files look still for long.
func (f *Folder) age() {
	for _, s := range f.files {
		s.changed = s.changed.Add(-2 * stillAfter)
	}
}

// No file is missed: whatever is done to a folder, in the end exactly what is
// there has been told.
func TestWhateverIsDone(t *testing.T) {
	for seed := range uint64(4) {
		t.Run(fmt.Sprint(seed), func(t *testing.T) {
			l := listen(t, 50*time.Millisecond, nil)
			rng := rand.New(rand.NewPCG(seed, 3))
			name := func() string {
				p := fmt.Sprintf("%d.tsv", rng.IntN(12))
				for range rng.IntN(3) {
					p = fmt.Sprintf("d%d/%s", rng.IntN(3), p)
				}
				return filepath.Join(l.root, filepath.FromSlash(p))
			}
			for range 600 {
				p := name()
				// What is not possible at the moment fails, and that is all right.
				switch rng.IntN(6) {
				case 0, 1, 2:
					os.MkdirAll(filepath.Dir(p), 0o755)
					if f, err := os.OpenFile(p, os.O_CREATE|os.O_APPEND|os.O_WRONLY, 0o644); err == nil {
						f.Write(make([]byte, rng.IntN(50)))
						f.Close()
					}
				case 3:
					os.Truncate(p, int64(rng.IntN(20)))
				case 4:
					os.Rename(p, name())
				case 5:
					if rng.IntN(4) == 0 && filepath.Dir(p) != l.root {
						p = filepath.Dir(p)
					}
					os.RemoveAll(p)
				}
				if rng.IntN(20) == 0 {
					time.Sleep(2 * time.Millisecond)
				}
			}
			there := map[string]int64{}
			l.must(filepath.WalkDir(l.root, func(p string, d fs.DirEntry, err error) error {
				if err != nil || d.IsDir() {
					return err
				}
				info, err := d.Info()
				rel, _ := filepath.Rel(l.root, p)
				there[filepath.ToSlash(rel)] = info.Size()
				return err
			}))
			if len(there) == 0 {
				t.Fatal("nothing is left to compare")
			}
			l.until(fmt.Sprintf("just %v", there), func() bool {
				told := map[string]int64{}
				for p, f := range l.files {
					told[p] = f.Size
				}
				return maps.Equal(told, there)
			})
		})
	}
}

// What one batch tells agrees with what is kept, also where a file goes and
// comes while it is made: else the file would be known here, and never told.
func TestBatchAgreesWithItself(t *testing.T) {
	for range 30 { // the order in which touched entries are looked at is random
		root := t.TempDir()
		f, err := New(root, Options{Include: []string{"*.tsv"}, Notice: &listener{}})
		if err != nil {
			t.Fatal(err)
		}
		name := filepath.Join(root, "d", "a.tsv")
		write := func(text string) {
			os.MkdirAll(filepath.Dir(name), 0o755)
			if err := os.WriteFile(name, []byte(text), 0o644); err != nil {
				t.Fatal(err)
			}
		}
		write("1")
		f.sweep()
		if err := os.Remove(name); err != nil {
			t.Fatal(err)
		}
		f.list = func(dir string) ([]fs.DirEntry, error) {
			write("123") // it is back just when its folder is listed
			return os.ReadDir(dir)
		}
		b := f.look(map[string]bool{name: true, filepath.Dir(name): true})
		told := map[string]int64{}
		for _, x := range b.Files {
			told[x.Path] = x.Size
		}
		for _, p := range b.Gone {
			delete(told, p)
		}
		if !maps.Equal(told, map[string]int64{"d/a.tsv": 3}) {
			t.Fatalf("new %v, gone %v", b.Files, b.Gone)
		}
	}
}

// With its folder gone nothing is known of a file: it does not count as gone
// when an event names it.
func TestFilesOfAFolderThatIsAway(t *testing.T) {
	root := filepath.Join(t.TempDir(), "root")
	if err := os.Mkdir(root, 0o755); err != nil {
		t.Fatal(err)
	}
	name := filepath.Join(root, "a.tsv")
	if err := os.WriteFile(name, nil, 0o644); err != nil {
		t.Fatal(err)
	}
	f, err := New(root, Options{Include: []string{"*.tsv"}, Notice: &listener{}})
	if err != nil {
		t.Fatal(err)
	}
	f.sweep()
	if err := os.Rename(root, root+".away"); err != nil {
		t.Fatal(err)
	}
	if b := f.look(map[string]bool{name: true}); len(b.Gone) > 0 {
		t.Errorf("%v told as gone", b.Gone)
	}
}

// A missing folder, or a file in its place, is refused.
func TestRefused(t *testing.T) {
	missing := filepath.Join(t.TempDir(), "x")
	if _, err := New(missing, Options{}); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("%v", err)
	}
	if err := os.WriteFile(missing, nil, 0o644); err != nil {
		t.Fatal(err)
	}
	if _, err := New(missing, Options{}); err == nil || !strings.Contains(err.Error(), "is not a folder") {
		t.Errorf("%v", err)
	}
}

// BenchmarkSweep is one look through a folder of 10,000 files: standing, where
// names are enough, and in every so many sweeps thorough.
func BenchmarkSweep(b *testing.B) {
	root := b.TempDir()
	for i := range 10000 {
		if err := os.WriteFile(filepath.Join(root, fmt.Sprintf("%05d.tsv", i)), nil, 0o644); err != nil {
			b.Fatal(err)
		}
	}
	f, err := New(root, Options{Include: []string{"*.tsv"}, Notice: &listener{}})
	if err != nil {
		b.Fatal(err)
	}
	f.sweep()
	f.age()
	b.Run("names only, to compare", func(b *testing.B) {
		for b.Loop() {
			if e, err := os.ReadDir(root); err != nil || len(e) != 10000 {
				b.Fatal(len(e), err)
			}
		}
	})
	for name, offset := range map[string]int{"standing": 1, "thorough": 0} {
		b.Run(name, func(b *testing.B) {
			for b.Loop() {
				f.sweeps = thoroughEvery + offset
				if x := f.sweep(); len(x.Files)+len(x.Gone) > 0 {
					b.Fatalf("told of %d files", len(x.Files))
				}
			}
		})
	}
}
