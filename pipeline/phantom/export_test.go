package phantom

import (
	"bytes"
	"encoding/binary"
	"math"
	"strconv"
	"strings"
	"testing"
	"time"
	"unicode/utf16"

	"platen/pipeline/run"
)

// short returns an ordinary run of a few seconds, everything in the header.
func short() Spec {
	s := Ordinary(6)
	s.Rig.RateHz = 500
	s.Name = "short"
	s.Header = run.Header{
		Kind: run.KindCell, Cell: "birch 3", Session: "birch", Condition: "untreated", Operator: "someone", Medium: "L-15", Note: "first of the day",
		Started:          time.Date(2026, 4, 9, 8, 5, 6, 0, time.FixedZone("", -3*3600)),
		TemperatureK:     &run.Quantity{Value: 310.15, U: 0.5},
		DriveFrequencyHz: 2,
	}
	s.Protocol = []Move{Hold(0.5), Ramp(1.6*s.Cell.RadiusM, 20e-6), Oscillate(2, 0.1e-6, 3)}
	return s
}

func written(t *testing.T, s Spec) string {
	t.Helper()
	var b bytes.Buffer
	n, err := simulate(t, s).WriteTo(&b)
	if err != nil {
		t.Fatal(err)
	}
	if n != int64(b.Len()) {
		t.Fatalf("WriteTo says %d bytes and wrote %d", n, b.Len())
	}
	return b.String()
}

// table splits a text into header lines, names and fields.
func table(t *testing.T, text, eol, delimiter, comment string) (header, names []string, rows [][]string, rest []string) {
	t.Helper()
	if !strings.HasSuffix(text, eol) {
		t.Fatal("the last line has no line end")
	}
	for _, line := range strings.Split(strings.TrimSuffix(text, eol), eol) {
		if strings.ContainsAny(line, "\r\n") {
			t.Fatalf("line %q holds a line end of another kind", line)
		}
		switch {
		case strings.HasPrefix(line, comment) && names == nil:
			header = append(header, strings.TrimPrefix(line, comment))
		case strings.HasPrefix(line, comment):
			rest = append(rest, strings.TrimPrefix(line, comment))
		case names == nil:
			names = strings.Split(line, delimiter)
		default:
			rows = append(rows, strings.Split(line, delimiter))
		}
	}
	return header, names, rows, rest
}

func TestHeaderLines(t *testing.T) {
	s := short()
	s.Rig.DiameterErrorM = 0.1e-6
	s.Cell.RadiusM = 9.5e-6
	header, names, rows, rest := table(t, written(t, s), "\n", "\t", "# ")
	want := []string{
		"kind: cell", "cell: birch 3", "session: birch", "condition: untreated", "operator: someone", "medium: L-15",
		"note: first of the day", "started: 2026-04-09T08:05:06-03:00", "spring constant [N/m]: 0.21 ± 0.01",
		"diameter [um]: 19.1 ± 0.3", "temperature [K]: 310.15 ± 0.5", "drive frequency [Hz]: 2",
		"samples: " + strconv.Itoa(len(rows)),
	}
	if strings.Join(header, "\n") != strings.Join(want, "\n") {
		t.Errorf("header:\n%s\nwant:\n%s", strings.Join(header, "\n"), strings.Join(want, "\n"))
	}
	if got := strings.Join(names, "|"); got != "time [s]|force [nN]|height [um]|radius [um]" {
		t.Errorf("columns %s", got)
	}
	if rest != nil {
		t.Errorf("lines behind the rows: %q", rest)
	}
}

