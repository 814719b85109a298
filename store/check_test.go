package store

import (
	"errors"
	"strings"
	"testing"

	"go.etcd.io/bbolt"

	"platen/pipeline/run"
)

// Each invariant is broken once; Check says so, and Open after a crash refuses
// the store.
func TestCheckNoticesEachBrokenInvariant(t *testing.T) {
	a, b := Ref{idOf("a"), 1}, Ref{idOf("b"), 1}
	none := Ref{idOf("none"), 1}
	change := func(tx *bbolt.Tx, ref Ref, do func(*Record)) error {
		r, err := get[Record](tx.Bucket(bucketResults), ref.key())
		if err != nil {
			return err
		}
		do(&r)
		return put(tx.Bucket(bucketResults), ref.key(), r)
	}
	path := func(tx *bbolt.Tx, do func(*Path)) error {
		key := []byte("/x/b.tsv")
		p, err := get[Path](tx.Bucket(bucketPaths), key)
		if err != nil {
			return err
		}
		do(&p)
		return put(tx.Bucket(bucketPaths), key, p)
	}
	for name, c := range map[string]struct {
		spoil func(*bbolt.Tx) error
		want  string
	}{
		"unreadable result": {func(tx *bbolt.Tx) error { return tx.Bucket(bucketResults).Put(a.key(), []byte("{")) }, "cut short"},
		"result without checksum": {func(tx *bbolt.Tx) error {
			return tx.Bucket(bucketResults).Put(a.key(), []byte(`{"id":"a","revision":1}`))
		}, "checksum"},
		"result under another key": {func(tx *bbolt.Tx) error {
			r, err := get[Record](tx.Bucket(bucketResults), a.key())
			return errors.Join(err, put(tx.Bucket(bucketResults), none.key(), r))
		}, "holds the record of"},
		"document of another run": {func(tx *bbolt.Tx) error {
			return change(tx, a, func(r *Record) { r.Result.Run.ID = none.ID })
		}, "its document has the id"},
		"same arrival": {func(tx *bbolt.Tx) error {
			return change(tx, a, func(r *Record) { r.Arrival = 2 })
		}, "same arrival"},
		"arrival to come": {func(tx *bbolt.Tx) error { return tx.Bucket(bucketResults).SetSequence(1) }, "but only 1 have arrived"},
		"gap in the revisions": {func(tx *bbolt.Tx) error {
			return tx.Bucket(bucketResults).Delete(Ref{a.ID, 1}.key())
		}, "the revision before it is missing"},
		"unreadable path": {func(tx *bbolt.Tx) error { return tx.Bucket(bucketPaths).Put([]byte("/x/b.tsv"), nil) }, "cut short"},
		"path under another name": {func(tx *bbolt.Tx) error {
			return path(tx, func(p *Path) { p.Path = "/x/c.tsv" })
		}, "holds what is known of"},
		"dangling path": {func(tx *bbolt.Tx) error {
			return path(tx, func(p *Path) { p.Current = none })
		}, "which is missing"},
		"dangling history": {func(tx *bbolt.Tx) error {
			return path(tx, func(p *Path) { p.Earlier = []Ref{none} })
		}, "which is missing"},
		"history that stands still": {func(tx *bbolt.Tx) error {
			return path(tx, func(p *Path) { p.Earlier = []Ref{p.Current} })
		}, "with itself"},
		"result that does not name its path": {func(tx *bbolt.Tx) error {
			return change(tx, b, func(r *Record) { r.Paths = []string{"/x/c.tsv"} })
		}, "does not name it"},
		"result that names another's path": {func(tx *bbolt.Tx) error {
			return change(tx, b, func(r *Record) { r.Paths = append(r.Paths, "/x/a.tsv") })
		}, "whose current result is another"},
		"path named twice": {func(tx *bbolt.Tx) error {
			return change(tx, b, func(r *Record) { r.Paths = append(r.Paths, r.Paths...) })
		}, "twice"},
		"current and superseded": {func(tx *bbolt.Tx) error {
			return change(tx, b, func(r *Record) { r.SupersededBy = &a })
		}, "1 paths, superseded by"},
		"superseded by nothing": {func(tx *bbolt.Tx) error {
			return change(tx, a, func(r *Record) { r.SupersededBy = nil })
		}, "0 paths, superseded by"},
		"superseded by one that is not there": {func(tx *bbolt.Tx) error {
			return change(tx, a, func(r *Record) { r.SupersededBy = &none })
		}, "missing or itself"},
		"result missing in an index": {func(tx *bbolt.Tx) error {
			c := tx.Bucket(byCell.bucket).Cursor()
			c.First()
			return c.Delete()
		}, "cells: lacks"},
		"index entry without result": {func(tx *bbolt.Tx) error {
			return tx.Bucket(bySession.bucket).Put([]byte("x"), none.key())
		}, "sessions: points at"},
		"index entry under a wrong key": {func(tx *bbolt.Tx) error {
			return tx.Bucket(byStart.bucket).Put([]byte("x"), a.key())
		}, "under a wrong key"},
		"verdict changed behind the index": {func(tx *bbolt.Tx) error {
			return change(tx, b, func(r *Record) { r.Result.Verdict = run.Accept })
		}, "verdicts: "},
		"announcement of nothing": {func(tx *bbolt.Tx) error { return tx.Bucket(bucketUnannounced).Put(none.key(), nil) }, "unannounced: "},
		"unreadable event": {func(tx *bbolt.Tx) error {
			return tx.Bucket(bucketOutbox).Put([]byte(eventID(b, "repeat")), []byte("x"))
		}, "cut short"},
		"event of nothing": {func(tx *bbolt.Tx) error {
			return addEvent(tx, none, "repeat", clock()())
		}, "its result"},
		"event under another id": {func(tx *bbolt.Tx) error {
			return put(tx.Bucket(bucketOutbox), []byte("x"), Event{ID: "x", Kind: "repeat", Run: b})
		}, "has the id"},
		"missing bucket": {func(tx *bbolt.Tx) error { return tx.DeleteBucket(bucketOutbox) }, "no bucket outbox"},
		"no schema":      {func(tx *bbolt.Tx) error { return tx.Bucket(bucketMeta).Delete(keySchema) }, "missing"},
		"schema zero":    {func(tx *bbolt.Tx) error { return put(tx.Bucket(bucketMeta), keySchema, 0) }, "schema number is 0"},
	} {
		t.Run(name, func(t *testing.T) {
			folder := t.TempDir()
			s := open(t, folder, Options{})
			must[[]Stored](t)(s.Put(entry("/x/a.tsv", "a"), entry("/x/a.tsv", "a", version("2")), entry("/x/b.tsv", "b", repeat)))
			inOrder(t, s)
			if err := s.update(c.spoil); err != nil {
				t.Fatal(err)
			}
			said := ""
			for _, p := range must[[]Problem](t)(s.Check()) {
				said += p.String() + "\n"
			}
			if !strings.Contains(said, c.want) {
				t.Errorf("Check says %q, want %q", said, c.want)
			}
			s.doubt = true // as a crash leaves it
			s.Close()
			var d *DamagedError
			if _, err := Open(folder, Options{}); !errors.As(err, &d) {
				t.Errorf("opened after a crash: %v", err)
			}
		})
	}
}

// Several at once are all reported.
func TestCheckReportsAll(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	if err := s.update(func(tx *bbolt.Tx) error {
		return errors.Join(
			tx.Bucket(bucketUnannounced).Put(Ref{"x", 1}.key(), nil),
			tx.Bucket(bySession.bucket).Put([]byte("x"), []byte("x")),
			tx.Bucket(bucketPaths).Put([]byte("x"), []byte("x")),
		)
	}); err != nil {
		t.Fatal(err)
	}
	if ps := must[[]Problem](t)(s.Check()); len(ps) != 3 {
		t.Errorf("%d problems: %v", len(ps), ps)
	}
}
