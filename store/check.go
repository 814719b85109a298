package store

import (
	"errors"
	"fmt"
	"slices"

	"go.etcd.io/bbolt"
)

// Problem is a broken invariant of the store.
type Problem struct {
	Where string
	What  string
}

func (p Problem) String() string { return p.Where + ": " + p.What }

// Check tests every invariant of the store and reports all violations. The
// error tells that the check itself could not be made.
func (s *Store) Check() ([]Problem, error) {
	s.mu.RLock()
	defer s.mu.RUnlock()
	if err := s.usable(); err != nil {
		return nil, err
	}
	return s.check()
}

func (s *Store) check() ([]Problem, error) {
	c := &checker{}
	// The pages of the file hang together: only then can bbolt follow them.
	err := s.pagesInOrder()
	if err == nil {
		err = s.look(func(tx *bbolt.Tx) error { return c.all(tx) })
	}
	if d := (*DamagedError)(nil); errors.As(err, &d) {
		c.report("file", "%s", d.Reason)
		err = nil
	}
	return c.problems, err
}

// checker goes through one transaction.
type checker struct {
	problems []Problem
	results  map[string]checked // by key in results
	paths    map[string]Path
}

// checked is what is kept of a record: all of them at once would be too much.
type checked struct {
	Ref
	paths        []string
	supersededBy *Ref
	indexKeys    []string // one for each of indexes
}

func (c *checker) report(where, format string, args ...any) {
	c.problems = append(c.problems, Problem{where, fmt.Sprintf(format, args...)})
}

func (c *checker) has(r Ref) bool {
	_, ok := c.results[string(r.key())]
	return ok
}

func (c *checker) all(tx *bbolt.Tx) error {
	// bbolt finds its own invariants kept.
	for err := range tx.Check() {
		c.report("file", "%v", err)
	}
	if len(c.problems) > 0 {
		return nil // the rest would read damaged pages
	}
	// The layout is the one described in the package comment.
	if n, err := schemaOf(tx); err != nil {
		c.report("meta", "%v", err)
		return nil
	} else if n != schema {
		return &SchemaError{tx.DB().Path(), n}
	}
	for _, loop := range []func(*bbolt.Tx) error{
		c.eachResult, c.eachRevision, c.eachPath, c.eachName, c.eachIndex, c.eachUnannounced, c.eachEvent, c.eachCellDocument,
	} {
		if err := loop(tx); err != nil {
			return err
		}
	}
	return nil
}

// Every result can be read, stands under its own key, and has an arrival of its
// own, not later than the last one given.
func (c *checker) eachResult(tx *bbolt.Tx) error {
	c.results = map[string]checked{}
	arrivals := map[uint64]string{}
	b := tx.Bucket(bucketResults)
	return b.ForEach(func(k, v []byte) error {
		where := "results " + string(k)
		r, err := decode[Record](k, v)
		if err != nil {
			c.report(where, "%v", err)
			return nil
		}
		if string(r.key()) != string(k) {
			c.report(where, "holds the record of %s", r.key())
		}
		if r.Result.Run.ID != r.ID {
			c.report(where, "its document has the id %s", r.Result.Run.ID)
		}
		if other, taken := arrivals[r.Arrival]; taken {
			c.report(where, "has the same arrival as %s", other)
		}
		arrivals[r.Arrival] = string(k)
		if r.Arrival == 0 || r.Arrival > b.Sequence() {
			c.report(where, "arrival %d, but only %d have arrived", r.Arrival, b.Sequence())
		}
		x := checked{Ref: r.Ref, paths: r.Paths, supersededBy: r.SupersededBy}
		for _, i := range indexes {
			x.indexKeys = append(x.indexKeys, string(i.key(r)))
		}
		c.results[string(k)] = x
		return nil
	})
}

// Revisions of one id are numbered from 1 without a gap.
func (c *checker) eachRevision(*bbolt.Tx) error {
	for k, r := range c.results {
		if r.Revision < 1 || r.Revision > 1 && !c.has(Ref{r.ID, r.Revision - 1}) {
			c.report("results "+k, "the revision before it is missing")
		}
	}
	return nil
}

