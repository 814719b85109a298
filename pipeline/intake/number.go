package intake

import (
	"errors"
	"strconv"
)

// pow10 holds the powers of ten that a float64 holds exactly.
var pow10 = [...]float64{
	1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11,
	1e12, 1e13, 1e14, 1e15, 1e16, 1e17, 1e18, 1e19, 1e20, 1e21, 1e22,
}

// scanDecimal reads the decimal number that starts at b[i] when its value is
// certain without arithmetic beyond float64: digits that make an integer up to
// 2^53 and a power of ten up to 22, both exact, so that one multiplication or
// division rounds once and correctly (Clinger, How to read floating point
// numbers accurately, 1990). It returns the value, the power of ten of the
// last printed digit, and the index behind the number; -1 for anything else,
// be it a number for strconv or no number at all.
//
// b must hold, at or behind i, a byte that cannot belong to a number, such as
// a line feed.
func scanDecimal(b []byte, i int, sep byte) (v float64, exp10, end int) {
	neg := false
	if b[i] == '-' {
		neg = true
		i++
	} else if b[i] == '+' {
		i++
	}
	first := i
	var m uint64
	for d := b[i] - '0'; d <= 9; d = b[i] - '0' {
		m = m*10 + uint64(d)
		i++
	}
	digits := i - first
	if b[i] == sep {
		i++
		point := i
		for d := b[i] - '0'; d <= 9; d = b[i] - '0' {
			m = m*10 + uint64(d)
			i++
		}
		exp10 = point - i
		digits -= exp10
	}
	// 18 digits cannot overflow m.
	if digits == 0 || digits > 18 || m > 1<<53 {
		return 0, 0, -1
	}
	if b[i]|0x20 == 'e' {
		i++
		down := b[i] == '-'
		if down || b[i] == '+' {
			i++
		}
		first, e := i, 0
		for d := b[i] - '0'; d <= 9; d = b[i] - '0' {
			if e = e*10 + int(d); e > 999 {
				return 0, 0, -1
			}
			i++
		}
		if i == first {
			return 0, 0, -1
		}
		if down {
			e = -e
		}
		exp10 += e
	}
	v = float64(m)
	switch {
	case exp10 < -22 || exp10 > 22:
		return 0, 0, -1
	case exp10 < 0:
		v /= pow10[-exp10]
	case exp10 > 0:
		v *= pow10[exp10]
	}
	if neg {
		v = -v
	}
	return v, exp10, i
}

// shape is how a number is printed.
type shape struct {
	digits    int // before the decimal sign
	decimals  int // behind it
	exponent  int // digits of the exponent, 0 when there is none
	power     int // value of the exponent
	decimalAt int // index of the decimal sign, -1 when there is none
}

// lastDigit returns the power of ten of the last printed digit.
func (s shape) lastDigit() int { return s.power - s.decimals }

// shapeOf tells how a decimal number is printed. ok is false unless all of b
// is one: sign, digits with at most one sep among them, exponent. Hexadecimal
// floats, underscores, infinities and NaN, which strconv reads, are none.
func shapeOf(b []byte, sep byte) (s shape, ok bool) {
	i := 0
	run := func() int {
		first := i
		for i < len(b) && b[i]-'0' <= 9 {
			i++
		}
		return i - first
	}
	sign := func() {
		if i < len(b) && (b[i] == '-' || b[i] == '+') {
			i++
		}
	}
	s.decimalAt = -1
	sign()
	s.digits = run()
	if i < len(b) && b[i] == sep {
		s.decimalAt = i
		i++
		s.decimals = run()
	}
	if s.digits+s.decimals == 0 {
		return s, false
	}
	if i < len(b) && b[i]|0x20 == 'e' {
		i++
		down := i < len(b) && b[i] == '-'
		sign()
		first := i
		if s.exponent = run(); s.exponent == 0 {
			return s, false
		}
		// Far beyond what a float64 holds; kept from overflowing.
		for _, c := range b[first:i] {
			s.power = min(s.power*10+int(c-'0'), 1<<20)
		}
		if down {
			s.power = -s.power
		}
	}
	return s, i == len(b)
}

var (
	errNotDecimal = errors.New("not a decimal number")
	errRange      = errors.New("beyond the range of a double")
)

// parseDecimal reads all of b as a decimal number with the given decimal sign
// (0: none has been seen in the file yet, and b may have none). It equals
// strconv.ParseFloat bit for bit on what shapeOf takes for a number, and
// returns the power of ten of the last printed digit with it.
func parseDecimal(b []byte, sep byte) (v float64, exp10 int, err error) {
	s, ok := shapeOf(b, sep)
	if !ok {
		return 0, 0, errNotDecimal
	}
	var room [64]byte // most numbers fit: no allocation
	plain := append(room[:0], b...)
	if s.decimalAt >= 0 {
		plain[s.decimalAt] = '.'
	}
	v, perr := strconv.ParseFloat(string(plain), 64)
	if perr != nil {
		return 0, 0, errRange
	}
	return v, s.lastDigit(), nil
}

// parseAnyDecimal is parseDecimal for a number that stands alone, such as a
// header value: a point or a comma may be its decimal sign.
func parseAnyDecimal(b []byte) (float64, error) {
	v, _, err := parseDecimal(b, '.')
	if err == errNotDecimal {
		v, _, err = parseDecimal(b, ',')
	}
	return v, err
}

// isNumber tells whether b is a decimal number with either decimal sign.
func isNumber(b []byte) bool {
	if _, ok := shapeOf(b, '.'); ok {
		return true
	}
	_, ok := shapeOf(b, ',')
	return ok
}
