package intake

import (
	"bytes"
	"fmt"
	"math"
	"strconv"
)

// firstRow finds the delimiter of the rows: the column line's if it makes the
// right number of good cells of the first row, else the first that does.
func (t *Text) firstRow(raw []byte) error {
	if t.ended {
		return t.behindEnd(raw)
	}
	t.delim = t.candidate.delim
	rightCount := false
	for _, d := range append([]byte{t.candidate.delim}, delimiters[:]...) {
		fields, fault := t.split(raw, d)
		if fault != nil || !t.rightCount(fields) {
			continue
		}
		if t.goodCells(raw, fields) {
			t.delim = d
			break
		}
		if !rightCount {
			t.delim, rightCount = d, true
		}
	}
	t.started = true
	t.lastRow = append(t.lastRow[:0], raw...)
	return t.row(raw)
}

// rightCount tells whether a row has as many cells as there are columns; one
// delimiter more at its end does not matter.
func (t *Text) rightCount(fields []field) bool {
	n := len(t.plan.cells)
	return len(fields) == n || len(fields) == n+1 && fields[n].from == fields[n].to
}

// goodCells tells whether the cells of all channels are numbers, or empty
// where they may be.
func (t *Text) goodCells(raw []byte, fields []field) bool {
	for i, c := range t.plan.cells {
		s := fields[i].trimmed(raw)
		if c.role != skipped && !isNumber(s) && !(c.role == sparse && len(s) == 0) {
			return false
		}
	}
	return true
}

// readRows reads whole lines behind the first row.
func (t *Text) readRows(b []byte) error {
	done := 0  // t.at is the offset of b[done]
	last := -1 // where the last row begins
	for i := 0; i < len(b); {
		if end := t.fastRow(b, i); end >= 0 && end-1-i <= t.opt.MaxLine && !t.ended {
			last, i = i, end
			t.lines++
			if err := t.commit(); err != nil {
				return err
			}
			continue
		}
		t.at += t.enc.size(b[done:i])
		done = i
		k := i + bytes.IndexByte(b[i:], '\n')
		if k-i > t.opt.MaxLine {
			return t.tooLong(b[i:k])
		}
		isRow, err := t.rowLine(b[i:k])
		if err != nil {
			return err
		}
		if isRow {
			last = i
		}
		t.lines++
		i = k + 1
	}
	t.at += t.enc.size(b[done:])
	if last >= 0 {
		line := b[last : last+bytes.IndexByte(b[last:], '\n')]
		t.lastRow = append(t.lastRow[:0], bytes.TrimSuffix(line, []byte("\r"))...)
	}
	return nil
}

// fastRow reads the row that starts at b[i] into the buffers and returns the
// index behind its line feed, or -1 for a line with anything out of the
// ordinary, which rowLine reads with the same result or finds fault with. b
// ends in a line feed, which stops every loop here.
func (t *Text) fastRow(b []byte, i int) int {
	delim, sep, n := t.delim, t.sep, t.n
	cells := t.plan.cells
	if cells[0].role == skipped && !isPlain(b[i]) {
		return -1 // perhaps a comment: text is right in this column
	}
	for k := range cells {
		c := &cells[k]
		for b[i] == ' ' {
			i++
		}
		switch c.role {
		case skipped:
			if b[i] == '"' {
				return -1
			}
			for b[i] != delim && b[i] != '\r' && b[i] != '\n' {
				if delim == ' ' && b[i] == '\t' {
					return -1
				}
				i++
			}
		case sparse:
			if delim != ' ' && (b[i] == delim || b[i] == '\r' || b[i] == '\n') {
				c.dst[n] = math.NaN()
				break
			}
			fallthrough
		case sample:
			v, exp10, end := scanDecimal(b, i, sep)
			if end < 0 {
				return -1
			}
			i = end
			c.dst[n] = c.scale.si(v)
			if c.stamp {
				t.plan.block.TimeQuantum[n] = c.scale.digit(exp10)
			}
		case label:
			v, _, end := scanDecimal(b, i, sep)
			if end < 0 || v != math.Trunc(v) || math.Abs(v) > math.MaxInt32 {
				return -1
			}
			i = end
			c.labels[n] = int32(v)
		}
		end := i
		for b[i] == ' ' {
			i++
		}
		if k == len(cells)-1 {
			break
		}
		if delim == ' ' {
			if i == end {
				return -1
			}
		} else {
			if b[i] != delim {
				return -1
			}
			i++
		}
	}
	if b[i] == delim {
		i++
	}
	if b[i] == '\r' {
		i++
	}
	if b[i] != '\n' {
		return -1
	}
	return i + 1
}

