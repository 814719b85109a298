package store

import (
	"bufio"
	"errors"
	"fmt"
	"io"
	"math/rand/v2"
	"os"
	"os/exec"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"github.com/gofrs/flock"
	"go.etcd.io/bbolt"

	"platen/pipeline/run"
)

// child starts this binary in a role of TestMain.
func child(t *testing.T, role, folder string, env ...string) (*exec.Cmd, *bufio.Scanner, io.WriteCloser) {
	t.Helper()
	c := exec.Command(must[string](t)(os.Executable()))
	c.Env = append(os.Environ(), append(env, childEnv+"="+role, "STATE="+folder)...)
	c.Stderr = os.Stderr
	out := must[io.ReadCloser](t)(c.StdoutPipe())
	in := must[io.WriteCloser](t)(c.StdinPipe())
	if err := c.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if c.ProcessState == nil {
			c.Process.Kill()
			c.Wait()
		}
	})
	return c, bufio.NewScanner(out), in
}

func fatal(err error) {
	if err != nil {
		fmt.Fprintln(os.Stderr, "child:", err)
		os.Exit(3)
	}
}

// childHolds has the folder until its input ends.
func childHolds() {
	s, err := Open(os.Getenv("STATE"), Options{Owner: "watching /rig"})
	fatal(err)
	fmt.Println("open")
	io.Copy(io.Discard, os.Stdin)
	fatal(s.Close())
}

func TestLockedByAnotherProcess(t *testing.T) {
	folder := t.TempDir()
	c, out, in := child(t, "hold", folder)
	if !out.Scan() {
		t.Fatal("the child did not open the store")
	}
	var locked *LockedError
	if _, err := Open(folder, Options{SetAside: true}); !errors.As(err, &locked) {
		t.Fatalf("opened beside another: %v", err)
	}
	if locked.PID != c.Process.Pid || locked.Owner != "watching /rig" || locked.Host == "" || locked.Since.IsZero() {
		t.Errorf("%+v, but the child is process %d", locked, c.Process.Pid)
	}
	for _, want := range []string{fmt.Sprintf("process %d ", c.Process.Pid), "watching /rig", "--state"} {
		if !strings.Contains(locked.Error(), want) {
			t.Errorf("%q does not say %q", locked, want)
		}
	}
	// Readers are let in all the while.
	r := must[*Store](t)(Read(folder))
	inOrder(t, r)
	in.Close()
	if err := c.Wait(); err != nil {
		t.Fatal(err)
	}
	open(t, folder, Options{})
}

func TestLockedByThisProcess(t *testing.T) {
	folder := t.TempDir()
	open(t, folder, Options{})
	var locked *LockedError
	if _, err := Open(folder, Options{}); !errors.As(err, &locked) || locked.PID != os.Getpid() {
		t.Errorf("opened twice: %v", err)
	}
}

// crashEntries are the results of step n: files that change, twins, batches.
func crashEntries(n int) []Entry {
	path := func(i int) string { return fmt.Sprintf("/x/%d.tsv", i) }
	content := fmt.Sprint("step ", n)
	es := []Entry{entry(path(n%7), content)}
	if n%2 == 0 {
		repeat(&es[0].Result)
	}
	if n%3 == 0 {
		es = append(es, entry(path(100+n), content+", a second one"), entry(path(200+n), content+", a second one"))
	}
	return es
}

// childPuts stores for ever, and says what it has stored.
func childPuts() {
	var n int
	_, err := fmt.Sscan(os.Getenv("FIRST"), &n)
	fatal(err)
	s, err := Open(os.Getenv("STATE"), Options{})
	fatal(err)
	for ; ; n++ {
		stored, err := s.Put(crashEntries(n)...)
		fatal(err)
		line := fmt.Sprint(n)
		for _, st := range stored {
			line += fmt.Sprintf(" %s %d", st.ID, st.Revision)
		}
		if _, err := os.Stdout.WriteString(line + "\n"); err != nil {
			return
		}
		if n%5 == 0 {
			fatal(s.Announced(stored[0].Ref))
		}
	}
}

