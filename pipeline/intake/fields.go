package intake

import (
	"bytes"
	"strings"
)

// delimiters are the ones looked for, the surest first.
var delimiters = [...]byte{'\t', ';', ',', ' '}

// delimiterName names a delimiter for messages.
func delimiterName(d byte) string {
	switch d {
	case '\t':
		return "tab"
	case ';':
		return "semicolon"
	case ',':
		return "comma"
	}
	return "spaces"
}

// field is one cell of a line: line[from:to] without its quotes.
type field struct {
	from, to int
	quoted   bool
}

// splitFault tells what is wrong with quotes on a line, and where.
type splitFault struct {
	at   int
	want string
}

// split cuts a line into fields and appends them to dst. Quotes are those of
// RFC 4180: a field whose first byte is a quote ends with the next single
// quote, a doubled quote stands for one, and a delimiter inside quotes is
// data. Delimiter ' ' stands for any run of spaces and tabs, and such runs at
// the ends of the line count for nothing. No more than limit fields are cut, so
// that a line of a million commas takes no memory.
func split(dst []field, line []byte, delim byte, limit int) ([]field, *splitFault) {
	i, end := 0, len(line)
	if delim == ' ' {
		for i < end && blank(line[i]) {
			i++
		}
		for end > i && blank(line[end-1]) {
			end--
		}
	}
	for {
		if i < end && line[i] == '"' {
			from := i + 1
			i = from
			for {
				k := bytes.IndexByte(line[i:end], '"')
				if k < 0 {
					return dst, &splitFault{from - 1, "a closing quote on the same line"}
				}
				i += k + 1
				if i < end && line[i] == '"' {
					i++
					continue
				}
				break
			}
			dst = append(dst, field{from, i - 1, true})
			if i < end && !(line[i] == delim || delim == ' ' && blank(line[i])) {
				return dst, &splitFault{i, "a delimiter (" + delimiterName(delim) + ") after the closing quote"}
			}
		} else {
			from := i
			if delim == ' ' {
				for i < end && !blank(line[i]) {
					i++
				}
			} else if k := bytes.IndexByte(line[i:end], delim); k >= 0 {
				i += k
			} else {
				i = end
			}
			dst = append(dst, field{from, i, false})
		}
		if i >= end || len(dst) == limit {
			return dst, nil
		}
		i++
		if delim == ' ' {
			for i < end && blank(line[i]) {
				i++
			}
		}
	}
}

func blank(c byte) bool { return c == ' ' || c == '\t' }

// trimmed returns the bytes of a field without spaces and tabs around them.
func (f field) trimmed(line []byte) []byte { return bytes.Trim(line[f.from:f.to], " \t") }

// text returns a field as text, doubled quotes made single.
func (f field) text(line string) string {
	s := line[f.from:f.to]
	if f.quoted {
		s = strings.ReplaceAll(s, `""`, `"`)
	}
	return strings.TrimSpace(s)
}
