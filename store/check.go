package store

import (
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
	var out []Problem
	report := func(where, format string, args ...any) {
		out = append(out, Problem{where, fmt.Sprintf(format, args...)})
	}
	err := s.view(func(tx *bbolt.Tx) error {
		// The pages of the file hang together.
		for err := range tx.Check() {
			report("file", "%v", err)
		}
		if len(out) > 0 {
			return nil // the rest would read damaged pages
		}

		records := map[string]Record{}
		arrivals := map[uint64]string{}
		// Every result is a record under its own key, with an arrival of its own.
		if err := tx.Bucket(bucketResults).ForEach(func(k, v []byte) error {
			r, err := decode[Record](v)
			if err != nil {
				report("results "+string(k), "not a record: %v", err)
				return nil
			}
			if string(r.key()) != string(k) {
				report("results "+string(k), "holds the record of %s", r.Ref)
			}
			if r.Result.Run.ID != r.ID {
				report("results "+string(k), "its document has the id %s", r.Result.Run.ID)
			}
			if other, taken := arrivals[r.Arrival]; taken {
				report("results "+string(k), "arrived at the same time as %s", other)
			}
			arrivals[r.Arrival] = string(k)
			records[string(k)] = r
			return nil
		}); err != nil {
			return err
		}

		// Revisions of one id are numbered from 1 without a gap.
		for k, r := range records {
			if r.Revision > 1 {
				if _, ok := records[string(Ref{r.ID, r.Revision - 1}.key())]; !ok {
					report("results "+k, "revision %d is not there", r.Revision-1)
				}
			}
		}

		// Every path points at results that are there, and its current result
		// knows it.
		paths := map[string]Path{}
		if err := tx.Bucket(bucketPaths).ForEach(func(k, v []byte) error {
			p, err := decode[Path](v)
			if err != nil {
				report("paths "+string(k), "not a path: %v", err)
				return nil
			}
			paths[string(k)] = p
			for _, ref := range append(slices.Clone(p.Earlier), p.Current) {
				if _, ok := records[string(ref.key())]; !ok {
					report("paths "+string(k), "points at %s, which is not there", ref)
				}
			}
			if r, ok := records[string(p.Current.key())]; ok && !slices.Contains(r.Paths, string(k)) {
				report("paths "+string(k), "its result %s does not know it", p.Current)
			}
			return nil
		}); err != nil {
			return err
		}

		// A result names exactly the paths whose current result it is, and is
		// superseded when there are none.
		for k, r := range records {
			for _, p := range r.Paths {
				if paths[p].Current != r.Ref {
					report("results "+k, "names %s, whose current result is %s", p, paths[p].Current)
				}
			}
			if (len(r.Paths) == 0) != (r.SupersededBy != nil) {
				report("results "+k, "%d paths, superseded by %v", len(r.Paths), r.SupersededBy)
			}
			if r.SupersededBy != nil {
				if _, ok := records[string(r.SupersededBy.key())]; !ok {
					report("results "+k, "superseded by %s, which is not there", *r.SupersededBy)
				}
			}
		}

		// Every result stands once in the index of its session, and nothing
		// else does.
		indexed := map[string]int{}
		if err := tx.Bucket(bucketSessions).ForEach(func(k, ref []byte) error {
			r, ok := records[string(ref)]
			if !ok {
				report("sessions", "points at %s, which is not there", ref)
				return nil
			}
			if string(sessionKey(r.Result.Run.Session, r.Arrival)) != string(k) {
				report("sessions", "%s stands under the wrong session", ref)
			}
			indexed[string(ref)]++
			return nil
		}); err != nil {
			return err
		}
		for k := range records {
			if indexed[k] != 1 {
				report("sessions", "%s stands there %d times", k, indexed[k])
			}
		}

		// What has yet to be announced is there.
		if err := tx.Bucket(bucketUnannounced).ForEach(func(k, _ []byte) error {
			if _, ok := records[string(k)]; !ok {
				report("unannounced", "%s is not there", k)
			}
			return nil
		}); err != nil {
			return err
		}

		// Every event belongs to a result that is there.
		return tx.Bucket(bucketOutbox).ForEach(func(k, v []byte) error {
			e, err := decode[Event](v)
			if err != nil {
				report("outbox "+string(k), "not an event: %v", err)
				return nil
			}
			if _, ok := records[string(e.Run.key())]; !ok {
				report("outbox "+string(k), "its result %s is not there", e.Run)
			}
			return nil
		})
	})
	return out, err
}