func TestKilledAtAnyInstant(t *testing.T) {
	folder := t.TempDir()
	random := rand.New(rand.NewPCG(1, 2))
	said := map[int][]Ref{}
	last := -1
	for range 20 {
		// Begin with steps that are there: they must not come twice.
		c, out, _ := child(t, "put", folder, fmt.Sprint("FIRST=", max(0, last-2)))
		lines := 1 + random.IntN(12)
		dead := make(chan struct{})
		for out.Scan() {
			var n int
			fields := strings.NewReader(out.Text())
			fmt.Fscan(fields, &n)
			var rs []Ref
			for r := (Ref{}); ; rs = append(rs, r) {
				if _, err := fmt.Fscan(fields, &r.ID, &r.Revision); err != nil {
					break
				}
			}
			said[n], last = rs, max(last, n)
			if lines--; lines == 0 {
				// Somewhere within the next commit.
				go func() {
					defer close(dead)
					time.Sleep(time.Duration(random.IntN(4000)) * time.Microsecond)
					c.Process.Kill()
				}()
			}
		}
		if lines > 0 {
			t.Fatalf("the child ended by itself: %v", c.Wait())
		}
		<-dead
		c.Wait()

		s := must[*Store](t)(Open(folder, Options{}))
		inOrder(t, s)
		for n, rs := range said {
			if len(rs) != len(crashEntries(n)) {
				t.Fatalf("step %d: %d results", n, len(rs))
			}
			for i, ref := range rs {
				r, err := s.Revision(ref)
				if err != nil {
					t.Errorf("step %d was said to be stored: %v", n, err)
				} else if want := crashEntries(n)[i].Result.Run.ID; r.Result.Run.ID != want || r.Revision != 1 {
					t.Errorf("step %d: %s, want the first revision of %s", n, ref, want)
				}
			}
		}
		if t.Failed() {
			return
		}
		// As a crash leaves it, so that each start finds the mark of one.
		s.doubt = true
		s.Close()
	}
	t.Logf("%d steps stored across 20 kills", len(said))
}

func TestReadersBesideAWriter(t *testing.T) {
	folder := t.TempDir()
	s := open(t, folder, Options{})
	const steps = 12
	written := make(chan struct{})
	var all sync.WaitGroup
	all.Go(func() {
		defer close(written)
		for n := range steps {
			if _, err := s.Put(crashEntries(n)...); err != nil {
				t.Error(err)
			}
		}
	})
	looks := 0
	for done := false; !done; looks++ {
		select {
		case <-written:
			done = true
		default:
		}
		r, err := Read(folder)
		if err != nil {
			t.Fatal(err)
		}
		inOrder(t, r)
		seen := map[string]bool{}
		for _, x := range must[[]Record](t)(r.Results(Filter{Superseded: true})) {
			seen[x.ID] = true
		}
		// Results of one transaction are seen together, and without a gap.
		missing := false
		for n := range steps {
			there := 0
			for _, e := range crashEntries(n) {
				if seen[e.Result.Run.ID] {
					there++
				}
			}
			if there != 0 && there != len(crashEntries(n)) {
				t.Errorf("step %d is half there", n)
			}
			if there != 0 && missing {
				t.Errorf("step %d is there, an earlier one is not", n)
			}
			missing = missing || there == 0
		}
		if done && missing {
			t.Error("the last look does not show everything")
		}
	}
	all.Wait()
	t.Logf("%d looks", looks)
}

