package main

import (
	"bufio"
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"slices"
	"text/tabwriter"
	"time"

	"platen/pipeline/phantom"
	"platen/pipeline/run"
	"platen/qc/plain"
	"platen/store"
	"platen/watcher"
)

type rehearseCommand struct {
	Dir     string  `arg:"" optional:"" help:"A new or empty folder for the rehearsal. Default: a new one in the temporary folder." type:"path"`
	Speed   float64 `help:"How many times faster than real time the rig works." default:"10"`
	Seed    uint64  `help:"Another seed is another session." default:"1"`
	OnlyRig bool    `help:"Only write the runs into DIR, so that a service in another terminal can follow it."`
}

func (rehearseCommand) Help() string {
	return `No instrument is needed. Twelve runs are written a few kB at a time, as an instrument
does, into DIR/export; the real service follows them with a store in DIR/state. At the
end a table compares what was staged with what was found.

Example: platen rehearse --speed 20`
}

func (c rehearseCommand) Run(ctx context.Context, s *settings, to streams) error {
	if !(c.Speed > 0) || math.IsInf(c.Speed, 0) {
		return &exitError{exitUsage, fmt.Errorf("--speed %g: must be more than 0, such as 10", c.Speed)}
	}
	dir, err := freshFolder(c.Dir)
	if err != nil {
		return err
	}
	specs := phantom.Session(c.Seed)
	if c.OnlyRig {
		fmt.Fprintf(to.err, "The simulated rig writes %d runs into %s, %g times faster than real time.\nFollow it in another terminal: platen watch %s\n", len(specs), dir, c.Speed, dir)
		_, err := playSession(ctx, specs, dir, c.Speed)
		return err
	}
	export, state := filepath.Join(dir, "export"), filepath.Join(dir, "state")
	if err := os.Mkdir(export, 0o755); err != nil {
		return err
	}
	fmt.Fprintf(to.err, "A simulated rig writes %d runs into %s, %g times faster than real time;\nplaten watches it as it would watch yours.\n", len(specs), export, c.Speed)

	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	var truths []phantom.Truth
	rig := make(chan error, 1)
	err = follow(ctx, export, state, s, to.err, func(svc *watcher.Service) {
		go func() {
			var err error
			truths, err = playSession(ctx, specs, export, c.Speed)
			if err != nil {
				cancel()
			}
			svc.EndWhenIdle()
			rig <- err
		}()
	})
	if err != nil {
		cancel()
		<-rig
		return err
	}
	if err := <-rig; err != nil {
		if errors.Is(err, context.Canceled) {
			return &exitError{exitRepeat, errors.New("stopped before the rehearsal was over")}
		}
		return err
	}
	st, err := store.Read(state)
	if err != nil {
		return err
	}
	records, err := st.Results(store.Filter{})
	if err != nil {
		return err
	}
	asStaged, err := compare(to.out, specs, truths, records)
	if err != nil {
		return err
	}
	fmt.Fprintf(to.out, "\n%d of %d runs were judged as staged. Look again: platen results --state %s\n", asStaged, len(specs), state)
	if asStaged < len(specs) {
		return &exitError{exitRepeat, nil}
	}
	return nil
}

// freshFolder makes sure that the rehearsal mixes with nothing.
func freshFolder(dir string) (string, error) {
	if dir == "" {
		return os.MkdirTemp("", "platen-rehearsal-")
	}
	entries, err := os.ReadDir(dir)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		return dir, os.MkdirAll(dir, 0o755)
	case err != nil:
		return "", err
	case len(entries) > 0:
		return "", fmt.Errorf("%s is not empty: give a new folder, so that the rehearsal mixes with nothing", dir)
	}
	return dir, nil
}

// playSession writes the runs one after the other and returns their truths.
func playSession(ctx context.Context, specs []phantom.Spec, dir string, speed float64) ([]phantom.Truth, error) {
	var truths []phantom.Truth
	for _, spec := range specs {
		rec, err := phantom.Simulate(spec)
		if err != nil {
			return nil, err
		}
		truths = append(truths, rec.Truth())
		if err := playRun(ctx, rec, filepath.Join(dir, spec.Name+".tsv"), speed); err != nil {
			return nil, err
		}
	}
	return truths, nil
}

