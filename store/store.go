// Package store keeps every result of a rig in one bbolt file.
//
// Start with Open, which takes the state folder for one service, and Put,
// which stores results in one transaction. Read opens the same file for a
// look while a service runs.
//
// The state folder holds platen.db, platen.lock (held as long as a service
// has the folder), platen.owner (who that is; left behind by a crash) and
// platen.turn (held by whoever is next to open platen.db).
// platen.db has these buckets; a value is JSON, a line end, and the CRC-32C of
// key and JSON in hexadecimal, so that a spoiled value is never taken for a
// result:
//
//	meta         "schema" -> number of this layout
//	results      "<id>/<revision>" -> Record: the document and what became of it
//	paths        path of a run file -> Path: size, time, current and earlier results
//	sessions     "<session> NUL <start> <arrival>" -> key in results
//	cells        "<cell> NUL <start> <arrival>" -> key in results
//	verdicts     "<verdict> NUL <start> <arrival>" -> key in results
//	starts       "NUL <start> <arrival>" -> key in results
//	unannounced  key in results -> nothing: committed, but not yet said on the console
//	outbox       "<id>/<revision>/<kind>" -> Event: alerts due
//	celldocuments  "<hash of session and cell>/<revision>" -> CellRecord; made when first needed
//
// The id of a result is the SHA-256 of the run's bytes. Documents that differ
// though the bytes are the same (other settings, another version) are further
// revisions of one id. A path points at its current result and keeps the
// earlier ones; the same bytes under two names are one result. A result is
// superseded once no path has it as its current one.
//
// Invariants kept here:
//   - What Put has returned is on disk; what it has not returned is wholly
//     there or wholly absent.
//   - Storing the same thing again changes nothing.
//   - A store that cannot be understood is never changed, and never emptied.
//   - Damage to the file is an error, never a crash and never a wrong result.
//
// The file is opened for each transaction and closed after it, so that others
// can read between commits: bbolt locks a file as long as it is open. This
// costs less than a commit does (BenchmarkOpenPerCommit). Who owns the state
// folder is settled by a lock file of its own, held all along.
//
// Left out: free space and write permission before a commit (platen
// preflight), delivery of events (watcher/alert), archives (store/archive).
package store

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"runtime/debug"
	"sync"
	"sync/atomic"
	"time"

	"go.etcd.io/bbolt"
)

// Store is an open state folder. Its methods may be called from several
// goroutines.
type Store struct {
	folder string
	lock   *lock // nil when only reading
	now    func() time.Time
	aside  string
	file   dbFile

	mu      sync.RWMutex // held for writing by a transaction that writes
	closed  bool
	damaged atomic.Pointer[DamagedError] // set for good once damage has been met
	doubt   bool                         // the last commit failed: check before the next
	unsure  map[Ref]unsaid               // results of failed commits, which may be there all the same
}

// dbFile is how the database file is reached; tests make its steps fail.
type dbFile struct {
	path   string
	turn   string        // the lock file of the line before it
	wait   time.Duration // for others who have it open
	open   func(name string, flag int, perm os.FileMode) (*os.File, error)
	commit func(*bbolt.DB, func(*bbolt.Tx) error) error
}

func dbFileIn(folder string) dbFile {
	return dbFile{
		path:   filepath.Join(folder, "platen.db"),
		turn:   filepath.Join(folder, "platen.turn"),
		wait:   10 * time.Second,
		open:   os.OpenFile,
		commit: (*bbolt.DB).Update,
	}
}

// ErrClosed says that the store has been closed.
var ErrClosed = errors.New("the store is closed")

// ErrReadOnly says that a store opened with Read was to be changed.
var ErrReadOnly = errors.New("the store was opened for reading only")

// DamagedError says that the store cannot be understood. It has not been
// changed.
type DamagedError struct {
	File   string
	Reason string
}

func (e *DamagedError) Error() string {
	return fmt.Sprintf("the store %s is damaged (%s); nothing was changed: keep it by renaming it (for instance to %s.damaged) and start again, platen then analyses the files that are still in the export folder anew",
		e.File, e.Reason, filepath.Base(e.File))
}

// damage is met inside a transaction; it leaves the package as a DamagedError.
type damage string

func (d damage) Error() string { return string(d) }

func damagef(format string, args ...any) error { return damage(fmt.Sprintf(format, args...)) }

