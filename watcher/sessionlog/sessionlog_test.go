package sessionlog

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"log/slog"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"platen/pipeline/run"
)

func open(t *testing.T, o Options) (*Log, *bytes.Buffer) {
	t.Helper()
	var console bytes.Buffer
	o.Console = slog.NewTextHandler(&console, nil)
	l, err := New(o)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { l.Close() })
	return l, &console
}

// One JSON object a line, with the event's name; the console gets the words
// only.
func TestEvents(t *testing.T) {
	dir := t.TempDir()
	l, console := open(t, Options{Folder: dir, MaxSizeMB: 1, Keep: 2})
	f := run.Finding{Rule: "force-drift", Severity: run.ToReview, Message: "It drifts.", Advice: "Wait."}
	l.Started("/x", "/s", "1")
	l.RunSeen("a\nb.tsv")
	l.Warning("a.tsv", "elm", f)
	l.Cleared("a.tsv", "elm", f)
	l.Verdict(run.Result{Verdict: run.Repeat, Run: run.Identity{ID: "abc", File: "a.tsv", Cell: "elm"}, Findings: []run.Finding{f}}, 1, "")
	l.FileTrouble("b.tsv", errors.New("denied"))
	l.FolderGone("/x", errors.New("away"))
	l.FolderBack("/x")
	l.Overflow()
	l.NoEvents("/x", errors.New("none"))
	l.StoreTrouble(errors.New("full"))
	l.StoreBack()
	l.Defect("c.tsv", errors.New("bug"), []byte("stack"))
	l.Cell(run.CellResult{Cell: "elm", Advice: "More."}, 1)
	l.CellTrouble("s", "elm", errors.New("no"))
	l.Stopped()
	text, err := os.ReadFile(filepath.Join(dir, FileName))
	if err != nil {
		t.Fatal(err)
	}
	want := []string{EventStarted, EventRunSeen, EventWarning, EventCleared, EventVerdict, EventFileTrouble, EventFolderGone, EventFolderBack,
		EventOverflow, EventNoEvents, EventStoreTrouble, EventStoreBack, EventDefect, EventCell, EventCellTrouble, EventStopped}
	lines := strings.Split(strings.TrimSpace(string(text)), "\n")
	if len(lines) != len(want) {
		t.Fatalf("%d lines, want %d", len(lines), len(want))
	}
	for i, line := range lines {
		var e struct{ Time, Event, Msg string }
		if err := json.Unmarshal([]byte(line), &e); err != nil {
			t.Fatalf("%s: %v", line, err)
		}
		if e.Event != want[i] || e.Msg == "" {
			t.Errorf("line %d is %q, want %q", i, e.Event, want[i])
		}
		if _, err := time.Parse(time.RFC3339Nano, e.Time); err != nil {
			t.Error(err)
		}
	}
	if !strings.Contains(lines[4], `"id":"abc"`) || !strings.Contains(lines[4], `"rule":"force-drift"`) {
		t.Errorf("the verdict lacks its evidence: %s", lines[4])
	}
	if c := console.String(); strings.Contains(c, "event=") || !strings.Contains(c, "It drifts. Wait.") || strings.Contains(c, "More.") {
		t.Errorf("the console shows\n%s", c)
	}
}

// The file is rolled by size; old parts are compressed and limited in number.
func TestRolling(t *testing.T) {
	dir := t.TempDir()
	l, _ := open(t, Options{Folder: dir, MaxSizeMB: 1, Keep: 2})
	long := strings.Repeat("x", 20_000)
	for range 260 { // 5 MB
		l.FileTrouble("a.tsv", errors.New(long))
	}
	l.Close()
	// Compressing goes on for a moment after the roll.
	for end := time.Now().Add(20 * time.Second); ; time.Sleep(20 * time.Millisecond) {
		plain, packed := 0, 0
		entries, err := os.ReadDir(dir)
		if err != nil {
			t.Fatal(err)
		}
		for _, e := range entries {
			if strings.HasSuffix(e.Name(), ".gz") {
				packed++
			} else {
				plain++
			}
		}
		if plain == 1 && packed == 2 {
			break
		}
		if time.Now().After(end) {
			t.Fatalf("%d plain and %d compressed parts, want 1 and 2", plain, packed)
		}
	}
	info, err := os.Stat(filepath.Join(dir, FileName))
	if err != nil || info.Size() > 1<<20 {
		t.Errorf("%v, %v", info, err)
	}
}

// broken is a file on a full disk.
type broken struct{ fails bool }

func (b *broken) Write(p []byte) (int, error) {
	if b.fails {
		return 0, errors.New("no space left on device")
	}
	return len(p), nil
}
func (b *broken) Close() error { return nil }

// A log that cannot be written is said once, and once that it can be again.
func TestUnwritable(t *testing.T) {
	var console bytes.Buffer
	h := slog.NewTextHandler(&console, nil)
	b := &broken{fails: true}
	f := &file{w: b, console: slog.New(words{h})}
	l := &Log{logger: slog.New(slog.NewMultiHandler(words{h}, slog.NewJSONHandler(f, nil))), file: f}
	for i := range 5 {
		l.RunSeen(fmt.Sprintf("run%d.tsv", i))
	}
	b.fails = false
	l.RunSeen("last.tsv")
	c := console.String()
	if strings.Count(c, "cannot be written") != 1 || strings.Count(c, "can be written again") != 1 || strings.Count(c, "Reading") != 6 {
		t.Errorf("the console shows\n%s", c)
	}
}
