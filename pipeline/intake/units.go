package intake

import (
	"math"
	"strings"
)

// scale turns a number in a unit into SI: x / div where the unit is smaller
// than the SI unit, else x * mul, then + add. Factors are exact in float64, so
// that the result is rounded once; dividing by 1e9 is exact where multiplying
// by 1e-9 (no float64) is not.
type scale struct {
	mul, div float64 // one of them is 1
	add      float64
	dec      int // mul/div = 10^dec * rest, for sizes of printed digits
	rest     float64
}

// si returns x in SI.
func (s *scale) si(x float64) float64 {
	if s.div != 1 {
		x /= s.div
	} else {
		x *= s.mul
	}
	if s.add != 0 { // -0 + 0 would lose the sign
		// The conversion forbids a fused multiply-add, which would make the
		// result depend on the processor.
		x = float64(x) + s.add
	}
	return x
}

// width returns the width in SI of an interval of x units.
func (s scale) width(x float64) float64 {
	s.add = 0
	return s.si(x)
}

// digit returns the size in SI of one unit in a digit of power exp10.
func (s *scale) digit(exp10 int) float64 {
	e := exp10 + s.dec
	var q float64
	switch {
	case e < -22 || e > 22:
		q = math.Pow10(e)
	case e < 0:
		q = 1 / pow10[-e]
	default:
		q = pow10[e]
	}
	return q * s.rest
}

// half returns the scale that also halves (diameter to radius).
func (s scale) half() scale {
	if s.div != 1 || s.mul == 1 {
		s.div *= 2
	} else {
		s.mul /= 2
	}
	s.rest /= 2
	return s
}

// tens returns the scale of a unit of 10^dec SI units.
func tens(dec int) scale {
	if dec < 0 {
		return scale{mul: 1, div: pow10[-dec], dec: dec, rest: 1}
	}
	return scale{mul: pow10[dec], div: 1, dec: dec, rest: 1}
}

// times returns the scale of a unit of f SI units, not a power of ten.
func times(f float64) scale { return scale{mul: f, div: 1, rest: f} }

// unit is one accepted spelling, in the canonical form of canonUnit, and what
// messages show for it (empty: not shown, another spelling is).
type unit struct {
	spelling string
	show     string
	scale    scale
}

// dimension is the list of units that a channel or header key accepts.
type dimension []unit

// The units accepted, per dimension. SI prefixes are spelled as the SI
// Brochure (BIPM, 9th edition) does, with u also for micro.
var (
	timeUnits = dimension{
		{"s", "s", tens(0)}, {"ms", "ms", tens(-3)}, {"us", "us", tens(-6)}, {"ns", "ns", tens(-9)},
		{"min", "min", times(60)}, {"h", "h", times(3600)},
		{"sec", "", tens(0)}, {"second", "", tens(0)}, {"seconds", "", tens(0)},
	}
	forceUnits = dimension{
		{"N", "N", tens(0)}, {"mN", "mN", tens(-3)}, {"uN", "uN", tens(-6)}, {"nN", "nN", tens(-9)}, {"pN", "pN", tens(-12)},
	}
	lengthUnits = dimension{
		{"m", "m", tens(0)}, {"mm", "mm", tens(-3)}, {"um", "um", tens(-6)}, {"nm", "nm", tens(-9)}, {"pm", "pm", tens(-12)},
		{"micron", "", tens(-6)}, {"microns", "", tens(-6)},
	}
	voltUnits = dimension{
		{"V", "V", tens(0)}, {"mV", "mV", tens(-3)}, {"uV", "uV", tens(-6)},
	}
	areaUnits = dimension{
		{"m2", "m^2", tens(0)}, {"mm2", "mm^2", tens(-6)}, {"um2", "um^2", tens(-12)}, {"nm2", "nm^2", tens(-18)},
	}
	springUnits = dimension{
		{"N/m", "N/m", tens(0)}, {"mN/m", "mN/m", tens(-3)}, {"uN/m", "uN/m", tens(-6)},
		{"pN/nm", "pN/nm", tens(-3)}, {"pN/um", "pN/um", tens(-6)}, {"nN/um", "nN/um", tens(-3)}, {"nN/nm", "nN/nm", tens(0)},
	}
	sensitivityUnits = dimension{
		{"m/V", "m/V", tens(0)}, {"um/V", "um/V", tens(-6)}, {"nm/V", "nm/V", tens(-9)}, {"nm/mV", "nm/mV", tens(-6)},
	}
	// 273.15 K: the definition of the Celsius temperature, SI Brochure 2.3.1.
	celsius          = scale{mul: 1, div: 1, add: 273.15, rest: 1}
	temperatureUnits = dimension{
		{"K", "K", tens(0)}, {"degC", "degC", celsius}, {"C", "", celsius}, {"celsius", "", celsius}, {"Celsius", "", celsius},
	}
	frequencyUnits = dimension{
		{"Hz", "Hz", tens(0)}, {"kHz", "kHz", tens(3)}, {"mHz", "mHz", tens(-3)},
	}
	labelUnits = dimension{{"", "none", tens(0)}, {"-", "", tens(0)}, {"1", "", tens(0)}}
)

// canonUnit brings the spellings of a unit to one: micro sign (U+00B5), Greek
// mu (U+03BC) and u are equal, as are ², ^2 and 2.
var canonUnit = strings.NewReplacer(
	"µ", "u", "μ", "u", "²", "2", "^", "", "℃", "degC", "°", "deg", "º", "deg",
	" ", "", "\u00a0", "", "\t", "").Replace

// find returns the scale of a unit as spelled in a file.
func (d dimension) find(spelled string) (scale, bool) {
	c := canonUnit(spelled)
	for i := range d {
		if d[i].spelling == c {
			return d[i].scale, true
		}
	}
	return scale{}, false
}

// findSuffix is find for a unit at the end of a name such as force_n or
// spring_constant_n_per_m, where capitals may be lost. No two units of one
// dimension differ by capitals only.
func (d dimension) findSuffix(spelled string) (scale, bool) {
	c := canonUnit(strings.ReplaceAll(strings.ToLower(spelled), "_per_", "/"))
	if c == "" {
		return scale{}, false
	}
	for i := range d {
		if strings.ToLower(d[i].spelling) == c {
			return d[i].scale, true
		}
	}
	return scale{}, false
}

// String lists the units for messages.
func (d dimension) String() string {
	var names []string
	for _, u := range d {
		if u.show != "" {
			names = append(names, u.show)
		}
	}
	return strings.Join(names, ", ")
}
