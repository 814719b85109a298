package visco

import (
	"math"
	"math/cmplx"
)

// Model is a model of the complex modulus K*(w), w in rad/s, with positive
// parameters.
type Model struct {
	Name       string
	Parameters []ParameterName
	// Modulus returns K*(w) in the unit of the moduli among the parameters.
	Modulus func(w float64, p []float64) complex128
	// starts proposes parameters for a series; several, so that one of them
	// leads to the lowest minimum.
	starts func(s []Point) [][]float64
}

// ParameterName names a parameter; Unit is "N/m", "N s/m", "s" or "1". Those
// named in Share lie between 0 and 1.
type ParameterName struct {
	Name, Unit string
	Share      bool
}

// Models returns the models that Rank fits by default. Formulas of the first
// three and of the box spectrum after Ferry, Viscoelastic Properties of
// Polymers (1980), of the fractional ones after Schiessel, Metzler, Blumen and
// Nonnenmacher (J. Phys. A 28, 1995); all from memory, checked in the tests
// against values computed elsewhere.
func Models() []Model { return models }

// The tables of this package never change.
var models = []Model{
	{
		// A spring in series with a dashpot: K* = E i w t/(1 + i w t).
		Name:       "Maxwell",
		Parameters: []ParameterName{{"E", "N/m", false}, {"tau", "s", false}},
		Modulus: func(w float64, p []float64) complex128 {
			x := complex(0, w*p[1])
			return complex(p[0], 0) * x / (1 + x)
		},
		starts: func(s []Point) [][]float64 {
			return grid([]float64{strongest(s)}, times(s))
		},
	},
	{
		// A spring beside a dashpot: K* = E + i w eta.
		Name:       "Kelvin-Voigt",
		Parameters: []ParameterName{{"E", "N/m", false}, {"eta", "N s/m", false}},
		Modulus:    func(w float64, p []float64) complex128 { return complex(p[0], w*p[1]) },
		starts: func(s []Point) [][]float64 {
			k := strongest(s)
			var out [][]float64
			for _, t := range times(s) {
				out = append(out, []float64{k, k * t})
			}
			return out
		},
	},
	{
		// The standard linear solid (Zener): K* = Einf + E1 i w t/(1 + i w t).
		Name:       "Zener",
		Parameters: []ParameterName{{"Einf", "N/m", false}, {"E1", "N/m", false}, {"tau", "s", false}},
		Modulus: func(w float64, p []float64) complex128 {
			x := complex(0, w*p[2])
			return complex(p[0], 0) + complex(p[1], 0)*x/(1+x)
		},
		starts: func(s []Point) [][]float64 {
			k := strongest(s)
			var out [][]float64
			for _, t := range times(s) {
				out = append(out, []float64{k / 2, k / 2, t}, []float64{k / 10, k, t})
			}
			return out
		},
	},
	{
		// A springpot: K* = A (i w/w0)^a with w0 = 2 pi 1 Hz, so that A is the
		// absolute modulus at 1 Hz.
		Name:       "power law",
		Parameters: []ParameterName{{"A", "N/m", false}, {"alpha", "1", true}},
		Modulus: func(w float64, p []float64) complex128 {
			return complex(p[0], 0) * power(w/(2*math.Pi), p[1])
		},
		starts: func(s []Point) [][]float64 {
			return grid([]float64{strongest(s)}, []float64{0.05, 0.2, 0.5, 0.8})
		},
	},
	{
		// A spring in series with a springpot: K* = E (i w t)^a/(1 + (i w t)^a).
		Name:       "fractional Maxwell",
		Parameters: []ParameterName{{"E", "N/m", false}, {"tau", "s", false}, {"alpha", "1", true}},
		Modulus: func(w float64, p []float64) complex128 {
			x := power(w*p[1], p[2])
			return complex(p[0], 0) * x / (1 + x)
		},
		starts: func(s []Point) [][]float64 {
			var out [][]float64
			for _, g := range grid([]float64{strongest(s), 3 * strongest(s)}, times(s)) {
				out = append(out, append(g, 0.3), append(append([]float64(nil), g...), 0.8))
			}
			return out
		},
	},
	{
		// A flat spectrum of relaxation times from t1 up to the longest, t1 + t2:
		// K' = (H/2) ln[(1+w^2 T^2)/(1+w^2 t1^2)], K'' = H [atan wT - atan w t1].
		Name:       "flat spectrum",
		Parameters: []ParameterName{{"H", "N/m", false}, {"shortest", "s", false}, {"longest less shortest", "s", false}},
		Modulus: func(w float64, p []float64) complex128 {
			a, b := w*p[1], w*(p[1]+p[2])
			return complex(p[0]/2*(math.Log1p(b*b)-math.Log1p(a*a)), p[0]*(math.Atan(b)-math.Atan(a)))
		},
		starts: func(s []Point) [][]float64 {
			k := strongest(s)
			lo, hi := 1/(2*math.Pi*s[len(s)-1].FrequencyHz), 1/(2*math.Pi*s[0].FrequencyHz)
			return [][]float64{{k / 3, lo, hi}, {k / 5, lo / 10, 10 * hi}, {k / 2, lo / 100, hi / 3}, {k / 8, lo / 100, 100 * hi}}
		},
	},
}

// power is (i x)^a for x >= 0.
func power(x, a float64) complex128 {
	return cmplx.Rect(math.Pow(x, a), math.Pi/2*a)
}

func strongest(s []Point) float64 {
	k := 0.0
	for _, p := range s {
		k = math.Max(k, cmplx.Abs(p.K))
	}
	return k
}

// times spans the times that a series can tell of, and a decade beyond.
func times(s []Point) []float64 {
	lo, hi := 1/(2*math.Pi*s[len(s)-1].FrequencyHz), 1/(2*math.Pi*s[0].FrequencyHz)
	return []float64{lo / 10, lo, math.Sqrt(lo * hi), hi, 10 * hi}
}

func grid(a, b []float64) [][]float64 {
	var out [][]float64
	for _, x := range a {
		for _, y := range b {
			out = append(out, []float64{x, y})
		}
	}
	return out
}
