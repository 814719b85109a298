package intake

import (
	"math"
	"strconv"
	"strings"
	"testing"

	"platen/pipeline/run"
)

// Every unit of the table with its size, from the SI Brochure (BIPM, 9th
// edition): tables 5, 7 (prefixes) and 8 (minute, hour), 2.3.1 (Celsius).
func TestUnits(t *testing.T) {
	for _, c := range []struct {
		column string
		in, si float64
	}{
		{"time [s]", 2, 2}, {"time [ms]", 2, 2e-3}, {"t [us]", 2, 2e-6}, {"t [µs]", 2, 2e-6}, {"t [μs]", 2, 2e-6}, {"time [ns]", 2, 2e-9},
		{"Elapsed time (min)", 2, 120}, {"time_h", 2, 7200},
		{"force [N]", 2, 2}, {"Load [mN]", 2, 2e-3}, {"F [uN]", 2, 2e-6}, {"force_nN", 2, 2e-9}, {"force_pn", 2, 2e-12},
		{"deflection [nm]", 2, 2e-9}, {"deflection [V]", 2, 2}, {"deflection (mV)", 2, 2e-3}, {"deflection_v", 2, 2},
		{"height [m]", 2, 2}, {"gap [mm]", 2, 2e-3}, {"separation [um]", 2, 2e-6}, {"h [nm]", 2, 2e-9},
		{"drive [um]", 2, 2e-6}, {"Piezo-position [µm]", 2, 2e-6}, {"plate_position_um", 2, 2e-6}, {"z [pm]", 2, 2e-12},
		{"radius [um]", 2, 2e-6}, {"diameter [um]", 2, 1e-6}, {"Equator diameter [m]", 2, 1},
		{"area [um2]", 2, 2e-12}, {"section area [µm²]", 2, 2e-12}, {"cross-section area [um^2]", 2, 2e-12}, {"area [m^2]", 2, 2}, {"area_nm2", 2, 2e-18},
		{"temperature [K]", 300, 300}, {"temperature [degC]", 37, 310.15}, {"Temp [°C]", 37, 310.15}, {"temperature [℃]", 37, 310.15},
		{"segment", 2, 2}, {"Segment [-]", 2, 2},
	} {
		names := []string{"time [s]", "force [nN]", "height [um]"}
		cells := []string{"0", "1", "1"}
		ch := head(c.column).channel
		at := map[Channel]int{Time: 0, Force: 1, Height: 2}
		v := strconv.FormatFloat(c.in, 'g', -1, 64)
		if i, ok := at[ch]; ok {
			names[i], cells[i] = c.column, v
		} else {
			names, cells = append(names, c.column), append(cells, v)
		}
		var got []float64
		text := NewText("u", Options{}, func(b *run.Block) error {
			for _, s := range [][]float64{b.Time, b.Force, b.DeflectionM, b.DeflectionV, b.Height, b.Drive, b.Radius, b.Area, b.Temperature} {
				got = append(got, s...)
			}
			for _, s := range b.Segment {
				got = append(got, float64(s))
			}
			return nil
		})
		err := text.Feed([]byte(strings.Join(names, "\t") + "\n" + strings.Join(cells, "\t") + "\n"))
		found := false
		for _, g := range got {
			// One rounding: half a unit in the last place.
			found = found || math.Abs(g-c.si) <= 1.2e-16*c.si
		}
		if err != nil || !found {
			t.Errorf("%s: %v, %v; want %g", c.column, got, err, c.si)
		}
	}
}

func TestColumnFaults(t *testing.T) {
	row := "\n0\t1\t2\t3\n"
	for columns, words := range map[string][]string{
		"force [nN]\theight [um]\tx\ty":                                {"a time column", "time [s]"},
		"time [s]\theight [um]\tx\ty":                                  {"a force or deflection column"},
		"time [s]\tforce [nN]\tx\ty":                                   {"a height or drive position column"},
		"time [s]\tx\ty\tz2":                                           {"a force or deflection column"},
		"time [s]\tforce [nN]\theight [um]\tgap [um]":                  {"one column of height", "gap [um]", "second"},
		"time [s]\tforce [nN]\theight [um]\tforce [N]":                 {"one column of force"},
		"time [s]\tforce [nN]\theight\tx":                              {"height", "a unit: one of m, mm, um, nm", "height [m]"},
		"time [s]\tforce [kgf]\theight [um]\tx":                        {"force [kgf]", `"kgf"`, "N, mN, uN, nN, pN"},
		"time [s]\tdeflection [s]\theight [um]\tx":                     {"um, nm, pm, V, mV"},
		"time [s]\tforce [nN]\theight [um]\tarea [um]":                 {"m^2, mm^2, um^2"},
		"time [s]\tradius [um]\theight [um]\tdiameter [um]\tforce [N]": {"one column of radius"},
	} {
		_, o := reading(t, []byte("# a\n"+columns+row), Options{}, nil)
		e, ok := o.err.(*Error)
		if !ok || e.Line != 2 || e.Byte != 4 || e.Fix == "" {
			t.Errorf("%s: %v", columns, o)
			continue
		}
		for _, w := range words {
			if !strings.Contains(e.Error(), w) {
				t.Errorf("%s: %q lacks %q", columns, e.Error(), w)
			}
		}
	}
	_, o := reading(t, []byte("time [s],force [nN],height [um]"+strings.Repeat(",x", 10_000)+"\n1,2,3\n"), Options{}, nil)
	if o.err == nil || !strings.Contains(o.err.Error(), "at most 256 columns, got more") {
		t.Error(o.err)
	}
}

