//go:build unix

package folder

import (
	"net"
	"path/filepath"
	"syscall"
	"testing"
	"time"
)

// Pipes and sockets that are named like runs are told as what they are; opening
// a pipe would wait for a writer for ever.
func TestPipesAndSockets(t *testing.T) {
	l := listen(t, 20*time.Millisecond, nil)
	l.must(syscall.Mkfifo(filepath.Join(l.root, "p.tsv"), 0o644))
	s, err := net.Listen("unix", filepath.Join(l.root, "s.tsv"))
	l.must(err)
	defer s.Close()
	for p, what := range map[string]string{"p.tsv": "a pipe", "s.tsv": "a socket"} {
		l.until(p, func() bool { return l.files[p].Odd == what })
	}
}
