package fit

import (
	"errors"
	"math"
	"math/rand/v2"
	"os"
	"strconv"
	"testing"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/fit/fittest"
	"steadyrig/fit/lti"
)

// trueModel is the rig in the estimator's form.
func trueModel(rig fittest.Rig) *Prediction {
	truth := rig.Truth()
	return &Prediction{
		Shape: Shape{Poles: rig.Plant.Den.Degree(), Zeros: rig.Plant.Num.Degree()},
		Num:   rig.Plant.Num, Den: rig.Plant.Den, D: []float64{1}, C: truth.C, Period: rig.Period, Variance: truth.Variance,
	}
}

// ditheredFit fits the true structure to a record from the truth.
func ditheredFit(t testing.TB, rig fittest.Rig, u, y []float64) (*Predictor, *Prediction) {
	t.Helper()
	p, err := NewPredictor([]Record{{U: u, Y: y}}, rig.Period, 0)
	if err != nil {
		t.Fatal(err)
	}
	m, err := p.Fit(trueModel(rig), 1e-10, 100)
	if err != nil {
		t.Fatal(err)
	}
	return p, m
}

// studyTrials is short trials, or as many as STEADYRIG_STUDY asks for.
func studyTrials(t *testing.T, short int) int {
	if v := os.Getenv("STEADYRIG_STUDY"); v != "" {
		n, err := strconv.Atoi(v)
		if err != nil {
			t.Fatal(err)
		}
		return n
	}
	return short
}

// countLimits are the counts that as many trials of the given probability keep
// within, but for once in 2000 on either side.
func countLimits(trials int, probability float64) (lo, hi int) {
	b := distuv.Binomial{N: float64(trials), P: probability}
	for lo < trials && b.CDF(float64(lo)) < 5e-4 {
		lo++
	}
	for hi = lo; hi < trials && b.Survival(float64(hi)) > 5e-4; hi++ {
	}
	return lo, hi
}

// byInstruments solves Z'(y - a y1 - b u1) = 0 with the reference one and two
// samples ago as instruments, and a constant or not.
func byInstruments(d fittest.Set, first int, constant bool) (a, b float64) {
	n := 2
	if constant {
		n = 3
	}
	zx, zy := mat.NewDense(n, n, nil), mat.NewVecDense(n, nil)
	for k := first; k < len(d.Y); k++ {
		z, x := []float64{d.R[k-1], d.R[k-2], 1}, []float64{d.Y[k-1], d.U[k-1], 1}
		for i := range n {
			zy.SetVec(i, zy.AtVec(i)+z[i]*d.Y[k])
			for j := range n {
				zx.Set(i, j, zx.At(i, j)+z[i]*x[j])
			}
		}
	}
	var theta mat.VecDense
	if err := theta.SolveVec(zx, zy); err != nil {
		panic(err)
	}
	return theta.AtVec(0), theta.AtVec(1)
}

// With noise-free signals r_k for u and r_{k-1} for y, and no filter, the two
// derivatives of a first-order plant span r_{k-1} and r_{k-2}: the estimate is
// that of plain instrumental variables, which do not see how the instruments are
// combined (Söderström & Stoica, Instrumental Variable Methods for System
// Identification, 1983, ch. 3). The formula is checked on the exact values for
// this data set first.
func TestRefinedSolvesForInstruments(t *testing.T) {
	d := fittest.D2()
	a, b := byInstruments(d, 2, false)
	if math.Abs(a-1.20464532432682) > 1e-10 || math.Abs(b-0.491796849505829) > 1e-10 {
		t.Fatalf("the formula gives %.15g, %.15g", a, b)
	}
	p, err := NewPredictor([]Record{{U: d.U, Y: d.Y}}, 1, 0)
	if err != nil {
		t.Fatal(err)
	}
	driven, _, err := p.driven([][][]float64{{d.R}})
	if err != nil {
		t.Fatal(err)
	}
	u, y := driven.padded[0].U[p.pad:], driven.padded[0].Y[p.pad:]
	copy(u, d.R)
	copy(y[1:], d.R)
	m, err := p.refined(&Prediction{Shape: Shape{Poles: 1}, Num: lti.Poly{0.4}, Den: lti.Poly{-0.2, 1}}, driven, 2)
	if err != nil {
		t.Fatal(err)
	}
	a, b = byInstruments(d, p.Lead, true)
	pole := -m.Den[0]
	gotA, gotB := math.Exp(pole), m.Num[0]*math.Expm1(pole)/pole
	// The steps end a ten-thousandth of a deviation, 3e-6 here, from the solution
	// and are then quadratic.
	if math.Abs(gotA-a) > 3e-6 || math.Abs(gotB-b) > 3e-6 {
		t.Errorf("pole %.10g, gain %.10g, want %.10g, %.10g", gotA, gotB, a, b)
	}
}

