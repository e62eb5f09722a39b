package ident

import (
	"cmp"
	"context"
	"math"
	"os"
	"strconv"
	"testing"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/demorig"
	"steadyrig/fit/lti"
)

// several returns logs of a rig, one for each noise level, each at an operating
// point of its own; gain multiplies the plant of the last.
func several(t testing.TB, r demorig.Rig, seed uint64, gain float64, levels ...float64) ([]*data.Experiment, *data.Rig) {
	t.Helper()
	var exps []*data.Experiment
	var rig *data.Rig
	for i, level := range levels {
		own := r
		own.SensorNoise, own.Disturbance, own.Resolution = level*r.SensorNoise, level*r.Disturbance, level*r.Resolution
		if i == len(levels)-1 {
			own.Truth.Num = r.Truth.Num.Scale(gain)
		}
		var e *data.Experiment
		e, rig = experiment(t, own, 100*seed+uint64(i))
		e.File = string(rune('a'+i)) + ".csv"
		for _, s := range e.Segments {
			for k := range s.Y {
				s.U[k] += float64(i)
				s.Y[k] -= float64(2 * i)
				s.R[k] -= float64(2 * i)
			}
		}
		exps = append(exps, e)
	}
	rig.OperatingPoint = nil
	return exps, rig
}

// joint fits logs in the structure of the truth, from there.
func joint(t testing.TB, exps []*data.Experiment, true1 *fit.Prediction) (*fit.Predictor, *fit.Prediction, *Model) {
	t.Helper()
	recs, period, err := records(exps)
	if err != nil {
		t.Fatal(err)
	}
	p, err := fit.NewPredictor(recs, period, math.Max(maxDelaySamples*period, true1.Delay))
	if err != nil {
		t.Fatal(err)
	}
	f, err := p.Fit(copyOf(true1), finalTol, finalSteps)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Covariance(f); err != nil {
		t.Fatal(err)
	}
	m := &Model{}
	m.describe(p, f, &data.Rig{})
	return p, f, m
}

// studied is how many trials to run: so many, or what STEADYRIG_STUDY says.
func studied(trials int) int {
	if n, err := strconv.Atoi(os.Getenv("STEADYRIG_STUDY")); err == nil {
		return n
	}
	return trials
}

// studiedRigs are all rigs, or STEADYRIG_RIG, under STEADYRIG_STUDY, with logs of
// STEADYRIG_ROWS; otherwise hover, with logs just too long to be drawn from.
func studiedRigs(t testing.TB) []demorig.Rig {
	if os.Getenv("STEADYRIG_STUDY") != "" {
		rigs := demorig.All()
		rows, _ := strconv.Atoi(os.Getenv("STEADYRIG_ROWS"))
		for i := range rigs {
			rigs[i].Rows = cmp.Or(rows, rigs[i].Rows)
		}
		if name := os.Getenv("STEADYRIG_RIG"); name != "" {
			rigs = []demorig.Rig{rigNamed(t, name)}
			rigs[0].Rows = cmp.Or(rows, rigs[0].Rows)
		}
		return rigs
	}
	r := rigNamed(t, "hover")
	r.Rows = drawRows + 200
	return []demorig.Rig{r}
}

// binomial returns the least and the largest number of n trials that an event of
// probability p has but for a chance of 1e-4 on each side: the exact quantiles.
func binomial(n int, p float64) (least, most int) {
	law := distuv.Binomial{N: float64(n), P: p}
	for law.CDF(float64(least)) < 1e-4 {
		least++
	}
	most = n
	for most > 0 && 1-law.CDF(float64(most-1)) < 1e-4 {
		most--
	}
	return least, most
}

