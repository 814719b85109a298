package store

import (
	"bytes"
	"cmp"
	"crypto/sha256"
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"time"

	"go.etcd.io/bbolt"

	"platen/pipeline/run"
)

// bucketCellDocuments holds the documents of cells: "<hash of session and
// cell>/<revision>" -> CellRecord. A cell's document can be made again from its
// runs at any time, so the bucket is made when it is first needed and a store
// without it is whole.
var bucketCellDocuments = []byte("celldocuments")

// CellRecord is one stored revision of a cell's document.
type CellRecord struct {
	Revision int            `json:"revision"` // from 1
	Stored   time.Time      `json:"stored"`
	Document run.CellResult `json:"document"`
}

// cellPrefix names a cell of a session. Labels may be of any length and hold
// any bytes; their hash is short and holds none.
func cellPrefix(session, cell string) []byte {
	sum := sha256.Sum256(fmt.Appendf(nil, "%d %s %s", len(session), session, cell))
	return fmt.Appendf(nil, "%x/", sum[:16])
}

// PutCell stores the document of a cell as its next revision, unless it is the
// same as the last. Earlier revisions stay readable.
func (s *Store) PutCell(doc run.CellResult) (revision int, isNew bool, err error) {
	text, err := json.Marshal(doc)
	if err != nil {
		return 0, false, err
	}
	err = s.update(func(tx *bbolt.Tx) error {
		b, err := tx.CreateBucketIfNotExists(bucketCellDocuments)
		if err != nil {
			return err
		}
		last, there, err := lastCellIn(b, doc.Session, doc.Cell)
		if err != nil {
			return err
		}
		if there {
			was, err := json.Marshal(last.Document)
			if err != nil {
				return err
			}
			if bytes.Equal(was, text) {
				revision = last.Revision
				return errNothingNew
			}
		}
		revision = last.Revision + 1
		key := fmt.Appendf(cellPrefix(doc.Session, doc.Cell), "%06d", revision)
		return put(b, key, CellRecord{revision, s.now().UTC(), doc})
	})
	switch {
	case errors.Is(err, errNothingNew):
		return revision, false, nil
	case err != nil:
		return 0, false, err
	}
	return revision, true, nil
}

// lastCellIn returns the newest revision of a cell's document.
func lastCellIn(b *bbolt.Bucket, session, cell string) (r CellRecord, ok bool, err error) {
	prefix := cellPrefix(session, cell)
	c := b.Cursor()
	for k, v := c.Seek(prefix); bytes.HasPrefix(k, prefix); k, v = c.Next() {
		if r, err = decode[CellRecord](k, v); err != nil {
			return r, false, err
		}
		ok = true
	}
	return r, ok, nil
}

// Cells returns the current documents of all cells, or of those of a session,
// by start and name.
func (s *Store) Cells(session string) ([]CellRecord, error) {
	last := map[string]CellRecord{}
	err := s.view(func(tx *bbolt.Tx) error {
		b := tx.Bucket(bucketCellDocuments)
		if b == nil {
			return nil
		}
		return b.ForEach(func(k, v []byte) error {
			r, err := decode[CellRecord](k, v)
			if err != nil {
				return err
			}
			last[string(k[:bytes.IndexByte(k, '/')])] = r // revisions come in order
			return nil
		})
	})
	if err != nil {
		return nil, err
	}
	var out []CellRecord
	for _, r := range last {
		if session == "" || r.Document.Session == session {
			out = append(out, r)
		}
	}
	slices.SortFunc(out, func(a, b CellRecord) int {
		return cmp.Or(
			cmp.Compare(a.Document.Session, b.Document.Session),
			cmp.Compare(a.Document.StartedAt, b.Document.StartedAt),
			cmp.Compare(a.Document.Cell, b.Document.Cell),
		)
	})
	return out, nil
}