func isPlain(c byte) bool { return c-'0' <= 9 || c|0x20 >= 'a' && c|0x20 <= 'z' }

// rowLine reads any line behind the first row, without its line feed.
func (t *Text) rowLine(raw []byte) (isRow bool, err error) {
	raw, err = t.oneLine(raw)
	if err != nil {
		return false, err
	}
	if end, remark := t.remark(raw, t.delim); remark {
		t.ended = t.ended || end
		return false, nil
	}
	if t.ended {
		return false, t.behindEnd(raw)
	}
	return true, t.row(raw)
}

func (t *Text) behindEnd(raw []byte) error {
	return t.fail(t.lines+1, t.at, "", "nothing behind the line \"# end\"", quote(raw),
		"write one run into one file, and the end mark last")
}

// remark tells whether a line is none of the rows but blank, a comment or the
// end mark.
func (t *Text) remark(raw []byte, delim byte) (end, remark bool) {
	text := bytes.TrimLeft(raw, " ")
	if delim != '\t' {
		text = bytes.TrimLeft(text, "\t")
	}
	if len(text) == 0 || len(bytes.Trim(text, "\x1a")) == 0 {
		return false, true
	}
	switch c := text[0]; {
	case c == ';' && delim == ';':
		return false, false
	case c == '#', c == '%', c == '/', c == ';', c == '!', c == '\'', c|0x20 == 'e':
		body, prefixed := uncomment(string(text))
		end = isEndMark(body)
		return end, end || prefixed
	}
	return false, false
}

// row reads a line as a row and counts it.
func (t *Text) row(raw []byte) error {
	if err := t.parseRow(raw); err != nil {
		return err
	}
	return t.commit()
}

// parseRow reads a line into the buffers: the careful twin of fastRow.
func (t *Text) parseRow(raw []byte) error {
	fields, fault := t.split(raw, t.delim)
	if fault != nil {
		return t.fail(t.lines+1, t.at+t.enc.size(raw[:fault.at]), "", fault.want, quote(raw[fault.at:]), "correct the export")
	}
	for i := range t.plan.cells {
		if i == len(fields) {
			break
		}
		if err := t.parseCell(&t.plan.cells[i], raw, fields[i]); err != nil {
			return err
		}
	}
	if !t.rightCount(fields) {
		fix := "export every row with all its cells, empty where nothing was measured"
		if t.delim == ',' && len(fields) > len(t.plan.cells) {
			fix = "if the comma is the decimal sign here, it cannot be the delimiter too: export with tabs or semicolons, or with decimal points"
		}
		count := strconv.Itoa(len(fields))
		if len(fields) == t.opt.MaxColumns+2 {
			count += " or more"
		}
		return t.fail(t.lines+1, t.at, "", fmt.Sprintf("%d cells separated by %s", len(t.plan.cells), delimiterName(t.delim)),
			count+": "+quote(raw), fix)
	}
	return nil
}

const fixNumber = "export plain decimal numbers such as 1.25e-3"

// parseCell reads one cell into its buffer.
func (t *Text) parseCell(c *cellPlan, raw []byte, f field) error {
	if c.role == skipped {
		return nil
	}
	s := f.trimmed(raw)
	fail := func(want, got, fix string) error {
		return t.fail(t.lines+1, t.at+t.enc.size(raw[:f.from]), c.source, want, got, fix)
	}
	if len(s) == 0 {
		if c.role == sparse {
			c.dst[t.n] = math.NaN()
			return nil
		}
		return fail("a number", "an empty cell", "only radius, area and temperature may be empty: export this channel in every row")
	}

	sep := t.sep
	if sep == 0 {
		if k := bytes.IndexAny(s, ".,"); k >= 0 {
			sep = s[k]
		}
	}
	t.number = append(append(t.number[:0], s...), '\n')
	v, exp10, end := scanDecimal(t.number, 0, sep)
	if end != len(s) {
		var err error
		v, exp10, err = parseDecimal(s, sep)
		if err == errRange {
			return fail("a number that a double can hold", quote(s), fixNumber)
		}
		if err != nil {
			return fail("a decimal number", quote(s), notNumberFix(s, c.role, t.sep))
		}
	}
	if bytes.IndexByte(s, sep) >= 0 {
		t.sep = sep
	}

	if c.role == label {
		if v != math.Trunc(v) || math.Abs(v) > math.MaxInt32 {
			return fail("an integer label of the segment", quote(s), "export whole numbers")
		}
		c.labels[t.n] = int32(v)
		return nil
	}
	si := c.scale.si(v)
	if math.IsInf(si, 0) {
		return fail("a number that a double can hold in SI units", quote(s), fixNumber)
	}
	c.dst[t.n] = si
	if c.stamp {
		t.plan.block.TimeQuantum[t.n] = c.scale.digit(exp10)
	}
	return nil
}

