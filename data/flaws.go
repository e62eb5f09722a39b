package data

import (
	"context"
	"fmt"
	"math"
	"slices"
)

// findFlaws looks at each column and marks the rows that a fit should not use.
func (l *log) findFlaws(ctx context.Context) error {
	steps := []func(){l.findMissing, l.findLimits, l.findTrips, l.findStuck, l.findRest, l.findSpikes}
	for _, i := range []int{l.u, l.y} {
		steps = append(steps, func() { l.findQuantisation(i) }, func() { l.findDrift(i) })
	}
	steps = append(steps, l.findConstant, l.findSlowTelemetry, l.compareClocks, l.findLines, func() {
		if !l.has(FlawClocks) { // which would pass for play
			l.findActuator()
		}
	})
	for _, step := range steps {
		if err := ctx.Err(); err != nil {
			return err
		}
		step()
	}
	return nil
}

// findConstant names a dither that never moves, and a reference that does not where there is no dither that does.
func (l *log) findConstant() {
	dithered := l.d >= 0 && moves(l.columns[l.d])
	for _, i := range []int{l.r, l.d} {
		if i < 0 || dithered || moves(l.columns[i]) {
			continue
		}
		l.flaw(Flaw{Name: FlawConstant, Column: l.column(i), Count: l.rows, Line: l.lines.at(0), Detail: "the same number in every row",
			Effect: "it excites nothing"})
	}
}

// findMissing marks rows with a cell without a number in any column used.
func (l *log) findMissing() {
	for i, c := range l.columns {
		count, first := 0, 0
		for k, x := range c {
			if math.IsNaN(x) {
				if count == 0 {
					first = l.lines.at(k)
				}
				count++
				l.dropped[k] |= isMissingRow
			}
		}
		if count > 0 {
			l.flaw(Flaw{Name: FlawMissing, Column: l.column(i), Count: count, Line: first, Detail: "empty, NaN or infinite",
				Effect: "a segment ends there; nothing is interpolated"})
		}
	}
}

// limitSlack is how near to a limit, as a fraction of the range, the input counts as flat at it.
const limitSlack = 1e-3

// findLimits looks for an input flat at its limits, beyond them, or faster than its rate, and clips it to its limits.
func (l *log) findLimits() {
	u := l.columns[l.u]
	name := l.column(l.u)
	if lim := l.rig.Limits.Input; lim != nil {
		slack := limitSlack * (lim[1] - lim[0])
		beyond, beyondFirst := 0, 0
		far := 0.0
		low, high, first := 0, 0, 0
		for k, x := range u {
			switch {
			case x > lim[1]+slack || x < lim[0]-slack:
				if beyond == 0 {
					beyondFirst = l.lines.at(k)
				}
				beyond++
				far = max(far, x-lim[1], lim[0]-x)
				u[k] = min(max(x, lim[0]), lim[1])
				continue
			case x >= lim[1]-slack:
				high++
			case x <= lim[0]+slack:
				low++
			default:
				continue
			}
			if first == 0 {
				first = l.lines.at(k)
			}
		}
		// To leave out such rows would bias a fit: in closed loop they are those of the largest disturbances.
		l.clipped = beyond
		if beyond > 0 {
			l.flaw(Flaw{Name: FlawBeyond, Column: name, Count: beyond, Line: beyondFirst,
				Detail: fmt.Sprintf("up to %s past [limits] input [%s, %s]: logged before its limits, or the limits are wrong", number(far), number(lim[0]), number(lim[1])),
				Effect: "clipped to the limits, past which the actuator was not told to go"})
		}
		l.saturated(name, low, high, first, lim[0], lim[1])
	}
	if lim := l.rig.Limits.Input; lim == nil || !l.has(FlawSaturated) && l.clipped == 0 {
		l.findFlatTops(u, name)
	}
	if rate := l.rig.Limits.InputRate; rate > 0 {
		count, first, most := 0, 0, 0.0
		for k := 1; k < len(u); k++ {
			if l.dropped[k]&startsSegment != 0 {
				continue
			}
			if v := math.Abs(u[k]-u[k-1]) / l.period; v > rate*(1+limitSlack) {
				if count == 0 {
					first = l.lines.at(k)
				}
				count++
				most = max(most, v)
			}
		}
		if count > 0 {
			l.flaw(Flaw{Name: FlawRate, Column: name, Count: count, Line: first,
				Detail: fmt.Sprintf("up to %s per s where [limits] input_rate is %s: logged before its limits, or the limit is wrong", number(most), number(rate)),
				Effect: "used as logged, which the actuator cannot have followed"})
		}
	}
}