// Another process stores without a pause: each look succeeds, and shows at
// least what that process had said to be stored before the look began.
func TestReaderBesideAWritingProcess(t *testing.T) {
	folder := t.TempDir()
	c, out, _ := child(t, "put", folder, "FIRST=0")
	if !out.Scan() {
		t.Fatal("the child stored nothing")
	}
	var said atomic.Int64 // the last step said to be stored
	done := make(chan struct{})
	go func() {
		defer close(done)
		for out.Scan() {
			var n int64
			fmt.Sscan(out.Text(), &n)
			said.Store(n)
		}
	}()
	before := 0
	for look := range 40 {
		step := int(said.Load())
		r := must[*Store](t)(Read(folder))
		paths := must[map[string]Path](t)(r.Paths())
		if len(paths) < before {
			t.Errorf("look %d: %d files, before it were %d", look, len(paths), before)
		}
		before = len(paths)
		for n := 0; n <= step; n++ {
			for _, e := range crashEntries(n)[1:] { // files that do not change again
				if _, ok := paths[e.Path]; !ok {
					t.Fatalf("look %d: step %d was said to be stored, %s is not there", look, n, e.Path)
				}
			}
		}
		if look%10 == 0 {
			inOrder(t, r)
		}
	}
	c.Process.Kill()
	<-done
	c.Wait()
	t.Logf("40 looks beside %d steps", said.Load()+1)
}

// Readers that overlap never let go of the file as one sees it from outside. A
// writer gets in all the same, within a few of their looks: without the line
// (openInTurn) it gave up after 10 s.
func TestReadersDoNotKeepOutAWriter(t *testing.T) {
	folder := t.TempDir()
	s := open(t, folder, Options{})
	putOne(t, s, entry("/x/0.tsv", "0"))
	var looks atomic.Int64
	var stop atomic.Bool
	var all sync.WaitGroup
	for range 3 {
		r := must[*Store](t)(Read(folder))
		all.Go(func() {
			for !stop.Load() {
				// As long as a look at a large store takes.
				if err := r.view(func(*bbolt.Tx) error { time.Sleep(3 * time.Millisecond); return nil }); err != nil {
					t.Error(err)
					return
				}
				looks.Add(1)
			}
		})
	}
	const puts = 20
	most := int64(0)
	for n := range puts {
		from := looks.Load()
		putOne(t, s, entry("/x/0.tsv", fmt.Sprint("0, then ", n)))
		most = max(most, looks.Load()-from)
	}
	stop.Store(true)
	all.Wait()
	// Each reader may be inside when the writer comes, and may be ahead of it in
	// the line a few times, as who looks at a lock first is chance: 6 looks at
	// most in 100 runs. Shut out, it would have been thousands.
	if most > 100 {
		t.Errorf("up to %d looks went ahead of a commit", most)
	}
	t.Logf("at most %d looks went ahead of a commit", most)
}

// Who stands in the line and does not move (a stopped process) delays others,
// but does not shut them out; nor does a line that cannot be used.
func TestLineThatDoesNotMove(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	putOne(t, s, entry("/x/a.tsv", "a"))
	stuck := flock.New(s.file.turn)
	if ok, err := stuck.TryLock(); !ok || err != nil {
		t.Fatal(ok, err)
	}
	s.file.wait = 20 * time.Millisecond
	putOne(t, s, entry("/x/b.tsv", "b"))
	inOrder(t, s)
	if err := stuck.Unlock(); err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(os.Remove(s.file.turn), os.Mkdir(s.file.turn, 0o700)); err != nil {
		t.Fatal(err)
	}
	putOne(t, s, entry("/x/c.tsv", "c"))
	if all := must[[]Record](t)(s.Results(Filter{})); len(all) != 3 {
		t.Errorf("stored: %s", refs(all))
	}
}

// Someone keeps the database itself open: it is said, and goes on afterwards.
func TestFileKeptOpenByAnother(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	putOne(t, s, entry("/x/a.tsv", "a"))
	other := must[*bbolt.DB](t)(bbolt.Open(s.file.path, 0o600, nil))
	s.file.wait = 20 * time.Millisecond
	if _, err := s.Put(entry("/x/b.tsv", "b")); err == nil || !strings.Contains(err.Error(), "close that program") {
		t.Errorf("put beside another: %v", err)
	}
	if _, err := s.Results(Filter{}); err == nil || !strings.Contains(err.Error(), "close that program") {
		t.Errorf("listed beside another: %v", err)
	}
	if err := other.Close(); err != nil {
		t.Fatal(err)
	}
	putOne(t, s, entry("/x/b.tsv", "b"))
	inOrder(t, s)
}

