package watcher

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"runtime/debug"
	"sync/atomic"
	"time"

	"platen/pipeline/run"
	"platen/qc"
	"platen/store"
	"platen/watcher/folder"
)

// follower reads one file as it grows. The deciding goroutine owns the fields
// above the line; a worker those below it, while busy is set.
type follower struct {
	s       *Service
	path    string // below the folder
	full    string
	first   time.Time
	told    atomic.Pointer[folder.File] // the newest that the folder tells
	known   atomic.Pointer[store.Path]  // what the store knows of the file, nil if nothing
	changed time.Time                   // when it last told of a change
	busy    bool
	again   bool // it changed while busy

	// ---- a worker's while busy, the deciding goroutine's otherwise

	due   time.Time // when to step next
	final bool      // its result is on the way or stored
	retry time.Time // final, but to be tried again then: it could not be read

	old     bool // it was finished before the service started
	started bool
	reading reading
	offset  int64
	head    []byte // the first bytes read,
	seam    []byte // and the last: they must still be there before more is read
	ending  bool   // nothing more is waited for: NUL bytes at the end are read too
	size    int64
	modTime time.Time
	grew    time.Time // when the file last changed, as far as a worker saw
	judged  time.Time
	warned  qc.Tracker
	failing time.Time // since when it cannot be read
	said    bool      // that it cannot be read
	result  *commit
}

const (
	// NUL bytes at the end that fill the seam may be room that the instrument
	// has yet to write to, and are held back; fewer are within the seam.
	seamBytes   = 256
	stepBytes   = 4 << 20 // read in one step, so that others get their turn
	readBytes   = 256 << 10
	judgeEvery  = 250 * time.Millisecond
	retryAfter  = 500 * time.Millisecond
	retryLatest = 30 * time.Second
	// A run is not given up while the whole folder is away, as a share that
	// drops, before so long.
	awayMost = time.Minute
)

// byAge orders files by when they changed, oldest first.
func byAge(f, g *follower) int {
	if c := f.changed.Compare(g.changed); c != 0 {
		return c
	}
	return f.told.Load().ModTime.Compare(g.told.Load().ModTime)
}

// safeStep steps the file; if the program itself fails on it, that is the
// file's result, and the others go on.
func (f *follower) safeStep(block []byte) {
	defer func() {
		if p := recover(); p != nil {
			f.s.c.Log.Defect(f.path, p, debug.Stack())
			f.conclude(run.Estimates{Trouble: &run.Trouble{
				Byte: f.offset, Want: "a run", Got: fmt.Sprintf("a failure of platen itself (%v)", p),
				Fix: "please report this with the file and the session log",
			}}, f.noID())
		}
	}()
	f.step(block)
}

// step reads what has been appended, through block, says what goes wrong, and
// finishes the run when it is complete.
func (f *follower) step(block []byte) {
	f.due = time.Now().Add(poll)
	if f.final && !f.reachable() {
		f.retry = time.Now().Add(retryLatest)
		return
	}
	f.final, f.retry = false, time.Time{}
	told := f.told.Load()
	if told.Odd != "" {
		f.refuse(told)
		return
	}
	file, err := f.s.c.file(f.s.base, f.path)
	if err != nil {
		f.unreachable(err)
		return
	}
	defer file.Close()
	info, err := file.Stat()
	if err != nil {
		f.unreachable(err)
		return
	}
	if !f.started {
		if f.unchanged(file, info) {
			f.final = true
			return
		}
		f.begin()
	}
	if err := f.follow(file, info, block); err != nil {
		f.unreachable(err)
		return
	}
	f.failing, f.said = time.Time{}, false
	if f.final {
		return
	}
	f.judge()
	f.finishWhenComplete(file)
}

// reachable tells whether a file that could not be read now can.
func (f *follower) reachable() bool {
	file, err := f.s.c.file(f.s.base, f.path)
	if err != nil {
		return false
	}
	file.Close()
	return true
}

// begin starts the analysis anew from the first byte.
func (f *follower) begin() {
	f.reading = f.s.c.open(f.path, f.s.c.Analysis)
	f.started, f.ending = true, false
	f.offset, f.head, f.seam = 0, nil, nil
	f.warned = qc.Tracker{}
	f.grew = time.Now()
	if !f.old {
		f.s.c.Log.RunSeen(f.path)
	}
}