// An unstable plant under coloured noise in closed loop, and no noise shape at
// all: least squares puts the pole at a + c lambda/Ry = 1.4583 (Söderström &
// Stoica, System Identification, 1989, on errors in regressors), instruments at
// the true 1.25, and their intervals cover.
func TestRefinedUnderColouredNoise(t *testing.T) {
	const n = 1000
	trials := studyTrials(t, 150)
	hits := 0
	var leastSquares, sum, squares, claimed float64
	for k := range trials {
		rnd := rand.New(rand.NewPCG(10, uint64(k)))
		rec := Record{U: make([]float64, n), Y: make([]float64, n)}
		r := make([]float64, n)
		y, u, e1 := 0.0, 0.0, 0.0
		for i := range n {
			e := math.Sqrt(1.0/3) * rnd.NormFloat64()
			r[i] = float64(2*rnd.IntN(2) - 1)
			y = 1.25*y + 0.5*u + e + 0.5*e1
			u = r[i] - 2*y
			e1 = e
			rec.U[i], rec.Y[i] = u+5, y-2
		}
		m, err := FitARX([]Record{rec}, ARXOptions{NA: 1, NB: 1, Delay: 1})
		if err != nil {
			t.Fatal(err)
		}
		a := -m.A[1]
		leastSquares += a / float64(trials)
		p, err := NewPredictor([]Record{rec}, 1, 0)
		if err != nil {
			t.Fatal(err)
		}
		iv, err := p.Refined(&Prediction{Shape: Shape{Poles: 1}, Num: lti.Poly{m.B[1] * math.Log(a) / (a - 1)}, Den: lti.Poly{-math.Log(a), 1}}, [][][]float64{{r}})
		if err != nil {
			t.Fatal(err)
		}
		d := -iv.Den[0] - math.Log(1.25)
		sum += d / float64(trials)
		squares += d * d / float64(trials)
		claimed += iv.Cov.At(1, 1) / float64(trials)
		if math.Abs(d) < 1.96*math.Sqrt(iv.Cov.At(1, 1)) {
			hits++
		}
	}
	t.Logf("least squares %.4f; bias %.2g of deviation %.3g, claimed %.3g; %d of %d covered", leastSquares, sum, math.Sqrt(squares), math.Sqrt(claimed), hits, trials)
	if math.Abs(leastSquares-1.458333333) > 0.01 {
		t.Errorf("least squares: pole at %.4f", leastSquares)
	}
	// Four deviations of the mean, and what some 20 numbers fitted to each
	// signal in 1000 rows leave of the 0.15 by which least squares is off.
	if limit := 4*math.Sqrt(squares/float64(trials)) + 0.02*0.15; !(math.Abs(sum) < limit) {
		t.Errorf("mean error %.3g, want less than %.3g", sum, limit)
	}
	if lo, hi := countLimits(trials, 0.95); hits < lo || hits > hi {
		t.Errorf("covered %d times of %d, want %d to %d", hits, trials, lo, hi)
	}
}

