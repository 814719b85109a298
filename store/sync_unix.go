//go:build !windows

package store

import (
	"errors"
	"os"
)

// syncFolder puts the names in a folder on disk.
func syncFolder(folder string) error {
	f, err := os.Open(folder)
	if err == nil {
		err = errors.Join(f.Sync(), f.Close())
	}
	if err != nil {
		return &FolderError{folder, err}
	}
	return nil
}
