package fit

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/lapack/lapack64"
	"gonum.org/v1/gonum/mat"
)

// A Reading is one estimate of the same few numbers as the other readings; their errors are independent of each other.
type Reading struct {
	x         []float64
	precision []float64 // inverse covariance, by rows
}

// NewReading returns the reading of an estimate. A covariance that is none, or a singular one, is an error.
func NewReading(x []float64, cov [][]float64) (Reading, error) {
	d := len(x)
	sd, correlation := make([]float64, d), mat.NewSymDense(d, nil)
	for i := range sd {
		sd[i] = math.Sqrt(cov[i][i])
		if !(sd[i] > 0) || math.IsInf(sd[i], 1) || math.IsNaN(x[i]) || math.IsInf(x[i], 0) {
			return Reading{}, fmt.Errorf("number %d is %v with a variance of %v", i+1, x[i], cov[i][i])
		}
		for j := range i + 1 {
			correlation.SetSym(i, j, cov[i][j]/sd[i]/sd[j])
		}
	}
	var factor mat.Cholesky
	if !factor.Factorize(correlation) {
		return Reading{}, errors.New("the covariance is not positive definite")
	}
	if err := factor.InverseTo(correlation); err != nil {
		return Reading{}, fmt.Errorf("the covariance is nearly singular: %w", err)
	}
	r := Reading{x: slices.Clone(x)}
	for i := range sd {
		for j := range sd {
			r.precision = append(r.precision, correlation.At(i, j)/sd[i]/sd[j])
		}
	}
	return r, nil
}

// A Change says between which readings the numbers changed.
type Change struct {
	At       int // the first reading after the change is most likely this one
	From, To int // and with a probability of 95 %, all places being alike beforehand, one of these, ends included
	Seen     int // the reading that brought the proof
}

// Changes looks for changes in a sequence of readings of the same numbers, in their order. With a probability of at
// least 1 - level none is reported where there was none, however long the sequence, however often it is looked at while
// it grows, and however many true changes there are.
//
// Let readings i, i+1, … be N(μ, V_k) with one unknown μ. That they change at ν by δ ~ N(0, T) has the likelihood ratio
// M_k(i,ν) after reading k; with a flat prior on μ under both it is that of the readings' differences, whose law does
// not depend on μ (the right Haar prior of a shift: Berger, Pericchi & Varshavsky, Bayes factors and marginal
// distributions in invariant situations, Sankhya A 60 (1998) 307-321), so over k it is a martingale of mean one while
// nothing changes. So is M_k(i) = Σ_ν w(ν-i) M_k(i,ν) with Σ w = 1 and M_k(i,ν) = 1 for k < ν, a mixture over all
// places (Robbins, Statistical methods related to the law of the iterated logarithm, Ann. Math. Statist. 41 (1970)
// 1397-1409). By Ville's inequality (Étude critique de la notion de collectif, 1939, p. 84) it ever reaches c with a
// probability of at most 1/c. A first reading i is given the share w(i+1) of the level, so that i may be chosen by the
// data: all statements "between i and k something changed" hold at once. After a change the next first reading is that
// after it. Leaving out a place ν only lowers M, which is why few are kept.
//
// It panics where readings are of different length.
func Changes(r []Reading, level float64) []Change {
	var found []Change
	for i := 0; i < len(r); {
		c, ok := firstChange(r[i:], -math.Log(share(i+1)*level))
		if !ok {
			break
		}
		found = append(found, Change{i + c.At, i + c.From, i + c.To, i + c.Seen})
		i += c.At
	}
	return found
}

// Mean returns the mean of readings, weighed by their precisions, and the standard deviations of its numbers.
func Mean(r []Reading) (x, sd []float64) {
	d := len(r[0].x)
	a, b := make([]float64, d*d), make([]float64, d)
	for _, q := range r {
		q.addTo(a, b, r[0].x)
	}
	factor, _ := lapack64.Potrf(symmetric(a, d))
	x, sd = slices.Clone(b), make([]float64, d)
	blas64.Trsv(blas.Trans, factor, vector(x))
	blas64.Trsv(blas.NoTrans, factor, vector(x))
	floats.Add(x, r[0].x)
	for j := range sd {
		unit := make([]float64, d)
		unit[j] = 1
		blas64.Trsv(blas.Trans, factor, vector(unit))
		sd[j] = floats.Norm(unit, 2)
	}
	return x, sd
}

// addTo adds the precision of a reading to a and its product with the reading's distance from origin to b.
func (r Reading) addTo(a, b, origin []float64) {
	d := len(origin)
	if len(r.x) != d {
		panic(badReading)
	}
	floats.Add(a, r.precision)
	for j := range d {
		for l := range d {
			b[j] += r.precision[j*d+l] * (r.x[l] - origin[l])
		}
	}
}

const (
	// changeScale is the variance of a change looked for over that of one reading, the mean of those up to it.
	changeScale = 10
	// keptPlaces is how many places of a change are kept, the newest of them in any case.
	keptPlaces   = 24
	newestPlaces = 8
)

const badReading = "fit: readings of different numbers"

