package sessionlog

import (
	"bufio"
	"bytes"
	"compress/gzip"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"log/slog"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"go.uber.org/goleak"

	"platen/pipeline/run"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

// console keeps what people see.
type console struct {
	mu sync.Mutex
	b  bytes.Buffer
}

func (c *console) Write(p []byte) (int, error) {
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.b.Write(p)
}

func (c *console) String() string {
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.b.String()
}

func open(t *testing.T, dir string, keep int) (*Log, *console) {
	t.Helper()
	c := &console{}
	l, err := New(Options{Folder: dir, MaxSizeMB: 1, Keep: keep, Console: slog.NewTextHandler(c, nil)})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { l.Close() })
	return l, c
}

// records reads a log file; every line must be one whole record.
func records(t *testing.T, r io.Reader) []map[string]any {
	t.Helper()
	var out []map[string]any
	sc := bufio.NewScanner(r)
	sc.Buffer(nil, 2<<20)
	for sc.Scan() {
		var rec map[string]any
		if err := json.Unmarshal(sc.Bytes(), &rec); err != nil {
			t.Fatalf("%v: %.200q", err, sc.Text())
		}
		out = append(out, rec)
	}
	if err := sc.Err(); err != nil {
		t.Fatal(err)
	}
	return out
}

// Every event is one record with its name and what a program needs of it; the
// console has the words only. The names and attributes are read by others, so
// they stand here a second time.
func TestEvents(t *testing.T) {
	dir := t.TempDir()
	l, c := open(t, dir, 2)
	f := run.Finding{Rule: "low-snr", Severity: run.ToReview, Message: "It is weak.", Advice: "Make it strong."}
	res := run.Result{Verdict: run.Repeat, Run: run.Identity{ID: "abc", File: "a.tsv", Cell: "K7", Session: "s"}, Findings: []run.Finding{f}}
	bad := errors.New("it broke")
	l.Started("/in", "/state", "1")
	l.RunSeen("a.tsv")
	l.Warning("a.tsv", "K7", f)
	l.Cleared("a.tsv", "K7", f)
	l.Verdict(res, 2, "abc/1")
	l.Cell(run.CellResult{Cell: "K7", Session: "s"}, 1)
	l.CellTrouble("s", "K7", bad)
	l.FileTrouble("a.tsv", bad)
	l.FolderGone("/in", bad)
	l.FolderBack("/in")
	l.Overflow()
	l.NoEvents("/in", bad)
	l.StoreTrouble(bad)
	l.StoreBack()
	l.Defect("a.tsv", "index out of range", []byte("goroutine 1"))
	l.Stopped(0)
	l.Stopped(3)
	file, err := os.Open(filepath.Join(dir, FileName))
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	want := []string{
		"started: folder state version", "run-seen: file", "warning: cell file finding", "cleared: cell file finding",
		"verdict: cell file findings id revision session supersedes verdict",
		"cell: advice cell enough revision runs session", "cell-trouble: cell error session",
		"file-trouble: error file", "folder-gone: error folder", "folder-back: folder", "overflow:", "no-events: error folder",
		"store-trouble: error", "store-back:", "defect: file stack what", "stopped:", "stopped: unstored",
	}
	got := records(t, file)
	if len(got) != len(want) {
		t.Fatalf("%d records, want %d", len(got), len(want))
	}
	for i, rec := range got {
		if _, err := time.Parse(time.RFC3339Nano, fmt.Sprint(rec["time"])); err != nil {
			t.Error(err)
		}
		var names []string
		for k := range rec {
			if !slices.Contains([]string{"time", "level", "msg", "event"}, k) {
				names = append(names, k)
			}
		}
		slices.Sort(names)
		if s := strings.TrimSpace(fmt.Sprintf("%v: %s", rec["event"], strings.Join(names, " "))); s != want[i] {
			t.Errorf("record %d is %q, want %q", i, s, want[i])
		}
	}
	seen := c.String()
	for _, words := range []string{"It is weak. Make it strong.", "REPEAT  K7 (a.tsv)", "replaces the result abc/1", "3 results could not be stored"} {
		if !strings.Contains(seen, words) {
			t.Errorf("the console does not show %q:\n%s", words, seen)
		}
	}
	if strings.Contains(seen, "goroutine 1") || strings.Contains(seen, "event=") {
		t.Errorf("the console shows what is for programs:\n%s", seen)
	}
}

