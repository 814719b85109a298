package store

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"time"

	"go.etcd.io/bbolt"
)

// Options are the choices of Open. The zero value is usable.
type Options struct {
	Owner    string           // what the owner of the folder does, for others to read
	Now      func() time.Time // clock; default time.Now
	SetAside bool             // rename a damaged store and begin a new one, see Store.SetAside
}

// FolderError says that a folder cannot hold the state.
type FolderError struct {
	Folder string
	Err    error
}

func (e *FolderError) Error() string {
	return fmt.Sprintf("state folder %s: %v: give a folder on a local disk that you may write to with --state", e.Folder, e.Err)
}

func (e *FolderError) Unwrap() error { return e.Err }

// Open takes the state folder for this process, makes the store if there is
// none, and checks one that was not closed in order. The caller closes it.
//
// It fails with *LockedError where another process has the folder, with
// *FolderError where the folder cannot be used, with *SchemaError where the
// store is from a newer version, and with *DamagedError where it is damaged
// and Options.SetAside is not set. The store is unchanged in all these cases.
func Open(folder string, o Options) (*Store, error) {
	if err := os.MkdirAll(folder, 0o700); err != nil {
		return nil, &FolderError{folder, err}
	}
	l, clean, err := takeLock(folder, o.Owner)
	if err != nil {
		return nil, err
	}
	s := &Store{folder: folder, lock: l, now: o.Now, file: dbFileIn(folder), unsure: map[Ref]unsaid{}}
	if s.now == nil {
		s.now = time.Now
	}
	err = s.prepare(clean)
	if d := (*DamagedError)(nil); errors.As(err, &d) && o.SetAside {
		if err = s.setAside(); err == nil {
			s.damaged.Store(nil)
			err = s.create()
		}
	}
	if err != nil {
		return nil, errors.Join(err, l.release(clean))
	}
	return s, nil
}

// Read gives access to a store without owning it, also while a service does.
// The methods that write fail with ErrReadOnly. Read fails with fs.ErrNotExist
// where nothing has been stored yet, else as Open does.
func Read(folder string) (*Store, error) {
	s := &Store{folder: folder, file: dbFileIn(folder), now: time.Now}
	if _, err := os.Stat(s.file.path); errors.Is(err, fs.ErrNotExist) {
		return nil, fmt.Errorf("no results yet in %s: %w", folder, fs.ErrNotExist)
	} else if err != nil {
		return nil, &FolderError{folder, err}
	}
	found, err := s.inspect()
	if err != nil {
		return nil, err
	}
	if found != schema {
		return nil, &SchemaError{s.file.path, found}
	}
	return s, nil
}

// Close gives the state folder free. It waits for a transaction under way.
func (s *Store) Close() error {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.closed {
		return nil
	}
	s.closed = true
	if s.lock == nil {
		return nil
	}
	return s.lock.release(!s.doubt && s.damaged.Load() == nil)
}

// SetAside returns the name under which Open has kept a damaged store, empty
// if there was none.
func (s *Store) SetAside() string { return s.aside }

// prepare makes the store, or looks at the one that is there before anything
// is written to it.
func (s *Store) prepare(clean bool) error {
	info, err := os.Lstat(s.file.path)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		return s.create()
	case err != nil:
		return &FolderError{s.folder, err}
	case !info.Mode().IsRegular():
		return &FolderError{s.folder, errors.New("platen.db in it is not a regular file")}
	}
	// What cannot be written is said now, not at the first commit.
	if f, err := os.OpenFile(s.file.path, os.O_RDWR, 0); err != nil {
		return &FolderError{s.folder, err}
	} else if err := f.Close(); err != nil {
		return &FolderError{s.folder, err}
	}
	found, err := s.inspect()
	if err != nil {
		return err
	}
	if found > schema {
		return &SchemaError{s.file.path, found}
	}
	if found < schema {
		if err := s.update(func(tx *bbolt.Tx) error { return migrate(tx, found, migrations) }); err != nil {
			return err
		}
	}
	if clean {
		return nil
	}
	problems, err := s.Check()
	if err == nil && len(problems) > 0 {
		err = s.isDamaged(problems[0].String())
	}
	return err
}

// inspect makes sure that the pages of the file can be read without harm, and
// returns the schema number.
func (s *Store) inspect() (found int, err error) {
	if err := s.pagesInOrder(); err != nil {
		return 0, err
	}
	err = s.look(func(tx *bbolt.Tx) (err error) {
		found, err = schemaOf(tx)
		return err
	})
	return found, err
}

// create makes a store beside its final name, so that platen.db is there whole
// or not at all.
func (s *Store) create() error {
	fresh := s.file.path + ".new"
	if err := os.Remove(fresh); err != nil && !errors.Is(err, fs.ErrNotExist) {
		return &FolderError{s.folder, err}
	}
	db, err := bbolt.Open(fresh, 0o600, &bbolt.Options{Timeout: s.file.wait, FreelistType: bbolt.FreelistMapType})
	if err != nil {
		return &FolderError{s.folder, err}
	}
	err = db.Update(func(tx *bbolt.Tx) error { return migrate(tx, 0, migrations) })
	if err = errors.Join(err, db.Close()); err != nil {
		return &FolderError{s.folder, err}
	}
	if err := os.Rename(fresh, s.file.path); err != nil {
		return &FolderError{s.folder, err}
	}
	return syncFolder(s.folder)
}

// setAside renames the damaged store to a name that is free.
func (s *Store) setAside() error {
	base := s.file.path + ".damaged-" + s.now().UTC().Format("20060102T150405Z")
	name := base
	for n := 2; ; n++ {
		if _, err := os.Lstat(name); errors.Is(err, fs.ErrNotExist) {
			break
		} else if err != nil {
			return &FolderError{s.folder, err}
		}
		name = fmt.Sprintf("%s-%d", base, n)
	}
	if err := os.Rename(s.file.path, name); err != nil {
		return fmt.Errorf("setting the damaged store aside: %w: close the program that has %s open", err, filepath.Base(s.file.path))
	}
	s.aside = name
	return syncFolder(s.folder)
}
