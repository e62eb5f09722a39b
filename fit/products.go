package fit

import (
	"fmt"
	"slices"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
)

// lag names one regressor: a signal by steps samples ago.
type lag struct{ signal, steps int }

// Signals of a regression; further inputs follow.
const (
	output = iota
	input
)

// regression is the problem of explaining y_k by lags of signals, on rows [first, len) of each record, a constant for
// each record included unless without.
type regression struct {
	lags    []lag
	first   int
	without bool          // no constant
	data    [][][]float64 // record, signal, sample
	used    []int         // records that are long enough
	rows    int
}

// newRegression leaves out records with fewer than two rows to give.
func newRegression(data [][][]float64, lags []lag, first int, without bool) *regression {
	g := &regression{lags: lags, first: first, without: without, data: data}
	for i, s := range data {
		if n := len(s[output]) - first; n >= 2 {
			g.used = append(g.used, i)
			g.rows += n
		}
	}
	return g
}

func signals(recs []Record) [][][]float64 {
	out := make([][][]float64, len(recs))
	for i, r := range recs {
		out[i] = [][]float64{output: r.Filled().Y, input: r.U}
	}
	return out
}

func (g *regression) constants() int {
	if g.without {
		return 0
	}
	return len(g.used)
}

// columns are the regressors and then the response.
func (g *regression) columns() []lag {
	return append(append([]lag(nil), g.lags...), lag{signal: output})
}

// reduce returns the triangular factor of [X y], the records' means removed.
//
// It first forms the products of lagged columns. With S(i,j) the sum of a(k-i) b(k-j) over the rows k of a record of
// length N, S(i,j) = S(i-1,j-1) + a(first-i) b(first-j) - a(N-i) b(N-j), so that only the products with one lag at zero
// are summed over the record. Where the condition of the products, the square of that of X, is too bad for them, the rows
// themselves are reduced block by block.
func (g *regression) reduce() (*triangle, error) {
	if g.rows == 0 {
		return nil, fmt.Errorf("least squares: no record is longer than %d samples", g.first+1)
	}
	if n := len(g.lags) + g.constants(); g.rows < n {
		return nil, fmt.Errorf("least squares: %d rows are too few for %d parameters", g.rows, n)
	}
	if t := triangleOfProducts(g.products(), g.rows); t != nil && !t.bad() {
		n := len(g.lags)
		last := t.r.At(n, n) * t.r.At(n, n) / t.total()
		if t.cond(n) < productsCondition && last > productsResidual {
			return t, nil
		}
	}
	t := g.reduceRows()
	if t.bad() {
		return nil, errNotFinite
	}
	return t, nil
}

// Beyond these the products have lost what the rows still tell: the error of the answer, relative to its standard
// deviation, is about 2e-16 cond sqrt(rows) sd(y)/sd(e).
const (
	productsCondition = 1e5
	productsResidual  = 1e-9 // residual sum of squares over that of y
)

// total is the squared length of the response.
func (t *triangle) total() float64 { return t.rss(0) }

func (g *regression) products() *mat.SymDense {
	all := g.columns()
	p := mat.NewSymDense(len(all), nil)
	longest := map[int]int{} // longest lag of each signal that occurs
	for _, l := range all {
		longest[l.signal] = max(longest[l.signal], l.steps)
	}
	for _, i := range g.used {
		x := make([]about, len(g.data[i]))
		for s := range longest {
			x[s].x = g.data[i][s]
			if !g.without {
				// About their means the products do not cancel; the means of the shifted rows are then taken out exactly.
				x[s].mean = mean(x[s].x)
			}
		}
		pair := map[[2]int][][]float64{}
		for a, la := range longest {
			for b, lb := range longest {
				if a <= b {
					pair[[2]int{a, b}] = laggedProducts(x[a], x[b], g.first, la, lb)
				}
			}
		}
		sums := g.sums(x)
		rows := float64(len(g.data[i][output]) - g.first)
		for a, la := range all {
			for b, lb := range all[a:] {
				p1, p2 := la, lb
				if p1.signal > p2.signal {
					p1, p2 = p2, p1
				}
				s := pair[[2]int{p1.signal, p2.signal}][p1.steps][p2.steps]
				if !g.without {
					s -= sums[a] * sums[a+b] / rows
				}
				p.SetSym(a, a+b, p.At(a, a+b)+s)
			}
		}
	}
	return p
}

