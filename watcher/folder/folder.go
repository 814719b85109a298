// Package folder tells which files exist below a folder and when they change.
//
// Start with New and Run. File events (fsnotify) are a hint that makes things
// quick; a sweep through the whole folder, always on, is the truth: it finds
// what events lost (a queue that overflowed, a network share, too many
// folders to watch), so no file is missed.
//
// Links are not followed: what they point at inside the folder is seen under
// its own name, and what is outside does not belong to the session. Nothing is
// ever written, opened or locked.
package folder

import (
	"context"
	"errors"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"strings"
	"time"

	"github.com/fsnotify/fsnotify"
)

// File is what the folder knows of one entry that is named like a run.
type File struct {
	Path    string // below the folder, with forward slashes
	Size    int64
	ModTime time.Time
	Odd     string // not a regular file: what it is instead ("a folder", "a link", ...)
}

// Batch is what changed at one moment.
type Batch struct {
	Files []File   // new or changed
	Gone  []string // no longer there
	Swept bool     // the whole folder was looked through
}

// Options are the choices of New.
type Options struct {
	Sweep   time.Duration // between two looks through the whole folder
	Include []string      // patterns of file names; see path.Match
	Exclude []string
	Notice  Notice
}

// Notice is told what is amiss. Its methods are called from Run's goroutine.
type Notice interface {
	FolderGone(folder string, err error)
	FolderBack(folder string)
	Overflow()
	NoEvents(folder string, err error)
}

// Folder follows one folder with its sub-folders.
type Folder struct {
	root string
	o    Options

	makeWatcher func() (*fsnotify.Watcher, error)

	watcher *fsnotify.Watcher // nil where the system gives no events
	watched map[string]bool   // folders with a watch
	silent  bool              // NoEvents has been said
	rootIs  fs.FileInfo       // the folder that is being watched

	files  map[string]seen
	lost   map[string]bool // folders that could not be listed at the last sweep
	sweeps int
}

// seen is the last known state of an entry.
type seen struct {
	File
	changed time.Time // monotonic
	sweep   int       // last sweep that saw it
}

const (
	quiet     = time.Millisecond      // events are drained until none has come for this long,
	drainMost = 5 * time.Millisecond  // but no longer than this,
	rest      = 50 * time.Millisecond // and then left alone for a while: a consumer woken by every event is all wake-ups

	// A file that has been still for stillAfter is looked at only in every
	// thoroughEvery-th sweep: a folder of ten thousand finished files then
	// costs the reading of its names.
	stillAfter    = time.Minute
	thoroughEvery = 15
)

// New prepares to follow the folder at root, which must exist.
func New(root string, o Options) (*Folder, error) {
	info, err := os.Stat(root)
	if err != nil {
		return nil, err
	}
	if !info.IsDir() {
		return nil, &fs.PathError{Op: "watch", Path: root, Err: errors.New("is not a folder")}
	}
	return &Folder{root: root, o: o, makeWatcher: newWatcher, rootIs: info, files: map[string]seen{}, lost: map[string]bool{}, watched: map[string]bool{}}, nil
}

// newWatcher makes the system's file events. The buffer carries a burst while
// the consumer is busy.
func newWatcher() (*fsnotify.Watcher, error) { return fsnotify.NewBufferedWatcher(4096) }

// Run follows the folder until ctx ends, and hands each batch over. The first
// batch is a whole sweep.
func (f *Folder) Run(ctx context.Context, changed chan<- Batch) error {
	f.listen()
	defer func() {
		if f.watcher != nil {
			f.watcher.Close()
		}
	}()
	sweep := time.NewTimer(0)
	defer sweep.Stop()
	for {
		var events <-chan fsnotify.Event
		var errs <-chan error
		if f.watcher != nil {
			events, errs = f.watcher.Events, f.watcher.Errors
		}
		var b Batch
		select {
		case <-ctx.Done():
			return nil
		case <-sweep.C:
			b = f.sweep()
			sweep.Reset(f.o.Sweep)
		case ev, ok := <-events:
			if !ok {
				f.watcher = nil
				continue
			}
			touched := map[string]bool{ev.Name: true}
			if f.drain(touched) {
				b = f.sweep()
			} else {
				b = f.look(touched)
			}
		case err, ok := <-errs:
			if !ok {
				f.watcher = nil
				continue
			}
			b = f.failed(err)
		}
		if len(b.Files)+len(b.Gone) > 0 || b.Swept {
			select {
			case changed <- b:
			case <-ctx.Done():
				return nil
			}
		}
		if !b.Swept {
			select {
			case <-time.After(rest):
			case <-ctx.Done():
				return nil
			}
		}
	}
}

