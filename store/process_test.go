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
	"testing"
	"time"
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