// share are weights of one sum: Σ 1/(m (m+1)) = 1 over m = 1, 2, …
func share(m int) float64 { return 1 / (float64(m) * float64(m+1)) }

// A place is where a change may be.
type place struct {
	at    int       // readings before it
	a, b  []float64 // sums over them, as in watch
	prior []float64 // precision of δ
	det   float64   // ln of its root's determinant
	log   float64   // ln M
}

// A watch goes through readings from the first on.
type watch struct {
	first  []float64 // origin
	n      int
	a, b   []float64 // sums of precisions by rows, and of precisions times readings
	places []place
	work   scratch
}

// firstChange returns the first change for which ln M reaches limit; At and Seen count from the first reading.
func firstChange(r []Reading, limit float64) (Change, bool) {
	w := watch{first: r[0].x}
	for _, q := range r {
		if w.add(q) >= limit {
			return w.where(), true
		}
	}
	return Change{}, false
}

// add takes in the next reading and returns ln M.
func (w *watch) add(r Reading) float64 {
	d := len(w.first)
	if w.n == 0 {
		w.a, w.b = make([]float64, d*d), make([]float64, d)
	}
	q := place{at: w.n, a: slices.Clone(w.a), b: slices.Clone(w.b)}
	r.addTo(w.a, w.b, w.first)
	w.n++
	if q.at > 0 {
		q.prior = slices.Clone(w.a)
		floats.Scale(1/(changeScale*float64(w.n)), q.prior)
		factor, _ := lapack64.Potrf(symmetric(slices.Clone(q.prior), d))
		q.det = logDiagonal(factor)
		w.places = append(w.places, q)
	}
	u, mean := slices.Clone(w.a), slices.Clone(w.b)
	factor, _ := lapack64.Potrf(symmetric(u, d))
	blas64.Trsv(blas.Trans, factor, vector(mean))
	// Places yet to come have ratio one and the rest of the weight.
	weighed := []float64{-math.Log(float64(w.n))}
	for i := range w.places {
		q := &w.places[i]
		q.log = q.ratio(w.a, w.b, factor, mean, &w.work)
		weighed = append(weighed, q.log+math.Log(share(q.at)))
	}
	if len(w.places) > keptPlaces {
		worst := 0
		for i, q := range w.places[:keptPlaces-newestPlaces] {
			if q.log < w.places[worst].log {
				worst = i
			}
		}
		w.places = slices.Delete(w.places, worst, worst+1)
	}
	return floats.LogSumExp(weighed)
}

// A scratch spares allocations.
type scratch struct{ after, half, info, h []float64 }

// ratio is ln M once the readings up to now sum up to a = U'U and b, mean = U'^-1 b. With A1 before and A2 after the
// change, A = A1 + A2, the data tell of δ by the information Λ = A2 - A2 A⁻¹ A2 and the score h = b2 - A2 A⁻¹ b, and
// 2 ln M = h'(Λ + T⁻¹)⁻¹h - ln |Λ + T⁻¹| + ln |T⁻¹|.
func (q *place) ratio(a, b []float64, u blas64.Triangular, mean []float64, w *scratch) float64 {
	d := len(b)
	w.after, w.h = append(w.after[:0], a...), append(w.h[:0], b...)
	floats.Sub(w.after, q.a)
	floats.Sub(w.h, q.b)
	w.half, w.info = append(w.half[:0], w.after...), append(w.info[:0], w.after...)
	half := blas64.General{Rows: d, Cols: d, Stride: d, Data: w.half}
	blas64.Trsm(blas.Left, blas.Trans, 1, u, half) // U'^-1 A2
	blas64.Gemv(blas.Trans, -1, half, vector(mean), 1, vector(w.h))
	floats.Add(w.info, q.prior)
	blas64.Syrk(blas.Trans, -1, half, 1, symmetric(w.info, d))
	factor, ok := lapack64.Potrf(symmetric(w.info, d))
	if !ok {
		return math.Inf(-1)
	}
	blas64.Trsv(blas.Trans, factor, vector(w.h))
	return floats.Dot(w.h, w.h)/2 + q.det - logDiagonal(factor)
}

func symmetric(x []float64, d int) blas64.Symmetric {
	return blas64.Symmetric{Uplo: blas.Upper, N: d, Stride: d, Data: x}
}

func vector(x []float64) blas64.Vector { return blas64.Vector{N: len(x), Inc: 1, Data: x} }

func logDiagonal(u blas64.Triangular) float64 {
	sum := 0.0
	for j := range u.N {
		sum += math.Log(u.Data[j*u.Stride+j])
	}
	return sum
}

// where is the change that the places speak for.
func (w *watch) where() Change {
	order := slices.Clone(w.places)
	slices.SortStableFunc(order, func(p, q place) int { return cmp.Compare(q.log, p.log) })
	best := order[0]
	var total, sum float64
	for _, q := range order {
		total += math.Exp(q.log - best.log)
	}
	c := Change{At: best.at, From: best.at, To: best.at, Seen: w.n - 1}
	for _, q := range order {
		if sum >= 0.95*total {
			break
		}
		sum += math.Exp(q.log - best.log)
		c.From, c.To = min(c.From, q.at), max(c.To, q.at)
	}
	return c
}
