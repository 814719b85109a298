// Package folder tells which files exist below a folder and when they change.
//
// Start with New and Run. File events (fsnotify) are a hint that makes things
// quick; a sweep through the whole folder, always on, is the truth: it finds
// what events lost (a queue that overflowed, a network share, too many
// folders to watch), so no file is missed.
//
// A link to a file inside the folder is that file under a second name. A link
// to a folder is not gone into, since what it points at inside is seen under
// its own name, so loops cannot be entered; what is outside does not belong to
// the session. Nothing is ever written, and no file is opened or locked.
package folder

import (
	"context"
	"errors"
	"io/fs"
	"maps"
	"os"
	"path"
	"path/filepath"
	"slices"
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

// Options are the choices of New. Notice must be given.
type Options struct {
	Sweep   time.Duration // between two looks through the whole folder; 0 means two seconds
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
	root   string
	o      Options
	list   func(dir string) ([]fs.DirEntry, error) // os.ReadDir, and
	events func() (*fsnotify.Watcher, error)       // the system's, unless a test puts others in their place

	watcher *fsnotify.Watcher // nil where the system gives no events
	watched map[string]bool   // folders with a watch
	silent  bool              // NoEvents has been said
	rootIs  fs.FileInfo       // the folder that is being watched

	files  map[string]*seen
	lost   map[string]bool // folders that could not be listed at the last sweep
	sweeps int
}

// seen is the last known state of an entry.
type seen struct {
	File
	mode    fs.FileMode // rights that are given back do not show in size and time
	changed time.Time   // monotonic
	sweep   int         // last sweep that saw it
	anew    bool        // to be told again though nothing seems to have changed
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

	usualSweep = 2 * time.Second
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
	if o.Sweep <= 0 {
		o.Sweep = usualSweep
	}
	return &Folder{
		root: filepath.Clean(root), o: o, rootIs: info,
		list:   os.ReadDir,
		events: func() (*fsnotify.Watcher, error) { return fsnotify.NewBufferedWatcher(4096) },
		files:  map[string]*seen{}, lost: map[string]bool{}, watched: map[string]bool{},
	}, nil
}

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
			touched := map[string]bool{}
			f.touch(ev, touched)
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
	w, err := f.events()
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

// touch notes the name of an event. A folder that was made, moved or removed
// may be another one by now, of which the watch sees nothing.
func (f *Folder) touch(ev fsnotify.Event, touched map[string]bool) {
	touched[ev.Name] = true
	if f.watched[ev.Name] && ev.Op&(fsnotify.Create|fsnotify.Remove|fsnotify.Rename) != 0 {
		f.anew(ev.Name)
	}
}

// anew has a folder, with all below it, watched again and its files told again:
// what became of them while it was away cannot be known from size and time.
func (f *Folder) anew(dir string) {
	for d := range f.watched {
		if within(d, dir) {
			delete(f.watched, d)
		}
	}
	for p, s := range f.files {
		if within(filepath.Join(f.root, filepath.FromSlash(p)), dir) {
			s.anew = true
		}
	}
}

// within tells whether a path is dir or lies below it.
func within(p, dir string) bool {
	rest, ok := strings.CutPrefix(p, dir)
	return ok && (rest == "" || os.IsPathSeparator(rest[0]) || os.IsPathSeparator(dir[len(dir)-1]))
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
			f.touch(ev, touched)
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
		if err != nil || rel == "." || hiddenPath(rel) { // ".." too
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
			lost := map[string]bool{}
			f.descend(rel, &b, lost)
			maps.Copy(f.lost, lost) // said already; the sweep sees when they are back
		}
		f.consider(filepath.ToSlash(rel), info, &b)
	}
	// An entry may have gone and come, or come and gone, while its folder and
	// itself were looked at: it is told as it is known now.
	b.Gone = slices.DeleteFunc(b.Gone, func(p string) bool { return f.files[p] != nil })
	b.Files = slices.DeleteFunc(b.Files, func(x File) bool { s := f.files[x.Path]; return s == nil || s.File != x })
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
		f.anew(f.root)
		if f.watcher != nil {
			f.watcher.Close()
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
		if s.sweep != f.sweeps && !f.under(p, lost) {
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
func (f *Folder) under(p string, lost map[string]bool) bool {
	full := filepath.Join(f.root, filepath.FromSlash(p))
	for dir := range lost {
		if within(full, dir) {
			return true
		}
	}
	return false
}

// descend goes through a folder and its sub-folders.
func (f *Folder) descend(rel string, b *Batch, lost map[string]bool) {
	dir := filepath.Join(f.root, filepath.FromSlash(rel))
	f.watch(dir) // before listing: what is made in between is then seen twice, not never
	entries, err := f.list(dir)
	switch {
	case err == nil && f.lost[dir]:
		f.anew(dir)
		f.watch(dir)
	case err != nil && !errors.Is(err, fs.ErrNotExist):
		f.lose(dir, err, lost)
	}
	below := "" // path.Join would cost more than all the rest
	if rel != "." {
		below = filepath.ToSlash(rel) + "/"
	}
	thorough := f.sweeps%thoroughEvery == 1
	for _, e := range entries {
		p := below + e.Name()
		if e.IsDir() && !hidden(e.Name()) {
			f.descend(p, b, lost)
		}
		if s, ok := f.files[p]; ok && !thorough && e.Type().IsRegular() && s.Odd == "" && !s.anew && time.Since(s.changed) > stillAfter {
			s.sweep = f.sweeps
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

// hiddenPath tells whether any part of a path is hidden: events name what the
// sweep would not go into.
func hiddenPath(rel string) bool {
	for part := range strings.SplitSeq(filepath.ToSlash(rel), "/") {
		if hidden(part) {
			return true
		}
	}
	return false
}

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
	if info.Mode()&fs.ModeSymlink != 0 {
		info = f.pointedAt(p, info)
	}
	now := File{Path: p, Size: info.Size(), ModTime: info.ModTime(), Odd: odd(info.Mode())}
	if now.Odd != "" {
		now.Size, now.ModTime = 0, time.Time{}
	}
	s, known := f.files[p]
	if known && !s.anew && s.Size == now.Size && s.ModTime.Equal(now.ModTime) && s.mode == info.Mode() {
		s.sweep = f.sweeps
		return
	}
	f.files[p] = &seen{File: now, mode: info.Mode(), changed: time.Now(), sweep: f.sweeps}
	b.Files = append(b.Files, now)
}

// pointedAt returns the file that a link points at inside the folder, or the
// link itself where there is none: the rules are those of os.Root, through
// which the file will be read (no link out of the folder, no absolute one).
func (f *Folder) pointedAt(p string, link fs.FileInfo) fs.FileInfo {
	root, err := os.OpenRoot(f.root)
	if err != nil {
		return link
	}
	defer root.Close()
	if info, err := root.Stat(filepath.FromSlash(p)); err == nil && info.Mode().IsRegular() {
		return info
	}
	return link
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
