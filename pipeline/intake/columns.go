package intake

import (
	"fmt"
	"strings"

	"platen/pipeline/run"
)

// Channel names what a column holds.
type Channel string

// The channels. A deflection column is in metres or in volts; a column of
// diameters is read into Radius.
const (
	Time        Channel = "time"
	Force       Channel = "force"
	Deflection  Channel = "deflection"
	Height      Channel = "height"
	Drive       Channel = "drive"
	Radius      Channel = "radius"
	Area        Channel = "area"
	Temperature Channel = "temperature"
	Segment     Channel = "segment"
)

// Column is a column of the file that was recognised as a channel.
type Column struct {
	Channel Channel
	Name    string // as in the file, without the unit
	Unit    string // as in the file, or the default unit; empty for Segment
	Index   int    // from 0, skipped columns counted
}

// synonyms maps the names under which a channel is exported to the channel,
// in the form of canonName. All are plain words of the trade.
var synonyms = map[string]Channel{
	"time": Time, "t": Time, "elapsed time": Time,

	"force": Force, "f": Force, "load": Force, "normal force": Force,

	"deflection": Deflection, "sensor deflection": Deflection, "cantilever deflection": Deflection,

	"height": Height, "h": Height, "separation": Height, "gap": Height,
	"plate separation": Height, "gap height": Height,

	"drive": Drive, "drive position": Drive, "z": Drive, "z position": Drive,
	"piezo position": Drive, "plate position": Drive,

	"radius": Radius, "equator radius": Radius, "equatorial radius": Radius, "cell radius": Radius,
	diameterName: Radius, "equator diameter": Radius, "equatorial diameter": Radius, "cell diameter": Radius,

	"area": Area, "section area": Area, "cross section area": Area, "cross sectional area": Area,

	"temperature": Temperature, "temp": Temperature,

	"segment": Segment, "segment index": Segment, "segment number": Segment,
}

const diameterName = "diameter"

// canonName brings column names and header keys to one form: lower case, with
// single spaces for underscores, hyphens and runs of blanks.
func canonName(s string) string {
	s = strings.Map(func(r rune) rune {
		if r == '_' || r == '-' || r == '\u00a0' {
			return ' '
		}
		return r
	}, strings.ToLower(s))
	return strings.Join(strings.Fields(s), " ")
}

// dimensions returns the units that a channel is accepted in. Deflection has
// two dimensions, length and voltage.
func (c Channel) dimensions() []dimension {
	switch c {
	case Time:
		return []dimension{timeUnits}
	case Force:
		return []dimension{forceUnits}
	case Deflection:
		return []dimension{lengthUnits, voltUnits}
	case Area:
		return []dimension{areaUnits}
	case Temperature:
		return []dimension{temperatureUnits}
	case Segment:
		return []dimension{labelUnits}
	}
	return []dimension{lengthUnits}
}

// units lists the units accepted for a channel, for messages.
func (c Channel) units() string {
	var lists []string
	for _, d := range c.dimensions() {
		lists = append(lists, d.String())
	}
	return strings.Join(lists, ", ")
}

// heading is one field of a column line, taken apart.
type heading struct {
	source  string // as in the file
	name    string // without the unit
	unit    string // as spelled; empty when missing
	channel Channel
	known   bool
}

// maxName bounds the length of a name that can be known, so that a megabyte of
// underscores is not searched for a unit from every place.
const maxName = 200

// head takes "name [unit]", "name (unit)", "name_unit" or "name" apart.
func head(source string) heading {
	h := heading{source: source, name: source}
	if len(source) > maxName {
		return h
	}
	if name, unit, ok := bracketed(source); ok {
		h.name, h.unit = name, unit
	}
	if h.channel, h.known = synonyms[canonName(h.name)]; h.known || h.name != source {
		return h
	}
	for i := len(source) - 1; i > 0; i-- {
		if source[i] != '_' {
			continue
		}
		channel, known := synonyms[canonName(source[:i])]
		if !known {
			continue
		}
		for _, d := range channel.dimensions() {
			if _, ok := d.findSuffix(source[i+1:]); ok {
				return heading{source: source, name: source[:i], unit: source[i+1:], channel: channel, known: true}
			}
		}
	}
	return h
}

