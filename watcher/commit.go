package watcher

import (
	"context"
	"slices"
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

const (
	// mostAtOnce bounds a transaction: a hundred results take 5 ms.
	mostAtOnce = 100
	// Pauses between attempts while the store fails.
	firstPause   = 250 * time.Millisecond
	longestPause = 30 * time.Second
)

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
	pause := firstPause
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
		stored, refused, untried, err := c.storeWhatGoes(batch)
		c.release(stored, untried, refused)
		if len(stored) > 0 {
			pause = firstPause
		}
		if err == nil {
			if failed {
				failed = false
				c.log.StoreBack()
			}
			continue
		}
		if !failed {
			failed = true
			c.log.StoreTrouble(err)
		}
		select {
		case <-time.After(pause):
		case <-c.wake: // a new result may be taken where those that wait are not
		case <-ctx.Done():
			return // they are analysed again at the next start
		}
		pause = min(2*pause, longestPause)
	}
}

// storeWhatGoes stores a batch in one transaction or, where that fails, result
// by result, so that one that the store refuses does not keep back the others.
// After a few failures in a row it is the store, not the results: the rest is
// left untried. err is the first failure of a single result.
func (c *committer) storeWhatGoes(batch []commit) (stored, refused, untried []commit, err error) {
	whole := c.storeAndSay(batch)
	if whole == nil {
		return batch, nil, nil, nil
	}
	if len(batch) == 1 {
		return nil, batch, nil, whole
	}
	const inARow = 3
	failures := 0
	for i, x := range batch {
		one := c.storeAndSay(batch[i : i+1])
		if one == nil {
			stored, failures = append(stored, x), 0
			continue
		}
		if err == nil {
			err = one
		}
		refused = append(refused, x)
		if failures++; failures == inARow {
			return stored, refused, batch[i+1:], err
		}
	}
	return stored, refused, nil, err
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

// release ends a batch: stored is done, untried is next, refused is tried
// again after all others.
func (c *committer) release(stored, untried, refused []commit) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.queue = slices.Concat(untried, c.queue, refused)
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
