package intake

import (
	"bytes"
	"errors"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"testing"

	"golang.org/x/text/encoding/unicode"
	"pgregory.net/rapid"

	"platen/pipeline/run"
)

// outcome is all that can be seen of a reading, as one comparable text: rows
// bit by bit, then the state.
type outcome struct {
	rows  []string
	state string
	err   error
}

// reading feeds a file in the pieces given (nil: at once) and finishes it.
func reading(t testing.TB, file []byte, opt Options, cuts []int) (*Text, outcome) {
	var o outcome
	text := NewText("runs/a.tsv", opt, func(b *run.Block) error {
		if b.Len() == 0 || b.Len() > blockRows || b.FirstRow != int64(len(o.rows)) {
			t.Fatalf("block of %d rows from %d after %d rows", b.Len(), b.FirstRow, len(o.rows))
		}
		for i := range b.Time {
			o.rows = append(o.rows, rowText(t, b, i))
		}
		return nil
	})
	var err error
	for _, k := range append(cuts, len(file)) {
		k = min(k, len(file))
		// A copy that is spoiled afterwards shows a piece that was kept.
		piece := bytes.Clone(file[:k])
		file = file[k:]
		err = text.Feed(piece)
		for i := range piece {
			piece[i] = 'x'
		}
		if err != nil {
			break
		}
	}
	if ferr := text.Finish(); err != nil && ferr != err {
		t.Fatalf("Feed gave %v, Finish then %v", err, ferr)
	} else {
		err = ferr
	}
	if again := text.Feed([]byte("1")); err != nil && again != err {
		t.Fatalf("error %v, then %v", err, again)
	}
	if text.Rows() != int64(len(o.rows)) {
		t.Fatalf("Rows %d, handed on %d", text.Rows(), len(o.rows))
	}
	h, complete := text.Header()
	q := func(q *run.Quantity) string {
		if q == nil {
			return "-"
		}
		return fmt.Sprintf("%x±%x", q.Value, q.U)
	}
	spring, sens, dia, temp := q(h.SpringConstantNPerM), q(h.SensitivityMPerV), q(h.DiameterM), q(h.TemperatureK)
	h.SpringConstantNPerM, h.SensitivityMPerV, h.DiameterM, h.TemperatureK = nil, nil, nil, nil
	o.state = fmt.Sprintf("%+v %s %s %s %s %v %+v %q nul=%d line=%d byte=%d err=%v", h, spring, sens, dia, temp, complete,
		text.Columns(), text.Complete(), text.NULTail(), text.Line(), text.Byte(), err)
	o.err = err
	return text, o
}

func rowText(t testing.TB, b *run.Block, i int) string {
	var s strings.Builder
	for _, c := range []struct {
		name string
		v    []float64
	}{{"t", b.Time}, {"q", b.TimeQuantum}, {"F", b.Force}, {"dm", b.DeflectionM}, {"dv", b.DeflectionV}, {"h", b.Height},
		{"z", b.Drive}, {"R", b.Radius}, {"A", b.Area}, {"T", b.Temperature}} {
		if c.v == nil {
			continue
		}
		if len(c.v) != b.Len() {
			t.Fatalf("%s has %d of %d rows", c.name, len(c.v), b.Len())
		}
		fmt.Fprintf(&s, "%s=%x ", c.name, math.Float64bits(c.v[i]))
	}
	if b.Segment != nil {
		fmt.Fprintf(&s, "s=%d", b.Segment[i])
	}
	return s.String()
}

func (o outcome) equal(p outcome) bool { return o.state == p.state && slices.Equal(o.rows, p.rows) }

func (o outcome) String() string { return strings.Join(o.rows, "\n") + "\n" + o.state }

// sameHoweverCut compares reading at once with reading in pieces.
func sameHoweverCut(t testing.TB, file []byte, opt Options, cuts []int) outcome {
	_, whole := reading(t, file, opt, nil)
	if _, cut := reading(t, file, opt, cuts); !whole.equal(cut) {
		t.Fatalf("cut at %v\n%q\nat once:\n%v\nin pieces:\n%v", cuts, file, whole, cut)
	}
	return whole
}

func ones(n int) []int { return slices.Repeat([]int{1}, n) }

// The canonical rows: time s, force nN, height um, radius um (sparse).
var canonical = [][4]string{
	{"0.0000", "-1.234567e-01", "21.040", "9.70"},
	{"0.0005", "2.5", "21.039", ""},
	{"0.0010", "1.75e2", "21.000", ""},
	{"0.0015", "-0", "20.5", "9.81"},
}

