package intake

import (
	"fmt"
	"strconv"
	"strings"
	"unicode/utf8"
)

// Error says where and why bytes could not be read as a run, and what to do.
type Error struct {
	File   string // as given to NewText
	Line   int64  // from 1; 0 when the whole file is meant
	Byte   int64  // offset in the file of the cell or line meant
	Column string // name and unit as the file has them; empty when no column is meant
	Want   string // what was expected
	Got    string // what was there, shortened, control characters escaped
	Fix    string // what to do
	IsRun  bool   // a line of run columns had been recognised before
}

// Error returns the message on one line.
func (e *Error) Error() string {
	var b strings.Builder
	b.WriteString(printable(e.File))
	if e.Line > 0 {
		fmt.Fprintf(&b, ": line %d", e.Line)
	}
	fmt.Fprintf(&b, ": byte %d", e.Byte)
	if e.Column != "" {
		fmt.Fprintf(&b, ": column %s", strconv.Quote(e.Column))
	}
	fmt.Fprintf(&b, ": want %s, got %s", e.Want, e.Got)
	if e.Fix != "" {
		b.WriteString("; " + e.Fix)
	}
	return b.String()
}

// printable returns s, quoted if a terminal could take it for more than text.
func printable(s string) string {
	if q := strconv.Quote(s); q[1:len(q)-1] != s {
		return q
	}
	return s
}

// maxGot is the number of bytes of a wrong cell shown: enough to find it by
// eye, too few to flood a log.
const maxGot = 40

// quote shows a piece of the file.
func quote[T string | []byte](s T) string {
	if len(s) <= maxGot {
		return strconv.Quote(string(s))
	}
	cut := maxGot
	for cut > maxGot-utf8.UTFMax && !utf8.RuneStart(s[cut]) {
		cut--
	}
	return strconv.Quote(string(s[:cut])) + "…"
}