func (l *log) has(name string) bool {
	return slices.ContainsFunc(l.flaws, func(f Flaw) bool { return f.Name == name })
}

func (l *log) saturated(name string, low, high, first int, lo, hi float64) {
	if low+high == 0 {
		return
	}
	l.flaw(Flaw{Name: FlawSaturated, Column: name, Count: low + high, Line: first,
		Detail: fmt.Sprintf("%.2g %% of the rows flat: %d at %s, %d at %s", 100*float64(low+high)/float64(l.rows), low, number(lo), high, number(hi)),
		Effect: "used: what counts is that the column is what the actuator was told after its limits"})
}

// findFlatTops looks for limits that nobody gave: the input's extremes, held time and again.
func (l *log) findFlatTops(u []float64, name string) {
	const (
		hold = 3  // rows on end at the extreme that make one stay
		few  = 10 // rows at an extreme below which it may be chance
	)
	lo, hi := math.Inf(1), math.Inf(-1)
	for _, x := range u {
		if !math.IsNaN(x) {
			lo, hi = min(lo, x), max(hi, x)
		}
	}
	slack := limitSlack * (hi - lo)
	if inside := l.levels(u); len(inside) < 20 {
		return // a relay or a coarse input: always at some extreme
	}
	count := func(at float64) (rows, first int) {
		stay := 0
		held := false
		for k, x := range u {
			if math.Abs(x-at) > slack || math.IsNaN(x) {
				stay = 0
				continue
			}
			if rows == 0 {
				first = l.lines.at(k)
			}
			rows++
			stay++
			held = held || stay >= hold
		}
		if !held || rows < few {
			return 0, 0
		}
		return rows, first
	}
	low, firstLow := count(lo)
	high, firstHigh := count(hi)
	first := firstLow
	if low == 0 || high > 0 && firstHigh < firstLow {
		first = firstHigh
	}
	l.saturated(name, low, high, first, lo, hi)
}

// In a log with trips, a rig is taken to run where it evidently does.
const (
	runningRows  = 200 // rows on end within limits, at least
	runningMoves = 0.1 // share of them in which the input moves, at least
)

// findTrips marks rows in which the output is beyond its limits, and those between them in which the rig passes through
// its limits or lies there with the actuator off: before the first start, after a trip, while it is picked up.
func (l *log) findTrips() {
	lim := l.rig.Limits.Output
	if lim == nil {
		return
	}
	u, y := l.columns[l.u], l.columns[l.y]
	outside := func(k int) bool { return y[k] < lim[0] || y[k] > lim[1] }
	first := 0
	for first < l.rows && !outside(first) {
		first++
	}
	if first == l.rows {
		return
	}
	trips, restarts, rows := 0, 0, 0
	running := false
	for from, to := 0, 0; from < l.rows; from = to {
		moved := 0
		for to = from + 1; to < l.rows && outside(to) == outside(from); to++ {
			if u[to] != u[to-1] {
				moved++
			}
		}
		if outside(from) {
			if running {
				trips++
			}
			running = false
		} else {
			running = to-from >= runningRows && float64(moved) >= runningMoves*float64(to-from)
			if running && from > 0 {
				restarts++
			}
		}
		if !running {
			rows += to - from
			for k := from; k < to; k++ {
				l.dropped[k] |= isTripped
			}
		}
	}
	effect := plural(rows, "row", "rows") + " not used: beyond, or the rig is not running"
	if restarts > 0 {
		effect += fmt.Sprintf("; used after %s (%d rows on end within limits, input moving)", plural(restarts, "restart", "restarts"), runningRows)
	}
	l.flaw(Flaw{Name: FlawTrip, Column: l.column(l.y), Count: max(1, trips), Line: l.lines.at(first),
		Detail: fmt.Sprintf("output beyond [limits] output [%s, %s]", number(lim[0]), number(lim[1])), Effect: effect})
}

