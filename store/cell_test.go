package store

import (
	"testing"

	"go.etcd.io/bbolt"

	"platen/pipeline/run"
)

func TestCellDocuments(t *testing.T) {
	s, err := Open(t.TempDir(), Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	if cs, err := s.Cells(""); err != nil || len(cs) != 0 {
		t.Errorf("an empty store holds cells %v, %v", cs, err)
	}
	store := func(session, cell, advice string, revision int, isNew bool) {
		t.Helper()
		r, n, err := s.PutCell(run.CellResult{Schema: run.CellSchema, Session: session, Cell: cell, Advice: advice})
		if err != nil || r != revision || n != isNew {
			t.Errorf("%s %s %q: revision %d, new %v, %v; want %d, %v", session, cell, advice, r, n, err, revision, isNew)
		}
	}
	store("dish", "reed-1", "more", 1, true)
	store("dish", "reed-1", "more", 1, false)
	store("dish", "reed-1", "enough", 2, true)
	store("dish", "reed-2", "more", 1, true)
	store("dis", "hreed-2", "other", 1, true) // no label runs into another
	store("other", "reed-1", "x\x00/y", 1, true)
	cs, err := s.Cells("dish")
	if err != nil || len(cs) != 2 || cs[0].Document.Advice != "enough" || cs[0].Revision != 2 {
		t.Errorf("%+v, %v", cs, err)
	}
	if all, err := s.Cells(""); err != nil || len(all) != 4 {
		t.Errorf("%d cells, %v", len(all), err)
	}
	if ps, err := s.Check(); err != nil || len(ps) != 0 {
		t.Errorf("%v, %v", ps, err)
	}
	// A document under another cell's name is noticed.
	err = s.update(func(tx *bbolt.Tx) error {
		return put(tx.Bucket(bucketCellDocuments), []byte("0123/000001"), CellRecord{Revision: 1})
	})
	if err != nil {
		t.Fatal(err)
	}
	if ps, err := s.Check(); err != nil || len(ps) != 1 {
		t.Errorf("%v, %v", ps, err)
	}
}
