package intake

import (
	"bytes"
	"errors"
	"fmt"
	"slices"
	"strings"
	"time"

	"golang.org/x/text/transform"

	"platen/pipeline/run"
)

// blockRows is the largest number of rows in a block.
const blockRows = 1024

// maxHeaderLines is the number of lines within which the column line must
// come: a log or a listing dropped in the folder is not followed for ever.
const maxHeaderLines = 10_000

// Options are the choices of a Text; the zero value is good.
type Options struct {
	Units      map[Channel]string // unit of a channel whose column gives none; a missing unit is an error otherwise
	MaxLine    int                // longest line, bytes as UTF-8 without the line feed; 0: 1 MiB
	MaxColumns int                // 0: 256
	Zone       *time.Location     // of a "started" that names none; nil: that is an error
}

// Text reads one delimited text file from its bytes. It is not safe for
// concurrent use.
type Text struct {
	name string
	opt  Options
	sink func(*run.Block) error

	err      error // every call after it returns it
	finished bool

	// The bytes.
	fed     int64
	first   []byte // first bytes, until there are headBytes of them
	decided bool   // encoding and format are known
	enc     encoding
	utf16   transform.Transformer
	half    []byte // bytes of a UTF-16 character that is not all there
	decoded []byte // scratch
	nul     int64  // NUL bytes at the end
	nulAt   int64  // where they begin

	// The lines.
	carry []byte // the line whose end has not come, as UTF-8
	at    int64  // offset in the file of the line being read
	lines int64  // complete lines

	// The header.
	header     headerReader
	candidate  columnLine
	unitsLine  int64 // the line on which units may follow the candidate, 0 for none
	plan       *plan // nil until the column line is complete
	delim, sep byte  // of the rows; sep 0 until a decimal sign was seen

	// The rows.
	rows    int64 // complete rows
	n       int   // of them, in the block not yet handed on
	started bool  // the first row has told the delimiter
	block   run.Block
	lastRow []byte // the last row, to compare an unterminated one with
	ended   bool   // "# end" was seen
	fields  []field
	number  []byte // scratch
}

// NewText returns a reader of one file. name is used in messages only. sink
// takes the blocks during Feed and Finish; their slices are reused after it
// returns. An error of sink ends the reading and is returned as it is.
func NewText(name string, opt Options, sink func(*run.Block) error) *Text {
	if opt.MaxLine <= 0 {
		opt.MaxLine = 1 << 20
	}
	if opt.MaxColumns <= 0 {
		opt.MaxColumns = 256
	}
	return &Text{name: name, opt: opt, sink: sink, header: headerReader{zone: opt.Zone}}
}

// Feed takes the next bytes of the file, in pieces of any size; p is not kept.
// Rows that became complete are handed on before it returns. The error is an
// *Error, or what sink returned; rows before it were handed on, and every
// later call returns it again.
func (t *Text) Feed(p []byte) error {
	if t.err != nil {
		return t.err
	}
	if t.finished {
		return errors.New("intake: Feed after Finish")
	}
	return t.settle(t.feed(p))
}

// Finish says that no more bytes will come. A last line without its line end
// counts when it has the right number of cells, all of them good, and its last
// cell is not printed shorter than in the row before: fewer decimals, digits
// of the exponent or, for an integer, digits would be the mark of a number cut
// in two. Otherwise it is left out, and Byte tells where it begins. A Ctrl-Z
// at the end is a line end; half a UTF-16 character and NUL bytes there are
// ignored (see NULTail). A file without a column line or without a row is an
// error.
func (t *Text) Finish() error {
	if t.err != nil || t.finished {
		return t.err
	}
	t.finished = true
	return t.settle(t.finish())
}

// settle hands the finished rows on and keeps the first error.
func (t *Text) settle(err error) error {
	// Rows come before what is wrong behind them, so does the sink's error.
	if flushed := t.flush(); flushed != nil {
		err = flushed
	}
	t.err = err
	return err
}

// Header returns what the header says so far; complete is true once the column
// line has been read, after which it does not change.
func (t *Text) Header() (h run.Header, complete bool) { return t.header.header, t.plan != nil }

// Columns returns the columns recognised, in the order of the file; nil until
// the header is complete, final with the first row (a second line of names may
// come before it).
func (t *Text) Columns() []Column {
	if t.plan == nil {
		return nil
	}
	return append([]Column(nil), t.plan.columns...)
}

