package main

import "golang.org/x/sys/windows"

// freeSpace returns the bytes that this user may still write below dir.
func freeSpace(dir string) (uint64, error) {
	p, err := windows.UTF16PtrFromString(dir)
	if err != nil {
		return 0, err
	}
	var free uint64
	return free, windows.GetDiskFreeSpaceEx(p, &free, nil, nil)
}
