// Command crosscheck prints what the public functions of fit, fit/lti and design make of random cases, one JSON object a
// line, for crosscheck.py to do the same with reference libraries and compare:
//
//	go run ./testdata/published/crosscheck | /usr/bin/python3 testdata/published/crosscheck.py
package main

import (
	"bufio"
	"encoding/json"
	"flag"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"os"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/design"
	"steadyrig/fit"
	"steadyrig/fit/lti"
)

// result is one quantity on random input. In holds scalars, vectors and matrices by name; Out is flat.
type result struct {
	What string         `json:"what"`
	Seed [2]uint64      `json:"seed"`
	In   map[string]any `json:"in"`
	Out  []float64      `json:"out"`
}

var quantities = []struct {
	name string
	make func(r *rand.Rand) (in map[string]any, out []float64, err error)
}{
	{"frequency response", func(r *rand.Rand) (map[string]any, []float64, error) {
		g, w := plant(r), frequencies(r)
		return of("num", g.Num, "den", g.Den, "delay", g.Delay, "w", w), responses(w, func(w float64) complex128 { return g.At(complex(0, w)) }), nil
	}},
	{"sampled by a hold, coefficients", func(r *rand.Rand) (map[string]any, []float64, error) {
		g, h := plant(r), period(r)
		g.Delay = 0
		d, err := lti.ZOHTF(g, h)
		if err != nil {
			return nil, nil, err
		}
		return of("num", g.Num, "den", g.Den, "h", h), append(append([]float64(nil), d.Num...), d.Den...), nil
	}},
	{"sampled by a hold with delay, response", func(r *rand.Rand) (map[string]any, []float64, error) {
		g, h := plant(r), period(r)
		g.Delay = 3 * h * r.Float64()
		at, err := lti.ZOHResponse(g, h)
		if err != nil {
			return nil, nil, err
		}
		w := []float64{0.01 / h, 0.1 / h, 0.7 / h, 2 / h, 3 / h}
		return of("num", g.Num, "den", g.Den, "delay", g.Delay, "h", h, "w", w), responses(w, at), nil
	}},
	{"the same by state space", func(r *rand.Rand) (map[string]any, []float64, error) {
		g, h := plant(r), period(r)
		g.Delay = 3 * h * r.Float64()
		ss, err := lti.ZOH(g, h)
		if err != nil {
			return nil, nil, err
		}
		w := []float64{0.01 / h, 0.1 / h, 0.7 / h, 2 / h, 3 / h}
		return of("num", g.Num, "den", g.Den, "delay", g.Delay, "h", h, "w", w), responses(w, ss.At), nil
	}},
	{"Tustin's transform", func(r *rand.Rand) (map[string]any, []float64, error) {
		g, h := plant(r), period(r)
		d := lti.Tustin(lti.TF{Num: g.Num, Den: g.Den}, h)
		return of("num", g.Num, "den", g.Den, "h", h), append(append([]float64(nil), d.Num...), d.Den...), nil
	}},
	{"difference equation", func(r *rand.Rand) (map[string]any, []float64, error) {
		g, x := lti.DTF{Num: normal(r, 4), Den: append(lti.Poly{1}, normal(r, 3)...), Period: 1}, normal(r, 40)
		return of("num", g.Num, "den", g.Den, "x", x), g.Filter(nil, x), nil
	}},
	{"roots", func(r *rand.Rand) (map[string]any, []float64, error) {
		p := lti.Poly(normal(r, 2+r.IntN(6)))
		var out []float64
		for _, z := range p.Roots() {
			out = append(out, real(z), imag(z))
		}
		return of("p", p), out, nil
	}},
	{"matrix exponential", func(r *rand.Rand) (map[string]any, []float64, error) {
		a := square(r, 1+r.IntN(6))
		return of("a", a), flat(lti.Expm(a)), nil
	}},
	{"matrix logarithm", func(r *rand.Rand) (map[string]any, []float64, error) {
		a := square(r, 1+r.IntN(5)) // its eigenvalues' imaginary parts stay below pi, so that it is its exponential's logarithm
		a.Scale(0.5, a)
		e := lti.Expm(a)
		l, err := lti.Logm(e)
		if err != nil {
			return nil, nil, err
		}
		return of("a", e), flat(l), nil
	}},
	{"Lyapunov", func(r *rand.Rand) (map[string]any, []float64, error) {
		a := stable(r)
		q := gram(r, rows(a))
		x, err := lti.Lyapunov(a, q)
		if err != nil {
			return nil, nil, err
		}
		return of("a", a, "q", q), flat(x), nil
	}},
	{"discrete Lyapunov", func(r *rand.Rand) (map[string]any, []float64, error) {
		a := lti.Expm(stable(r))
		q := gram(r, rows(a))
		x, err := lti.DiscreteLyapunov(a, q)
		if err != nil {
			return nil, nil, err
		}
		return of("a", a, "q", q), flat(x), nil
	}},
	{"Riccati", func(r *rand.Rand) (map[string]any, []float64, error) {
		a := square(r, 1+r.IntN(5))
		b, q, w := matrix(r, rows(a), 1+r.IntN(2)), gram(r, rows(a)), 0.1+r.Float64()
		weight := eye(b, w)
		x, k, err := lti.CARE(a, b, q, weight)
		if err != nil {
			return nil, nil, err
		}
		return of("a", a, "b", b, "q", q, "r", weight), append(flat(x), flat(k)...), nil
	}},
	{"discrete Riccati", func(r *rand.Rand) (map[string]any, []float64, error) {
		a := square(r, 1+r.IntN(5))
		b, q, w := matrix(r, rows(a), 1+r.IntN(2)), gram(r, rows(a)), 0.1+r.Float64()
		weight := eye(b, w)
		x, k, err := lti.DARE(a, b, q, weight)
		if err != nil {
			return nil, nil, err
		}
		return of("a", a, "b", b, "q", q, "r", weight), append(flat(x), flat(k)...), nil
	}},
	{"sampled noise", func(r *rand.Rand) (map[string]any, []float64, error) {
		a, h := square(r, 1+r.IntN(4)), period(r)
		q := gram(r, rows(a))
		_, c := lti.SampledNoise(a, q, h)
		return of("a", a, "q", q, "h", h), flat(c), nil
	}},
	{"spectra", func(r *rand.Rand) (map[string]any, []float64, error) {
		x, y, h, length := normal(r, 300+r.IntN(300)), []float64(nil), period(r), 2*(8+r.IntN(60))
		y = lti.DTF{Num: lti.Poly{0, 1, 0.5}, Den: lti.Poly{1, -0.6}, Period: h}.Filter(nil, x)
		for i := range y {
			y[i] += r.NormFloat64()
		}
		s, err := fit.Welch([][]float64{x}, [][]float64{y}, h, length)
		if err != nil {
			return nil, nil, err
		}
		out := append(append([]float64(nil), s.XX...), s.YY...)
		for _, v := range s.XY {
			out = append(out, real(v), imag(v))
		}
		return of("x", x, "y", y, "h", h, "length", length), out, nil
	}},
	{"coherence", func(r *rand.Rand) (map[string]any, []float64, error) {
		x, y, length := normal(r, 400), normal(r, 400), 2*(8+r.IntN(30))
		for i := range y {
			y[i] += x[i]
		}
		s, err := fit.Welch([][]float64{x}, [][]float64{y}, 1, length)
		if err != nil {
			return nil, nil, err
		}
		// The ends are left out: with the mean taken off they are the noise of rounding in both.
		return of("x", x, "y", y, "length", length), s.Coherence()[1:], nil
	}},
	{"autocorrelation", func(r *rand.Rand) (map[string]any, []float64, error) {
		x := normal(r, 50+r.IntN(200))
		return of("x", x), fit.Autocorrelation([][]float64{x}, 20), nil
	}},
	{"least squares, parameters", regression(func(l *fit.LSResult) []float64 { return l.Coef })},
	{"least squares, covariance", regression(func(l *fit.LSResult) []float64 { return flat(l.Cov) })},
	{"least squares, R² and residual variance", regression(func(l *fit.LSResult) []float64 { return []float64{l.R2, l.Sigma * l.Sigma} })},
	{"ARX with constant", func(r *rand.Rand) (map[string]any, []float64, error) {
		u := normal(r, 200)
		y := lti.DTF{Num: lti.Poly{0, 1, 0.5}, Den: lti.Poly{1, -0.6, 0.2}, Period: 1}.Filter(nil, u)
		for i := range y {
			y[i] += 3 + 0.3*r.NormFloat64()
		}
		na, nb := 1+r.IntN(4), 1+r.IntN(4)
		m, err := fit.FitARX([]fit.Record{{U: u, Y: y}}, fit.ARXOptions{NA: na, NB: nb, Delay: 1})
		if err != nil {
			return nil, nil, err
		}
		out := append(append([]float64(nil), m.A[1:]...), m.B[1:]...)
		return of("u", u, "y", y, "na", na, "nb", nb), append(append(out, m.Const[0]), flat(m.Cov)...), nil
	}},
	{"Ljung and Box", func(r *rand.Rand) (map[string]any, []float64, error) {
		x, lags := normal(r, 50+r.IntN(200)), 5+r.IntN(20)
		q, p := fit.LjungBox([][]float64{x}, lags, 2)
		return of("x", x, "lags", lags), []float64{q, p}, nil
	}},
	{"F test", func(r *rand.Rand) (map[string]any, []float64, error) {
		rss1, extra, df := 1+r.Float64(), 1+r.IntN(10), 2+r.IntN(500)
		rss0 := rss1 * (1 + 3*r.Float64()*float64(extra)/float64(df))
		f, p := fit.FTest(rss0, rss1, extra, df)
		return of("rss0", rss0, "rss1", rss1, "extra", extra, "df", df), []float64{f, p}, nil
	}},
	{"chi-square quantile", func(r *rand.Rand) (map[string]any, []float64, error) {
		k, p := 1+r.IntN(60), 0.001+0.998*r.Float64()
		return of("k", k, "p", p), []float64{distuv.ChiSquared{K: float64(k)}.Quantile(p)}, nil
	}},
	{"F quantile", func(r *rand.Rand) (map[string]any, []float64, error) {
		d1, d2, p := 1+r.IntN(20), 2+r.IntN(500), 0.01+0.98*r.Float64()
		return of("d1", d1, "d2", d2, "p", p), []float64{distuv.F{D1: float64(d1), D2: float64(d2)}.Quantile(p)}, nil
	}},
	{"Clopper and Pearson", func(r *rand.Rand) (map[string]any, []float64, error) {
		n, c := 1+r.IntN(3000), 0.8+0.199*r.Float64()
		k := r.IntN(n + 1)
		return of("k", k, "n", n, "confidence", c), []float64{design.ClopperPearsonLower(k, n, c), design.ClopperPearsonUpper(k, n, c)}, nil
	}},
	{"multiple coherence", func(r *rand.Rand) (map[string]any, []float64, error) {
		a, b, y, length := normal(r, 600), normal(r, 600), normal(r, 600), 2*(8+r.IntN(30))
		for i := range y {
			b[i] += 0.5 * a[i]
			y[i] += a[i] - b[i]
		}
		e, err := fit.Explain([][][]float64{{a}, {b}}, [][]float64{y}, 1, length)
		if err != nil {
			return nil, nil, err
		}
		return of("a", a, "b", b, "y", y, "length", length), e.Coherence[1:], nil
	}},
}

