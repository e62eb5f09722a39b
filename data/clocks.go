package data

import (
	"fmt"
	"math"
	"math/cmplx"
	"strings"

	"gonum.org/v1/gonum/dsp/fourier"
)

// maxSkew is the largest difference of two clocks that is looked for or undone: it moves the input by two rows within
// the shortest segment.
const maxSkew = 0.02

// slip returns by how many rows the input of row k has run ahead of its output, to the nearest one.
func (l *log) slip(k int) int {
	elapsed := float64(k)
	if l.time >= 0 && !math.IsNaN(l.columns[l.time][k]) {
		elapsed = (l.columns[l.time][k] - l.columns[l.time][0]) / l.period
	}
	return int(math.Round(l.rig.Log.ClockSkew * elapsed))
}

// undoSkew moves the rows of the input and of the dither, which is a part of it, as [log] clock_skew says. Where the move
// grows by a row a segment starts; rows whose input lies beyond a gap or the ends of the log are not used.
func (l *log) undoSkew() {
	if l.rig.Log.ClockSkew == 0 {
		return
	}
	breaks := make([]int, l.rows+1) // up to and with row k-1
	for k, d := range l.dropped {
		breaks[k+1] = breaks[k] + int(d&startsSegment)
	}
	moved := make([][]float64, 0, 2)
	for _, i := range []int{l.u, l.d} {
		if i >= 0 {
			moved = append(moved, make([]float64, l.rows))
		}
	}
	lost, last, slips, first := 0, 0, 0, 0
	for k := range l.rows {
		s := l.slip(k)
		if s != last {
			if slips == 0 {
				first = k
			}
			slips++
			l.dropped[k] |= startsSegment
			last = s
		}
		from := k + s
		if from < 0 || from >= l.rows || breaks[max(k, from)+1] != breaks[min(k, from)+1] {
			l.dropped[k] |= isMissingRow
			lost++
			from = k
		}
		moved[0][k] = l.columns[l.u][from]
		if l.d >= 0 {
			moved[1][k] = l.columns[l.d][from]
		}
	}
	l.columns[l.u] = moved[0]
	if l.d >= 0 {
		l.columns[l.d] = moved[1]
	}
	if slips > 0 {
		l.flaw(Flaw{Name: FlawSkew, Column: l.column(l.u), Count: slips, Line: l.lines.at(first),
			Detail: fmt.Sprintf("[log] clock_skew %s moves the input by %s over the log", number(l.rig.Log.ClockSkew), plural(abs(last), "row", "rows")),
			Effect: fmt.Sprintf("moved as asked; a new segment starts at each row of it, %s not used", plural(lost, "row", "rows"))})
	}
}

func abs(i int) int { return max(i, -i) }

// compareClocks says by how much the clocks of input and output run apart: by the columns themselves, and by the stamps
// of the input where it has its own.
func (l *log) compareClocks() {
	if l.tu >= 0 {
		if offset, rate, sd, ok := l.stampSkew(); ok && (math.Abs(rate) > 5*sd || math.Abs(offset) > regularStep*l.period) {
			l.flaw(Flaw{Name: FlawSkew, Column: l.column(l.tu), Count: 1, Line: l.lines.at(0),
				Detail: fmt.Sprintf("the stamps of the input lie %s s after those of the output at first and run fast by %s, %.2g rows over the log",
					number(offset), parts(rate), math.Abs(rate)*float64(l.rows)),
				Effect: "used as paired; whether rows run apart, and not only stamps, the columns themselves tell"})
		}
	}
	if s, ok := l.slippage(); ok {
		l.flaw(Flaw{Name: FlawClocks, Column: l.column(l.u), Count: 1, Line: l.lines.at(0),
			Detail: fmt.Sprintf("against the output the input runs ahead by %.2g ± %.1g rows over the log, %s", s.rows, s.sd, parts(s.rate)),
			Effect: fmt.Sprintf("used as paired, which blurs the delay; [log] clock_skew = %s undoes it", number(l.rig.Log.ClockSkew+s.rate))})
	}
}

// parts writes a skew.
func parts(rate float64) string { return fmt.Sprintf("%.0f parts in a million", 1e6*rate) }

