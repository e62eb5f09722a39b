package fit

import (
	"errors"
	"math"
	"slices"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
)

// gaps holds what a record's missing outputs need: R, the response of A D/C to
// a pulse of the output, and the products of R from each of them. What stands
// in for a missing output is off by an unknown, which R, from that row on,
// brings into the errors; eliminated like κ and ε it leaves the likelihood of
// the outputs that are known.
type gaps struct {
	missing []int     // rows from the first equation on
	echo    []float64 // R, as long as it counts
	// info is the information of the missing outputs, one R with another, and
	// cross that which they share with κ and ε, a row each.
	info  mat.BandCholesky
	cross *mat.Dense
	left  *mat.SymDense // of the information of κ and ε
	heard *mat.Dense    // products of R with the errors without any of them
	off   []float64     // by how much what stands in is off
}

// longestEcho bounds R, whose tail behind a noise zero beside the unit circle is
// as long as it is faint.
const longestEcho = 2000

// echoOf returns R over rows rows, or until it has died down.
func echoOf(ad, c []float64, rows int) []float64 {
	var echo []float64
	var largest float64
	quiet := 0
	for k := 0; k < rows && quiet <= len(ad)+len(c); k++ {
		var v float64
		if k < len(ad) {
			v = ad[k]
		}
		for j := 1; j < len(c) && j <= k; j++ {
			v -= c[j] * echo[k-j]
		}
		echo = append(echo, v)
		largest = math.Max(largest, math.Abs(v))
		if quiet++; math.Abs(v) > 1e-11*largest {
			quiet = 0
		}
	}
	return echo
}

// along adds the products of R with x, rows [from, from+len(x)) of a column, to
// column j of dst, a row for each missing output.
func (g *gaps) along(dst *mat.Dense, j int, x []float64, from int) {
	to := from + len(x)
	first, _ := slices.BinarySearch(g.missing, from-len(g.echo)+1)
	for i := first; i < len(g.missing) && g.missing[i] < to; i++ {
		k := g.missing[i]
		lo, hi := max(k, from), min(k+len(g.echo), to)
		dst.Set(i, j, dst.At(i, j)+floats.Dot(g.echo[lo-k:hi-k], x[lo-from:hi-from]))
	}
}

// determinant returns the log of the determinant of the information of ε and
// the missing outputs, not finite where that is singular. h is the information
// of κ and ε, what the missing outputs leave of it goes to g.left; r holds the
// responses of κ and ε, ad and c are in powers of z^-1.
func (g *gaps) determinant(h *mat.SymDense, r *transient, ad, c []float64) float64 {
	if !g.eliminate(h, r, ad, c) {
		return math.NaN()
	}
	return logDet(g.left, 1) + g.info.LogDet()
}

func (g *gaps) eliminate(h *mat.SymDense, r *transient, ad, c []float64) bool {
	n, rows := len(g.missing), r.rows
	g.echo = echoOf(ad, c, min(rows, longestEcho))
	// Pairs of missing outputs by the rows between them, later ones last: R
	// times itself so many rows later is summed once for all of them, over the
	// fewer rows the nearer they are to the end.
	apart := make([][][2]int, len(g.echo))
	width := 0
	for i, k := range g.missing {
		for j := i; j < n && g.missing[j] < k+len(g.echo); j++ {
			d := g.missing[j] - k
			apart[d] = append(apart[d], [2]int{i, j})
			width = max(width, j-i)
		}
	}
	own := mat.NewSymBandDense(n, width, nil)
	for d, pairs := range apart {
		var sum float64
		from := 0
		for _, p := range slices.Backward(pairs) {
			to := min(len(g.echo)-d, rows-g.missing[p[1]])
			sum += floats.Dot(g.echo[from:to], g.echo[d+from:d+to])
			from = to
			own.SetSymBand(p[0], p[1], sum)
		}
	}
	if !g.info.Factorize(own) {
		return false
	}
	q := h.SymmetricDim()
	g.cross = mat.NewDense(n, q, nil)
	for from := 0; from < rows; from += block {
		g.along(g.cross, 0, r.steps(from, min(rows, from+block)), from)
	}
	for i := 1; i < q; i++ {
		g.along(g.cross, i, r.free[i-1][:r.settled], 0)
	}
	for i := range n {
		for j := 1; j < q; j++ {
			g.cross.Set(i, j, -g.cross.At(i, j))
		}
	}
	taken, ok := g.taken(g.cross, g.cross)
	if !ok {
		return false
	}
	g.left = mat.NewSymDense(q, nil)
	for i := range q {
		for j := i; j < q; j++ {
			g.left.SetSym(i, j, h.At(i, j)-taken.At(i, j))
		}
	}
	return true
}

// taken returns x' info^-1 z, what the missing outputs take of the products of
// the columns behind x and z.
func (g *gaps) taken(x, z mat.Matrix) (*mat.Dense, bool) {
	solved, ok := g.solve(z)
	if !ok {
		return nil, false
	}
	var out mat.Dense
	out.Mul(x.T(), solved)
	return &out, true
}

func (g *gaps) solve(z mat.Matrix) (*mat.Dense, bool) {
	var x mat.Dense
	if err := g.info.SolveTo(&x, z); err != nil {
		var cond mat.Condition
		if !errors.As(err, &cond) {
			return nil, false
		}
	}
	return &x, true
}

// hear takes of slope, the products of the responses of κ and ε with the errors e
// without either, what the missing outputs explain.
func (g *gaps) hear(e, slope []float64) bool {
	g.heard = mat.NewDense(len(g.missing), 1, nil)
	g.along(g.heard, 0, e, 0)
	taken, ok := g.taken(g.cross, g.heard)
	if ok {
		floats.Sub(slope, taken.RawMatrix().Data)
	}
	return ok
}

// fill finds by how much what stands in for the missing outputs is off, κ and ε
// in local being known, and takes that out of the errors e that were heard.
func (g *gaps) fill(e, local []float64) bool {
	var rest mat.Dense
	rest.Mul(g.cross, mat.NewVecDense(len(local), local))
	rest.Sub(g.heard, &rest)
	off, ok := g.solve(&rest)
	if !ok {
		return false
	}
	g.off = append(g.off[:0], off.RawMatrix().Data...)
	for j, k := range g.missing {
		m := min(len(g.echo), len(e)-k)
		floats.AddScaled(e[k:k+m], -g.off[j], g.echo[:m])
	}
	return !holdsNonFinite(g.off)
}
