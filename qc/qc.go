// Package qc judges a run: estimates go in, findings and a verdict come out.
//
// Start with Judge, which applies every rule to what is known of a run at one
// moment, while it is being written or at its end; Conclude makes the result
// document of a finished run. Rules lists the rules with their limits and
// reasons. A Tracker turns the findings of successive moments into warnings
// that are raised once and cleared once.
//
// Invariants kept here:
//   - No rule fires on noise: a limit counts as passed only beyond twice the
//     standard uncertainty of the value.
//   - The same estimates and limits give the same findings in the same order.
//   - A document holds no number that is not finite.
//
// The package is pure: no files, no clock, no state beyond a Tracker.
package qc

import (
	"cmp"
	"math"
	"slices"

	"platen/pipeline/run"
)

// Judge applies every rule to what is known of a run. The worst findings come
// first, among equals causes before what they bring about.
func Judge(e run.Estimates, l Limits) []run.Finding {
	c := &court{e: e, l: l, over: e.Completion != run.Growing}
	for _, rule := range table {
		c.rule = rule.Name
		rule.judge(c)
	}
	rank := map[run.Severity]int{run.ToRepeat: 0, run.ToReview: 1, run.Info: 2}
	slices.SortStableFunc(c.found, func(a, b run.Finding) int {
		return cmp.Compare(rank[a.Severity], rank[b.Severity])
	})
	return c.found
}

// Verdict is the worst that the findings make of a run.
func Verdict(fs []run.Finding) run.Verdict {
	v := run.Accept
	for _, f := range fs {
		switch f.Severity {
		case run.ToRepeat:
			return run.Repeat
		case run.ToReview:
			v = run.Review
		}
	}
	return v
}

// court is one judgement: the estimates, the limits, and what was found.
type court struct {
	e     run.Estimates
	l     Limits
	over  bool // the run has ended
	rule  string
	found []run.Finding
}

// cell tells whether there is a cell under the plate.
func (c *court) cell() bool { return c.e.Header.Kind == run.KindCell || c.e.Header.Kind == "" }

// scope is where a finding holds: a segment, or the whole run.
type scope struct {
	segment  *int
	from, to float64
}

func (c *court) whole() scope { return scope{nil, c.e.FromS, c.e.ToS} }

func within(s *run.Segment) scope {
	i := s.Index
	return scope{&i, s.FromS, s.ToS}
}

// value is what a rule compares with its limit.
type value struct {
	v, u, limit float64
	unit        string
}

// find adds a finding. Values that are not finite are left out of it.
func (c *court) find(s run.Severity, at scope, v value, message, advice string) {
	f := run.Finding{
		Rule: c.rule, Severity: s, Segment: at.segment,
		FromS: finite(at.from), ToS: finite(at.to),
		Message: message, Advice: advice,
	}
	if v.unit != "" {
		f.Value, f.Limit, f.Unit = run.Number(v.v), run.Number(v.limit), v.unit
		if v.u > 0 {
			f.U = run.Number(v.u)
		}
	}
	c.found = append(c.found, f)
}

func finite(x float64) float64 {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return 0
	}
	return x
}

// beyond tells whether x passes limit by more than noise can make it: by more
// than twice its standard uncertainty (one-sided false alarm 2.3 % for a true
// value right at the limit, normal distribution).
func beyond(x, u, limit float64) bool { return math.Abs(x)-2*u > limit }

// below is beyond for a limit that is passed downward.
func below(x, u, limit float64) bool { return x+2*u < limit }

// graded returns the severity of a value with two limits, "" below both.
func graded(x, u, review, repeat float64) (s run.Severity, limit float64) {
	switch {
	case beyond(x, u, repeat):
		return run.ToRepeat, repeat
	case beyond(x, u, review):
		return run.ToReview, review
	}
	return "", review
}