func TestColumnLineForms(t *testing.T) {
	for file, want := range map[string]string{
		"# columns: time [s], force [nN], height [um]\n1 2 3\n":                         "time force height",
		"time [s], force [nN], height [um]\n1\t2\t3\n":                                  "time force height",
		"time [s], force [nN], height [um]\n1;2,5;3\n":                                  "time force height",
		"time [s]  drive position [um]  force [nN]  valve\n1  2  3  open\n":             "time drive force",
		"# Force and height of a cell\n#t h F\n#s um nN\n1 2 3\n":                       "time height force",
		"Time\t12:30:22\nOperator\tMaria\ntime_s\tforce_n\theight_m\n1\t2\t3\n":         "time force height",
		"time [s]\tforce [nN]\theight [um]\t\n1\t2\t3\t\n":                              "time force height",
		"time [s]\tdeflection [V]\tdeflection [nm]\theight [um]\n1\t2\t3\t4\n":          "time deflection deflection height",
		"# kind: thermal\ntime [s]\tdeflection [nm]\n1\t2\n":                            "time deflection",
		"time [s]\tdeflection [nm]\n# kind: thermal\n1\t2\n":                            "time deflection",
		"# time [s]\tforce [nN]\theight [um]\ntime\tforce\theight\n1\t2\t3\n":           "time force height",
		"# time [s], force [nN], height [um]\ntime [s],height [um],force [nN]\n1,2,3\n": "time height force",
		"valve;time [s];force [nN];height [um];x y\n#a;1;2;3;x\nab;1;2;3;\"x;y\"\n":     "time force height",
	} {
		text, o := reading(t, []byte(file), Options{}, nil)
		if h, complete := text.Header(); !complete {
			t.Errorf("%q: %+v not complete", file, h)
		}
		var got []string
		for _, c := range text.Columns() {
			got = append(got, string(c.Channel))
		}
		if o.err != nil || strings.Join(got, " ") != want || len(o.rows) != 1 {
			t.Errorf("%q: %v\n%v", file, got, o)
		}
		sameHoweverCut(t, []byte(file), Options{}, ones(len(file)))
	}
}

// Names in another order without units must not take the units of the first.
func TestNamesAgainInAnotherOrder(t *testing.T) {
	_, o := reading(t, []byte("# time [s],force [nN],height [um]\ntime,height,force\n1,2,3\n"), Options{}, nil)
	if o.err == nil || len(o.rows) != 0 {
		t.Error(o)
	}
}

func TestColumnLineMustComeSoon(t *testing.T) {
	for lines, ok := range map[int]bool{maxHeaderLines - 1: true, maxHeaderLines: false} {
		file := strings.Repeat("# remark\n", lines) + goodColumns
		if _, o := reading(t, []byte(file), Options{}, nil); (o.err == nil) != ok {
			t.Errorf("%d lines before: %v", lines, o.err)
		}
	}
}

func TestDefaultUnits(t *testing.T) {
	text, o := reading(t, []byte("time\tforce\theight\n1\t2\t3\n"), Options{Units: map[Channel]string{Time: "ms", Force: "nN", Height: "um"}}, nil)
	if o.err != nil || text.Columns()[1] != (Column{Channel: Force, Name: "force", Unit: "nN", Index: 1}) {
		t.Error(o)
	}
}

func TestQuantumInUnits(t *testing.T) {
	var q []float64
	text := NewText("q", Options{}, func(b *run.Block) error { q = append(q, b.TimeQuantum...); return nil })
	err := text.Feed([]byte("time [ms]\tforce [nN]\theight [um]\n1.234567e+03\t0\t0\n0.5\t0\t0\n"))
	if err != nil || len(q) != 2 || q[0] != 1e-6 || q[1] != 1e-4 {
		t.Error(q, err)
	}
}

// Rules of RFC 4180 section 2 as far as they concern a table of numbers:
// names as the fields of its examples, with a tail that makes them a run.
func TestRFC4180(t *testing.T) {
	const tail = ",time [s],force [nN],height [um]\r\n"
	for _, c := range []struct {
		rule, name, first string
		ok                bool
	}{
		{"1: CRLF", `a` + tail, "a,1,2,3\r\n", true},
		{"2: no final line break", `a` + tail, "a,1,2,3\r\na,2,3,4", true},
		{"6: quoted comma in a name", `"a,1"` + tail, "x,1,2,3\r\n", true},
		{"6: quoted comma in a cell", `a` + tail, "\"x,1\",1,2,3\r\n", true},
		{"7: doubled quote", `"a""b"` + tail, "\"x\"\"y\",1,2,3\r\n", true},
		{"ABNF: empty quoted field", `"a"` + tail, "\"\",1,2,3\r\n", true},
		{"5: quoted number", `a` + tail, "a,\"1\",\"2\",\"3\"\r\n", true},
		{"5: bare quote", `a` + tail, "a,1\",2,3\r\n", false},
		{"5: text after the closing quote", `a` + tail, "\"a\"b,1,2,3\r\n", false},
		{"5: unterminated quote", `a` + tail, "\"a,1,2,3\r\n", false},
		{"4: blank before the opening quote is data", `a` + tail, "a, \"1\",2,3\r\n", false},
		{"4: ragged record", `a` + tail, "a,1,2,3\r\na,1,2\r\n", false},
		{"4: ragged record, longer", `a` + tail, "a,1,2,3\r\na,1,2,3,4\r\n", false},
	} {
		file := []byte(c.name + c.first)
		o := sameHoweverCut(t, file, Options{}, ones(len(file)))
		wantRows := strings.Count(c.first, "\n")
		if c.rule[0] == '2' {
			wantRows = 2
		}
		if (o.err == nil) != c.ok || c.ok && len(o.rows) != wantRows {
			t.Errorf("rule %s: %v", c.rule, o)
		}
	}
}
