package watcher

import (
	"context"
	"sync"
	"time"

	"platen/pipeline/run"
	"platen/store"
	"platen/watcher/sessionlog"
)

// commit is a result on its way to the store.
type commit struct {
	rel   string
	entry store.Entry
}

// committer stores results, as many as wait in one transaction, and announces
// each only after that. While the store fails it keeps them and tries again.
type committer struct {
	store Store
	log   *sessionlog.Log
	wake  chan struct{}
	after func(run.Result) // called with each result that is stored and new; may be nil

	mu     sync.Mutex
	queue  []commit
	active int      // taken from the queue, not yet stored
	stored []commit // not yet reported
}

// mostAtOnce bounds a transaction: a hundred results take 5 ms.
const mostAtOnce = 100

func newCommitter(s Store, l *sessionlog.Log) *committer {
	return &committer{store: s, log: l, wake: make(chan struct{}, 1)}
}

func (c *committer) add(x commit) {
	c.mu.Lock()
	c.queue = append(c.queue, x)
	c.mu.Unlock()
	select {
	case c.wake <- struct{}{}:
	default:
	}
}

// waiting returns the number of results not yet stored and announced.
func (c *committer) waiting() int {
	c.mu.Lock()
	defer c.mu.Unlock()
	return len(c.queue) + c.active
}

// run stores until ctx ends, and then what is still waiting, once.
func (c *committer) run(ctx context.Context) {
	pause := 250 * time.Millisecond
	failed := false
	for {
		batch := c.take()
		if len(batch) == 0 {
			select {
			case <-c.wake:
				continue
			case <-ctx.Done():
				if c.waiting() == 0 {
					return
				}
				continue
			}
		}
		err := c.storeAndSay(batch)
		if err == nil {
			if failed {
				failed, pause = false, 250*time.Millisecond
				c.log.StoreBack()
			}
			c.release(nil, batch)
			continue
		}
		if !failed {
			failed = true
			c.log.StoreTrouble(err)
		}
		c.release(batch, nil)
		select {
		case <-time.After(pause):
		case <-ctx.Done():
			return // they are analysed again at the next start
		}
		pause = min(2*pause, 30*time.Second)
	}
}

func (c *committer) take() []commit {
	c.mu.Lock()
	defer c.mu.Unlock()
	n := min(mostAtOnce, len(c.queue))
	batch := c.queue[:n:n]
	c.queue = c.queue[n:]
	c.active = n
	return batch
}

// release ends a batch; back holds what must be tried again, stored what is
// done.
func (c *committer) release(back, stored []commit) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.queue = append(append([]commit{}, back...), c.queue...)
	c.active = 0
	c.stored = append(c.stored, stored...)
}

// reports returns what has been stored since the last call.
func (c *committer) reports() []commit {
	c.mu.Lock()
	defer c.mu.Unlock()
	out := c.stored
	c.stored = nil
	return out
}

// storeAndSay commits a batch and then announces it.
func (c *committer) storeAndSay(batch []commit) error {
	entries := make([]store.Entry, len(batch))
	for i, x := range batch {
		entries[i] = x.entry
	}
	stored, err := c.store.Put(entries...)
	if err != nil {
		return err
	}
	var said []store.Ref
	for i, s := range stored {
		if !s.New {
			continue // the same result is there, under this name or another
		}
		supersedes := ""
		if s.Supersedes != nil {
			supersedes = s.Supersedes.String()
		}
		c.log.Verdict(batch[i].entry.Result, s.Revision, supersedes)
		said = append(said, s.Ref)
		if c.after != nil {
			c.after(batch[i].entry.Result)
		}
	}
	if len(said) == 0 {
		return nil
	}
	// If this fails the verdicts are said once more at the next start; better
	// twice than never.
	if err := c.store.Announced(said...); err != nil {
		c.log.StoreTrouble(err)
	}
	return nil
}
