// Package sessionlog writes what happens during a session: for people on the
// console and, as JSON Lines, into a rolling file in the state folder.
//
// Start with New. Each kind of event has one method, which is the one place
// where its name, level, words and attributes stand; the console shows the
// words, the file holds everything. The file is rolled by size, old parts are
// compressed and limited in number (timberjack).
//
// A log that cannot be written stops nothing: it is said once on the console,
// results are stored all the same.
package sessionlog

import (
	"context"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"os"
	"path/filepath"
	"sync"

	"github.com/DeRuina/timberjack"

	"platen/pipeline/run"
	"platen/qc/plain"
)

// Options are the choices of New.
type Options struct {
	Folder    string // of the log file; made if absent
	MaxSizeMB int    // a larger file is rolled
	Keep      int    // old parts kept
	Console   slog.Handler
}

// FileName is the name of the log file in its folder.
const FileName = "session.jsonl"

// Log is an open session log. Its methods may be called from several
// goroutines.
type Log struct {
	logger *slog.Logger
	file   *file
}

// New opens the log. It fails only without a console, which has to tell when
// the file cannot be written.
func New(o Options) (*Log, error) {
	if o.Console == nil {
		return nil, errors.New("a session log needs a console")
	}
	f := &file{
		w: &timberjack.Logger{
			Filename: filepath.Join(o.Folder, FileName), MaxSize: o.MaxSizeMB, MaxBackups: o.Keep,
			Compression: "gzip", LocalTime: false, FileMode: 0o600,
		},
		console: slog.New(words{o.Console}),
	}
	if err := os.MkdirAll(o.Folder, 0o700); err != nil {
		f.note(err)
	}
	return &Log{
		logger: slog.New(slog.NewMultiHandler(words{o.Console}, slog.NewJSONHandler(f, &slog.HandlerOptions{Level: slog.LevelDebug}))),
		file:   f,
	}, nil
}

// Close ends the log.
func (l *Log) Close() error { return l.file.w.Close() }

func (l *Log) say(level slog.Level, event, text string, attrs ...slog.Attr) {
	l.logger.LogAttrs(context.Background(), level, text, append([]slog.Attr{slog.String("event", event)}, attrs...)...)
}

// file tells the console, once, that the log cannot be written.
type file struct {
	w       io.WriteCloser
	console *slog.Logger
	mu      sync.Mutex
	broken  bool
}

func (f *file) Write(p []byte) (int, error) {
	n, err := f.w.Write(p)
	f.note(err)
	return n, err
}

func (f *file) note(err error) {
	f.mu.Lock()
	defer f.mu.Unlock()
	switch {
	case err != nil && !f.broken:
		f.broken = true
		f.console.Error("The session log cannot be written: " + err.Error() + ". Results are stored all the same; see whether the disk is full.")
	case err == nil && f.broken:
		f.broken = false
		f.console.Info("The session log can be written again.")
	}
}

// words passes only the words of an event on, not its attributes.
type words struct{ h slog.Handler }

func (w words) Enabled(ctx context.Context, l slog.Level) bool { return w.h.Enabled(ctx, l) }

func (w words) Handle(ctx context.Context, r slog.Record) error {
	return w.h.Handle(ctx, slog.NewRecord(r.Time, r.Level, r.Message, 0))
}

func (w words) WithAttrs([]slog.Attr) slog.Handler { return w }
func (w words) WithGroup(string) slog.Handler      { return w }

// Names of events, as they stand in the log file under "event".
const (
	EventStarted      = "started"
	EventStopped      = "stopped"
	EventRunSeen      = "run-seen"
	EventWarning      = "warning"
	EventCleared      = "cleared"
	EventVerdict      = "verdict"
	EventFileTrouble  = "file-trouble"
	EventFolderGone   = "folder-gone"
	EventFolderBack   = "folder-back"
	EventOverflow     = "overflow"
	EventNoEvents     = "no-events"
	EventStoreTrouble = "store-trouble"
	EventStoreBack    = "store-back"
	EventDefect       = "defect"
	EventCell         = "cell"
	EventCellTrouble  = "cell-trouble"
)

// Started says that the service has begun to watch.
func (l *Log) Started(folder, state, version string) {
	l.say(slog.LevelInfo, EventStarted, "Watching "+plain.Text(folder)+" (results are kept in "+state+")",
		slog.String("folder", folder), slog.String("state", state), slog.String("version", version))
}

// Stopped says that the service has ended in order, and how many results it
// could not store.
func (l *Log) Stopped(unstored int) {
	if unstored == 0 {
		l.say(slog.LevelInfo, EventStopped, "Stopped; everything so far is stored.")
		return
	}
	results := "results"
	if unstored == 1 {
		results = "result"
	}
	l.say(slog.LevelWarn, EventStopped, fmt.Sprintf("Stopped; %d %s could not be stored and will be made again from the files at the next start.", unstored, results),
		slog.Int("unstored", unstored))
}

// RunSeen says that a run file is being read.
func (l *Log) RunSeen(file string) {
	l.say(slog.LevelInfo, EventRunSeen, "Reading "+plain.Text(file), slog.String("file", file))
}

// Warning says what is going wrong in a run that is being written.
func (l *Log) Warning(file, cell string, f run.Finding) {
	l.say(slog.LevelWarn, EventWarning, name(file, cell)+": "+plain.Text(f.Message)+" "+plain.Text(f.Advice), finding(file, cell, f)...)
}

// Cleared says that a warning no longer holds.
func (l *Log) Cleared(file, cell string, f run.Finding) {
	l.say(slog.LevelInfo, EventCleared, name(file, cell)+": no longer: "+plain.Text(f.Message), finding(file, cell, f)...)
}

