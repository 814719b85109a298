//go:build !windows && !darwin

package main

import (
	"fmt"
	"os"
	"path/filepath"
)

// stateFolder is where the store and the session log live unless --state says
// otherwise: the XDG Base Directory Specification's state folder.
func stateFolder() (string, error) {
	if dir := os.Getenv("XDG_STATE_HOME"); filepath.IsAbs(dir) {
		return filepath.Join(dir, "platen"), nil
	}
	home, err := os.UserHomeDir()
	if err != nil {
		return "", fmt.Errorf("no state folder: %w; give one with --state", err)
	}
	return filepath.Join(home, ".local", "state", "platen"), nil
}
