package data

import (
	"fmt"
	"math"
	"strings"
)

// segments cuts the columns at the rows that start a segment or are not used.
func (l *log) segments() []Segment {
	var out []Segment
	short, shortRows, first := 0, 0, 0
	idle, idleRows, firstIdle := 0, 0, 0
	l.cut(isUnused&^isWrong, func(from, to int) {
		if l.rig.Log.InputRow == InputBefore {
			// The input of the next row acts from this row's output sample on; the last row has no such input.
			to--
		}
		s := l.segment(from, max(from, to))
		if len(s.Y)-len(s.Wrong) < MinSegment {
			if short == 0 {
				first = l.lines.at(from)
			}
			short++
			shortRows += len(s.Y)
			return
		}
		if !moves(s.U) {
			if idle == 0 {
				firstIdle = s.Line
			}
			idle++
			idleRows += to - from
			return
		}
		out = append(out, s)
	})
	if idle > 0 {
		l.idle(idle, firstIdle, idleRows)
	}
	if short > 0 {
		l.flaw(Flaw{Name: FlawShort, Count: short, Line: first, Detail: plural(shortRows, "row", "rows") + " in stretches of less than " + fmt.Sprint(MinSegment),
			Effect: "not used"})
	}
	return out
}

// runs calls f with [from, to) of each stretch of rows to be used, one period apart.
func (l *log) runs(f func(from, to int)) { l.cut(isUnused, f) }

// cut calls f with [from, to) of each stretch of rows one period apart that no reason among why speaks against.
func (l *log) cut(why uint8, f func(from, to int)) {
	from := -1
	for i, d := range l.dropped {
		if from >= 0 && d&(why|startsSegment) != 0 {
			f(from, i)
			from = -1
		}
		if from < 0 && d&why == 0 {
			from = i
		}
	}
	if from >= 0 {
		f(from, len(l.dropped))
	}
}

func (l *log) segment(from, to int) Segment {
	shift := 0
	if l.rig.Log.InputRow == InputBefore {
		shift = 1
	}
	s := Segment{Line: l.lines.at(from), Start: float64(from) * l.period,
		U: l.columns[l.u][from+shift : to+shift : to+shift], Y: l.columns[l.y][from:to:to], lines: l.lines, row: from}
	for k := from; k < to; k++ {
		if l.dropped[k]&isWrong != 0 {
			s.Wrong = append(s.Wrong, k-from)
		}
	}
	if l.time >= 0 {
		s.Start = l.columns[l.time][from]
	}
	if l.r >= 0 {
		s.R = l.columns[l.r][from:to:to]
	}
	if l.d >= 0 {
		s.D = l.columns[l.d][from+shift : to+shift : to+shift]
	}
	return s
}

// moves tells whether x has two different numbers in it.
func moves(x []float64) bool {
	first := math.NaN()
	for _, v := range x {
		if math.IsNaN(first) {
			first = v
		} else if v != first && !math.IsNaN(v) {
			return true
		}
	}
	return false
}

// checkMoves refuses an input or output without numbers, or of one number.
func (l *log) checkMoves(index int) error {
	x := l.columns[index]
	part := "input"
	if index == l.y {
		part = "output"
	}
	if moves(x) {
		return nil
	}
	for _, v := range x {
		if !math.IsNaN(v) {
			return l.fault(-1, "a fit needs an input and an output that move", "column %s (%s) is %s in every row", quote(l.column(index)), part, number(v))
		}
	}
	return l.fault(-1, "name the right column in [log]", "column %s (%s) has no number in any row", quote(l.column(index)), part)
}

// tooShort says why no segment is left.
func (l *log) tooShort() error {
	hint := fmt.Sprintf("a fit needs %d rows on end at the very least, and a few thousand to be good", MinSegment)
	if l.rows < MinSegment {
		return l.fault(-1, hint, "%w: %d", ErrTooShort, l.rows)
	}
	tripped := 0
	for _, why := range l.dropped {
		if why&isTripped != 0 {
			tripped++
		}
	}
	if lim := l.rig.Limits.Output; 2*tripped > l.rows {
		return l.fault(-1, fmt.Sprintf("correct [limits] output (%s), or give a log of a run inside them", l.rig.where("limits.output")),
			beyondText, ErrTooShort, tripped, l.rows, "output", quote(l.column(l.y)), "output", number(lim[0]), number(lim[1]))
	}
	return l.fault(-1, hint, "%w on end: of %d no stretch of %d is left%s", ErrTooShort, l.rows, MinSegment, l.because())
}

const beyondText = "%w on end: in %d of %d the %s (column %s) is beyond [limits] %s [%s, %s]"

// mostlyBeyond refuses a log whose input is past its limits in most rows: then the limits are wrong, or nothing is
// left of what the actuator was told.
func (l *log) mostlyBeyond() error {
	lim := l.rig.Limits.Input
	return l.fault(-1, fmt.Sprintf("correct [limits] input (%s), or log the input after its limits, as the actuator was told it", l.rig.where("limits.input")),
		beyondText, ErrTooShort, l.clipped, l.rows, "input", quote(l.column(l.u)), "input", number(lim[0]), number(lim[1]))
}

// LineAt returns the line in the file of row k of the segment.
func (s Segment) LineAt(k int) int {
	if len(s.lines.row) == 0 {
		return s.Line + k
	}
	return s.lines.at(s.row + k)
}

// Pieces returns the segments cut at the rows whose output is wrong, however short the pieces.
func (e *Experiment) Pieces() []Segment {
	var out []Segment
	for _, s := range e.Segments {
		from := 0
		for _, k := range append(s.Wrong[:len(s.Wrong):len(s.Wrong)], len(s.Y)) {
			if k > from {
				out = append(out, s.rows(from, k, e.Period))
			}
			from = k + 1
		}
	}
	return out
}

// rows returns rows [from, to) of a segment, none of them wrong.
func (s Segment) rows(from, to int, period float64) Segment {
	p := Segment{Line: s.LineAt(from), Start: s.Start + float64(from)*period, U: s.U[from:to], Y: s.Y[from:to], lines: s.lines, row: s.row + from}
	if s.R != nil {
		p.R = s.R[from:to]
	}
	if s.D != nil {
		p.D = s.D[from:to]
	}
	return p
}

// because lists the flaws that cost rows.
func (l *log) because() string {
	var list []string
	for _, f := range l.flaws {
		switch f.Name {
		case FlawSaturated, FlawQuantised, FlawFew, FlawDrift, FlawJitter, FlawClock, FlawConstant, FlawRate, FlawShort, FlawHour, FlawSkew, FlawClocks, FlawTelemetry, FlawDeadZone, FlawStiction, FlawCycle, FlawPeriodic, FlawAlias:
			continue
		}
		where := f.Name
		if f.Column != "" {
			where += " in column " + quote(f.Column)
		}
		list = append(list, fmt.Sprintf("%s (%d, first on line %d)", where, f.Count, f.Line))
	}
	if len(list) == 0 {
		return ""
	}
	return ": " + strings.Join(list, ", ")
}
