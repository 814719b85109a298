package main

import (
	"fmt"
	"os"
	"path/filepath"
)

// stateFolder is where the store and the session log live unless --state says
// otherwise.
func stateFolder() (string, error) {
	home, err := os.UserHomeDir()
	if err != nil {
		return "", fmt.Errorf("no state folder: %w; give one with --state", err)
	}
	return filepath.Join(home, "Library", "Application Support", "platen"), nil
}