// Complete tells whether the content says that the run is complete: ByCount
// once as many rows as declared have been read (further rows are still read),
// ByEndMark after a line "# end" behind the column line, else Growing.
func (t *Text) Complete() run.Completion {
	switch n := t.header.header.Samples; {
	case n > 0 && t.plan != nil && t.rows >= n:
		return run.ByCount
	case t.ended:
		return run.ByEndMark
	}
	return run.Growing
}

// Rows returns the number of complete rows.
func (t *Text) Rows() int64 { return t.rows }

// NULTail returns the number of NUL bytes at the end of what was fed: a file
// allocated before it was written, or a crash of the writer.
func (t *Text) NULTail() int64 { return t.nul }

// Line returns the number of complete lines.
func (t *Text) Line() int64 { return t.lines }

// Byte returns the offset in the file behind the last complete line. What was
// fed beyond it, but for NULTail, waits for its line end or, after Finish, was
// left out.
func (t *Text) Byte() int64 { return t.at }

// feed takes bytes until the encoding is known, then passes them on.
func (t *Text) feed(p []byte) error {
	t.fed += int64(len(p))
	if t.decided {
		return t.decode(p)
	}
	k := min(headBytes-len(t.first), len(p))
	t.first = append(t.first, p[:k]...)
	if len(t.first) < headBytes {
		return nil
	}
	if err := t.decide(); err != nil {
		return err
	}
	return t.decode(p[k:])
}

// decide looks at the first bytes and decodes them.
func (t *Text) decide() error {
	t.decided = true
	if what, fix := looksLike(t.first); what != "" {
		return t.fail(1, 0, "", "delimited text", "what looks like "+what, fix)
	}
	enc, mark := detect(t.first)
	t.enc = enc
	t.at = int64(mark)
	if enc != utf8Bytes {
		t.utf16 = enc.decoder()
		t.decoded = make([]byte, 16<<10)
	}
	return t.decode(t.first[mark:])
}

// decode turns bytes of the file into UTF-8.
func (t *Text) decode(p []byte) error {
	if t.utf16 == nil {
		return t.text(p)
	}
	if len(t.half) > 0 {
		p = append(t.half, p...)
	}
	for {
		to, from, err := t.utf16.Transform(t.decoded, p, false)
		p = p[from:]
		if terr := t.text(t.decoded[:to]); terr != nil {
			return terr
		}
		if err != transform.ErrShortDst {
			break
		}
	}
	t.half = append(t.half[:0], p...)
	return nil
}

// text takes the next text and sets NUL bytes apart, which may only stand at
// the end of the file.
func (t *Text) text(b []byte) error {
	if t.nul == 0 {
		k := bytes.IndexByte(b, 0)
		if k < 0 {
			return t.cut(b)
		}
		if err := t.cut(b[:k]); err != nil {
			return err
		}
		b = b[k:]
		t.nulAt = t.at + t.enc.size(t.carry)
	}
	for i, c := range b {
		if c == 0 {
			continue
		}
		t.nul += int64(i) * t.enc.unit()
		got := fmt.Sprintf("%d NUL bytes and more behind them", t.nul)
		if t.lines == 0 {
			return t.fail(1, t.nulAt, "", "delimited text", got+", as in a binary file", "export as text")
		}
		return t.fail(t.lines+1, t.nulAt, "", "NUL bytes at the end of the file only", got,
			"the file was damaged, or written while it was read: export it again")
	}
	t.nul += int64(len(b)) * t.enc.unit()
	return nil
}

// cut takes text without NUL bytes apart into lines.
func (t *Text) cut(b []byte) error {
	if t.lines == 0 {
		// Not beyond the longest line, where a cut between pieces would tell
		// which of two errors comes first.
		first := b[:min(len(b), t.opt.MaxLine-len(t.carry))]
		if k := bytes.IndexByte(first, '\n'); k >= 0 {
			first = first[:k]
		}
		if k := controlByte(first); k >= 0 {
			at := t.at + t.enc.size(t.carry) + t.enc.size(first[:k])
			return t.fail(1, at, "", "delimited text", "control byte "+quote(first[k:k+1])+" in the first line, as in a binary file", "export as text")
		}
	}
	if len(t.carry) > 0 {
		k := bytes.IndexByte(b, '\n')
		if k < 0 {
			return t.hold(b)
		}
		if len(t.carry)+k > t.opt.MaxLine {
			return t.hold(b[:k])
		}
		t.carry = append(t.carry, b[:k+1]...)
		line := t.carry
		t.carry = t.carry[:0]
		if err := t.read(line); err != nil {
			return err
		}
		b = b[k+1:]
	}
	k := bytes.LastIndexByte(b, '\n') + 1
	if err := t.read(b[:k]); err != nil {
		return err
	}
	return t.hold(b[k:])
}

