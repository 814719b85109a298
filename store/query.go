package store

import (
	"bytes"
	"errors"
	"fmt"
	"strings"

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

func (f Filter) takes(r Record) bool {
	return (f.Superseded || r.SupersededBy == nil) &&
		(f.Session == "" || r.Result.Run.Session == f.Session) &&
		(f.Cell == "" || r.Result.Run.Cell == f.Cell) &&
		(f.Verdict == "" || r.Result.Verdict == f.Verdict)
}

// index returns the index that leaves least to be looked at.
func (f Filter) index() (x index, name string) {
	switch {
	case f.Cell != "":
		return byCell, f.Cell
	case f.Session != "":
		return bySession, f.Session
	case f.Verdict != "":
		return byVerdict, string(f.Verdict)
	}
	return byStart, ""
}

var (
	// ErrNone says that nothing fits.
	ErrNone = errors.New("no such result")
	// ErrSeveral says that the beginning of an id fits more than one.
	ErrSeveral = errors.New("several results fit")
)

// rawRecord is a record copied out of a transaction, so that it is decoded when
// others can commit again.
type rawRecord struct{ key, value []byte }

func appendRaw(to []rawRecord, tx *bbolt.Tx, key []byte) ([]rawRecord, error) {
	v := tx.Bucket(bucketResults).Get(key)
	if v == nil {
		return nil, damagef("the result %q is missing", key)
	}
	return append(to, rawRecord{bytes.Clone(key), bytes.Clone(v)}), nil
}

// decodeAll decodes the records that take says yes to.
func (s *Store) decodeAll(raw []rawRecord, take func(Record) bool) ([]Record, error) {
	var out []Record
	for _, x := range raw {
		r, err := decode[Record](x.key, x.value)
		if err != nil {
			return nil, s.isDamaged(err.Error())
		}
		if take == nil || take(r) {
			out = append(out, r)
		}
	}
	return out, nil
}

// Results returns the results that fit, by start of the run and then by
// arrival.
func (s *Store) Results(f Filter) ([]Record, error) {
	var raw []rawRecord
	err := s.view(func(tx *bbolt.Tx) (err error) {
		x, name := f.index()
		prefix := namePrefix(name)
		c := tx.Bucket(x.bucket).Cursor()
		for k, ref := c.Seek(prefix); bytes.HasPrefix(k, prefix); k, ref = c.Next() {
			if raw, err = appendRaw(raw, tx, ref); err != nil {
				return err
			}
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	return s.decodeAll(raw, f.takes)
}

// Get returns all revisions of the result whose id starts with prefix, oldest
// first. It fails with ErrNone where there is none, and with ErrSeveral where
// more than one id fits.
func (s *Store) Get(prefix string) ([]Record, error) {
	prefix = strings.ToLower(prefix)
	var raw []rawRecord
	err := s.view(func(tx *bbolt.Tx) (err error) {
		id := ""
		c := tx.Bucket(bucketResults).Cursor()
		for k, _ := c.Seek([]byte(prefix)); k != nil && strings.HasPrefix(string(k), prefix); k, _ = c.Next() {
			this, _, _ := strings.Cut(string(k), "/")
			if id != "" && id != this {
				return fmt.Errorf("%w: more than one id starts with %q: give more of it", ErrSeveral, prefix)
			}
			id = this
			if raw, err = appendRaw(raw, tx, k); err != nil {
				return err
			}
		}
		if id == "" {
			return fmt.Errorf("%w: no id starts with %q", ErrNone, prefix)
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	return s.decodeAll(raw, nil)
}

// Revision returns one stored result, or ErrNone.
func (s *Store) Revision(ref Ref) (Record, error) {
	var r Record
	err := s.view(func(tx *bbolt.Tx) (err error) {
		results := tx.Bucket(bucketResults)
		if results.Get(ref.key()) == nil {
			return fmt.Errorf("%w: %s", ErrNone, ref)
		}
		r, err = get[Record](results, ref.key())
		return err
	})
	return r, err
}

// Known returns what is known of one run file; ok is false where that is
// nothing.
func (s *Store) Known(path string) (p Path, ok bool, err error) {
	err = s.view(func(tx *bbolt.Tx) (err error) {
		paths := tx.Bucket(bucketPaths)
		if path == "" || paths.Get([]byte(path)) == nil {
			return nil
		}
		p, err = get[Path](paths, []byte(path))
		ok = err == nil
		return err
	})
	return p, ok, err
}

// Paths returns what is known of all run files, by path.
func (s *Store) Paths() (map[string]Path, error) {
	out := map[string]Path{}
	err := s.view(func(tx *bbolt.Tx) error {
		return tx.Bucket(bucketPaths).ForEach(func(k, v []byte) error {
			p, err := decode[Path](k, v)
			out[string(k)] = p
			return err
		})
	})
	if err != nil {
		return nil, err
	}
	return out, nil
}
