// Package watcher is the service: it follows the export folder, analyses each
// run while it is being written, says what goes wrong, stores the result, and
// then announces the verdict.
//
// Start with New and Run. One goroutine decides (Service.Run), a few step
// through files (follower.step), one commits results (committer.run); all end
// with Run.
//
// Invariants kept here:
//   - The export folder is only read, file by file, through os.Root.
//   - A verdict is announced only after the transaction that holds it is on
//     disk; what was committed but not announced before a crash is announced
//     at the next start.
//   - Events are a hint, the sweep of package folder is the truth.
//   - One bad file stops nothing: a failure of the analysis is a result too.
package watcher

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"sync"
	"sync/atomic"
	"time"

	"platen/pipeline"
	"platen/pipeline/run"
	"platen/qc"
	"platen/store"
	"platen/watcher/folder"
	"platen/watcher/sessionlog"
)

// Store is what the service needs of the store.
type Store interface {
	// Put stores results in one transaction; without error all are on disk.
	Put(entries ...store.Entry) ([]store.Stored, error)
	// Paths returns what is known of all run files, by full path.
	Paths() (map[string]store.Path, error)
	// Unannounced returns committed results whose verdict may not have been
	// said yet.
	Unannounced() ([]store.Record, error)
	// Announced clears the marks of results whose verdict has been said.
	Announced(refs ...store.Ref) error
	// Folder names the state folder.
	Folder() string
}

// Config is what the service is made from.
type Config struct {
	Folder   string // the export folder
	Store    Store
	Log      *sessionlog.Log
	Analysis pipeline.Settings
	Limits   qc.Limits
	Software run.Software

	Settle  time.Duration // a run that declares no end is complete when still for so long
	Sweep   time.Duration
	Include []string
	Exclude []string

	Cells *Cells // makes the documents of cells; nil for none

	// Tests put others in the place of these; nil means pipeline.Open and openBelow.
	open func(name string, s pipeline.Settings) reading
	file func(folder, path string) (*os.File, error)
}

// reading is what the service needs of pipeline.Reading, which has the
// contract; tests put others in its place.
type reading interface {
	Feed([]byte)
	Completion() run.Completion
	Estimates() run.Estimates
	Finish(run.Completion) (est run.Estimates, id string)
}

// Service follows one export folder.
type Service struct {
	c       Config
	base    string // full path of the folder, with forward slashes
	folder  *folder.Folder
	known   map[string]store.Path
	files   map[string]*follower
	open    map[*follower]bool // those that are, or may become, due; the others wait to be told of
	line    []*follower        // of those the ones that are due, the one to step next last
	commits *committer
	swept   bool
	working int

	untilIdle atomic.Bool
	growing   growing
}

const (
	// A run whose content says that it is complete is finished after this much
	// quiet, so that a last comment line is not a new revision.
	endQuiet = 250 * time.Millisecond
	// Growing files are polled at this interval whatever the events say.
	poll = 100 * time.Millisecond
	// A file that was last written this long before the service started has
	// settled already.
	oldFile = time.Minute
)

// New prepares the service. The folder must exist and must not hold the state
// folder.
func New(c Config) (*Service, error) {
	base, err := filepath.Abs(c.Folder)
	if err != nil {
		return nil, err
	}
	f, err := folder.New(base, folder.Options{Sweep: c.Sweep, Include: c.Include, Exclude: c.Exclude, Notice: c.Log})
	if err != nil {
		return nil, fmt.Errorf("the export folder: %w: give the folder that the instrument writes to", err)
	}
	if err := apart(base, c.Store.Folder()); err != nil {
		return nil, err
	}
	if c.open == nil {
		c.open = func(name string, s pipeline.Settings) reading { return pipeline.Open(name, s) }
	}
	if c.file == nil {
		c.file = openBelow
	}
	return &Service{
		c: c, base: filepath.ToSlash(base), folder: f,
		files: map[string]*follower{}, open: map[*follower]bool{},
	}, nil
}

// apart makes sure that nothing is ever written below the export folder.
func apart(export, state string) error {
	state, err := filepath.Abs(state)
	if err != nil {
		return err
	}
	real := func(p string) string {
		if r, err := filepath.EvalSymlinks(p); err == nil {
			return r
		}
		return p
	}
	rel, err := filepath.Rel(real(export), real(state))
	if err == nil && rel != ".." && !strings.HasPrefix(rel, ".."+string(filepath.Separator)) {
		return fmt.Errorf("the state folder %s lies in the export folder %s, to which nothing may be written: give another one with --state", state, export)
	}
	return nil
}

// EndWhenIdle makes Run return as soon as every file in the folder has its
// final result. It may be called before Run and while it runs.
func (s *Service) EndWhenIdle() { s.untilIdle.Store(true) }

// Run follows the folder until ctx ends or, after EndWhenIdle, until every file
// has its final result. It returns nil in both cases.
func (s *Service) Run(ctx context.Context) error {
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	var err error
	if s.known, err = s.c.Store.Paths(); err != nil {
		return err
	}
	if err := s.announceLeft(); err != nil {
		return err
	}
	s.c.Log.Started(s.base, s.c.Store.Folder(), s.c.Software.Version)

	var all sync.WaitGroup
	batches := make(chan folder.Batch)
	work := make(chan *follower)
	done := make(chan *follower)
	s.commits = newCommitter(s.c.Store, s.c.Log)
	if s.c.Cells != nil {
		s.c.Cells.wake = make(chan struct{}, 1)
		s.commits.after = s.c.Cells.ran
		all.Go(func() { s.c.Cells.run(ctx) })
	}
	all.Go(func() { s.folder.Run(ctx, batches) })
	// What the workers still finish when the service ends is stored too.
	commitCtx, endCommits := context.WithCancel(context.WithoutCancel(ctx))
	defer endCommits()
	all.Go(func() { s.commits.run(commitCtx) })
	for range runtime.GOMAXPROCS(0) {
		all.Go(func() {
			block := make([]byte, readBytes)
			for f := range work {
				f.safeStep(block)
				done <- f
			}
		})
	}
	s.decide(ctx, batches, work, done)
	cancel()
	for s.working > 0 {
		s.stepped(<-done)
	}
	close(work)
	endCommits()
	all.Wait()
	s.c.Log.Stopped(s.commits.waiting())
	return nil
}

