package ident

import (
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/floats"

	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
	"steadyrig/fit"
)

// Shares of the input's variance that come from outside the loop, below which
// a log is refused and below which it is called weak. A quiet log of a fixed
// linear law leaves less than 1e-4 even with rounded columns, a well probed one
// 0.05 and more.
const (
	quietShare = 2e-4
	faintShare = 1e-2
)

// mostLogged is the part of what acts from outside from which what is logged stands for it.
const mostLogged = 0.5

// Shares of what the law leaves that the rounding of the columns explains, from
// which it explains all of it and beyond which it cannot have been an error.
// Quiet logs with columns rounded after the law ran lie between 0.7 and 1.6
// where more than faintShare is left, probed ones below 0.35; above lie logs
// whose law saw the rounded output itself.
const (
	allRounding = 0.5
	tooMuch     = 2
)

// lawOrder is the longest stopgap law, in samples, that outside power is told
// from.
const lawOrder = 12

// Outside says how much of the input came from outside the loop: what past
// inputs, and outputs up to the present one, leave unexplained of it.
type Outside struct {
	Share float64 `json:"share"` // of the input's variance
	// Logged is the part of Share that the logged reference and dither
	// explain; null where neither is logged, or neither moves.
	Logged *float64 `json:"logged"`
	// Rounding is the part of Share that the rounding of the columns explains,
	// if the law saw them before it; it may exceed 1 where the law saw them after.
	Rounding float64 `json:"rounding"`
	Quiet    bool    `json:"quiet"` // nothing acted from outside
	Words    string  `json:"words"`

	law    *fit.ARX     // from the output to the input, as the log shows it; nil where it shows none
	pieces []fit.Record // that law is from, cut at wrong outputs
}

// outside measures outside power. Under a fixed linear law without it the
// input is a function of past inputs and outputs, and then the log holds the
// law, not the plant (Söderström & Stoica, System Identification, Prentice Hall
// 1989, sec. 10; Gustavsson, Ljung & Söderström, Automatica 13 (1977) 59-75).
func outside(exps []*data.Experiment) Outside {
	unexplained := func(less func(s data.Segment, y, u []float64)) *fit.ARX {
		var recs []fit.Record
		for _, e := range exps {
			for _, s := range e.Pieces() {
				y, u := s.Y, s.U
				if less != nil {
					y, u = slices.Clone(y), slices.Clone(u)
					less(s, y, u)
				}
				recs = append(recs, fit.Record{U: y, Y: u}) // the law's input is y, its output u
			}
		}
		m, _ := fit.FitARX(recs, fit.ARXOptions{NA: lawOrder, NB: lawOrder + 1, Delay: 0})
		if m == nil {
			return nil
		}
		return m
	}
	var total float64
	for _, e := range exps {
		for _, s := range e.Pieces() {
			total += about(s.U)
		}
	}
	reference, dither := loggable[0].moves(exps), loggable[1].moves(exps)
	if total == 0 {
		return Outside{Quiet: true, Words: "the input does not move"}
	}
	law := unexplained(nil)
	var o Outside
	for _, e := range exps {
		for _, s := range e.Pieces() {
			o.pieces = append(o.pieces, fit.Record{U: s.U, Y: s.Y})
		}
	}
	if law != nil {
		o.Share, o.law = law.RSS/total, law
	}
	if o.Share > 1e-12 {
		// With errors of variance v in its columns the law leaves
		// v_u Σ a² + v_y Σ b² of itself.
		vu, vy := rounding(exps, func(s data.Segment) []float64 { return s.U }), rounding(exps, func(s data.Segment) []float64 { return s.Y })
		o.Rounding = (vu*floats.Dot(law.A, law.A) + vy*floats.Dot(law.B, law.B)) * float64(law.Rows) / law.RSS
	}
	if (reference || dither) && o.Share > 1e-12 {
		less := unexplained(func(s data.Segment, y, u []float64) {
			for k := range y {
				if s.R != nil {
					y[k] -= s.R[k]
				}
				if s.D != nil {
					u[k] -= s.D[k]
				}
			}
		})
		logged := 1.0
		if less != nil {
			logged = math.Max(0, 1-less.RSS/law.RSS)
		}
		o.Logged = &logged
		if less != nil && o.logged() {
			o.law = less
		}
	}
	switch {
	case o.Share < quietShare && !o.logged():
		o.Quiet = true
		o.Words = fmt.Sprintf("nothing from outside moves the input: the law explains all but %.2g of it", o.Share)
	case o.Rounding > allRounding && (o.Rounding < tooMuch || o.Share < faintShare) && (o.Logged == nil || *o.Logged*o.Share < quietShare):
		o.Quiet = true
		o.Words = fmt.Sprintf("nothing from outside moves the input: the law explains all but %.2g of it, and the rounding of the columns explains that", o.Share)
	case o.Share < faintShare:
		o.Words = fmt.Sprintf("only %.2g of the input's variance comes from outside the loop", o.Share)
	default:
		o.Words = fmt.Sprintf("%.0f %% of the input's variance comes from outside the loop", 100*o.Share)
	}
	switch {
	case o.Quiet && (reference || dither):
		o.Words += fmt.Sprintf("; the logged %s moves, but so regularly that past rows foretell it, or without acting on the input", named(reference, dither))
	case !o.Quiet:
		switch {
		case o.Logged == nil:
			o.Words += "; what acted is not logged, which a fit can do without"
		case !o.logged():
			o.Words += fmt.Sprintf("; the logged %s explains %.0f %% of that", named(reference, dither), 100**o.Logged)
		default:
			o.Words += ", from the logged " + named(reference, dither)
		}
	}
	return o
}

