//go:build !linux

package main

// watchLimit has nothing to compare with on this system.
func (p *inspection) watchLimit(string) {
	p.note("file events", "this system states no limit; on a network share there are none, and the sweep does the work")
}