// announceLeft says the verdicts that were stored but not said before the last
// end.
func (s *Service) announceLeft() error {
	left, err := s.c.Store.Unannounced()
	if err != nil || len(left) == 0 {
		return err
	}
	var refs []store.Ref
	for _, r := range left {
		s.c.Log.Verdict(r.Result, r.Revision, "")
		refs = append(refs, r.Ref)
	}
	return s.c.Store.Announced(refs...)
}

// decide is the one place that knows all files: it takes what the folder tells,
// gives files to the workers, newest first, and passes results on.
func (s *Service) decide(ctx context.Context, batches <-chan folder.Batch, work chan<- *follower, done <-chan *follower) {
	tick := time.NewTicker(poll)
	defer tick.Stop()
	for {
		next := s.next()
		var out chan<- *follower
		if next != nil {
			out = work
		}
		select {
		case <-ctx.Done():
			return
		case b := <-batches:
			s.take(b)
		case out <- next:
			next.busy = true
			s.working++
		case f := <-done:
			s.stepped(f)
		case <-tick.C:
			s.lineUp()
		}
		s.keep(s.commits.reports())
		if s.untilIdle.Load() && s.idle() {
			return
		}
	}
}

// stepped takes a file back from a worker.
func (s *Service) stepped(f *follower) {
	f.busy = false
	s.working--
	if f.result != nil {
		s.commits.add(*f.result)
		f.result = nil
	}
	if f.again {
		f.again = false
		f.wake(time.Now())
	}
	if f.final && f.retry.IsZero() {
		delete(s.open, f)
	}
	if f.wants(time.Now()) {
		i, _ := slices.BinarySearchFunc(s.line, f, byAge)
		s.line = slices.Insert(s.line, i, f)
	}
}

// wake has a file stepped again, whatever its state.
func (f *follower) wake(now time.Time) {
	if f.busy {
		f.again = true
		return
	}
	f.final, f.retry, f.due = false, time.Time{}, now
	f.s.open[f] = true
}

// take notes what the folder tells.
func (s *Service) take(b folder.Batch) {
	s.swept = s.swept || b.Swept
	now := time.Now()
	for _, file := range b.Files {
		f := s.files[file.Path]
		if f == nil {
			f = s.follow(file)
			s.files[file.Path] = f
		}
		f.told.Store(&file)
		f.changed = now
		f.wake(now)
	}
	for _, p := range b.Gone {
		if f := s.files[p]; f != nil {
			if !f.busy && f.final {
				delete(s.files, p)
				delete(s.open, f)
				continue
			}
			f.wake(now)
		}
	}
	s.lineUp()
}

// errAway says that the export folder itself cannot be opened.
var errAway = errors.New("the export folder is away")

// openBelow opens a run file for reading. The folder is opened by its name each
// time: so one that was unmounted, replaced or made anew is taken up again, and
// nothing is held while nothing is read. os.Root also keeps to the folder
// whatever links there are, and on Windows lets the instrument rename and
// remove what is being read.
func openBelow(folder, p string) (*os.File, error) {
	root, err := os.OpenRoot(filepath.FromSlash(folder))
	if err != nil {
		return nil, fmt.Errorf("%w: %w", errAway, err)
	}
	defer root.Close()
	return root.Open(p)
}

func (s *Service) follow(file folder.File) *follower {
	f := &follower{s: s, path: file.Path, full: s.base + "/" + file.Path, first: time.Now()}
	if p, ok := s.known[f.full]; ok {
		f.known.Store(&p)
	}
	f.old = !s.swept && file.Odd == "" && time.Since(file.ModTime) > oldFile
	return f
}

// lineUp puts the files that are due in line: the one that changed last comes
// first, so that the operator's run is never behind a backlog.
func (s *Service) lineUp() {
	now := time.Now()
	s.line = s.line[:0]
	for f := range s.open {
		if !f.busy && f.wants(now) {
			s.line = append(s.line, f)
		}
	}
	slices.SortFunc(s.line, byAge)
}

// next returns the file to step next, nil where none is due.
func (s *Service) next() *follower {
	now := time.Now()
	for n := len(s.line); n > 0; n-- {
		if f := s.line[n-1]; !f.busy && s.open[f] && f.wants(now) {
			return f
		}
		s.line = s.line[:n-1]
	}
	return nil
}

// wants tells whether a file is due to be stepped.
func (f *follower) wants(now time.Time) bool {
	if f.final {
		return !f.retry.IsZero() && !f.retry.After(now)
	}
	return !f.due.After(now)
}

// keep notes what has been committed.
func (s *Service) keep(stored []commit) {
	for _, c := range stored {
		p := store.Path{Path: c.entry.Path, Size: c.entry.Size, ModTimeNs: c.entry.ModTimeNs, Fingerprint: c.entry.Fingerprint}
		s.known[c.entry.Path] = p
		if f := s.files[c.rel]; f != nil {
			f.known.Store(&p)
		}
	}
}

func (s *Service) idle() bool {
	if !s.swept || s.working > 0 || s.commits.waiting() > 0 || s.c.Cells.waiting() {
		return false
	}
	for f := range s.open {
		if !f.final {
			return false
		}
	}
	return true
}
