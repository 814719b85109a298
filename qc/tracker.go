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
// A warning is one rule in one segment. It is raised when its finding first
// appears, and once more when it goes from review to repeat. It is cleared when
// its finding has been absent for clearAfter updates in a row, so that a value
// that dithers about its limit does not chatter. A warning that comes back after
// that is raised a second time and then stays: the verdict at the end tells
// what became of it. So nobody hears of one warning more than four times, and
// of its clearing more than once.
type Tracker struct {
	known map[warning]*standing
}

// clearAfter is the number of updates in a row without a finding after which
// its warning is cleared. The service updates about four times a second: two
// seconds, two cycles of a usual oscillation.
const clearAfter = 8

type warning struct {
	rule    string
	segment int // -1: the whole run
}

type standing struct {
	finding run.Finding // the worst since it was raised
	up      bool
	absent  int // updates in a row
	cleared bool
}

// Update takes the findings of this moment, worst first as Judge gives them.
// Findings of severity info raise no warning. Raised warnings come before
// cleared ones.
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
			continue
		}
		seen[k] = true
		s := t.known[k]
		if s == nil {
			s = &standing{}
			t.known[k] = s
		}
		s.absent = 0
		worse := s.finding.Severity == run.ToReview && f.Severity == run.ToRepeat
		if !s.up || worse {
			out = append(out, Change{Raised: true, Finding: f})
		}
		if !s.up || s.finding.Severity != run.ToRepeat || f.Severity == run.ToRepeat {
			s.finding = f
		}
		s.up = true
	}
	var gone []warning
	for k, s := range t.known {
		if seen[k] || !s.up {
			continue
		}
		s.absent++
		if s.absent >= clearAfter && !s.cleared {
			s.up, s.cleared = false, true
			gone = append(gone, k)
		}
	}
	slices.SortFunc(gone, func(a, b warning) int {
		return cmp.Or(cmp.Compare(a.rule, b.rule), cmp.Compare(a.segment, b.segment))
	})
	for _, k := range gone {
		out = append(out, Change{Finding: t.known[k].finding})
	}
	return out
}
