package store

import (
	"fmt"
	"os"
	"os/exec"
	"os/signal"
	"strings"
	"syscall"
	"testing"

	"platen/pipeline/run"
)

// The file must not grow: the system refuses a real write of a real commit, as
// on a full disk. A process of its own, as the limit is one of the process.
func TestFullDisk(t *testing.T) {
	if os.Getenv("PLATEN_STORE_TEST_FULL") == "" {
		c := exec.Command(must[string](t)(os.Executable()), "-test.run=^TestFullDisk$", "-test.v")
		c.Env = append(os.Environ(), "PLATEN_STORE_TEST_FULL=1")
		out, err := c.CombinedOutput()
		if err != nil || !strings.Contains(string(out), "refused at step") {
			t.Errorf("%v\n%s", err, out)
		}
		return
	}
	// bbolt keeps only the text of the system's error.
	tooLarge := func(err error) bool {
		return err != nil && strings.Contains(err.Error(), syscall.EFBIG.Error())
	}
	signal.Ignore(syscall.SIGXFSZ) // then a write too far fails with EFBIG
	s := open(t, t.TempDir(), Options{})
	putOne(t, s, entry("/x/first.tsv", "first"))
	var limit syscall.Rlimit
	if err := syscall.Getrlimit(syscall.RLIMIT_FSIZE, &limit); err != nil {
		t.Fatal(err)
	}
	full := limit
	full.Cur = uint64(must[os.FileInfo](t)(os.Stat(s.file.path)).Size()) + 64<<10
	if err := syscall.Setrlimit(syscall.RLIMIT_FSIZE, &full); err != nil {
		t.Fatal(err)
	}
	refused := -1
	for n := range 200 {
		if _, err := s.Put(entry(fmt.Sprintf("/x/%d.tsv", n), fmt.Sprint(n))); err != nil {
			if !tooLarge(err) || !strings.Contains(err.Error(), "disk full") {
				t.Errorf("step %d: %v", n, err)
			}
			refused = n
			break
		}
	}
	if refused < 0 {
		t.Fatal("nothing was refused")
	}
	t.Logf("refused at step %d", refused)
	// What was stored is there and readable, what was refused is not, and
	// another attempt is refused in the same way.
	for range 3 {
		if _, err := s.Put(entry("/x/again.tsv", strings.Repeat("x", 1000), func(r *run.Result) { r.Run.Condition = strings.Repeat("y", 256<<10) })); !tooLarge(err) {
			t.Errorf("on a full disk: %v", err)
		}
	}
	inOrder(t, s)
	if all := must[[]Record](t)(s.Results(Filter{})); len(all) != refused+1 {
		t.Errorf("%d results, want %d", len(all), refused+1)
	}
	// Room again: it goes on, and what was refused is news.
	if err := syscall.Setrlimit(syscall.RLIMIT_FSIZE, &limit); err != nil {
		t.Fatal(err)
	}
	if st := putOne(t, s, entry(fmt.Sprintf("/x/%d.tsv", refused), fmt.Sprint(refused))); !st.New {
		t.Errorf("after the disk had room: %+v", st)
	}
	inOrder(t, s)
}
