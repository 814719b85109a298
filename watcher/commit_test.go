package watcher

import (
	"context"
	"errors"
	"io"
	"log/slog"
	"strings"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"platen/pipeline/run"
	"platen/store"
	"platen/watcher/sessionlog"
)

// picky is a store in memory that refuses some paths.
type picky struct {
	Store
	mu     sync.Mutex
	refuse string
	stored []string
}

func (p *picky) have() string {
	p.mu.Lock()
	defer p.mu.Unlock()
	return strings.Join(p.stored, " ")
}

func (p *picky) Put(es ...store.Entry) ([]store.Stored, error) {
	p.mu.Lock()
	defer p.mu.Unlock()
	for _, e := range es {
		if p.refuse != "" && strings.Contains(e.Path, p.refuse) {
			return nil, errors.New("refused: " + e.Path)
		}
	}
	out := make([]store.Stored, len(es))
	for i, e := range es {
		p.stored = append(p.stored, e.Path)
		out[i] = store.Stored{Ref: store.Ref{ID: e.Path, Revision: 1}, New: true}
	}
	return out, nil
}

func (p *picky) Announced(...store.Ref) error { return nil }

// Attempts become rare while the store refuses a result, but a new result does
// not wait for the next of them; and nothing is stored twice.
func TestNewResultsDoNotWaitForRefusedOnes(t *testing.T) {
	dir := t.TempDir()
	synctest.Test(t, func(t *testing.T) {
		log, err := sessionlog.New(sessionlog.Options{Folder: dir, MaxSizeMB: 1, Keep: 1, Console: slog.NewTextHandler(io.Discard, nil)})
		if err != nil {
			t.Fatal(err)
		}
		defer log.Close()
		p := &picky{refuse: "bad"}
		c := newCommitter(p, log)
		ctx, cancel := context.WithCancel(t.Context())
		ended := make(chan struct{})
		go func() { c.run(ctx); close(ended) }()
		add := func(path string) { c.add(commit{rel: path, entry: store.Entry{Path: path, Result: run.Result{}}}) }

		add("bad")
		time.Sleep(5 * time.Minute) // on the bubble's clock: the pauses are at their longest
		start := time.Now()
		add("good1")
		add("good2")
		synctest.Wait()
		if waited := time.Since(start); waited != 0 || p.have() != "good1 good2" {
			t.Errorf("after %v there is %q", waited, p.have())
		}
		if n := c.waiting(); n != 1 {
			t.Errorf("%d results wait, want the refused one", n)
		}
		p.mu.Lock()
		p.refuse = ""
		p.mu.Unlock()
		time.Sleep(longestPause)
		synctest.Wait()
		if p.have() != "good1 good2 bad" || c.waiting() != 0 {
			t.Errorf("stored %q, %d wait", p.have(), c.waiting())
		}
		cancel()
		<-ended
	})
}