// stampSkew fits a line to the stamps of the input less those of the output: offset at the first row in s, rate, and
// its standard deviation.
func (l *log) stampSkew() (offset, rate, sd float64, ok bool) {
	t, tu := l.columns[l.time], l.columns[l.tu]
	a, b := &l.clocks[0], &l.clocks[1]
	apart := 0.0 // of what was taken off the stamps
	if a.iso == b.iso && a.scale == b.scale {
		apart = float64(b.base-a.base) * a.scale
	}
	var n, st, sd1 float64
	for k := range t {
		if d := tu[k] - t[k]; !math.IsNaN(d) {
			n, st, sd1 = n+1, st+t[k], sd1+d
		}
	}
	if n < MinSegment {
		return 0, 0, 0, false
	}
	mt, md := st/n, sd1/n
	var stt, std, sdd float64
	for k := range t {
		if d := tu[k] - t[k]; !math.IsNaN(d) {
			stt += (t[k] - mt) * (t[k] - mt)
			std += (t[k] - mt) * (d - md)
			sdd += (d - md) * (d - md)
		}
	}
	rate = std / stt
	sd = math.Sqrt(math.Max(0, sdd-rate*std) / (n - 2) / stt)
	return md + rate*(t[0]-mt) + apart, rate, sd, stt > 0 && !math.IsInf(rate, 0)
}

// A slippage is what the columns show of two clocks: the skew, and the rows that it makes over the log.
type slippage struct{ rate, rows, sd float64 }

