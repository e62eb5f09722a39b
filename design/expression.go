package design

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"unicode"

	"steadyrig/fit/lti"
)

// An ExpressionError says where a controller's text goes wrong and what to write instead, in one line.
type ExpressionError struct {
	Column int // character, from 1
	Err    error
}

func (e *ExpressionError) Error() string { return fmt.Sprintf("column %d: %v", e.Column, e.Err) }

func (e *ExpressionError) Unwrap() error { return e.Err }

// More than any controller needs.
const (
	longestExpression = 2000 // characters
	deepestExpression = 50   // brackets
	largestDegree     = 30
)

// ParseController reads one controller as its author writes it: a rational expression in s or in z,
//
//	2.4*(s + 30)/(0.002*s + 1)    (2.4 - 2.2 z^-1)/(1 - 0.4 z^-1)    0.5 + 2/s
//
// or lists of coefficients, "[2.4, -2.2] / [1, -0.4] in z^-1" (rising powers of 1/z), "… in s" or "… in z" (falling
// powers). The * may be left out before a variable or a bracket, but not after a division, where 1/2s has two meanings.
//
// No factor of a numerator is ever cancelled against one of a denominator: a controller with an unstable pole under a
// zero has that pole, and grows. Sums take the least common denominator of the factors as written, so that 1/s + 2/s
// has one integrator. A controller in s has its continuous form only, until Loops.Set and Verify bring it to the sample
// period. Errors are *ExpressionError.
func ParseController(text string) (*Block, error) {
	text = strings.TrimSpace(text)
	p := &expression{text: []rune(text)}
	if len(p.text) > longestExpression {
		return nil, p.fail(longestExpression, "longer than %d characters", longestExpression)
	}
	p.skip()
	var b *Block
	var err error
	if p.peek() == '[' {
		b, err = p.lists()
	} else {
		b, err = p.whole()
	}
	if err != nil {
		return nil, err
	}
	b.Given = text
	return b, nil
}

// expression is a text that is being read.
type expression struct {
	text     []rune
	at       int
	variable rune // 's' or 'z', 0: none met so far
	depth    int
}

func (p *expression) fail(at int, format string, args ...any) error {
	return &ExpressionError{Column: at + 1, Err: fmt.Errorf(format, args...)}
}

func (p *expression) skip() {
	for p.at < len(p.text) && unicode.IsSpace(p.text[p.at]) {
		p.at++
	}
}

// peek is the next character, with what word processors make of the signs undone; 0 at the end.
func (p *expression) peek() rune {
	if p.at == len(p.text) {
		return 0
	}
	switch r := p.text[p.at]; r {
	case '−', '–':
		return '-'
	case '·', '×':
		return '*'
	default:
		return r
	}
}

// take steps over r, and the blanks behind it, if it comes next.
func (p *expression) take(r rune) bool {
	if p.peek() != r {
		return false
	}
	p.at++
	p.skip()
	return true
}

// found names what comes next, for messages.
func (p *expression) found() string {
	if p.at == len(p.text) {
		return "the end"
	}
	return strconv.Quote(string(p.text[p.at]))
}

// A fraction is a product of factors over another, as far as its author wrote products. No factor is constant. In z
// the factors are polynomials in z^-1 with a constant term, and shift is the power of z^-1 in front.
type fraction struct {
	gain     float64
	num, den []lti.Poly
	shift    int
}

func constant(k float64) fraction { return fraction{gain: k} }

func (p *expression) whole() (*Block, error) {
	f, err := p.sum()
	if err != nil {
		return nil, err
	}
	switch p.peek() {
	case 0:
	case ')':
		return nil, p.fail(p.at, "this ) closes no bracket")
	case ',':
		return nil, p.fail(p.at, "a comma: write the decimal mark as a point, and lists of coefficients in [ ]")
	case ']':
		return nil, p.fail(p.at, "this ] belongs to no list")
	default:
		return nil, p.fail(p.at, "%s where an operator or the end should be", p.found())
	}
	if f.gain == 0 {
		return nil, p.fail(0, "the controller comes to zero: leave it out")
	}
	num, den := product(f.num).Scale(f.gain), product(f.den)
	if p.variable == 's' {
		return p.continuous(num, den)
	}
	if f.shift < 0 {
		return nil, p.fail(0, "more zeros than poles in z: the controller asks for outputs of the future, %d ahead", -f.shift)
	}
	return &Block{Discrete: Rational{append(make([]float64, f.shift), num...), den}}, nil
}

