package main

import (
	"fmt"
	"runtime"

	"platen/pipeline/run"
)

// version is part of every result: raise it with every change that can change
// a number or a finding.
const version = "0.1.0"

type versionCommand struct{}

func (versionCommand) Run(to streams) error {
	_, err := fmt.Fprintf(to.out, "platen %s (%s, %s/%s)\n", version, runtime.Version(), runtime.GOOS, runtime.GOARCH)
	return err
}

func (s *settings) software() run.Software {
	return run.Software{Version: version, Settings: s.fingerprint()}
}

// cellSoftware is what a cell's document names.
func (s *settings) cellSoftware() run.Software {
	return run.Software{Version: version, Settings: s.cellFingerprint()}
}
