package main

import (
	"errors"
	"os"
	"path/filepath"
)

// stateFolder is where the store and the session log live unless --state says
// otherwise.
func stateFolder() (string, error) {
	if dir := os.Getenv("LOCALAPPDATA"); dir != "" {
		return filepath.Join(dir, "platen"), nil
	}
	return "", errors.New("no state folder: LOCALAPPDATA is not set; give one with --state")
}
