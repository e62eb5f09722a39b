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
	l.runs(func(from, to int) {
		if l.rig.Log.InputRow == InputBefore {
			// The input of the next row acts from this row's output sample on; the last row has no such input.
			to--
		}
		if to-from < MinSegment {
			if short == 0 {
				first = l.lines.at(from)
			}
			short++
			shortRows += max(0, to-from)
			return
		}
		s := l.segment(from, to)
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
		l.flaw(Flaw{Name: FlawIdle, Column: l.column(l.u), Count: idle, Line: firstIdle, Detail: plural(idleRows, "row", "rows") + " in stretches in which the input never moves",
			Effect: "not used: the loop was not closed"})
	}
	if short > 0 {
		l.flaw(Flaw{Name: FlawShort, Count: short, Line: first, Detail: plural(shortRows, "row", "rows") + " in stretches of less than " + fmt.Sprint(MinSegment),
			Effect: "not used"})
	}
	return out
}

// runs calls f with [from, to) of each stretch of rows to be used, one period apart.
func (l *log) runs(f func(from, to int)) {
	from := -1
	for i, d := range l.dropped {
		if from >= 0 && d != 0 {
			f(from, i)
			from = -1
		}
		if from < 0 && d&isUnused == 0 {
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
		U: l.columns[l.u][from+shift : to+shift : to+shift], Y: l.columns[l.y][from:to:to]}
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
	beyond, tripped := 0, 0
	for _, why := range l.dropped {
		if why&isBeyond != 0 {
			beyond++
		}
		if why&isTripped != 0 {
			tripped++
		}
	}
	const text = "%w on end: in %d of %d the %s (column %s) is beyond [limits] %s [%s, %s]"
	if lim := l.rig.Limits.Input; 2*beyond > l.rows {
		return l.fault(-1, fmt.Sprintf("correct [limits] input (%s), or log the input after its limits, as the actuator was told it", l.rig.where("limits.input")),
			text, ErrTooShort, beyond, l.rows, "input", quote(l.column(l.u)), "input", number(lim[0]), number(lim[1]))
	}
	if lim := l.rig.Limits.Output; 2*tripped > l.rows {
		return l.fault(-1, fmt.Sprintf("correct [limits] output (%s), or give a log of a run inside them", l.rig.where("limits.output")),
			text, ErrTooShort, tripped, l.rows, "output", quote(l.column(l.y)), "output", number(lim[0]), number(lim[1]))
	}
	return l.fault(-1, hint, "%w on end: of %d no stretch of %d is left%s", ErrTooShort, l.rows, MinSegment, l.because())
}

// because lists the flaws that cost rows.
func (l *log) because() string {
	var list []string
	for _, f := range l.flaws {
		switch f.Name {
		case FlawSaturated, FlawQuantised, FlawDrift, FlawJitter, FlawClock, FlawConstant, FlawRate, FlawShort:
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