// listen starts the file events, as far as the system gives any.
func (f *Folder) listen() {
	w, err := f.makeWatcher()
	if err != nil {
		f.noEvents(f.root, err)
		return
	}
	f.watcher = w
	f.watch(f.root)
}

// watch asks for the events of one folder.
func (f *Folder) watch(dir string) {
	if f.watcher == nil || f.watched[dir] {
		return
	}
	if err := f.watcher.Add(dir); err != nil {
		if !errors.Is(err, fs.ErrNotExist) {
			f.noEvents(dir, err)
		}
		return
	}
	f.watched[dir] = true
}

func (f *Folder) noEvents(dir string, err error) {
	if !f.silent {
		f.silent = true
		f.o.Notice.NoEvents(dir, err)
	}
}

// drain takes events until there is a moment of quiet. It returns true where
// the whole folder must be looked through.
func (f *Folder) drain(touched map[string]bool) (sweep bool) {
	end := time.NewTimer(drainMost)
	defer end.Stop()
	pause := time.NewTimer(quiet)
	defer pause.Stop()
	for {
		select {
		case ev, ok := <-f.watcher.Events:
			if !ok {
				f.watcher = nil
				return true
			}
			touched[ev.Name] = true
			pause.Reset(quiet)
		case err, ok := <-f.watcher.Errors:
			if !ok {
				f.watcher = nil
				return true
			}
			f.note(err)
			return true
		case <-pause.C:
			return false
		case <-end.C:
			return false
		}
	}
}

func (f *Folder) failed(err error) Batch {
	f.note(err)
	return f.sweep()
}

func (f *Folder) note(err error) {
	if errors.Is(err, fsnotify.ErrEventOverflow) {
		f.o.Notice.Overflow()
		return
	}
	f.noEvents(f.root, err)
}

// look checks the entries that events named.
func (f *Folder) look(touched map[string]bool) Batch {
	var b Batch
	for name := range touched {
		if name == f.root {
			continue
		}
		rel, err := filepath.Rel(f.root, name)
		if err != nil || rel == "." || strings.HasPrefix(rel, "..") {
			continue
		}
		info, err := os.Lstat(name)
		if err != nil {
			delete(f.watched, name)
			// With its folder gone nothing is known of the file: the sweep
			// tells a folder that was removed from one that is away.
			if _, err := os.Lstat(filepath.Dir(name)); err != nil {
				continue
			}
			if _, ok := f.files[filepath.ToSlash(rel)]; ok && errors.Is(err, fs.ErrNotExist) {
				delete(f.files, filepath.ToSlash(rel))
				b.Gone = append(b.Gone, filepath.ToSlash(rel))
			}
			continue
		}
		if info.IsDir() {
			f.descend(rel, &b, map[string]bool{})
		}
		f.consider(filepath.ToSlash(rel), info, &b)
	}
	return b
}

// sweep looks through the whole folder.
func (f *Folder) sweep() Batch {
	f.sweeps++
	b := Batch{Swept: true}
	lost := map[string]bool{}
	info, err := os.Stat(f.root)
	if err == nil && !os.SameFile(info, f.rootIs) {
		// The folder was removed and made anew, or another file system was
		// mounted over it: the old watches see nothing of it.
		f.rootIs = info
		if f.watcher != nil {
			f.watcher.Close()
			f.watched = map[string]bool{}
			f.listen()
		}
	}
	if err != nil {
		f.lose(f.root, err, lost)
		f.found(lost)
		return Batch{} // all files are away with it; nothing is known of them
	}
	f.descend(".", &b, lost)
	f.found(lost)
	for p, s := range f.files {
		if s.sweep != f.sweeps && !under(p, lost, f.root) {
			delete(f.files, p)
			b.Gone = append(b.Gone, p)
		}
	}
	return b
}