// Error over the Cramér-Rao bound of the prediction form, constant and C
// unknown: it and the covariance are asked for a_1 on rigs of all kinds. The
// bound holds for any estimator that uses the feedback of the noise; the limits
// are 3.3 deviations of the root of a mean of squares around one, and 5 % above
// for what the outside signal does not tell. STEADYRIG_STUDY=N: N records of
// each rig.
func TestRefinedOnRigs(t *testing.T) {
	if testing.Short() {
		t.Skip("fits 120 records")
	}
	trials := studyTrials(t, 20)
	hits, total := 0, 0
	for i, rig := range fittest.Rigs() {
		true1 := trueModel(rig)
		nz := len(true1.Num)
		n := true1.Poles
		var outside, prediction float64
		for k := range trials {
			u, y, d := rig.RecordWithDither(2000, uint64(20+i), uint64(k))
			p, m := ditheredFit(t, rig, u, y)
			iv, err := p.Refined(m, [][][]float64{{d}})
			if err != nil {
				t.Fatalf("%s: %v", rig.Name, err)
			}
			if !(iv.Share > 0.1 && iv.Share <= 1) {
				t.Errorf("%s: least share %g", rig.Name, iv.Share)
			}
			bound := *true1
			bound.Const = []float64{0}
			if err := p.Covariance(&bound); err != nil {
				t.Fatal(err)
			}
			off, v := iv.Den[n-1]-true1.Den[n-1], bound.Cov.At(nz, nz)
			outside += off * off / v / float64(trials)
			prediction += math.Pow(m.Den[n-1]-true1.Den[n-1], 2) / v / float64(trials)
			total++
			if math.Abs(off) < 1.96*math.Sqrt(iv.Cov.At(nz, nz)) {
				hits++
			}
		}
		t.Logf("%-26s error over bound: outside %.3f, prediction %.3f", rig.Name, math.Sqrt(outside), math.Sqrt(prediction))
		if limit := 1.05 * (1 + 3.3/math.Sqrt(2*float64(trials))); !(math.Sqrt(outside) < limit) {
			t.Errorf("%s: error over bound %.3f, want less than %.3f", rig.Name, math.Sqrt(outside), limit)
		}
	}
	t.Logf("%d of %d covered", hits, total)
	if lo, hi := countLimits(total, 0.95); hits < lo || hits > hi {
		t.Errorf("a_1 covered %d of %d times, want %d to %d", hits, total, lo, hi)
	}
}

// Reference and dither together tell more than either: the share of the least
// explained derivative grows. A signal that rests is no signal, and a record too
// short to fit is left out with its own.
func TestRefinedTakesSeveralSignals(t *testing.T) {
	const n = 3000
	rig := fittest.Rigs()[1]
	rnd := rand.New(rand.NewPCG(2, 2))
	reference, dither, rest := make([]float64, n), make([]float64, n), make([]float64, n)
	input, sensor := make([]float64, n), make([]float64, n)
	for k := range n {
		if k%10 == 0 {
			reference[k] = rig.Law.Y0 + 0.2*rnd.NormFloat64()
		} else {
			reference[k] = reference[k-1]
		}
		if k%rig.Hold == 0 {
			dither[k] = rig.Dither * rnd.NormFloat64()
		} else {
			dither[k] = dither[k-1]
		}
		rest[k] = 3
		input[k], sensor[k] = rig.InputNoise*rnd.NormFloat64(), rig.SensorNoise*rnd.NormFloat64()
	}
	law := rig.Law
	run, err := lti.Run{Plant: rig.Plant, Period: rig.Period, Law: &law, Steps: n, Reference: reference, Dither: dither, InputDisturbance: input, Noise: sensor}.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	u, y := run.U, run.Y
	p, m := ditheredFit(t, rig, u, y)
	share := func(p *Predictor, signals ...[][]float64) float64 {
		r, err := p.Refined(m, signals)
		if errors.As(err, new(WeakInstrument)) {
			return 0
		} else if err != nil {
			t.Fatal(err)
		}
		return r.Share
	}
	a, b, both := share(p, [][]float64{reference}), share(p, [][]float64{dither}), share(p, [][]float64{reference, dither, rest})
	t.Logf("share by reference %.3f, dither %.3f, both %.3f", a, b, both)
	if !(both > 1.05*math.Max(a, b)) {
		t.Errorf("share %.3f by the reference, %.3f by the dither, %.3f by both", a, b, both)
	}
	cut, short := n/2, 20
	q, err := NewPredictor([]Record{{U: u[:cut], Y: y[:cut]}, {U: u[:short], Y: y[:short]}, {U: u[cut:], Y: y[cut:]}}, rig.Period, 0)
	if err != nil {
		t.Fatal(err)
	}
	// One start-up in 3000 rows is the difference.
	if c := share(q, [][]float64{dither[:cut]}, [][]float64{dither[:short]}, [][]float64{dither[cut:]}); math.Abs(c-b) > 0.05*b {
		t.Errorf("share %.3f in two records, %.3f in one", c, b)
	}
}

