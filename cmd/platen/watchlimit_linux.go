package main

import (
	"io/fs"
	"os"
	"path/filepath"
	"strconv"
	"strings"
)

// watchLimit compares the number of folders with the number that the system
// lets one user watch for events.
func (p *inspection) watchLimit(dir string) {
	const file = "/proc/sys/fs/inotify/max_user_watches"
	text, err := os.ReadFile(file)
	if err != nil {
		p.note("file events", "their limit cannot be told (%v); the sweep finds every file all the same", err)
		return
	}
	limit, err := strconv.Atoi(strings.TrimSpace(string(text)))
	if err != nil {
		p.note("file events", "%s holds %q, no number", file, text)
		return
	}
	folders := 0
	if dir != "" {
		filepath.WalkDir(dir, func(_ string, d fs.DirEntry, err error) error {
			if err == nil && d.IsDir() {
				folders++
			}
			return nil
		})
	}
	if folders > limit/2 {
		p.mend("file events", "%d folders, and the system allows %d watches: raise fs.inotify.max_user_watches, or watch a smaller folder; until then warnings come a little later", folders, limit)
		return
	}
	p.ok("file events", "%d folder(s) of at most %d; on a network share there are none, and the sweep does the work", folders, limit)
}
