package store

import (
	"bytes"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"strings"

	"go.etcd.io/bbolt"

	"platen/pipeline/run"
)

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
	// New tells that there is a verdict to announce: the document was not there
	// yet, or it had been superseded and is current again. It is false where
	// the very same was there already, under this path or another.
	New        bool
	Supersedes *Ref // the file's former result, where it had another one
}

// Put stores results in one transaction: documents, paths, the marks that they
// have yet to be announced, and an outbox event for each run to repeat. When it
// returns without error, all of it is on disk; otherwise none of it counts as
// stored and all may be put again.
func (s *Store) Put(entries ...Entry) ([]Stored, error) {
	prepared := make([]document, len(entries))
	for i, e := range entries {
		var err error
		if prepared[i], err = prepareDocument(e); err != nil {
			return nil, fmt.Errorf("the result of %q cannot be stored: %w", e.Path, err)
		}
	}
	if len(entries) == 0 {
		return nil, nil
	}
	var p putting
	err := s.update(func(tx *bbolt.Tx) error {
		p = putting{tx: tx, store: s}
		for _, d := range prepared {
			if err := p.one(d); err != nil {
				return fmt.Errorf("storing the result of %q: %w", d.Path, err)
			}
		}
		if !p.changed {
			return errNothingNew
		}
		return nil
	})
	if err != nil && !errors.Is(err, errNothingNew) {
		s.remember(entries, p.out)
		return nil, err
	}
	s.recall(entries, p.out)
	return p.out, nil
}

// errNothingNew ends a transaction that would write what is there already.
var errNothingNew = errors.New("nothing new")

// unsaid is what a failed commit would have told of a new result.
type unsaid struct {
	path       string
	supersedes *Ref
}

// remember notes the results of a transaction that failed. Its last write may
// have reached the disk all the same: then the next attempt finds them there,
// but they are still news to the caller.
func (s *Store) remember(entries []Entry, failed []Stored) {
	s.mu.Lock()
	defer s.mu.Unlock()
	for i, st := range failed {
		if st.New && s.unsure != nil {
			s.unsure[st.Ref] = unsaid{entries[i].Path, st.Supersedes}
		}
	}
}

func (s *Store) recall(entries []Entry, stored []Stored) {
	s.mu.Lock()
	defer s.mu.Unlock()
	for i, st := range stored {
		u, ok := s.unsure[st.Ref]
		if !ok {
			continue
		}
		delete(s.unsure, st.Ref)
		stored[i].New = true
		if st.Supersedes == nil && u.path == entries[i].Path {
			stored[i].Supersedes = u.supersedes
		}
	}
}

// document is an entry whose result has been through JSON and back, as the one
// it is compared with has.
type document struct {
	Entry
	comparable []byte
}

func prepareDocument(e Entry) (document, error) {
	if e.Path == "" || strings.Contains(e.Path, "\x00") || len(e.Path) > bbolt.MaxKeySize {
		return document{}, errors.New("it needs the path of its file")
	}
	id := e.Result.Run.ID
	if b, err := hex.DecodeString(id); err != nil || len(b) != 32 || strings.ToLower(id) != id {
		return document{}, fmt.Errorf("its id %q is no SHA-256 in lower-case hexadecimal", id)
	}
	text, err := json.Marshal(e.Result)
	if err != nil {
		return document{}, err
	}
	d := document{Entry: e}
	d.Result = run.Result{}
	if err := json.Unmarshal(text, &d.Result); err != nil {
		return document{}, err
	}
	d.comparable, err = comparable(d.Result)
	return d, err
}

// comparable is the document without the name of the file: the same bytes under
// another name are the same result.
func comparable(r run.Result) ([]byte, error) {
	r.Run.File = ""
	return json.Marshal(r)
}

// putting is one transaction of Put.
type putting struct {
	tx      *bbolt.Tx
	store   *Store
	out     []Stored
	changed bool
}

func (p *putting) one(d document) error {
	r, st, err := p.result(d)
	if err != nil {
		return err
	}
	paths, key := p.tx.Bucket(bucketPaths), []byte(d.Path)
	var former Path
	if paths.Get(key) != nil {
		if former, err = get[Path](paths, key); err != nil {
			return err
		}
	}
	now := Path{d.Path, d.Size, d.ModTimeNs, d.Fingerprint, r.Ref, former.Earlier}
	if former.Path != "" && former.Current != r.Ref {
		now.Earlier = append(now.Earlier, former.Current)
		st.Supersedes = &former.Current
		if err := p.leave(former.Current, d.Path, r.Ref); err != nil {
			return err
		}
	}
	p.out = append(p.out, st)
	was, err := json.Marshal(former)
	if err != nil {
		return err
	}
	if is, err := json.Marshal(now); err != nil || bytes.Equal(was, is) {
		return err
	}
	p.changed = true
	return put(paths, key, now)
}

// result finds the document among the revisions of its id, or adds it, and
// makes it the current one of the path.
func (p *putting) result(d document) (Record, Stored, error) {
	results := p.tx.Bucket(bucketResults)
	id := d.Result.Run.ID
	last := 0
	prefix := []byte(id + "/")
	c := results.Cursor()
	for k, v := c.Seek(prefix); bytes.HasPrefix(k, prefix); k, v = c.Next() {
		r, err := decode[Record](k, v)
		if err != nil {
			return Record{}, Stored{}, err
		}
		last = r.Revision
		there, err := comparable(r.Result)
		if err != nil {
			return Record{}, Stored{}, err
		}
		if !bytes.Equal(there, d.comparable) {
			continue
		}
		if slices.Contains(r.Paths, d.Path) {
			return r, Stored{Ref: r.Ref}, nil
		}
		again := r.SupersededBy != nil
		r.Paths, r.SupersededBy = append(r.Paths, d.Path), nil
		p.changed = true
		err = put(results, r.key(), r)
		if err == nil && again {
			err = p.due(r)
		}
		return r, Stored{Ref: r.Ref, New: again}, err
	}
	arrival, err := results.NextSequence()
	if err != nil {
		return Record{}, Stored{}, err
	}
	r := Record{Ref: Ref{id, last + 1}, Arrival: arrival, Stored: p.store.now().UTC(), Paths: []string{d.Path}, Result: d.Result}
	p.changed = true
	err = put(results, r.key(), r)
	if err == nil {
		err = enterIndexes(p.tx, r)
	}
	if err == nil {
		err = p.due(r)
	}
	return r, Stored{Ref: r.Ref, New: true}, err
}

// due marks a result as to be announced, and as to be alerted of where the run
// is to be repeated.
func (p *putting) due(r Record) error {
	if err := p.tx.Bucket(bucketUnannounced).Put(r.key(), nil); err != nil {
		return err
	}
	if r.Result.Verdict != run.Repeat {
		return nil
	}
	return addEvent(p.tx, r.Ref, "repeat", p.store.now().UTC())
}

// leave takes a path off its former result.
func (p *putting) leave(former Ref, path string, next Ref) error {
	results := p.tx.Bucket(bucketResults)
	r, err := get[Record](results, former.key())
	if err != nil {
		return err
	}
	r.Paths = slices.DeleteFunc(r.Paths, func(name string) bool { return name == path })
	if len(r.Paths) == 0 {
		r.SupersededBy = &next
	}
	p.changed = true
	return put(results, former.key(), r)
}