func regression(part func(*fit.LSResult) []float64) func(*rand.Rand) (map[string]any, []float64, error) {
	return func(r *rand.Rand) (map[string]any, []float64, error) {
		x := matrix(r, 20+r.IntN(80), 2+r.IntN(5))
		m, n := x.Dims()
		y := normal(r, m)
		for i := range m {
			x.Set(i, 0, 1)
			y[i] += x.At(i, 1)
			for j := 1; j < n; j++ {
				x.Set(i, j, 100+x.At(i, j)*math.Pow(10, float64(j-2)))
			}
		}
		l, err := fit.LeastSquares(x, y)
		if err != nil {
			return nil, nil, err
		}
		return of("x", x, "y", y), part(l), nil
	}
}

// of pairs names and values.
func of(pairs ...any) map[string]any {
	m := map[string]any{}
	for i := 0; i < len(pairs); i += 2 {
		v := pairs[i+1]
		if a, ok := v.(mat.Matrix); ok {
			r, _ := a.Dims()
			table := make([][]float64, r)
			for i := range table {
				table[i] = mat.Row(nil, i, a)
			}
			v = table
		}
		m[pairs[i].(string)] = v
	}
	return m
}

func normal(r *rand.Rand, n int) []float64 {
	x := make([]float64, n)
	for i := range x {
		x[i] = r.NormFloat64()
	}
	return x
}

