// Package store keeps every result of a rig in one bbolt file.
//
// Start with Open, which takes the state folder for one service, and Put,
// which stores results in one transaction. Read opens the same file for a
// look while a service runs.
//
// The file platen.db holds these buckets (values are JSON):
//
//	meta         schema number
//	results      "<id>/<revision>" -> Record: the document and what became of it
//	paths        path of a run file -> Path: size, time, current and earlier results
//	sessions     "<session> NUL <arrival>" -> key in results
//	unannounced  key in results -> "": committed, but not yet said on the console
//	outbox       "<event id>" -> Event: alerts due
//
// The id of a result is the SHA-256 of the run's bytes. Documents that differ
// though the bytes are the same (other settings, another version) are further
// revisions of one id. A path points at its current result and keeps the
// earlier ones; the same bytes under two names are one result.
//
// Invariants kept here:
//   - What Put has returned is on disk; what it has not returned is wholly
//     there or wholly absent.
//   - Storing the same thing again changes nothing.
//   - A store that cannot be understood is never changed.
//
// The file is opened for each transaction and closed after it, so that others
// can read between commits: a bbolt file is locked as long as it is open. Who
// owns the state folder is settled by a lock file of its own, held all along.
package store

import (
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"time"

	"go.etcd.io/bbolt"
)

// schema is the number of the layout described above. A newer program raises
// it and migrates; an older one refuses.
const schema = 1

var (
	bucketMeta        = []byte("meta")
	bucketResults     = []byte("results")
	bucketPaths       = []byte("paths")
	bucketSessions    = []byte("sessions")
	bucketUnannounced = []byte("unannounced")
	bucketOutbox      = []byte("outbox")

	keySchema = []byte("schema")
)

// Store is an open state folder. Its methods may be called from several
// goroutines.
type Store struct {
	folder   string
	lock     *lock // nil when only reading
	now      func() time.Time
	openWait time.Duration
}

// Options are the choices of Open. The zero value is usable.
type Options struct {
	Owner string           // what the owner of the folder does, for others to read
	Now   func() time.Time // clock; default time.Now
}

// ErrNewer says that the store was written by a newer version of the program.
var ErrNewer = errors.New("the store was written by a newer version of platen: use that version, or give another state folder with --state")

// DamagedError says that the store cannot be understood. It has not been
// changed.
type DamagedError struct {
	File   string
	Reason string
}

func (e *DamagedError) Error() string {
	return fmt.Sprintf("the store %s is damaged (%s); nothing was changed: move it aside (for instance rename it to %s.damaged) and start again, platen then analyses the files that are still in the export folder anew",
		e.File, e.Reason, filepath.Base(e.File))
}

// Open takes the state folder for this process, makes the store if there is
// none, and checks one that was not closed in order. A *LockedError names the
// process that has the folder already.
func Open(folder string, o Options) (*Store, error) {
	if err := os.MkdirAll(folder, 0o700); err != nil {
		return nil, fmt.Errorf("state folder: %w: give a folder that you may write to with --state", err)
	}
	l, clean, err := takeLock(folder, o.Owner)
	if err != nil {
		return nil, err
	}
	s := &Store{folder: folder, lock: l, now: o.Now, openWait: 10 * time.Second}
	if s.now == nil {
		s.now = time.Now
	}
	if err := s.prepare(clean); err != nil {
		l.release(false)
		return nil, err
	}
	return s, nil
}

// Read gives access to a store without owning it, also while a service does.
// Only the methods that read may be called. It fails with fs.ErrNotExist where
// nothing has been stored yet.
func Read(folder string) (*Store, error) {
	s := &Store{folder: folder, openWait: 10 * time.Second, now: time.Now}
	if _, err := os.Stat(s.file()); err != nil {
		if errors.Is(err, fs.ErrNotExist) {
			return nil, fmt.Errorf("no results yet in %s: %w", folder, fs.ErrNotExist)
		}
		return nil, err
	}
	return s, s.view(func(tx *bbolt.Tx) error { return checkSchema(tx) })
}

// Close gives the state folder free.
func (s *Store) Close() error {
	if s.lock == nil {
		return nil
	}
	return s.lock.release(true)
}

// Folder returns the state folder.
func (s *Store) Folder() string { return s.folder }

func (s *Store) file() string { return filepath.Join(s.folder, "platen.db") }

