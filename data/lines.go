package data

import (
	"fmt"
	"math"
	"math/bits"
	"slices"

	"gonum.org/v1/gonum/dsp/fourier"
	"gonum.org/v1/gonum/floats"
)

// longestStretch returns [from, to) of the longest stretch of rows in use, at most so many rows of it and a number of them
// that is quickly transformed, 4 to 7 times a power of two; to is from where it is shorter than fewest.
func (l *log) longestStretch(fewest, most int) (from, to int) {
	l.runs(func(a, b int) {
		if b-a > to-from {
			from, to = a, b
		}
	})
	if to-from < fewest {
		return from, from
	}
	n := min(to-from, most)
	shift := max(0, bits.Len(uint(n))-3)
	return from, from + n>>shift<<shift
}

// periodogram returns that of x less its straight line under Hann's window, frequencies 0 to half of the rows' rate.
func periodogram(x []float64) []float64 {
	n := len(x)
	w := window(n)
	tapered := make([]float64, n)
	a, b := straight(x)
	for k, v := range x {
		tapered[k] = (v - a - b*float64(k)) * w[k]
	}
	p := make([]float64, n/2+1)
	for j, c := range fourier.NewFFT(n).Coefficients(nil, tapered) {
		p[j] = real(c)*real(c) + imag(c)*imag(c)
	}
	return p
}

// straight fits a + b k to x by least squares.
func straight(x []float64) (a, b float64) {
	n := float64(len(x))
	var sx, skx float64
	for k, v := range x {
		sx += v
		skx += (float64(k) - (n-1)/2) * v
	}
	b = skx * 12 / (n * (n*n - 1))
	return sx/n - b*(n-1)/2, b
}

// around is how many frequencies on each side of a line, less the lineWidth nearest to it, tell what it stands out of.
const (
	around    = 8
	lineWidth = 2
)

// standsOut returns p[j] over the mean of its neighbours: for a smooth spectrum F-distributed with 2 and 2m degrees, so
// that it exceeds x with probability (1 + x/m)^-m, m neighbours (D. B. Percival & A. T. Walden, Spectral Analysis for
// Physical Applications, Cambridge 1993, sec. 10.9 on tests for lines over a coloured background).
func standsOut(p []float64, j int) (ratio float64, m int) {
	sum := 0.0
	for i := max(1, j-around); i <= min(len(p)-1, j+around); i++ {
		if i < j-lineWidth || i > j+lineWidth {
			sum += p[i]
			m++
		}
	}
	if sum == 0 || m == 0 {
		return 0, m
	}
	return p[j] / (sum / float64(m)), m
}

// A peak is a frequency at which a spectrum stands out.
type peak struct{ hz, amplitude float64 }

// peaks returns those of the periodogram p of the output in rows [from, to), but for those that reference or dither have,
// too. A false one shows in a log in a million.
func (l *log) peaks(p []float64, from, to int) []peak {
	const alarm = 1e-6
	var outside [][]float64
	for _, c := range []int{l.r, l.d} {
		if c >= 0 {
			outside = append(outside, periodogram(l.columns[c][from:to]))
		}
	}
	var out []peak
	for j := around; j < len(p)-1; j++ {
		if p[j] < p[j-1] || p[j] < p[j+1] {
			continue
		}
		ratio, m := standsOut(p, j)
		if float64(m)*math.Log1p(ratio/float64(m)) < math.Log(float64(len(p))/alarm) {
			continue
		}
		const little = 20 // a line that comes from outside stands out there at least as much as here; chance, once in 100 000 times
		if slices.ContainsFunc(outside, func(q []float64) bool {
			for k := j - 1; k <= j+1; k++ {
				if ratio, _ := standsOut(q, k); ratio > little {
					return true
				}
			}
			return false
		}) {
			continue
		}
		// Hann's main lobe in logarithms is nearly a parabola.
		a, b, c := math.Log(p[j-1]), math.Log(p[j]), math.Log(p[j+1])
		shift := 0.0
		if bend := a - 2*b + c; bend < 0 {
			shift = (a - c) / (2 * bend)
		}
		at := float64(j) + shift
		n := float64(to - from)
		// A sine of amplitude A has p = (A n/4)² at its frequency.
		out = append(out, peak{hz: at / (n * l.period), amplitude: 4 * math.Sqrt(p[j]) / n})
	}
	return out
}

