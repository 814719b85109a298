package intake

import (
	"strings"
	"testing"

	"golang.org/x/text/encoding/unicode"
)

// A last line without line end: how it was printed against the row before it
// tells a whole number from the first half of one.
func TestUnterminatedLastLine(t *testing.T) {
	for _, c := range []struct {
		columns, before, last string
		counts                bool
	}{
		{"height [um]", "20.25", "19.75", true},
		{"height [um]", "20.25", "9.75", true}, // shorter before the point: no sign of a cut
		{"height [um]", "20.25", "19.751", true},
		{"height [um]", "20.25", "19.7", false},
		{"height [um]", "20.25", "19.", false},
		{"height [um]", "20.25", "19", false},
		{"height [um]", "20.25", "", false},
		{"height [um]", "20.25", "-", false},
		{"height [um]", "20.25", "abc", false},
		{"height [um]", "20", "21", true},
		{"height [um]", "20", "2", false},
		{"height [um]", "2.02e+01", "1.98e+01", true},
		{"height [um]", "2.02e+01", "1.98e+0", false},
		{"height [um]", "2.02e+01", "1.98e", false},
		{"height [um]", "2.02e+01", "1.98", false},
		{"height [um]", "0.02", "9.8e-05", true}, // shortest form of C's %g
		{"height [um]", "0.02", "9.8e-0", false},
		{"height [um]", `"20.25"`, `"1.5"`, true}, // the closing quote proves it
		{"height [um]", `"20.25"`, `"1.5`, false},
		{"height [um]\tsegment", "20.25\t12", "19.75\t12", true},
		{"height [um]\tsegment", "20.25\t12", "19.75\t1", false},
		{"height [um]\tsegment", "20.25\t12", "19.75\t13", false}, // may have been 130
		{"height [um]\tradius [um]", "20.25\t9.70", "19.75\t", true},
		{"height [um]\tradius [um]", "20.25\t9.70", "19.75\t9.71", true},
		{"height [um]\tradius [um]", "20.25\t", "19.75\t9.71", false}, // nothing to compare with
		{"height [um]\tradius [um]", "20.25\t9.70", "19.75", false},
		{"height [um]\tvalve", "20.25\topen", "19.75\to", true}, // not a channel
		{"height [um]", "20.25\t", "19.7\t", true},              // a delimiter closes the cell
	} {
		head := "time [s]\tforce [nN]\t" + c.columns + "\n0.1\t1\t" + c.before + "\n"
		file := head + "0.2\t1\t" + c.last
		o := sameHoweverCut(t, []byte(file), Options{}, ones(len(file)))
		want, end := 1, len(head)
		if c.counts {
			want, end = 2, len(file)
		}
		text, _ := reading(t, []byte(file), Options{}, nil)
		if o.err != nil || len(o.rows) != want || text.Byte() != int64(end) {
			t.Errorf("%q behind %q: %d rows, read to %d of %d, %v", c.last, c.before, len(o.rows), text.Byte(), len(file), o.err)
		}
		// A Ctrl-Z is a line end: then the line is read, or at fault, as any.
		_, z := reading(t, []byte(file+"\x1a"), Options{}, nil)
		_, lf := reading(t, []byte(file+"\n"), Options{}, nil)
		if len(z.rows) != len(lf.rows) || (z.err == nil) != (lf.err == nil) {
			t.Errorf("%q: Ctrl-Z %v, line feed %v", c.last, z, lf)
		}
	}
}

func TestHalfACharacterAtTheEnd(t *testing.T) {
	const columns, row = "time [s]\tforce [nN]\theight [um]\n0.1\t1.0\t20.25\n", "0.2\t1.5\t20.50"
	for _, e := range []unicode.Endianness{unicode.LittleEndian, unicode.BigEndian} {
		enc := utf16Of(e, unicode.UseBOM)
		for _, c := range []struct {
			file []byte
			rows int
			nul  int64
		}{
			{enc([]byte(columns + row)), 2, 0},
			{append(enc([]byte(columns+row)), '7'), 1, 0}, // half of a digit to come
			{append(enc([]byte(columns)), 0), 1, 0},       // half of what may be anything
			{append(enc([]byte(columns)), 0, 0, 0, 0, 0), 1, 5},
		} {
			text, o := reading(t, c.file, Options{}, nil)
			if o.err != nil || len(o.rows) != c.rows || text.NULTail() != c.nul {
				t.Errorf("%q: %v", c.file, o)
			}
			sameHoweverCut(t, c.file, Options{}, ones(len(c.file)))
		}
	}
}