// dialect writes the canonical rows in one of many ways.
type dialect struct {
	name    string
	delim   string
	prefix  string
	eol     string
	comma   bool
	quote   bool
	colsRaw bool // column line without prefix
	below   bool // units on the line below
	suffix  bool // name_unit
	enc     func([]byte) []byte
}

func (d dialect) write() []byte {
	number := func(s string) string {
		if d.comma {
			s = strings.ReplaceAll(s, ".", ",")
		}
		if d.quote && s != "" {
			s = `"` + s + `"`
		}
		return s
	}
	prefix := d.prefix
	if prefix != "" {
		prefix += " "
	}
	lines := []string{"kind: cell", "Cell = K7-03", "Spring_Constant [N/m]: " + strings.Trim(number("0.21"), `"`) + " ± 0.02", "nothing known: 3"}
	for i := range lines {
		lines[i] = prefix + lines[i]
	}
	cols := prefix
	if d.colsRaw {
		cols = ""
	}
	names := []string{"Time [s]", "force (nN)", "Plate separation [µm]", "equator_radius [um]"}
	if d.delim == " " {
		names[2] = "height [µm]"
	}
	if d.suffix {
		names = []string{"time_s", "force_nN", "height_um", "equator_radius_um"}
	}
	if d.quote {
		for i := range names {
			names[i] = `"` + names[i] + `"`
		}
	}
	if d.below {
		names = []string{"time", "force", "height", "radius"}
		lines = append(lines, cols+strings.Join(names, d.delim), cols+strings.Join([]string{"s", "nN", "[µm]", "μm"}, d.delim))
	} else {
		lines = append(lines, cols+strings.Join(names, d.delim))
	}
	for _, r := range canonical {
		var cells []string
		for _, c := range r {
			if d.delim == " " && c == "" {
				c = "9.75" // spaces cannot separate an empty cell
			}
			cells = append(cells, number(c))
		}
		lines = append(lines, strings.Join(cells, d.delim))
	}
	eol := d.eol
	if eol == "" {
		eol = "\n"
	}
	var b []byte
	for i, l := range lines {
		b = append(b, l...)
		if eol == "mixed" {
			b = append(b, []string{"\n", "\r\n"}[i%2]...)
		} else {
			b = append(b, eol...)
		}
	}
	if d.enc != nil {
		b = d.enc(b)
	}
	return b
}

func utf16Of(e unicode.Endianness, p unicode.BOMPolicy) func([]byte) []byte {
	return func(b []byte) []byte {
		out, err := unicode.UTF16(e, p).NewEncoder().Bytes(b)
		if err != nil {
			panic(err)
		}
		return out
	}
}

// latin1 writes the code point of each character as one byte (ISO/IEC 8859-1).
func latin1(b []byte) []byte {
	var out []byte
	for _, r := range string(b) {
		if r == 'μ' {
			r = 'µ' // Greek mu is not in Latin-1
		}
		out = append(out, byte(r))
	}
	return out
}

func bom(b []byte) []byte { return append([]byte("\xef\xbb\xbf"), b...) }

var dialects = []dialect{
	{name: "tab", delim: "\t", prefix: "#", colsRaw: true},
	{name: "tab commented columns", delim: "\t", prefix: "#"},
	{name: "comma", delim: ",", prefix: "%"},
	{name: "semicolon decimal comma", delim: ";", prefix: "//", comma: true, colsRaw: true},
	{name: "tab decimal comma", delim: "\t", prefix: "!", comma: true},
	{name: "quoted comma", delim: ",", prefix: "#", quote: true, colsRaw: true},
	{name: "quoted decimal comma in comma", delim: ",", prefix: "#", quote: true, comma: true, colsRaw: true},
	{name: "semicolon prefix", delim: "\t", prefix: ";"},
	{name: "semicolon prefix and delimiter", delim: ";", prefix: ";", colsRaw: true},
	{name: "apostrophe", delim: ",", prefix: "'"},
	{name: "no prefix", delim: "\t", colsRaw: true},
	{name: "CRLF", delim: "\t", prefix: "#", eol: "\r\n"},
	{name: "mixed line ends", delim: "\t", prefix: "#", eol: "mixed"},
	{name: "units below", delim: "\t", prefix: "#", below: true, colsRaw: true},
	{name: "units below, commented", delim: ";", prefix: "#", below: true},
	{name: "suffix", delim: ",", suffix: true, colsRaw: true},
	{name: "comma and blank", delim: ", ", prefix: "#", colsRaw: true},
	{name: "BOM", delim: "\t", prefix: "#", enc: bom},
	{name: "Latin-1", delim: "\t", prefix: "#", enc: latin1},
	{name: "Latin-1 units below", delim: "\t", prefix: "#", below: true, enc: latin1},
	{name: "UTF-16LE BOM", delim: "\t", prefix: "#", enc: utf16Of(unicode.LittleEndian, unicode.UseBOM)},
	{name: "UTF-16BE BOM CRLF", delim: "\t", prefix: "#", eol: "\r\n", enc: utf16Of(unicode.BigEndian, unicode.UseBOM)},
	{name: "UTF-16LE", delim: "\t", prefix: "#", enc: utf16Of(unicode.LittleEndian, unicode.IgnoreBOM)},
	{name: "UTF-16BE", delim: ";", prefix: "%", comma: true, enc: utf16Of(unicode.BigEndian, unicode.IgnoreBOM)},
	{name: "spaces", delim: " ", prefix: "#"},
	{name: "spaces units below", delim: " ", below: true, colsRaw: true},
}

