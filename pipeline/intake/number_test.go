package intake

import (
	"bytes"
	"fmt"
	"math"
	"math/rand/v2"
	"strconv"
	"strings"
	"testing"
)

// checkNumber compares both roads with strconv.ParseFloat, the reference.
func checkNumber(t *testing.T, s string) {
	t.Helper()
	want, err := strconv.ParseFloat(s, 64)
	// What strconv reads beyond decimal numbers is refused on purpose.
	decimal := err == nil && !strings.ContainsAny(s, "xXpP_nN")
	got, exp10, perr := parseDecimal([]byte(s), '.')
	if (perr == nil) != decimal {
		t.Fatalf("%q: parseDecimal error %v, strconv %v", s, perr, err)
	}
	if decimal && math.Float64bits(got) != math.Float64bits(want) {
		t.Fatalf("%q: parseDecimal %x, strconv %x", s, math.Float64bits(got), math.Float64bits(want))
	}
	fast, fastExp, end := scanDecimal([]byte(s+"\n"), 0, '.')
	if end == len(s) {
		if !decimal {
			t.Fatalf("%q: taken by the fast road, not by strconv: %v", s, err)
		}
		if math.Float64bits(fast) != math.Float64bits(want) || fastExp != exp10 {
			t.Fatalf("%q: fast %x 10^%d, strconv %x, slow 10^%d", s, math.Float64bits(fast), fastExp, math.Float64bits(want), exp10)
		}
	}
	if !strings.Contains(s, ",") {
		comma := []byte(strings.ReplaceAll(s, ".", ","))
		c, _, cerr := parseDecimal(comma, ',')
		if (cerr == nil) != decimal || decimal && math.Float64bits(c) != math.Float64bits(want) {
			t.Fatalf("%q: with comma %v, %v", comma, c, cerr)
		}
	}
}

var numbers = []string{
	"0", "-0", "+1", "1.", ".5", "-.5e1", "1e5", "1E+05", "1.234567e-09", "9007199254740992", "9007199254740993",
	"9007199254740993.0", "1e22", "1e23", "1e-22", "1e-23", "123456789012345678", "1234567890123456789012",
	"0.00000000000000000000000000001", "2.2250738585072011e-308", "4.9e-324", "1e-400", "1.7976931348623157e308",
	"1e999", "-1e999", "NaN", "nan", "Inf", "-Infinity", "0x1p-2", "0x10", "1_000", "", "+", "-", ".", "e5", "1e", "1e+",
	"1.2.3", "1,5", " 1", "1 ", "1e1e1", "--1", "1e99999999999999999999", "0e99999999999", "\u0661", "1.5\x00",
	strings.Repeat("9", 400), "0." + strings.Repeat("0", 400) + "1",
}

func TestNumbersEqualStrconv(t *testing.T) {
	for _, s := range numbers {
		checkNumber(t, s)
	}
	// The forms that exporters print, at all magnitudes.
	r := rand.New(rand.NewPCG(1, 2))
	forms := []string{"%.6e", "%.3f", "%.9f", "%g", "%.17g", "%.15e", "%.0f", "%e"}
	for i := range 200_000 {
		x := math.Ldexp(r.Float64()*2-1, r.IntN(140)-70)
		checkNumber(t, fmt.Sprintf(forms[i%len(forms)], x))
	}
}

// The fast road must be the one that ordinary files take.
func TestOrdinaryNumbersAreFast(t *testing.T) {
	for _, s := range []string{"1.234567e-01", "0.0005", "120", "-2.104000e+01", "123456.789012"} {
		if _, _, end := scanDecimal([]byte(s+"\t"), 0, '.'); end != len(s) {
			t.Errorf("%q left to strconv", s)
		}
	}
}

func FuzzNumber(f *testing.F) {
	for _, s := range numbers {
		f.Add(s)
	}
	f.Fuzz(checkNumber)
}

// The size of one unit in the last printed digit, worked out by hand.
func TestLastDigit(t *testing.T) {
	for s, want := range map[string]float64{"1.234567e+03": 1e-3, "0.0005": 1e-4, "12": 1, "1.5e-6": 1e-7, "0.0000e+00": 1e-4, "3e2": 1e2} {
		_, exp10, err := parseDecimal([]byte(s), '.')
		seconds := tens(0)
		if err != nil || seconds.digit(exp10) != want {
			t.Errorf("%s: 10^%d, want %g", s, exp10, want)
		}
	}
	ms, minute := tens(-3), times(60)
	if got := ms.digit(-2); got != 1e-5 {
		t.Errorf("0.01 ms: %g", got)
	}
	if got := minute.digit(-1); got != 0.1*60 {
		t.Errorf("0.1 min: %g", got)
	}
}

func benchmarkFile(rows int) []byte {
	var b bytes.Buffer
	b.WriteString("# kind: cell\ntime [s]\tforce [nN]\theight [um]\tradius [um]\n")
	r := rand.New(rand.NewPCG(3, 4))
	for i := range rows {
		fmt.Fprintf(&b, "%.6e\t%.6e\t%.6e\t%.6e\n", float64(i)/2000, 100*r.Float64(), 10+r.Float64(), 9+r.Float64())
	}
	return b.Bytes()
}
