package main

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"unicode/utf8"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/ident"
)

// watchLines prints a watch as it goes.
type watchLines struct {
	p       *page
	w       *ident.Watch
	rig     *data.Rig
	watched []string
	decimal int             // of the time
	said    map[string]bool // kinds of notes of the window before
}

func newWatchLines(p *page, w *ident.Watch, rig *data.Rig) *watchLines {
	seconds, _ := w.Window()
	return &watchLines{p: p, w: w, rig: rig, watched: w.Report().Watched, decimal: max(0, 1-int(math.Floor(math.Log10(seconds))))}
}

// quantities in words.
var quantities = map[string]string{"gain": "gain", "pole": "rightmost pole", "growth": "growth of the pair"}

func (l *watchLines) start(m *ident.Model) {
	seconds, rare := l.w.Window()
	report := l.w.Report()
	p := l.p
	p.line("Watching %s against its model", m.Rig)
	p.item("gain", words.Number(m.Plant.Numerator[0])+", the leading coefficient")
	if len(l.watched) > 1 {
		last := m.Poles[0]
		for _, r := range m.Poles {
			if r.Re > last.Re || r.Re == last.Re && r.Im > last.Im {
				last = r
			}
		}
		text, _ := words.Root(last)
		p.item("pole", text+" rad/s, the rightmost one")
	}
	p.item("windows", fmt.Sprintf("%s, %d rows", words.Seconds(seconds), int(math.Round(seconds/m.Noise.SamplePeriod))))
	p.item("false alarms", fmt.Sprintf("one in %s of log on average, %s windows", long(report.FalseAlarmEvery), words.Number(math.Round(rare))))
	p.heading("Change against the model, ± half a 95 % interval")
	head := fmt.Sprintf("%9s", "time, s")
	for _, name := range l.watched {
		head += fmt.Sprintf(" %13s", name+", %")
	}
	p.line("%s %6s %8s", head, "noise", "at limit")
}

// long formats a time that may be hours.
func long(seconds float64) string {
	switch {
	case seconds >= 3600:
		return words.Number(seconds/3600) + " h"
	case seconds >= 120:
		return words.Number(seconds/60) + " min"
	}
	return words.Seconds(seconds)
}

// percent formats a change with its sign.
func percent(x float64) string {
	s := strconv.FormatFloat(100*x, 'f', 1, 64)
	if s = strings.TrimPrefix(s, "-"); x < 0 && strings.Trim(s, "0.") != "" {
		return "-" + s
	}
	return "+" + s
}

// shownSD is the relative deviation from which on a figure is none.
const shownSD = 0.3

func (l *watchLines) window(win *ident.WatchWindow) {
	line := fmt.Sprintf("%9s", strconv.FormatFloat(win.To, 'f', l.decimal, 64))
	for i := range l.watched {
		text := ""
		if i < len(win.Moves) && win.Moves[i].SD < shownSD {
			m := win.Moves[i]
			half := (m.Interval95.Hi - m.Interval95.Lo) / 2
			text = percent(m.Change) + " ± " + strconv.FormatFloat(100*half, 'f', 1, 64)
		}
		line += strings.Repeat(" ", max(1, 14-utf8.RuneCountInString(text))) + text
	}
	noise := ""
	if win.Noise > 0 {
		noise = strconv.FormatFloat(win.Noise, 'f', 2, 64)
	}
	line += fmt.Sprintf(" %6s %6.1f %%", noise, 100*win.AtLimit)
	switch {
	case len(win.Alarms) > 0:
		line += "  " + l.p.bold("ALARM")
	case !win.Told:
		line += "  cannot tell"
	}
	l.p.line("%s", line)
	now := map[string]bool{}
	for _, n := range win.Notes {
		kind := strings.Map(func(r rune) rune {
			if r >= '0' && r <= '9' || r == '.' || r == '-' {
				return -1
			}
			return r
		}, n)
		if now[kind] = true; !l.said[kind] {
			wrap(l.p.w, strings.Repeat(" ", 11), n)
		}
	}
	l.said = now
	for _, a := range l.w.Report().Alarms {
		if a.Time == win.To && len(win.Alarms) > 0 {
			wrap(l.p.w, strings.Repeat(" ", 11), alarmWords(a))
		}
	}
}

// bold sets text off where it is seen.
func (p *page) bold(text string) string {
	if p.colour {
		return "\x1b[1m" + text + "\x1b[0m"
	}
	return text
}

// alarmWords says what an alarm found.
func alarmWords(a ident.WatchAlarm) string {
	way := "up"
	if a.Now.Change < a.Before {
		way = "down"
	}
	return fmt.Sprintf("%s %s since about %s s: %s %% (%s to %s) against the model, %s %% before", quantities[a.Name], way,
		words.Number(a.Since), percent(a.Now.Change), percent(a.Now.Interval95.Lo), percent(a.Now.Interval95.Hi), percent(a.Before))
}

// scattered is the factor from which windows scatter more than their rows say that is worth a line.
const scattered = 1.3

func (l *watchLines) end(r *ident.WatchReport, loops *design.Loops, margins *design.Margins) {
	p := l.p
	p.heading(fmt.Sprintf("%s, %s, %d of which could tell", words.Count(r.Log.Rows, "row"), words.Count(r.Windows, "window"), r.Told))
	for _, m := range r.Now {
		p.item(m.Name+" at the end", fmt.Sprintf("%s %% (%s to %s) against the model", percent(m.Change), percent(m.Interval95.Lo), percent(m.Interval95.Hi)))
	}
	for i, s := range r.Scatter {
		if s > scattered {
			p.item("scatter", fmt.Sprintf("the windows' %s scatters %.1f times more than their rows say; alarms allow for that", r.Watched[i], s))
		}
	}
	if r.LawRan != nil {
		which := "the rig file's stopgap law"
		if loops != nil {
			which = "these loops"
		}
		p.item("law", fmt.Sprintf("%s of the windows were taken under %s", words.Share(*r.LawRan), which))
	}
	if margins != nil {
		p.item("these loops", loopsNow(margins))
	}
	switch n := len(r.Alarms); {
	case n == 0 && r.Told == 0:
		p.item("alarms", "none could be raised: no window could tell")
	case n == 0:
		p.item("alarms", "none")
	default:
		p.item("alarms", words.Count(n, "alarm")+", the first at "+words.Number(r.Alarms[0].Time)+" s: "+alarmWords(r.Alarms[0]))
	}
}

// loopsNow says what is left of the loops' margins on the plant as it was followed.
func loopsNow(m *design.Margins) string {
	if !m.Stable {
		return "do not hold the plant as it now is: do not close them"
	}
	factor := func(v *float64, none string) string {
		if v == nil {
			return none
		}
		return words.Brief(*v) + " times"
	}
	return fmt.Sprintf("on the plant as it now is the gain may still grow %s or fall to %s; largest |S| %s", factor(m.GainUp, "without limit"), factor(m.GainDown, "nothing"), words.Brief(m.PeakSensitivity))
}