// Many goroutines use one store at once.
func TestUsedByManyAtOnce(t *testing.T) {
	s := open(t, t.TempDir(), Options{Now: func() time.Time { return time.Unix(1773478800, 0) }})
	const writers, each = 4, 6
	var all sync.WaitGroup
	var news atomic.Int64
	for w := range writers {
		all.Go(func() {
			for n := range each {
				st, err := s.Put(entry(fmt.Sprintf("/x/%d.tsv", w), fmt.Sprint(w, " ", n)), entry(fmt.Sprintf("/twin/%d.tsv", n), fmt.Sprint("twin ", n)))
				if err != nil {
					t.Error(err)
					return
				}
				for _, x := range st {
					if x.New {
						news.Add(1)
					}
				}
				if err := s.Announced(st[0].Ref); err != nil {
					t.Error(err)
				}
				if _, _, err := s.PutCell(run.CellResult{Schema: run.CellSchema, Cell: "c", Advice: fmt.Sprint(n)}); err != nil {
					t.Error(err)
				}
			}
		})
		all.Go(func() {
			for range each {
				if _, err := contentOf(s); err != nil {
					t.Error(err)
				}
				if ps, err := s.Check(); err != nil || len(ps) > 0 {
					t.Errorf("%v, %v", ps, err)
				}
				if err := s.Snapshot(io.Discard); err != nil {
					t.Error(err)
				}
			}
		})
	}
	all.Wait()
	inOrder(t, s)
	// One result each, and one for each pair of twins, told as new only once.
	const want = writers*each + each
	if all := must[[]Record](t)(s.Results(Filter{Superseded: true})); len(all) != want || news.Load() != want {
		t.Errorf("%d results, %d told as new, want %d", len(all), news.Load(), want)
	}
}

// The same document of a cell from several at once is one revision.
func TestSameCellDocumentAtOnce(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	var all sync.WaitGroup
	var news atomic.Int64
	for range 8 {
		all.Go(func() {
			revision, isNew, err := s.PutCell(run.CellResult{Schema: run.CellSchema, Cell: "c"})
			if err != nil || revision != 1 {
				t.Errorf("revision %d, %v", revision, err)
			}
			if isNew {
				news.Add(1)
			}
		})
	}
	all.Wait()
	if news.Load() != 1 {
		t.Errorf("told as new %d times", news.Load())
	}
}

// Commits that fail now and then, used by many at once: each result is there
// in the end, and told as new once.
func TestFailedCommitsAmongMany(t *testing.T) {
	s := open(t, t.TempDir(), Options{Now: func() time.Time { return time.Unix(1773478800, 0) }})
	var commits, failed atomic.Int64
	s.file.commit = func(db *bbolt.DB, do func(*bbolt.Tx) error) error {
		n := commits.Add(1)
		if n%3 != 0 {
			return db.Update(do)
		}
		failed.Add(1)
		if n%2 == 0 { // the last write has reached the disk
			return errors.Join(db.Update(do), errDisk)
		}
		return db.Update(func(tx *bbolt.Tx) error { return errors.Join(do(tx), errDisk) })
	}
	const writers, each = 4, 6
	var all sync.WaitGroup
	for w := range writers {
		all.Go(func() {
			for n := range each {
				e := entry(fmt.Sprintf("/x/%d.tsv", w), fmt.Sprint(w, " ", n))
				for {
					st, err := s.Put(e)
					if err == nil {
						if !st[0].New {
							t.Errorf("writer %d, step %d: not told as new", w, n)
						}
						break
					}
					if !errors.Is(err, errDisk) {
						t.Error(err)
						return
					}
				}
			}
		})
	}
	all.Wait()
	inOrder(t, s)
	if rs := must[[]Record](t)(s.Results(Filter{Superseded: true})); len(rs) != writers*each || failed.Load() == 0 {
		t.Errorf("%d results after %d failures, want %d", len(rs), failed.Load(), writers*each)
	}
}
