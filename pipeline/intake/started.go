package intake

import (
	"regexp"
	"strconv"
	"strings"
	"time"
)

// Forms of a time of day: seconds and their fraction may be missing, as may
// the zone, which may stand apart.
const clock = `(\d\d):(\d\d)(?::(\d\d)(?:\.(\d+))?)?\s*([Zz]|[+-]\d\d:?\d\d)?$`

var (
	yearFirst = regexp.MustCompile(`^(\d{4})-(\d\d)-(\d\d)(?:[Tt]|\s+)` + clock)
	// Dots are written in the order day, month, year only (common practice,
	// no source); slashes in both orders, so they are refused.
	dayFirst = regexp.MustCompile(`^(\d{1,2})\.(\d{1,2})\.(\d{4}),?\s+` + clock)
	named    = regexp.MustCompile(`^(?:[A-Za-z]{3,9},\s*)?(\d{1,2})[ -]([A-Za-z]{3,9})[ -](\d{4}),?\s+` + clock)
)

const wantStarted = "date and time with zone, such as 2026-03-14T10:22:31+01:00 (RFC 3339)"

// parseStarted reads RFC 3339 strictly (lower-case t and z and leap seconds
// are legal there; a decimal comma, one-digit hours and offsets of 24 hours
// are not) and beside it what labs write and cannot be misread: a blank for
// the T, no seconds, an offset without colon, 14.03.2026, 14 Mar 2026 or
// 14-March-2026. A stamp without zone is read in zone, and refused when that
// is nil. A leap second becomes the second after it, for time.Time has none.
func parseStarted(s string, zone *time.Location) (time.Time, bool) {
	var year, month, day int
	var rest []string
	if m := yearFirst.FindStringSubmatch(s); m != nil {
		year, month, day, rest = atoi(m[1]), atoi(m[2]), atoi(m[3]), m[4:]
	} else if m := dayFirst.FindStringSubmatch(s); m != nil {
		day, month, year, rest = atoi(m[1]), atoi(m[2]), atoi(m[3]), m[4:]
	} else if m := named.FindStringSubmatch(s); m != nil {
		day, month, year, rest = atoi(m[1]), monthNamed(m[2]), atoi(m[3]), m[4:]
	} else {
		return time.Time{}, false
	}
	hour, minute, second := atoi(rest[0]), atoi(rest[1]), atoi(rest[2])
	nano := atoi((rest[3] + "000000000")[:9])
	switch z := rest[4]; {
	case z == "":
		if zone == nil {
			return time.Time{}, false
		}
	case z == "Z" || z == "z":
		zone = time.UTC
	default:
		h, m := atoi(z[1:3]), atoi(z[len(z)-2:])
		if h > 23 || m > 59 {
			return time.Time{}, false
		}
		offset := h*3600 + m*60
		if z[0] == '-' {
			offset = -offset
		}
		// Not time.Parse: it swaps in the zone of this machine where the
		// offsets agree.
		zone = time.FixedZone("", offset)
	}
	leap := second == 60
	if leap {
		second = 59
	}
	if hour > 23 || minute > 59 || second > 59 {
		return time.Time{}, false
	}
	t := time.Date(year, time.Month(month), day, hour, minute, second, nano, zone)
	// time.Date carries 30 February over into March.
	if t.Day() != day || int(t.Month()) != month {
		return time.Time{}, false
	}
	if leap {
		if u := t.UTC(); u.Hour() != 23 || u.Minute() != 59 {
			return time.Time{}, false
		}
		t = t.Add(time.Second)
	}
	return t, true
}

// atoi reads digits that a pattern has checked; "" is 0.
func atoi(s string) int {
	n, _ := strconv.Atoi(s)
	return n
}

// monthNamed returns the month of an English name or its three-letter form,
// 0 for anything else.
func monthNamed(s string) int {
	for m := time.January; m <= time.December; m++ {
		if strings.EqualFold(s, m.String()) || strings.EqualFold(s, m.String()[:3]) {
			return int(m)
		}
	}
	return 0
}