// slippage looks for a lag of the output behind the input that changes in proportion to time, by cross-correlation.
//
// With the input's clock fast by the part s, the cross spectrum of a piece of the log about row k is turned by
// e^{i w s k} (C. H. Knapp & G. C. Carter, "The generalized correlation method for estimation of time delay", IEEE Trans.
// ASSP 24(4), 1976, 320-327). Turned back by the right s the pieces add up to the largest coherence; the logarithm of the
// likelihood of Gaussian columns is -K sum log(1 - coherence), K independent pieces at each frequency (their eq. 26 ff.;
// G. C. Carter, "Coherence and time delay estimation", Proc. IEEE 75(2), 1987, 236-255). No plant and no law is assumed,
// but that they do not change.
//
// It is said where the columns are coherent beyond doubt, where twice the logarithm of the likelihood ratio, a chi-square of
// one degree by chance, exceeds 60, and where the rows move by a fifth of one at least. A slip of one row in 4000 reaches 119
// to 1078 on the demo rigs, none at most 2.
func (l *log) slippage() (slippage, bool) {
	const (
		size    = 128     // rows of a piece
		blocks  = 32      // of them, in each of which the pieces are added unturned
		most    = 1 << 16 // rows looked at, the first: clocks run apart evenly
		fewest  = 2000
		surely  = 60
		related = 3 * (size/2 - 2) // incoherent columns reach a third of that on average, one likelihood a frequency
		atLeast = 0.2
	)
	var recs [][2]int
	total := 0
	l.runs(func(from, to int) {
		if to = min(to, from+most-total); to-from >= size {
			recs = append(recs, [2]int{from, to})
			total += to - from
		}
	})
	if total < fewest {
		return slippage{}, false
	}
	first, last := recs[0][0], recs[len(recs)-1][1]
	span := float64(last - first)
	type block struct {
		cross  []complex128
		at     float64 // row of its middle, less the log's
		pieces int
	}
	sum := make([]block, blocks)
	for i := range sum {
		sum[i].cross = make([]complex128, size/2)
	}
	pu, py := make([]float64, size/2), make([]float64, size/2)
	fft := fourier.NewFFT(size)
	hann := window(size)
	bu, by := make([]complex128, size/2+1), make([]complex128, size/2+1)
	piece := make([]float64, size)
	spectrum := func(dst []complex128, x []float64) {
		m := mean(x)
		for i, v := range x {
			piece[i] = (v - m) * hann[i]
		}
		fft.Coefficients(dst, piece)
	}
	pieces := 0
	for _, r := range recs {
		for k := r[0]; k+size <= r[1]; k += size / 2 {
			spectrum(bu, l.columns[l.u][k:k+size])
			spectrum(by, l.columns[l.y][k:k+size])
			middle := float64(k+size/2-first) - span/2
			b := &sum[min(blocks-1, int((middle/span+0.5)*blocks))]
			b.at += middle
			b.pieces++
			pieces++
			for j := 1; j < size/2; j++ {
				u, y := bu[j], by[j]
				b.cross[j] += cmplx.Conj(u) * y
				pu[j] += real(u)*real(u) + imag(u)*imag(u)
				py[j] += real(y)*real(y) + imag(y)*imag(y)
			}
		}
	}
	for i := range sum {
		if n := sum[i].pieces; n > 0 {
			sum[i].at /= float64(n)
		}
	}
	weight := float64(pieces) / 2 // independent pieces, half overlapped
	// likelihood of the skew that moves the rows by x over the span
	turned := make([]complex128, size/2)
	likelihood := func(x float64) float64 {
		clear(turned)
		for i := range sum {
			sin, cos := math.Sincos(-2 * math.Pi / size * x * sum[i].at / span)
			step, turn := complex(cos, sin), complex(1, 0)
			for j, c := range sum[i].cross {
				turned[j] += c * turn
				turn *= step
			}
		}
		out := 0.0
		for j := 2; j < size/2; j++ { // the lowest frequency holds drifts
			if c := turned[j]; pu[j] > 0 && py[j] > 0 {
				out -= weight * math.Log1p(-math.Min(0.999, (real(c)*real(c)+imag(c)*imag(c))/(pu[j]*py[j])))
			}
		}
		return out
	}
	// Within a block, the move must stay within some rows.
	reach := math.Min(2*blocks, maxSkew*span)
	const step = 0.5
	best, at := likelihood(0), 0.0
	none := best
	for x := step; x <= reach; x += step {
		for _, v := range []float64{x, -x} {
			if f := likelihood(v); f > best {
				best, at = f, v
			}
		}
	}
	h := step
	for range 12 { // parabola through three points, halving
		a, b := likelihood(at-h), likelihood(at+h)
		if a > best || b > best {
			if a > b {
				at, best = at-h, a
			} else {
				at, best = at+h, b
			}
			continue
		}
		if bend := 2*best - a - b; bend > 0 {
			if v := at + h*(b-a)/(2*bend); v != at {
				if f := likelihood(v); f > best {
					at, best = v, f
				}
			}
		}
		h /= 2
	}
	h = 0.05
	bend := (2*best - likelihood(at-h) - likelihood(at+h)) / (h * h)
	if best < related || 2*(best-none) < surely || math.Abs(at) < atLeast || !(bend > 0) {
		return slippage{}, false
	}
	over := float64(l.rows) / span
	return slippage{rate: at / span, rows: over * at, sd: over / math.Sqrt(bend)}, true
}

func mean(x []float64) float64 {
	s := 0.0
	for _, v := range x {
		s += v
	}
	return s / float64(len(x))
}

// window returns Hann's window of n rows.
func window(n int) []float64 {
	w := make([]float64, n)
	for i := range w {
		w[i] = 0.5 - 0.5*math.Cos(2*math.Pi*(float64(i)+0.5)/float64(n))
	}
	return w
}

// findSlowTelemetry names a log whose rows come slower than the loop that ran.
func (l *log) findSlowTelemetry() {
	ran := l.rig.Log.ControllerPeriod
	if ran == 0 || l.period < 1.5*ran {
		return
	}
	detail := fmt.Sprintf("a row every %s s, but the loop ran every %s s ([log] controller_period): the input moved %.0f times a row", number(l.period), number(ran), l.period/ran)
	effect := "used as if the input had been held for a row, which moves delay and fast poles"
	input := l.column(l.u)
	for _, n := range l.names {
		low := strings.ToLower(n)
		if n != input && strings.Contains(low, strings.ToLower(input)) && (strings.Contains(low, "mean") || strings.Contains(low, "avg") || strings.Contains(low, "average")) {
			effect += fmt.Sprintf("; column %s, its mean over a row, could serve as input", quote(n))
		}
	}
	l.flaw(Flaw{Name: FlawTelemetry, Column: input, Count: l.rows, Line: l.lines.at(0), Detail: detail, Effect: effect})
}
