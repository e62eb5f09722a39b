package main

import (
	"fmt"
	"math"
	"path/filepath"
	"slices"
	"strconv"
	"strings"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/ident"
)

// A test is what a row of the run table tells: one log, with its audit and its model where there are any.
type test struct {
	path    string
	log     ident.LogUse
	period  float64            // s
	audit   *ident.AuditReport // nil: only a model is there
	model   *ident.Model       // nil: none
	from    string             // the model's file; empty: fitted here
	problem string             // why there is no result, one line
}

// with is the test with a model. A model that was refused is a problem.
func (t test) with(m modelOf) test {
	t.model, t.from = m.Model, m.path
	if m.Verdict == ident.Refused && t.problem == "" {
		t.problem = "refused"
		if n := len(m.Warnings); n > 0 {
			t.problem = oneLine(m.Warnings[n-1])
		}
	}
	return t
}

// rightmost is the pole that matters, nil: there is no model with poles.
func (t *test) rightmost() *ident.Root {
	var far *ident.Root
	if t.model != nil {
		for i, p := range t.model.Poles {
			if p.Im >= 0 && (far == nil || p.Re > far.Re) {
				far = &t.model.Poles[i]
			}
		}
	}
	return far
}

// unstable is the rightmost pole where it is unstable.
func (t *test) unstable() *ident.Root {
	if p := t.rightmost(); p != nil && p.Unstable {
		return p
	}
	return nil
}

// glance is what the audit saw of the unstable pole.
func (t *test) glance() *ident.Estimate {
	if t.audit == nil {
		return nil
	}
	return t.audit.LoopRate.UnstablePole
}

// flaws lists kinds with their counts, the worst first: what makes a model weak, then by the rows concerned.
func (t *test) flaws() []string {
	if t.audit == nil {
		return nil
	}
	list := slices.Clone(t.audit.Flaws)
	slices.SortStableFunc(list, func(a, b ident.Flaw) int {
		if x, y := a.Doubtful(), b.Doubtful(); x != y {
			return map[bool]int{true: -1, false: 1}[x]
		}
		return b.Count - a.Count
	})
	var kinds []string
	count := map[string]int{}
	for _, f := range list {
		if count[f.Name] == 0 {
			kinds = append(kinds, f.Name)
		}
		count[f.Name] += f.Count
	}
	for i, k := range kinds {
		kinds[i] = fmt.Sprintf("%s %d", k, count[k])
	}
	return kinds
}

// A testColumn is a column of the run table: its head, and its cell.
type testColumn struct {
	data.SheetColumn
	of func(t *test) string // empty: not known
}

func isTestColumn(name string) bool {
	return slices.ContainsFunc(testColumns(data.Units{}), func(c testColumn) bool { return c.Name == name })
}

