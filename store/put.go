package store

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"fmt"
	"slices"
	"time"

	"go.etcd.io/bbolt"

	"platen/pipeline/run"
)

// Ref names one revision of one result.
type Ref struct {
	ID       string `json:"id"`
	Revision int    `json:"revision"` // from 1
}

func (r Ref) key() []byte { return fmt.Appendf(nil, "%s/%06d", r.ID, r.Revision) }

// String is the form in which a revision is named to people.
func (r Ref) String() string {
	id := r.ID
	if len(id) > 12 {
		id = id[:12]
	}
	return fmt.Sprintf("%s/%d", id, r.Revision)
}

// Record is a stored result with what became of it.
type Record struct {
	Ref
	Arrival      uint64     `json:"arrival"` // order in which results were stored
	Stored       time.Time  `json:"stored"`
	Paths        []string   `json:"paths"` // files whose current result this is
	SupersededBy *Ref       `json:"superseded_by,omitempty"`
	Result       run.Result `json:"result"`
}

// Path is what is known of a run file.
type Path struct {
	Path        string `json:"path"`
	Size        int64  `json:"size"`
	ModTimeNs   int64  `json:"mtime_ns"`
	Fingerprint string `json:"fingerprint"` // of its first and last bytes
	Current     Ref    `json:"current"`
	Earlier     []Ref  `json:"earlier,omitempty"` // oldest first
}

// Entry is a result to be stored, with the file it was made from.
type Entry struct {
	Path        string // full path of the file, with forward slashes
	Size        int64
	ModTimeNs   int64
	Fingerprint string
	Result      run.Result
}

// Stored tells what became of an Entry.
type Stored struct {
	Ref
	New        bool // false where the very same document was there already
	Supersedes *Ref // the file's former result, where it had one
}

// Put stores results in one transaction: documents, paths, the marks that they
// have yet to be announced, and an outbox event for each run to repeat. When it
// returns without error, all of it is on disk; otherwise none is.
func (s *Store) Put(entries ...Entry) ([]Stored, error) {
	out := make([]Stored, len(entries))
	err := s.update(func(tx *bbolt.Tx) error {
		for i, e := range entries {
			var err error
			if out[i], err = s.putOne(tx, e); err != nil {
				return fmt.Errorf("storing the result of %s: %w", e.Path, err)
			}
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	return out, nil
}

func (s *Store) putOne(tx *bbolt.Tx, e Entry) (Stored, error) {
	ref, isNew, err := s.putResult(tx, e)
	if err != nil {
		return Stored{}, err
	}
	st := Stored{Ref: ref, New: isNew}
	paths := tx.Bucket(bucketPaths)
	p := Path{Path: e.Path}
	if v := paths.Get([]byte(e.Path)); v != nil {
		if p, err = decode[Path](v); err != nil {
			return Stored{}, err
		}
	}
	former := p.Current
	p.Size, p.ModTimeNs, p.Fingerprint, p.Current = e.Size, e.ModTimeNs, e.Fingerprint, ref
	if former.ID != "" && former != ref {
		p.Earlier = append(p.Earlier, former)
		st.Supersedes = &former
		if err := s.leave(tx, former, e.Path, ref); err != nil {
			return Stored{}, err
		}
	}
	return st, put(paths, []byte(e.Path), p)
}

// putResult stores the document unless the same is there, and returns its
// revision.
func (s *Store) putResult(tx *bbolt.Tx, e Entry) (ref Ref, isNew bool, err error) {
	results := tx.Bucket(bucketResults)
	id := e.Result.Run.ID
	prefix := []byte(id + "/")
	last := 0
	c := results.Cursor()
	for k, v := c.Seek(prefix); k != nil && bytes.HasPrefix(k, prefix); k, v = c.Next() {
		r, err := decode[Record](v)
		if err != nil {
			return Ref{}, false, err
		}
		last = r.Revision
		same, err := sameDocument(r.Result, e.Result)
		if err != nil {
			return Ref{}, false, err
		}
		if !same {
			continue
		}
		if !slices.Contains(r.Paths, e.Path) {
			r.Paths = append(r.Paths, e.Path)
			r.SupersededBy = nil
			if err := put(results, slices.Clone(k), r); err != nil {
				return Ref{}, false, err
			}
		}
		return r.Ref, false, nil
	}
	arrival, err := results.NextSequence()
	if err != nil {
		return Ref{}, false, err
	}
	r := Record{Ref: Ref{id, last + 1}, Arrival: arrival, Stored: s.now().UTC(), Paths: []string{e.Path}, Result: e.Result}
	if err := put(results, r.key(), r); err != nil {
		return Ref{}, false, err
	}
	if err := tx.Bucket(bucketSessions).Put(sessionKey(e.Result.Run.Session, arrival), r.key()); err != nil {
		return Ref{}, false, err
	}
	if err := tx.Bucket(bucketUnannounced).Put(r.key(), []byte{}); err != nil {
		return Ref{}, false, err
	}
	if e.Result.Verdict == run.Repeat {
		ev := Event{ID: string(r.key()) + "/repeat", Kind: "repeat", Run: r.Ref, At: r.Stored}
		if err := put(tx.Bucket(bucketOutbox), []byte(ev.ID), ev); err != nil {
			return Ref{}, false, err
		}
	}
	return r.Ref, true, nil
}

// leave takes a path off its former result.
func (s *Store) leave(tx *bbolt.Tx, former Ref, path string, next Ref) error {
	results := tx.Bucket(bucketResults)
	v := results.Get(former.key())
	if v == nil {
		return fmt.Errorf("the former result %s is not there", former)
	}
	r, err := decode[Record](v)
	if err != nil {
		return err
	}
	r.Paths = slices.DeleteFunc(r.Paths, func(p string) bool { return p == path })
	if len(r.Paths) == 0 {
		r.SupersededBy = &next
	}
	return put(results, former.key(), r)
}

// sameDocument compares two documents but for the name of the file: the same
// bytes under another name are the same result.
func sameDocument(a, b run.Result) (bool, error) {
	a.Run.File, b.Run.File = "", ""
	x, err := json.Marshal(a)
	if err != nil {
		return false, err
	}
	y, err := json.Marshal(b)
	return bytes.Equal(x, y), err
}

func sessionKey(session string, arrival uint64) []byte {
	k := append([]byte(session), 0)
	return binary.BigEndian.AppendUint64(k, arrival)
}
