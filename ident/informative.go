package ident

import (
	"fmt"
	"math"
	"math/cmplx"
	"strconv"

	"gonum.org/v1/gonum/dsp/fourier"
	"gonum.org/v1/gonum/mat"

	"steadyrig/fit"
	"steadyrig/fit/lti"
)

// Informative says, before a model is chosen, how well the log will tell the
// plant's rightmost pole, which bands that comes from, and which it could come
// from.
type Informative struct {
	// Pole is the pole's real part, rad/s, as a glance has it, with the
	// deviation and interval to expect from a fit. Im, not negative, is its
	// imaginary part.
	Pole Estimate `json:"pole"`
	Im   float64  `json:"im"`
	// AtRest says that the pole may lie at zero. Relative is half the interval
	// over the size of the pole, or, where that may be zero, the reach of the interval
	// over the mean speed of the poles beyond it.
	AtRest   bool    `json:"at_rest"`
	Relative float64 `json:"relative"`
	Seconds  float64 `json:"seconds"` // of log in use
	// SecondsForTenth is how long a log with the same probe brings Relative to 0.1.
	SecondsForTenth float64 `json:"seconds_for_tenth"`
	// Noise is the share of what the log tells of the pole that rests on the
	// disturbance and the shape assumed for it; the bands hold the rest.
	Noise   float64 `json:"noise"`
	Bands   []Band  `json:"bands"`   // ascending and without gaps, from 0 to the Nyquist frequency
	Best    int     `json:"best"`    // index of the band in which more power helps most
	Lacking bool    `json:"lacking"` // it would be worth a log of lackWorth times the length
	Words   string  `json:"words"`
	Advice  string  `json:"advice"`
	// NextTests are this one with single changes, the one that narrows the pole's interval most first.
	NextTests []NextTest `json:"next_tests"`

	halves []float64 // half the interval, rad/s, in logs longStep^k times as long
	spectra
}

// spectra is what the covariance was predicted from, at the bins of a periodogram from the first above zero to Nyquist.
type spectra struct {
	model  *fit.Prediction
	law    *fit.ARX
	slopes []slope
	eta    []float64     // sum of squares of what acts from outside
	rest   *mat.SymDense // information that the disturbance brings
	all    *mat.SymDense // information in all
	rows   int
	power  float64 // sum of squares of the input from outside
	moved  float64 // sum of squares of the output, in all
}

// Band is a range of frequencies.
type Band struct {
	From        float64 `json:"from"`        // rad/s
	To          float64 `json:"to"`          // rad/s
	Power       float64 `json:"power"`       // share of the input's variance from outside
	Information float64 `json:"information"` // share of what the log tells of the pole
	// Added is how much more power, in units of all that there is, the band may
	// get from an even dither: as much again, or less where that would move the
	// output more than it moves now.
	Added float64 `json:"added"`
	// Worth says what that is good for: without it a log would have to be so
	// many times as long.
	Worth float64 `json:"worth"`
}

const (
	blockRows = 1 << 14 // transformed at once
	fewBins   = 8       // of the spectrum, below which bands are not told apart
	lackWorth = 4       // of added power, from which a band lacks it
	longStep  = 2       // between lengths of log that are looked at
	longSteps = 21      // of them
)