// Logs of one plant, of other noise levels and operating points, differ with
// probability below q in the share q of trials; of three logs one whose gain is
// 12 % larger is named.
func TestLogsAgree(t *testing.T) {
	if testing.Short() {
		t.Skip("fits 150 logs")
	}
	for _, r := range studiedRigs(t) {
		true1 := truth(t, r)
		trials := studied(30)
		agreement := func(seed int, gain float64) *Agreement {
			exps, rig := several(t, r, uint64(seed), gain, 1, 3, 1)
			p, f, m := joint(t, exps, true1)
			if err := m.compare(context.Background(), exps, rig, p, f, Options{}); err != nil {
				t.Fatal(err)
			}
			return m.Evidence.Agreement
		}
		below := map[float64]int{0.05: 0, 0.5: 0}
		named := 0
		var levels [3]float64
		for k := range trials {
			a := agreement(k, 1)
			for q := range below {
				if a.Probability < q {
					below[q]++
				}
			}
			if a.Odd != "" {
				named++
			}
			for i := range levels {
				levels[i] += a.Logs[i].NoiseSD / (math.Sqrt(true1.Variance) * float64(trials))
			}
		}
		found := 0
		power := max(5, trials/4)
		for k := range power {
			a := agreement(1000+k, 1.12)
			if a.Odd == "c.csv" && !a.Agree {
				found++
			}
			if k == 0 {
				t.Log(a.against())
			}
		}
		t.Logf("%s, %d rows: below 0.05 in %d, below 0.5 in %d of %d, odd one named in %d; levels %.3f; gain 12 %% up found in %d of %d",
			r.Name, r.Rows, below[0.05], below[0.5], trials, named, levels, found, power)
		for q, n := range below {
			if least, most := binomial(trials, q); n < least || n > most {
				t.Errorf("%s: probability below %g in %d of %d, want %d to %d", r.Name, q, n, trials, least, most)
			}
		}
		// Two tests at 1 % each.
		if _, most := binomial(trials, 2*disagree); named > most {
			t.Errorf("%s: an odd one is named in %d of %d, want at most %d", r.Name, named, trials, most)
		}
		if least, _ := binomial(power, 0.99); found < least {
			t.Errorf("%s: the odd one is found in %d of %d, want %d", r.Name, found, power, least)
		}
		for i, want := range []float64{1, 3, 1} {
			// The deviation of a deviation is 1/sqrt(2 rows); five of them, and the
			// noise that a rounded sensor adds is not quite a twelfth of its step.
			if math.Abs(levels[i]/want-1) > 0.01+5/math.Sqrt(2*float64(r.Rows*trials)) {
				t.Errorf("%s: noise of log %d is %.4f of the quiet one's, want %g", r.Name, i, levels[i], want)
			}
		}
	}
}

// Of logs of unequal noise the joint estimate reaches the Cramér-Rao bound, and its intervals cover; that of
// one level for all does not reach it. Where noise adds nothing to the excitation,
// two logs of levels 1 and 3 have information 1 + 1/9, variance 0.9, and
// without weights the variance of a mean, (1 + 9)/4: its error is 1.67 times as large.
func TestUnequalLogsAreWeighted(t *testing.T) {
	for _, r := range studiedRigs(t) {
		if os.Getenv("STEADYRIG_STUDY") == "" {
			r.Rows = 1500
		}
		true1 := truth(t, r)
		trials := studied(40)
		var with, without float64
		in := 0
		for k := range trials {
			exps, _ := several(t, r, uint64(2000+k), 1, 1, 3)
			p, f, m := joint(t, exps, true1)
			at := copyOf(true1)
			at.Variance = true1.Variance * 3 // geometric mean of 1 and 9
			if err := p.Covariance(at); err != nil {
				t.Fatal(err)
			}
			limit := &Model{}
			limit.plant(at)
			limit.derive()
			// One level: all records of one log, each with its own constant.
			recs, _, _ := records(exps)
			for i := range recs {
				recs[i].Log = 0
			}
			q, err := fit.NewPredictor(recs, r.Period, p.DelayRange[1])
			if err != nil {
				t.Fatal(err)
			}
			g, err := q.Fit(copyOf(true1), finalTol, finalSteps)
			if err != nil {
				t.Fatal(err)
			}
			// The gain at high frequency is regular on every rig.
			b := lead(true1)
			sd := limit.Gain.HighFrequency.SD
			with += math.Pow((lead(f)-b)/sd, 2) / float64(trials)
			without += math.Pow((lead(g)-b)/sd, 2) / float64(trials)
			if m.Gain.HighFrequency.Interval95.Contains(b) {
				in++
			}
		}
		with, without = math.Sqrt(with), math.Sqrt(without)
		t.Logf("%s, %d rows: error over bound %.2f, with one level for all %.2f; %d of %d intervals cover", r.Name, r.Rows, with, without, in, trials)
		// A chi-square of so many degrees of freedom is larger once in 10 000.
		if most := math.Sqrt(distuv.ChiSquared{K: float64(trials)}.Quantile(1-1e-4) / float64(trials)); with > most {
			t.Errorf("%s: error over bound %.2f, want at most %.2f", r.Name, with, most)
		}
		if without < 1.2*with {
			t.Errorf("%s: error over bound %.2f without weights, %.2f with: too near", r.Name, without, with)
		}
		if least, _ := binomial(trials, 0.95); in < least {
			t.Errorf("%s: %d of %d intervals cover, want %d", r.Name, in, trials, least)
		}
	}
}

