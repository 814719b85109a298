package intake

import (
	"math"
	"strconv"
	"strings"
	"time"

	"platen/pipeline/run"
)

// headerFault is a value that a known key cannot have.
type headerFault struct{ want, fix string }

// headerReader collects the header lines of a file.
type headerReader struct {
	header run.Header
	seen   map[string]string // value of each known key
	zone   *time.Location
}

// headerKeys are the keys known, in the form of canonName, with the dimension
// of their value where it has one.
var headerKeys = map[string]dimension{
	"kind": nil, "cell": nil, "session": nil, "condition": nil, "operator": nil,
	"medium": nil, "started": nil, "samples": nil, "note": nil,
	"spring constant": springUnits,
	"sensitivity":     sensitivityUnits,
	"diameter":        lengthUnits,
	"temperature":     temperatureUnits,
	"drive frequency": frequencyUnits,
}

// headerKey takes a line of the form "key: value" or "key = value" apart. ok
// is false when the key is not known.
func headerKey(body string) (key, unit, value string, ok bool) {
	i := strings.IndexAny(body, ":=")
	if i < 0 {
		return "", "", "", false
	}
	source := strings.TrimSpace(body[:i])
	if len(source) > maxName {
		return "", "", "", false
	}
	value = strings.TrimSpace(body[i+1:])
	name, unit, _ := bracketed(source)
	if _, known := headerKeys[canonName(name)]; known {
		return canonName(name), unit, value, true
	}
	for i := len(source) - 1; i > 0; i-- {
		if source[i] != '_' {
			continue
		}
		if d := headerKeys[canonName(source[:i])]; d != nil {
			if _, ok := d.findSuffix(source[i+1:]); ok {
				return canonName(source[:i]), source[i+1:], value, true
			}
		}
	}
	return "", "", "", false
}

// set reads the value of a known key. An empty value is a key not filled in.
func (r *headerReader) set(key, unit, value string) *headerFault {
	if value == "" {
		return nil
	}
	if before, twice := r.seen[key]; twice && key != "note" {
		if before == unit+"\x00"+value {
			return nil
		}
		return &headerFault{"one line of " + key, "remove one of the two lines"}
	}
	if r.seen == nil {
		r.seen = map[string]string{}
	}
	r.seen[key] = unit + "\x00" + value

	h := &r.header
	var fault *headerFault
	switch key {
	case "kind":
		switch k := run.Kind(strings.ToLower(value)); k {
		case run.KindCell, run.KindBlank, run.KindGlass, run.KindThermal:
			h.Kind = k
		default:
			return &headerFault{"kind: cell, blank, glass or thermal", "correct the line"}
		}
	case "cell":
		h.Cell = value
	case "session":
		h.Session = value
	case "condition":
		h.Condition = value
	case "operator":
		h.Operator = value
	case "medium":
		h.Medium = value
	case "note":
		if h.Note != "" {
			h.Note += "; "
		}
		h.Note += value
	case "started":
		t, ok := parseStarted(value, r.zone)
		if !ok {
			return &headerFault{"started: " + wantStarted, "write the time of start in this form, or leave the line out"}
		}
		h.Started = t
	case "samples":
		n, err := strconv.ParseInt(value, 10, 64)
		if err != nil || n < 0 {
			return &headerFault{"samples: the number of rows as plain digits", "correct the line, or leave it out"}
		}
		h.Samples = n
	case "spring constant":
		h.SpringConstantNPerM, fault = r.quantity(key, unit, value, func(v float64) bool { return v > 0 })
	case "sensitivity":
		h.SensitivityMPerV, fault = r.quantity(key, unit, value, func(v float64) bool { return v != 0 })
	case "diameter":
		h.DiameterM, fault = r.quantity(key, unit, value, func(v float64) bool { return v > 0 })
	case "temperature":
		h.TemperatureK, fault = r.quantity(key, unit, value, func(v float64) bool { return v > 0 })
	case "drive frequency":
		var q *run.Quantity
		q, fault = r.quantity(key, unit, value, func(v float64) bool { return v >= 0 })
		if q != nil {
			h.DriveFrequencyHz = q.Value
		}
	}
	return fault
}

