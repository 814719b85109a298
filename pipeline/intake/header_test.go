package intake

import (
	"math"
	"strings"
	"testing"
	"time"

	"platen/pipeline/run"
)

const goodColumns = "time [s]\tforce [nN]\theight [um]\n0.0\t1.0\t20.0\n"

// headerOf reads a file that begins with the lines given.
func headerOf(t *testing.T, opt Options, lines ...string) (run.Header, error) {
	t.Helper()
	text, o := reading(t, []byte(strings.Join(lines, "\n")+"\n"+goodColumns), opt, nil)
	h, complete := text.Header()
	if o.err == nil && (!complete || len(o.rows) != 1) {
		t.Fatalf("%q: %v", lines, o)
	}
	return h, o.err
}

// The examples of RFC 3339 section 5.8 and cases of its grammar (5.6, 5.7,
// 4.3); utc is what the RFC says of them. Beyond the RFC, rfc false, are forms
// that labs write: common practice, no source.
var startedCases = []struct {
	in, utc string // utc empty: refused
	rfc     bool
}{
	{"1985-04-12T23:20:50.52Z", "1985-04-12T23:20:50.52Z", true},
	{"1996-12-19T16:39:57-08:00", "1996-12-20T00:39:57Z", true},
	{"1990-12-31T23:59:60Z", "1991-01-01T00:00:00Z", true}, // leap second: the instant behind it
	{"1990-12-31T15:59:60-08:00", "1991-01-01T00:00:00Z", true},
	{"1937-01-01T12:00:27.87+00:20", "1937-01-01T11:40:27.87Z", true},
	{"1985-04-12t23:20:50z", "1985-04-12T23:20:50Z", true},
	{"2024-01-01T00:00:00-00:00", "2024-01-01T00:00:00Z", true},
	{"2024-02-29T00:00:00Z", "2024-02-29T00:00:00Z", true},
	{"2024-01-01T00:00:00.1234567899Z", "2024-01-01T00:00:00.123456789Z", true},
	{"2026-02-29T00:00:00Z", "", true},
	{"2024-01-01T24:00:00Z", "", true},
	{"2024-01-01T00:00:00", "", true},
	{"2024-01-01T00:00:00.Z", "", true},
	{"2024-01-01T00:00:00,5Z", "", true},
	{"2024-01-01T0:00:00Z", "", true},
	{"2024-01-01T00:00:00+24:00", "", true},
	{"2024-01-01T12:00:60Z", "", true}, // 5.7: leap seconds are at the end of a UTC day

	{"2024-01-01 00:00:00Z", "2024-01-01T00:00:00Z", false},
	{"2024-01-01T00:00:00+0100", "2023-12-31T23:00:00Z", false},
	{"2026-03-14 10:22 +01:00", "2026-03-14T09:22:00Z", false},
	{"14.03.2026 10:22:31 +01:00", "2026-03-14T09:22:31Z", false},
	{"14 Mar 2026 10:22:31 Z", "2026-03-14T10:22:31Z", false},
	{"Sat, 14 March 2026 10:22:31 +0100", "2026-03-14T09:22:31Z", false},
	{"14-Mar-2026 10:22:31 Z", "2026-03-14T10:22:31Z", false},
	{"03/04/2026 10:22:31 Z", "", false}, // March or April
	{"14/03/2026 10:22:31 Z", "", false},
	{"2026-03-14", "", false},
	{"14 Foo 2026 10:22:31 Z", "", false},
	{"2026-03-14 10:22:31 CET", "", false},
	{"yesterday", "", false},
}

func TestStarted(t *testing.T) {
	for _, c := range startedCases {
		h, err := headerOf(t, Options{}, "# started: "+c.in)
		if c.utc == "" {
			if err == nil || !strings.Contains(err.Error(), "2026-03-14T10:22:31+01:00") || !strings.Contains(err.Error(), "line 1") {
				t.Errorf("%s: taken for %v, %v", c.in, h.Started, err)
			}
			continue
		}
		want, perr := time.Parse(time.RFC3339, c.utc)
		if perr != nil {
			t.Fatal(perr)
		}
		if err != nil || !h.Started.Equal(want) {
			t.Errorf("%s: %v, %v; want %v", c.in, h.Started, err, want)
		}
	}

	h, err := headerOf(t, Options{}, "started: 2026-03-14T10:22:31+01:00")
	if err != nil || h.Started.Format(time.RFC3339) != "2026-03-14T10:22:31+01:00" {
		t.Errorf("zone not kept as written: %v, %v", h.Started, err)
	}
	h, err = headerOf(t, Options{Zone: time.FixedZone("lab", 3600)}, "started: 2026-03-14 10:22:31")
	if err != nil || h.Started.Format(time.RFC3339) != "2026-03-14T10:22:31+01:00" {
		t.Errorf("zone of the options not used: %v, %v", h.Started, err)
	}
}