// The file is rolled by size; old parts are compressed and limited in number,
// and every record in them is whole.
func TestRolled(t *testing.T) {
	dir := t.TempDir()
	const keep = 2
	l, c := open(t, dir, keep)
	long := strings.Repeat("x", 2000)
	for i := range 2500 { // some 11 MB, as the words hold the name a second time
		l.RunSeen(fmt.Sprintf("%s%d.tsv", long, i))
	}
	var parts []string
	for end := time.Now().Add(20 * time.Second); ; time.Sleep(10 * time.Millisecond) {
		parts, _ = filepath.Glob(filepath.Join(dir, "session-*"))
		if len(parts) == keep && !slices.ContainsFunc(parts, func(p string) bool { return !strings.HasSuffix(p, ".gz") }) {
			break
		}
		if time.Now().After(end) {
			t.Fatalf("old parts: %q", parts)
		}
	}
	for _, p := range parts {
		f, err := os.Open(p)
		if err != nil {
			t.Fatal(err)
		}
		z, err := gzip.NewReader(f)
		if err != nil {
			t.Fatal(err)
		}
		if n := len(records(t, z)); n < 100 {
			t.Errorf("%s has %d records", p, n)
		}
		f.Close()
	}
	info, err := os.Stat(filepath.Join(dir, FileName))
	if err != nil || info.Size() > 1<<20 {
		t.Errorf("%v %v", info.Size(), err)
	}
	if strings.Contains(c.String(), "cannot be written") {
		t.Error(c)
	}
}

// A log that cannot be written stops nothing: it is said once, and once more
// when it is well again.
func TestCannotBeWritten(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "log")
	if err := os.WriteFile(dir, nil, 0o644); err != nil { // a file in the place of the folder
		t.Fatal(err)
	}
	l, c := open(t, dir, 2)
	l.RunSeen("a.tsv")
	l.RunSeen("b.tsv")
	if n := strings.Count(c.String(), "session log cannot be written"); n != 1 {
		t.Errorf("said %d times:\n%s", n, c)
	}
	if !strings.Contains(c.String(), "Reading b.tsv") {
		t.Errorf("the console has stopped:\n%s", c)
	}
	if err := os.Remove(dir); err != nil {
		t.Fatal(err)
	}
	l.RunSeen("c.tsv")
	if !strings.Contains(c.String(), "can be written again") {
		t.Errorf("%s", c)
	}
	b, err := os.ReadFile(filepath.Join(dir, FileName))
	if err != nil || !bytes.Contains(b, []byte("c.tsv")) {
		t.Errorf("%v %s", err, b)
	}
}

// timberjack refuses a record larger than a whole part (libraries.md, sharp
// edge 9, restated here), so a verdict with very many findings names the worst
// and how many are left out; the store has them all.
func TestVeryManyFindings(t *testing.T) {
	dir := t.TempDir()
	l, c := open(t, dir, 2)
	f := run.Finding{Rule: "sample-gap", Severity: run.ToReview, Message: strings.Repeat("m", 300), Advice: "Repeat."}
	const n = 20000
	l.Verdict(run.Result{Verdict: run.Review, Run: run.Identity{File: "a.tsv"}, Findings: slices.Repeat([]run.Finding{f}, n)}, 1, "")
	file, err := os.Open(filepath.Join(dir, FileName))
	if err != nil {
		t.Fatal(err, c)
	}
	defer file.Close()
	rec := records(t, file)
	if len(rec) != 1 {
		t.Fatalf("%d records; the console shows %s", len(rec), c)
	}
	told, _ := rec[0]["findings"].([]any)
	left, _ := rec[0]["findings_left_out"].(float64)
	if len(told) == 0 || len(told)+int(left) != n {
		t.Errorf("%d findings and %v left out, want %d together", len(told), left, n)
	}
}
