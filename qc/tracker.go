package qc

import (
	"cmp"
	"slices"

	"platen/pipeline/run"
)

// Change is a provisional finding that was raised or cleared.
type Change struct {
	Raised  bool
	Finding run.Finding
}

// Tracker turns the findings of successive moments of one run into changes:
// each warning is raised once and cleared once. The zero value is ready.
//
// A warning is raised when its finding first appears, and once more when it
// becomes worse. It is cleared when it has been absent for clearAfter updates
// in a row, so that a value that dithers about its limit does not chatter; a
// warning that comes back after that is raised a second time and then stays.
type Tracker struct {
	known map[warning]*standing
}

// clearAfter is the number of updates (about four a second) without a finding
// after which its warning is cleared: two seconds.
const clearAfter = 8

// mostRaises is how often the same warning may be raised at one severity.
const mostRaises = 2

type warning struct {
	rule    string
	segment int
}

type standing struct {
	finding run.Finding
	up      bool
	absent  int
	raises  int
}

// Update takes the findings of this moment. Findings of severity info raise no
// warning.
func (t *Tracker) Update(now []run.Finding) []Change {
	if t.known == nil {
		t.known = map[warning]*standing{}
	}
	var out []Change
	seen := map[warning]bool{}
	for _, f := range now {
		if f.Severity == run.Info {
			continue
		}
		k := warning{f.Rule, -1}
		if f.Segment != nil {
			k.segment = *f.Segment
		}
		if seen[k] {
			continue // findings come worst first
		}
		seen[k] = true
		s := t.known[k]
		if s == nil {
			s = &standing{}
			t.known[k] = s
		}
		s.absent = 0
		worse := s.up && s.finding.Severity == run.ToReview && f.Severity == run.ToRepeat
		if worse {
			s.raises = 0
		}
		if (!s.up && s.raises < mostRaises) || worse {
			s.up = true
			s.raises++
			out = append(out, Change{Raised: true, Finding: f})
		}
		if s.up && (worse || s.finding.Severity != run.ToRepeat) {
			s.finding = f
		}
	}
	var cleared []Change
	for k, s := range t.known {
		if seen[k] || !s.up {
			continue
		}
		s.absent++
		if s.absent >= clearAfter && s.raises < mostRaises {
			s.up = false
			cleared = append(cleared, Change{Finding: s.finding})
		}
	}
	slices.SortFunc(cleared, func(a, b Change) int {
		return cmp.Or(cmp.Compare(a.Finding.Rule, b.Finding.Rule), cmp.Compare(a.Finding.FromS, b.Finding.FromS))
	})
	return append(out, cleared...)
}