func matrix(r *rand.Rand, m, n int) *mat.Dense { return mat.NewDense(m, n, normal(r, m*n)) }

func square(r *rand.Rand, n int) *mat.Dense { return matrix(r, n, n) }

func rows(a mat.Matrix) int { n, _ := a.Dims(); return n }

// gram is symmetric and positive definite.
func gram(r *rand.Rand, n int) *mat.Dense {
	a := square(r, n)
	var q mat.Dense
	q.Mul(a, a.T())
	for i := range n {
		q.Set(i, i, q.At(i, i)+0.1)
	}
	return &q
}

// eye is w times the unit matrix of b's inputs.
func eye(b mat.Matrix, w float64) *mat.Dense {
	_, n := b.Dims()
	e := mat.NewDense(n, n, nil)
	for i := range n {
		e.Set(i, i, w)
	}
	return e
}

// stable has its eigenvalues left of -0.1.
func stable(r *rand.Rand) *mat.Dense {
	a := square(r, 1+r.IntN(5))
	var eig mat.Eigen
	if !eig.Factorize(a, mat.EigenNone) {
		panic("crosscheck: no eigenvalues")
	}
	right := math.Inf(-1)
	for _, l := range eig.Values(nil) {
		right = math.Max(right, real(l))
	}
	for i := range rows(a) {
		a.Set(i, i, a.At(i, i)-right-0.1)
	}
	return a
}