// quantity reads "value", "value ± u" or "value ± p %" with the unit in the
// key, behind the value, behind u, or behind both in parentheses. u is taken
// for a standard uncertainty, 0 when none is given.
func (r *headerReader) quantity(key, keyUnit, value string, valid func(si float64) bool) (*run.Quantity, *headerFault) {
	dim := headerKeys[key]
	example := key + " [" + dim[0].show + "]: 0.21 ± 0.02"
	fault := &headerFault{key + " as a number with unit, such as " + example, "correct the line, or leave it out"}

	s := strings.NewReplacer("+/-", "±", "+-", "±").Replace(value)
	var outside string
	if strings.HasPrefix(s, "(") {
		end := strings.IndexByte(s, ')')
		if end < 0 {
			return nil, fault
		}
		s, outside = s[1:end], s[end+1:]
	}
	left, right, uncertain := strings.Cut(s, "±")
	v, unit, ok := numberThenUnit(left)
	if !ok {
		return nil, fault
	}
	units := []string{keyUnit, unit, bareUnit(outside)}
	u, percent := 0.0, false
	if uncertain {
		var uUnit string
		if u, uUnit, ok = numberThenUnit(right); !ok || u < 0 {
			return nil, fault
		}
		if percent = uUnit == "%"; !percent {
			units = append(units, uUnit)
		}
	}

	unit = ""
	for _, s := range units {
		if s == "" {
			continue
		}
		if unit != "" && canonUnit(s) != canonUnit(unit) {
			return nil, &headerFault{key + " in one unit", "write the unit once"}
		}
		unit = s
	}
	if unit == "" {
		return nil, &headerFault{"a unit of " + key + ": one of " + dim.String(), "write it in the key, such as " + example}
	}
	factor, ok := dim.find(unit)
	if !ok && unit == keyUnit {
		factor, ok = dim.findSuffix(unit)
	}
	if !ok {
		return nil, &headerFault{"a unit of " + key + ": one of " + dim.String(), "give it in one of these units, not " + quote(unit)}
	}
	si := factor.si(v)
	switch {
	case percent:
		u = math.Abs(factor.width(v)) * u / 100
	case uncertain:
		u = factor.width(u)
	}
	q := run.Known(si, u)
	if q == nil || !valid(si) {
		return nil, &headerFault{key + " within physical bounds", "correct the line, or leave it out"}
	}
	return q, nil
}

// maxQuantity bounds the length of a number with its unit, so that a line of a
// megabyte is not searched for its number's end from every place.
const maxQuantity = 200

// numberThenUnit reads "0.21 N/m", "0.21" or "0.21N/m".
func numberThenUnit(s string) (v float64, unit string, ok bool) {
	s = strings.TrimSpace(s)
	if len(s) > maxQuantity {
		return 0, "", false
	}
	for end := len(s); end > 0; end-- {
		if c := s[end-1]; c-'0' > 9 && c != '.' && c != ',' {
			continue
		}
		if number := []byte(s[:end]); isNumber(number) {
			v, err := parseAnyDecimal(number)
			return v, bareUnit(s[end:]), err == nil
		}
	}
	return 0, "", false
}

// bareUnit takes blanks and brackets off a unit.
func bareUnit(s string) string {
	s = strings.TrimSpace(s)
	// The blank stands for the name that bracketed wants before the bracket.
	if _, inner, ok := bracketed(" " + s); ok {
		return inner
	}
	return s
}

// commentPrefixes mark header lines, end marks and remarks.
var commentPrefixes = [...]string{"#", "%", "//", ";", "!", "'"}

// uncomment takes the comment prefix off a line.
func uncomment(s string) (body string, prefixed bool) {
	s = strings.TrimLeft(s, " \t")
	for _, p := range commentPrefixes {
		if strings.HasPrefix(s, p) {
			for strings.HasPrefix(s, p) {
				s = s[len(p):]
			}
			return strings.TrimSpace(s), true
		}
	}
	return strings.TrimSpace(s), false
}

// isEndMark tells whether a line without its comment prefix says that the run
// has ended. Delimiters that a spreadsheet pads lines with do not matter.
func isEndMark(body string) bool {
	return strings.EqualFold(strings.Trim(body, " \t,;"), "end")
}