// longRest returns the number of rows from which on a column that repeats its value is at rest, and not by chance.
//
// Were it to repeat itself from row to row with probability q, independently, a stretch of n rows would have
// probability q^n; q is taken from the share of stretches longer than one row, which a few long ones cannot raise. The
// bound of one false alarm in a million logs is trebled because real stretches are not independent.
func (l *log) longRest(x []float64, fewest int) int {
	const (
		alarm   = 1e-6
		slower  = 3
		longest = 1 << 30
	)
	stretches, longer := 0, 0
	l.stretches(x, func(from, to int) {
		stretches++
		if to-from > 1 {
			longer++
		}
	})
	q := (float64(longer) + 1) / (float64(stretches) + 2)
	if n := slower * math.Log(alarm/float64(l.rows)) / math.Log(q); n > float64(fewest) {
		return int(min(n, longest))
	}
	return fewest
}

// findStuck marks stretches in which the output repeats one value far longer than it usually does. A segment ends before
// a long one, of MinSegment rows or more.
func (l *log) findStuck() {
	const fewest = 20
	y := l.columns[l.y]
	limit := l.longRest(y, fewest)
	count, first, rows, most := 0, 0, 0, 0
	value := 0.0
	l.stretches(y, func(from, to int) {
		if to-from < limit {
			return
		}
		if count == 0 {
			first = l.lines.at(from)
		}
		count++
		rows += to - from
		if to-from > most {
			most, value = to-from, y[from]
		}
		why := isStuck
		if to-from < MinSegment {
			why = isWrong
		}
		for k := from; k < to; k++ {
			l.dropped[k] |= why
		}
	})
	if count > 0 {
		l.flaw(Flaw{Name: FlawStuck, Column: l.column(l.y), Count: count, Line: first,
			Detail: fmt.Sprintf("one value for %d rows or more, longest %d rows at %s", limit, most, number(value)),
			Effect: plural(rows, "row", "rows") + " not used"})
	}
}

// findRest marks stretches in which the input stays where it is far longer than it usually does: before a start, or after a
// trip that no limit of the output tells. At its extremes it may stay for a while, but not to the end.
func (l *log) findRest() {
	u := l.columns[l.u]
	lo, hi := math.Inf(1), math.Inf(-1)
	for k, x := range u {
		if l.dropped[k]&isUnused == 0 {
			lo, hi = min(lo, x), max(hi, x)
		}
	}
	slack := limitSlack * (hi - lo)
	limit := l.longRest(u, MinSegment)
	count, first, rows := 0, 0, 0
	l.stretches(u, func(from, to int) {
		within := from > 0 && to < l.rows && (l.dropped[from]&startsSegment|l.dropped[from-1]&isUnused|l.dropped[to]) == 0
		if to-from < limit || within && (u[from] <= lo+slack || u[from] >= hi-slack) {
			return // short, or at a limit and back
		}
		if count == 0 {
			first = l.lines.at(from)
		}
		count++
		rows += to - from
		for k := from; k < to; k++ {
			l.dropped[k] |= isResting
		}
	})
	if count > 0 {
		l.idle(count, first, rows)
	}
}

func (l *log) idle(count, line, rows int) {
	l.flaw(Flaw{Name: FlawIdle, Column: l.column(l.u), Count: count, Line: line,
		Detail: plural(rows, "row", "rows") + " in stretches in which the input never moves", Effect: "not used: the loop was not closed"})
}