// Pairing of columns: the delay is zero, and a row less than none where the
// output is logged a row early.
func TestRefinedShowsPairing(t *testing.T) {
	rig := fittest.Rigs()[1]
	for trial := range uint64(4) {
		u, y, d := rig.RecordWithDither(3000, 7, trial)
		n := len(u) - 1
		for _, c := range []struct {
			name string
			rec  Record
			rows float64
		}{{"paired rightly", Record{U: u[:n], Y: y[:n]}, 0}, {"output a row early", Record{U: u[:n], Y: y[1:]}, -1}} {
			p, err := NewPredictor([]Record{c.rec}, rig.Period, rig.Period)
			if err != nil {
				t.Fatal(err)
			}
			p.DelayRange[0] = -2 * rig.Period
			start := trueModel(rig)
			start.FreeDelay = true
			start.Delay = (c.rows + 0.4) * rig.Period
			m, err := p.Refined(start, [][][]float64{{d[:n]}})
			if err != nil {
				t.Fatalf("%s: %v", c.name, err)
			}
			rows, sd := m.Delay/rig.Period, math.Sqrt(m.Cov.At(3, 3))/rig.Period
			if !(math.Abs(rows-c.rows) < 4*sd && sd < 0.2) {
				t.Errorf("%s: delay %.3f rows, deviation %.3f, want %g", c.name, rows, sd, c.rows)
			}
		}
	}
}

// A signal that rests or has nothing to do with the loop is refused.
func TestRefinedRefusesWeakSignals(t *testing.T) {
	d := fittest.D2z()
	p, err := NewPredictor([]Record{{U: d.U, Y: d.Y}}, 1, 0)
	if err != nil {
		t.Fatal(err)
	}
	start := &Prediction{Shape: Shape{Poles: 1}, Num: lti.Poly{0.4}, Den: lti.Poly{-0.2, 1}}
	if r, err := p.Refined(start, [][][]float64{{d.R}}); err == nil {
		t.Errorf("outside signal zero: %+v", r)
	}
	rig := fittest.Rigs()[1]
	for k := range 10 {
		u, y, _ := rig.RecordWithDither(2000, 1, 1)
		_, _, other := rig.RecordWithDither(2000, 2, uint64(k))
		p, m := ditheredFit(t, rig, u, y)
		_, err := p.Refined(m, [][][]float64{{other}})
		var weak WeakInstrument
		if !errors.As(err, &weak) {
			t.Errorf("a signal that never acted: error %v, want WeakInstrument", err)
		}
	}
}

// A model that runs away is drawn inward until it keeps to the energy of what it
// was fitted to; one that does not runs as it is.
func TestNoiseFreeSignalsAreBounded(t *testing.T) {
	const energy = 1000
	rnd := rand.New(rand.NewPCG(1, 1))
	r := make([]float64, 600)
	for k := range r {
		r[k] = rnd.NormFloat64()
	}
	v := simulated([]float64{1.05}, [][]float64{{1}}, [][]float64{r}, energy)
	if e := floats.Dot(v, v); !(e > 0.1*energy && e <= 4*energy) {
		t.Errorf("energy %g, want at most four times %d", e, energy)
	}
	v = simulated([]float64{0.5, -0.2}, [][]float64{{0, 1}}, [][]float64{r}, energy)
	for k := 2; k < len(r); k++ {
		if math.Abs(v[k]-(0.5*v[k-1]-0.2*v[k-2]+r[k-1])) > 1e-12 {
			t.Fatalf("row %d does not follow its model", k)
		}
	}
}

