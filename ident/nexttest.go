package ident

import (
	"cmp"
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"gonum.org/v1/gonum/dsp/fourier"
	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"

	"steadyrig/data"
)

// A NextTest is this one with one thing done differently, and what that would bring to the interval of the rightmost
// pole.
type NextTest struct {
	// What is "longer", "stronger", "band", "hold", "dither", "reference", "faster", "slower" or "logged".
	What      string  `json:"what"`
	Words     string  `json:"words"`      // what to do, with its number
	HalfWidth float64 `json:"half_width"` // half the 95 % interval to expect, rad/s
	Worth     float64 `json:"worth"`      // without it a log would have to be so many times as long
	// HeldBy says what allows no more of it; empty: nothing does, or there is no more of it.
	HeldBy string `json:"held_by"`
	// Size is the level ± of binary signals, the standard deviation of noise, or times what there is; Hold are the rows for which a
	// level is held; From and To are of a band, rad/s. 0 where there is none.
	Size float64 `json:"size"`
	Hold int     `json:"hold"`
	From float64 `json:"from"`
	To   float64 `json:"to"`
}

const (
	reach        = 4    // deviations that have to stay within limits; what is cut off beyond does no harm where the input is logged after them
	moreMotion   = 2    // times the variance that there is, up to which a change may move the output in any case, and the input if its limits are not known
	slowSteps    = 10   // rows for which a reference holds, at the least
	mostStronger = 10   // times the probe
	littleWorth  = 1.1  // from which a change is worth the trouble
	noWorth      = 1.01 // from which one of power is told
)

// Levels of the binary signals that are weighed are held for so many rows.
var holds = []int{1, 2, 3, 4, 5, 6, 8, 10, 12, 16, 20, 25, 32, 40, 50, 64, 80, 100, 125, 160, 200, 250, 320, 400, 500, 640, 800, 1000}

// fewHolds is the least number of levels in a log from which their spectrum is that of the mean.
const fewHolds = 40

// room is how much more input and output may move.
type room struct {
	input, output     float64 // sums of squares
	inputBy, outputBy string  // what sets that
}

// roomFor measures it, for so many rows, from the limits in the rig file and the motion in the log.
func roomFor(a *AuditReport, rig *data.Rig, rows float64) room {
	margin := func(at float64, limits [2]float64) float64 {
		return math.Max(0, math.Min(limits[1]-at, at-limits[0])) / reach
	}
	r := room{input: moreMotion * square(complex(a.Spread.Input, 0)), inputBy: "twice the input's variance", output: moreMotion * square(complex(a.Spread.Output, 0)), outputBy: "twice the output's variance"}
	if l := rig.Limits.Input; l != nil {
		m := margin(a.OperatingPoint.Input, *l)
		r.input, r.inputBy = m*m, "the input's limits"
	}
	if spec := rig.Spec; spec != nil {
		// The loops have to move it by so much, which takes a linear plant as it is.
		if m := spec.Step / reach; m*m > r.output {
			r.output, r.outputBy = m*m, "the size of the spec's step"
		}
	}
	if l := rig.Limits.Output; l != nil {
		if m := margin(a.OperatingPoint.Output, *l); m*m < r.output {
			r.output, r.outputBy = m*m, "the output's limits"
		}
	}
	r.input = rows * math.Max(0, r.input-square(complex(a.Spread.Input, 0)))
	r.output = rows * math.Max(0, r.output-square(complex(a.Spread.Output, 0)))
	return r
}

// scale is how many times a change that adds input and output to the sums of squares has room, at most most times.
func (r room) scale(input, output, most float64) (scale float64, by string) {
	scale = most
	if s := r.input / input; input > 0 && s < scale {
		scale, by = s, r.inputBy
	}
	if s := r.output / output; output > 0 && s < scale {
		scale, by = s, r.outputBy
	}
	return scale, by
}

// information is what power at the input from outside, a sum of squares for each bin, tells of the plant.
func (s *spectra) information(power func(k int) float64) *mat.SymDense {
	h := mat.NewSymDense(s.all.SymmetricDim(), nil)
	for k, at := range s.slopes {
		addSquare(h, power(k)*at.overNoise, at.gain)
	}
	return h
}

// motion is what it makes of input and output, sums of squares.
func (s *spectra) motion(power func(k int) float64) (input, output float64) {
	for k, at := range s.slopes {
		p := power(k)
		input += p
		output += p * at.gainSquare
	}
	return input, output
}