// Every path can be read, stands under its own name, and leads through results
// that are there to a current one that names it, no two in a row the same.
func (c *checker) eachPath(tx *bbolt.Tx) error {
	c.paths = map[string]Path{}
	return tx.Bucket(bucketPaths).ForEach(func(k, v []byte) error {
		where := fmt.Sprintf("paths %q", k)
		p, err := decode[Path](k, v)
		if err != nil {
			c.report(where, "%v", err)
			return nil
		}
		c.paths[string(k)] = p
		if p.Path != string(k) {
			c.report(where, "holds what is known of %q", p.Path)
		}
		history := append(slices.Clone(p.Earlier), p.Current)
		for i, ref := range history {
			if !c.has(ref) {
				c.report(where, "points at %s, which is missing", ref)
			}
			if i > 0 && ref == history[i-1] {
				c.report(where, "follows %s with itself", ref)
			}
		}
		if r, ok := c.results[string(p.Current.key())]; ok && !slices.Contains(r.paths, string(k)) {
			c.report(where, "its result %s does not name it", p.Current)
		}
		return nil
	})
}

// A result names, once each, exactly the paths whose current result it is; it
// is superseded, by another that is there, exactly when there are none.
func (c *checker) eachName(*bbolt.Tx) error {
	for k, r := range c.results {
		for i, p := range r.paths {
			if c.paths[p].Current != r.Ref {
				c.report("results "+k, "names %q, whose current result is another", p)
			}
			if slices.Contains(r.paths[:i], p) {
				c.report("results "+k, "names %q twice", p)
			}
		}
		switch by := r.supersededBy; {
		case (len(r.paths) == 0) != (by != nil):
			c.report("results "+k, "has %d paths, superseded by %v", len(r.paths), by)
		case by != nil && (!c.has(*by) || *by == r.Ref):
			c.report("results "+k, "is superseded by %s, which is missing or itself", by)
		}
	}
	return nil
}

// Every result stands in each index under its own key, and nothing else does.
func (c *checker) eachIndex(tx *bbolt.Tx) error {
	for i, x := range indexes {
		where := string(x.bucket)
		listed := map[string]bool{}
		if err := tx.Bucket(x.bucket).ForEach(func(k, ref []byte) error {
			r, ok := c.results[string(ref)]
			switch {
			case !ok:
				c.report(where, "points at %q, which is missing", ref)
			case r.indexKeys[i] != string(k):
				c.report(where, "has %s under a wrong key", ref)
			default:
				listed[string(ref)] = true
			}
			return nil
		}); err != nil {
			return err
		}
		for k := range c.results {
			if !listed[k] {
				c.report(where, "lacks %s", k)
			}
		}
	}
	return nil
}

// What has yet to be announced is there.
func (c *checker) eachUnannounced(tx *bbolt.Tx) error {
	return tx.Bucket(bucketUnannounced).ForEach(func(k, _ []byte) error {
		if _, ok := c.results[string(k)]; !ok {
			c.report("unannounced", "%q is missing", k)
		}
		return nil
	})
}

// Every event can be read, has the id it is filed under, and is of a result
// that is there.
func (c *checker) eachEvent(tx *bbolt.Tx) error {
	return tx.Bucket(bucketOutbox).ForEach(func(k, v []byte) error {
		where := "outbox " + string(k)
		e, err := decode[Event](k, v)
		if err != nil {
			c.report(where, "%v", err)
			return nil
		}
		if e.ID != string(k) || e.ID != eventID(e.Run, e.Kind) {
			c.report(where, "has the id %s", e.ID)
		}
		if !c.has(e.Run) {
			c.report(where, "its result %s is missing", e.Run)
		}
		return nil
	})
}

// Every cell's document can be read and stands under its cell's name and
// revision.
func (c *checker) eachCellDocument(tx *bbolt.Tx) error {
	b := tx.Bucket(bucketCellDocuments)
	if b == nil {
		return nil
	}
	return b.ForEach(func(k, v []byte) error {
		where := "celldocuments " + string(k)
		r, err := decode[CellRecord](k, v)
		if err != nil {
			c.report(where, "%v", err)
			return nil
		}
		if want := fmt.Appendf(cellPrefix(r.Document.Session, r.Document.Cell), "%06d", r.Revision); string(want) != string(k) {
			c.report(where, "holds revision %d of cell %q", r.Revision, r.Document.Cell)
		}
		return nil
	})
}
