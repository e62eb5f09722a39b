package design

import (
	"errors"
	"fmt"
	"math/cmplx"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
)

// valueAt evaluates a parsed controller at x, in the variable of its text.
func valueAt(b *Block, x complex128) complex128 {
	horner := func(c []float64, x complex128) complex128 {
		var v complex128
		for _, a := range c {
			v = v*x + complex(a, 0)
		}
		return v
	}
	if b.Continuous != nil {
		return horner(b.Continuous.Numerator, x) / horner(b.Continuous.Denominator, x)
	}
	rising := func(c []float64) complex128 {
		r := slices.Clone(c)
		slices.Reverse(r)
		return horner(r, 1/x)
	}
	return rising(b.Discrete.Numerator) / rising(b.Discrete.Denominator)
}

// Every way of writing means what algebra says; the values are worked out by Go itself.
func TestParseController(t *testing.T) {
	x := complex(1.3, 0.7)
	for _, c := range []struct {
		text       string
		want       complex128
		zeros, den int // degrees, which tell that nothing was cancelled and nothing added; -1: not looked at
	}{
		{"2.4*(s+30)/(0.002*s+1)", 2.4 * (x + 30) / (0.002*x + 1), 1, 1},
		{"(2.4 - 2.2*z^-1)/(1 - 0.4*z^-1)", (2.4 - 2.2/x) / (1 - 0.4/x), 1, 1},
		{"0.5 + 2/s", 0.5 + 2/x, 1, 1},
		{"7", 7, 0, 0},
		{" -3.5e-1 ", -0.35, 0, 0},
		{"1e2/(s + 1.E+1)", 100 / (x + 10), 0, 1},
		{".5s/(s+1)", .5 * x / (x + 1), 1, 1},
		{"2(s+1)(s+2)/((s+3)(s+4))", 2 * (x + 1) * (x + 2) / ((x + 3) * (x + 4)), 2, 2},
		{"2 s (s + 1)/(s+2)^2", 2 * x * (x + 1) / (x + 2) / (x + 2), 2, 2},
		{"-s^2/(s+1)^2", -x * x / (x + 1) / (x + 1), 2, 2},
		{"(-s)**2/(s+1)**2", x * x / (x + 1) / (x + 1), 2, 2},
		{"--2*-+3", -6, 0, 0},
		{"2*-s/(s+1)", -2 * x / (x + 1), 1, 1},
		{"z/(z-1)", x / (x - 1), 0, 1},
		{"1/(z-1)", 1 / (x - 1), 1, 1},
		{"z^-2 - 0.5z^(-3)", 1/x/x - 0.5/x/x/x, 3, 0},
		{"(z-0.5)/(z^2-1.2z+0.3)", (x - 0.5) / (x*x - 1.2*x + 0.3), 2, 2},
		{"2.4 − 2.2·z^−1", 2.4 - 2.2/x, 1, 0},
		{"1 - (2 - (3 - s))/(s + 1)", 1 - (2-(3-x))/(x+1), 0, 1}, // the powers of s go out
		{"2 + 3/s + 0.1s/(0.01s + 1)", 2 + 3/x + 0.1*x/(0.01*x+1), 2, 2},
		{"1/s + 2/s", 3 / x, 0, 1},
		{"1/s + 1/(s(s+1)) + 1/s^2", 1/x + 1/(x*(x+1)) + 1/x/x, 2, 3},
		{"1/(s+2) + 3/(0.5s+1)", 1/(x+2) + 3/(0.5*x+1), 0, 1}, // one factor, written twice
		{"0.1s/(s+1) + 0.2s/(s+1) - 0.3s/(s+1) + 1/(s+1)", 1 / (x + 1), 0, 1},
		{"2 + 0/s", 2, 0, 0},
		{"1/(1 + 1/s)", x / (x + 1), 1, 1},
		{"(s-1)/(s-1)", 1, 1, 1}, // an unstable pole of its own is not cancelled
		{"(s-1)(s+3)/((s-1)(s+9))", (x + 3) / (x + 9), 2, 2},
		{"s * (1/s)", 1, 1, 1},
		{"(z-1.1)/(z-1.1)", 1, 1, 1},
		{"1/(1-z^-1) - z^-1/(1-z^-1)", 1, 1, 1},
		{"[2.4, 72] / [0.002, 1] in s", (2.4*x + 72) / (0.002*x + 1), 1, 1},
		{"[2.4, -2.2]/[1,-0.4] in z^-1", (2.4 - 2.2/x) / (1 - 0.4/x), 1, 1},
		{"[2.4, -2.2]/[1,-0.4] in z", (2.4*x - 2.2) / (x - 0.4), 1, 1},
		{"[2]/[1, 0, -0.4]  in  z", 2 / (x*x - 0.4), 2, 2},
		{"[0, 2] / [4, -2] in 1/z", 2 / x / (4 - 2/x), 1, 1},
		{"[-3e-1] in s", -0.3, 0, 0},
	} {
		b, err := ParseController(c.text)
		if err != nil {
			t.Errorf("%s: %v", c.text, err)
			continue
		}
		if got := valueAt(b, x); cmplx.Abs(got-c.want) > 1e-13*cmplx.Abs(c.want) {
			t.Errorf("%s: %v, want %v", c.text, got, c.want)
		}
		num, den := b.Discrete.Numerator, b.Discrete.Denominator
		if b.Continuous != nil {
			num, den = b.Continuous.Numerator, b.Continuous.Denominator
		}
		if len(num)-1 != c.zeros || len(den)-1 != c.den {
			t.Errorf("%s: degrees %d and %d, want %d and %d", c.text, len(num)-1, len(den)-1, c.zeros, c.den)
		}
		if b.Given != strings.TrimSpace(c.text) {
			t.Errorf("%s: kept as %q", c.text, b.Given)
		}
	}
}