// omega is the frequency of bin k, rad a sample.
func (s *spectra) omega(k int) float64 { return math.Pi * float64(k+1) / float64(len(s.slopes)) }

// binary is the sum of squares at bin k of random levels ±1 held for so many rows.
func (s *spectra) binary(k, hold int) float64 {
	w := s.omega(k) / 2
	return float64(s.rows) / float64(len(s.slopes)) * math.Pow(math.Sin(w*float64(hold))/math.Sin(w), 2) / float64(hold)
}

// expects is half the interval of the rightmost pole under information h, and what that is worth in lengths of the log; ok is
// false where the parameters are not told apart.
func (inf *Informative) expects(h *mat.SymDense) (halfWidth, worth float64, ok bool) {
	cov := inverse(h)
	if cov == nil {
		return 0, 0, false
	}
	halfWidth = half(rootsOf(inf.model, cov))
	worth = inf.longer(halfWidth)
	sum := halfWidth + worth
	return halfWidth, worth, !math.IsNaN(sum) && !math.IsInf(sum, 0)
}

// plus is expects with so much more of information than there is.
func (inf *Informative) plus(scale float64, more *mat.SymDense) (halfWidth, worth float64, ok bool) {
	h := mat.NewSymDense(more.SymmetricDim(), nil)
	h.ScaleSym(scale, more)
	h.AddSym(h, inf.all)
	return inf.expects(h)
}

