package watcher

import (
	"context"
	"fmt"
	"sync"

	"platen/pipeline/cell"
	"platen/pipeline/run"
	"platen/store"
	"platen/watcher/sessionlog"
)

// CellStore is what gathering cells needs of the store.
type CellStore interface {
	// Results returns the current results that fit.
	Results(store.Filter) ([]store.Record, error)
	// PutCell stores a cell's document as its next revision unless it is the
	// same as the last.
	PutCell(run.CellResult) (revision int, isNew bool, err error)
}

// Cells makes the document of a cell anew after each of its runs. It works
// beside the announcing of verdicts, which never waits for it: a cell's
// inference takes up to a second.
type Cells struct {
	Store    CellStore
	Settings cell.Settings
	Software run.Software
	Log      *sessionlog.Log

	mu      sync.Mutex
	due     []cellName // in the order in which they came due
	working bool
	wake    chan struct{}
}

type cellName struct{ session, cell string }

// ran notes that a run of a cell has been stored.
func (c *Cells) ran(r run.Result) {
	if c == nil || r.Run.Cell == "" || r.Run.Kind != run.KindCell {
		return
	}
	name := cellName{r.Run.Session, r.Run.Cell}
	c.mu.Lock()
	for _, d := range c.due {
		if d == name {
			c.mu.Unlock()
			return
		}
	}
	c.due = append(c.due, name)
	c.mu.Unlock()
	select {
	case c.wake <- struct{}{}:
	default:
	}
}

// waiting tells whether documents are still to be made.
func (c *Cells) waiting() bool {
	if c == nil {
		return false
	}
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.working || len(c.due) > 0
}

// run makes documents until ctx ends and none is due. A cell whose document
// was not made before a crash gets it with its next run; platen cells makes it
// on the spot.
func (c *Cells) run(ctx context.Context) {
	var tables *cell.Tables
	for {
		name, ok := c.next()
		if !ok {
			select {
			case <-c.wake:
				continue
			case <-ctx.Done():
				return
			}
		}
		err := func() (err error) {
			if tables == nil {
				if tables, err = cell.NewTables(); err != nil {
					return err
				}
			}
			return c.gather(tables, name)
		}()
		if err != nil {
			c.Log.CellTrouble(name.session, name.cell, err)
		}
		c.done()
	}
}

func (c *Cells) next() (cellName, bool) {
	c.mu.Lock()
	defer c.mu.Unlock()
	if len(c.due) == 0 {
		return cellName{}, false
	}
	n := c.due[0]
	c.due = c.due[1:]
	c.working = true
	return n, true
}

func (c *Cells) done() {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.working = false
}

func (c *Cells) gather(tables *cell.Tables, name cellName) (err error) {
	defer func() {
		if p := recover(); p != nil {
			err = fmt.Errorf("platen failed on it: %v; please report this", p)
		}
	}()
	doc, err := GatherCell(c.Store, tables, c.Settings, c.Software, name.session, name.cell)
	if err != nil || doc == nil {
		return err
	}
	revision, isNew, err := c.Store.PutCell(*doc)
	if err == nil && isNew {
		c.Log.Cell(*doc, revision)
	}
	return err
}

// GatherCell makes the document of a cell from its current results.
func GatherCell(s CellStore, tables *cell.Tables, set cell.Settings, sw run.Software, session, name string) (*run.CellResult, error) {
	records, err := s.Results(store.Filter{Cell: name})
	if err != nil {
		return nil, err
	}
	var runs []run.Result
	for _, r := range records {
		if r.Result.Run.Session == session {
			runs = append(runs, r.Result)
		}
	}
	return tables.Gather(runs, set, sw), nil
}