// Each fault names its column, from 1 and in characters, and what is wrong.
func TestParseControllerErrors(t *testing.T) {
	for _, c := range []struct {
		text   string
		column int
		says   string
	}{
		{"", 1, "ends"},
		{"2*", 3, "ends"},
		{"2.4*(p+30)", 6, `unknown name "p"`},
		{"2.4*(S+30)", 6, `unknown name "S"`},
		{"2.4*(ss+30)", 6, `unknown name "ss"`},
		{"2e", 2, `unknown name "e"`},
		{"(s+1", 1, "never closed"},
		{"s+1)/(s+2)", 4, "closes no bracket"},
		{"(s+1]", 5, "operator or )"},
		{"z^-1 + s", 8, "s in an expression in z"},
		{"2,4*(s+1)", 2, "decimal mark"},
		{"1/2s", 4, "after a /"},
		{"1/(s+1)(s+2)", 8, "after a /"},
		{"s 2", 3, "right after"},
		{"1..2", 3, "right after"},
		{".", 1, "no number"},
		{"1e999", 1, "beyond"},
		{"(1e200)^2*s/s", 8, "beyond"},
		{"s^0.5", 3, "whole number"},
		{"s^s", 3, "whole number"},
		{"s^31", 3, "whole number"},
		{"s^(2", 5, ") of the power"},
		{"s^2^3", 4, "power of a power"},
		{"(s+1)^20*(s+1)^20", 9, "degree"},
		{"1/(s-s)", 3, "division by zero"},
		{"0^-1", 1, "division by zero"},
		{"s - s", 1, "comes to zero"},
		{"s+1", 1, "more zeros (1) than poles (0)"},
		{"z + 1", 1, "future, 1 ahead"},
		{"2 & 3", 3, "operator"},
		{"·s", 1, "should be"},
		{"−−·", 3, "should be"}, // columns are characters, not bytes
		{"1 + [1]/[2] in s", 5, "lists stand alone"},
		{"[1, 2]/[1, 3]", 14, "which powers"},
		{"[1, 2]/[1, 3] in w", 15, "which powers"},
		{"[1, 2]/s", 8, "list of the denominator"},
		{"[1 2] in s", 4, ", or ]"},
		{"[1, ] in s", 5, "a coefficient"},
		{"[1, 2", 1, "never closed"},
		{"[0]/[1] in s", 1, "numerator is zero"},
		{"[1]/[0, 0] in z^-1", 5, "denominator is zero"},
		{"[1]/[0, 1] in z^-1", 5, "first coefficient is zero"},
		{"[1, 0]/[1] in z", 1, "future, 1 ahead"},
		{"[1, 0]/[1] in s", 1, "more zeros"},
		{strings.Repeat("(", 60) + "s", 51, "brackets within"},
		{strings.Repeat("1", 3000), 2001, "longer than"},
	} {
		_, err := ParseController(c.text)
		var e *ExpressionError
		if !errors.As(err, &e) || e.Column != c.column || !strings.Contains(err.Error(), c.says) || strings.Contains(err.Error(), "\n") {
			t.Errorf("%q: %v, want column %d and %q", c.text, err, c.column, c.says)
		}
	}
}