// hold keeps the begin of a line.
func (t *Text) hold(b []byte) error {
	if len(t.carry)+len(b) > t.opt.MaxLine {
		k := min(len(b), max(0, maxGot-len(t.carry)))
		return t.tooLong(append(t.carry, b[:k]...))
	}
	t.carry = append(t.carry, b...)
	return nil
}

// tooLong is the error for a line that begins with b.
func (t *Text) tooLong(b []byte) error {
	return t.fail(t.lines+1, t.at, "", fmt.Sprintf("a line of at most %d bytes", t.opt.MaxLine),
		"a longer one that begins with "+quote(b[:min(maxGot, t.opt.MaxLine)]),
		"check that this is delimited text with LF or CRLF line ends")
}

// read reads whole lines, each with its line feed.
func (t *Text) read(b []byte) error {
	for len(b) > 0 {
		if t.started {
			return t.readRows(b)
		}
		k := bytes.IndexByte(b, '\n')
		if k > t.opt.MaxLine {
			return t.tooLong(b[:k])
		}
		if err := t.headerLine(b[:k]); err != nil {
			return err
		}
		t.lines++
		t.at += t.enc.size(b[:k+1])
		b = b[k+1:]
	}
	return nil
}

// oneLine takes the CR of CRLF off a line and refuses any other.
func (t *Text) oneLine(b []byte) ([]byte, error) {
	b = bytes.TrimSuffix(b, []byte("\r"))
	if k := bytes.IndexByte(b, '\r'); k >= 0 {
		return nil, t.fail(t.lines+1, t.at+t.enc.size(b[:k]), "", "lines that end in LF or CRLF", "a CR alone",
			"export with LF or CRLF line ends")
	}
	return b, nil
}

// headerLine reads a line before the first row, or that first row.
func (t *Text) headerLine(raw []byte) error {
	raw, err := t.oneLine(raw)
	if err != nil {
		return err
	}
	if t.plan == nil && t.lines >= maxHeaderLines {
		return t.fail(t.lines+1, t.at, "", fmt.Sprintf("a column line within %d lines", maxHeaderLines), "none", fixColumns)
	}
	if isBlank(raw) {
		return nil
	}
	text := strings.TrimPrefix(decodeLine(raw), "\ufeff")
	body, prefixed := uncomment(text)

	if t.plan != nil {
		if end, remark := t.remark(raw, t.candidate.delim); remark {
			t.ended = t.ended || end
			return nil
		}
		if t.namesAgain(body) {
			return nil
		}
		return t.firstRow(raw)
	}

	// Spreadsheets quote a line that holds a delimiter and pad it with more.
	if padded := strings.TrimRight(body, " \t,;"); len(padded) > 1 && padded[0] == '"' && strings.Count(padded, `"`) == 2 &&
		padded[len(padded)-1] == '"' {
		body, _ = uncomment(padded[1 : len(padded)-1])
	}
	if key, unit, value, ok := headerKey(body); ok {
		value = strings.TrimRight(value, " \t,;")
		if fault := t.header.set(key, unit, value); fault != nil {
			return t.fail(t.lines+1, t.at, "", fault.want, quote(value), fault.fix)
		}
		return nil
	}
	if t.unitsLine != 0 && t.unitsLine == t.lines+1 {
		if with, ok := t.candidate.withUnits(body); ok {
			t.candidate = with
			t.tryColumns()
			return nil
		}
	}
	if name, rest, ok := strings.Cut(body, ":"); ok && (canonName(name) == "columns" || canonName(name) == "channels") {
		body = strings.TrimSpace(rest)
	}
	if !prefixed && t.looksLikeRow(raw) {
		if t.candidate.known > 0 {
			if fault := t.tryColumns(); fault != nil {
				return t.badColumns(fault)
			}
			return t.firstRow(raw)
		}
		return t.fail(t.lines+1, t.at, "", "a line of column names before the first row of numbers", quote(raw), fixColumns)
	}
	if c, ok := readColumnLine(body, t.opt.MaxColumns+2); ok && c.known >= t.candidate.known {
		c.line, c.pos = t.lines+1, t.at
		t.candidate = c
		t.unitsLine = t.lines + 2
		t.tryColumns()
	}
	return nil
}