// stretches calls f with [from, to) of each stretch of equal values of a column among the rows used.
func (l *log) stretches(x []float64, f func(from, to int)) {
	from := 0
	for k := 1; k <= len(x); k++ {
		if k < len(x) && x[k] == x[from] && l.dropped[k] == l.dropped[from]&isUnused {
			continue
		}
		if l.dropped[from]&isUnused == 0 {
			f(from, k)
		}
		from = k
	}
}

// findSpikes marks single samples of the output far off their neighbours on both sides.
func (l *log) findSpikes() {
	const (
		far       = 15 // robust standard deviations off the median of four neighbours
		alone     = 5  // times as far as the neighbours are off theirs
		flicker   = 5  // steps of a coarse grid that are no spike yet
		toMeasure = 100_000
	)
	y := l.columns[l.y]
	off := func(k int) float64 {
		a, b, c, d := y[k-2], y[k-1], y[k+1], y[k+2]
		return y[k] - (a+b+c+d-min(a, b, c, d)-max(a, b, c, d))/2
	}
	var sample []float64
	stride := 1 + l.rows/toMeasure
	l.runs(func(from, to int) {
		for k := from + 2; k+2 < to; k += stride {
			sample = append(sample, math.Abs(off(k)))
		}
	})
	if len(sample) < MinSegment {
		return
	}
	slices.Sort(sample)
	sd := 1.4826 * sample[len(sample)/2] // of a normal distribution with this median deviation
	if sd == 0 {                         // a coarse grid: most samples equal their neighbours
		sum := 0.0
		for _, x := range sample[:len(sample)*99/100] {
			sum += x
		}
		sd = 1.2533 * sum / float64(len(sample))
	}
	if sd == 0 {
		return
	}
	bound := max(far*sd, flicker*grid(l.levels(y), fewestOutput))
	var rows []int
	l.runs(func(from, to int) {
		for k := from + 4; k+4 < to; k++ {
			e := math.Abs(off(k))
			if e < bound {
				continue
			}
			rest := max(math.Abs(off(k-2)), math.Abs(off(k-1)), math.Abs(off(k+1)), math.Abs(off(k+2)))
			if e > alone*rest {
				rows = append(rows, k)
			}
		}
	})
	if len(rows) == 0 {
		return
	}
	for _, k := range rows {
		l.dropped[k] |= isWrong
	}
	l.flaw(Flaw{Name: FlawSpike, Column: l.column(l.y), Count: len(rows), Line: l.lines.at(rows[0]),
		Detail: fmt.Sprintf("single samples more than %d robust standard deviations off their neighbours, the first %s", far, number(y[rows[0]])),
		Effect: "the output of these rows is not used"})
}

// levels returns the different numbers among some thousand of x, sorted.
func (l *log) levels(x []float64) []float64 {
	const rows = 4096
	stride := 1 + len(x)/rows
	var out []float64
	for k := 0; k < len(x); k += stride {
		if !math.IsNaN(x[k]) && l.dropped[k]&isUnused == 0 {
			out = append(out, x[k])
		}
	}
	slices.Sort(out)
	return slices.Compact(out)
}

// Levels that make a grid: fewer values of an input are just some settings, but an output has none.
const (
	fewestInput  = 8
	fewestOutput = 2
)

// grid returns the step of the grid that sorted numbers lie on, or 0 where they lie on none, or on one too fine to
// tell. Each may be off its grid line by a fraction of the step: the text of a number is rounded, too.
func grid(levels []float64, fewest int) float64 {
	const slack = 0.15 // of a step
	n := len(levels)
	if n < fewest {
		return 0
	}
	gaps := make([]float64, n-1)
	for i := range gaps {
		gaps[i] = levels[i+1] - levels[i]
	}
	sorted := slices.Clone(gaps)
	slices.Sort(sorted)
	step := sorted[len(sorted)/10]
	lines := make([]float64, n)
	for i, g := range gaps { // the longer the way, the better the step is known
		lines[i+1] = lines[i] + max(1, math.Round(g/step))
		step = (levels[i+1] - levels[0]) / lines[i+1]
	}
	for i := range levels {
		if math.Abs(levels[i]-levels[0]-lines[i]*step) > slack*step {
			return 0
		}
	}
	return step
}

