package data

import (
	"errors"
	"math"
	"strconv"
)

// A decimal is ±Mant 10^Exp, as read from text.
type decimal struct {
	neg  bool
	mant uint64
	exp  int
}

// scanDecimal reads a decimal number from the start of b and returns it with the number of bytes read, 0 where b
// does not start with one. mark is '.' or ','. exact is false where the digits do not fit into Mant.
func scanDecimal(b []byte, mark byte) (d decimal, n int, exact bool) {
	i := 0
	if i < len(b) && (b[i] == '-' || b[i] == '+') {
		d.neg = b[i] == '-'
		i++
	}
	first := i
	digits, seen := 0, false // significant digits; any digit
	point := -1
	for ; i < len(b); i++ {
		c := b[i]
		if c-'0' <= 9 {
			seen = true
			if d.mant != 0 || c != '0' {
				digits++
			}
			d.mant = d.mant*10 + uint64(c-'0')
			continue
		}
		if c == mark && point < 0 {
			point = i + 1
			continue
		}
		break
	}
	if !seen {
		return decimal{}, 0, false
	}
	if point >= 0 {
		d.exp = point - i
	}
	if i < len(b) && (b[i]|0x20 == 'e' || b[i]|0x20 == 'd') && i > first {
		j, neg, exp := i+1, false, 0
		if j < len(b) && (b[j] == '-' || b[j] == '+') {
			neg = b[j] == '-'
			j++
		}
		start := j
		for ; j < len(b) && b[j]-'0' <= 9; j++ {
			if exp < 10000 {
				exp = exp*10 + int(b[j]-'0')
			}
		}
		if j > start {
			if neg {
				exp = -exp
			}
			d.exp += exp
			i = j
		}
	}
	return d, i, digits <= 19
}

// scanNumber reads a number from the start of b and returns it with the number of bytes read, 0 where b does not
// start with one. The result is the float64 nearest to the text; a number too large for one is ±Inf.
func scanNumber(b []byte, mark byte) (x float64, n int) {
	d, n, exact := scanDecimal(b, mark)
	if n == 0 {
		return 0, 0
	}
	if !exact || d.mant > 1<<53 || d.exp < -22 || d.exp > 22 {
		return slowNumber(b[:n], mark), n
	}
	// Both factors are exact in float64, so the one rounding is that of the result (W. D. Clinger, "How to read
	// floating point numbers accurately", Proc. ACM PLDI 1990, 92-101).
	x = float64(d.mant)
	if d.exp < 0 {
		x /= pow10[-d.exp]
	} else {
		x *= pow10[d.exp]
	}
	if d.neg {
		x = -x
	}
	return x, n
}

var pow10 = [...]float64{1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11, 1e12, 1e13, 1e14, 1e15, 1e16,
	1e17, 1e18, 1e19, 1e20, 1e21, 1e22}

// slowNumber is scanNumber for what the quick way cannot do exactly. b is a whole number.
func slowNumber(b []byte, mark byte) float64 {
	var small [64]byte
	text := append(small[:0], b...)
	for i, c := range text {
		switch c {
		case mark:
			text[i] = '.'
		case 'd', 'D': // the exponent of old Fortran programs
			text[i] = 'e'
		}
	}
	x, err := strconv.ParseFloat(string(text), 64)
	if err != nil && !errors.Is(err, strconv.ErrRange) {
		return math.NaN() // unreachable: scanDecimal has checked the form
	}
	return x
}

// missing are the texts, lower case, that loggers write for no number.
var missing = map[string]bool{
	"": true, "nan": true, "-nan": true, "+nan": true, "na": true, "n/a": true, "#n/a": true, "null": true, "none": true,
	"-": true, "--": true, "inf": true, "+inf": true, "-inf": true, "infinity": true, "+infinity": true, "-infinity": true,
	"1.#qnan": true, "-1.#qnan": true, "1.#ind": true, "-1.#ind": true, "1.#inf": true, "-1.#inf": true,
	"nan(ind)": true, "-nan(ind)": true, "#num!": true, "#value!": true, "#div/0!": true,
}

// isMissing tells whether a cell, blanks and quotes trimmed, stands for no number.
func isMissing(cell []byte) bool {
	if len(cell) > 10 {
		return false
	}
	var low [10]byte
	for i, c := range cell {
		if 'A' <= c && c <= 'Z' {
			c |= 0x20
		}
		low[i] = c
	}
	return missing[string(low[:len(cell)])]
}