// continuous is the block of num/den in rising powers of s.
func (p *expression) continuous(num, den lti.Poly) (*Block, error) {
	if n, m := num.Degree(), den.Degree(); n > m {
		return nil, p.fail(0, "more zeros (%d) than poles (%d): no computer can differentiate a sample; divide by a fast lag, such as (0.001*s + 1)", n, m)
	}
	num, den = slices.Clone(num.Trim()), slices.Clone(den.Trim())
	slices.Reverse(num)
	slices.Reverse(den)
	return &Block{Continuous: &Rational{num, den}}, nil
}

func product(factors []lti.Poly) lti.Poly {
	r := lti.Poly{1}
	for _, f := range factors {
		r = r.Mul(f)
	}
	return r
}

// sum reads terms with + and - between them.
func (p *expression) sum() (fraction, error) {
	f, err := p.term()
	for err == nil {
		at := p.at
		sign := 0.0
		switch {
		case p.take('+'):
			sign = 1
		case p.take('-'):
			sign = -1
		default:
			return f, nil
		}
		var g fraction
		if g, err = p.term(); err == nil {
			f, err = p.add(f, g, sign, at)
		}
	}
	return f, err
}

// term reads factors with *, / or nothing between them.
func (p *expression) term() (fraction, error) {
	f, err := p.factor()
	divided := false // the last factor stands right after a /
	for err == nil {
		at := p.at
		var g fraction
		switch next := p.peek(); {
		case next == '*':
			p.take('*')
			divided = false
			if g, err = p.factor(); err == nil {
				f, err = p.times(f, g, at)
			}
		case next == '/':
			p.take('/')
			from := p.at
			divided = true
			if g, err = p.factor(); err != nil {
				break
			}
			if g.gain == 0 {
				return f, p.fail(from, "division by zero")
			}
			f, err = p.times(f, fraction{gain: 1 / g.gain, num: g.den, den: g.num, shift: -g.shift}, at)
		case next == '(' || unicode.IsLetter(next):
			if divided {
				return f, p.fail(at, "after a / no * may be left out: 1/2%[1]c… could be 1/(2%[1]c…) or (1/2)*%[1]c…", next)
			}
			if g, err = p.factor(); err == nil {
				f, err = p.times(f, g, at)
			}
		case next == '.' || unicode.IsDigit(next):
			return f, p.fail(at, "a number right after a factor: write * or the operator that is missing")
		default:
			return f, nil
		}
	}
	return f, err
}

// factor reads signs and powers.
func (p *expression) factor() (fraction, error) {
	switch {
	case p.take('+'):
		return p.factor()
	case p.take('-'):
		f, err := p.factor()
		f.gain = -f.gain
		return f, err
	}
	from := p.at
	base, err := p.atom()
	if err != nil {
		return base, err
	}
	at := p.at
	if p.peek() == '*' && at+1 < len(p.text) && p.text[at+1] == '*' {
		p.at++
	} else if p.peek() != '^' {
		return base, nil
	}
	p.at++
	p.skip()
	n, err := p.exponent()
	if err != nil {
		return base, err
	}
	if p.peek() == '^' {
		return base, p.fail(p.at, "a power of a power: write brackets")
	}
	if n < 0 {
		if base.gain == 0 {
			return base, p.fail(from, "division by zero")
		}
		base, n = fraction{gain: 1 / base.gain, num: base.den, den: base.num, shift: -base.shift}, -n
	}
	f := constant(1)
	for range n {
		if f, err = p.times(f, base, at); err != nil {
			break
		}
	}
	return f, err
}

// exponent reads a whole number, with a sign or in brackets.
func (p *expression) exponent() (int, error) {
	open := p.take('(')
	sign := 1
	if p.take('-') {
		sign = -1
	} else {
		p.take('+')
	}
	from := p.at
	for unicode.IsDigit(p.peek()) {
		p.at++
	}
	n, err := strconv.Atoi(string(p.text[from:p.at]))
	if err != nil || n > largestDegree || p.peek() == '.' {
		return 0, p.fail(from, "a power must be a whole number from -%d to %d", largestDegree, largestDegree)
	}
	p.skip()
	if open && !p.take(')') {
		return 0, p.fail(p.at, "%s where the ) of the power should be", p.found())
	}
	return sign * n, nil
}

