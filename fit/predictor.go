package fit

import (
	"errors"
	"math"
	"slices"
	"sync"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Predictor holds records ready for many fits of different shapes on the same
// equations, so that their criteria compare.
type Predictor struct {
	Period float64 // s
	Lead   int     // rows of each record that serve as past only, or more where an output of them is missing
	// DelayRange bounds a free delay, s.
	DelayRange [2]float64
	// Interrupt is asked every so many rows, from any goroutine; what runs ends with the error that it returns. nil: never.
	Interrupt func() error

	given  []Record  // all of them, missing outputs filled
	of     []int     // which of given a record of the fit is
	padded []Record  // means removed, scaled to unit deviation, missing outputs filled, behind pad zeros
	recs   []Record  // padded without the zeros
	meanU  []float64 // by record: of all that share its constant
	meanY  []float64
	shares [][]int // the records of each constant
	su, sy float64
	rows   int
	logs   []int // equations of each log
	first  []int // of each record, the row of its first equation
	warm   []int // rows of each record that warm up
	pad    int
	spare  sync.Pool // of []workspace, for searches to come
}

// maxFitPoles and maxColour bound the shapes that a Predictor takes.
const (
	maxFitPoles = 8
	maxColour   = 2
)

// warmUp is how many rows of a record that resumes are given to its start. Their
// likelihood is taken out again: what is left is that of the other rows given
// them. With start-up errors that could be anything, as after the rows of Lead
// alone, each record pays for not knowing its start, 24 units of -2 log likelihood
// on a slow disturbance; twenty paid for a disturbance without memory.
const warmUp = 30

const (
	badShape = "fit: shape needs 1 to 8 poles, fewer zeros than poles, at most 2 colour poles, no more integrators than poles"
	badDelay = "fit: delay lies before the output or past the lead of the predictor"
)

// NewPredictor prepares records sampled every period seconds for fits with
// delays up to maxDelay seconds. Records too short to have any equation are
// left out; an error says if none is left.
func NewPredictor(recs []Record, period, maxDelay float64) (*Predictor, error) {
	checkRecords(recs)
	checkLogs(recs)
	p := &Predictor{Period: period, DelayRange: [2]float64{-period, maxDelay}}
	p.Lead = maxFitPoles + 2 + maxColour + int(math.Ceil(maxDelay/period))
	p.pad = p.Lead + maxFitPoles + maxColour + 4
	fresh := true // the next record to be kept has a constant of its own
	for i, r := range recs {
		fresh = fresh || !r.Resumes
		p.given = append(p.given, r.Filled())
		first := r.firstEquation(p.Lead, 0)
		if !fresh {
			first = r.firstEquation(p.Lead, warmUp) // its start is known by rows without gaps
		}
		missing := 0 // outputs that equations ask for
		for _, k := range r.Missing {
			if k >= first {
				missing++
			}
		}
		if len(r.Y)-first-missing < p.Lead+8 {
			continue
		}
		if fresh {
			p.shares = append(p.shares, nil)
		}
		fresh = false
		last := len(p.shares) - 1
		p.shares[last] = append(p.shares[last], len(p.recs))
		rows, warm := len(r.Y)-first, 0
		if len(p.shares[last]) > 1 {
			warm = min(warmUp, rows/3)
		}
		left := r.Missing[len(r.Missing)-missing:]
		r = p.given[i]
		r.Missing = left
		p.recs, p.of, p.first, p.warm = append(p.recs, r), append(p.of, i), append(p.first, first), append(p.warm, warm)
		p.rows += rows - warm - missing
		for len(p.logs) <= r.Log {
			p.logs = append(p.logs, 0)
		}
		p.logs[r.Log] += rows - warm - missing
	}
	var uu, yy, n float64
	for _, share := range p.shares {
		var mu, my, rows float64
		for _, i := range share {
			mu, my, rows = mu+floats.Sum(p.recs[i].U), my+floats.Sum(p.recs[i].Y), rows+float64(len(p.recs[i].U))
		}
		mu, my = mu/rows, my/rows
		for _, i := range share {
			r := p.recs[i]
			padded := Record{U: make([]float64, p.pad+len(r.U)), Y: make([]float64, p.pad+len(r.Y))}
			c := Record{U: padded.U[p.pad:], Y: padded.Y[p.pad:], Missing: r.Missing, Log: r.Log, Resumes: i != share[0]}
			p.padded = append(p.padded, padded)
			for k := range r.U {
				c.U[k], c.Y[k] = r.U[k]-mu, r.Y[k]-my
				uu += c.U[k] * c.U[k]
				yy += c.Y[k] * c.Y[k]
			}
			p.recs[i] = c
			p.meanU, p.meanY = append(p.meanU, mu), append(p.meanY, my)
		}
		n += rows
	}
	if len(p.recs) == 0 {
		return nil, errors.New("fit: no record is long enough")
	}
	p.su, p.sy = math.Sqrt(uu/n), math.Sqrt(yy/n)
	if p.su == 0 || p.sy == 0 {
		return nil, errors.New("fit: input or output does not move")
	}
	for _, r := range p.recs {
		floats.Scale(1/p.su, r.U)
		floats.Scale(1/p.sy, r.Y)
	}
	return p, nil
}

// On prepares other records for fits as with p.
func (p *Predictor) On(recs []Record) (*Predictor, error) {
	q, err := NewPredictor(recs, p.Period, p.DelayRange[1])
	if err == nil {
		q.DelayRange, q.Interrupt = p.DelayRange, p.Interrupt
	}
	return q, err
}

// Rows returns the number of equations of every fit, less one for each missing output.
func (p *Predictor) Rows() int { return p.rows }

// point is a model in scaled units: time in 1/w0, signals by their deviation.
type point struct {
	num, den lti.Poly
	tau      float64   // scaled time
	d, c     []float64 // powers of δ, leading 1
}

func (x point) clone() point {
	return point{
		num: append(lti.Poly(nil), x.num...), den: append(lti.Poly(nil), x.den...), tau: x.tau,
		d: append([]float64(nil), x.d...), c: append([]float64(nil), x.c...),
	}
}

// search is one fit: shape, scale of time, and workspaces.
type search struct {
	*Predictor
	shape Shape
	w0, h float64 // rad/s; scaled period
	work  []workspace
	view  window
	buf   []float64 // a chunk of the Jacobian

	rss, logDet float64   // parts of the objective at the last point looked at
	sums        []float64 // of squares in each log
	shared      float64   // log det of the information about constants that records share
	prior       *near     // nil: none
	apriori     float64   // the prior's part of -2 log likelihood at the last point looked at

	stopped error // by Interrupt

	probe     transient // for differences of the determinant
	probeGaps gaps
}

// workspace holds the signals of one record; each starts with pad zeros.
type workspace struct {
	y, u     []float64 // padded data, with the estimates of missing outputs at the last point looked at
	e        []float64 // prediction errors
	filtered           // all rows, where filterAll was asked for them
	transient
	gaps
	all, first local   // over all rows, and over those that warm up
	logDet     float64 // of I + G'G, or of the information of ε and the missing outputs
}

// local holds the normal equations h x = g of κ and ε_1 … ε_nC of a record over
// some of its rows, and their solution.
type local struct {
	h    *mat.SymDense
	g, x []float64
}

func (p *Predictor) newSearch(shape Shape, w0 float64) *search {
	if shape.Poles < 1 || shape.Poles > maxFitPoles || shape.Zeros < 0 || shape.Zeros >= shape.Poles || shape.Colour < 0 || shape.Colour > maxColour || shape.Integrators < 0 || shape.Integrators > shape.Poles {
		panic(badShape)
	}
	s := &search{Predictor: p, shape: shape, w0: w0, h: p.Period * w0}
	if w, ok := p.spare.Get().([]workspace); ok {
		s.work = w
		return s
	}
	s.work = make([]workspace, len(p.recs))
	for i, r := range p.recs {
		w := &s.work[i]
		w.e = make([]float64, p.pad+len(r.Y))
		w.y, w.u = p.padded[i].Y, p.padded[i].U
		if len(r.Missing) > 0 {
			w.y = append([]float64(nil), w.y...)
			for _, k := range r.Missing {
				w.missing = append(w.missing, k-p.first[i])
			}
		}
	}
	return s
}

// stop asks whether to stop.
func (s *search) stop() bool {
	if s.stopped == nil && s.Interrupt != nil {
		s.stopped = s.Interrupt()
	}
	return s.stopped != nil
}

// failure is why no errors could be had.
func (s *search) failure() error {
	if s.stopped != nil {
		return s.stopped
	}
	return ErrNoFit
}

// done hands the workspaces back.
func (s *search) done() { s.spare.Put(s.work) }

// shifted holds a model's polynomials in powers of q^-1.
type shifted struct {
	whole      int
	a, b, d, c []float64
	delta      lti.Delta
}

// sampled returns the polynomials of x, and false where they are not finite or
// the delay is out of range.
func (s *search) sampled(x point) (shifted, bool) {
	delay := x.tau
	if holdsNonFinite(x.num) || holdsNonFinite(x.den) || holdsNonFinite(x.c) || holdsNonFinite(x.d) {
		return shifted{}, false
	}
	if !(delay >= s.DelayRange[0]*s.w0-1e-9*s.h && delay <= s.DelayRange[1]*s.w0+1e-9*s.h) {
		return shifted{}, false
	}
	q := shifted{delta: lti.SampleDeltaValues(x.num, x.den, delay, s.h)}
	q.whole = q.delta.Whole
	q.a = lti.Shift(nil, q.delta.A)
	q.b = lti.ShiftInput(q.delta.B0, q.delta.B1)
	q.d, q.c = lti.Shift(nil, x.d), lti.Shift(nil, x.c)
	return q, !holdsNonFinite(q.a) && !holdsNonFinite(q.b)
}

// errorsAt fills the prediction errors of x into the workspaces, with the
// constants and start-up errors that make their sum of squares least, and
// returns the objective: with N rows the sum of squares S times
// det(I + G'G)^(1/N), N times the log of which is -2 log likelihood but for a constant.
//
// The first deg C errors before a record's first equation are unknowns with
// the prior of all other errors; without them the transient of a slow noise
// zero swamps the sum. Integrated out they leave their sum of squares in S and
// the determinant (Box & Jenkins, Time Series Analysis, 1976, app. A7.4), which
// holds noise zeros off the unit circle: without it a short log moves them onto
// it and takes its own slow drift for a start-up error.
//
// Where logs have errors of their own variance S_i/N_i each, N log S is the sum
// of N_i log(S_i/N_i), but for a constant: the likelihood with each variance at
// its best (Aitkin, Modelling variance heterogeneity in normal regression, Appl.
// Statist. 36 (1987) 332-339).
//
// A missing output is integrated out, too: what stands in its place is off by
// an unknown that enters the errors as a pulse through A D/C, and N counts the
// outputs that are known (Sargan & Drettakis, Missing data in an autoregressive
// model, Int. Economic Review 15 (1974) 39-58; Ljung, G. M., A note on the
// estimation of missing values in time series, Commun. Statist. Simul. Comput.
// 18 (1989) 459-465).
func (s *search) errorsAt(x point) (float64, shifted, bool) {
	q, ok := s.sampled(x)
	if !ok {
		return math.Inf(1), q, false
	}
	ad := lti.Poly(q.a).Mul(q.d)
	bd := lti.Poly(q.b).Mul(q.d)
	s.logDet, s.shared = 0, 0
	for i := range s.work {
		w, t0 := &s.work[i], s.start(i)
		if s.alike(i) {
			w.all.h, w.first.h, w.logDet = s.work[i-1].all.h, s.work[i-1].first.h, s.work[i-1].logDet
		} else {
			w.all.h, w.first.h = gram(x.c, len(w.e)-t0), gram(x.c, s.warm[i])
			w.logDet = logDet(w.all.h, 1) - logDet(w.first.h, 1)
		}
		clear(w.e[s.pad:t0])
		for from := t0; from < len(w.e); from += chunk {
			if (from-t0)%block == 0 && s.stop() {
				return math.Inf(1), q, false
			}
			to := min(len(w.e), from+chunk)
			fir(w.e[from:to], s.padded[i].Y, ad, from, 1, false)
			fir(w.e[from:to], w.u, bd, from-q.whole, -1, true)
			divide(w.e[:to], w.e[:to], q.c, from)
		}
		w.run(q.c, len(w.e)-t0)
		if len(w.missing) > 0 {
			w.logDet = w.determinant(w.all.h, &w.transient, ad, q.c) - startUp(x.c, s.warm[i])
			w.all.h = w.left
		}
		if s.logDet += w.logDet; holdsNonFinite([]float64{w.logDet}) {
			return math.Inf(1), q, false
		}
		w.gather(&w.all, w.e[t0:])
		if len(w.missing) > 0 && !w.hear(w.e[t0:], w.all.g) {
			return math.Inf(1), q, false
		}
		w.gather(&w.first, w.e[t0:t0+s.warm[i]])
	}
	s.sums = make([]float64, len(s.logs))
	for _, share := range s.shares {
		if !s.solveShare(share) {
			return math.Inf(1), q, false
		}
		for _, i := range share {
			w, t0 := &s.work[i], s.start(i)
			rss := -w.first.squares(w.e[t0 : t0+s.warm[i]])
			if len(w.missing) > 0 && !w.fill(w.e[t0:], w.all.x) {
				return math.Inf(1), q, false
			}
			rss += w.apply(t0)
			if !(rss < math.Inf(1)) {
				return math.Inf(1), q, false
			}
			for j, k := range w.missing {
				w.y[t0+k] = s.padded[i].Y[t0+k] - w.off[j]
			}
			s.sums[s.recs[i].Log] += rss
		}
	}
	s.rss = s.pooled()
	s.apriori = s.prior.square(x, s.shape)
	return s.rss * math.Exp((s.logDet+s.apriori)/float64(s.rows)), q, true
}

// start is where record i's errors start in its workspace.
func (s *search) start(i int) int { return s.pad + s.first[i] }

// alike reports whether record i, and the one before, have the same information
// of κ and ε.
func (s *search) alike(i int) bool {
	return i > 0 && len(s.recs[i].Y)-s.first[i] == len(s.recs[i-1].Y)-s.first[i-1] && s.warm[i] == s.warm[i-1] && len(s.recs[i-1].Missing) == 0
}

// pooled returns the sum of squares, or with several logs that of as many rows
// whose variance is the geometric mean of the logs', by rows.
func (s *search) pooled() float64 {
	if len(s.logs) == 1 {
		return s.sums[0]
	}
	var mean float64
	for i, n := range s.logs {
		if n > 0 {
			mean += float64(n) * math.Log(s.sums[i]/float64(n))
		}
	}
	return float64(s.rows) * math.Exp(mean/float64(s.rows))
}

// weight is what a row of a log counts beside one of mean variance.
func (s *search) weight(log int) float64 {
	if len(s.logs) == 1 {
		return 1
	}
	return s.rss / float64(s.rows) * float64(s.logs[log]) / s.sums[log]
}

// fir adds f Σ coef[i] x[k-i], k = from, from+1, …, to dst, or sets dst to it.
// Where k runs past the end of x (a negative delay) the last value stands.
func fir(dst, x, coef []float64, from int, f float64, add bool) {
	if !add {
		clear(dst)
	}
	for i, c := range coef {
		if c == 0 {
			continue
		}
		c *= f
		src := x[max(0, from-i):]
		out := dst
		if from-i < 0 {
			out = dst[i-from:]
		}
		m := min(len(src), len(out))
		floats.AddScaled(out[:m], c, src[:m])
		for k := m; k < len(out); k++ {
			out[k] += c * x[len(x)-1]
		}
	}
}

// divide writes src/C into dst from row from on, taking the rows before as
// they stand. dst and src may be the same.
func divide(dst, src, c []float64, from int) {
	switch len(c) - 1 {
	case 0:
		copy(dst[from:], src[from:])
	case 1:
		c1, p1 := c[1], dst[from-1]
		for k := from; k < len(src); k++ {
			p1 = src[k] - c1*p1
			dst[k] = p1
		}
	case 2:
		c1, c2, p1, p2 := c[1], c[2], dst[from-1], dst[from-2]
		for k := from; k < len(src); k++ {
			v := (src[k] - c2*p2) - c1*p1
			p2, p1 = p1, v
			dst[k] = v
		}
	case 3:
		c1, c2, c3, p1, p2, p3 := c[1], c[2], c[3], dst[from-1], dst[from-2], dst[from-3]
		for k := from; k < len(src); k++ {
			v := (src[k] - c3*p3 - c2*p2) - c1*p1
			p3, p2, p1 = p2, p1, v
			dst[k] = v
		}
	default:
		n := len(c) - 1
		if n > divideTaps {
			divideLong(dst, src, c, from)
			return
		}
		// What is known earliest comes first: a row then waits for the last
		// product alone.
		var t [divideTaps + 1]float64
		copy(t[:], c)
		c1, c2, c3, c4, c5, c6 := t[1], t[2], t[3], t[4], t[5], t[6]
		var q [divideTaps]float64
		for i := range n {
			q[i] = dst[from-1-i]
		}
		p1, p2, p3, p4, p5, p6 := q[0], q[1], q[2], q[3], q[4], q[5]
		for k := from; k < len(src); k++ {
			v := (((src[k] - c6*p6) - (c5*p5 + c4*p4)) - (c3*p3 + c2*p2)) - c1*p1
			p6, p5, p4, p3, p2, p1 = p5, p4, p3, p2, p1, v
			dst[k] = v
		}
	}
}

// divideTaps is the degree up to which divide keeps its past in registers.
const divideTaps = 6

// divideLong is divide for any degree.
func divideLong(dst, src, c []float64, from int) {
	n := len(c) - 1
	for k := from; k < len(src); k++ {
		v := src[k]
		past := dst[k-n : k]
		for i := n; i >= 1; i-- {
			v -= c[i] * past[n-i]
		}
		dst[k] = v
	}
}

// Rest returns the input, in the log's units, at which the plant of m rests
// with the output at y, by the constant of the given record. It is not finite
// for a plant with a zero at the origin.
func (p *Predictor) Rest(m *Prediction, record int, y float64) float64 {
	d := lti.SampleDeltaValues(m.Num, m.Den, m.Delay, m.Period)
	n := d.Poles
	colour := sum(m.D)
	// At rest only the last power of δ counts.
	a, b := d.A[n], d.B0[n-1]+d.B1[n-1]
	return p.meanU[record] + (a*(y-p.meanY[record])-m.Const[record]/colour)/b
}

// Restored returns the records given with the outputs that m gives their
// missing samples most probably; those that no equation asks for stay on
// straight lines.
func (p *Predictor) Restored(m *Prediction) ([]Record, error) {
	out := slices.Clone(p.given)
	if !p.anyMissing() {
		return out, nil
	}
	s, x := p.begin(m)
	defer s.done()
	if _, _, ok := s.errorsAt(x); !ok {
		return nil, s.failure()
	}
	for i, r := range p.recs {
		if len(r.Missing) == 0 {
			continue
		}
		y := append([]float64(nil), out[p.of[i]].Y...)
		for _, k := range r.Missing {
			y[k] = p.meanY[i] + p.sy*s.work[i].y[s.pad+k]
		}
		out[p.of[i]].Y = y
	}
	return out, nil
}

func (p *Predictor) checkWhole() {
	if p.anyMissing() {
		panic(notWhole)
	}
}

// Means returns what was taken out of the input and the output of each record:
// the means over the records that share its constant, which holds about them.
func (p *Predictor) Means() (u, y []float64) { return slices.Clone(p.meanU), slices.Clone(p.meanY) }

// Logs returns the number of equations of each log.
func (p *Predictor) Logs() []int { return slices.Clone(p.logs) }

// Inputs returns records of the input in each row of Errors, without output,
// for tests of what is left.
func (p *Predictor) Inputs() []Record {
	var out []Record
	for i, r := range p.recs {
		u := append([]float64(nil), r.U[p.first[i]+p.warm[i]:]...)
		floats.Scale(p.su, u)
		floats.AddConst(p.meanU[i], u)
		out = append(out, Record{U: u, Log: r.Log, Resumes: r.Resumes})
	}
	return out
}
