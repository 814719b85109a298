package store

import (
	"cmp"
	"slices"

	"go.etcd.io/bbolt"
)

// Unannounced returns the results that were committed but not yet announced,
// in order of arrival.
func (s *Store) Unannounced() ([]Record, error) {
	var raw []rawRecord
	err := s.view(func(tx *bbolt.Tx) error {
		return tx.Bucket(bucketUnannounced).ForEach(func(k, _ []byte) (err error) {
			raw, err = appendRaw(raw, tx, k)
			return err
		})
	})
	if err != nil {
		return nil, err
	}
	out, err := s.decodeAll(raw, nil)
	slices.SortFunc(out, func(a, b Record) int { return cmp.Compare(a.Arrival, b.Arrival) })
	return out, err
}

// Announced clears the marks of results that have been announced.
func (s *Store) Announced(refs ...Ref) error {
	if len(refs) == 0 {
		return nil
	}
	return s.update(func(tx *bbolt.Tx) error {
		for _, r := range refs {
			if err := tx.Bucket(bucketUnannounced).Delete(r.key()); err != nil {
				return err
			}
		}
		return nil
	})
}