// notNumberFix says what to do about a cell that is no decimal number.
func notNumberFix(s []byte, r role, sep byte) string {
	_, err := strconv.ParseFloat(string(s), 64)
	switch {
	case bytes.HasPrefix(s, []byte("\ufeff")):
		return "a second file begins here: export each run into a file of its own"
	case err == nil && bytes.ContainsAny(s, "xX"):
		return "hexadecimal numbers are not read: " + fixNumber
	case err == nil && bytes.ContainsAny(s, "nN") && r == sparse:
		return "leave the cell empty where nothing was measured (with tabs or semicolons between cells)"
	case err == nil && bytes.ContainsAny(s, "nN"):
		return "this channel needs a number in every row"
	case bytes.ContainsAny(s, ",. '") && bytes.IndexFunc(s, isNoNumeral) < 0:
		if sep == 0 {
			return "write numbers without thousands separators"
		}
		return fmt.Sprintf("the decimal sign of this file is %q: write all numbers with it, and without thousands separators", rune(sep))
	}
	return fixNumber
}

func isNoNumeral(r rune) bool {
	return !(r >= '0' && r <= '9' || r == '.' || r == ',' || r == '\'' || r == ' ' || r == '-' || r == '+' || r == 'e' || r == 'E')
}

// commit counts the row in the buffers.
func (t *Text) commit() error {
	t.n++
	t.rows++
	if t.n == blockRows {
		return t.flush()
	}
	return nil
}

// flush hands the rows in the buffers on.
func (t *Text) flush() error {
	if t.n == 0 {
		return nil
	}
	t.block = t.plan.take(t.rows-int64(t.n), t.n)
	t.n = 0
	return t.sink(&t.block)
}

// lastLine reads what stands behind the last line end once no more will come.
// byMark: a Ctrl-Z ends it; whole: it does not end within a character.
func (t *Text) lastLine(raw []byte, byMark, whole bool) error {
	if byMark {
		if _, err := t.rowLine(raw); err != nil {
			return err
		}
	} else {
		if !whole || bytes.IndexByte(raw, '\r') >= 0 {
			return nil
		}
		end, remark := t.remark(raw, t.delim)
		if remark && !end {
			return nil
		}
		if end {
			t.ended = true
		} else {
			if t.ended || t.parseRow(raw) != nil || !t.proves(raw) {
				return nil
			}
			if err := t.commit(); err != nil {
				return err
			}
		}
	}
	t.lines++
	t.at += t.enc.size(t.carry)
	return nil
}

// proves tells whether the last cell of an unterminated row, which has the
// right number of good cells, can be trusted not to have been cut.
func (t *Text) proves(raw []byte) bool {
	n := len(t.plan.cells)
	now := t.fields[n-1]
	c := t.plan.cells[n-1]
	s := now.trimmed(raw)
	if len(t.fields) > n || now.quoted || c.role == skipped || len(s) == 0 {
		return true
	}
	fields, fault := split(nil, t.lastRow, t.delim, n)
	if fault != nil || len(fields) < n {
		return false
	}
	before := fields[n-1].trimmed(t.lastRow)
	if c.role == label {
		return bytes.Equal(s, before)
	}
	a, ok := shapeOf(before, t.sep)
	b, _ := shapeOf(s, t.sep)
	switch {
	case !ok:
		return false
	case a.exponent > 0:
		return b.exponent >= a.exponent
	case b.exponent > 0:
		// C and its kin print two digits or more.
		return b.exponent >= 2
	case a.decimals > 0:
		return b.decimals >= a.decimals
	}
	return b.digits >= a.digits
}
