package fit

import (
	"fmt"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
)

// lag names one regressor: the output (input false) or the input, by steps samples ago.
type lag struct {
	input bool
	steps int
}

// regression is the problem of explaining y_k by lags of the records, on rows [first, len) of each record, a constant
// for each record included unless without.
type regression struct {
	lags    []lag
	first   int
	without bool  // no constant
	used    []int // records that are long enough
	rows    int
	recs    []Record
}

// newRegression leaves out records with fewer than two rows to give.
func newRegression(recs []Record, lags []lag, first int, without bool) *regression {
	g := &regression{lags: lags, first: first, without: without, recs: recs}
	for i, r := range recs {
		if n := len(r.Y) - first; n >= 2 {
			g.used = append(g.used, i)
			g.rows += n
		}
	}
	return g
}

func (g *regression) constants() int {
	if g.without {
		return 0
	}
	return len(g.used)
}

func (r Record) column(l lag) []float64 {
	if l.input {
		return r.U
	}
	return r.Y
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
	n := len(g.lags)
	p := mat.NewSymDense(n+1, nil)
	all := append(append([]lag(nil), g.lags...), lag{})
	maxU, maxY := -1, 0
	for _, l := range all {
		if l.input {
			maxU = max(maxU, l.steps)
		} else {
			maxY = max(maxY, l.steps)
		}
	}
	for _, i := range g.used {
		rec := g.recs[i]
		u, y := rec.U, rec.Y
		if !g.without {
			// About their means the products do not cancel; the means of the shifted rows are then taken out exactly.
			u, y = lessMean(u), lessMean(y)
		}
		yy := laggedProducts(y, y, g.first, maxY, maxY)
		var uu, uy [][]float64
		if maxU >= 0 {
			uu = laggedProducts(u, u, g.first, maxU, maxU)
			uy = laggedProducts(u, y, g.first, maxU, maxY)
		}
		centred := Record{u, y}
		sums := g.sums(centred)
		rows := float64(len(y) - g.first)
		for a, la := range all {
			for b := a; b <= n; b++ {
				lb := all[b]
				var s float64
				switch {
				case la.input && lb.input:
					s = uu[la.steps][lb.steps]
				case la.input:
					s = uy[la.steps][lb.steps]
				case lb.input:
					s = uy[lb.steps][la.steps]
				default:
					s = yy[la.steps][lb.steps]
				}
				if !g.without {
					s -= sums[a] * sums[b] / rows
				}
				p.SetSym(a, b, p.At(a, b)+s)
			}
		}
	}
	return p
}

// sums returns the sum over the rows of every lag and of y.
func (g *regression) sums(r Record) []float64 {
	byLag := func(x []float64, maxLag int) []float64 {
		n := len(x)
		s := make([]float64, maxLag+1)
		s[0] = floats.Sum(x[g.first:])
		for i := 1; i <= maxLag; i++ {
			s[i] = s[i-1] + x[g.first-i] - x[n-i]
		}
		return s
	}
	u, y := byLag(r.U, g.first), byLag(r.Y, g.first)
	out := make([]float64, len(g.lags)+1)
	for j, l := range g.lags {
		if l.input {
			out[j] = u[l.steps]
		} else {
			out[j] = y[l.steps]
		}
	}
	out[len(g.lags)] = y[0]
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
func laggedProducts(a, b []float64, first, maxA, maxB int) [][]float64 {
	n := len(a)
	s := make([][]float64, maxA+1)
	for i := range s {
		s[i] = make([]float64, maxB+1)
	}
	for from := first; from < n; from += productsChunk {
		to := min(from+productsChunk, n)
		for j := range s[0] {
			s[0][j] += floats.Dot(a[from:to], b[from-j:to-j])
		}
		for i := 1; i <= maxA; i++ {
			s[i][0] += floats.Dot(a[from-i:to-i], b[from:to])
		}
	}
	for i := 1; i <= maxA; i++ {
		for j := 1; j <= maxB; j++ {
			s[i][j] = s[i-1][j-1] + a[first-i]*b[first-j] - a[n-i]*b[n-j]
		}
	}
	return s
}

// reduceRows reduces the rows themselves, some at a time, by Householder QR: the triangle of what went before is stacked
// on the next block.
func (g *regression) reduceRows() *triangle {
	n := len(g.lags)
	all := append(append([]lag(nil), g.lags...), lag{})
	block := max(4*(n+1), 256)
	work := mat.NewDense(n+1+block, n+1, nil)
	filled := n + 1
	flush := func() {
		r := upperTriangle(work.Slice(0, filled, 0, n+1).(*mat.Dense))
		work.Zero()
		work.Copy(r)
		filled = n + 1
	}
	for _, i := range g.used {
		rec := g.recs[i]
		offset := make([]float64, n+1)
		if !g.without {
			rows := float64(len(rec.Y) - g.first)
			for j, s := range g.sums(rec) {
				offset[j] = s / rows
			}
		}
		for k := g.first; k < len(rec.Y); k++ {
			if filled == n+1+block {
				flush()
			}
			row := work.RawRowView(filled)
			for j, l := range all {
				row[j] = rec.column(l)[k-l.steps] - offset[j]
			}
			filled++
		}
	}
	flush()
	return newTriangle(mat.DenseCopyOf(work.Slice(0, n+1, 0, n+1)), g.rows)
}