// atom reads a number, a variable or a bracket.
func (p *expression) atom() (fraction, error) {
	at := p.at
	switch next := p.peek(); {
	case next == '(':
		if p.depth++; p.depth > deepestExpression {
			return fraction{}, p.fail(at, "more than %d brackets within each other", deepestExpression)
		}
		p.take('(')
		f, err := p.sum()
		if err != nil {
			return f, err
		}
		p.depth--
		if !p.take(')') {
			if p.at == len(p.text) {
				return f, p.fail(at, "this ( is never closed")
			}
			return f, p.fail(p.at, "%s where an operator or ) should be", p.found())
		}
		return f, nil
	case next == '.' || unicode.IsDigit(next):
		k, err := p.number()
		return constant(k), err
	case unicode.IsLetter(next):
		for p.at < len(p.text) && (unicode.IsLetter(p.text[p.at]) || p.text[p.at] == '_') {
			p.at++
		}
		name := string(p.text[at:p.at])
		if name != "s" && name != "z" {
			return fraction{}, p.fail(at, "unknown name %q: the variable is s or z, and all else numbers", name)
		}
		if v := rune(name[0]); p.variable != 0 && p.variable != v {
			return fraction{}, p.fail(at, "%s in an expression in %c: write the controller in one of them", name, p.variable)
		} else {
			p.variable = v
		}
		p.skip()
		if name == "z" {
			return fraction{gain: 1, shift: -1}, nil
		}
		return fraction{gain: 1, num: []lti.Poly{{0, 1}}}, nil
	case next == 0:
		return fraction{}, p.fail(at, "the expression ends where a number, s, z or ( should be")
	case next == '[':
		return fraction{}, p.fail(at, "a list within an expression: lists stand alone, as in [2.4, -2.2] / [1, -0.4] in z^-1")
	}
	return fraction{}, p.fail(at, "%s where a number, s, z or ( should be", p.found())
}

// number reads a decimal number without a sign.
func (p *expression) number() (float64, error) {
	from := p.at
	digits := func() {
		for unicode.IsDigit(p.peek()) {
			p.at++
		}
	}
	digits()
	if p.peek() == '.' {
		p.at++
		digits()
	}
	if r := p.peek(); r == 'e' || r == 'E' {
		mark := p.at
		p.at++
		if r := p.peek(); r == '+' || r == '-' {
			p.at++
		}
		if !unicode.IsDigit(p.peek()) {
			p.at = mark
		}
		digits()
	}
	text := strings.NewReplacer("−", "-", "–", "-").Replace(string(p.text[from:p.at]))
	k, err := strconv.ParseFloat(text, 64)
	if err != nil {
		if errors.Is(err, strconv.ErrRange) {
			return 0, p.fail(from, "%s is beyond all numbers that can be worked with", text)
		}
		return 0, p.fail(from, "%q is no number", text)
	}
	p.skip()
	return k, nil
}

// times multiplies; at is where the operator stands.
func (p *expression) times(f, g fraction, at int) (fraction, error) {
	if f.gain*g.gain == 0 {
		return constant(0), nil // a gain that is switched off leaves no pole behind
	}
	r := fraction{
		gain: f.gain * g.gain, num: slices.Concat(f.num, g.num), den: slices.Concat(f.den, g.den), shift: f.shift + g.shift,
	}
	return r, p.bearable(r, at)
}

// bearable refuses what no controller holds.
func (p *expression) bearable(f fraction, at int) error {
	n, m := 0, 0
	for _, q := range f.num {
		n += q.Degree()
	}
	for _, q := range f.den {
		m += q.Degree()
	}
	if max(n, m)+max(f.shift, -f.shift) > largestDegree {
		return p.fail(at, "a degree beyond %d", largestDegree)
	}
	if math.IsInf(f.gain, 0) || math.IsNaN(f.gain) {
		return p.fail(at, "a factor beyond all numbers that can be worked with")
	}
	return nil
}