// weigh fills in what single changes at the next test would bring, as far as the rig file's limits allow them. What they bring is
// predicted as the interval is, from the information at each frequency; the sensor's noise is taken to be white, of a variance a
// sample that is the least of the disturbance's spectrum.
func (inf *Informative) weigh(a *AuditReport, exps []*data.Experiment, rig *data.Rig) {
	period, rows := inf.model.Period, float64(inf.rows)
	free := roomFor(a, rig, rows)
	add := func(c NextTest, ok bool) {
		if ok {
			inf.NextTests = append(inf.NextTests, c)
		}
	}
	unit := func(x float64, unit string) string {
		if unit != "" {
			unit = " " + unit
		}
		return three(x) + unit
	}
	heldFor := func(hold int) string {
		return fmt.Sprintf("each level held for %s", counted(hold, "row")+" ("+three(float64(hold)*period)+" s)")
	}

	twice := mat.NewSymDense(inf.all.SymmetricDim(), nil)
	twice.ScaleSym(2, inf.all)
	h, worth, ok := inf.expects(twice)
	add(NextTest{What: "longer", Words: fmt.Sprintf("log %s s instead of %s s", three(2*inf.Seconds), three(inf.Seconds)), HalfWidth: h, Worth: worth, Size: 2}, ok)

	probe := "what acts from outside"
	reference, dither := loggable[0].moves(exps), loggable[1].moves(exps)
	if a.Outside.logged() {
		probe = "the " + named(reference, dither)
	}
	now := func(k int) float64 { return inf.eta[k] * inf.slopes[k].fromOutside }
	told := inf.information(now)
	_, swing := inf.motion(now)
	s, by := free.scale(inf.power, swing, mostStronger*mostStronger-1)
	if limit := rig.Limits.InputRate * period; limit > 0 {
		if k := limit / largestStep(exps); k*k-1 < s {
			s, by = k*k-1, "the input's rate limit"
		}
	}
	if s > noWorth-1 {
		h, worth, ok = inf.plus(s, told)
		add(NextTest{What: "stronger", Words: fmt.Sprintf("make %s %s times as strong", probe, three(math.Sqrt(1+s))), HalfWidth: h, Worth: worth, HeldBy: by, Size: math.Sqrt(1 + s)}, ok)
	}

	var best NextTest
	better := func(c NextTest, ok bool) {
		if ok && c.Worth > best.Worth {
			best = c
		}
	}
	step := math.Pi / (period * float64(len(inf.slopes)))
	for i, b := range inf.Bands {
		var count float64
		in := func(k int) float64 {
			if w := float64(k+1) * step; w > b.From && w <= b.To {
				return inf.slopes[k].fromDither
			}
			return 0
		}
		for k := range inf.slopes {
			if in(k) > 0 {
				count++
			}
		}
		input, output := inf.motion(in)
		if i == 0 || input == 0 { // the lowest has too few periods to ask for more
			continue
		}
		s, by := free.scale(input, output, (mostStronger*mostStronger-1)*inf.power/input)
		h, worth, ok := inf.plus(s, inf.information(in))
		better(NextTest{What: "band", Words: fmt.Sprintf("add noise of %s (standard deviation) to the input between %s", unit(math.Sqrt(s*count/rows), rig.Units.Input), b.words()),
			HalfWidth: h, Worth: worth, HeldBy: by, Size: math.Sqrt(s * count / rows), From: b.From, To: b.To}, ok)
	}
	add(best, best.Worth > noWorth)

	// Levels of a dither, in place of the one there is or beside what acts.
	law := func(k int) float64 { return inf.slopes[k].fromDither / inf.slopes[k].fromOutside } // |Q|²
	other, size, present := inf.eta, 0.0, 0
	if a.Outside.logged() && dither {
		var x [][]float64
		var sum float64
		for _, e := range exps {
			for _, q := range e.Pieces() {
				if q.D == nil {
					continue
				}
				d := append([]float64(nil), q.D...)
				floats.AddConst(-floats.Sum(d)/float64(len(d)), d)
				x, sum = append(x, d), sum+floats.Dot(d, d)
			}
		}
		size, present = math.Sqrt(sum/rows), levelRows(exps)
		other = slices.Clone(inf.eta)
		for k, p := range squares(x, 2*len(inf.slopes))[1:] {
			other[k] = math.Max(0, other[k]-law(k)*p)
		}
	}
	rest := inf.information(func(k int) float64 { return other[k] * inf.slopes[k].fromOutside })
	rest.AddSym(rest, inf.rest)
	best = NextTest{}
	for _, hold := range holds {
		if hold*fewHolds > inf.rows {
			break
		}
		levels := func(k int) float64 { return inf.binary(k, hold) * inf.slopes[k].fromDither }
		input, output := inf.motion(levels)
		what, most, space := "dither", math.Inf(1), free
		if size > 0 {
			// What is taken away leaves its room.
			gone := func(k int) float64 { return (inf.eta[k] - other[k]) * inf.slopes[k].fromOutside }
			du, dy := inf.motion(gone)
			what, most, space.input, space.output = "hold", size*size, space.input+du, space.output+dy
		}
		s, by := space.scale(input, output, most)
		more := inf.information(levels)
		more.ScaleSym(s, more)
		more.AddSym(more, rest)
		h, worth, ok := inf.expects(more)
		var text string
		switch level := unit(math.Sqrt(s), rig.Units.Input); {
		case what == "dither":
			text = fmt.Sprintf("add a random binary dither of ± %s to the input, %s", level, heldFor(hold))
		case present == 0:
			text = fmt.Sprintf("make the dither a random binary one of ± %s, %s", level, heldFor(hold))
		case by == "":
			text = fmt.Sprintf("hold each level of the dither for %s (%s s) instead of %d", counted(hold, "row"), three(float64(hold)*period), present)
		default:
			text = fmt.Sprintf("hold each level of the dither for %s (%s s) instead of %d, at ± %s", counted(hold, "row"), three(float64(hold)*period), present, level)
		}
		better(NextTest{What: what, Words: text, HalfWidth: h, Worth: worth, HeldBy: by, Size: math.Sqrt(s), Hold: hold}, ok && (hold != present || what != "hold"))
	}
	add(best, best.Worth > noWorth)

	if !reference {
		inf.weighReference(a, rig, free, add, unit, heldFor)
	}

	// At half the period each sample of sensor noise has half the density, beside a disturbance that keeps its own; at
	// twice the period what lies above the new Nyquist frequency is lost as well.
	sensor := math.Inf(1)
	for _, at := range inf.slopes {
		sensor = math.Min(sensor, 1/at.overNoise)
	}
	for _, c := range []struct {
		what, words string
		density     float64
		top         int
	}{
		{"faster", fmt.Sprintf("sample twice as fast, every %s s, under the same law", three(period/2)), -sensor / 2, len(inf.slopes)},
		{"slower", fmt.Sprintf("sample half as fast, every %s s, under the same law: half the rows", three(2*period)), sensor, len(inf.slopes) / 2},
	} {
		h := mat.NewSymDense(inf.all.SymmetricDim(), nil)
		for k, at := range inf.slopes[:c.top] {
			addSquare(h, now(k)/(1/at.overNoise+c.density), at.gain)
		}
		h.AddSym(h, inf.rest)
		halfWidth, worth, ok := inf.expects(h)
		add(NextTest{What: c.what, Words: c.words, HalfWidth: halfWidth, Worth: worth}, ok)
	}
	if !a.Outside.logged() {
		add(NextTest{What: "logged", Words: "log what acts: no narrower, since a fit goes by the input, but it can then be checked by the outside signal alone", HalfWidth: inf.halves[0], Worth: 1}, true)
	}
	slices.SortStableFunc(inf.NextTests, func(a, b NextTest) int { return cmp.Compare(b.Worth, a.Worth) })
}

