package pipeline

import (
	"fmt"
	"math"
	"math/rand/v2"
	"strconv"
	"testing"
)

// stamps prints times as an exporter does and reads them back, with the
// rounding unit of each.
func stamps(times []float64, format string) (t, q []float64) {
	for _, x := range times {
		s := fmt.Sprintf(format, x)
		v, err := strconv.ParseFloat(s, 64)
		if err != nil {
			panic(err)
		}
		unit := 0.0
		var mant, exp int
		if n, _ := fmt.Sscanf(s[len(s)-3:], "%d", &exp); n == 1 && format == "%.6e" {
			unit = math.Pow(10, float64(exp-6))
		} else if _, err := fmt.Sscanf(format, "%%.%df", &mant); err == nil {
			unit = math.Pow(10, -float64(mant))
		}
		t, q = append(t, v), append(q, unit)
	}
	return t, q
}

func runTimebase(t, q []float64) (*timebase, []float64) {
	tb := newTimebase(t[:min(len(t), primeRows)])
	out := make([]float64, len(t))
	for i := range t {
		out[i], _ = tb.next(t[i], q[i])
	}
	return tb, out
}

// Seven significant digits at 2 kHz: from 1000 s on each stamp stands for two
// samples (a fact of the arithmetic). Time must still advance evenly.
func TestRoundedStampsKeepAnEvenRate(t *testing.T) {
	const rate, seconds = 2000.0, 1200
	times := make([]float64, rate*seconds)
	for i := range times {
		times[i] = float64(i) / rate
	}
	st, q := stamps(times, "%.6e")
	tb, got := runTimebase(st, q)
	if s := tb.sampling; s.Gaps != 0 || s.Backward != 0 || !s.Even {
		t.Fatalf("rounding was taken for a fault: %+v", s)
	}
	worst := 0.0
	for i := range got {
		worst = math.Max(worst, math.Abs(got[i]-times[i]))
		if i > 0 && got[i] <= got[i-1] {
			t.Fatalf("time stands still at row %d", i)
		}
	}
	// The rate is known to a millionth part of a millisecond once 1000 s are
	// read, so no time may be off by as much as one interval.
	if worst > 0.5/rate {
		t.Errorf("worst time error %g s, more than half an interval", worst)
	}
}

func TestTimebaseFindsFaults(t *testing.T) {
	even := func(n int, step float64) []float64 {
		x := make([]float64, n)
		for i := range x {
			x[i] = float64(i) * step
		}
		return x
	}
	rng := rand.New(rand.NewPCG(1, 2))
	cases := []struct {
		name           string
		spoil          func([]float64) []float64
		gaps, backward int
		even           bool
	}{
		{"even", func(x []float64) []float64 { return x }, 0, 0, true},
		{"a gap of 0.4 s", func(x []float64) []float64 { return append(x[:300:300], x[700:]...) }, 1, 0, true},
		{"two missing rows", func(x []float64) []float64 { return append(x[:300:300], x[302:]...) }, 1, 0, true},
		{"a repeated block", func(x []float64) []float64 {
			return append(append(append([]float64{}, x[:500]...), x[400:500]...), x[500:]...)
		}, 0, 1, true},
		{"clock set back by an hour", func(x []float64) []float64 {
			for i := 600; i < len(x); i++ {
				x[i] -= 3600
			}
			return x
		}, 0, 1, true},
		{"software-timed", func(x []float64) []float64 {
			for i := range x {
				x[i] += 2e-4 * rng.Float64()
			}
			return x
		}, 0, 0, false},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			st, q := stamps(c.spoil(even(1000, 1e-3)), "%.6f")
			tb, got := runTimebase(st, q)
			s := tb.sampling
			// A repeated block shows as one step back, and as one step forward
			// where the stamps go on.
			if s.Backward != c.backward || s.Even != c.even {
				t.Errorf("got %+v, want %d backward, even %v", s, c.backward, c.even)
			}
			if c.name != "a repeated block" && s.Gaps != c.gaps {
				t.Errorf("got %d gaps, want %d", s.Gaps, c.gaps)
			}
			for i := 1; i < len(got); i++ {
				if !(got[i] > got[i-1]) {
					t.Fatalf("time does not advance at row %d: %g after %g", i, got[i], got[i-1])
				}
			}
		})
	}
}
