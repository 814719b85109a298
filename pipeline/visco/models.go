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
	// exceeds is 1 + the index of a parameter that this one is always above, 0
	// where there is none.
	exceeds int
}

// Models returns the models that Rank fits by default:
//
//	Maxwell              E i w tau/(1 + i w tau)
//	Kelvin-Voigt         E + i w eta
//	Zener                Einf + E1 i w tau/(1 + i w tau)
//	power law            A (i w/w0)^alpha, w0 = 2 pi 1 Hz
//	fractional Maxwell   E (i w tau)^alpha/(1 + (i w tau)^alpha)
//	flat spectrum        (H/2) ln[(1 + w^2 T^2)/(1 + w^2 t^2)] + i H [atan wT - atan wt]
//
// Formulas of the first three and of the flat (box) spectrum after Ferry,
// Viscoelastic Properties of Polymers (1980), of the fractional ones after
// Schiessel, Metzler, Blumen and Nonnenmacher (J. Phys. A 28, 1995); all from
// memory, checked in the tests against values computed elsewhere.
func Models() []Model { return models }

// WiderModels returns models of four parameters, two springpots in series and
// side by side (Schiessel et al. 1995). They need three frequencies to be
// fitted at all and many more to be told from the simpler ones, which is why
// Rank leaves them out unless asked.
//
//	fractional Maxwell, two springpots        K1 K2/(K1 + K2),  K = A (i w/w0)^alpha
//	fractional Kelvin-Voigt, two springpots   K1 + K2
func WiderModels() []Model { return widerModels }

// The tables of this package never change.
var models = []Model{
	{
		// A spring in series with a dashpot: a liquid of viscosity E tau at low
		// frequencies, a solid E at high ones; K' = K” at w = 1/tau.
		Name:       "Maxwell",
		Parameters: []ParameterName{{Name: "E", Unit: "N/m"}, {Name: "tau", Unit: "s"}},
		Modulus:    func(w float64, p []float64) complex128 { return element(p[0], w*p[1]) },
		starts: func(s []Point) [][]float64 {
			return grid([]float64{strongest(s)}, times(s))
		},
	},
	{
		// A spring beside a dashpot: a solid E at low frequencies, a viscosity
		// eta at high ones; K' = K” at w = E/eta.
		Name:       "Kelvin-Voigt",
		Parameters: []ParameterName{{Name: "E", Unit: "N/m"}, {Name: "eta", Unit: "N s/m"}},
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
		// The standard linear solid, a spring beside a Maxwell element: Einf at
		// low frequencies, Einf + E1 at high ones; K” peaks at E1/2, w = 1/tau.
		Name:       "Zener",
		Parameters: []ParameterName{{Name: "Einf", Unit: "N/m"}, {Name: "E1", Unit: "N/m"}, {Name: "tau", Unit: "s"}},
		Modulus: func(w float64, p []float64) complex128 {
			return complex(p[0], 0) + element(p[1], w*p[2])
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
		// A springpot; A is the absolute modulus at 1 Hz, the loss tangent
		// tan(pi alpha/2) at every frequency.
		Name:       "power law",
		Parameters: []ParameterName{{Name: "A", Unit: "N/m"}, {Name: "alpha", Unit: "1", Share: true}},
		Modulus: func(w float64, p []float64) complex128 {
			return springpot(w, p[0], p[1])
		},
		starts: func(s []Point) [][]float64 {
			return grid([]float64{strongest(s)}, []float64{0.05, 0.2, 0.5, 0.8})
		},
	},
	{
		// A spring in series with a springpot: a power law at low frequencies,
		// a solid E at high ones; Maxwell's model where alpha = 1.
		Name:       "fractional Maxwell",
		Parameters: []ParameterName{{Name: "E", Unit: "N/m"}, {Name: "tau", Unit: "s"}, {Name: "alpha", Unit: "1", Share: true}},
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
		// Relaxation times spread evenly over ln t, with weight H, from the
		// shortest t to the longest T: a liquid of viscosity H (T - t) at low
		// frequencies, a solid H ln(T/t) at high ones, K” near pi H/2 between.
		Name:       "flat spectrum",
		Parameters: []ParameterName{{Name: "H", Unit: "N/m"}, {Name: "shortest", Unit: "s"}, {Name: "longest", Unit: "s", exceeds: 2}},
		Modulus: func(w float64, p []float64) complex128 {
			a, b := w*p[1], w*p[2]
			return complex(p[0]/2*(math.Log1p(b*b)-math.Log1p(a*a)), p[0]*(math.Atan(b)-math.Atan(a)))
		},
		starts: func(s []Point) [][]float64 {
			k := strongest(s)
			lo, hi := 1/(2*math.Pi*s[len(s)-1].FrequencyHz), 1/(2*math.Pi*s[0].FrequencyHz)
			return [][]float64{{k / 3, lo, lo + hi}, {k / 5, lo / 10, 10 * hi}, {k / 2, lo / 100, hi / 3}, {k / 8, lo / 100, 100 * hi}}
		},
	},
}

var widerModels = []Model{
	{
		Name:       "fractional Maxwell, two springpots",
		Parameters: twoSpringpots,
		Modulus: func(w float64, p []float64) complex128 {
			a, b := springpot(w, p[0], p[1]), springpot(w, p[2], p[3])
			return a * b / (a + b)
		},
		starts: startTwo,
	},
	{
		Name:       "fractional Kelvin-Voigt, two springpots",
		Parameters: twoSpringpots,
		Modulus: func(w float64, p []float64) complex128 {
			return springpot(w, p[0], p[1]) + springpot(w, p[2], p[3])
		},
		starts: startTwo,
	},
}

var twoSpringpots = []ParameterName{
	{Name: "A1", Unit: "N/m"}, {Name: "alpha1", Unit: "1", Share: true},
	{Name: "A2", Unit: "N/m"}, {Name: "alpha2", Unit: "1", Share: true},
}

func startTwo(s []Point) [][]float64 {
	k := strongest(s)
	var out [][]float64
	for _, g := range grid([]float64{k / 10, k, 10 * k}, []float64{k / 10, k, 10 * k}) {
		out = append(out, []float64{g[0], 0.8, g[1], 0.1}, []float64{g[0], 0.5, g[1], 0.3})
	}
	return out
}

// element is a Maxwell element of modulus e at x = w tau.
func element(e, x float64) complex128 {
	y := 1 + x*x
	return complex(e*x*x/y, e*x/y)
}

// springpot is A (i w/w0)^alpha.
func springpot(w, a, alpha float64) complex128 {
	return complex(a, 0) * power(w/(2*math.Pi), alpha)
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
