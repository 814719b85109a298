//go:build !windows

package folder

import (
	"path/filepath"
	"syscall"
	"testing"
)

// A pipe that is named like a run is no run, and is never opened: that would
// wait for a writer.
func TestPipe(t *testing.T) {
	root := t.TempDir()
	if err := syscall.Mkfifo(filepath.Join(root, "pipe.tsv"), 0o644); err != nil {
		t.Fatal(err)
	}
	w := follow(t, root, hour, nil)
	w.until("the pipe", func() bool { return w.files["pipe.tsv"].Odd == "a pipe" })
}
