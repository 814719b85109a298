package store

import (
	"bytes"
	"cmp"
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"
	"time"

	"go.etcd.io/bbolt"

	"platen/pipeline/run"
)

// Filter chooses results; its zero value takes all that are current.
type Filter struct {
	Session    string // "" for all
	Cell       string
	Verdict    run.Verdict
	Superseded bool // also those that a later result of the same file replaced
}

// ErrNone says that nothing fits.
var ErrNone = errors.New("no such result")

// Results returns the results that fit, by start of the run and then by
// arrival.
func (s *Store) Results(f Filter) ([]Record, error) {
	var out []Record
	err := s.view(func(tx *bbolt.Tx) error {
		results := tx.Bucket(bucketResults)
		take := func(key, v []byte) error {
			r, err := decode[Record](v)
			if err != nil {
				return fmt.Errorf("result %s: %w", key, err)
			}
			if (f.Superseded || r.SupersededBy == nil) &&
				(f.Cell == "" || r.Result.Run.Cell == f.Cell) &&
				(f.Verdict == "" || r.Result.Verdict == f.Verdict) {
				out = append(out, r)
			}
			return nil
		}
		if f.Session == "" {
			return results.ForEach(take)
		}
		prefix := append([]byte(f.Session), 0)
		c := tx.Bucket(bucketSessions).Cursor()
		for k, ref := c.Seek(prefix); k != nil && bytes.HasPrefix(k, prefix); k, ref = c.Next() {
			if len(k) != len(prefix)+8 {
				continue
			}
			if err := take(ref, results.Get(ref)); err != nil {
				return err
			}
		}
		return nil
	})
	slices.SortFunc(out, func(a, b Record) int {
		return cmp.Or(started(a).Compare(started(b)), cmp.Compare(a.Arrival, b.Arrival))
	})
	return out, err
}

// started is the start of the run where the file names it, else the moment it
// was stored.
func started(r Record) time.Time {
	if t, err := time.Parse(time.RFC3339Nano, r.Result.Run.Started); err == nil {
		return t
	}
	return r.Stored
}

// Get returns all revisions of the result whose id starts with prefix, oldest
// first. It fails with ErrNone where there is none, and where several ids fit.
func (s *Store) Get(prefix string) ([]Record, error) {
	var out []Record
	err := s.view(func(tx *bbolt.Tx) error {
		c := tx.Bucket(bucketResults).Cursor()
		for k, v := c.Seek([]byte(prefix)); k != nil && strings.HasPrefix(string(k), prefix); k, v = c.Next() {
			r, err := decode[Record](v)
			if err != nil {
				return fmt.Errorf("result %s: %w", k, err)
			}
			if len(out) > 0 && out[0].ID != r.ID {
				return &ownError{fmt.Errorf("several results start with %q: give more of the id", prefix)}
			}
			out = append(out, r)
		}
		return nil
	})
	if err == nil && len(out) == 0 {
		return nil, fmt.Errorf("%w: no id starts with %q", ErrNone, prefix)
	}
	return out, err
}

// Revision returns one stored result.
func (s *Store) Revision(ref Ref) (Record, error) {
	var r Record
	err := s.view(func(tx *bbolt.Tx) (err error) {
		v := tx.Bucket(bucketResults).Get(ref.key())
		if v == nil {
			return &ownError{fmt.Errorf("%w: %s", ErrNone, ref)}
		}
		r, err = decode[Record](v)
		return err
	})
	return r, err
}

// Paths returns what is known of all run files, by path.
func (s *Store) Paths() (map[string]Path, error) {
	out := map[string]Path{}
	err := s.view(func(tx *bbolt.Tx) error {
		return tx.Bucket(bucketPaths).ForEach(func(k, v []byte) error {
			p, err := decode[Path](v)
			if err != nil {
				return fmt.Errorf("path %q: %w", k, err)
			}
			out[string(k)] = p
			return nil
		})
	})
	return out, err
}

// Unannounced returns the results that were committed but not yet announced,
// in order of arrival.
func (s *Store) Unannounced() ([]Record, error) {
	var out []Record
	err := s.view(func(tx *bbolt.Tx) error {
		return tx.Bucket(bucketUnannounced).ForEach(func(k, _ []byte) error {
			r, err := decode[Record](tx.Bucket(bucketResults).Get(k))
			if err != nil {
				return fmt.Errorf("result %s: %w", k, err)
			}
			out = append(out, r)
			return nil
		})
	})
	slices.SortFunc(out, func(a, b Record) int { return cmp.Compare(a.Arrival, b.Arrival) })
	return out, err
}

// Announced clears the marks of results that have been announced.
func (s *Store) Announced(refs ...Ref) error {
	return s.update(func(tx *bbolt.Tx) error {
		for _, r := range refs {
			if err := tx.Bucket(bucketUnannounced).Delete(r.key()); err != nil {
				return err
			}
		}
		return nil
	})
}

// Event is an alert that is due.
type Event struct {
	ID   string    `json:"id"` // the same at every delivery, so that receivers can drop the second
	Kind string    `json:"kind"`
	Run  Ref       `json:"run"`
	At   time.Time `json:"at"`
}

// Outbox returns the events that are due, oldest first.
func (s *Store) Outbox() ([]Event, error) {
	var out []Event
	err := s.view(func(tx *bbolt.Tx) error {
		return tx.Bucket(bucketOutbox).ForEach(func(k, v []byte) error {
			e, err := decode[Event](v)
			if err != nil {
				return fmt.Errorf("event %s: %w", k, err)
			}
			out = append(out, e)
			return nil
		})
	})
	slices.SortStableFunc(out, func(a, b Event) int { return a.At.Compare(b.At) })
	return out, err
}

// Delivered removes an event that has been delivered.
func (s *Store) Delivered(id string) error {
	return s.update(func(tx *bbolt.Tx) error { return tx.Bucket(bucketOutbox).Delete([]byte(id)) })
}

// Snapshot writes a consistent copy of the store.
func (s *Store) Snapshot(w io.Writer) error {
	return s.view(func(tx *bbolt.Tx) error {
		if _, err := tx.WriteTo(w); err != nil {
			return &ownError{fmt.Errorf("writing the copy of the store: %w", err)}
		}
		return nil
	})
}