// weighReference weighs random steps of a reference that rests: no larger than the spec's step, and such that the kick of a step
// leaves the input within its limits.
func (inf *Informative) weighReference(a *AuditReport, rig *data.Rig, free room, add func(NextTest, bool), unit func(float64, string) string, heldFor func(int) string) {
	g := newSlopes(inf.model, inf.law)
	most, mostBy := math.Inf(1), ""
	if rig.Spec != nil && rig.Spec.Step > 0 {
		most = rig.Spec.Step / 2
	}
	if l := rig.Limits.Input; l != nil {
		kick := 2 * largest(g, 2*len(inf.slopes)) // from the lower level to the upper one
		margin := math.Min(l[1]-a.OperatingPoint.Input, a.OperatingPoint.Input-l[0]) - reach*a.Spread.Input
		if s := margin / kick; !(s > 0) {
			return
		} else if s < most {
			most, mostBy = s, "the input's limits"
		}
	}
	var best NextTest
	for _, hold := range holds {
		if hold*fewHolds > inf.rows {
			break
		}
		if hold < slowSteps {
			continue
		}
		levels := func(k int) float64 {
			return inf.binary(k, hold) * inf.slopes[k].fromOutside * square(g.p.Eval(cmplx.Exp(complex(0, -inf.omega(k)))))
		}
		input, output := inf.motion(levels)
		s, by := free.scale(input, output, most*most)
		if by == "" {
			by = mostBy
		}
		if h, worth, ok := inf.plus(s, inf.information(levels)); ok && worth > best.Worth {
			best = NextTest{What: "reference", Words: fmt.Sprintf("step the reference at random between ± %s about its level, %s", unit(math.Sqrt(s), rig.Units.Output), heldFor(hold)),
				HalfWidth: h, Worth: worth, HeldBy: by, Size: math.Sqrt(s), Hold: hold}
		}
	}
	add(best, best.Worth > noWorth)
}

// largest is the largest response of the input to a unit step of the reference: u = -P A/(A Q - B P) r by its frequency response on a
// circle of so many points, since a law that is found in a log may have factors in both P and Q, of any size, and is not run.
func largest(g *slopes, points int) float64 {
	fft := fourier.NewFFT(points)
	c := make([]complex128, points/2+1)
	for k := range c {
		x := cmplx.Exp(complex(0, -2*math.Pi*float64(k)/float64(points)))
		a, p := g.a.Eval(x), g.p.Eval(x)
		c[k] = p * a / (a*g.q.Eval(x) - g.b.Eval(x)*p) / complex(float64(points), 0)
	}
	var sum, most float64
	for _, v := range fft.Sequence(nil, c) {
		sum += v
		most = math.Max(most, math.Abs(sum))
	}
	return most
}

// most tells in a clause the change that brings most; empty where none brings much.
func (inf *Informative) most() string {
	if inf == nil || len(inf.NextTests) == 0 || inf.NextTests[0].Worth < littleWorth {
		return ""
	}
	c := inf.NextTests[0]
	return fmt.Sprintf("; of single changes at the next test this would help most: %s (the rightmost pole within ± %s rad/s instead of ± %s)", c.Words, three(c.HalfWidth), three(inf.halves[0]))
}

// largestStep is the largest move of the input from row to row.
func largestStep(exps []*data.Experiment) (step float64) {
	for _, e := range exps {
		for _, s := range e.Segments {
			for k := 1; k < len(s.U); k++ {
				step = math.Max(step, math.Abs(s.U[k]-s.U[k-1]))
			}
		}
	}
	return step
}

// levelRows is the number of rows for which a dither of two levels holds each at the least; 0 where it has more levels.
func levelRows(exps []*data.Experiment) int {
	levels := map[float64]bool{}
	least := math.MaxInt
	for _, e := range exps {
		for _, s := range e.Segments {
			run, whole := 0, false // the first level of a segment began before it
			for k, d := range s.D {
				levels[d] = true
				if len(levels) > 2 {
					return 0
				}
				if k > 0 && d != s.D[k-1] {
					if whole {
						least = min(least, run)
					}
					run, whole = 0, true
				}
				run++
			}
		}
	}
	if len(levels) < 2 || least == math.MaxInt {
		return 0
	}
	return least
}