// lose says once that a folder cannot be listed.
func (f *Folder) lose(dir string, err error, lost map[string]bool) {
	lost[dir] = true
	delete(f.watched, dir)
	if !f.lost[dir] {
		f.o.Notice.FolderGone(dir, err)
	}
}

// found says that folders can be listed again.
func (f *Folder) found(lost map[string]bool) {
	for dir := range f.lost {
		if !lost[dir] {
			if _, err := os.Stat(dir); err == nil {
				f.o.Notice.FolderBack(dir)
			}
		}
	}
	f.lost = lost
}

// under tells whether a file lies in a folder that could not be listed.
func under(p string, lost map[string]bool, root string) bool {
	for dir := range lost {
		if rel, err := filepath.Rel(root, dir); err == nil && (rel == "." || strings.HasPrefix(p, filepath.ToSlash(rel)+"/")) {
			return true
		}
	}
	return false
}

// descend goes through a folder and its sub-folders.
func (f *Folder) descend(rel string, b *Batch, lost map[string]bool) {
	dir := filepath.Join(f.root, filepath.FromSlash(rel))
	f.watch(dir) // before listing: what is made in between is then seen twice, not never
	entries, err := os.ReadDir(dir)
	if err != nil && !errors.Is(err, fs.ErrNotExist) {
		f.lose(dir, err, lost)
	}
	thorough := f.sweeps%thoroughEvery == 1
	for _, e := range entries {
		p := path.Join(filepath.ToSlash(rel), e.Name())
		if e.IsDir() && !hidden(e.Name()) {
			f.descend(p, b, lost)
		}
		if s, ok := f.files[p]; ok && !thorough && e.Type().IsRegular() && s.Odd == "" && time.Since(s.changed) > stillAfter {
			s.sweep = f.sweeps
			f.files[p] = s
			continue
		}
		if !f.wanted(e.Name()) {
			continue
		}
		info, err := e.Info()
		if err != nil {
			continue // gone in between: the next sweep knows
		}
		f.consider(p, info, b)
	}
}

func hidden(name string) bool { return strings.HasPrefix(name, ".") }

// wanted tells whether a name is that of a run.
func (f *Folder) wanted(name string) bool {
	if hidden(name) || strings.HasSuffix(name, "~") {
		return false
	}
	return matches(f.o.Include, name) && !matches(f.o.Exclude, name)
}

func matches(patterns []string, name string) bool {
	for _, p := range patterns {
		// Instruments write .TSV as well as .tsv.
		if ok, _ := path.Match(strings.ToLower(p), strings.ToLower(name)); ok {
			return true
		}
	}
	return false
}

// consider adds an entry to the batch if it is a run that is new or changed.
func (f *Folder) consider(p string, info fs.FileInfo, b *Batch) {
	if !f.wanted(path.Base(p)) {
		return
	}
	now := File{Path: p, Size: info.Size(), ModTime: info.ModTime(), Odd: odd(info.Mode())}
	if now.Odd != "" {
		now.Size, now.ModTime = 0, time.Time{}
	}
	s, known := f.files[p]
	if known && s.Size == now.Size && s.ModTime.Equal(now.ModTime) && s.Odd == now.Odd {
		s.sweep = f.sweeps
		f.files[p] = s
		return
	}
	f.files[p] = seen{File: now, changed: time.Now(), sweep: f.sweeps}
	b.Files = append(b.Files, now)
}

func odd(m fs.FileMode) string {
	switch {
	case m.IsRegular():
		return ""
	case m.IsDir():
		return "a folder"
	case m&fs.ModeSymlink != 0:
		return "a link"
	case m&fs.ModeNamedPipe != 0:
		return "a pipe"
	case m&fs.ModeSocket != 0:
		return "a socket"
	case m&fs.ModeDevice != 0:
		return "a device"
	}
	return "not a regular file"
}
