package data

import (
	"fmt"
	"math"
	"slices"
)

// Tolerances of the time base.
const (
	// regularStep is how far a step may be off the period, in periods, without starting a new segment.
	regularStep = 0.5
	// jitterShown is the deviation of a step, in periods, from which jitter is reported.
	jitterShown = 0.02
	// jitterHarmful is the standard deviation of the steps, in periods, from which jitter hurts a fit.
	jitterHarmful = 0.1
	// coarseShare of repeated stamps, above it the stamps' resolution is coarser than the period.
	coarseShare = 0.2
	// periodTolerance is the accepted relative difference between stamps and [log] sample_period.
	periodTolerance = 0.002
	// hour is what daylight saving moves a clock by, s.
	hour = 3600
	// longestBurst is the number of rows that a late logger may stamp together before it counts as a gap.
	longestBurst = 10
)

// timeBase measures the period and marks where segments start.
func (l *log) timeBase() error {
	for _, row := range l.again {
		if row < l.rows {
			l.dropped[row] |= startsSegment
		}
	}
	if n := len(l.again); n > 0 {
		l.flaw(Flaw{Name: FlawHeader, Count: n, Line: l.lines.at(l.again[0]) - 1, Detail: "the header stands among the rows: logs put together",
			Effect: "a new segment starts after it"})
	}
	if l.ragged > 0 {
		l.flaw(Flaw{Name: FlawCut, Count: 1, Line: l.ragged, Detail: "the file ends within a row", Effect: "the row is not used"})
	}
	if l.time < 0 {
		l.period = l.rig.Log.SamplePeriod
		return nil
	}
	if unit := l.clocks[0].unit; unit != "s" && unit != "ISO 8601" {
		l.flaw(Flaw{Name: FlawClock, Column: l.column(l.time), Count: l.rows, Line: l.lines.at(0),
			Detail: "stamps in " + unit, Effect: "converted to s"})
	}
	if err := l.dropRepeats(); err != nil {
		return err
	}
	return l.steps()
}

// countSteps counts the steps between stamps by sign.
func countSteps(t []float64) (forward, zero, back int) {
	for i := 1; i < len(t); i++ {
		switch d := t[i] - t[i-1]; {
		case d > 0:
			forward++
		case d == 0:
			zero++
		case d < 0:
			back++
		}
	}
	return forward, zero, back
}

// dropRepeats takes out rows that repeat the one before, stamp and all. Where stamps are coarse, equal rows may well
// be different samples, and stay.
func (l *log) dropRepeats() error {
	t := l.columns[l.time]
	forward, zero, back := countSteps(t)
	if forward == 0 {
		if zero+back == 0 {
			return l.fault(0, "stamps in s or ISO 8601, or [log] sample_period without time", "column %s (time) has no two stamps in a row", quote(l.column(l.time)))
		}
		return l.fault(0, "name the column of the stamps, or give [log] sample_period without time", "column %s (time) does not run: %s at first and %s at last",
			quote(l.column(l.time)), number(t[0]), number(t[len(t)-1]))
	}
	if float64(zero) > coarseShare*float64(len(t)) {
		return nil
	}
	same := func(i, j int) bool {
		for _, c := range l.columns {
			if c[i] != c[j] && !(math.IsNaN(c[i]) && math.IsNaN(c[j])) {
				return false
			}
		}
		return true
	}
	repeated, first := 0, 0
	to := 1
	var lines lineMap
	lines.add(0, l.lines.at(0))
	for i := 1; i < l.rows; i++ {
		if t[i] == t[i-1] && same(i, to-1) && l.dropped[i] == 0 {
			if repeated == 0 {
				first = l.lines.at(i)
			}
			repeated++
			continue
		}
		if zero > 0 {
			lines.add(to, l.lines.at(i))
		}
		if to != i {
			for _, c := range l.columns {
				c[to] = c[i]
			}
			l.dropped[to] = l.dropped[i]
		}
		to++
	}
	if repeated == 0 {
		return nil
	}
	for i := range l.columns {
		l.columns[i] = l.columns[i][:to]
	}
	l.rows, l.lines, l.dropped = to, lines, l.dropped[:to]
	l.flaw(Flaw{Name: FlawRepeat, Column: l.column(l.time), Count: repeated, Line: first, Detail: "rows that repeat the row before in every column used",
		Effect: "each taken once"})
	return nil
}

// medianStep returns the median of the steps forward.
func medianStep(t []float64) float64 {
	const most = 200_000 // spread over the log; more would not move the median
	steps := make([]float64, 0, min(len(t), most+1))
	for i, stride := 1, 1+len(t)/most; i < len(t); i += stride {
		if d := t[i] - t[i-1]; d > 0 {
			steps = append(steps, d)
		}
	}
	if len(steps) == 0 {
		for i := 1; i < len(t); i++ {
			if d := t[i] - t[i-1]; d > 0 {
				steps = append(steps, d)
			}
		}
	}
	slices.Sort(steps)
	return steps[len(steps)/2]
}