// inPieces cuts a log of one segment into n, with gaps of a tenth of a piece.
func inPieces(e *data.Experiment, n int) *data.Experiment {
	cut := *e
	cut.Segments, cut.Used = nil, 0
	s := e.Segments[0]
	size := len(s.Y) / n
	for i := range n {
		from, to := i*size, i*size+size*9/10
		piece := data.Segment{Line: s.Line + from, Start: s.Start + float64(from)*e.Period, U: s.U[from:to], Y: s.Y[from:to], R: s.R[from:to]}
		if s.D != nil {
			piece.D = s.D[from:to]
		}
		cut.Segments = append(cut.Segments, piece)
		cut.Used += to - from
	}
	return &cut
}

// noiseDistance fits the structure of the truth to records and returns the mean
// squared distance of the noise shape from the truth's, per parameter, in units
// of the covariance at the truth.
func noiseDistance(t *testing.T, recs []fit.Record, true1 *fit.Prediction) float64 {
	t.Helper()
	p, err := fit.NewPredictor(recs, true1.Period, math.Max(maxDelaySamples*true1.Period, true1.Delay))
	if err != nil {
		t.Fatal(err)
	}
	f, err := p.Fit(copyOf(true1), finalTol, finalSteps)
	if err != nil {
		t.Fatal(err)
	}
	at := copyOf(true1)
	if err := p.Covariance(at); err != nil {
		t.Fatal(err)
	}
	diff := append(lti.Unshift(f.D)[1:], lti.Unshift(f.C)[1:]...)
	floats.Sub(diff, append(lti.Unshift(true1.D)[1:], lti.Unshift(true1.C)[1:]...))
	n := len(diff)
	first := at.Cov.SymmetricDim() - n
	cov := mat.NewSymDense(n, nil)
	for i := range n {
		for j := i; j < n; j++ {
			cov.SetSym(i, j, at.Cov.At(first+i, first+j))
		}
	}
	info := inverse(cov)
	if info == nil {
		t.Fatal("no inverse")
	}
	d := mat.NewVecDense(n, diff)
	return mat.Inner(d, info, d) / float64(n)
}

// A constant for each of many pieces biases the noise shape (Neyman & Scott,
// Consistent estimates based on partially consistent observations, Econometrica
// 16 (1948) 1-32), and so does a start of each that could be anything. One
// constant for the log and rows for each start to settle in leave the squared
// distance from the truth chi-square, and the log is as sound as a whole one.
func TestLogInPieces(t *testing.T) {
	if testing.Short() {
		t.Skip("fits 24 logs")
	}
	names := []string{"hover", "mast"}
	if os.Getenv("STEADYRIG_STUDY") != "" {
		names = append(names, "reactor", "flap", "slider")
	}
	for _, name := range names {
		r := rigNamed(t, name)
		r.Rows = 6000
		true1 := truth(t, r)
		trials := studied(6)
		var one, each float64
		for k := range trials {
			e, rig := experiment(t, r, uint64(3000+k))
			e = inPieces(e, 20)
			recs, _, _ := records([]*data.Experiment{e})
			one += noiseDistance(t, recs, true1) / float64(trials)
			for i := range recs {
				recs[i].Resumes = false
			}
			each += noiseDistance(t, recs, true1) / float64(trials)
			if k > 0 {
				continue
			}
			m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
			if err != nil {
				t.Fatal(err)
			}
			if m.Verdict != Sound || m.Evidence.Residuals.Lags == 0 || len(m.Poles) != len(true1.Den)-1 {
				t.Errorf("%s in pieces is %s with %d poles: %q", name, m.Verdict, len(m.Poles), m.Warnings)
			}
		}
		n := float64(trials * (len(true1.C) - 1 + len(true1.D) - 1))
		// A chi-square is larger once in 10 000; a quarter more for starts that
		// have settled but for a little.
		most := 1.25 * distuv.ChiSquared{K: n}.Quantile(1-1e-4) / n
		t.Logf("%s: squared distance of the noise shape %.2f, with pieces that share nothing %.2f", name, one, each)
		if one > most || each < 1.5*one {
			t.Errorf("%s: squared distance of the noise shape %.2f, want at most %.2f; %.2f where pieces share nothing", name, one, most, each)
		}
	}
}

// Pieces after a gap longer than the log, or after a clock that jumped back,
// may rest elsewhere.
func TestResumes(t *testing.T) {
	e := &data.Experiment{Period: 0.1, Used: 100, Segments: []data.Segment{{Y: make([]float64, 50)}, {Y: make([]float64, 50)}}}
	for _, c := range []struct {
		start float64
		want  bool
	}{{5, true}, {14.9, true}, {15.2, false}, {4, false}} {
		e.Segments[1].Start = c.start
		if got := resumes(e, 1); got != c.want {
			t.Errorf("a piece that starts at %g s resumes: %v", c.start, got)
		}
	}
}