// bracketed takes the unit in brackets off the end of a name.
func bracketed(s string) (name, unit string, ok bool) {
	for _, pair := range []string{"[]", "()"} {
		if open := strings.LastIndexByte(s, pair[0]); open > 0 && s[len(s)-1] == pair[1] {
			return strings.TrimSpace(s[:open]), strings.TrimSpace(s[open+1 : len(s)-1]), true
		}
	}
	return s, "", false
}

// columnLine is a line that may name the columns.
type columnLine struct {
	delim     byte
	headings  []heading
	known     int
	line, pos int64 // where it stands in the file
}

// readColumnLine takes a line for one of column names, by the delimiter that
// makes most channels known. ok is false when nothing speaks for it: fewer
// than two channels, unless there is one and a tab, semicolon or comma.
func readColumnLine(text string, limit int) (best columnLine, ok bool) {
	for _, delim := range delimiters {
		var names []string
		if delim == ' ' {
			if best.known > 0 {
				break
			}
			names = spacedNames(text, limit)
		} else {
			fields, fault := split(nil, []byte(text), delim, limit)
			if fault != nil || len(fields) < 2 {
				continue
			}
			for _, f := range fields {
				names = append(names, f.text(text))
			}
		}
		// A delimiter after the last name makes no column.
		if n := len(names); n > 1 && names[n-1] == "" {
			names = names[:n-1]
		}
		c := columnLine{delim: delim}
		units := 0
		for _, name := range names {
			h := head(name)
			if h.known {
				c.known++
			}
			if h.unit != "" {
				units++
			}
			c.headings = append(c.headings, h)
		}
		// Words of free text are names too: ask for more than one hit.
		if delim == ' ' && (c.known < 2 || units == 0 && c.known < len(names)) {
			continue
		}
		if c.known > best.known {
			best = c
		}
	}
	return best, best.known > 0
}

// spacedNames cuts a column line whose delimiter is spaces, where names of
// several words and units apart from their name are common.
func spacedNames(text string, limit int) []string {
	words := strings.Fields(text)
	var names []string
	for i := 0; i < len(words) && len(names) < limit; {
		n := 1
		for k := min(3, len(words)-i); k > 1; k-- {
			if head(strings.Join(words[i:i+k], " ")).known {
				n = k
				break
			}
		}
		name := strings.Join(words[i:i+n], " ")
		i += n
		if i < len(words) && (words[i][0] == '[' || words[i][0] == '(') {
			name += " " + words[i]
			i++
		}
		names = append(names, name)
	}
	return names
}

// withUnits takes a line for the units of the column line before it. ok is
// false when it is not one.
func (c columnLine) withUnits(text string) (with columnLine, ok bool) {
	fields, fault := split(nil, []byte(text), c.delim, len(c.headings)+2)
	if fault != nil || len(fields) > len(c.headings)+1 {
		return c, false
	}
	with = c
	with.headings = append([]heading(nil), c.headings...)
	units := 0
	for i, f := range fields {
		s := f.text(text)
		if isNumber([]byte(s)) {
			return c, false
		}
		if i == len(c.headings) {
			if s != "" {
				return c, false
			}
			break
		}
		h := &with.headings[i]
		if !h.known || h.unit != "" || s == "" {
			continue
		}
		s = bareUnit(s)
		h.unit = s
		for _, d := range h.channel.dimensions() {
			if _, ok := d.find(s); ok {
				units++
			}
		}
	}
	return with, units > 0
}

// role is how the cells of a column are read.
type role uint8

const (
	skipped role = iota // not a channel
	sample              // a number in every row
	sparse              // a number or nothing
	label               // an integer in every row
)

// cellPlan says how to read one column.
type cellPlan struct {
	role   role
	stamp  bool // the time column
	source string
	scale  scale
	dst    []float64
	labels []int32
}

// plan is the column line made ready for rows.
type plan struct {
	columns []Column
	cells   []cellPlan
	block   run.Block // full-length buffers
}

// columnFault is what is wrong with a column line.
type columnFault struct{ column, want, got, fix string }