func TestHeaderKeys(t *testing.T) {
	h, err := headerOf(t, Options{},
		"# KIND = Thermal", "% cell: K7-03", "// Session: 2026-03-14-dish-2", "; condition = control", "! operator: A. N. Other",
		"' medium: CO2-independent", "samples: 120000", "note: first = good", "note: second",
		"# drive frequency [kHz]: 0,5", "# Temperature: 37 °C", "# sensitivity_nm_per_v: 52.1 +/- 0.4", "# diameter: (19.4 ± 0.3) µm",
		"# spring_constant (mN/m): 210 ± 10 %", "# room number: 12", "# started:", "#", "# free text")
	if err != nil {
		t.Fatal(err)
	}
	if h.Kind != run.KindThermal || h.Cell != "K7-03" || h.Session != "2026-03-14-dish-2" || h.Condition != "control" ||
		h.Operator != "A. N. Other" || h.Medium != "CO2-independent" || h.Samples != 120000 || h.Note != "first = good; second" ||
		h.DriveFrequencyHz != 500 || !h.Started.IsZero() {
		t.Errorf("%+v", h)
	}
	// SI prefixes and the definition of the Celsius temperature: SI Brochure,
	// 9th edition. One rounding each, hence the tolerance of one part in 1e15.
	near := func(name string, got *run.Quantity, value, u float64) {
		if got == nil || math.Abs(got.Value-value) > 1e-15*value || math.Abs(got.U-u) > 1e-15*u {
			t.Errorf("%s: %v, want %g ± %g", name, got, value, u)
		}
	}
	near("temperature", h.TemperatureK, 310.15, 0)
	near("sensitivity", h.SensitivityMPerV, 52.1e-9, 0.4e-9)
	near("diameter", h.DiameterM, 19.4e-6, 0.3e-6)
	near("spring constant", h.SpringConstantNPerM, 0.21, 0.021)
}

func TestHeaderQuantityForms(t *testing.T) {
	for _, s := range []string{
		"spring constant [N/m]: 0.21 ± 0.02", "spring constant: 0.21 ± 0.02 N/m", "spring constant: 0.21 N/m +/- 0.02 N/m",
		"Spring_Constant = (0.21 +- 0.02) N/m", "spring constant (N/m) = 0,21 ± 0,02", "spring constant [nN/nm]: 0.21±0.02",
		"spring constant: 0.21 [N/m] ± 0.02 [N/m]", "spring_constant_n_per_m: 2.1e-1 ± 2e-2", `"# spring constant [N/m]: 0.21 ± 0.02",,,`,
	} {
		h, err := headerOf(t, Options{}, s)
		if err != nil || h.SpringConstantNPerM == nil || *h.SpringConstantNPerM != (run.Quantity{Value: 0.21, U: 0.02}) {
			t.Errorf("%s: %v, %v", s, h.SpringConstantNPerM, err)
		}
	}
}

func TestHeaderFaults(t *testing.T) {
	for line, word := range map[string]string{
		"spring constant: 0.21":                            "a unit of spring constant",
		"spring constant [N]: 0.21":                        "one of N/m, mN/m",
		"spring constant [N/m]: stiff":                     "as a number with unit",
		"spring constant [N/m]: -0.21":                     "bounds",
		"spring constant [N/m]: 0.21 ± -0.02":              "as a number with unit",
		"spring constant [N/m]: 0.21 ±":                    "as a number with unit",
		"spring constant [N/m]: 0.21 pN/nm":                "one unit",
		"spring constant [N/m]: 1e999":                     "as a number with unit",
		"spring constant [N/m]: NaN":                       "as a number with unit",
		"diameter [um]: 0":                                 "bounds",
		"diameter [um]: " + strings.Repeat("1", 300) + "x": "as a number with unit",
		"temperature: -300 degC":                           "bounds",
		"kind: sphere":                                     "cell, blank, glass or thermal",
		"samples: 120,000":                                 "plain digits",
		"samples: -1":                                      "plain digits",
		"samples: 1e5":                                     "plain digits",
		"cell: a\ncell: b":                                 "one line of cell",
	} {
		_, err := headerOf(t, Options{}, "# first", line)
		e, ok := err.(*Error)
		if !ok || !strings.Contains(e.Error(), word) || e.Line != int64(2+strings.Count(line, "\n")) || e.IsRun || e.Fix == "" {
			t.Errorf("%s: %v", line, err)
		}
	}
}

func TestKeysBehindTheColumnsAreNotRead(t *testing.T) {
	text, o := reading(t, []byte(goodColumns+"# samples: 1\n# kind: nonsense\n"), Options{}, nil)
	if h, _ := text.Header(); o.err != nil || h.Samples != 0 {
		t.Error(h, o.err)
	}
}