func TestDialectsGiveTheSameRows(t *testing.T) {
	// strconv.ParseFloat and one division are the reference: 1 nN = 1e-9 N.
	want := func(sparseFill string) []string {
		var rows []string
		for _, r := range canonical {
			v := func(s string, div float64) uint64 {
				if s == "" {
					s = sparseFill
				}
				if s == "" {
					return math.Float64bits(math.NaN())
				}
				x, err := strconv.ParseFloat(s, 64)
				if err != nil {
					t.Fatal(err)
				}
				return math.Float64bits(x / div)
			}
			rows = append(rows, fmt.Sprintf("t=%x q=%x F=%x h=%x R=%x ", v(r[0], 1), math.Float64bits(1e-4), v(r[1], 1e9), v(r[2], 1e6), v(r[3], 1e6)))
		}
		return rows
	}
	for _, d := range dialects {
		t.Run(d.name, func(t *testing.T) {
			file := d.write()
			text, o := reading(t, file, Options{}, nil)
			fill := ""
			if d.delim == " " {
				fill = "9.75"
			}
			if o.err != nil || !slices.Equal(o.rows, want(fill)) {
				t.Fatalf("%s\n%v\nwant\n%v", file, o, strings.Join(want(fill), "\n"))
			}
			h, _ := text.Header()
			if h.Kind != run.KindCell || h.Cell != "K7-03" || h.SpringConstantNPerM == nil || *h.SpringConstantNPerM != (run.Quantity{Value: 0.21, U: 0.02}) {
				t.Errorf("header %+v", h)
			}
			if text.Byte() != int64(len(file)) {
				t.Errorf("Byte %d of %d", text.Byte(), len(file))
			}
			sameHoweverCut(t, file, Options{}, ones(len(file)))
			// Without its line feed the last row counts only where its last
			// cell is proved whole: by quotes, or by the row before it.
			proved := 3
			if d.quote || d.delim == " " {
				proved = 4
			}
			open := file[:len(file)-int(text.enc.unit())]
			if _, o := reading(t, open, Options{}, nil); o.err != nil || !slices.Equal(o.rows, want(fill)[:proved]) {
				t.Errorf("without the last line feed: %v", o)
			}
		})
	}
}

// anyFile draws a file, good or spoiled.
func anyFile(r *rapid.T) []byte {
	file := dialects[rapid.IntRange(0, len(dialects)-1).Draw(r, "dialect")].write()
	if rapid.Bool().Draw(r, "spoil") {
		at := rapid.IntRange(0, len(file)).Draw(r, "at")
		what := rapid.SampledFrom([]string{"\x00", "\x00\x00\x00", "x", "\n", "\r", "\r\n", "\t", ";", ",", " ", "\"", "# end\n", "#", "\xb5", "\xd8", "\x1a", "1e999", "e", ".", "-", "\x01", "\ufeff"}).Draw(r, "what")
		file = slices.Concat(file[:at], []byte(what), file[at:])
	}
	switch rapid.IntRange(0, 5).Draw(r, "tail") {
	case 0:
		file = append(file, make([]byte, rapid.IntRange(1, 9).Draw(r, "nul"))...)
	case 1:
		file = append(file, "# end"...)
	case 2:
		file = append(file, 0x1a)
	case 3:
		file = file[:rapid.IntRange(0, len(file)).Draw(r, "cut")]
	}
	return file
}

func TestPiecesDoNotMatter(t *testing.T) {
	rapid.Check(t, func(r *rapid.T) {
		file := anyFile(r)
		cuts := rapid.SliceOfN(rapid.IntRange(0, 40), 0, 60).Draw(r, "cuts")
		opt := Options{MaxLine: rapid.SampledFrom([]int{0, 0, 60, 30, 5}).Draw(r, "maxline")}
		sameHoweverCut(t, file, opt, cuts)
		sameHoweverCut(t, file, opt, ones(len(file)))
	})
}

