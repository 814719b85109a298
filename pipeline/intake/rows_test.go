package intake

import (
	"bytes"
	"math"
	"testing"

	"platen/pipeline/run"
)

// rowReaders returns one reader per delimiter, each behind its first row, with
// a column of every role.
func rowReaders(t testing.TB) []*Text {
	var all []*Text
	for _, d := range delimiters {
		text := NewText("a", Options{}, func(*run.Block) error { return nil })
		file := "note,time [ms],force [nN],radius [um],segment\nx,0.5,1,2,3\n"
		file = "# kind: thermal\n" + string(bytes.ReplaceAll([]byte(file), []byte(","), []byte{d}))
		if d == ' ' {
			file = "# kind: thermal\nnote time[ms] force[nN] radius[um] segment\nx 0.5 1 2 3\n"
		}
		if err := text.Feed([]byte(file)); err != nil || text.delim != d || !text.started {
			t.Fatal(err, text.delim)
		}
		all = append(all, text)
	}
	return all
}

func cells(text *Text) []float64 {
	b := text.plan.take(0, 1)
	return []float64{b.Time[0], b.TimeQuantum[0], b.Force[0], b.Radius[0], float64(b.Segment[0])}
}

// sameByBothRoads compares fastRow with its careful twin: what the fast road
// takes, the careful one takes too, with the same bits.
func sameByBothRoads(t *testing.T, line []byte) (fast bool) {
	if bytes.ContainsAny(line, "\n\x00") {
		return false
	}
	for _, text := range rowReaders(t) {
		end := text.fastRow(append(bytes.Clone(line), '\n'), 0)
		if end < 0 {
			continue
		}
		fast = true
		a := cells(text)
		isRow, err := text.rowLine(line)
		if end != len(line)+1 || !isRow || err != nil {
			t.Fatalf("%q by %s: fast road to %d, careful road: row %v, %v", line, delimiterName(text.delim), end, isRow, err)
		}
		text.n = 0
		for i, v := range cells(text) {
			if math.Float64bits(v) != math.Float64bits(a[i]) {
				t.Fatalf("%q by %s: cell %d fast %x, careful %x", line, delimiterName(text.delim), i, a[i], v)
			}
		}
	}
	return fast
}

var rowLines = []struct {
	line string
	fast bool // an ordinary line must take the fast road
}{
	{"x,1.5,-2e3,,4", true}, {"ab c;  1.5 ; -0;9.7;-7\r", true}, {"x 1.5  2.5   9 3  ", true}, {"x\t1.5\t2\t\t4\t", true},
	{"#x,1,2,3,4", false}, {"//;1;2;3;4", false}, {"\"x,\",1,2,3,4", false}, {"x,1,2,3,4.5", false}, {"x,1,2,3", false},
	{"x,1,2,3,4,5", false}, {"x,\"1\",2,3,4", false}, {"x\ty,1,2,,4", true}, {"x,1,2,3,4 \t", false}, {"end,1,2,3,4", true},
	{"x,1,2,3,99999999999", false}, {"x\r,1,2,3,4", false}, {"x 1\t2 3 4", false}, {";1;2;3;4", false}, {"", false}, {"\x1a", false},
}

func TestBothRoadsOfARow(t *testing.T) {
	for _, c := range rowLines {
		if got := sameByBothRoads(t, []byte(c.line)); got != c.fast {
			t.Errorf("%q: fast road %v", c.line, got)
		}
	}
}

func FuzzRow(f *testing.F) {
	for _, c := range rowLines {
		f.Add([]byte(c.line))
	}
	f.Fuzz(func(t *testing.T, line []byte) { sameByBothRoads(t, line) })
}

func TestAlignedSpacesAndTabs(t *testing.T) {
	file := []byte("  time [s]   force [nN]   height [um]\n   0.0005    1.5   20.0   \n\t0.0010 \t 2.5\t19.5\n 0.0015  -2.5  19.0\r\n\n")
	o := sameHoweverCut(t, file, Options{}, ones(len(file)))
	if o.err != nil || len(o.rows) != 3 {
		t.Fatal(o)
	}
}