// The errors' derivatives by plant and D, constant and start-up errors refitted,
// are differences of the errors.
func TestDerivativesOfErrors(t *testing.T) {
	rec, _ := pendulum(1, 300)
	p, err := NewPredictor([]Record{rec}, 0.05, 0.2)
	if err != nil {
		t.Fatal(err)
	}
	s, x := p.begin(&Prediction{
		Shape: Shape{Poles: 3, Zeros: 1, Colour: 1, FreeDelay: true},
		Num:   lti.Poly{9, 0.3}, Den: lti.Poly{-100, -9, 11, 1}, Delay: 0.07,
		D: []float64{1, -0.9}, C: delayPoly([]complex128{0.8, 0.7 + 0.1i, 0.7 - 0.1i, 0.97}),
	})
	errorsOf := func(x point) []float64 {
		if _, _, ok := s.errorsAt(x); !ok {
			t.Fatal("no errors")
		}
		return append([]float64(nil), s.rowErrors(&s.work[0])...)
	}
	_, q, _ := s.errorsAt(x)
	q.delta = lti.SampleDelta(x.num, x.den, x.tau, s.h)
	w := &s.work[0]
	s.filterAll(w, q, s.pad+s.Lead)
	which := []int{0, 1, 2, 3, 4, 5, 6}
	d := s.derivatives(w, w, x.c, s.columns(q), which)
	for _, k := range which {
		const eps = 1e-5
		step := make([]float64, s.shape.size())
		step[k] = eps
		up := errorsOf(s.moved(x, step))
		step[k] = -eps
		floats.Sub(up, errorsOf(s.moved(x, step)))
		floats.Scale(1/(2*eps), up)
		if size := floats.Norm(up, math.Inf(1)); !(floats.Distance(up, d[k], math.Inf(1)) < 1e-6*size) {
			t.Errorf("parameter %d: off by %g of %g", k, floats.Distance(up, d[k], math.Inf(1)), size)
		}
	}
}

// The influences at a point sum to Newton's step back to where they sum to
// nothing, as each row's share in it. The points are a tenth of a deviation apart,
// along the line on which the other parameters are likeliest; the noise shape is
// wrong, so that the information is not the curvature.
func TestInfluencesSumToTheError(t *testing.T) {
	for i, rig := range fittest.Rigs() {
		u, y, _ := underTone(rig, 1500, 3, uint64(i))
		p, m := ditheredFit(t, rig, u, y)
		if err := p.Covariance(m); err != nil {
			t.Fatal(err)
		}
		sum := func(m *Prediction, k int) float64 {
			f, err := p.Influence(m)
			if err != nil {
				t.Fatal(err)
			}
			return floats.Sum(f.rows[0][k])
		}
		for k := range m.Shape.size() {
			want := 0.1 * math.Sqrt(m.Cov.At(k, k))
			s, x := p.begin(m)
			unit := s.units()
			step := make([]float64, len(unit))
			for l := range step {
				step[l] = -want * m.Cov.At(k, l) / m.Cov.At(k, k) / unit[l]
			}
			x = s.moved(x, step)
			s.errorsAt(x)
			off := s.result(x, 0, true)
			s.done()
			if got := sum(off, k) - sum(m, k); !(math.Abs(got/want-1) < 0.05) {
				t.Errorf("%s: parameter %d is off by %.3g, its influences sum to %.3g", rig.Name, k, want, got)
			}
		}
	}
}

// underTone is RecordWithDither under a disturbance at the input that rings at
// 0.3 rad a sample and keeps 0.95 of its size from one to the next, which a noise shape
// without poles of its own cannot hold.
func underTone(rig fittest.Rig, n int, seed, trial uint64) (u, y, dither []float64) {
	const radius, angle = 0.95, 0.3
	rnd := rand.New(rand.NewPCG(seed, trial))
	dither = make([]float64, n)
	input, sensor := make([]float64, n), make([]float64, n)
	var level, x1, x2 float64
	for k := range n {
		if k%rig.Hold == 0 {
			level = rig.Dither * float64(2*rnd.IntN(2)-1)
		}
		dither[k] = level
		x1, x2 = 2*radius*math.Cos(angle)*x1-radius*radius*x2+rnd.NormFloat64(), x1
		input[k] = rig.InputNoise * x1
		sensor[k] = rig.SensorNoise * rnd.NormFloat64()
	}
	law := rig.Law
	run, err := lti.Run{Plant: rig.Plant, Period: rig.Period, Law: &law, Steps: n, Dither: dither, InputDisturbance: input, Noise: sensor}.Simulate()
	if err != nil {
		panic(err)
	}
	return run.U, run.Y, dither
}