// makePlan checks that a column line describes a run of a kind.
func makePlan(c columnLine, kind run.Kind, opt Options) (*plan, *columnFault) {
	if len(c.headings) > opt.MaxColumns {
		return nil, &columnFault{"", fmt.Sprintf("at most %d columns", opt.MaxColumns),
			"more", "export only the columns of the run"}
	}
	p := &plan{cells: make([]cellPlan, len(c.headings))}
	have := map[string]string{}
	for i, h := range c.headings {
		if !h.known {
			continue
		}
		unit := h.unit
		if unit == "" {
			unit = opt.Units[h.channel]
		}
		if unit == "" && h.channel != Segment {
			return nil, &columnFault{h.source, "a unit: one of " + h.channel.units(), "none",
				fmt.Sprintf("write the unit behind the column name, such as %s [%s]", h.name, h.channel.dimensions()[0][0].show)}
		}
		dims := h.channel.dimensions()
		var factor scale
		found := -1
		for k := 0; k < len(dims) && found < 0; k++ {
			if s, ok := dims[k].find(unit); ok {
				factor, found = s, k
			} else if s, ok := dims[k].findSuffix(unit); ok && strings.HasSuffix(h.source, "_"+unit) {
				factor, found = s, k
			}
		}
		if found < 0 {
			return nil, &columnFault{h.source, "a unit of " + string(h.channel) + ": one of " + h.channel.units(), quote(unit),
				"export the column in one of these units"}
		}

		// Raw and calibrated deflection are two channels that may stand together.
		key := string(h.channel)
		if h.channel == Deflection {
			key += dims[found][0].show
		}
		if first, twice := have[key]; twice {
			return nil, &columnFault{h.source, "one column of " + string(h.channel), "a second one after " + quote(first),
				"export one of them, or rename the other"}
		}
		have[key] = h.source

		cell := &p.cells[i]
		cell.source, cell.scale = h.source, factor
		cell.role = sample
		b := &p.block
		switch h.channel {
		case Time:
			cell.stamp = true
			cell.dst = room(&b.Time)
			room(&b.TimeQuantum)
		case Force:
			cell.dst = room(&b.Force)
		case Deflection:
			if found == 0 {
				cell.dst = room(&b.DeflectionM)
			} else {
				cell.dst = room(&b.DeflectionV)
			}
		case Height:
			cell.dst = room(&b.Height)
		case Drive:
			cell.dst = room(&b.Drive)
		case Radius:
			cell.role, cell.dst = sparse, room(&b.Radius)
			if strings.HasSuffix(canonName(h.name), diameterName) {
				cell.scale = factor.half()
			}
		case Area:
			cell.role, cell.dst = sparse, room(&b.Area)
		case Temperature:
			cell.role, cell.dst = sparse, room(&b.Temperature)
		case Segment:
			b.Segment = make([]int32, blockRows)
			cell.role, cell.labels = label, b.Segment
		}
		p.columns = append(p.columns, Column{Channel: h.channel, Name: h.name, Unit: unit, Index: i})
	}

	lacks := func(want, example string) *columnFault {
		var names []string
		for _, h := range c.headings {
			names = append(names, h.source)
		}
		return &columnFault{"", want, quote(strings.Join(names, " | ")), "export it too, or name it such as " + example}
	}
	b := &p.block
	switch {
	case b.Time == nil:
		return nil, lacks("a time column", "time [s]")
	case b.Force == nil && b.DeflectionM == nil && b.DeflectionV == nil:
		return nil, lacks("a force or deflection column", "force [nN]")
	case b.Height == nil && b.Drive == nil && kind != run.KindThermal:
		return nil, lacks("a height or drive position column (only a run of kind thermal needs none)", "height [um]")
	}
	return p, nil
}

func room(s *[]float64) []float64 {
	*s = make([]float64, blockRows)
	return *s
}

// take returns the first n rows of the buffers as a block.
func (p *plan) take(firstRow int64, n int) run.Block {
	first := func(s []float64) []float64 { return s[:min(n, len(s))] }
	b := p.block
	b.FirstRow = firstRow
	for _, s := range []*[]float64{&b.Time, &b.TimeQuantum, &b.Force, &b.DeflectionM, &b.DeflectionV,
		&b.Height, &b.Drive, &b.Radius, &b.Area, &b.Temperature} {
		*s = first(*s)
	}
	if b.Segment != nil {
		b.Segment = b.Segment[:n]
	}
	return b
}
