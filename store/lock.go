package store

import (
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"time"

	"github.com/gofrs/flock"
)

// LockedError says that another process has the state folder.
type LockedError struct {
	Folder string
	PID    int // 0 when not known
	Host   string
	Owner  string
	Since  time.Time
}

func (e *LockedError) Error() string {
	who := "another process"
	if e.PID != 0 {
		who = fmt.Sprintf("process %d on %s", e.PID, e.Host)
		if e.Owner != "" {
			who += ", " + e.Owner
		}
		who += ", since " + e.Since.Local().Format("2006-01-02 15:04:05")
	}
	return fmt.Sprintf("the state folder %s is in use by %s: stop that one first, or give another folder with --state", e.Folder, who)
}

// lock is the ownership of a state folder: an advisory lock on platen.lock,
// which the system drops when the process dies, and beside it platen.owner,
// which says whose it is. platen.owner is there at the start only where the
// last owner did not end in order: it is also the mark of a store to be
// checked. It is a file of its own because Windows lets nobody read a byte
// that is locked.
type lock struct {
	flock *flock.Flock
	owner string // path of platen.owner
}

type ownerNote struct {
	PID   int       `json:"pid"`
	Host  string    `json:"host"`
	Owner string    `json:"owner"`
	Since time.Time `json:"since"`
}

// takeLock takes the folder. clean tells that its last owner ended in order.
func takeLock(folder, owner string) (l *lock, clean bool, err error) {
	l = &lock{flock: flock.New(filepath.Join(folder, "platen.lock")), owner: filepath.Join(folder, "platen.owner")}
	ok, err := l.flock.TryLock()
	if err != nil {
		return nil, false, &FolderError{folder, err}
	}
	if !ok {
		return nil, false, l.whose(folder)
	}
	_, err = os.Stat(l.owner)
	clean = errors.Is(err, fs.ErrNotExist)
	if err := l.sign(owner); err != nil {
		return nil, false, errors.Join(&FolderError{folder, err}, l.release(clean))
	}
	return l, clean, nil
}

// sign writes the note and waits until it is on disk, so that also after a
// power cut it tells that the store was in use.
func (l *lock) sign(owner string) error {
	host, err := os.Hostname()
	if err != nil {
		host = "this computer"
	}
	text, err := json.Marshal(ownerNote{os.Getpid(), host, owner, time.Now()})
	if err != nil {
		return err
	}
	f, err := os.OpenFile(l.owner, os.O_WRONLY|os.O_CREATE|os.O_TRUNC, 0o600)
	if err != nil {
		return err
	}
	_, err = f.Write(text)
	if err = errors.Join(err, f.Sync(), f.Close()); err != nil {
		return err
	}
	return syncFolder(filepath.Dir(l.owner))
}

// whose reads who has the folder. An owner that has only just taken it may
// still be writing its note.
func (l *lock) whose(folder string) error {
	for range 20 {
		var n ownerNote
		text, err := os.ReadFile(l.owner)
		if err == nil && json.Unmarshal(text, &n) == nil {
			return &LockedError{folder, n.PID, n.Host, n.Owner, n.Since}
		}
		time.Sleep(10 * time.Millisecond)
	}
	return &LockedError{Folder: folder}
}

// release gives the folder free. clean says that the store is in order.
func (l *lock) release(clean bool) error {
	var err error
	if clean {
		if err = os.Remove(l.owner); errors.Is(err, fs.ErrNotExist) {
			err = nil
		}
	}
	return errors.Join(err, l.flock.Unlock())
}
