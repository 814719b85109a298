package watcher

import (
	"cmp"
	"maps"
	"slices"
	"sync"

	"platen/pipeline/run"
)

// Growing is what is known of a run that is being written.
type Growing struct {
	File     string // below the folder
	Cell     string
	Bytes    int64 // read
	Samples  int64
	Findings []run.Finding // provisional, worst first
}

// growing is the one place where the workers' present state can be looked at.
// The zero value is ready.
type growing struct {
	mu sync.Mutex
	at map[string]Growing
}

func (g *growing) note(x Growing) {
	g.mu.Lock()
	defer g.mu.Unlock()
	if g.at == nil {
		g.at = map[string]Growing{}
	}
	g.at[x.File] = x
}

func (g *growing) forget(file string) {
	g.mu.Lock()
	defer g.mu.Unlock()
	delete(g.at, file)
}

// Snapshot tells which runs are being written, in order of their names, as of
// when each was last judged (some 250 ms ago at most). It may be called at any
// time, from any goroutine; the findings are shared and must not be changed.
func (s *Service) Snapshot() []Growing {
	s.growing.mu.Lock()
	defer s.growing.mu.Unlock()
	return slices.SortedFunc(maps.Values(s.growing.at), func(a, b Growing) int { return cmp.Compare(a.File, b.File) })
}