// TestTextParsesBack reads every dialect back, by a parser of its own, to the
// numbers that Blocks gave, within half a unit of the seventh digit.
func TestTextParsesBack(t *testing.T) {
	decodeUTF16 := func(order binary.ByteOrder) func(string) string {
		return func(s string) string {
			var units []uint16
			for i := 0; i+1 < len(s); i += 2 {
				units = append(units, order.Uint16([]byte(s[i:i+2])))
			}
			if units[0] != 0xfeff {
				t.Error("no byte order mark")
			}
			return string(utf16.Decode(units[1:]))
		}
	}
	for _, c := range []struct {
		name   string
		d      Dialect
		decode func(string) string
	}{
		{"own", Dialect{}, nil},
		{"comma, line feeds and returns", Dialect{Delimiter: ',', CRLF: true, Segments: true}, nil},
		{"semicolon, decimal comma", Dialect{Delimiter: ';', DecimalComma: true, Ending: EndMark}, nil},
		{"deflection and drive", Dialect{Deflection: true, Comment: "% "}, nil},
		{"section area, micro sign", Dialect{SectionArea: true, MicroSign: true}, nil},
		{"marked UTF-8", Dialect{Encoding: UTF8Marked, NoHeader: true, Ending: Silent}, func(s string) string { return strings.TrimPrefix(s, "\xef\xbb\xbf") }},
		{"UTF-16, little end first", Dialect{Encoding: UTF16LittleEndian, MicroSign: true, CRLF: true}, decodeUTF16(binary.LittleEndian)},
		{"UTF-16, big end first", Dialect{Encoding: UTF16BigEndian, MicroSign: true, Ending: EndMark}, decodeUTF16(binary.BigEndian)},
		{"Latin-1", Dialect{Encoding: Latin1, MicroSign: true}, func(s string) string {
			var u []rune
			for _, b := range []byte(s) {
				u = append(u, rune(b))
			}
			return string(u)
		}},
	} {
		t.Run(c.name, func(t *testing.T) {
			s := short()
			s.Dialect = c.d
			r := simulate(t, s)
			b := columns(t, r)
			text := written(t, s)
			if c.decode != nil {
				text = c.decode(text)
			}
			eol, delimiter, comment := "\n", "\t", "# "
			if c.d.CRLF {
				eol = "\r\n"
			}
			if c.d.Delimiter != 0 {
				delimiter = string(c.d.Delimiter)
			}
			if c.d.Comment != "" {
				comment = c.d.Comment
			}
			header, names, rows, rest := table(t, text, eol, delimiter, comment)
			if (len(header) == 0) != c.d.NoHeader {
				t.Errorf("%d header lines", len(header))
			}
			declared := strings.Contains(strings.Join(header, "\n"), "samples: "+strconv.Itoa(len(rows)))
			if declared != (c.d.Ending == Declared) {
				t.Errorf("number of samples declared: %v", declared)
			}
			if ended := len(rest) == 1 && rest[0] == "end"; ended != (c.d.Ending == EndMark) {
				t.Errorf("lines behind the rows: %q", rest)
			}
			if strings.Contains(strings.Join(names, " "), "µm") != c.d.MicroSign {
				t.Errorf("columns %q", names)
			}
			if len(rows) != b.Len() {
				t.Fatalf("%d rows, want %d", len(rows), b.Len())
			}
			for i, fields := range rows {
				value := func(k int) float64 {
					f := fields[k]
					if f == "" {
						return math.NaN()
					}
					if c.d.DecimalComma {
						f = strings.Replace(f, ",", ".", 1)
					}
					v, err := strconv.ParseFloat(f, 64)
					if err != nil {
						t.Fatal(err)
					}
					return v
				}
				force, height, radius := b.Force[i]*1e9, b.Height[i]*1e6, b.Radius[i]*1e6
				if c.d.Deflection {
					// k = 0.21 N/m: a nanonewton bends it by 1/0.21 nm.
					force, height = force/0.21, height+force/0.21*1e-3
				}
				if c.d.SectionArea {
					radius = math.Pi * radius * radius
				}
				want := []float64{b.Time[i], force, height, radius}
				if c.d.Segments {
					want = append(want, float64(b.Segment[i]))
				}
				if len(fields) != len(want) {
					t.Fatalf("row %d has %d fields, want %d", i, len(fields), len(want))
				}
				for k := range want {
					got := value(k)
					if math.IsNaN(got) != math.IsNaN(want[k]) || math.Abs(got-want[k]) > 5.01e-7*math.Abs(want[k]) {
						t.Fatalf("row %d, %s: %g, want %g", i, names[k], got, want[k])
					}
				}
			}
		})
	}
}

// TestExportPieces: pieces joined are the file, come in order of time and hold
// whole rows.
func TestExportPieces(t *testing.T) {
	s := short()
	r := simulate(t, s)
	pieces, err := r.Export(s.Dialect)
	if err != nil {
		t.Fatal(err)
	}
	var all []byte
	before, n := 0.0, 0
	for at, p := range pieces {
		if at < before || p[len(p)-1] != '\n' {
			t.Fatalf("piece %d at %g s after one at %g s ends in %q", n, at, before, p[len(p)-1])
		}
		if rows := bytes.Count(p, []byte("\n")); n > 0 && rows > 25 {
			t.Fatalf("piece %d holds %d rows, want a twentieth of a second", n, rows)
		}
		before = at
		n++
		all = append(all, p...)
	}
	if string(all) != written(t, s) {
		t.Error("the pieces are not the file")
	}
	// A receiver may stop.
	n = 0
	for range pieces {
		if n++; n == 3 {
			break
		}
	}
	if n != 3 {
		t.Errorf("%d pieces after stopping at 3", n)
	}
}

func TestExportRefused(t *testing.T) {
	s := short()
	for _, d := range []Dialect{{Delimiter: 'x'}, {Encoding: 9}, {Ending: 9}, {Delimiter: ' '}, {Delimiter: ',', DecimalComma: true}} {
		if _, err := simulate(t, s).Export(d); err == nil {
			t.Errorf("%+v was taken", d)
		}
	}
	s.Rig.SpringConstantNPerM = 0
	if _, err := simulate(t, s).Export(Dialect{Deflection: true}); err == nil {
		t.Error("a deflection was written without a spring constant")
	}
}

func BenchmarkExport(b *testing.B) {
	r, err := Simulate(Ordinary(1))
	if err != nil {
		b.Fatal(err)
	}
	b.ReportAllocs()
	var size int64
	for b.Loop() {
		size = 0
		pieces, err := r.Export(Dialect{})
		if err != nil {
			b.Fatal(err)
		}
		for _, p := range pieces {
			size += int64(len(p))
		}
	}
	b.SetBytes(size)
}