// informative predicts the covariance of the plant's parameters from spectra,
//
//	[Σ_ω Φ_u^r(ω)/Φ_v(ω) G_θ(ω) G_θ(ω)* + M]^-1,
//
// the sum over the frequencies of a periodogram. Φ_u^r is the part of the input's
// spectrum that comes from outside the loop, Φ_v the spectrum of the disturbance at
// the output, G_θ the gradient of the plant. M is what the disturbance itself tells
// in the loop through the shape assumed for it. It vanishes for a noise model that
// is free enough (Forssell & Ljung, Closed-loop identification revisited, Automatica
// 35 (1999) 1215-1241; Ljung, System Identification, 2nd ed. 1999, chapters 9 and
// 13); beside a probe worth the name it is a percent or so.
//
// f, a glance at the log, gives the plant B/A and the noise shape C/(A D). The
// law Q u = P y + η was found in the log; η is what acted from outside, logged or
// not, and moves the input by A/(A Q - B P) η. nil: the log is too short, or does
// not tell the parameters apart.
func informative(recs []fit.Record, f *fit.Prediction, law *fit.ARX) *Informative {
	eta, rows := periodogram(recs, law)
	if rows == 0 {
		return nil
	}
	bins := len(eta) - 1
	step := math.Pi / (float64(bins) * f.Period)
	bands := bandsBetween(lowest(recs, f.Period), math.Pi/f.Period)
	g := newSlopes(f, law)
	n := g.plant + g.noise
	told, could := make([]*mat.SymDense, len(bands)), make([]*mat.SymDense, len(bands))
	for i := range bands {
		told[i], could[i] = mat.NewSymDense(n, nil), mat.NewSymDense(n, nil)
	}
	sp := spectra{model: f, law: law, eta: eta[1:], rest: mat.NewSymDense(n, nil), all: mat.NewSymDense(n, nil), rows: rows}
	answer, swing := make([]float64, len(bands)), make([]float64, len(bands)) // of input and output to a flat dither
	at := 0
	for k := 1; k <= bins; k++ { // the constants take what is at rest
		w := float64(k) * step
		for at < len(bands)-1 && w > bands[at].To {
			at++
		}
		s := g.at(cmplx.Exp(complex(0, -w*f.Period)))
		move := eta[k] * s.fromOutside
		addSquare(told[at], move*s.overNoise, s.gain)
		addSquare(could[at], s.fromDither*s.overNoise, s.gain)
		addSquare(sp.rest, float64(rows)/float64(bins), s.errors)
		bands[at].Power += move
		sp.power += move
		answer[at] += s.fromDither
		swing[at] += s.fromDither * s.gainSquare
		s.errors = nil
		sp.slopes = append(sp.slopes, s)
	}
	sp.all.CopySym(sp.rest)
	for _, t := range told {
		sp.all.AddSym(sp.all, t)
	}
	cov := inverse(sp.all)
	if cov == nil {
		return nil
	}
	for _, r := range recs {
		sp.moved += about(r.Y)
	}
	inf := &Informative{Bands: bands, Seconds: float64(rows) * f.Period, Noise: 1, spectra: sp}
	along := inf.expect(f, cov)
	var x mat.VecDense
	x.MulVec(cov, along)
	variance := mat.Dot(along, &x)
	for i := range bands {
		b := &bands[i]
		b.Power /= sp.power
		b.Information = mat.Inner(&x, told[i], &x) / variance
		inf.Noise -= b.Information
		b.Added = math.Min(1, sp.moved*answer[i]/(sp.power*swing[i]))
		could[i].ScaleSym(b.Added*sp.power/answer[i], could[i])
		could[i].AddSym(could[i], sp.all)
		b.Worth = 1
		if c := inverse(could[i]); c != nil {
			if w := inf.longer(half(rootsOf(f, c))); w > 1 {
				b.Worth = w
			}
		}
		// In the lowest band a log has too few periods to ask for more.
		if i > 0 && (inf.Best == 0 || b.Worth > bands[inf.Best].Worth) {
			inf.Best = i
		}
	}
	best := bands[inf.Best].Worth
	if sum := inf.Pole.SD + inf.Relative + best; math.IsNaN(sum) || math.IsInf(sum, 0) {
		return nil
	}
	inf.Lacking = best >= lackWorth
	inf.say()
	return inf
}

// rootsOf are the plant's poles, the rightmost last, with what a covariance of its
// parameters makes of them.
func rootsOf(f *fit.Prediction, cov *mat.SymDense) []Root {
	plant := copyOf(f)
	plant.Cov = cov
	var m Model
	m.plant(plant)
	m.derive()
	return m.Poles
}

// half is half the width of the interval of the last root, rad/s.
func half(roots []Root) float64 {
	iv := roots[len(roots)-1].Re95
	return (iv.Hi - iv.Lo) / 2
}