// follow feeds what has been appended since the last step.
func (f *follower) follow(file *os.File, info fs.FileInfo, block []byte) error {
	same := true
	if info.Size() != f.size || !info.ModTime().Equal(f.modTime) {
		// All of it had been read, nothing was appended, and yet it changed:
		// something was written in place.
		inPlace := info.Size() == f.size && f.offset == f.size && f.offset > 0
		f.size, f.modTime = info.Size(), info.ModTime()
		f.grew = time.Now()
		same = !f.ending && !inPlace
	}
	if same {
		var err error
		if same, err = f.sameSoFar(file, info.Size()); err != nil {
			return err
		}
	}
	if !same {
		f.begin()
	}
	for fed := 0; fed < stepBytes; {
		n, err := file.ReadAt(block, f.offset)
		take := n
		if !f.ending {
			take = written(block[:n])
		}
		f.reading.Feed(block[:take])
		f.remember(block[:take])
		f.offset += int64(take)
		fed += take
		if err == io.EOF || take < n {
			f.readAll(file)
			return nil
		}
		if err != nil {
			return err
		}
	}
	f.due = time.Now() // there is more
	return nil
}

// readAll notes the state of a file that has been read to its end: rows that
// came between looking at it and reading it must not pass for a change in
// place later.
func (f *follower) readAll(file *os.File) {
	if info, err := file.Stat(); err == nil && info.Size() == f.offset && info.Size() != f.size {
		f.size, f.modTime = info.Size(), info.ModTime()
		f.grew = time.Now()
	}
}

// written returns how many bytes stand before room that may yet be written to.
func written(p []byte) int {
	n := len(bytes.TrimRight(p, "\x00"))
	if len(p)-n < seamBytes {
		return len(p)
	}
	return n
}

// sameSoFar tells whether the bytes already read are still those of the file:
// its first bytes and the last that were read.
func (f *follower) sameSoFar(file *os.File, size int64) (bool, error) {
	if size < f.offset {
		return false, nil
	}
	for _, part := range []struct {
		want []byte
		at   int64
	}{{f.head, 0}, {f.seam, f.offset - int64(len(f.seam))}} {
		got := make([]byte, len(part.want))
		if _, err := file.ReadAt(got, part.at); err != nil && err != io.EOF {
			return false, err
		}
		if !bytes.Equal(got, part.want) {
			return false, nil
		}
	}
	return true, nil
}

func (f *follower) remember(p []byte) {
	if room := seamBytes - len(f.head); room > 0 {
		f.head = append(f.head, p[:min(room, len(p))]...)
	}
	f.seam = append(f.seam, p[max(0, len(p)-seamBytes):]...)
	f.seam = bytes.Clone(f.seam[max(0, len(f.seam)-seamBytes):])
}

// judge says what goes wrong in a run that is being written.
func (f *follower) judge() {
	now := time.Now()
	if f.old || now.Sub(f.judged) < judgeEvery {
		return
	}
	f.judged = now
	e := f.reading.Estimates()
	findings := qc.Judge(e, f.s.c.Limits)
	f.s.growing.note(Growing{File: f.path, Cell: e.Header.Cell, Bytes: f.offset, Samples: e.Samples, Findings: findings})
	for _, c := range f.warned.Update(findings) {
		if c.Raised {
			f.s.c.Log.Warning(f.path, e.Header.Cell, c.Finding)
		} else {
			f.s.c.Log.Cleared(f.path, e.Header.Cell, c.Finding)
		}
	}
}

// finishWhenComplete concludes the run when its content says that it is
// complete, or when the file has been still for the settling time.
func (f *follower) finishWhenComplete(file *os.File) {
	if !f.due.After(time.Now()) {
		return // more to read
	}
	how := f.reading.Completion()
	wait := f.s.c.Settle
	if how != run.Growing {
		wait = min(endQuiet, wait)
	} else {
		how = run.BySettling
	}
	if f.old {
		wait = 0
	}
	if still := time.Since(f.grew); still < wait {
		f.due = time.Now().Add(min(poll, wait-still))
		return
	}
	if !f.ending && f.offset < f.size {
		f.ending = true
		f.due = time.Now()
		return
	}
	print, err := fingerprint(file, f.offset)
	if err != nil {
		f.unreachable(err)
		return
	}
	e, id := f.reading.Finish(how)
	f.conclude(e, id)
	f.result.entry.Fingerprint = print
}

