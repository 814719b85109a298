package main

import (
	"context"
	"os"
	"os/signal"
	"path/filepath"
	"syscall"
	"testing"

	"github.com/rogpeppe/go-internal/testscript"
)

// The scripts in testdata/script use the program as people do, through its
// command line.
func TestMain(m *testing.M) {
	testscript.Main(m, map[string]func(){
		"platen": func() {
			ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
			defer stop()
			os.Exit(execute(ctx, os.Args[1:], streams{os.Stdout, os.Stderr}))
		},
	})
}

func TestScripts(t *testing.T) {
	runs, err := filepath.Abs(runsFolder)
	if err != nil {
		t.Fatal(err)
	}
	testscript.Run(t, testscript.Params{
		Dir: "testdata/script",
		Setup: func(e *testscript.Env) error {
			e.Setenv("RUNS", runs)
			e.Setenv("HOME", filepath.Join(e.WorkDir, "home"))
			e.Setenv("XDG_STATE_HOME", "")
			e.Setenv("XDG_CONFIG_HOME", "")
			return os.MkdirAll(filepath.Join(e.WorkDir, "home"), 0o755)
		},
	})
}
