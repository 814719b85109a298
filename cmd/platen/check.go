package main

import (
	"bufio"
	"encoding/json"
	"fmt"
	"io"
	"os"
	"path/filepath"

	"platen/pipeline"
	"platen/pipeline/run"
	"platen/qc"
	"platen/qc/plain"
)

type checkCommand struct {
	Files []string `arg:"" name:"file" help:"Run files."`
	JSON  bool     `help:"Print the result documents, one a line."`
}

func (checkCommand) Help() string {
	return `Exit status: 0 when every run is accept or review, 1 when any is repeat, 2 when
a file could not be read as a run.

Example: platen check --json exports/*.tsv > results.jsonl`
}

func (c checkCommand) Run(s *settings, to streams) error {
	out := bufio.NewWriter(to.out)
	defer out.Flush()
	code := exitOK
	for i, file := range c.Files {
		res, err := checkFile(file, s)
		if err != nil {
			fmt.Fprintln(to.err, "platen:", err)
			code = exitUnreadable
			continue
		}
		switch {
		case unreadable(res):
			code = exitUnreadable
		case res.Verdict == run.Repeat && code == exitOK:
			code = exitRepeat
		}
		if c.JSON {
			if err := json.NewEncoder(out).Encode(res); err != nil {
				return fmt.Errorf("printing the result of %s: %w", file, err)
			}
			continue
		}
		if i > 0 {
			fmt.Fprintln(out)
		}
		if err := plain.Summary(out, res); err != nil {
			return err
		}
	}
	if code != exitOK {
		return &exitError{code: code}
	}
	return nil
}

// checkFile takes a finished file down the same road as a growing one.
func checkFile(file string, s *settings) (run.Result, error) {
	const give = "give the path of a run file that exists and that you may read"
	// Looked at before it is opened: opening a pipe would wait for a writer.
	switch info, err := os.Stat(file); {
	case err != nil:
		return run.Result{}, fmt.Errorf("%w: %s", err, give)
	case info.IsDir():
		return run.Result{}, fmt.Errorf("%s is a folder: give the run files in it, or follow it with platen watch", file)
	case !info.Mode().IsRegular():
		return run.Result{}, fmt.Errorf("%s is not a regular file: %s", file, give)
	}
	f, err := os.Open(file)
	if err != nil {
		return run.Result{}, fmt.Errorf("%w: %s", err, give)
	}
	defer f.Close()
	name := filepath.ToSlash(file)
	r := pipeline.Open(name, s.Analysis)
	block := make([]byte, 256<<10)
	for {
		n, err := f.Read(block)
		r.Feed(block[:n])
		if err == io.EOF {
			break
		}
		if err != nil {
			return run.Result{}, fmt.Errorf("reading %s at byte %d: %w", file, r.Bytes(), err)
		}
	}
	how := r.Completion()
	if how == run.Growing {
		how = run.BySettling // a finished file has settled
	}
	est, id := r.Finish(how)
	return qc.Conclude(est, id, name, s.Limits, s.software()), nil
}

func unreadable(r run.Result) bool {
	for _, f := range r.Findings {
		if f.Rule == "unreadable" {
			return true
		}
	}
	return false
}
