//go:build !windows

package main

import "golang.org/x/sys/unix"

// freeSpace returns the bytes that this user may still write below dir.
func freeSpace(dir string) (uint64, error) {
	var s unix.Statfs_t
	if err := unix.Statfs(dir, &s); err != nil {
		return 0, err
	}
	return s.Bavail * uint64(s.Bsize), nil
}
