package store

import (
	"encoding/binary"
	"time"

	"go.etcd.io/bbolt"
)

// index lists results under a name in order of their start.
type index struct {
	bucket []byte
	name   func(Record) string
}

var (
	bySession = index{[]byte("sessions"), func(r Record) string { return r.Result.Run.Session }}
	byCell    = index{[]byte("cells"), func(r Record) string { return r.Result.Run.Cell }}
	byVerdict = index{[]byte("verdicts"), func(r Record) string { return string(r.Result.Verdict) }}
	byStart   = index{[]byte("starts"), func(Record) string { return "" }}

	indexes = []index{bySession, byCell, byVerdict, byStart}
)

// longestName keeps keys far below what bbolt takes (32 KiB); who looks a
// longer name up finds more than it and compares.
const longestName = 256

func namePrefix(name string) []byte {
	return append([]byte(name[:min(len(name), longestName)]), 0)
}

// key places a record: after its name the start of the run, whose bytes sort as
// times do, and the arrival.
func (x index) key(r Record) []byte {
	start := started(r)
	k := namePrefix(x.name(r))
	k = binary.BigEndian.AppendUint64(k, uint64(start.Unix())^1<<63)
	k = binary.BigEndian.AppendUint32(k, uint32(start.Nanosecond()))
	return binary.BigEndian.AppendUint64(k, r.Arrival)
}

// started is the start of the run where the file names it, else the moment it
// was stored.
func started(r Record) time.Time {
	if t, err := time.Parse(time.RFC3339Nano, r.Result.Run.Started); err == nil {
		return t
	}
	return r.Stored
}

func enterIndexes(tx *bbolt.Tx, r Record) error {
	for _, x := range indexes {
		if err := tx.Bucket(x.bucket).Put(x.key(r), r.key()); err != nil {
			return err
		}
	}
	return nil
}
