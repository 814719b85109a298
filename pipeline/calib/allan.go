package calib

import (
	"errors"
	"math"
)

// AllanPoint is the Allan deviation at one averaging time.
type AllanPoint struct {
	TimeS     float64
	Deviation float64 // in the unit of the series
	Pairs     int     // of neighbouring means that it is made from
}

// AllanDeviation is the two-sample deviation of a series y of even readings at
// averages over m of them (NIST SP 1065, 5.2.1):
//
//	sigma^2 = 1/(2 (n-1)) sum (ybar_{i+1} - ybar_i)^2,  n = floor(len(y)/m).
//
// It fails with fewer than two means.
func AllanDeviation(y []float64, m int) (float64, error) {
	if m < 1 || len(y)/m < 2 {
		return 0, errors.New("an Allan deviation needs at least two averages")
	}
	n := len(y) / m
	sum, last := 0.0, 0.0
	for i := range n {
		mean := 0.0
		for _, v := range y[i*m : (i+1)*m] {
			mean += v
		}
		mean /= float64(m)
		if i > 0 {
			sum += (mean - last) * (mean - last)
		}
		last = mean
	}
	return math.Sqrt(sum / 2 / float64(n-1)), nil
}

// OverlappingAllanDeviation uses all means of m consecutive readings, not only
// every m-th (NIST SP 1065, 5.2.4); it is better known at long times.
func OverlappingAllanDeviation(y []float64, m int) (float64, error) {
	n := len(y)
	if m < 1 || n < 2*m {
		return 0, errors.New("an Allan deviation needs at least two averages")
	}
	// Sums over m readings by a running difference of the cumulative sum.
	x := make([]float64, n+1)
	for i, v := range y {
		x[i+1] = x[i] + v
	}
	sum, terms := 0.0, 0
	for i := 0; i+2*m <= n; i++ {
		d := x[i+2*m] - 2*x[i+m] + x[i]
		sum += d * d
		terms++
	}
	return math.Sqrt(sum/2/float64(terms)) / float64(m), nil
}

// Allan returns the overlapping Allan deviation of readings taken every step
// seconds, at averaging times that double, up to a quarter of the record.
func Allan(y []float64, step float64) []AllanPoint {
	var out []AllanPoint
	for m := 1; 4*m <= len(y); m *= 2 {
		d, err := OverlappingAllanDeviation(y, m)
		if err != nil {
			break
		}
		out = append(out, AllanPoint{TimeS: float64(m) * step, Deviation: d, Pairs: len(y)/m - 1})
	}
	return out
}