// sums returns the sum over the rows of every lag and of y.
func (g *regression) sums(x []about) []float64 {
	all := g.columns()
	byLag := make([][]float64, len(x))
	out := make([]float64, len(all))
	for j, l := range all {
		if byLag[l.signal] == nil {
			v := &x[l.signal]
			s := make([]float64, g.first+1)
			for from := g.first; from < len(v.x); from += block {
				s[0] += floats.Sum(v.rows(from, min(len(v.x), from+block)))
			}
			for i := 1; i <= g.first; i++ {
				s[i] = s[i-1] + v.at(g.first-i) - v.at(len(v.x)-i)
			}
			byLag[l.signal] = s
		}
		out[j] = byLag[l.signal][l.steps]
	}
	return out
}

// about is x less a number, without a copy of all of it.
type about struct {
	x    []float64
	mean float64
	buf  []float64
}

func (a *about) at(k int) float64 { return a.x[k] - a.mean }

// rows returns rows [from, to), until it is called again. They lie in memory as
// even or odd as in x: the order of gonum's sums depends on that.
func (a *about) rows(from, to int) []float64 {
	if a.mean == 0 {
		return a.x[from:to]
	}
	odd := from & 1
	a.buf = slices.Grow(a.buf[:0], odd+to-from)[:odd+to-from]
	out := a.buf[odd:]
	for k, v := range a.x[from:to] {
		out[k] = v - a.mean
	}
	return out
}

// plain is signals less nothing.
func plain(x [][]float64) []about {
	out := make([]about, len(x))
	for i, v := range x {
		out[i].x = v
	}
	return out
}

func lessMean(x []float64) []float64 {
	m := mean(x)
	out := make([]float64, len(x))
	for i, v := range x {
		out[i] = v - m
	}
	return out
}

func mean(x []float64) float64 {
	s := 0.0
	for _, v := range x {
		s += v
	}
	return s / float64(len(x))
}

// productsChunk samples of two columns stay in the nearest cache over all lags.
const productsChunk = 1024

// laggedProducts returns S[i][j], the sum over k in [first, len) of a(k-i) b(k-j), i to maxA, j to maxB.
func laggedProducts(a, b about, first, maxA, maxB int) [][]float64 {
	n := len(a.x)
	a.buf, b.buf = nil, nil // not each other's
	s := make([][]float64, maxA+1)
	for i := range s {
		s[i] = make([]float64, maxB+1)
	}
	for from := first; from < n; from += productsChunk {
		to := min(from+productsChunk, n)
		x, y := a.rows(from-maxA, to), b.rows(from-maxB, to)
		for j := range s[0] {
			s[0][j] += floats.Dot(x[maxA:], y[maxB-j:len(y)-j])
		}
		for i := 1; i <= maxA; i++ {
			s[i][0] += floats.Dot(x[maxA-i:len(x)-i], y[maxB:])
		}
	}
	for i := 1; i <= maxA; i++ {
		for j := 1; j <= maxB; j++ {
			s[i][j] = s[i-1][j-1] + a.at(first-i)*b.at(first-j) - a.at(n-i)*b.at(n-j)
		}
	}
	return s
}

// reduceRows reduces the rows themselves, some at a time, by Householder QR: the triangle of what went before is stacked
// on the next block.
func (g *regression) reduceRows() *triangle {
	all := g.columns()
	n := len(all)
	block := max(4*n, 256)
	work := mat.NewDense(n+block, n, nil)
	filled := n
	flush := func() {
		r := upperTriangle(work.Slice(0, filled, 0, n).(*mat.Dense))
		work.Zero()
		work.Copy(r)
		filled = n
	}
	for _, i := range g.used {
		x := g.data[i]
		offset := make([]float64, n)
		if !g.without {
			floats.ScaleTo(offset, 1/float64(len(x[output])-g.first), g.sums(plain(x)))
		}
		for k := g.first; k < len(x[output]); k++ {
			if filled == n+block {
				flush()
			}
			row := work.RawRowView(filled)
			for j, l := range all {
				row[j] = x[l.signal][k-l.steps] - offset[j]
			}
			filled++
		}
	}
	flush()
	return newTriangle(mat.DenseCopyOf(work.Slice(0, n, 0, n)), g.rows)
}