// steps measures the period and marks gaps, repeats and backward stamps.
func (l *log) steps() error {
	t := l.columns[l.time]
	name := quote(l.column(l.time))
	forward, zero, _ := countSteps(t)
	if float64(zero) > coarseShare*float64(len(t)) {
		return l.coarse(zero)
	}
	period := medianStep(t)
	sum, regular, odd := 0.0, 0, -1
	for i := 1; i < len(t); i++ {
		d := t[i] - t[i-1]
		if math.Abs(d-period) <= regularStep*period {
			sum += d
			regular++
		} else if d > 0 && odd < 0 {
			odd = i
		}
	}
	if 2*regular < forward {
		return l.fault(odd, "log at a constant period, or give [log] sample_period without time if the rows are evenly spaced all the same",
			"the stamps in column %s have no common period: half of the steps are more than half off %s s", name, number(period))
	}
	// The sum of regular steps telescopes: rounding of the stamps hardly touches their mean.
	period = sum / float64(regular)

	type tally struct{ count, first int }
	note := func(t *tally, row int) {
		if t.count == 0 {
			t.first = l.lines.at(row)
		}
		t.count++
	}
	var gaps, shorts, repeats, backs, hours, jitter tally
	missed, longest, squares := 0.0, 0.0, 0.0
	lo, hi := math.Inf(1), math.Inf(-1)
	for i := 1; i < len(t); i++ {
		d := t[i] - t[i-1]
		off := d - period
		if math.IsNaN(off) {
			continue // the row is missing a stamp
		}
		if math.Abs(off) <= regularStep*period {
			squares += off * off
			lo, hi = min(lo, d), max(hi, d)
			if math.Abs(off) > jitterShown*period {
				note(&jitter, i)
			}
			continue
		}
		if n := burst(t[i-1:min(len(t), i+longestBurst)], period); n > 0 {
			for range n {
				note(&jitter, i)
				lo, hi = min(lo, t[i]-t[i-1]), max(hi, t[i]-t[i-1])
				squares += (t[i] - t[i-1] - period) * (t[i] - t[i-1] - period)
				i++
			}
			i--
			continue
		}
		l.dropped[i] |= startsSegment
		switch {
		case l.clocks[0].local && math.Abs(math.Abs(off)-hour) <= regularStep*period && period < hour/3:
			note(&hours, i)
		case d < 0:
			note(&backs, i)
		case d == 0:
			note(&repeats, i)
		case d < period:
			note(&shorts, i)
		default:
			note(&gaps, i)
			missed += math.Round(d/period) - 1
			longest = max(longest, d)
		}
	}
	largest := max(hi-period, period-lo)
	l.period = snap(period, largest, regular)
	if err := l.checkPeriodSteady(largest); err != nil {
		return err
	}
	if err := l.checkPeriod(); err != nil {
		return err
	}
	if sd := math.Sqrt(squares / float64(regular)); jitter.count > 0 {
		effect := "rows taken as evenly spaced"
		if sd > jitterHarmful*period {
			effect += "; if it is the sampling that jitters, not the stamps, delay and fast poles are blurred"
		}
		l.flaw(Flaw{Name: FlawJitter, Column: l.column(l.time), Count: jitter.count, Line: jitter.first,
			Detail: fmt.Sprintf("steps of %s to %s s, standard deviation %.2g %% of the period %s s", number(lo), number(hi), 100*sd/period, number(l.period)),
			Effect: effect})
	}
	const restart = "a new segment starts there"
	if hours.count > 0 {
		l.flaw(Flaw{Name: FlawHour, Column: l.column(l.time), Count: hours.count, Line: hours.first,
			Detail: "the stamps jump by one hour to the row, as local time does when daylight saving begins or ends", Effect: restart + "; no row is lost"})
	}
	if gaps.count > 0 {
		l.flaw(Flaw{Name: FlawGap, Column: l.column(l.time), Count: gaps.count, Line: gaps.first,
			Detail: fmt.Sprintf("%.0f rows missing, longest step %s s", missed, number(longest)), Effect: "a new segment starts after each; nothing is interpolated"})
	}
	if shorts.count > 0 {
		l.flaw(Flaw{Name: FlawShortStep, Column: l.column(l.time), Count: shorts.count, Line: shorts.first,
			Detail: "steps shorter than half a period", Effect: restart})
	}
	if repeats.count > 0 {
		l.flaw(Flaw{Name: FlawRepeat, Column: l.column(l.time), Count: repeats.count, Line: repeats.first,
			Detail: "rows with the stamp of the row before but other values", Effect: restart})
	}
	if backs.count > 0 {
		l.flaw(Flaw{Name: FlawBackward, Column: l.column(l.time), Count: backs.count, Line: backs.first,
			Detail: "the clock was set back, rows are out of order, or logs were put together", Effect: restart})
	}
	return nil
}