// findLines looks for what swings at one frequency without an outside signal that does: the loop itself, where the line
// is a good part of the output, else a hum, which may have been folded from above half of the rows' rate; and for power
// that grows towards that.
func (l *log) findLines() {
	const (
		fewest  = 1024
		most    = 1 << 16
		few     = 3     // lines; more are those of a periodic probe
		mains   = 0.002 // its frequency's tolerance
		highest = 3     // harmonic of the mains that is thought of
		swing   = 0.3   // of the variance of the output, from which on it is the loop
	)
	from, to := l.longestStretch(fewest, most)
	if from == to {
		return
	}
	name := l.column(l.y)
	p := periodogram(l.columns[l.y][from:to])
	lines := l.peaks(p, from, to)
	rate := 1 / l.period
	bin := rate / float64(to-from)
	if len(lines) > few {
		lines = nil
	}
	var all spread
	for _, v := range l.columns[l.y][from:to] {
		all.add(v)
	}
	cycle := false
	for _, line := range lines {
		if part := line.amplitude * line.amplitude / 2 / (all.sd() * all.sd()); part > swing {
			cycle = true
			l.cycle(from, to, line.hz, line.amplitude, part)
			continue
		}
		what, alias := "no logged signal has it", false
		for _, grid := range []float64{50, 60} {
			for h := 1.0; h <= highest; h++ {
				f := h * grid
				folded := math.Abs(f - rate*math.Round(f*l.period))
				if math.Abs(folded-line.hz) > mains*f+bin {
					continue
				}
				if f < rate/2 {
					what, alias = fmt.Sprintf("mains, %g Hz", f), false
				} else if what == "no logged signal has it" {
					what, alias = fmt.Sprintf("%g Hz mains shows there in rows %s s apart", f, number(l.period)), true
				}
			}
		}
		f := Flaw{Name: FlawPeriodic, Column: name, Count: 1, Line: l.lines.at(from),
			Detail: fmt.Sprintf("a line of amplitude %s at %s Hz: %s", number3(line.amplitude), number3(line.hz), what),
			Effect: "used; the disturbance is fitted without lines, so that the test for whiteness may fail"}
		if alias {
			f.Name = FlawAlias
		}
		l.flaw(f)
	}
	l.findRise(p, from)
	if !cycle {
		l.findCycle(p, from, to)
	}
}

// cycle says that the loop swings by itself.
func (l *log) cycle(from, to int, hz, amplitude, part float64) {
	l.flaw(Flaw{Name: FlawCycle, Column: l.column(l.y), Count: int(float64(to-from) * l.period * hz), Line: l.lines.at(from),
		Detail: fmt.Sprintf("swings at %s Hz with an even amplitude of about %s, %.0f %% of its variance; no logged signal does: the loop hunts by itself, or a periodic signal acts that is not logged",
			number3(hz), number3(amplitude), 100*part),
		Effect: "used; a linear plant has no such cycle, and its amplitude is what sets the apparent gain"})
}

// findRise looks for a spectrum that grows towards half of the rows' rate, which a plant of more poles than zeros under
// white noise of the sensor cannot have: what moves faster is folded onto it, or the loop rings from row to row.
func (l *log) findRise(p []float64, from int) {
	const times = 2 // the density over the upper half, below the top eighth
	n := len(p)
	density := func(lo, hi int) float64 { return mean(p[lo:hi]) }
	top, below := density(n*7/8, n), density(n/2, n*3/4)
	if top < times*below {
		return
	}
	l.flaw(Flaw{Name: FlawAlias, Column: l.column(l.y), Count: 1, Line: l.lines.at(from),
		Detail: fmt.Sprintf("the output's power grows by %.2g times towards %s Hz, half of the rows' rate: faster motion is folded there, or the loop rings from row to row",
			top/below, number(0.5/l.period)),
		Effect: "used as if nothing moved between rows"})
}

// findCycle looks for a loop that swings by itself at one amplitude but not so evenly that it shows as a line: half and
// more of the output's power p in the half octave about one frequency, in which no outside signal has much, and an
// envelope too even for noise. The squared envelope A² of Gaussian noise in a band is exponential, E A⁴ = 2 (E A²)², that
// of a sine constant, E A⁴ = (E A²)²: the kurtosis of 3 or 1.5 by which lines are told from resonances (N.-J. Jacobsen, P.
// Andersen & R. Brincker, "Eliminating the influence of harmonic components in operational modal analysis", Proc. IMAC
// XXV, 2007). With n independent values the first ratio scatters by 2/sqrt(n).
func (l *log) findCycle(p []float64, from, to int) {
	const (
		lower     = 0.7
		upper     = 1.4
		share     = 0.5
		even      = 1.4
		envelopes = 80 // independent values at the least: 2 less 1.4 is 2.7 times their scatter
	)
	n := to - from
	j := 1
	for i := range p {
		if p[i]*float64(i) > p[j]*float64(j) { // power per octave
			j = i
		}
	}
	lo, hi := int(lower*float64(j)), min(int(upper*float64(j))+1, len(p))
	inBand := func(p []float64) float64 {
		if all := floats.Sum(p[1:]); all > 0 {
			return floats.Sum(p[lo:hi]) / all
		}
		return 0
	}
	if lo < 1 || hi-lo < envelopes || inBand(p) < share {
		return
	}
	for _, c := range []int{l.r, l.d} {
		if c >= 0 && inBand(periodogram(l.columns[c][from:to])) > share/2 {
			return
		}
	}
	y := l.columns[l.y][from:to]
	a, b := straight(y)
	x := make([]complex128, n)
	for k, v := range y {
		x[k] = complex(v-a-b*float64(k), 0)
	}
	fft := fourier.NewCmplxFFT(n)
	c := fft.Coefficients(nil, x)
	clear(c[:lo])
	clear(c[hi:])
	square, fourth := 0.0, 0.0
	for _, v := range fft.Sequence(x, c) {
		e := real(v)*real(v) + imag(v)*imag(v)
		square += e
		fourth += e * e
	}
	if fourth*float64(n) > even*square*square {
		return
	}
	l.cycle(from, to, float64(j)/(float64(n)*l.period), 2*math.Sqrt(square/float64(n))/float64(n), inBand(p))
}
