package store

import (
	"context"
	"errors"
	"os"
	"time"

	"github.com/gofrs/flock"
	"go.etcd.io/bbolt"
)

// retry is the pause between two looks at a lock: about as long as a
// transaction. bbolt's own is 50 ms, in which those who come and go without a
// pause would pass one who waits.
const retry = time.Millisecond

// openInTurn opens the database file. Readers share its lock: without a line to
// stand in, a few of them that overlap would keep out a writer for good. So
// whoever wants the file first takes platen.turn, and holds it until the file
// is open; those inside finish meanwhile and no one gets in ahead.
//
// The line is a courtesy, safe is the file by bbolt's own lock: where there is
// no platen.turn (a copy of a store, a folder only for reading), it is done
// without.
func (f dbFile) openInTurn(o bbolt.Options) (*bbolt.DB, error) {
	ctx, cancel := context.WithTimeout(context.Background(), f.wait)
	defer cancel()
	flag := os.O_RDONLY
	if !o.ReadOnly {
		flag |= os.O_CREATE
	}
	turn := flock.New(f.turn, flock.SetFlag(flag))
	turn.TryLockContext(ctx, retry)
	defer turn.Unlock()
	o.Timeout = 1 // look once
	for {
		db, err := bbolt.Open(f.path, 0o600, &o)
		if !errors.Is(err, bbolt.ErrTimeout) || ctx.Err() != nil {
			return db, err
		}
		time.Sleep(retry)
	}
}