// burst returns the number of steps, 2 to longestBurst, after which stamps that ran off the grid at t[0] are back on it
// without ever running backward: a late stamp, or some rows stamped together. 0: they are not.
func burst(t []float64, period float64) int {
	for n := 1; n < len(t); n++ {
		if !(t[n] >= t[n-1]) {
			return 0
		}
		if n > 1 && math.Abs(t[n]-t[0]-float64(n)*period) < regularStep*period {
			return n
		}
	}
	return 0
}

// snap returns the number of three significant digits at period where the stamps cannot tell the two apart.
func snap(period, largest float64, steps int) float64 {
	digits := math.Pow(10, 2-math.Floor(math.Log10(period)))
	if math.IsInf(digits, 0) || digits == 0 {
		return period
	}
	round := math.Round(period*digits) / digits
	if math.Abs(round-period)*float64(steps) <= 2*largest+1e-9*period*float64(steps) {
		return round
	}
	return period
}

// checkPeriodSteady refuses a log whose period changes on the way.
func (l *log) checkPeriodSteady(largest float64) error {
	t := l.columns[l.time]
	const blocks = 20
	size := len(t) / blocks
	if size < MinSegment {
		size = MinSegment
	}
	for from := 0; from+size < len(t); from += size {
		sum, n := 0.0, 0
		for i := from + 1; i <= from+size; i++ {
			if d := t[i] - t[i-1]; math.Abs(d-l.period) <= regularStep*l.period {
				sum += d
				n++
			}
		}
		if n < MinSegment/2 {
			continue
		}
		mean := sum / float64(n)
		// Steps off by more than regularStep leave their partners in a burst behind: allow for two a block.
		if math.Abs(mean-l.period) > 0.01*l.period+2*min(largest, l.period)/float64(n) {
			return l.fault(from, "log at one period, or split the log there", "the period changes: %s s near this line, %s s over the whole log", number(mean), number(l.period))
		}
	}
	return nil
}

// checkPeriod compares the measured period with [log] sample_period, which then counts: it is what the owner means.
func (l *log) checkPeriod() error {
	given := l.rig.Log.SamplePeriod
	if given == 0 {
		return nil
	}
	if math.Abs(l.period-given) > periodTolerance*given {
		return l.fault(-1, "correct it, or take it out to go by the stamps", "the stamps in column %s are %s s apart, but [log] sample_period is %s s (%s)",
			quote(l.column(l.time)), number(l.period), number(given), l.rig.where("log.sample_period"))
	}
	l.period = given
	return nil
}

// coarse takes over where stamps repeat because their resolution is coarser than the period.
func (l *log) coarse(repeats int) error {
	t := l.columns[l.time]
	name := quote(l.column(l.time))
	given := l.rig.Log.SamplePeriod
	if given == 0 {
		return l.fault(-1, "give [log] sample_period", "%d of %d stamps in column %s repeat the one before: their resolution is coarser than the period", repeats, len(t)-1, name)
	}
	resolution := medianStep(t)
	start, first := 0, 0
	sum, steps := 0.0, 0
	breaks := 0
	for i := 1; i <= len(t); i++ {
		if i < len(t) && t[i] >= t[i-1] && t[i]-t[i-1] <= 1.5*max(resolution, given) {
			continue
		}
		if i < len(t) && !math.IsNaN(t[i]-t[i-1]) {
			l.dropped[i] |= startsSegment
			if breaks == 0 {
				first = l.lines.at(i)
			}
			breaks++
		}
		if d := t[i-1] - t[start]; d > 0 {
			sum += d
			steps += i - 1 - start
		}
		start = i
	}
	if steps == 0 {
		steps, sum = 1, math.NaN()
	}
	l.period = sum / float64(steps)
	// One resolution at each end is all that the whole of the stamps can be off.
	if !(math.Abs(l.period-given) <= periodTolerance*given+2*resolution/float64(steps)) {
		return l.checkPeriod()
	}
	l.period = given
	l.flaw(Flaw{Name: FlawCoarse, Column: l.column(l.time), Count: repeats, Line: l.lines.at(0),
		Detail: fmt.Sprintf("stamps move by %s s, rows come every %s s", number(resolution), number(given)),
		Effect: "[log] sample_period counts; lost rows within one stamp cannot be seen"})
	if breaks > 0 {
		l.flaw(Flaw{Name: FlawGap, Column: l.column(l.time), Count: breaks, Line: first, Detail: "stamps jump", Effect: "a new segment starts there"})
	}
	return nil
}
