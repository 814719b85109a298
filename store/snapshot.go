package store

import (
	"fmt"
	"io"

	"go.etcd.io/bbolt"
)

// Snapshot writes a consistent copy of the store, which is a store itself.
// Nobody can commit meanwhile: w should be a local file, not a network
// connection.
func (s *Store) Snapshot(w io.Writer) error {
	return s.view(func(tx *bbolt.Tx) error {
		if _, err := tx.WriteTo(w); err != nil {
			return fmt.Errorf("writing the copy of the store: %w", err)
		}
		return nil
	})
}