// prepare makes the buckets, or checks those that are there.
func (s *Store) prepare(clean bool) error {
	info, err := os.Stat(s.file())
	switch {
	case errors.Is(err, fs.ErrNotExist):
	case err != nil:
		return fmt.Errorf("store: %w", err)
	case !info.Mode().IsRegular():
		return fmt.Errorf("store: %s is not a regular file: move it away, or give another state folder with --state", s.file())
	default:
		// Look before writing: a store that is newer or damaged stays as it is.
		if err := s.view(checkSchema); err != nil {
			return err
		}
		if !clean {
			problems, err := s.Check()
			if err != nil {
				return err
			}
			if len(problems) > 0 {
				return &DamagedError{s.file(), problems[0].String()}
			}
		}
		return nil
	}
	return s.update(func(tx *bbolt.Tx) error {
		for _, b := range [][]byte{bucketMeta, bucketResults, bucketPaths, bucketSessions, bucketUnannounced, bucketOutbox} {
			if _, err := tx.CreateBucketIfNotExists(b); err != nil {
				return err
			}
		}
		return tx.Bucket(bucketMeta).Put(keySchema, fmt.Appendf(nil, "%d", schema))
	})
}

func checkSchema(tx *bbolt.Tx) error {
	b := tx.Bucket(bucketMeta)
	if b == nil {
		return errors.New("it has no meta bucket")
	}
	var n int
	if _, err := fmt.Sscanf(string(b.Get(keySchema)), "%d", &n); err != nil {
		return fmt.Errorf("its schema number %q is no number", b.Get(keySchema))
	}
	if n > schema {
		return ErrNewer
	}
	for _, name := range [][]byte{bucketResults, bucketPaths, bucketSessions, bucketUnannounced, bucketOutbox} {
		if tx.Bucket(name) == nil {
			return fmt.Errorf("it has no bucket %s", name)
		}
	}
	return nil
}

// update runs one transaction that writes. After it returns without error,
// everything in it is on disk.
func (s *Store) update(do func(*bbolt.Tx) error) error {
	return s.with(false, func(db *bbolt.DB) error { return db.Update(do) })
}

// view runs one transaction that reads.
func (s *Store) view(do func(*bbolt.Tx) error) error {
	return s.with(true, func(db *bbolt.DB) error {
		err := db.View(do)
		var newer bool
		if newer = errors.Is(err, ErrNewer); err != nil && !newer {
			var own *ownError
			if !errors.As(err, &own) {
				return &DamagedError{s.file(), err.Error()}
			}
		}
		return err
	})
}

// ownError marks an error that is no sign of damage.
type ownError struct{ err error }

func (e *ownError) Error() string { return e.err.Error() }
func (e *ownError) Unwrap() error { return e.err }

// with opens the file for one transaction. bbolt panics on some kinds of
// damage; that is an error here.
func (s *Store) with(readOnly bool, do func(*bbolt.DB) error) (err error) {
	defer func() {
		if p := recover(); p != nil {
			err = &DamagedError{s.file(), fmt.Sprint(p)}
		}
	}()
	db, err := bbolt.Open(s.file(), 0o600, &bbolt.Options{Timeout: s.openWait, ReadOnly: readOnly, FreelistType: bbolt.FreelistMapType})
	switch {
	case err == nil:
	case errors.Is(err, bbolt.ErrTimeout):
		return fmt.Errorf("store %s: another program keeps it open: close that program", s.file())
	case errors.Is(err, fs.ErrPermission), errors.Is(err, fs.ErrNotExist):
		return fmt.Errorf("store: %w", err)
	case errors.Is(err, bbolt.ErrInvalid), errors.Is(err, bbolt.ErrChecksum), errors.Is(err, bbolt.ErrVersionMismatch):
		return &DamagedError{s.file(), err.Error()}
	default:
		return fmt.Errorf("store %s: %w", s.file(), err)
	}
	defer func() {
		if cerr := db.Close(); err == nil && cerr != nil {
			err = fmt.Errorf("store %s: %w", s.file(), cerr)
		}
	}()
	return do(db)
}

func decode[T any](v []byte) (T, error) {
	var x T
	err := json.Unmarshal(v, &x)
	return x, err
}

func put(b *bbolt.Bucket, key []byte, x any) error {
	v, err := json.Marshal(x)
	if err != nil {
		return err
	}
	return b.Put(key, v)
}
