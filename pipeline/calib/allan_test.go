package calib

import (
	"math"
	"testing"
)

// sp1065 is the 1000-point test set of NIST SP 1065: the linear congruential
// generator n -> 16807 n mod 2^31-1 from 1234567890, over its modulus.
func sp1065() []float64 {
	y := make([]float64, 1000)
	n := uint64(1234567890)
	for i := range y {
		y[i] = float64(n) / 2147483647
		n = 16807 * n % 2147483647
	}
	return y
}

// Values printed in NIST SP 1065 (table 31) to seven digits.
func TestAllanAgainstSP1065(t *testing.T) {
	y := sp1065()
	for _, c := range []struct {
		m                 int
		plain, overlapped float64
	}{{1, 0.2922319, 0.2922319}, {10, 0.09965736, 0.09159953}, {100, 0.03897804, 0.03241343}} {
		a, err := AllanDeviation(y, c.m)
		if err != nil || math.Abs(a/c.plain-1) > 2e-7 {
			t.Errorf("m = %d: %.8g, want %.7g (%v)", c.m, a, c.plain, err)
		}
		o, err := OverlappingAllanDeviation(y, c.m)
		if err != nil || math.Abs(o/c.overlapped-1) > 2e-7 {
			t.Errorf("m = %d, overlapping: %.8g, want %.7g (%v)", c.m, o, c.overlapped, err)
		}
	}
	// The nine-point set of NBS Monograph 140.
	small := []float64{892, 809, 823, 798, 671, 644, 883, 903, 677}
	for m, want := range map[int]float64{1: 91.22945, 2: 115.8082} {
		if a, err := AllanDeviation(small, m); err != nil || math.Abs(a/want-1) > 1e-7 {
			t.Errorf("m = %d: %.7g, want %g (%v)", m, a, want, err)
		}
	}
	if _, err := AllanDeviation(small, 5); err == nil {
		t.Error("one mean has no deviation")
	}
}

// A straight drift d per second has the Allan deviation d t/sqrt(2) (SP 1065).
func TestAllanOfADrift(t *testing.T) {
	y := make([]float64, 1024)
	for i := range y {
		y[i] = 3e-12 * float64(i) * 0.01
	}
	for _, p := range Allan(y, 0.01) {
		if want := 3e-12 * p.TimeS / math.Sqrt2; math.Abs(p.Deviation/want-1) > 1e-9 {
			t.Errorf("at %g s: %g, want %g", p.TimeS, p.Deviation, want)
		}
	}
}