func TestEndMark(t *testing.T) {
	for line, ended := range map[string]bool{
		"# end": true, "#END\r": true, "// End": true, "end": true, "% end\t\t": true, "'end": true, "; end": true, "### end ###": false,
		"# endothelial": false, "# the end": false, "": false, "ending": false,
	} {
		for _, eol := range []string{"\n", ""} {
			text, o := reading(t, []byte(goodColumns+"0.1\t1.0\t20.0\n"+line+eol), Options{}, nil)
			if line == "ending" && eol == "\n" {
				if o.err == nil {
					t.Errorf("%q taken", line)
				}
				continue
			}
			if o.err != nil || (text.Complete() != "") != ended {
				t.Errorf("%q: %q, %v", line+eol, text.Complete(), o.err)
			}
		}
	}
	// Before the column line it ends nothing.
	if text, _ := reading(t, []byte("# end\n"+goodColumns), Options{}, nil); text.Complete() != "" {
		t.Error("an end mark in the header")
	}
}

// Offsets are those of the file, whatever its encoding.
func TestOffsets(t *testing.T) {
	// µ takes one code unit and 𝛾 two, but 2 and 4 bytes of UTF-8.
	const good = "# note: \u00b5 \U0001D6FE\ntime [s]\tforce [nN]\theight [\u00b5m]\n0.1\t1\t2\n0.2\t"
	for name, enc := range map[string]func([]byte) []byte{
		"UTF-8": func(b []byte) []byte { return b }, "UTF-8 BOM": bom,
		"UTF-16LE": utf16Of(unicode.LittleEndian, unicode.UseBOM), "UTF-16BE": utf16Of(unicode.BigEndian, unicode.IgnoreBOM),
	} {
		want := int64(len(enc([]byte(good))))
		for _, tail := range []string{"bad\t2\n", "\x00\x001\n"} {
			file := enc([]byte(good + tail))
			o := sameHoweverCut(t, file, Options{}, ones(len(file)))
			if e, ok := o.err.(*Error); !ok || e.Byte != want || e.Line != 4 {
				t.Errorf("%s, %q: %v, want byte %d", name, tail, o.err, want)
			}
		}
	}
}

// A good row longer than the longest line is refused however it came.
func TestLongRow(t *testing.T) {
	file := []byte(goodColumns + "0.1\t1.0\t20.0" + strings.Repeat(" ", 40) + "\n")
	o := sameHoweverCut(t, file, Options{MaxLine: 45}, ones(len(file)))
	if o.err == nil || !strings.Contains(o.err.Error(), "line 3") || len(o.rows) != 1 {
		t.Error(o)
	}
}

// Which of two faults of one line is told must not depend on the cut.
func TestControlByteBehindTheLongestLine(t *testing.T) {
	for _, file := range []string{strings.Repeat("a", 30) + "\x01\n", strings.Repeat("a", 19) + "\x01" + strings.Repeat("a", 30)} {
		sameHoweverCut(t, []byte(file), Options{MaxLine: 20}, []int{21, 1, 1, 1})
		sameHoweverCut(t, []byte(file), Options{MaxLine: 20}, ones(len(file)))
	}
}

func TestOnlyWhitespaceIsNoRun(t *testing.T) {
	for _, file := range []string{"\n", "  ", "\x1a", "\r\n\r\n", "\xef\xbb\xbf", "\xff\xfe"} {
		if _, o := reading(t, []byte(file), Options{}, nil); o.err == nil || !strings.Contains(o.err.Error(), "no column line") {
			t.Errorf("%q: %v", file, o.err)
		}
	}
}