// plant has one to four poles of either sign, fewer zeros than poles, and a delay.
func plant(r *rand.Rand) lti.TF {
	var poles []complex128
	for n := 1 + r.IntN(4); len(poles) < n; {
		p := 2 * r.NormFloat64()
		if len(poles)+2 <= n && r.IntN(3) == 0 {
			w := 0.2 + 3*r.Float64()
			poles = append(poles, complex(p, w), complex(p, -w))
		} else {
			poles = append(poles, complex(p, 0))
		}
	}
	num := lti.Poly(normal(r, 1+r.IntN(len(poles))))
	return lti.TF{Num: num, Den: lti.FromRoots(poles), Delay: r.Float64()}
}

func period(r *rand.Rand) float64 { return 0.02 + 0.3*r.Float64() }

func frequencies(r *rand.Rand) []float64 {
	w := make([]float64, 10)
	for i := range w {
		w[i] = math.Pow(10, 4*r.Float64()-2)
	}
	return w
}

func responses(w []float64, at func(float64) complex128) (out []float64) {
	for _, w := range w {
		v := at(w)
		out = append(out, real(v), imag(v))
	}
	return out
}

func flat(a mat.Matrix) (out []float64) {
	for i := range rows(a) {
		out = append(out, mat.Row(nil, i, a)...)
	}
	return out
}

func run(w io.Writer, cases int, seed uint64) error {
	b := bufio.NewWriter(w)
	enc := json.NewEncoder(b)
	for i, q := range quantities {
		for k := range cases {
			s := [2]uint64{seed + uint64(i), uint64(k)}
			in, out, err := q.make(rand.New(rand.NewPCG(s[0], s[1])))
			if err != nil {
				return fmt.Errorf("%s, seed %v: %w", q.name, s, err)
			}
			if err := enc.Encode(result{q.name, s, in, out}); err != nil {
				return fmt.Errorf("%s, seed %v: %w", q.name, s, err)
			}
		}
	}
	return b.Flush()
}

func main() {
	cases := flag.Int("cases", 200, "random cases of each quantity")
	seed := flag.Uint64("seed", 1, "seed of the first quantity; each has its own")
	flag.Parse()
	if err := run(os.Stdout, *cases, *seed); err != nil {
		fmt.Fprintln(os.Stderr, "crosscheck:", err)
		os.Exit(1)
	}
}
