package visco

import (
	"bufio"
	"errors"
	"fmt"
	"math"
	"os"
	"strconv"
	"strings"
	"testing"
)

// strd is one of the NIST Statistical Reference Datasets for nonlinear
// regression (certified results to eleven digits; testdata/strd_nonlinear.txt).
type strd struct {
	name, level           string
	start1, start2        []float64
	certified, certifiedU []float64
	rss                   float64
	y                     []float64
	x                     [][]float64
}

func loadStrd(t *testing.T) []strd {
	t.Helper()
	f, err := os.Open("testdata/strd_nonlinear.txt")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	var sets []strd
	sc := bufio.NewScanner(f)
	for sc.Scan() {
		line := sc.Text()
		if line == "" || strings.HasPrefix(line, "#") {
			continue
		}
		w := strings.Fields(line)
		if w[0] == "set" {
			sets = append(sets, strd{name: w[1], level: w[2]})
			continue
		}
		s := &sets[len(sets)-1]
		key := ""
		if _, err := strconv.ParseFloat(w[0], 64); err != nil {
			key, w = w[0], w[1:]
		}
		v := make([]float64, len(w))
		for i := range w {
			if v[i], err = strconv.ParseFloat(w[i], 64); err != nil {
				t.Fatalf("%s: %q", s.name, line)
			}
		}
		switch key {
		case "start1":
			s.start1 = v
		case "start2":
			s.start2 = v
		case "certified":
			s.certified = v
		case "certified_sd":
			s.certifiedU = v
		case "certified_rss":
			s.rss = v[0]
		default:
			s.y = append(s.y, v[0])
			s.x = append(s.x, v[1:])
		}
	}
	return sets
}

// strdModel is the model that goes with a set (NIST StRD).
func strdModel(name string) func(b, x []float64) float64 {
	rational := func(top, bottom int) func(b, x []float64) float64 {
		return func(b, x []float64) float64 {
			num, den, p := 0.0, 1.0, 1.0
			for i := range top {
				num += b[i] * p
				p *= x[0]
			}
			p = x[0]
			for i := range bottom {
				den += b[top+i] * p
				p *= x[0]
			}
			return num / den
		}
	}
	gauss := func(b, x []float64) float64 {
		return b[0]*math.Exp(-b[1]*x[0]) + b[2]*math.Exp(-(x[0]-b[3])*(x[0]-b[3])/(b[4]*b[4])) + b[5]*math.Exp(-(x[0]-b[6])*(x[0]-b[6])/(b[7]*b[7]))
	}
	switch name {
	case "Bennett5":
		return func(b, x []float64) float64 { return b[0] * math.Pow(b[1]+x[0], -1/b[2]) }
	case "BoxBOD", "Misra1a":
		return func(b, x []float64) float64 { return -b[0] * math.Expm1(-b[1]*x[0]) }
	case "Chwirut1", "Chwirut2":
		return func(b, x []float64) float64 { return math.Exp(-b[0]*x[0]) / (b[1] + b[2]*x[0]) }
	case "DanWood":
		return func(b, x []float64) float64 { return b[0] * math.Pow(x[0], b[1]) }
	case "ENSO":
		return func(b, x []float64) float64 {
			w := 2 * math.Pi * x[0]
			return b[0] + b[1]*math.Cos(w/12) + b[2]*math.Sin(w/12) + b[4]*math.Cos(w/b[3]) + b[5]*math.Sin(w/b[3]) + b[7]*math.Cos(w/b[6]) + b[8]*math.Sin(w/b[6])
		}
	case "Eckerle4":
		return func(b, x []float64) float64 { return b[0] / b[1] * math.Exp(-0.5*math.Pow((x[0]-b[2])/b[1], 2)) }
	case "Gauss1", "Gauss2", "Gauss3":
		return gauss
	case "Hahn1", "Thurber":
		return rational(4, 3)
	case "Kirby2":
		return rational(3, 2)
	case "Lanczos1", "Lanczos2", "Lanczos3":
		return func(b, x []float64) float64 {
			return b[0]*math.Exp(-b[1]*x[0]) + b[2]*math.Exp(-b[3]*x[0]) + b[4]*math.Exp(-b[5]*x[0])
		}
	case "MGH09":
		return func(b, x []float64) float64 {
			return b[0] * (x[0]*x[0] + x[0]*b[1]) / (x[0]*x[0] + x[0]*b[2] + b[3])
		}
	case "MGH10":
		return func(b, x []float64) float64 { return b[0] * math.Exp(b[1]/(x[0]+b[2])) }
	case "MGH17":
		return func(b, x []float64) float64 { return b[0] + b[1]*math.Exp(-x[0]*b[3]) + b[2]*math.Exp(-x[0]*b[4]) }
	case "Misra1b":
		return func(b, x []float64) float64 { return b[0] * (1 - math.Pow(1+b[1]*x[0]/2, -2)) }
	case "Misra1c":
		return func(b, x []float64) float64 { return b[0] * (1 - math.Pow(1+2*b[1]*x[0], -0.5)) }
	case "Misra1d":
		return func(b, x []float64) float64 { return b[0] * b[1] * x[0] / (1 + b[1]*x[0]) }
	case "Nelson": // of the logarithm of y
		return func(b, x []float64) float64 { return b[0] - b[1]*x[0]*math.Exp(-b[2]*x[1]) }
	case "Rat42":
		return func(b, x []float64) float64 { return b[0] / (1 + math.Exp(b[1]-b[2]*x[0])) }
	case "Rat43":
		return func(b, x []float64) float64 { return b[0] / math.Pow(1+math.Exp(b[1]-b[2]*x[0]), 1/b[3]) }
	case "Roszman1":
		return func(b, x []float64) float64 { return b[0] - b[1]*x[0] - math.Atan(b[2]/(x[0]-b[3]))/math.Pi }
	}
	return nil
}