// add returns f + sign g over the least common multiple of their denominators; at is where the operator stands.
func (p *expression) add(f, g fraction, sign float64, at int) (fraction, error) {
	r := fraction{gain: 1, den: slices.Clone(f.den), shift: min(f.shift, g.shift)}
	// Of g's factors, those that f has too; what is left goes to f's numerator.
	own, toF, scale := slices.Clone(f.den), []lti.Poly(nil), 1.0
	for _, q := range g.den {
		i := slices.IndexFunc(own, func(d lti.Poly) bool { _, same := proportion(q, d); return same })
		if i < 0 {
			toF, r.den = append(toF, q), append(r.den, q)
			continue
		}
		k, _ := proportion(q, own[i])
		scale *= k
		own = slices.Delete(own, i, i+1)
	}
	delayed := func(h fraction, k float64, more []lti.Poly) lti.Poly {
		q := product(h.num).Mul(product(more)).Scale(h.gain * k)
		return append(make(lti.Poly, h.shift-r.shift), q...)
	}
	a, b := delayed(f, 1, toF), delayed(g, sign/scale, own)
	sum := a.Add(b)
	for i := range sum {
		// What two terms take from each other leaves rounding, and rounding must not raise the degree.
		size := 0.0
		for _, q := range []lti.Poly{a, b} {
			if i < len(q) {
				size = math.Max(size, math.Abs(q[i]))
			}
		}
		if math.Abs(sum[i]) < 1e-14*size {
			sum[i] = 0
		}
	}
	if sum = sum.Trim(); len(sum) == 0 {
		return constant(0), nil
	}
	if p.variable == 'z' {
		for sum[0] == 0 {
			sum, r.shift = sum[1:], r.shift+1
		}
	}
	if len(sum) == 1 {
		r.gain = sum[0]
	} else {
		r.num = []lti.Poly{sum}
	}
	return r, p.bearable(r, at)
}

// proportion returns k where p = k q.
func proportion(p, q lti.Poly) (k float64, same bool) {
	if len(p) != len(q) {
		return 0, false
	}
	k = p[len(p)-1] / q[len(q)-1]
	for i := range p {
		if math.Abs(p[i]-k*q[i]) > 1e-14*math.Abs(p[i]) {
			return 0, false
		}
	}
	return k, true
}

// lists reads coefficients: "[…] / […] in s", or one list alone.
func (p *expression) lists() (*Block, error) {
	num, err := p.list()
	if err != nil {
		return nil, err
	}
	den, from := []float64{1}, p.at
	if p.take('/') {
		if from = p.at; p.peek() != '[' {
			return nil, p.fail(p.at, "%s where the list of the denominator should be", p.found())
		}
		if den, err = p.list(); err != nil {
			return nil, err
		}
	}
	const which = `say which powers the lists are of: end with "in s" or "in z" (falling powers), or "in z^-1" (rising powers of 1/z)`
	if p.at == len(p.text) {
		return nil, p.fail(p.at, which)
	}
	at := p.at
	of := strings.Join(strings.Fields(string(p.text[p.at:])), " ")
	num, den = slices.Clone(num), slices.Clone(den)
	if of == "in s" || of == "in z" {
		num, den = leadingNonzero(num), leadingNonzero(den)
	}
	switch {
	case lti.Poly(num).Degree() < 0:
		return nil, p.fail(0, "the numerator is zero: leave the controller out")
	case lti.Poly(den).Degree() < 0:
		return nil, p.fail(from, "the denominator is zero")
	case len(num) > largestDegree+1 || len(den) > largestDegree+1:
		return nil, p.fail(0, "a degree beyond %d", largestDegree)
	}
	switch of {
	case "in s":
		slices.Reverse(num)
		slices.Reverse(den)
		return p.continuous(num, den)
	case "in z":
		ahead := len(num) - len(den)
		if ahead > 0 {
			return nil, p.fail(0, "more zeros than poles in z: the controller asks for outputs of the future, %d ahead", ahead)
		}
		return &Block{Discrete: Rational{append(make([]float64, -ahead), num...), den}}, nil
	case "in z^-1", "in 1/z":
		if den[0] == 0 {
			return nil, p.fail(from, "the denominator's first coefficient is zero: it multiplies the present output and must not be")
		}
		return &Block{Discrete: Rational{num, den}}, nil
	}
	return nil, p.fail(at, which)
}

// list reads numbers in [ ].
func (p *expression) list() ([]float64, error) {
	open := p.at
	p.take('[')
	var out []float64
	for {
		sign := 1.0
		if p.take('-') {
			sign = -1
		} else {
			p.take('+')
		}
		if r := p.peek(); r != '.' && !unicode.IsDigit(r) {
			return nil, p.fail(p.at, "%s where a coefficient should be", p.found())
		}
		k, err := p.number()
		if err != nil {
			return nil, err
		}
		out = append(out, sign*k)
		switch {
		case p.take(','):
		case p.take(']'):
			return out, nil
		case p.at == len(p.text):
			return nil, p.fail(open, "this [ is never closed")
		default:
			return nil, p.fail(p.at, "%s where , or ] should be", p.found())
		}
	}
}