// testColumns lists the columns of the run table in their order. Intervals are 95 %; an open end is an empty cell.
func testColumns(u data.Units) []testColumn {
	ratio := words.Ratio(u.Output, u.Input)
	text := func(name string, of func(t *test) string) testColumn {
		return testColumn{data.SheetColumn{Name: name}, of}
	}
	figure := func(name, unit string, of func(t *test) float64) testColumn {
		return testColumn{data.SheetColumn{Name: name, Unit: unit, Number: true}, func(t *test) string {
			x := of(t)
			if math.IsNaN(x) || math.IsInf(x, 0) {
				return ""
			}
			return strconv.FormatFloat(x, 'g', -1, 64)
		}}
	}
	// interval is three columns: a value, and the ends of its interval.
	interval := func(value, lo, hi, unit string, of func(t *test) (float64, ident.Interval, bool)) []testColumn {
		part := func(pick func(float64, ident.Interval) float64) func(t *test) float64 {
			return func(t *test) float64 {
				if v, iv, ok := of(t); ok {
					return pick(v, iv)
				}
				return math.NaN()
			}
		}
		return []testColumn{
			figure(value, unit, part(func(v float64, _ ident.Interval) float64 { return v })),
			figure(lo, unit, part(func(_ float64, iv ident.Interval) float64 { return iv.Lo })),
			figure(hi, unit, part(func(_ float64, iv ident.Interval) float64 { return iv.Hi })),
		}
	}
	estimate := func(of func(t *test) *ident.Estimate) func(t *test) (float64, ident.Interval, bool) {
		return func(t *test) (float64, ident.Interval, bool) {
			if e := of(t); e != nil {
				return e.Value, e.Interval95, true
			}
			return 0, ident.Interval{}, false
		}
	}
	hasPlant := func(t *test) bool { return t.model != nil && len(t.model.Plant.Denominator) > 0 }
	evidence := func(of func(t *test) float64) func(t *test) float64 {
		return func(t *test) float64 {
			if !hasPlant(t) {
				return math.NaN()
			}
			return of(t)
		}
	}
	read := func(of func(t *test) float64) func(t *test) float64 {
		return func(t *test) float64 {
			if t.log.Rows == 0 {
				return math.NaN()
			}
			return of(t)
		}
	}
	return slices.Concat(
		[]testColumn{
			text("file", func(t *test) string { return filepath.Base(t.path) }),
			text("path", func(t *test) string { return t.path }),
			text("sha256", func(t *test) string { return t.log.SHA256 }),
			figure("rows", "", read(func(t *test) float64 { return float64(t.log.Rows) })),
			figure("used", "", read(func(t *test) float64 { return float64(t.log.Used) })),
			figure("segments", "", read(func(t *test) float64 { return float64(t.log.Segments) })),
			figure("duration", "s", read(func(t *test) float64 { return float64(t.log.Used) * t.period })),
			figure("sample_period", "s", read(func(t *test) float64 { return t.period })),
			text("flaws", func(t *test) string { return strings.Join(t.flaws(), ", ") }),
			text("worst_flaw", func(t *test) string {
				if f := t.flaws(); len(f) > 0 {
					return f[0]
				}
				return ""
			}),
			figure("outside_share", "", func(t *test) float64 {
				switch {
				case t.audit != nil:
					return t.audit.Outside.Share
				case t.model != nil:
					return t.model.Evidence.OutsideShare
				}
				return math.NaN()
			}),
			text("audit", func(t *test) string {
				if t.audit == nil {
					return ""
				}
				return t.audit.Verdict
			}),
			text("next_step", func(t *test) string {
				if t.audit == nil {
					return ""
				}
				return t.audit.NextStep
			}),
		},
		interval("glance_pole", "glance_lo", "glance_hi", "rad/s", estimate((*test).glance)),
		[]testColumn{
			text("fit", func(t *test) string {
				if t.model == nil {
					return ""
				}
				return t.model.Verdict
			}),
			text("poles", func(t *test) string {
				if t.model == nil {
					return ""
				}
				var list []string
				for _, p := range t.model.Poles {
					if p.Im >= 0 {
						list = append(list, strconv.FormatFloat(p.Re, 'g', -1, 64)+map[bool]string{true: "±" + strconv.FormatFloat(p.Im, 'g', -1, 64) + "i"}[p.Im > 0])
					}
				}
				return strings.Join(list, " ")
			}),
		},
		interval("unstable_pole", "unstable_lo", "unstable_hi", "rad/s", func(t *test) (float64, ident.Interval, bool) {
			if p := t.unstable(); p != nil {
				return p.Re, p.Re95, true
			}
			return 0, ident.Interval{}, false
		}),
		interval("unstable_frequency", "frequency_lo", "frequency_hi", "rad/s", func(t *test) (float64, ident.Interval, bool) {
			if p := t.unstable(); p != nil && p.Im > 0 {
				return p.Im, p.Im95, true
			}
			return 0, ident.Interval{}, false
		}),
		[]testColumn{figure("probability_unstable", "", func(t *test) float64 {
			if p := t.rightmost(); p != nil {
				return p.ProbabilityUnstable
			}
			return math.NaN()
		})},
		interval("gain", "gain_lo", "gain_hi", ratio, estimate(func(t *test) *ident.Estimate {
			if t.model == nil {
				return nil
			}
			return t.model.Gain.DC
		})),
		interval("delay", "delay_lo", "delay_hi", "s", func(t *test) (float64, ident.Interval, bool) {
			if !hasPlant(t) {
				return 0, ident.Interval{}, false
			}
			d := t.model.Plant.Delay
			if t.model.Plant.Delay95 == nil {
				return d, ident.Interval{Lo: math.Inf(-1), Hi: math.Inf(1)}, true // held
			}
			return d, *t.model.Plant.Delay95, true
		}),
		[]testColumn{
			figure("noise_sd", u.Output, evidence(func(t *test) float64 { return t.model.Noise.SD })),
			figure("explained_share", "", evidence(func(t *test) float64 { return t.model.Evidence.ExplainedShare })),
			figure("memories", "", evidence(func(t *test) float64 { return t.model.Evidence.Memories })),
			text("warnings", func(t *test) string {
				if t.model == nil {
					return ""
				}
				return oneLine(strings.Join(t.model.Warnings, "; "))
			}),
			text("model", func(t *test) string { return t.from }),
			text("made", func(t *test) string {
				if t.model == nil {
					return ""
				}
				return t.model.Made
			}),
			text("tool", func(t *test) string {
				switch {
				case t.model != nil:
					return t.model.Tool
				case t.audit != nil:
					return t.audit.Tool
				}
				return ""
			}),
			text("problem", func(t *test) string { return t.problem }),
		},
	)
}

// sheetOf makes the run table.
func sheetOf(tests []test, u data.Units) *data.Sheet {
	var heads []data.SheetColumn
	columns := testColumns(u)
	for _, c := range columns {
		heads = append(heads, c.SheetColumn)
	}
	rows := make([][]string, len(tests))
	for i := range tests {
		for _, c := range columns {
			rows[i] = append(rows[i], c.of(&tests[i]))
		}
	}
	return data.NewSheet(heads, rows)
}