// digits is the number of decimal digits in which x agrees with a certified
// value (log relative error, NIST).
func digits(x, certified float64) float64 {
	if x == certified {
		return 11
	}
	return math.Min(11, -math.Log10(math.Abs(x-certified)/math.Abs(certified)))
}

// knownMisses would list "NAME from start N" with the reason for every set and
// start from which the certified minimum is not reached. None is.
var knownMisses = map[string]string{}

// All 27 nonlinear sets from both starts: at least 8 of the certified digits
// for parameters on lower and average difficulty, 6 on higher. Lanczos1 has
// residuals at the level of the rounding of its data (certified RSS 1.4e-25),
// so its standard deviations cannot be had in float64 and only its parameters
// are judged. Standard deviations come from a numerical Jacobian, and the worst
// of them lose half of float64's sixteen digits: at least 7 are asked for, and
// 9 of the RSS.
func TestNISTNonlinear(t *testing.T) {
	sets := loadStrd(t)
	if len(sets) != 27 {
		t.Fatalf("%d sets, want 27", len(sets))
	}
	var report strings.Builder
	for _, s := range sets {
		model := strdModel(s.name)
		if model == nil {
			t.Errorf("%s: no model", s.name)
			continue
		}
		want := 8.0
		if s.level == "higher" {
			want = 6
		}
		for k, start := range [][]float64{s.start1, s.start2} {
			label := fmt.Sprintf("%s from start %d", s.name, k+1)
			m, err := LeastSquares(len(s.y), func(b, r []float64) bool {
				for i, y := range s.y {
					if s.name == "Nelson" {
						y = math.Log(y)
					}
					r[i] = model(b, s.x[i]) - y
				}
				return true
			}, start)
			if err != nil {
				fmt.Fprintf(&report, "%-24s %-8s FAILED: %v\n", label, s.level, err)
				if knownMisses[label] == "" {
					t.Errorf("%s: %v", label, err)
				}
				continue
			}
			least, leastU := 11.0, 11.0
			sd := math.Sqrt(m.RSS / float64(len(s.y)-len(start)))
			for i := range start {
				least = math.Min(least, digits(m.P[i], s.certified[i]))
				leastU = math.Min(leastU, digits(sd*math.Sqrt(m.Covariance.At(i, i)), s.certifiedU[i]))
			}
			fmt.Fprintf(&report, "%-24s %-8s parameters %4.1f  standard deviations %4.1f  RSS %4.1f  (%d iterations)\n",
				label, s.level, least, leastU, digits(m.RSS, s.rss), m.Iterations)
			if reached := least >= want; reached != (knownMisses[label] == "") {
				t.Errorf("%s: %.1f digits of the parameters, want %g (listed as a miss: %q)", label, least, want, knownMisses[label])
			}
			if s.name == "Lanczos1" || knownMisses[label] != "" {
				continue
			}
			if leastU < 7 {
				t.Errorf("%s: %.1f digits of the standard deviations", label, leastU)
			}
			if d := digits(m.RSS, s.rss); d < 9 {
				t.Errorf("%s: %.1f digits of the RSS", label, d)
			}
		}
	}
	t.Log("digits that agree with the certified values\n" + report.String())
}

// What has no minimum, or no single one, is an error and not an answer.
func TestLeastSquaresRefuses(t *testing.T) {
	x := []float64{0, 1, 2, 3, 4}
	y := []float64{5, 3, 2, 1.2, 0.9}
	curve := func(f func(x float64, p []float64) float64) Residuals {
		return func(p, r []float64) bool {
			for i := range x {
				r[i] = f(x[i], p) - y[i]
			}
			return true
		}
	}
	product := curve(func(x float64, p []float64) float64 { return p[0] * p[1] * math.Exp(-p[2]*x) })
	if _, err := LeastSquares(len(x), product, []float64{1, 2, 0.5}); !errors.Is(err, ErrUndetermined) {
		t.Errorf("a product of two parameters: %v", err)
	}
	// 10 + e^-p falls towards 10 for ever.
	runaway := curve(func(_ float64, p []float64) float64 { return 10 + math.Exp(-p[0]) })
	if m, err := LeastSquares(len(x), runaway, []float64{1}); err == nil {
		t.Errorf("a sum without a minimum: %+v", m)
	}
	pole := func(p, r []float64) bool { return p[0] > 0 }
	if _, err := LeastSquares(len(x), pole, []float64{-1}); err == nil {
		t.Error("a start outside the model's domain")
	}
	if _, err := LeastSquares(2, product, []float64{1, 2, 0.5}); err == nil {
		t.Error("three parameters from two values")
	}
	// An exact fit is a minimum with no residuals.
	exact := curve(func(x float64, p []float64) float64 { return y[int(x)] + p[0] })
	if m, err := LeastSquares(len(x), exact, []float64{3}); err != nil || math.Abs(m.P[0]) > 1e-12 {
		t.Errorf("an exact fit: %+v, %v", m, err)
	}
}