func name(file, cell string) string {
	if cell != "" {
		return plain.Text(cell) + " (" + plain.Text(file) + ")"
	}
	return plain.Text(file)
}

func finding(file, cell string, f run.Finding) []slog.Attr {
	return []slog.Attr{slog.String("file", file), slog.String("cell", cell), slog.Any("finding", f)}
}

// Verdict announces a stored result. supersedes names the file's former
// result, or is empty.
func (l *Log) Verdict(r run.Result, revision int, supersedes string) {
	level := slog.LevelInfo
	switch r.Verdict {
	case run.Review:
		level = slog.LevelWarn
	case run.Repeat:
		level = slog.LevelError
	}
	text := plain.Line(r)
	if supersedes != "" {
		text += " (the file has changed: this replaces the result " + supersedes + ")"
	}
	attrs := []slog.Attr{
		slog.String("file", r.Run.File), slog.String("cell", r.Run.Cell), slog.String("session", r.Run.Session),
		slog.String("id", r.Run.ID), slog.Int("revision", revision), slog.String("verdict", string(r.Verdict)),
	}
	if supersedes != "" {
		attrs = append(attrs, slog.String("supersedes", supersedes))
	}
	if s := plain.Headline(r); s != nil {
		attrs = append(attrs, slog.Any("segment", s))
	}
	findings := r.Findings[:min(mostFindings, len(r.Findings))] // worst first
	if left := len(r.Findings) - len(findings); left > 0 {
		attrs = append(attrs, slog.Int("findings_left_out", left))
	}
	l.say(level, EventVerdict, text, append(attrs, slog.Any("findings", findings))...)
}

// mostFindings keeps the record of a verdict far below the size of a part of
// the log, beyond which it would be refused; the store has all findings.
const mostFindings = 100

// Cell says what the runs of a cell tell together and what further run would
// help. A cell with one oscillation is told to the file only: many labs take
// one.
func (l *Log) Cell(c run.CellResult, revision int) {
	level := slog.LevelDebug
	if len(c.FrequencyModels) > 0 {
		level = slog.LevelInfo
	}
	for _, m := range c.Moduli {
		if m.Heights > 1 {
			level = slog.LevelInfo
		}
	}
	l.say(level, EventCell, "cell "+plain.Text(c.Cell)+": "+plain.CellLine(c),
		slog.String("cell", c.Cell), slog.String("session", c.Session), slog.Int("revision", revision),
		slog.Int("runs", len(c.Runs)), slog.Bool("enough", c.Enough), slog.String("advice", c.Advice))
}

// CellTrouble says that the document of a cell cannot be made.
func (l *Log) CellTrouble(session, cell string, err error) {
	l.say(slog.LevelWarn, EventCellTrouble, "The runs of cell "+plain.Text(cell)+" cannot be taken together: "+err.Error(),
		slog.String("cell", cell), slog.String("session", session), slog.String("error", err.Error()))
}

// FileTrouble says that a file cannot be read for now.
func (l *Log) FileTrouble(file string, err error) {
	l.say(slog.LevelWarn, EventFileTrouble, plain.Text(file)+" cannot be read for now: "+plain.Text(err.Error())+". It is tried again.",
		slog.String("file", file), slog.String("error", err.Error()))
}

// FolderGone says that the watched folder, or a part of it, cannot be listed.
func (l *Log) FolderGone(folder string, err error) {
	l.say(slog.LevelError, EventFolderGone, "The folder "+plain.Text(folder)+" cannot be read: "+plain.Text(err.Error())+". It is looked for again until it is back.",
		slog.String("folder", folder), slog.String("error", err.Error()))
}

// FolderBack says that it can be listed again.
func (l *Log) FolderBack(folder string) {
	l.say(slog.LevelInfo, EventFolderBack, "The folder "+plain.Text(folder)+" is back.", slog.String("folder", folder))
}

// Overflow says that file events were lost, which a sweep makes good.
func (l *Log) Overflow() {
	l.say(slog.LevelWarn, EventOverflow, "Too many file events at once: some were lost, the whole folder is looked through instead.")
}

// NoEvents says that the folder gives no file events.
func (l *Log) NoEvents(folder string, err error) {
	l.say(slog.LevelWarn, EventNoEvents, "No file events from "+plain.Text(folder)+" ("+plain.Text(err.Error())+"): it is looked through at intervals, so warnings come a little later.",
		slog.String("folder", folder), slog.String("error", err.Error()))
}

// StoreTrouble says that results cannot be stored for now.
func (l *Log) StoreTrouble(err error) {
	l.say(slog.LevelError, EventStoreTrouble, "Results cannot be stored: "+err.Error()+". They are kept and tried again; see whether the disk is full.",
		slog.String("error", err.Error()))
}

// StoreBack says that they can be stored again.
func (l *Log) StoreBack() { l.say(slog.LevelInfo, EventStoreBack, "Results can be stored again.") }

// Defect says that the program itself failed on a file.
func (l *Log) Defect(file string, what any, stack []byte) {
	text := "platen failed on " + plain.Text(file) + "; the other runs go on. Please report this with the file and the session log."
	l.say(slog.LevelError, EventDefect, text, slog.String("file", file), slog.Any("what", errors.New(asText(what))), slog.String("stack", string(stack)))
}

func asText(v any) string {
	if e, ok := v.(error); ok {
		return e.Error()
	}
	if s, ok := v.(string); ok {
		return s
	}
	return "unknown failure"
}