// Under a disturbance of another colour the prediction's own covariance is too
// small: the estimates scatter by half as much again about their mean. The
// sandwich holds. Variance over claim times the degrees of freedom is a
// chi-square.
func TestSandwichUnderModelError(t *testing.T) {
	if testing.Short() {
		t.Skip("fits 60 records")
	}
	trials := studyTrials(t, 60)
	rig := fittest.Rigs()[5]
	nz := len(rig.Plant.Num)
	var sum, squares, plain, sandwich float64
	for k := range trials {
		u, y, _ := underTone(rig, 4000, 25, uint64(k))
		p, m := ditheredFit(t, rig, u, y)
		if err := p.Covariance(m); err != nil {
			t.Fatal(err)
		}
		f, err := p.Influence(m)
		if err != nil {
			t.Fatal(err)
		}
		a := m.Den[m.Poles-1]
		sum += a
		squares += a * a
		plain += m.Cov.At(nz, nz)
		sandwich += f.Covariance().At(nz, nz)
	}
	n := float64(trials)
	variance := (squares - sum*sum/n) / (n - 1)
	plain, sandwich = variance/(plain/n), variance/(sandwich/n)
	t.Logf("variance of a_1 over what is claimed: plain %.2f, sandwich %.2f", plain, sandwich)
	chi := distuv.ChiSquared{K: n - 1}
	lo, hi := chi.Quantile(5e-4)/(n-1), chi.Quantile(1-5e-4)/(n-1)
	if !(sandwich > lo && sandwich < hi) {
		t.Errorf("variance over sandwich %.2f, want %.2f to %.2f", sandwich, lo, hi)
	}
	if !(plain > hi) {
		t.Errorf("variance over plain covariance %.2f: no model error to test on", plain)
	}
}

// Right models: the probability is below 0.05 in about 5 % of records. The noise is
// three times that of the rigs, so that the two estimates can differ at all.
// STEADYRIG_STUDY=N: N records of each rig.
func TestCompareRightModels(t *testing.T) {
	if testing.Short() {
		t.Skip("fits 240 records")
	}
	trials := studyTrials(t, 40)
	low, doubtful, total := 0, 0, 0
	for i, rig := range fittest.Rigs() {
		rig.InputNoise *= 3
		rig.SensorNoise *= 3
		here := 0
		for k := range trials {
			u, y, d := rig.RecordWithDither(1500, uint64(40+i), uint64(k))
			p, m := ditheredFit(t, rig, u, y)
			r, err := p.Refined(m, [][][]float64{{d}})
			if err != nil {
				t.Fatalf("%s: %v", rig.Name, err)
			}
			c, err := p.Compare(m, r)
			if err != nil {
				t.Fatal(err)
			}
			if c.Probability < 0.05 {
				here++
			}
			if c.Probability < 1e-3 {
				doubtful++
			}
			total++
		}
		low += here
		t.Logf("%-26s below 0.05: %d of %d", rig.Name, here, trials)
	}
	t.Logf("below 0.05: %d, below 0.001: %d of %d", low, doubtful, total)
	if lo, hi := countLimits(total, 0.05); low < lo || low > hi {
		t.Errorf("probability below 0.05 in %d of %d, want %d to %d", low, total, lo, hi)
	}
	if _, hi := countLimits(total, 1e-3); doubtful > hi {
		t.Errorf("probability below 0.001 in %d of %d, want %d at most", doubtful, total, hi)
	}
}

