package store

import (
	"fmt"

	"go.etcd.io/bbolt"
)

// schema is the number of the layout that this program writes: the number of
// migrations.
const schema = 1

var (
	bucketMeta        = []byte("meta")
	bucketResults     = []byte("results")
	bucketPaths       = []byte("paths")
	bucketUnannounced = []byte("unannounced")
	bucketOutbox      = []byte("outbox")

	keySchema = []byte("schema")
)

// buckets are those that a store of the present schema has.
func buckets() [][]byte {
	all := [][]byte{bucketMeta, bucketResults, bucketPaths, bucketUnannounced, bucketOutbox}
	for _, x := range indexes {
		all = append(all, x.bucket)
	}
	return all
}

// migration n-1 brings a store from schema n-1 to schema n.
type migration func(*bbolt.Tx) error

// migrations are the steps from nothing to the present layout. A step that has
// been released is never changed; a new layout is a new step.
var migrations = []migration{
	func(tx *bbolt.Tx) error {
		for _, b := range []string{"meta", "results", "paths", "sessions", "cells", "verdicts", "starts", "unannounced", "outbox"} {
			if _, err := tx.CreateBucket([]byte(b)); err != nil {
				return err
			}
		}
		return nil
	},
}

// migrate takes the steps after schema number from, all or none of them.
func migrate(tx *bbolt.Tx, from int, steps []migration) error {
	for n := from; n < len(steps); n++ {
		if err := steps[n](tx); err != nil {
			return fmt.Errorf("bringing the store from schema %d to %d: %w", n, n+1, err)
		}
	}
	return put(tx.Bucket(bucketMeta), keySchema, len(steps))
}

// SchemaError says that the store was written by another version of the
// program. It has not been changed.
type SchemaError struct {
	File  string
	Found int
}

func (e *SchemaError) Error() string {
	if e.Found < schema {
		return fmt.Sprintf("the store %s was written by an older version of platen (schema %d, this one reads %d): start platen watch once, which brings it up to date", e.File, e.Found, schema)
	}
	return fmt.Sprintf("the store %s was written by a newer version of platen (schema %d, this one knows %d); nothing was changed: use that version, or give another state folder with --state", e.File, e.Found, schema)
}

// schemaOf returns the number of the layout, and makes sure that the buckets
// are there if it is the present one.
func schemaOf(tx *bbolt.Tx) (int, error) {
	b := tx.Bucket(bucketMeta)
	if b == nil {
		return 0, damage("it is a bbolt file, but has no bucket meta")
	}
	n, err := get[int](b, keySchema)
	if err != nil {
		return 0, err
	}
	if n < 1 {
		return 0, damagef("its schema number is %d", n)
	}
	if n == schema {
		for _, name := range buckets() {
			if tx.Bucket(name) == nil {
				return 0, damagef("it has no bucket %s", name)
			}
		}
	}
	return n, nil
}