// Folder returns the state folder.
func (s *Store) Folder() string { return s.folder }

// update runs one transaction that writes. After it returns without error,
// everything in it is on disk.
func (s *Store) update(do func(*bbolt.Tx) error) error {
	if s.lock == nil {
		return ErrReadOnly
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	if err := s.usable(); err != nil {
		return err
	}
	// A commit that failed may have left the file in any state that the
	// system's cache and the disk do not agree on.
	if s.doubt {
		problems, err := s.check()
		if err == nil && len(problems) > 0 {
			err = s.isDamaged(problems[0].String())
		}
		if err != nil {
			return fmt.Errorf("looking at the store after a failed commit: %w", err)
		}
		s.doubt = false
	}
	ready := false
	err := s.with(false, func(db *bbolt.DB) error {
		return s.file.commit(db, func(tx *bbolt.Tx) error {
			err := do(tx)
			ready = err == nil
			return err
		})
	})
	if ready && err != nil {
		s.doubt = true
		return fmt.Errorf("the commit failed, nothing of it counts as stored: %w: is the disk full or failing?", err)
	}
	return err
}

// view runs one transaction that reads. It should be brief: nobody can commit
// meanwhile.
func (s *Store) view(do func(*bbolt.Tx) error) error {
	s.mu.RLock()
	defer s.mu.RUnlock()
	if err := s.usable(); err != nil {
		return err
	}
	return s.look(do)
}

func (s *Store) look(do func(*bbolt.Tx) error) error {
	return s.with(true, func(db *bbolt.DB) error { return db.View(do) })
}

func (s *Store) usable() error {
	if s.closed {
		return ErrClosed
	}
	if e := s.damaged.Load(); e != nil {
		return e
	}
	return nil
}

func (s *Store) isDamaged(reason string) error {
	e := &DamagedError{s.file.path, reason}
	s.damaged.Store(e)
	return e
}

// with opens the file for one transaction. On damaged pages bbolt panics or
// reads where no memory is; both are errors here.
func (s *Store) with(readOnly bool, do func(*bbolt.DB) error) (err error) {
	var file *os.File
	var size int64
	defer debug.SetPanicOnFault(debug.SetPanicOnFault(true))
	defer func() {
		if p := recover(); p != nil {
			// bbolt's own Close could wait for ever for locks that the panic
			// left taken; closing the file gives it free for others.
			if file != nil {
				file.Close()
			}
			err = s.isDamaged(fmt.Sprint(p))
		}
	}()
	db, err := s.file.openInTurn(bbolt.Options{
		ReadOnly: readOnly, FreelistType: bbolt.FreelistMapType,
		OpenFile: func(name string, flag int, perm os.FileMode) (*os.File, error) {
			// bbolt would make a store where there is none and fill an empty
			// file: both would be a store emptied in silence.
			f, err := s.file.open(name, flag&^os.O_CREATE, perm)
			if err != nil {
				return nil, err
			}
			info, err := f.Stat()
			switch {
			case err != nil:
			case !info.Mode().IsRegular():
				err = damage("it is not a regular file")
			case info.Size() == 0:
				err = damage("it is empty")
			}
			if err != nil {
				f.Close()
				return nil, err
			}
			file, size = f, info.Size()
			return f, nil
		},
	})
	if err == nil {
		err = do(db)
		if cerr := db.Close(); err == nil && cerr != nil {
			err = fmt.Errorf("store %s: %w", s.file.path, cerr)
		}
	} else if errors.Is(err, bbolt.ErrInvalid) || errors.Is(err, bbolt.ErrChecksum) || errors.Is(err, bbolt.ErrVersionMismatch) {
		err = damage(err.Error())
	} else if errors.Is(err, bbolt.ErrTimeout) {
		err = fmt.Errorf("store %s: another program keeps it open: close that program", s.file.path)
	} else if file != nil && size < int64(4*os.Getpagesize()) {
		err = damagef("it is cut short: %d bytes", size) // bbolt begins with 4 pages
	} else if errors.Is(err, fs.ErrNotExist) {
		err = fmt.Errorf("the store has vanished: %w: put it back, or stop platen and start it again to make a new one", err)
	} else if d := damage(""); !errors.As(err, &d) {
		err = fmt.Errorf("store: %w", err)
	}
	if d := damage(""); errors.As(err, &d) {
		return s.isDamaged(err.Error())
	}
	return err
}