// expect fills in what the covariance says of the rightmost pole, and returns
// the direction in which that pole lies among the parameters.
func (inf *Informative) expect(f *fit.Prediction, cov *mat.SymDense) *mat.VecDense {
	poles := rootsOf(f, cov)
	r := poles[len(poles)-1]
	inf.Pole, inf.Im = Estimate{r.Re, r.ReSD, r.Re95}, math.Abs(r.Im)
	reach, size := half(poles), math.Hypot(r.Re, r.Im)
	if inf.AtRest = r.Re95.Contains(0) && r.Im95.Contains(0); inf.AtRest {
		reach = max(-r.Re95.Lo, r.Re95.Hi, r.Im95.Hi)
		var logs, n float64
		for _, p := range poles {
			if speed := math.Hypot(p.Re, p.Im); speed > reach {
				logs += math.Log(speed)
				n++
			}
		}
		size = fastest / f.Period
		if n > 0 {
			size = math.Exp(logs / n)
		}
	}
	shrunk := mat.NewSymDense(cov.SymmetricDim(), nil)
	for k := range longSteps {
		shrunk.ScaleSym(math.Pow(longStep, -float64(k)), cov)
		inf.halves = append(inf.halves, half(rootsOf(f, shrunk)))
	}
	inf.Relative = reach / size
	inf.SecondsForTenth = inf.Seconds * inf.longer(0.1/inf.Relative*inf.halves[0])

	// A change δp of the denominator moves a simple root r by -δp(r)/p'(r). Two that
	// may have met reach as far as the λ with λ² about -δp(λ): the direction is
	// that at the end of the interval.
	at, slope := complex(r.Re, r.Im), f.Den.Deriv().Eval(complex(r.Re, r.Im))
	if r.Im95.Lo < 0 && r.Im95.Hi > 0 && inf.Im < inf.halves[0] {
		at, slope = complex(r.Re95.Hi, 0), 1
	}
	along := mat.NewVecDense(cov.SymmetricDim(), nil)
	change := -1 / slope
	for i := range f.Poles {
		along.SetVec(len(f.Num)+f.Poles-1-i, real(change))
		change *= at
	}
	return along
}

// longer says how many times as long a log with the same probe brings half the
// interval to so many rad/s. That of a simple pole goes with the inverse root of the
// length, that of two that may have met more slowly.
func (inf *Informative) longer(half float64) float64 {
	k := 1
	for k < len(inf.halves)-1 && inf.halves[k] > half {
		k++
	}
	slope := math.Log(longStep) / math.Log(inf.halves[k-1]/inf.halves[k])
	return math.Pow(longStep, float64(k-1)) * math.Pow(inf.halves[k-1]/half, slope)
}

// limit is the Relative above which a fit calls an interval wide, or does not
// believe in an integrator.
func (inf *Informative) limit() float64 {
	if inf.AtRest {
		return integratorSpan
	}
	return wide
}

// isWide reports whether the interval to expect is too wide to rest loops on.
func (inf *Informative) isWide() bool { return inf != nil && inf.Relative > inf.limit() }

// onShape reports whether the pole is told by the disturbance rather than by the
// probe. The shape assumed for it is the estimator's, not the rig's.
func (inf *Informative) onShape() bool { return inf != nil && inf.Noise > 0.5 }

// enough says how many times as long a log would not be wide.
func (inf *Informative) enough() float64 {
	return inf.longer(inf.limit() / inf.Relative * inf.halves[0])
}

// say puts it in words.
func (inf *Informative) say() {
	at, half := three(inf.Pole.Value), "within about ± "+three(inf.halves[0])+" rad/s"
	percent := " (" + three(100*inf.Relative) + " %)"
	switch {
	case inf.AtRest:
		inf.Words = fmt.Sprintf("the rightmost pole, near %s rad/s, will come out %s: it may lie at zero", at, half)
	case inf.Pole.Interval95.Hi < 0:
		inf.Words = fmt.Sprintf("no unstable pole is seen; the rightmost, near %s rad/s, will come out %s", at, half)
	case inf.Im > 0:
		inf.Words = fmt.Sprintf("the real part of the pair near %s ± %si rad/s will come out %s%s", at, three(inf.Im), half, percent)
		if inf.Pole.Interval95.Contains(0) {
			inf.Words += ": it may have either sign"
		}
	default:
		inf.Words = fmt.Sprintf("the unstable pole near %s rad/s will come out %s%s", at, half, percent)
	}
	if inf.Relative > 0.1 && !inf.AtRest {
		inf.Words += fmt.Sprintf("; ± 10 %% takes a log of %s s, this one has %s s", three(inf.SecondsForTenth), three(inf.Seconds))
	}
	if inf.onShape() {
		inf.Words += fmt.Sprintf("; %.0f %% of what tells it is the shape assumed for the disturbance, not the probe", 100*inf.Noise)
	}
	b := inf.Bands[inf.Best]
	more := "as much again"
	if b.Added < 0.995 {
		more = three(100*b.Added) + " % more"
	}
	worth := fmt.Sprintf("%s %% of the probe's power lies there, and %s put there would be worth a log %s times as long", three(100*b.Power), more, three(b.Worth))
	if b.Power < 1e-4 {
		worth = "next to none" + worth[len(three(100*b.Power)+" %"):]
	}
	if inf.Lacking {
		inf.Advice = fmt.Sprintf("the band between %s lacks power: %s", b.words(), worth)
	} else {
		inf.Advice = fmt.Sprintf("no band lacks it; the best place for more is between %s: %s", b.words(), worth)
	}
}

