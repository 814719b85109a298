package main

import (
	"bufio"
	"encoding/json"
	"fmt"
	"slices"
	"time"

	"platen/pipeline/cell"
	"platen/pipeline/run"
	"platen/qc/plain"
	"platen/store"
)

type cellsCommand struct {
	Cell    string `arg:"" optional:"" help:"Only this cell."`
	State   string `help:"State folder. Default: the platform's state folder." placeholder:"DIR" type:"path"`
	Session string `help:"Only this session."`
	JSON    bool   `help:"Print the cells' documents, one a line."`
}

func (cellsCommand) Help() string {
	return `Works while the service runs. Runs that should be repeated are left out, and counted.

Example: platen cells --session willow-dish-1`
}

func (c cellsCommand) Run(s *settings, to streams) error {
	st, err := readStore(c.State)
	if err != nil {
		return err
	}
	docs, err := currentCells(st, s, c.Session)
	if err != nil {
		return err
	}
	out := bufio.NewWriter(to.out)
	defer out.Flush()
	shown := 0
	for _, d := range docs {
		if c.Cell != "" && d.Cell != c.Cell {
			continue
		}
		if c.JSON {
			err = json.NewEncoder(out).Encode(d)
		} else {
			if shown > 0 {
				fmt.Fprintln(out)
			}
			err = plain.CellSummary(out, d)
		}
		if err != nil {
			return err
		}
		shown++
	}
	if shown == 0 && !c.JSON {
		fmt.Fprintln(out, "No cells fit.")
	}
	return nil
}

// currentCells returns the document of every cell that has a result: the stored
// one where it was made from just the present runs with the present settings
// and version, else one made on the spot.
func currentCells(st *store.Store, s *settings, session string) ([]run.CellResult, error) {
	records, err := st.Results(store.Filter{Session: session})
	if err != nil {
		return nil, err
	}
	stored, err := st.Cells(session)
	if err != nil {
		return nil, err
	}
	type name struct{ session, cell string }
	known := map[name]store.CellRecord{}
	for _, r := range stored {
		known[name{r.Document.Session, r.Document.Cell}] = r
	}
	newest := map[name]time.Time{}
	var order []name
	runs := map[name][]run.Result{}
	for _, r := range records {
		if r.Result.Run.Cell == "" || r.Result.Run.Kind != run.KindCell {
			continue
		}
		n := name{r.Result.Run.Session, r.Result.Run.Cell}
		if runs[n] == nil {
			order = append(order, n)
		}
		runs[n] = append(runs[n], r.Result)
		if r.Stored.After(newest[n]) {
			newest[n] = r.Stored
		}
	}
	var tables *cell.Tables
	var out []run.CellResult
	for _, n := range order {
		if d, ok := known[n]; ok && d.Document.Software == s.cellSoftware() && !newest[n].After(d.Stored) && madeFrom(d.Document, runs[n]) {
			out = append(out, d.Document)
			continue
		}
		if tables == nil {
			if tables, err = cell.NewTables(); err != nil {
				return nil, err
			}
		}
		if d := tables.Gather(runs[n], s.Cells, s.cellSoftware()); d != nil {
			out = append(out, *d)
		}
	}
	return out, nil
}

// madeFrom tells whether a document was made from just these runs.
func madeFrom(d run.CellResult, runs []run.Result) bool {
	if len(d.Runs)+len(d.LeftOut) != len(runs) {
		return false
	}
	for _, r := range runs {
		if !slices.Contains(d.Runs, r.Run.ID) && !slices.Contains(d.LeftOut, r.Run.ID) {
			return false
		}
	}
	return true
}
