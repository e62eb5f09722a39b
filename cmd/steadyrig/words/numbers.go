package words

import (
	"fmt"
	"math"
	"strconv"
	"strings"

	"steadyrig/design"
	"steadyrig/ident"
)

// Number formats a figure for a person: four digits.
func Number(x float64) string {
	switch {
	case math.IsNaN(x):
		return "unknown"
	case math.IsInf(x, 1):
		return "no limit"
	case math.IsInf(x, -1):
		return "-no limit"
	case x == 0:
		return "0"
	}
	s := plain(strconv.FormatFloat(x, 'g', 4, 64))
	if a := math.Abs(x); a >= 1e4 && a < 1e6 || a < 1e-4 && a >= 1e-5 {
		s = strconv.FormatFloat(x, 'f', max(0, 3-int(math.Floor(math.Log10(a)))), 64)
	}
	return s
}

// plain takes sign and leading zero off an exponent: 2.6e+06 is 2.6e6.
func plain(s string) string {
	return strings.NewReplacer("e+0", "e", "e+", "e", "e-0", "e-").Replace(s)
}

// Brief formats a figure for a crowded table: three digits.
func Brief(x float64) string {
	if s := strconv.FormatFloat(x, 'g', 3, 64); !strings.ContainsAny(s, "eIN") {
		return s
	}
	return Number(x)
}

// Unit puts a unit behind a figure where there is one.
func Unit(s, unit string) string {
	if unit == "" {
		return s
	}
	return s + " " + unit
}

// Interval formats a 95 % interval; an open end is said in words.
func Interval(iv ident.Interval) string {
	lo, hi := math.IsInf(iv.Lo, -1), math.IsInf(iv.Hi, 1)
	switch {
	case lo && hi:
		return "not bounded"
	case lo:
		return "below " + Number(iv.Hi)
	case hi:
		return "above " + Number(iv.Lo)
	}
	from, to := together(iv.Lo, iv.Hi)
	return from + " to " + to
}

// together formats the two ends of an interval with as many digits as tell them apart: the width to two digits, and
// at least four digits of the larger end where that asks for more.
func together(lo, hi float64) (from, to string) {
	width := hi - lo
	if !(width > 0) {
		return Number(lo), Number(hi)
	}
	decimals := 1 - int(math.Floor(math.Log10(width)))
	big := math.Max(math.Abs(lo), math.Abs(hi))
	if big >= 1e6 || big < 1e-4 || decimals > 8 {
		digits := max(2, min(12, 1+int(math.Floor(math.Log10(big)))+decimals))
		return plain(strconv.FormatFloat(lo, 'g', digits, 64)), plain(strconv.FormatFloat(hi, 'g', digits, 64))
	}
	f := func(x float64) string {
		s := strconv.FormatFloat(x, 'f', max(0, decimals), 64)
		if strings.Trim(s, "-0.") == "" {
			return "0"
		}
		return s
	}
	return f(lo), f(hi)
}

// Share formats a fraction as a percentage.
func Share(x float64) string {
	if math.IsNaN(x) {
		return "unknown"
	}
	return Number(100*x) + " %"
}

// Probability formats a probability without claiming certainty.
func Probability(p float64) string {
	switch {
	case math.IsNaN(p):
		return "unknown"
	case p > 0.9995:
		return "> 0.999"
	case p < 0.0005:
		return "< 0.001"
	}
	return strconv.FormatFloat(p, 'f', 3, 64)
}

func Count(n int, what string) string {
	if n == 1 {
		return "1 " + what
	}
	return fmt.Sprintf("%d %ss", n, what)
}

// Seconds formats a time in a unit that suits its size.
func Seconds(t float64) string {
	switch a := math.Abs(t); {
	case math.IsNaN(t) || math.IsInf(t, 0):
		return Number(t)
	case a == 0:
		return "0 s"
	case a < 1e-3:
		return Number(t*1e6) + " µs"
	case a < 1:
		return Number(t*1e3) + " ms"
	}
	return Number(t) + " s"
}

// Polynomial formats coefficients in descending powers.
func Polynomial(c []float64, x string) string { return PolynomialWithin(c, make([]float64, len(c)), x) }

// PolynomialWithin formats coefficients in descending powers, each with the half width of its interval; 0: it has none.
func PolynomialWithin(c, half []float64, x string) string {
	var b strings.Builder
	for i, v := range c {
		k := len(c) - 1 - i
		if v == 0 && half[i] == 0 && len(c) > 1 {
			continue
		}
		figure := Number(math.Abs(v))
		switch {
		case half[i] > 0:
			figure = within(math.Abs(v), half[i], len(c) == 1)
		case math.Abs(v) == 1 && k > 0:
			figure = ""
		}
		switch {
		case b.Len() == 0 && v < 0:
			b.WriteString("-")
		case b.Len() > 0 && v < 0:
			b.WriteString(" - ")
		case b.Len() > 0:
			b.WriteString(" + ")
		}
		b.WriteString(figure)
		if k > 0 {
			if figure != "" {
				b.WriteString(" ")
			}
			b.WriteString(x + power(k))
		}
	}
	return b.String()
}

// within formats a figure and its half width, both to the second digit of the half width; bare: it stands alone and
// needs no brackets. Where that digit is far from the point, both share an exponent.
func within(v, half float64, bare bool) string {
	exponent := ""
	if half >= 1e3 || half < 1e-4 {
		e := math.Floor(math.Log10(math.Max(math.Abs(v), half)))
		scale := math.Pow(10, -e)
		v, half = v*scale, half*scale
		exponent = fmt.Sprintf("e%g", e)
	}
	decimals := max(0, min(9, 1-int(math.Floor(math.Log10(half)))))
	f := func(x float64) string { return strconv.FormatFloat(x, 'f', decimals, 64) }
	text := f(v) + " ± " + f(half)
	if bare && exponent == "" {
		return text
	}
	return "(" + text + ")" + exponent
}

// power writes an exponent in raised figures, 1 as nothing.
func power(k int) string {
	if k == 1 {
		return ""
	}
	return strings.NewReplacer("-", "⁻", "0", "⁰", "1", "¹", "2", "²", "3", "³", "4", "⁴", "5", "⁵", "6", "⁶", "7", "⁷", "8", "⁸", "9", "⁹").Replace(strconv.Itoa(k))
}

// Fraction formats a ratio of polynomials in rising powers of 1/z.
func Fraction(r design.Rational, z string) string {
	side := func(c []float64) string {
		s := ""
		for i, v := range c {
			sign := " + "
			if v < 0 {
				sign = " - "
			}
			if i == 0 {
				sign = map[bool]string{true: "-", false: ""}[v < 0]
			}
			s += sign + Number(math.Abs(v))
			if i > 0 {
				s += " " + z + power(-i)
			}
		}
		return s
	}
	return "(" + side(r.Numerator) + ") / (" + side(r.Denominator) + ")"
}

// Ratio is the unit of an output per input.
func Ratio(num, den string) string {
	switch {
	case num == "" && den == "":
		return ""
	case num == "":
		num = "1"
	case den == "":
		return num
	}
	return fmt.Sprintf("%s/%s", num, den)
}