func (b Band) words() string {
	const turn = 2 * math.Pi
	return fmt.Sprintf("%s and %s rad/s (%s and %s Hz)", three(b.From), three(b.To), three(b.From/turn), three(b.To/turn))
}

// three writes a number to three digits, without an exponent.
func three(x float64) string {
	v, _ := strconv.ParseFloat(strconv.FormatFloat(x, 'g', 3, 64), 64)
	return strconv.FormatFloat(v, 'f', -1, 64)
}

// inverse returns that of an information matrix, nil where it is singular.
func inverse(h *mat.SymDense) *mat.SymDense {
	n := h.SymmetricDim()
	unit := mat.NewSymDense(n, nil)
	for i := range n {
		for j := i; j < n; j++ {
			unit.SetSym(i, j, h.At(i, j)/math.Sqrt(h.At(i, i)*h.At(j, j)))
		}
	}
	var chol mat.Cholesky
	if !chol.Factorize(unit) {
		return nil
	}
	inv := mat.NewSymDense(n, nil)
	if chol.InverseTo(inv) != nil {
		return nil
	}
	for i := range n {
		for j := i; j < n; j++ {
			inv.SetSym(i, j, inv.At(i, j)/math.Sqrt(h.At(i, i)*h.At(j, j)))
		}
	}
	return inv
}

// periodogram returns that of what acted from outside, at frequencies from 0 to
// Nyquist; it adds up to the sum of squares. rows is how many there are, 0 where
// they are too few.
//
// The signal is whitened first, and its periodogram coloured again: the weights
// that information puts on frequencies spread over many powers of ten, and a
// strong band would leak into weak ones that count (Blackman & Tukey, The
// measurement of power spectra, Dover 1958, on prewhitening).
func periodogram(recs []fit.Record, law *fit.ARX) (power []float64, rows int) {
	flipped := make([]fit.Record, len(recs))
	for i, r := range recs {
		flipped[i] = fit.Record{U: r.Y, Y: r.U}
	}
	var eta []fit.Record
	for _, x := range law.Residuals(flipped) {
		eta = append(eta, fit.Record{U: x, Y: x})
	}
	white, _ := fit.FitARX(eta, fit.ARXOptions{NA: lawOrder})
	if white == nil {
		return nil, 0
	}
	x := white.Residuals(eta)
	n := 8
	for _, v := range x {
		rows += len(v)
		for n < min(len(v), blockRows) {
			n *= 2
		}
	}
	power = squares(x, n)
	for k := range power {
		power[k] /= square(lti.Poly(white.A).Eval(cmplx.Exp(complex(0, -2*math.Pi*float64(k)/float64(n)))))
	}
	return power, rows
}

// squares spreads the sum of squares of x, taken n rows at once, over the frequencies from 0 to Nyquist.
func squares(x [][]float64, n int) []float64 {
	fft := fourier.NewFFT(n)
	power, work := make([]float64, n/2+1), make([]float64, n)
	var c []complex128
	for _, v := range x {
		for len(v) > 0 {
			clear(work[copy(work, v):])
			v = v[min(len(v), n):]
			c = fft.Coefficients(c, work)
			for k, z := range c {
				power[k] += square(z)
			}
		}
	}
	for k := range power {
		power[k] *= 2 / float64(n)
	}
	power[0] /= 2
	power[n/2] /= 2
	return power
}