// Random expressions against their own values, worked out while they are written.
func TestParseRandomControllers(t *testing.T) {
	rnd := rand.New(rand.NewPCG(3, 3))
	x := complex(0.8, 0.9)
	name := "s"
	var write func(depth int) (string, complex128)
	write = func(depth int) (string, complex128) {
		if depth == 0 || rnd.IntN(5) == 0 {
			if rnd.IntN(2) == 0 {
				return name, x
			}
			k := float64(rnd.IntN(900)+1) / 100
			return fmt.Sprint(k), complex(k, 0)
		}
		a, va := write(depth - 1)
		b, vb := write(depth - 1)
		switch rnd.IntN(6) {
		case 0:
			return "(" + a + ") + (" + b + ")", va + vb
		case 1:
			return "(" + a + ") - (" + b + ")", va - vb
		case 2:
			return "(" + a + ")*(" + b + ")", va * vb
		case 3:
			return "(" + a + ")/(" + b + ")", va / vb
		case 4:
			return "(" + a + ")^-2", 1 / (va * va)
		}
		return "-(" + a + ")(" + b + ")", -va * vb
	}
	parsed := 0
	for range 3000 {
		name = []string{"s", "z"}[rnd.IntN(2)]
		text, want := write(4)
		b, err := ParseController(text)
		if err != nil {
			continue // more zeros than poles, zero, or of a high degree
		}
		parsed++
		// Terms that nearly cancel lose digits in any order of evaluation.
		if got := valueAt(b, x); cmplx.Abs(got-want) > 1e-7*cmplx.Abs(want) {
			t.Errorf("%s: %v, want %v", text, got, want)
		}
	}
	if parsed < 800 {
		t.Errorf("only %d of 3000 were controllers", parsed)
	}
}

// Whatever comes in, one line of fault or a controller comes out, and the column lies in the text or just behind it.
func FuzzParseController(f *testing.F) {
	for _, text := range []string{"2.4*(s+30)/(0.002*s+1)", "[2.4, -2.2] / [1, -0.4] in z^-1", "1/2s", "z^-1**2", "−·×", "((((", "s^(-3", "0.5 + 2/s"} {
		f.Add(text)
	}
	f.Fuzz(func(t *testing.T, text string) {
		b, err := ParseController(text)
		if err == nil {
			c := *b
			if err := c.complete(0.01); err != nil && !strings.Contains(err.Error(), "pole at") && !strings.Contains(err.Error(), "finite") {
				t.Errorf("%q: %v", text, err)
			}
			return
		}
		var e *ExpressionError
		if !errors.As(err, &e) || e.Column < 1 || e.Column > len([]rune(text))+1 || strings.ContainsAny(err.Error(), "\n\r") {
			t.Errorf("%q: %v", text, err)
		}
	})
}