// conclude makes the result and hands it over to be stored.
func (f *follower) conclude(e run.Estimates, id string) {
	c := f.s.c
	res := qc.Conclude(e, id, f.path, c.Limits, c.Software)
	f.result = &commit{rel: f.path, entry: store.Entry{
		Path: f.full, Size: f.size, ModTimeNs: f.modTime.UnixNano(), Result: res,
	}}
	f.final = true
	f.started, f.old = false, false
	// A folder may hold very many files that are over.
	f.reading, f.head, f.seam, f.warned = nil, nil, nil, qc.Tracker{}
	f.s.growing.forget(f.path)
}

// noID identifies a run of whose bytes nothing is known: by its name.
func (f *follower) noID() string {
	sum := sha256.Sum256([]byte("bytes not read\x00" + f.full))
	return hex.EncodeToString(sum[:])
}

// unchanged tells whether the store has the result of just these bytes.
func (f *follower) unchanged(file *os.File, info fs.FileInfo) bool {
	p := f.known.Load()
	if p == nil || p.Size != info.Size() || p.ModTimeNs != info.ModTime().UnixNano() || p.Fingerprint == "" {
		return false
	}
	print, err := fingerprint(file, info.Size())
	return err == nil && print == p.Fingerprint
}

// fingerprint identifies a file quickly: the SHA-256 of its size and of its
// first and last 4 KiB.
func fingerprint(file io.ReaderAt, size int64) (string, error) {
	const part = 4 << 10
	h := sha256.New()
	fmt.Fprintln(h, size)
	for _, at := range []int64{0, max(0, size-part)} {
		if _, err := io.Copy(h, io.NewSectionReader(file, at, min(part, size))); err != nil {
			return "", err
		}
	}
	return hex.EncodeToString(h.Sum(nil)), nil
}

// refuse stores that an entry named like a run is no file.
func (f *follower) refuse(told *folder.File) {
	fix := "give it a name that is not a run's, or exclude it under [watch] in platen.toml"
	if told.Odd == "a folder" {
		fix += "; the files in it are followed all the same"
	}
	f.size, f.modTime = 0, time.Time{}
	f.conclude(run.Estimates{Trouble: &run.Trouble{Want: "a file", Got: told.Odd, Fix: fix}}, f.noID())
}

// unreachable handles a file that cannot be opened or read: it is tried again
// with growing pauses; when it stays so for longer than the settling time, that
// is stored as its result for now.
func (f *follower) unreachable(err error) {
	now := time.Now()
	if f.failing.IsZero() {
		f.failing = now
	}
	since := now.Sub(f.failing)
	f.due = now.Add(min(retryLatest, max(retryAfter, since/2)))
	gone := errors.Is(err, fs.ErrNotExist)
	patience := f.s.c.Settle
	if errors.Is(err, errAway) {
		patience = max(patience, awayMost) // the folder says itself that it is away
	}
	if gone && !f.started {
		if since > patience || f.known.Load() != nil {
			f.final = true // it came and went before a byte was read, or had its result
		}
		return
	}
	// A virus scanner or the instrument itself may hold it for a moment.
	if !f.said && !gone && !errors.Is(err, errAway) && since >= retryAfter {
		f.said = true
		f.s.c.Log.FileTrouble(f.path, err)
	}
	if since < patience {
		return
	}
	t := run.Trouble{Byte: f.offset, Want: "a file that can be read", Got: err.Error(), IsRun: f.started,
		Fix: "give platen's user the right to read it, or close the program that keeps it locked; it is read as soon as it can be"}
	if gone {
		t.Got, t.Fix = "a file that vanished while it was being read", "export the run again; platen itself never removes a file"
	}
	if !f.started {
		f.conclude(run.Estimates{Trouble: &t}, f.noID())
	} else {
		e, id := f.reading.Finish(run.BySettling)
		e.Trouble = &t
		f.conclude(e, id)
	}
	if !gone {
		f.retry = now.Add(retryLatest)
	}
}