func square(x complex128) float64 { return real(x)*real(x) + imag(x)*imag(x) }

// slopes holds a model and the law as polynomials in z^-1, and the derivatives
// of the plant along the parameters of a Prediction.
type slopes struct {
	a, b, c, d   lti.Poly
	p, q         lti.Poly
	da, db       []lti.Poly
	plant, noise int // parameters
	variance     float64
}

// slope is what slopes come to at one frequency.
type slope struct {
	gain        []complex128 // G_θ
	errors      []complex128 // derivatives of the prediction errors over these, without outside signals
	overNoise   float64      // 1/Φ_v
	gainSquare  float64      // |G|²
	fromOutside float64      // |u/η|²
	fromDither  float64      // |u/d|², d added to the input
}

func newSlopes(f *fit.Prediction, law *fit.ARX) *slopes {
	d := lti.SampleDelta(f.Num, f.Den, f.Delay, f.Period)
	late := func(rows int, p []float64) lti.Poly { return append(make(lti.Poly, max(0, rows)), p...) }
	g := &slopes{
		a: late(-d.Whole, lti.Shift(nil, d.A)), b: late(d.Whole, lti.ShiftInput(d.B0, d.B1)), c: f.C, d: f.D, p: law.B, q: law.A,
		plant: len(f.Num) + f.Poles, noise: len(f.D) + len(f.C) - 2, variance: f.Variance,
	}
	if f.FreeDelay {
		g.plant++
	}
	for k := range g.plant {
		g.da = append(g.da, late(-d.Whole, lti.Shift(nil, d.DA[k])))
		g.db = append(g.db, late(d.Whole, lti.ShiftInput(d.DB0[k], d.DB1[k])))
	}
	return g
}

// at evaluates at z^-1 = x. The prediction errors are e = D (A y - B u)/C, so that
// by the law the derivatives are (δA Q - δB P)/(A Q - B P) e, δD/D e and -δC/C e, but
// for what outside signals bring.
func (g *slopes) at(x complex128) slope {
	a, b, c, d, p, q := g.a.Eval(x), g.b.Eval(x), g.c.Eval(x), g.d.Eval(x), g.p.Eval(x), g.q.Eval(x)
	loop := a*q - b*p
	s := slope{overNoise: square(a*d/c) / g.variance, gainSquare: square(b / a), fromOutside: square(a / loop), fromDither: square(a * q / loop)}
	for k := range g.plant {
		da, db := g.da[k].Eval(x), g.db[k].Eval(x)
		s.gain = append(s.gain, (db*a-b*da)/(a*a))
		s.errors = append(s.errors, (da*q-db*p)/loop)
	}
	for _, part := range []struct {
		of     complex128
		degree int
	}{{d, len(g.d) - 1}, {-c, len(g.c) - 1}} {
		// In powers of δ = q - 1, which are told apart better than those of q.
		power := x
		for range part.degree - 1 {
			power *= 1 - x
		}
		for range part.degree {
			s.errors = append(s.errors, power/part.of)
			power *= x / (1 - x)
		}
	}
	return s
}

// addSquare adds the real part of weight g g*.
func addSquare(dst *mat.SymDense, weight float64, g []complex128) {
	raw := dst.RawSymmetric()
	for i, a := range g {
		row := raw.Data[i*raw.Stride:]
		for j := i; j < len(g); j++ {
			row[j] += weight * (real(a)*real(g[j]) + imag(a)*imag(g[j]))
		}
	}
}

// bandsBetween cuts the frequencies up to top, rad/s, at 1, 2 and 5 times powers of
// ten, from low on.
func bandsBetween(low, top float64) []Band {
	edges := []float64{0}
	for e := math.Floor(math.Log10(low)); ; e++ {
		for _, m := range []float64{1, 2, 5} {
			w := m * math.Pow(10, e)
			if w > 0.8*top {
				var bands []Band
				for i, to := range append(edges[1:], top) {
					bands = append(bands, Band{From: edges[i], To: to})
				}
				return bands
			}
			if w >= low {
				edges = append(edges, w)
			}
		}
	}
}