// Quantisation is reported where its step is more than this fraction of the column's standard deviation, or of that of
// its moves from row to row.
const (
	stepToSD   = 0.05
	stepToMove = 0.5
	// stepNoNoise, in standard deviations of the output, is where rounding ceases to act as independent noise of a twelfth
	// of the squared step: fits of three logs of flap each at 0.1, 0.25 and 0.5 are unbiased, at 1 their fast pole is off
	// by one to three deviations.
	stepNoNoise = 0.7
)

func (l *log) findQuantisation(index int) {
	x := l.columns[index]
	fewest := fewestInput
	if index == l.y {
		fewest = fewestOutput
	}
	step := grid(l.levels(x), fewest)
	if step == 0 {
		return
	}
	var all, move spread
	l.runs(func(from, to int) {
		for k := from; k < to; k++ {
			all.add(x[k])
			if k > from {
				move.add(x[k] - x[k-1])
			}
		}
	})
	if !(step > stepToSD*all.sd()) && !(step > stepToMove*move.sd()) {
		return
	}
	f := Flaw{Name: FlawQuantised, Column: l.column(index), Count: all.n, Line: l.lines.at(0),
		Detail: fmt.Sprintf("step %s, %.2g of the standard deviation %s", number(step), step/all.sd(), number(all.sd())),
		Effect: fmt.Sprintf("used; it adds noise of standard deviation %s", number(step/math.Sqrt(12)))}
	if index == l.y && step > stepNoNoise*all.sd() {
		f.Name, f.Effect = FlawFew, "used; rounding as coarse as this follows the signal, and biases a fit"
	}
	l.flaw(f)
}

// A spread gathers mean and standard deviation (B. P. Welford, "Note on a method for calculating corrected sums of
// squares and products", Technometrics 4(3), 1962, 419-420).
type spread struct {
	n       int
	mean, s float64
}

func (s *spread) add(x float64) {
	s.n++
	d := x - s.mean
	s.mean += d / float64(s.n)
	s.s += d * (x - s.mean)
}

func (s *spread) sd() float64 {
	if s.n < 2 {
		return 0
	}
	return math.Sqrt(s.s / float64(s.n-1))
}

// findDrift looks for a mean that moves through the log: block means on a straight line that explains nearly all of
// their scatter, and rises over the log by a good part of the scatter within the blocks.
func (l *log) findDrift(index int) {
	const (
		blocks    = 10
		explained = 0.9
		rise      = 0.5
	)
	x := l.columns[index]
	if l.rows < blocks*MinSegment {
		return
	}
	var means [blocks]spread
	l.runs(func(from, to int) {
		for k := from; k < to; k++ {
			means[k*blocks/l.rows].add(x[k])
		}
	})
	var sxx, sxy, syy, within float64
	var centre spread
	for _, m := range means {
		if m.n < MinSegment/2 {
			return
		}
		centre.add(m.mean)
		within += m.s / float64(m.n)
	}
	for i, m := range means {
		dx, dy := float64(i)-float64(blocks-1)/2, m.mean-centre.mean
		sxx += dx * dx
		sxy += dx * dy
		syy += dy * dy
	}
	slope := sxy / sxx
	over := slope * blocks
	sd := math.Sqrt(within / blocks)
	if syy == 0 || sxy*sxy/(sxx*syy) < explained || math.Abs(over) < rise*sd {
		return
	}
	l.flaw(Flaw{Name: FlawDrift, Column: l.column(index), Count: l.rows, Line: l.lines.at(0),
		Detail: fmt.Sprintf("the mean moves by %s over the log, %.2g of the standard deviation about it", number(over), math.Abs(over)/sd),
		Effect: "used; a constant a segment does not take it out, a shorter log would"})
}