// roundingRows is about how many values of a column its rounding is measured on.
const roundingRows = 20000

// rounding returns the variance of the error that a column's rounding brings: a
// twelfth of the square of the step between a value and its neighbour, on
// average over the rows, since a column with so many digits has no single step.
// It is zero where hardly a value repeats, and for a few settings, which are a
// switch.
func rounding(exps []*data.Experiment, column func(data.Segment) []float64) float64 {
	const fewest = 8
	var pieces [][]float64
	rows := 0
	for _, e := range exps {
		for _, s := range e.Pieces() {
			pieces = append(pieces, column(s))
			rows += len(s.Y)
		}
	}
	var x []float64
	k := 0 // in the piece, of the next value taken
	for _, piece := range pieces {
		for ; k < len(piece); k += 1 + rows/roundingRows {
			x = append(x, piece[k])
		}
		k -= len(piece)
	}
	slices.Sort(x)
	levels := slices.Compact(slices.Clone(x))
	if len(levels) < fewest || len(levels) > len(x)/2 {
		return 0
	}
	var sum float64
	i := 0
	for _, v := range x {
		if levels[i] != v {
			i++
		}
		step := math.Inf(1)
		if i > 0 {
			step = levels[i] - levels[i-1]
		}
		if i+1 < len(levels) {
			step = math.Min(step, levels[i+1]-levels[i])
		}
		sum += step * step
	}
	return sum / 12 / float64(len(x))
}

func named(reference, dither bool) string {
	switch {
	case reference && dither:
		return "reference and dither"
	case reference:
		return "reference"
	}
	return "dither"
}

// refuseQuiet returns the refusal of a log without outside power.
func refuseQuiet(o Outside) error {
	return &RefusedError{
		What: o.Words + ", so the log shows the stopgap law and not the plant",
		Do:   "log a run with a probe of random levels added to the input, or with random steps of the reference",
	}
}

// deafLags is how many past inputs are asked whether they move the output,
// deaf the probability by chance above which they do not.
const (
	deafLags = 20
	deaf     = 1e-3
)

// refuseDeaf refuses logs in which past inputs say nothing about the output
// beyond what its own past does.
func refuseDeaf(recs []fit.Record) error {
	with, _ := fit.FitARX(recs, fit.ARXOptions{NA: deafLags, NB: deafLags, Delay: 1})
	without, _ := fit.FitARX(recs, fit.ARXOptions{NA: deafLags, First: deafLags})
	if with == nil || without == nil || with.Rows <= 3*deafLags {
		return nil
	}
	_, p := fit.FTest(without.RSS, with.RSS, deafLags, with.Rows-2*deafLags-len(recs))
	if !(p > deaf) {
		return nil
	}
	return &RefusedError{
		What: fmt.Sprintf("the output does not answer to the input: past inputs explain no more of it than chance (probability %.2g)", p),
		Do:   "check that the two columns belong together, or log a run with a stronger probe",
	}
}

// LawCheck compares the stopgap law of the rig file with the log.
type LawCheck struct {
	Unexplained float64 `json:"unexplained"` // share of the input's variance that the law leaves
	Rows        int     `json:"rows"`        // by how many rows the input is logged late (+1) or early (-1)
	SignWrong   bool    `json:"sign_wrong"`
	Words       string  `json:"words"`
}

// checkLaw tests the stopgap law den (u - u0) + num (y - r) = den d on the
// log, also with the input shifted by a row either way and with the other
// sign. It returns nil where the rig file has no law.
func checkLaw(exps []*data.Experiment, rig *data.Rig) *LawCheck {
	law := rig.Stopgap
	if law == nil {
		return nil
	}
	left := lawResiduals(exps, law)
	best := LawCheck{Unexplained: math.Inf(1)}
	for turned := range 2 {
		for _, shift := range []int{0, -1, 1} {
			// A shift must clearly beat what the rig file says.
			v := math.Inf(1)
			for i, g := range lawGuesses {
				if g.shift == shift {
					v = math.Min(v, left[i][turned])
				}
			}
			if v < 0.5*best.Unexplained {
				best = LawCheck{Unexplained: v, Rows: shift, SignWrong: turned == 1}
			}
		}
	}
	switch {
	case best.Unexplained > 0.9:
		best.Rows, best.SignWrong = 0, false
		best.Words = fmt.Sprintf("the stopgap law of the rig file does not explain the input: it leaves %.0f %% of its variance", 100*best.Unexplained)
	case best.SignWrong:
		best.Words = "the stopgap law of the rig file fits the log only with the opposite sign"
	case best.Rows == -1:
		best.Words = "the stopgap law fits only if the input is logged one row early"
	case best.Rows == 1:
		best.Words = "the stopgap law fits only if the input is logged one row late"
	default:
		best.Words = fmt.Sprintf("the stopgap law of the rig file explains the input but for %.2g of its variance", best.Unexplained)
	}
	return &best
}

