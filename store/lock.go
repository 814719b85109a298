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
	Owner  string
	Since  time.Time
}

func (e *LockedError) Error() string {
	who := "another process"
	if e.PID != 0 {
		who = fmt.Sprintf("process %d", e.PID)
		if e.Owner != "" {
			who += " (" + e.Owner + ", since " + e.Since.Local().Format("2006-01-02 15:04:05") + ")"
		}
	}
	return fmt.Sprintf("the state folder %s is in use by %s: stop that one first, or give another folder with --state", e.Folder, who)
}

// lock is the ownership of a state folder: an advisory lock on platen.lock,
// which the system drops when the process dies, and beside it platen.owner,
// which says whose it is. platen.owner is there at the start only where the
// last owner did not end in order.
type lock struct {
	flock *flock.Flock
	owner string // path of platen.owner
}

type ownerNote struct {
	PID   int       `json:"pid"`
	Owner string    `json:"owner"`
	Since time.Time `json:"since"`
}

func takeLock(folder, owner string) (l *lock, clean bool, err error) {
	l = &lock{flock: flock.New(filepath.Join(folder, "platen.lock")), owner: filepath.Join(folder, "platen.owner")}
	ok, err := l.flock.TryLock()
	if err != nil {
		return nil, false, fmt.Errorf("state folder %s: cannot be locked: %w: give a folder on a local disk that you may write to with --state", folder, err)
	}
	note, readErr := os.ReadFile(l.owner)
	if !ok {
		e := &LockedError{Folder: folder}
		var n ownerNote
		if readErr == nil && json.Unmarshal(note, &n) == nil {
			e.PID, e.Owner, e.Since = n.PID, n.Owner, n.Since
		}
		return nil, false, e
	}
	clean = errors.Is(readErr, fs.ErrNotExist)
	text, err := json.Marshal(ownerNote{os.Getpid(), owner, time.Now()})
	if err == nil {
		err = os.WriteFile(l.owner, text, 0o600)
	}
	if err != nil {
		l.flock.Unlock()
		return nil, false, fmt.Errorf("state folder %s: %w: give a folder that you may write to with --state", folder, err)
	}
	return l, clean, nil
}

// release gives the folder free. clean says that the store was left in order.
func (l *lock) release(clean bool) error {
	var err error
	if clean {
		if err = os.Remove(l.owner); errors.Is(err, fs.ErrNotExist) {
			err = nil
		}
	}
	return errors.Join(err, l.flock.Unlock())
}
