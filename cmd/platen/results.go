package main

import (
	"bufio"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"strconv"
	"strings"
	"text/tabwriter"

	"platen/pipeline/run"
	"platen/qc/plain"
	"platen/store"
)

type resultsCommand struct {
	ID      string `arg:"" optional:"" help:"Show one result with its revisions: the beginning of its id is enough."`
	State   string `help:"State folder. Default: the platform's state folder." placeholder:"DIR" type:"path"`
	Session string `help:"Only this session."`
	Cell    string `help:"Only this cell."`
	Verdict string `help:"Only this verdict: accept, review or repeat." enum:"accept,review,repeat," default:""`
	All     bool   `help:"Also results that a later one of the same file has replaced."`
	JSON    bool   `help:"Print the result documents, one a line."`
}

func (resultsCommand) Help() string {
	return `Works while the service runs.

Examples: platen results --verdict repeat
          platen results --session willow-dish-1 --json
          platen results 3f9a`
}

func (c resultsCommand) Run(to streams) error {
	st, err := readStore(c.State)
	if err != nil {
		return err
	}
	var records []store.Record
	if c.ID != "" {
		records, err = st.Get(c.ID)
	} else {
		records, err = st.Results(store.Filter{Session: c.Session, Cell: c.Cell, Verdict: run.Verdict(c.Verdict), Superseded: c.All})
	}
	if err != nil {
		return err
	}
	out := bufio.NewWriter(to.out)
	defer out.Flush()
	switch {
	case c.JSON:
		for _, r := range records {
			if err := json.NewEncoder(out).Encode(r.Result); err != nil {
				return err
			}
		}
	case c.ID != "":
		for _, r := range records {
			if err := plain.Summary(out, r.Result); err != nil {
				return err
			}
			fmt.Fprintf(out, "  revision %d, stored %s%s\n", r.Revision, r.Stored.Local().Format("2006-01-02 15:04:05"), fate(r))
		}
	default:
		return table(out, records)
	}
	return nil
}

// readStore opens the store of a state folder, "" for the platform's, for
// looking.
func readStore(state string) (*store.Store, error) {
	if state == "" {
		var err error
		if state, err = stateFolder(); err != nil {
			return nil, err
		}
	}
	st, err := store.Read(state)
	if errors.Is(err, fs.ErrNotExist) {
		return nil, fmt.Errorf("%w: start platen watch first, or name another state folder with --state", err)
	}
	return st, err
}

func fate(r store.Record) string {
	if r.SupersededBy != nil {
		return ", replaced by " + r.SupersededBy.String()
	}
	return ""
}

// table lists results, one a line.
func table(w io.Writer, records []store.Record) error {
	if len(records) == 0 {
		_, err := fmt.Fprintln(w, "No results fit.")
		return err
	}
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	fmt.Fprintln(t, "verdict\tsession\tcell\tfile\ttension mN/m\tK′ mN/m\tK″ mN/m\tphase °\tat Hz\tfindings\tid")
	for _, r := range records {
		d := r.Result
		var s run.Segment
		if h := plain.Headline(d); h != nil {
			s = *h
		}
		at := "—"
		if s.FrequencyHz != nil {
			at = strconv.FormatFloat(s.FrequencyHz.Value, 'g', 3, 64)
		}
		verdict := string(d.Verdict)
		if r.SupersededBy != nil {
			verdict = "(" + verdict + ")"
		}
		fmt.Fprintf(t, "%s\t%s\t%s\t%s\t%s\t%s\t%s\t%s\t%s\t%s\t%s\n", verdict,
			plain.Text(d.Run.Session), plain.Text(d.Run.Cell), plain.Text(d.Run.File),
			plain.Quantity(s.TensionNPerM, plain.MilliNewtonPerMetre, ""),
			plain.Quantity(s.StorageNPerM, plain.MilliNewtonPerMetre, ""),
			plain.Quantity(s.LossNPerM, plain.MilliNewtonPerMetre, ""),
			plain.Quantity(s.PhaseDeg, 1, ""), at, rules(d.Findings), d.Run.ID[:min(12, len(d.Run.ID))])
	}
	return t.Flush()
}

// rules names the rules that tripped, once each.
func rules(fs []run.Finding) string {
	var names []string
	seen := map[string]bool{}
	for _, f := range fs {
		if !seen[f.Rule] {
			seen[f.Rule] = true
			names = append(names, f.Rule)
		}
	}
	if len(names) == 0 {
		return "—"
	}
	return strings.Join(names, ", ")
}