const fixColumns = "export with one line of column names and units, such as time [s], force [nN], height [um]"

// tryColumns takes the candidate for the column line if nothing is amiss. If
// something is, units may follow, or a better line: it is an error only once
// the first row comes.
func (t *Text) tryColumns() *columnFault {
	p, fault := makePlan(t.candidate, t.header.header.Kind, t.opt)
	t.plan = p
	return fault
}

// namesAgain takes a second line of column names, such as names without units
// behind a comment that has them: a complete one counts, an incomplete one may
// only repeat the first.
func (t *Text) namesAgain(body string) bool {
	c, ok := readColumnLine(body, t.opt.MaxColumns+2)
	if !ok || c.known < t.candidate.known {
		return false
	}
	if p, fault := makePlan(c, t.header.header.Kind, t.opt); fault == nil {
		c.line, c.pos = t.lines+1, t.at
		t.candidate, t.plan = c, p
		return true
	}
	return slices.EqualFunc(c.headings, t.candidate.headings, func(a, b heading) bool {
		return a.known == b.known && a.channel == b.channel
	})
}

// badColumns is the error of a candidate that stayed the best column line.
func (t *Text) badColumns(f *columnFault) error {
	return t.fail(t.candidate.line, t.candidate.pos, f.column, f.want, f.got, f.fix)
}

// looksLikeRow tells whether a line is numbers, two or more.
func (t *Text) looksLikeRow(raw []byte) bool {
	for _, delim := range delimiters {
		fields, fault := t.split(raw, delim)
		if fault != nil {
			continue
		}
		numbers := 0
		for _, f := range fields {
			if s := f.trimmed(raw); len(s) > 0 {
				if !isNumber(s) {
					numbers = -1
					break
				}
				numbers++
			}
		}
		if numbers >= 2 {
			return true
		}
	}
	return false
}

// finish reads what stands behind the last line end.
func (t *Text) finish() error {
	if t.fed == 0 {
		return t.fail(0, 0, "", "a run file", "an empty file", "export it again")
	}
	if !t.decided {
		if err := t.decide(); err != nil {
			return err
		}
	}
	whole := true
	if n := len(t.half); n > 0 {
		if t.nul > 0 && len(bytes.Trim(t.half, "\x00")) == 0 {
			t.nul += int64(n)
		}
		whole = false
	}
	line := bytes.TrimSuffix(t.carry, []byte("\r"))
	marked := bytes.TrimSuffix(bytes.TrimRight(line, "\x1a"), []byte("\r"))
	byMark := whole && t.nul == 0 && bytes.HasSuffix(line, []byte("\x1a"))
	if t.started {
		if err := t.lastLine(marked, byMark, whole); err != nil {
			return err
		}
	} else if byMark {
		if err := t.headerLine(marked); err != nil {
			return err
		}
	} else if t.plan != nil && whole {
		body, _ := uncomment(string(marked))
		t.ended = t.ended || isEndMark(body)
	}

	if t.rows > 0 {
		return nil
	}
	if t.nul == t.fed {
		return t.fail(0, 0, "", "a run file", "NUL bytes only: a file allocated but not written", "export it again")
	}
	if _, err := t.oneLine(t.carry); err != nil {
		return err
	}
	if t.plan == nil && t.candidate.known > 0 {
		if fault := t.tryColumns(); fault != nil {
			return t.badColumns(fault)
		}
	}
	if t.plan != nil {
		return t.fail(t.lines+1, t.at, "", "rows of numbers behind the column line", "the header only", "export it again, with the samples")
	}
	return t.fail(0, 0, "", "a line of column names, then rows of numbers", "no column line in the whole file", fixColumns)
}

// fail makes the error.
func (t *Text) fail(line, at int64, column, want, got, fix string) error {
	return &Error{File: t.name, Line: line, Byte: at, Column: column, Want: want, Got: got, Fix: fix,
		IsRun: t.plan != nil || t.candidate.known > 1}
}

// split cuts a line into fields that stay until the next call: two more than
// there can be columns are enough to see that there are too many.
func (t *Text) split(raw []byte, delim byte) ([]field, *splitFault) {
	fields, fault := split(t.fields[:0], raw, delim, t.opt.MaxColumns+2)
	t.fields = fields
	return fields, fault
}

func isBlank(b []byte) bool { return len(bytes.Trim(b, " \t\f")) == 0 }
