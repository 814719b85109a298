package main

import (
	"fmt"
	"os"
	"reflect"
	"regexp"
	"strings"
	"testing"

	"github.com/alecthomas/kong"

	"platen/qc"
)

func readme(t *testing.T) string {
	t.Helper()
	b, err := os.ReadFile("../../README.md")
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}

// The rules table of the README is the table of the program.
func TestReadmeRules(t *testing.T) {
	text := readme(t)
	for _, r := range qc.Rules() {
		unit := r.Unit
		if unit == "" {
			unit = "—"
		}
		row := fmt.Sprintf("| %s | %s | %s | %s | %s |", r.Name, r.What, unit, r.Limits, r.Reason)
		if !strings.Contains(text, row+"\n") {
			t.Errorf("the README lacks the row\n%s", row)
		}
	}
}

// Every command and flag that the README names exists, and no command is left
// out.
func TestReadmeCommands(t *testing.T) {
	text := readme(t)
	parser, err := kong.New(&commandLine{}, kong.Name("platen"))
	if err != nil {
		t.Fatal(err)
	}
	flags := map[string]bool{"settings": true}
	for _, c := range parser.Model.Children {
		if !strings.Contains(text, "`platen "+c.Name) {
			t.Errorf("the README does not show platen %s", c.Name)
		}
		for _, f := range c.Flags {
			flags[f.Name] = true
			if !strings.Contains(text, "--"+f.Name) {
				t.Errorf("the README does not show --%s", f.Name)
			}
		}
	}
	for _, m := range regexp.MustCompile(`--([a-z][a-z-]+)`).FindAllStringSubmatch(text, -1) {
		if !flags[m[1]] {
			t.Errorf("the README shows --%s, which does not exist", m[1])
		}
	}
}

// Every key of the settings file that the README shows exists, with the
// default it says where it shows one.
func TestReadmeSettings(t *testing.T) {
	text := readme(t)
	_, block, ok := strings.Cut(text, "    [watch]\n")
	if !ok {
		t.Fatal("no settings shown")
	}
	block, _, _ = strings.Cut(block, "\n## ")
	s := defaultSettings()
	if err := s.decode([]byte("[watch]\n" + block)); err != nil {
		t.Fatal(err)
	}
	d := defaultSettings()
	if !reflect.DeepEqual(s.Limits, d.Limits) || !reflect.DeepEqual(s.Watch, d.Watch) {
		t.Error("the limits shown are not the defaults")
	}
}