// fixedFile is a run as an instrument prints it: fixed number forms.
func fixedFile(rows int, end string) []byte {
	var b bytes.Buffer
	fmt.Fprintf(&b, "# kind: cell\r\n# samples: %d\r\n# note: \u00b5\U0001D6FE\r\ntime [s]\tradius [um]\tsegment\tforce [nN]\theight [um]\r\n", rows)
	for i := range rows {
		radius := ""
		if i%5 == 0 {
			radius = fmt.Sprintf("%.2f", 9.7+float64(i)/100)
		}
		fmt.Fprintf(&b, "%.4f\t%s\t%d\t%.6e\t%.6e\r\n", float64(i)/2000, radius, i/7, float64(i)/3-1, 20-float64(i)/7)
	}
	b.WriteString(end)
	return b.Bytes()
}

// Every prefix of a good file gives the first rows of the whole, bit by bit,
// and none is taken for complete that is not.
func TestPrefixesAreNeverMistaken(t *testing.T) {
	for _, enc := range []func([]byte) []byte{nil, utf16Of(unicode.LittleEndian, unicode.UseBOM), utf16Of(unicode.BigEndian, unicode.IgnoreBOM)} {
		for _, end := range []string{"", "# end\r\n"} {
			file := fixedFile(12, end)
			if end != "" {
				file = bytes.Replace(file, []byte("samples"), []byte("someples"), 1)
			}
			if enc != nil {
				file = enc(file)
			}
			_, whole := reading(t, file, Options{}, nil)
			if whole.err != nil || len(whole.rows) != 12 {
				t.Fatal(whole)
			}
			for k := range len(file) {
				text, o := reading(t, file[:k], Options{}, nil)
				if len(o.rows) > len(whole.rows) || !slices.Equal(o.rows, whole.rows[:len(o.rows)]) {
					t.Fatalf("prefix of %d bytes %q\n%v\nwhole\n%v", k, file[max(0, k-40):k], o, whole)
				}
				if (o.err == nil) != (len(o.rows) > 0) {
					t.Fatalf("prefix of %d bytes: %d rows, error %v", k, len(o.rows), o.err)
				}
				switch text.Complete() {
				case run.ByCount:
					if end != "" || len(o.rows) != 12 {
						t.Fatalf("prefix of %d of %d bytes taken for complete with %d rows", k, len(file), len(o.rows))
					}
				case run.ByEndMark:
					// "# end" is there, only its line end is not.
					if end == "" || k < len(file)-4 {
						t.Fatalf("prefix of %d of %d bytes taken for ended", k, len(file))
					}
				}
			}
		}
	}
}

func TestBlocksAreNumberedAndBounded(t *testing.T) {
	file := benchmarkFile(5000)
	_, o := reading(t, file, Options{}, nil) // checks FirstRow and length of each
	if o.err != nil || len(o.rows) != 5000 {
		t.Fatal(len(o.rows), o.err)
	}
	_, p := reading(t, file, Options{}, slices.Repeat([]int{777}, len(file)/777))
	if !o.equal(p) {
		t.Fatal("pieces of 777 bytes differ")
	}
}

func TestSinkErrorEndsTheReading(t *testing.T) {
	stop := errors.New("disk full")
	calls := 0
	text := NewText("a", Options{}, func(*run.Block) error { calls++; return stop })
	file := benchmarkFile(3000)
	if err := text.Feed(file); err != stop {
		t.Fatal(err)
	}
	if err := text.Feed(file); err != stop || text.Finish() != stop || calls != 1 {
		t.Fatal(err, calls)
	}
	// Its error comes before that of a line behind the rows it refused.
	text = NewText("a", Options{}, func(*run.Block) error { return stop })
	if err := text.Feed(append(benchmarkFile(3), "x\n"...)); err != stop {
		t.Fatal(err)
	}
}

func TestFeedAfterFinishIsRefused(t *testing.T) {
	text := NewText("a", Options{}, func(*run.Block) error { return nil })
	if err := text.Feed(benchmarkFile(3)); err != nil || text.Finish() != nil || text.Finish() != nil {
		t.Fatal(err)
	}
	if err := text.Feed(benchmarkFile(3)); err == nil || text.Rows() != 3 {
		t.Fatal(err, text.Rows())
	}
}

