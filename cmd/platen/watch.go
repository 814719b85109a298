package main

import (
	"context"
	"fmt"
	"io"
	"log/slog"
	"os"
	"path/filepath"
	"time"

	"github.com/lmittmann/tint"

	"platen/store"
	"platen/watcher"
	"platen/watcher/sessionlog"
)

type watchCommand struct {
	Dir       string `arg:"" help:"The folder that the instrument exports to. It is only read." type:"path"`
	State     string `help:"State folder: the store and the session log. Default: the platform's state folder." placeholder:"DIR" type:"path"`
	UntilIdle bool   `help:"End with status 0 once every file in the folder has its final result."`
}

func (watchCommand) Help() string {
	return `Follows DIR and its sub-folders until it is stopped (Ctrl-C, SIGTERM). Warnings come
while a run is being written, the verdict when it is complete. Stopped or killed, it
goes on at the next start where it was.

Example: platen watch /data/rig/exports`
}

func (c watchCommand) Run(ctx context.Context, s *settings, to streams) error {
	state := c.State
	if state == "" {
		var err error
		if state, err = stateFolder(); err != nil {
			return err
		}
	}
	return follow(ctx, c.Dir, state, s, to.err, func(svc *watcher.Service) {
		if c.UntilIdle {
			svc.EndWhenIdle()
		}
	})
}

// follow runs the service on a folder until ctx ends or the service does.
// ready is called with it before it starts.
func follow(ctx context.Context, dir, state string, s *settings, console io.Writer, ready func(*watcher.Service)) (err error) {
	st, err := store.Open(state, store.Options{Owner: "watching " + dir})
	if err != nil {
		return err
	}
	defer func() {
		if cerr := st.Close(); err == nil {
			err = cerr
		}
	}()
	log, err := sessionlog.New(sessionlog.Options{
		Folder: filepath.Join(state, "log"), MaxSizeMB: s.Log.MaxSizeMB, Keep: s.Log.Keep,
		Console: consoleHandler(console),
	})
	if err != nil {
		return fmt.Errorf("the session log: %w", err)
	}
	defer log.Close()
	svc, err := watcher.New(watcher.Config{
		Folder: dir, Store: st, Log: log,
		Analysis: s.Analysis, Limits: s.Limits, Software: s.software(),
		Settle: seconds(s.Watch.SettleS), Sweep: seconds(s.Watch.SweepS),
		Include: s.Watch.Include, Exclude: s.Watch.Exclude,
		Cells: &watcher.Cells{Store: st, Settings: s.Cells, Software: s.cellSoftware(), Log: log},
	})
	if err != nil {
		return err
	}
	ready(svc)
	return svc.Run(ctx)
}

func seconds(s float64) time.Duration { return time.Duration(s * float64(time.Second)) }

// consoleHandler writes log lines for people: coloured on a terminal, plain
// into a pipe or a file.
func consoleHandler(w io.Writer) slog.Handler {
	return tint.NewHandler(w, &tint.Options{
		Level:      slog.LevelInfo,
		TimeFormat: time.TimeOnly,
		NoColor:    !isTerminal(w) || os.Getenv("NO_COLOR") != "",
	})
}

func isTerminal(w io.Writer) bool {
	f, ok := w.(*os.File)
	if !ok {
		return false
	}
	info, err := f.Stat()
	return err == nil && info.Mode()&os.ModeCharDevice != 0
}
