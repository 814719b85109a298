// Command platen watches the export folder of a parallel-plate
// cell-compression rig, analyses each run while it is being written, and says
// whether the cell's run can be kept.
//
// Each subcommand has a file of its own name; settings.go holds what the
// settings file may say. Nothing here computes: flags are parsed, settings
// loaded, one function called.
package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"syscall"

	"github.com/alecthomas/kong"
)

// Exit codes, the same for all subcommands.
const (
	exitOK         = 0  // done; check: every run is accept or review
	exitRepeat     = 1  // check: a run should be repeated; preflight: something must be mended; others: failed
	exitUnreadable = 2  // check: a file could not be read as a run
	exitUsage      = 64 // the command line or the settings make no sense
)

// exitError carries an exit code to main. Its message may be empty where all
// has been said.
type exitError struct {
	code int
	err  error
}

func (e *exitError) Error() string { return e.err.Error() }
func (e *exitError) Unwrap() error { return e.err }

// streams are where a subcommand reads and writes, given so that tests can
// look.
type streams struct {
	out, err io.Writer
}

type commandLine struct {
	Settings string `help:"Settings file. Default: platen.toml in the current folder, else in the user's configuration folder, else none." placeholder:"FILE" type:"path"`

	Watch     watchCommand     `cmd:"" help:"Follow an export folder: analyse each run as it is written, warn, store, give the verdict."`
	Check     checkCommand     `cmd:"" help:"Analyse finished run files and print what was found. Stores nothing."`
	Rehearse  rehearseCommand  `cmd:"" help:"A simulated rig writes a session of about a minute while the real service follows it."`
	Results   resultsCommand   `cmd:"" help:"List what is stored."`
	Cells     cellsCommand     `cmd:"" help:"Show what the runs of each cell tell together, and which further run would help."`
	Compare   compareCommand   `cmd:"" help:"Compare conditions over the stored cells."`
	Preflight preflightCommand `cmd:"" help:"Say whether this machine and these settings are fit for a session, and how to mend what is not."`
	Version   versionCommand   `cmd:"" help:"Print the version."`
}

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	defer stop()
	os.Exit(execute(ctx, os.Args[1:], streams{os.Stdout, os.Stderr}))
}

// execute runs one command line and returns its exit code.
func execute(ctx context.Context, args []string, to streams) int {
	var line commandLine
	code := -1
	parser, err := kong.New(&line,
		kong.Name("platen"),
		kong.Description("At a cell-compression rig: follow the export folder, analyse each run as it is written, say whether to keep the cell.\n\n"+
			"Start with: platen rehearse"),
		kong.UsageOnError(),
		kong.ConfigureHelp(kong.HelpOptions{Compact: true}),
		kong.Writers(to.out, to.err),
		kong.Exit(func(c int) { code = c }),
		kong.BindTo(ctx, (*context.Context)(nil)),
		kong.Bind(to),
	)
	if err != nil {
		fmt.Fprintln(to.err, "platen:", err)
		return exitUsage
	}
	if len(args) == 0 {
		args = []string{"--help"}
	}
	parsed, err := parser.Parse(args)
	if code >= 0 {
		return code // --help has been printed
	}
	if err != nil {
		fmt.Fprintf(to.err, "platen: %v\nTry: platen --help\n", err)
		return exitUsage
	}
	set, err := loadSettings(line.Settings)
	if err != nil {
		fmt.Fprintln(to.err, "platen:", err)
		return exitUsage
	}
	err = parsed.Run(set)
	var e *exitError
	switch {
	case err == nil:
		return exitOK
	case errors.As(err, &e):
		if e.err != nil {
			fmt.Fprintln(to.err, "platen:", e.err)
		}
		return e.code
	default:
		fmt.Fprintln(to.err, "platen:", err)
		return exitRepeat
	}
}