// refuseShifted refuses a log in which the law of the rig file ran, but in
// another row; nil where it does not say so clearly.
func refuseShifted(c *LawCheck, rig *data.Rig) error {
	if c == nil || c.Rows == 0 || c.SignWrong || c.Unexplained > clearLaw {
		return nil
	}
	before := rig.Log.InputRow == data.InputBefore
	do := "shift the input column up by a row"
	switch {
	case c.Rows > 0 && !before:
		do = `set input_row = "before" in [log]`
	case c.Rows < 0 && before:
		do = `set input_row = "after" in [log]`
	case c.Rows < 0:
		do = "shift the input column down by a row"
	}
	return &RefusedError{What: "the columns are paired one row off: " + c.Words, Do: do}
}

// clearLaw is the share of the input that a law may leave and still be the one
// that ran.
const clearLaw = 0.1

// lawGuesses are the rows by which input and dither may have been logged late.
// The dither may have been logged in the input's row or in its own.
var lawGuesses = []struct{ shift, dither int }{{0, 0}, {-1, -1}, {-1, 0}, {1, 1}, {1, 0}}

// lawResiduals returns the share of the input's variance that the law leaves
// under each of lawGuesses, as it is and with its sign turned.
func lawResiduals(exps []*data.Experiment, law *data.Stopgap) [][2]float64 {
	// What the law leaves, with either sign, and the input itself.
	type signals [3]float64
	n := len(lawGuesses)
	total := make([]signals, n)
	for _, e := range exps {
		for _, s := range e.Pieces() {
			first, last := max(len(law.Numerator), len(law.Denominator))+1, len(s.Y)-1
			if first >= last {
				continue
			}
			means, squares := make([]signals, n), make([]signals, n)
			for _, mean := range []bool{true, false} {
				for k := first; k < last; k++ {
					var right float64
					for i, c := range law.Numerator {
						y := s.Y[k-i]
						if s.R != nil {
							y -= s.R[k-i]
						}
						right += c * y
					}
					for j, g := range lawGuesses {
						var left float64
						for i, c := range law.Denominator {
							u := s.U[k+g.shift-i]
							if s.D != nil {
								u -= s.D[k+g.dither-i]
							}
							left += c * u
						}
						for i, v := range (signals{left + right, left - right, left}) {
							if mean {
								means[j][i] += v
							} else {
								v -= means[j][i]
								squares[j][i] += v * v
							}
						}
					}
				}
				for j := range means {
					for i := range means[j] {
						if mean {
							means[j][i] /= float64(last - first)
						} else {
							total[j][i] += squares[j][i]
						}
					}
				}
			}
		}
	}
	out := make([][2]float64, n)
	for j, t := range total {
		out[j] = [2]float64{math.Inf(1), math.Inf(1)}
		if t[2] != 0 {
			out[j] = [2]float64{t[0] / t[2], t[1] / t[2]}
		}
	}
	return out
}

// LawLeaves returns the share of the input's variance that the linear law
// den (u - u0 - d) = byR (r - y0) - byY (y - y0) leaves in logs of its own period,
// coefficients of rising powers of z^-1: next to 0 where it ran. It goes by the
// median of the squares, over that of a normal variable, so that rows in which a
// limit held something back do not count unless they are most. A reference that is
// not logged counts as constant.
func LawLeaves(exps []*data.Experiment, den, byY, byR []float64) float64 {
	var left []float64
	var all float64
	middle := func(x []float64) float64 {
		slices.Sort(x)
		return x[len(x)/2]
	}
	lawErrors(exps, den, byY, byR, func(w, v []float64) {
		all += about(v)
		at := middle(slices.Clone(w))
		for _, x := range w {
			left = append(left, (x-at)*(x-at))
		}
	})
	if all == 0 {
		return math.Inf(1)
	}
	return middle(left) / distuv.ChiSquared{K: 1}.Quantile(0.5) * float64(len(left)) / all
}

// lawErrors calls f for each piece of the logs with the errors of a law and with
// its left-hand side.
func lawErrors(exps []*data.Experiment, den, byY, byR []float64, f func(w, v []float64)) {
	for _, e := range exps {
		for _, s := range e.Pieces() {
			n := max(len(den), len(byY), len(byR))
			var w, v []float64
			for k := n + 1; k < len(s.Y)-1; k++ {
				var left, right float64
				for i, c := range den {
					u := s.U[k-i]
					if s.D != nil {
						u -= s.D[k-i]
					}
					left += c * u
				}
				for i, c := range byY {
					right += c * s.Y[k-i]
				}
				if s.R != nil {
					for i, c := range byR {
						right -= c * s.R[k-i]
					}
				}
				w, v = append(w, left+right), append(v, left)
			}
			if len(w) > 0 {
				f(w, v)
			}
		}
	}
}