// playRun writes one run as an instrument does: a piece at a time, when the
// samples in it have been taken.
func playRun(ctx context.Context, rec *phantom.Recording, file string, speed float64) (err error) {
	pieces, err := rec.Export(rec.Spec().Dialect)
	if err != nil {
		return err
	}
	f, err := os.OpenFile(file, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o644)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	start := time.Now()
	for at, piece := range pieces {
		wait := time.Until(start.Add(seconds(at / speed)))
		select {
		case <-time.After(wait):
		case <-ctx.Done():
			return ctx.Err()
		}
		if _, err := f.Write(piece); err != nil {
			return err
		}
	}
	return nil
}

// compare writes the table of truth and findings, and counts the runs that were
// judged as staged: every staged fault found, nothing else held against a run.
func compare(w io.Writer, specs []phantom.Spec, truths []phantom.Truth, records []store.Record) (asStaged int, err error) {
	byFile := map[string]run.Result{}
	for _, r := range records {
		byFile[r.Result.Run.File] = r.Result
	}
	out := bufio.NewWriter(w)
	t := tabwriter.NewWriter(out, 0, 0, 2, ' ', 0)
	fmt.Fprintln(t, "\nrun\tstaged\ttension mN/m\tK′ mN/m\tK″ mN/m\tvolume pL\tfound\tverdict")
	fmt.Fprintln(t, "\t\ttruth / found\ttruth / found\ttruth / found\ttruth / found\t\t")
	for i, spec := range specs {
		r, ok := byFile[spec.Name+".tsv"]
		if !ok {
			fmt.Fprintf(t, "%s\t%s\t\t\t\t\tNO RESULT\t\n", spec.Name, staged(spec))
			continue
		}
		if judgedAsStaged(spec, r) {
			asStaged++
		}
		tr := truths[i]
		var s run.Segment
		if h := plain.Headline(r); h != nil {
			s = *h
		}
		seg := truthAt(tr, s)
		var volume *run.Quantity
		if r.Cell != nil {
			volume = r.Cell.VolumeM3
		}
		fmt.Fprintf(t, "%s\t%s\t%s\t%s\t%s\t%s\t%s\t%s\n", spec.Name, staged(spec),
			pair(seg.TensionNPerM, s.TensionNPerM, plain.MilliNewtonPerMetre),
			pair(seg.StorageNPerM, s.StorageNPerM, plain.MilliNewtonPerMetre),
			pair(seg.LossNPerM, s.LossNPerM, plain.MilliNewtonPerMetre),
			pair(tr.VolumeM3, volume, plain.Picolitre),
			rules(r.Findings), r.Verdict)
	}
	if err := t.Flush(); err != nil {
		return 0, err
	}
	return asStaged, out.Flush()
}

func staged(s phantom.Spec) string {
	switch {
	case len(s.Expect) > 0:
		return s.Expect[0]
	case s.Header.Kind == run.KindBlank:
		return "blank"
	}
	return "good cell"
}

// judgedAsStaged tells whether the staged fault was found, and a clean run
// accepted. A fault may bring others with it.
func judgedAsStaged(s phantom.Spec, r run.Result) bool {
	if len(s.Expect) == 0 {
		return r.Verdict == run.Accept
	}
	for _, rule := range s.Expect {
		if !slices.ContainsFunc(r.Findings, func(f run.Finding) bool { return f.Rule == rule && f.Severity != run.Info }) {
			return false
		}
	}
	return r.Verdict != run.Accept
}

// truthAt returns the truth of the segment that a found one overlaps most.
func truthAt(t phantom.Truth, s run.Segment) phantom.Segment {
	var best phantom.Segment
	most := 0.0
	for _, x := range t.Segments {
		if o := math.Min(x.ToS, s.ToS) - math.Max(x.FromS, s.FromS); o > most {
			best, most = x, o
		}
	}
	return best
}

func pair(truth float64, found *run.Quantity, scale float64) string {
	if truth == 0 && found == nil {
		return "—"
	}
	known := "—"
	if truth != 0 {
		known = fmt.Sprintf("%.3g", truth*scale)
	}
	return known + " / " + plain.Quantity(found, scale, "")
}