func TestRowsTakeNoMemory(t *testing.T) {
	for _, cell := range []string{"1.25e-1", "0.12345678901234567890", "\"0.5\""} {
		text := NewText("a", Options{}, func(*run.Block) error { return nil })
		rows := bytes.Repeat([]byte("0.001\t"+cell+"\t20.5\t\r\n"), 2000)
		if err := text.Feed([]byte("time [s]\tforce [nN]\theight [um]\tradius [um]\n0.5\t1\t2\t3\n")); err != nil {
			t.Fatal(err)
		}
		if n := testing.AllocsPerRun(5, func() {
			// An odd length leaves a part of a line behind each time.
			if err := text.Feed(rows[:len(rows)-5]); err != nil {
				t.Fatal(err)
			}
			if err := text.Feed(rows[len(rows)-5:]); err != nil {
				t.Fatal(err)
			}
		}); n != 0 {
			t.Errorf("cells %s: %g allocations in 2000 rows", cell, n)
		}
	}
}

// Lines made to be slow or large must not be: what is known is short.
func TestMonstrousHeaderLines(t *testing.T) {
	const n = 1 << 20
	for _, line := range []string{
		strings.Repeat("_", n-10), strings.Repeat("t_", n/2-10), "spring constant [N/m]: " + strings.Repeat("1", n/2) + strings.Repeat("x1", n/4-20),
		strings.Repeat(",", n-10), strings.Repeat("t ", n/2-10), strings.Repeat("[", n-10), strings.Repeat("_", n/2) + ":" + strings.Repeat("±", n/4),
		strings.Repeat(`"`, n-10), strings.Repeat("#", n-10), strings.Repeat("0,", n/2-10),
	} {
		text := NewText("a", Options{}, func(*run.Block) error { return nil })
		_ = text.Feed([]byte(line + "\n")) // an error or none: that it ends is the test
		if err := text.Finish(); err == nil {
			t.Errorf("%.20s… taken for a run", line)
		}
		if cap(text.fields) > 1000 {
			t.Errorf("%.20s… took %d fields", line, cap(text.fields))
		}
	}
}

func TestNameOfTheFileIsShownSafely(t *testing.T) {
	text := NewText("a\x1b[2J\n.tsv", Options{}, func(*run.Block) error { return nil })
	if err := text.Finish(); err == nil || strings.ContainsAny(err.Error(), "\x1b\n") {
		t.Errorf("%q", err)
	}
}

func TestRowsBeforeAnErrorAreHandedOn(t *testing.T) {
	file := append(fixedFile(9, ""), "0.0045\t\tone\t1\t2\r\n"...)
	_, o := reading(t, file, Options{}, nil)
	var e *Error
	if len(o.rows) != 9 || !errors.As(o.err, &e) || !e.IsRun || e.Line != 14 || e.Column != "segment" || e.Got != `"one"` ||
		e.Byte != int64(bytes.Index(file, []byte("one"))) {
		t.Fatalf("%v\n%+v", o, e)
	}
}

// A line of 100 MB must not take 100 MB.
func TestLongLineIsRefusedEarly(t *testing.T) {
	text := NewText("a", Options{}, func(*run.Block) error { return nil })
	piece := bytes.Repeat([]byte("abcdefgh"), 8<<10)
	fed := 0
	for range 1600 {
		fed += len(piece)
		if err := text.Feed(piece); err != nil {
			if !strings.Contains(err.Error(), "at most 1048576 bytes") || fed > 2<<20 || cap(text.carry) > 4<<20 {
				t.Fatal(err, fed, cap(text.carry))
			}
			return
		}
	}
	t.Fatal("100 MB without a line end were taken")
}

func FuzzText(f *testing.F) {
	for _, d := range dialects {
		f.Add(d.write(), uint8(3))
	}
	f.Add(fixedFile(4, "# end"), uint8(1))
	f.Add([]byte("time [s],force [nN],height [um]\n0,000,1,25,3,5\n"), uint8(2))
	f.Add([]byte("# spring constant: 0.2 +/- 5 %\ntime [s] force [nN] height [um] x\n1 2 3 \"a b\"\n"), uint8(7))
	f.Add([]byte("time [s]\tforce [nN]\theight [um]\n1\t2\t3\n\x00\x00"), uint8(5))
	f.Add([]byte("\xff\xfe\x00\xd8\x00\xdc\x00\xdc\n\x00"), uint8(1))
	f.Fuzz(func(t *testing.T, file []byte, step uint8) {
		k := int(step) + 1
		sameHoweverCut(t, file, Options{MaxLine: 200}, slices.Repeat([]int{k}, len(file)/k))
	})
}
