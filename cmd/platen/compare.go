package main

import (
	"bufio"
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"strings"

	"platen/pipeline/cell"
	"platen/qc/plain"
)

type compareCommand struct {
	Conditions []string `arg:"" name:"condition" help:"Two or more conditions, the one to compare with first."`
	State      string   `help:"State folder. Default: the platform's state folder." placeholder:"DIR" type:"path"`
	Session    string   `help:"Only cells of this session."`
	Difference float64  `help:"Relative difference that should be seen, such as 0.2, for the number of cells needed. Default: the observed one."`
	JSON       bool     `help:"Print the document."`
}

func (compareCommand) Help() string {
	return `A cell counts once, however many runs it had; runs to be repeated do not count. The first
line of each pair takes cells as nested in sessions; the Mann–Whitney test takes all cells
for independent, and is shown for comparison.

Example: platen compare untreated "blebbistatin 20 uM"`
}

func (c compareCommand) Run(s *settings, to streams) error {
	if len(c.Conditions) < 2 {
		return &exitError{exitUsage, errors.New("compare needs two conditions or more, the one to compare with first")}
	}
	if !(c.Difference >= 0) {
		return &exitError{exitUsage, fmt.Errorf("--difference %g: must be 0 or more, such as 0.2", c.Difference)}
	}
	st, err := readStore(c.State)
	if err != nil {
		return err
	}
	cells, err := currentCells(st, s, c.Session)
	if err != nil {
		return err
	}
	known := cell.Conditions(cells)
	for _, name := range c.Conditions {
		if !slices.Contains(known, name) {
			return fmt.Errorf("no cell of condition %q is stored; there are: %s", name, quoted(known))
		}
	}
	doc := cell.Compare(cells, c.Conditions, cell.CompareOptions{Difference: c.Difference, Seed: 1}, s.cellSoftware())
	out := bufio.NewWriter(to.out)
	defer out.Flush()
	if c.JSON {
		return json.NewEncoder(out).Encode(doc)
	}
	return plain.ComparisonPage(out, doc)
}

func quoted(names []string) string {
	if len(names) == 0 {
		return "none"
	}
	var q []string
	for _, n := range names {
		q = append(q, fmt.Sprintf("%q", n))
	}
	return strings.Join(q, ", ")
}