// A noise shape that cannot hold the disturbance moves the prediction in closed
// loop, and not the estimate from outside: the test says so, and only that
// estimate's intervals cover a_1.
func TestCompareWrongNoiseShape(t *testing.T) {
	if testing.Short() {
		t.Skip("fits 40 records")
	}
	trials := studyTrials(t, 20)
	for _, i := range []int{1, 4} {
		rig := fittest.Rigs()[i]
		n, nz := rig.Plant.Den.Degree(), len(rig.Plant.Num)
		found, hits, predicted := 0, 0, 0
		var off float64
		for k := range trials {
			u, y, d := underTone(rig, 4000, uint64(60+i), uint64(k))
			p, m := ditheredFit(t, rig, u, y)
			if err := p.Covariance(m); err != nil {
				t.Fatal(err)
			}
			r, err := p.Refined(m, [][][]float64{{d}})
			if err != nil {
				t.Fatal(err)
			}
			c, err := p.Compare(m, r)
			if err != nil {
				t.Fatal(err)
			}
			if c.Probability < 1e-3 {
				found++
			}
			e := r.Den[n-1] - rig.Plant.Den[n-1]
			off += e / math.Sqrt(r.Cov.At(nz, nz)) / float64(trials)
			if math.Abs(e) < 1.96*math.Sqrt(r.Cov.At(nz, nz)) {
				hits++
			}
			if math.Abs(m.Den[n-1]-rig.Plant.Den[n-1]) < 1.96*math.Sqrt(m.Cov.At(nz, nz)) {
				predicted++
			}
		}
		t.Logf("%s: found in %d of %d; outside off by %.2f deviations in the mean, covers %d times, prediction %d", rig.Name, found, trials, off, hits, predicted)
		if found < trials*9/10 {
			t.Errorf("%s: found in %d of %d records", rig.Name, found, trials)
		}
		if lo, _ := countLimits(trials, 0.95); hits < lo {
			t.Errorf("%s: outside covers %d of %d times, want %d", rig.Name, hits, trials, lo)
		}
		if predicted > trials/2 {
			t.Errorf("%s: prediction covers %d of %d times: no bias to find", rig.Name, predicted, trials)
		}
	}
}

// Rows that are independent: the variance is the mean of squares, whatever the
// records. Rows that hang together, x_k = a x_{k-1} + e: the sum's variance is
// that of e over (1-a)².
func TestInfluenceCovariance(t *testing.T) {
	const n, a = 40000, 0.8
	rnd := rand.New(rand.NewPCG(5, 5))
	white, slow := make([]float64, n), make([]float64, n)
	for k := range n {
		white[k] = rnd.NormFloat64()
		slow[k] = rnd.NormFloat64()
		if k > 0 {
			slow[k] += a * slow[k-1]
		}
	}
	f := &Influence{rows: [][][]float64{{white[:n/2], slow[:n/2], nil}, {white[n/2:], slow[n/2:], nil}}}
	c := f.Covariance()
	// 200 lags: four relative deviations are 4 sqrt(4/3 200/n), of the product
	// of both about as much.
	tol := 4 * math.Sqrt(4.0/3*200/n)
	for _, x := range []struct{ got, want, scale float64 }{
		{c.At(0, 0), n, n}, {c.At(1, 1), n / (1 - a) / (1 - a), n / (1 - a) / (1 - a)}, {c.At(0, 1), 0, n / (1 - a)}, {c.At(2, 2), 0, 1},
	} {
		if !(math.Abs(x.got-x.want) <= tol*x.scale) {
			t.Errorf("covariance %.4g, want %.4g", x.got, x.want)
		}
	}
}

func BenchmarkOutside(b *testing.B) {
	rig := fittest.Rigs()[4]
	u, y, d := rig.RecordWithDither(10000, 1, 1)
	p, m := ditheredFit(b, rig, u, y)
	for b.Loop() {
		r, err := p.Refined(m, [][][]float64{{d}})
		if err != nil {
			b.Fatal(err)
		}
		if _, err := p.Compare(m, r); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(float64(b.N)*10000/b.Elapsed().Seconds(), "rows/s")
}
