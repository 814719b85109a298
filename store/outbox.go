package store

import (
	"cmp"
	"slices"
	"time"

	"go.etcd.io/bbolt"
)

// Event is an alert that is due.
type Event struct {
	ID   string    `json:"id"` // the same at every delivery, so that receivers can drop the second
	Kind string    `json:"kind"`
	Run  Ref       `json:"run"`
	At   time.Time `json:"at"`
}

func eventID(r Ref, kind string) string { return string(r.key()) + "/" + kind }

func addEvent(tx *bbolt.Tx, r Ref, kind string, at time.Time) error {
	e := Event{eventID(r, kind), kind, r, at}
	return put(tx.Bucket(bucketOutbox), []byte(e.ID), e)
}

// Outbox returns the events that are due, oldest first.
func (s *Store) Outbox() ([]Event, error) {
	var out []Event
	err := s.view(func(tx *bbolt.Tx) error {
		return tx.Bucket(bucketOutbox).ForEach(func(k, v []byte) error {
			e, err := decode[Event](k, v)
			out = append(out, e)
			return err
		})
	})
	if err != nil {
		return nil, err
	}
	slices.SortFunc(out, func(a, b Event) int { return cmp.Or(a.At.Compare(b.At), cmp.Compare(a.ID, b.ID)) })
	return out, nil
}

// Delivered removes an event that has been delivered. It does nothing where
// there is no such event.
func (s *Store) Delivered(eventID string) error {
	return s.update(func(tx *bbolt.Tx) error { return tx.Bucket(bucketOutbox).Delete([]byte(eventID)) })
}
