package main

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"time"

	"github.com/pelletier/go-toml/v2"

	"platen/qc"
	"platen/store"
)

type preflightCommand struct {
	Dir   string `arg:"" optional:"" help:"The export folder, to be checked too." type:"path"`
	State string `help:"State folder. Default: the platform's state folder." placeholder:"DIR" type:"path"`
}

func (preflightCommand) Help() string {
	return `Prints the settings in force, then one line a check: "ok", "note" or "MEND" with what to
do. Exit status 1 when something must be mended.

Example: platen preflight /data/rig/exports`
}

func (c preflightCommand) Run(s *settings, to streams) error {
	from := "defaults; there is no platen.toml"
	if s.file != "" {
		from = "from " + s.file
	}
	text, err := toml.Marshal(s)
	if err != nil {
		return err
	}
	fmt.Fprintf(to.out, "# Settings in force (%s).\n%s\n# Rules:\n", from, bytes.TrimSpace(text))
	for _, r := range qc.Rules() {
		fmt.Fprintf(to.out, "#   %-20s %s; default: %s\n", r.Name, r.What, r.Limits)
	}
	fmt.Fprintln(to.out)
	state := c.State
	if state == "" {
		if state, err = stateFolder(); err != nil {
			return err
		}
	}
	p := &inspection{w: to.out}
	p.clock()
	if c.Dir != "" {
		p.exportFolder(c.Dir)
	} else {
		p.note("export folder", "not checked: name it, as in platen preflight /data/rig/exports")
	}
	p.stateFolder(state)
	p.watchLimit(c.Dir)
	if p.failed {
		return &exitError{code: exitRepeat}
	}
	return nil
}

// inspection writes one line a check.
type inspection struct {
	w      io.Writer
	failed bool
}

func (p *inspection) ok(what, format string, args ...any)   { p.line("ok  ", what, format, args...) }
func (p *inspection) note(what, format string, args ...any) { p.line("note", what, format, args...) }
func (p *inspection) mend(what, format string, args ...any) {
	p.failed = true
	p.line("MEND", what, format, args...)
}

func (p *inspection) line(mark, what, format string, args ...any) {
	fmt.Fprintf(p.w, "%s  %-14s %s\n", mark, what, fmt.Sprintf(format, args...))
}

// released is about when this version was made; a clock before it is wrong.
var released = time.Date(2026, 12, 1, 0, 0, 0, 0, time.UTC)

func (p *inspection) clock() {
	now := time.Now()
	if now.Before(released.AddDate(0, -1, 0)) {
		p.mend("clock", "says %s, which is before this program was made: set the computer's clock", now.Format(time.RFC3339))
		return
	}
	p.ok("clock", "%s", now.Format(time.RFC3339))
}

func (p *inspection) exportFolder(dir string) {
	entries, err := os.ReadDir(dir)
	if err != nil {
		p.mend("export folder", "%v: give the folder that the instrument writes to, and the right to read it", err)
		return
	}
	p.ok("export folder", "%s can be read (%d entries); platen never writes to it", dir, len(entries))
}

// leastFree is the space below which a session may not fit: a result is about
// 4 kB, the log some MB; the rest is a margin for other programs.
const leastFree = 1 << 30

func (p *inspection) stateFolder(state string) {
	if err := os.MkdirAll(state, 0o700); err != nil {
		p.mend("state folder", "%v: give a folder that you may write to with --state", err)
		return
	}
	probe, err := os.CreateTemp(state, ".preflight-*")
	if err != nil {
		p.mend("state folder", "%v: give a folder that you may write to with --state", err)
		return
	}
	probe.Close()
	defer os.Remove(probe.Name())
	p.ok("state folder", "%s can be written", state)
	if info, err := os.Stat(probe.Name()); err == nil {
		if d := time.Since(info.ModTime()).Abs(); d > time.Minute {
			p.mend("file times", "the state folder's file system is %s off this computer's clock: use a local disk", d.Round(time.Second))
		}
	}
	if free, err := freeSpace(state); err != nil {
		p.note("free space", "cannot be told: %v", err)
	} else if free < leastFree {
		p.mend("free space", "only %d MB left where the results go: make room", free>>20)
	} else {
		p.ok("free space", "%.1f GB where the results go", float64(free)/(1<<30))
	}
	p.store(state)
}

func (p *inspection) store(state string) {
	if _, err := os.Stat(filepath.Join(state, "platen.db")); errors.Is(err, os.ErrNotExist) {
		p.ok("store", "none yet; it is made at the first start")
		return
	}
	st, err := store.Read(state)
	if err != nil {
		p.mend("store", "%v", err)
		return
	}
	problems, err := st.Check()
	switch {
	case err != nil:
		p.mend("store", "%v", err)
	case len(problems) > 0:
		for _, x := range problems {
			p.mend("store", "%s", x)
		}
	default:
		paths, err := st.Paths()
		if err != nil {
			p.mend("store", "%v", err)
			return
		}
		p.ok("store", "in order, results of %d files", len(paths))
	}
}
