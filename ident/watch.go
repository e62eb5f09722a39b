package ident

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/lti"
)

// WatchSchema names the version of the result of a watch.
const WatchSchema = "steadyrig/watch/1"

// WatchOptions of NewWatch. The zero value is ready.
type WatchOptions struct {
	FalseAlarmEvery float64  // s of log, on average, while nothing moves; 0: a hundred hours
	Window          float64  // s; 0: by the model
	Law             *lti.Law // that should be running; nil: the rig file's stopgap law
}

const (
	defaultFalseAlarm = 100 * 3600 // s
	fewestToAlarm     = 20         // windows for one false alarm
)

// How long a window is, where nobody says: so that the model's own log, cut to it, would know gain and pole to windowSD of
// themselves; no less than so many memories of the predictor, growth times of the pole, and rows.
const (
	windowSD       = 0.02
	windowMemories = 40
	windowGrowths  = 10
	windowRows     = 1000
)

// widestTold is the standard deviation of gain or pole, relative, from which on a window cannot tell.
const widestTold = 0.1

// The sums that raise alarms: half of a move of one deviation of a window is taken off each score, and a score counts for
// four at most, so that no window raises an alarm alone (see fit.CUSUM).
const (
	watchReference = 0.5
	watchClip      = 4
	// watchFreedom is how many windows' worth the deviations of the windows are believed before their scatter is seen.
	watchFreedom = 10
)

const (
	// A move of gain or pole beyond linearRange is not found by one step: for some windows it is then asked whether they say
	// by farDeviations that it is more than stillFar from where the step led.
	linearRange   = 0.1
	movingWindows = 4
	stillFar      = 0.01
	farDeviations = 3

	followKeep   = 0.8   // of a window's weight is left a window later, in what follows the plant
	keptWindows  = 32    // whose sums are at hand when an alarm comes
	watchedRows  = 4000  // rows of a window in which the law and outside power are looked for, in watchedParts parts
	watchedParts = 4     // spread over it
	strayError   = 8     // deviations of the prediction errors by which two of them differ where it is said
	lawDiffers   = 0.02  // of the filtered input, from which the given law is not the one that ran; rounding leaves less
	louder       = 1.5   // times the model's noise, or its inverse, from which it is said
	shownWindows = 10000 // the last ones, in a report
)

// Watch follows the gain and the rightmost pole of a plant through a log, window by window, in memory and at a cost a row
// that do not grow.
//
// In each window the plant, the noise shape and the constant are estimated by one step from the model (fit.Recursive): what
// is said of the gain is not a move of another pole, of the delay, the disturbance or the operating point. The estimates of
// a quantity are held against the mean of those before; before the first, against the model with its own deviation. So a
// model that is a little wrong raises no alarm however long the log, and one that is wrong beyond its interval does. Where
// the model's structure is known to miss something, its fit depends on how the log was taken, and only the watch's
// own windows are compared. After an alarm the watch starts anew from the plant as it then is.
type Watch struct {
	model  *Model
	rig    *data.Rig
	law    *lawEquation
	report WatchReport

	at       *fit.Prediction // about which the rows are predicted
	tracker  *fit.Recursive
	charts   []chart
	rows     int // of a window
	past     []pastWindow
	followed fit.Sums

	u, y    []float64 // rows not yet given to the tracker
	broken  bool      // the next row does not follow
	win     WatchWindow
	counts  windowCounts
	kept    []data.Segment
	noiseSD float64 // of the last window that told
	lastE   float64 // the last prediction error
	moving  int     // windows that see whether the model was moved far enough

	run, stretches, longer int // equal outputs in a row, and how often they come
	lastY                  float64
}

// A chart is one quantity that is watched.
type chart struct {
	name   string
	base   float64   // of the present linearisation, against the model
	slopes []float64 // of the quantity, by the parameters there
	scores fit.Standardised
	sum    fit.CUSUM
}

// A pastWindow is what is kept of a window that told: its sums, its score on each chart, and what stood there before.
type pastWindow struct {
	from   float64
	sums   fit.Sums
	scores []float64
	before []fit.Standardised
}

type windowCounts struct {
	rows, limited, lost, tripped, gaps, stray, longest int
	stuckAt                                            float64
}

// WatchReport is the result of a watch. Times are those of the log's stamps, s.
type WatchReport struct {
	Schema          string        `json:"schema"`
	Tool            string        `json:"tool"`
	Rig             string        `json:"rig"`
	Made            string        `json:"made"`
	Log             WatchedLog    `json:"log"`
	FalseAlarmEvery float64       `json:"false_alarm_every"` // s of log, on average
	Window          float64       `json:"window"`            // s
	Watched         []string      `json:"watched"`           // "gain", "pole", "growth"
	Windows         int           `json:"windows"`
	Told            int           `json:"told"`    // windows that could tell
	LawRan          *float64      `json:"law_ran"` // share of the windows taken under the given law; null: none given or none to see
	Alarms          []WatchAlarm  `json:"alarms"`
	Now             []WatchMove   `json:"now"` // as followed to the end, against the model; empty: nothing told
	Scatter         []float64     `json:"scatter"`
	Last            []WatchWindow `json:"last_windows"`
	Warnings        []string      `json:"warnings"`
}

// WatchedLog is the log of a watch.
type WatchedLog struct {
	File   string `json:"file"`
	SHA256 string `json:"sha256"`
	Rows   int    `json:"rows"`
}

// WatchMove is how far one quantity is from the model: of "gain" (the leading coefficient) and "pole" (the rightmost one's
// modulus) relative to the model's, of "growth" (of a pair, its real part) relative to the model's modulus.
type WatchMove struct {
	Name       string   `json:"name"`
	Change     float64  `json:"change"`
	SD         float64  `json:"sd"`
	Interval95 Interval `json:"interval_95"`
}

// WatchWindow is what one window says.
type WatchWindow struct {
	From    float64     `json:"from"`
	To      float64     `json:"to"`
	Line    int         `json:"line"` // of its first row
	Rows    int         `json:"rows"`
	Used    int         `json:"used"`
	Told    bool        `json:"told"`     // false: it cannot tell, and Notes say why
	Moves   []WatchMove `json:"moves"`    // of the window alone; empty where the rows do not tell the parameters apart
	Noise   float64     `json:"noise"`    // deviation of the prediction errors over the model's; 0: unknown
	AtLimit float64     `json:"at_limit"` // share of rows with the input at a limit
	Outside float64     `json:"outside"`  // share of the input's variance that no law explains
	Level   float64     `json:"level"`    // the largest sum over the limit of the alarm
	Alarms  []string    `json:"alarms"`   // names
	Notes   []string    `json:"notes"`
}

// WatchAlarm says that a quantity has moved.
type WatchAlarm struct {
	Name   string    `json:"name"`
	Time   float64   `json:"time"`
	Line   int       `json:"line"`
	Since  float64   `json:"since"`  // about when it moved
	Before float64   `json:"before"` // change against the model until then
	Now    WatchMove `json:"now"`    // since then
}

// NewWatch prepares a watch of logs of the model's rig. It errs for a model that holds no plant and for options that do not
// go together.
func NewWatch(m *Model, rig *data.Rig, opt WatchOptions) (*Watch, error) {
	if len(m.Plant.Denominator) == 0 {
		return nil, errors.New("the model holds no plant to hold a log against: fit one first")
	}
	colour, err := m.Colour()
	if err != nil {
		return nil, err
	}
	g := m.TF()
	w := &Watch{model: m, rig: rig, broken: true, noiseSD: m.Noise.SD, lastY: math.NaN()}
	w.at = &fit.Prediction{
		Shape: fit.Shape{Poles: g.Den.Degree(), Zeros: len(g.Num) - 1, Colour: len(colour.Den) - 1, FreeDelay: slices.Contains(m.Plant.Parameters, "delay")},
		Num:   g.Num, Den: g.Den, Delay: g.Delay, D: colour.Den, C: colour.Num, Period: m.Noise.SamplePeriod,
	}
	for w.at.Integrators < w.at.Poles && g.Den[w.at.Integrators] == 0 {
		w.at.Integrators++
	}
	if w.at.Poles > maxWatchPoles || w.at.Colour > 2 || len(w.at.C) > w.at.Poles+w.at.Colour+1 {
		return nil, fmt.Errorf("a model of %s, its disturbance of degree %d over %d, is not one that can be followed: fit one with this tool",
			counted(w.at.Poles, "pole"), len(w.at.C)-1, w.at.Poles+w.at.Colour)
	}
	if !(m.Noise.SD > 0) {
		return nil, fmt.Errorf("the model's noise sd is %g: a watch needs the deviation of its prediction errors", m.Noise.SD)
	}
	w.charts = append(w.charts, chart{name: "gain"})
	if p, ok := m.watchedPole(); ok {
		w.charts = append(w.charts, chart{name: "pole"})
		if imag(p) != 0 {
			w.charts = append(w.charts, chart{name: "growth"})
		}
	}
	w.linearise(w.at)
	w.report = WatchReport{Schema: WatchSchema, Rig: rig.Name, FalseAlarmEvery: opt.FalseAlarmEvery, Window: opt.Window,
		Alarms: []WatchAlarm{}, Now: []WatchMove{}, Last: []WatchWindow{}, Warnings: []string{}}
	if opt.FalseAlarmEvery == 0 {
		w.report.FalseAlarmEvery = defaultFalseAlarm
	}
	period := w.at.Period
	if opt.Window == 0 {
		w.rows = w.windowRows()
	} else if w.rows = int(math.Round(opt.Window / period)); w.rows < w.fewestRows() {
		return nil, fmt.Errorf("a window of %.4g s has %d rows: this model's predictor wants %d at the least, %.4g s", opt.Window, w.rows, w.fewestRows(), float64(w.fewestRows())*period)
	}
	w.report.Window = float64(w.rows) * period
	windows := w.report.FalseAlarmEvery / w.report.Window
	if windows < fewestToAlarm {
		return nil, fmt.Errorf("one false alarm in %.4g s is one in %.2g windows of %.4g s: allow one in %d windows at the most, %.4g s, or take shorter windows",
			w.report.FalseAlarmEvery, windows, w.report.Window, fewestToAlarm, fewestToAlarm*w.report.Window)
	}
	// Two sides of each quantity share the rate; that they are not independent makes alarms rarer, never more frequent.
	limit := fit.CUSUMLimit(windows*2*float64(len(w.charts)), watchReference, watchClip)
	for i := range w.charts {
		c := &w.charts[i]
		w.report.Watched = append(w.report.Watched, c.name)
		c.sum = fit.CUSUM{Reference: watchReference, Limit: limit, Clip: watchClip}
		c.scores = fit.Standardised{Variance: m.variance(c.slopes), Factor: 1, Freedom: watchFreedom, Clip: watchClip}
		if m.Evidence.IntervalsBy == BySandwich || !(c.scores.Variance > 0) {
			c.scores.Forget()
		}
	}
	if len(w.charts) == 1 {
		w.report.Warnings = append(w.report.Warnings, "the rightmost pole rests at zero or may have met another: only the gain is watched")
	}
	if law := opt.Law; law != nil {
		w.law = newLawEquation(law)
	} else if s := rig.Stopgap; s != nil {
		w.law = newLawEquation(&lti.Law{Inner: lti.DTF{Num: s.Numerator, Den: s.Denominator, Period: period}})
	}
	return w, nil
}

// maxWatchPoles is what fit takes.
const maxWatchPoles = 8

// watchedPole returns the rightmost pole, of a pair the one above, and false where it has no slope: where it is held at
// zero or may have met another.
func (m *Model) watchedPole() (complex128, bool) {
	den := m.denominator()
	roots := den.p.Roots()
	p := rightmostRoot(roots)
	if p == 0 {
		return 0, false
	}
	for _, r := range roots {
		if r != p && pairs(r, p) && !(den.meeting(r, p) > apart) {
			return p, false
		}
	}
	return p, true
}

// rightmostRoot returns the root with the largest real part, of a pair the one above.
func rightmostRoot(roots []complex128) complex128 {
	return slices.MaxFunc(roots, func(a, b complex128) int { return cmp.Or(cmp.Compare(real(a), real(b)), cmp.Compare(imag(a), imag(b))) })
}

// variance is that of a combination of the plant's parameters by the model's own covariance.
func (m *Model) variance(slopes []float64) float64 {
	var v float64
	for i, row := range m.Plant.Covariance {
		for j, c := range row {
			v += slopes[i] * slopes[j] * c
		}
	}
	return v
}

// linearise predicts about f from the next row on. It reports false, and changes nothing, where the watched pole of f is
// not of the model's kind.
func (w *Watch) linearise(f *fit.Prediction) bool {
	first, _ := w.model.watchedPole()
	p := rightmostRoot(f.Den.Roots())
	lead := len(f.Num) - 1
	from := w.model.TF().Num[lead]
	if (imag(p) != 0) != (imag(first) != 0) || !(f.Num[lead]/from > 0) {
		return false
	}
	size := cmplx.Abs(first)
	for i := range w.charts {
		c := &w.charts[i]
		c.slopes = make([]float64, f.Zeros+1+f.Poles+1)
		switch c.name {
		case "gain": // its logarithm
			c.base = math.Log(f.Num[lead] / from)
			c.slopes[lead] = 1 / f.Num[lead]
			continue
		case "pole":
			c.base = real(p-first) / size
			if imag(first) != 0 { // its modulus, in logarithms
				c.base = math.Log(cmplx.Abs(p) / size)
			}
		case "growth":
			c.base = real(p-first) / size
		}
		slope := f.Den.Deriv().Eval(p)
		power := complex(1, 0)
		for k := f.Poles; k >= 1; k-- { // a_k multiplies s^(n-k)
			dp := -power / slope
			v := real(dp) / size
			if c.name == "pole" && imag(first) != 0 {
				v = real(dp / p)
			}
			c.slopes[f.Zeros+k] = v
			power *= p
		}
	}
	if !w.distinct(f) {
		f.C, f.D = w.at.C, w.at.D
	}
	w.at = f
	w.tracker = fit.NewRecursive(f, w.model.OperatingPoint.Input, w.model.OperatingPoint.Output)
	w.broken, w.followed, w.past, w.lastE = true, fit.Sums{}, nil, 0
	return true
}

// distinct reports whether the noise zeros of f, which a few windows may have moved far, forget within a quarter of a window
// and lie off the disturbance's own poles, where rows would not tell the two apart.
func (w *Watch) distinct(f *fit.Prediction) bool {
	zeros := zRoots(f.C)
	if 4*memory(zeros) > float64(w.rows)/4 {
		return false
	}
	for _, p := range zRoots(f.D) {
		for _, z := range zeros {
			if cmplx.Abs(z-p) < 0.2*(1-cmplx.Abs(p)) {
				return false
			}
		}
	}
	return true
}

// fewestRows is what a window has at the least: ten rows a parameter, and twice the rows that the start takes.
func (w *Watch) fewestRows() int {
	return max(2*w.tracker.Settle(), rowsPerParameter*(w.at.Free()+1))
}

// windowRows is the length of a window where nobody says, a round number of rows.
func (w *Watch) windowRows() int {
	used := 0
	for _, l := range w.model.Logs {
		used += l.Used
	}
	rows := math.Max(windowRows, windowMemories*memory(zRoots(w.at.C)))
	for _, c := range w.charts {
		rows = math.Max(rows, float64(used)*w.model.variance(c.slopes)/(windowSD*windowSD))
	}
	if p, ok := w.model.watchedPole(); ok {
		rows = math.Max(rows, windowGrowths/(cmplx.Abs(p)*w.at.Period))
	}
	rows = math.Max(float64(w.fewestRows()), math.Min(rows, math.Max(windowRows, float64(used))))
	step := math.Pow(10, math.Floor(math.Log10(rows))-1)
	return int(math.Ceil(rows/step-1e-9) * step)
}

// Window is the length of a window in s, and how many of them a false alarm is allowed for on average.
func (w *Watch) Window() (seconds, perFalseAlarm float64) {
	return w.report.Window, w.report.FalseAlarmEvery / w.report.Window
}

// Add takes the next row of the log and returns the window that it ends, or nil.
func (w *Watch) Add(row data.Row) *WatchWindow {
	n := &w.counts
	if n.rows == 0 {
		w.win = WatchWindow{From: row.Time, Line: row.Line, Moves: []WatchMove{}, Alarms: []string{}, Notes: []string{}}
	}
	n.rows++
	if !math.IsNaN(row.Time) {
		w.win.To = row.Time
	}
	out := false
	if lim := w.rig.Limits.Output; lim != nil {
		out = row.Y < lim[0] || row.Y > lim[1]
	}
	if row.Starts && w.report.Log.Rows > 0 {
		n.gaps++
	}
	if w.broken = w.broken || row.Starts; w.broken || row.Missing || out {
		w.flush()
	}
	w.report.Log.Rows++
	switch {
	case row.Missing:
		n.lost++
		w.broken = true
	case out:
		n.tripped++
		w.broken = true
	default:
		if w.broken {
			w.tracker.Restart()
		}
		w.take(row)
		w.broken = false
		if len(w.u) == fit.RecursiveChunk {
			w.flush()
		}
	}
	if n.rows < w.rows {
		return nil
	}
	return w.close()
}

// take puts a good row where it is needed.
func (w *Watch) take(row data.Row) {
	n := &w.counts
	w.u, w.y = append(w.u, row.U), append(w.y, row.Y)
	if atLimit(row.U, w.rig.Limits.Input) {
		n.limited++
	}
	if row.Y == w.lastY {
		if w.run++; w.run > n.longest {
			n.longest, n.stuckAt = w.run, row.Y
		}
		if w.run == 2 {
			w.longer++
		}
	} else {
		w.run, w.lastY = 1, row.Y
		w.stretches++
	}
	// Rows for the law: all of them, or some parts.
	part := w.rows / watchedParts
	if w.rows > watchedRows && (n.rows-1)%part >= watchedRows/watchedParts {
		return
	}
	if w.broken || len(w.kept) == 0 || w.rows > watchedRows && (n.rows-1)%part == 0 {
		w.kept = append(w.kept, data.Segment{})
	}
	s := &w.kept[len(w.kept)-1]
	s.U, s.Y = append(s.U, row.U), append(s.Y, row.Y)
	if !math.IsNaN(row.R) {
		s.R = append(s.R, row.R)
	}
	if !math.IsNaN(row.D) {
		s.D = append(s.D, row.D)
	}
}

// atLimit reports whether an input is at its limits, but for a thousandth of their range.
func atLimit(u float64, lim *[2]float64) bool {
	if lim == nil {
		return false
	}
	slack := 1e-3 * (lim[1] - lim[0])
	return u <= lim[0]+slack || u >= lim[1]-slack
}

// flush gives the tracker the rows that wait.
func (w *Watch) flush() {
	for _, e := range w.tracker.Add(w.u, w.y) {
		if math.Abs(e-w.lastE) > strayError*w.noiseSD {
			w.counts.stray++
		}
		w.lastE = e
	}
	w.u, w.y = w.u[:0], w.y[:0]
}

// stuckRows is the number of equal outputs in a row that one window in a million of an unstuck sensor shows, or twenty:
// outputs on a coarse grid repeat.
func (w *Watch) stuckRows() int {
	q := (float64(w.longer) + 1) / (float64(w.stretches) + 2)
	return max(20, int(math.Min(1e9, 3*math.Log(1e-6/float64(w.rows))/math.Log(q))))
}

// close ends a window.
func (w *Watch) close() *WatchWindow {
	w.flush()
	win, n := w.win, w.counts
	sums := w.tracker.Take()
	win.Rows, win.Used = n.rows, sums.Rows
	win.AtLimit = float64(n.limited) / float64(n.rows)
	note := func(format string, args ...any) { win.Notes = append(win.Notes, fmt.Sprintf(format, args...)) }
	win.Told = true
	silent := func(format string, args ...any) {
		win.Told = false
		note(format, args...)
	}
	if n.tripped > 0 {
		note("rig tripped: output beyond its limits in %d rows", n.tripped)
	}
	if n.gaps > 0 {
		note("%s", counted(n.gaps, "gap"))
	}
	if n.lost > 0 {
		note("%d rows without numbers", n.lost)
	}
	if n.longest >= w.stuckRows() {
		silent("sensor stuck at %.4g for %d rows", n.stuckAt, n.longest)
	}
	if n.stray > 0 {
		note("%s by %d deviations", counted(n.stray, "jump"), strayError)
	}
	drift, err := sums.Drift()
	switch {
	case 2*sums.Rows < w.rows:
		silent("only %d rows to use", sums.Rows)
	case err != nil:
		silent("rows do not tell the parameters apart")
	}
	if err == nil {
		win.Noise = math.Sqrt(drift.Variance) / w.model.Noise.SD
		if win.Noise > louder || win.Noise < 1/louder {
			note("noise %.1f times the model's", win.Noise)
		}
		for i := range w.charts {
			move := w.charts[i].move(drift)
			win.Moves = append(win.Moves, move)
			if !(move.SD < widestTold) && win.Told {
				silent("too little from outside: %s known to ±%.0f %%", move.Name, 100*z95*move.SD)
			}
		}
	}
	w.lookAtLaw(&win, silent, note)
	if win.Told {
		w.compare(&win, drift, sums)
		w.noiseSD = math.Sqrt(drift.Variance)
	}
	w.report.Windows++
	w.report.Last = append(w.report.Last, win)
	if len(w.report.Last) >= 2*shownWindows {
		w.report.Last = slices.Delete(w.report.Last, 0, len(w.report.Last)-shownWindows)
	}
	w.counts, w.kept = windowCounts{}, nil
	return &win
}

// lookAtLaw says whether anything but the law moved the input, and whether it was the law that should run.
func (w *Watch) lookAtLaw(win *WatchWindow, silent, note func(string, ...any)) {
	pieces := slices.DeleteFunc(w.kept, func(s data.Segment) bool { return len(s.Y) < data.MinSegment })
	if len(pieces) == 0 {
		return
	}
	for i, s := range pieces {
		if len(s.R) < len(s.Y) {
			pieces[i].R = nil
		}
		if len(s.D) < len(s.Y) {
			pieces[i].D = nil
		}
	}
	exps := []*data.Experiment{{Segments: pieces, Period: w.at.Period}}
	out := outside(exps)
	win.Outside = out.Share
	if out.Quiet {
		silent("nothing from outside moves the input")
	}
	if w.law == nil {
		return
	}
	left := w.law.unexplained(pieces, w.rig.Limits.Input)
	if math.IsInf(left, 1) {
		return
	}
	ran := 0.0
	if left < lawDiffers {
		ran = 1
	} else {
		note("another law ran: %.0f %% of the input unexplained", math.Min(100, 100*left))
	}
	if w.report.LawRan == nil {
		w.report.LawRan = new(float64)
		w.law.windows = 0
	}
	w.law.windows++
	*w.report.LawRan += (ran - *w.report.LawRan) / float64(w.law.windows)
}

// compare takes a window that tells into the charts.
func (w *Watch) compare(win *WatchWindow, drift *fit.Drift, sums fit.Sums) {
	w.report.Told++
	w.followed = w.followed.Forget(followKeep, sums)
	followed, err := w.followed.Drift()
	if err != nil {
		followed = drift
	}
	w.report.Now = w.moves(followed)
	if w.moving > 0 {
		if w.moving--; w.beyond(followed, stillFar, farDeviations) {
			w.linearise(w.at.Moved(followed.Moved))
		}
		return
	}
	past := pastWindow{from: win.From, sums: sums}
	var raised []int
	for i := range w.charts {
		c := &w.charts[i]
		past.before = append(past.before, c.scores)
		z, ok := c.scores.Next(c.value(drift), c.variance(drift))
		if past.scores = append(past.scores, z); !ok {
			continue
		}
		if alarm := c.sum.Add(z); alarm != 0 {
			raised = append(raised, i)
		}
		win.Level = math.Max(win.Level, c.sum.Level())
	}
	if w.past = append(w.past, past); len(w.past) > keptWindows {
		w.past = w.past[1:]
	}
	if len(raised) > 0 {
		w.alarm(win, drift, raised)
	}
}

// beyond reports whether a quantity has moved from the linearisation by more than so much and so many deviations.
func (w *Watch) beyond(d *fit.Drift, by, deviations float64) bool {
	return slices.ContainsFunc(w.charts, func(c chart) bool {
		return math.Abs(c.value(d)-c.base) > math.Max(by, deviations*math.Sqrt(c.variance(d)))
	})
}

// alarm reports the charts that raised one, and starts anew from the plant as it now is.
func (w *Watch) alarm(win *WatchWindow, drift *fit.Drift, raised []int) {
	win.Level = 1
	first := len(w.past) - 1
	for _, i := range raised {
		c := &w.charts[i]
		from := w.changed(i)
		first = min(first, from)
		var since fit.Sums
		for _, p := range w.past[min(from+1, len(w.past)-1):] { // the plant moved within the first one
			since = since.Forget(1, p.sums)
		}
		if d, err := since.Drift(); err == nil {
			drift = d
		}
		a := WatchAlarm{Name: c.name, Time: win.To, Line: win.Line, Since: w.past[from].from, Before: c.shown(w.past[from].before[i].Mean), Now: c.move(drift)}
		w.report.Alarms = append(w.report.Alarms, a)
		win.Alarms = append(win.Alarms, a.Name)
	}
	w.report.Now = w.moves(drift)
	before := w.past[first].before
	far := w.beyond(drift, linearRange, 0)
	if w.linearise(w.at.Moved(drift.Moved)) && far {
		w.moving = movingWindows
	}
	for i := range w.charts {
		w.charts[i].scores = before[i] // the move is no scatter
		w.charts[i].scores.Forget()
		w.charts[i].sum.Restart()
	}
}

// changed is the first of the windows kept whose scores, up to the last one, have a mean of the largest likelihood (Hinkley,
// Inference about the change-point in a sequence of random variables, Biometrika 57 (1970) 1-17).
func (w *Watch) changed(chart int) int {
	at, best, sum := len(w.past)-1, 0.0, 0.0
	for k := len(w.past) - 1; k >= 0; k-- {
		sum += w.past[k].scores[chart]
		if l := sum * sum / float64(len(w.past)-k); l > best {
			at, best = k, l
		}
	}
	return at
}

// value is the quantity by a drift, against the model.
func (c *chart) value(d *fit.Drift) float64 {
	v := c.base
	for i, s := range c.slopes[:min(len(c.slopes), len(d.Moved))] {
		v += s * d.Moved[i]
	}
	return v
}

func (c *chart) variance(d *fit.Drift) float64 {
	var v float64
	for i, s := range c.slopes {
		for j, t := range c.slopes {
			if s != 0 && t != 0 {
				v += s * t * d.Cov.At(i, j)
			}
		}
	}
	return v
}

// shown takes a value to a relative change: what is added up in logarithms multiplies.
func (c *chart) shown(v float64) float64 {
	if c.name == "gain" {
		return math.Expm1(v)
	}
	return v
}

func (c *chart) move(d *fit.Drift) WatchMove {
	v, sd := c.value(d), math.Sqrt(c.variance(d))
	return WatchMove{Name: c.name, Change: c.shown(v), SD: sd, Interval95: Interval{c.shown(v - z95*sd), c.shown(v + z95*sd)}}
}

func (w *Watch) moves(d *fit.Drift) []WatchMove {
	var out []WatchMove
	for i := range w.charts {
		out = append(out, w.charts[i].move(d))
	}
	return out
}

// Plant is the plant as it was followed to the end.
func (w *Watch) Plant() lti.TF {
	if f, err := w.followed.Drift(); err == nil {
		return w.at.Moved(f.Moved).TF()
	}
	return w.at.TF()
}

// Report returns what the watch has found so far. Rows of a window that has not ended are not in it.
func (w *Watch) Report() *WatchReport {
	r := w.report
	r.Scatter = nil
	for _, c := range w.charts {
		r.Scatter = append(r.Scatter, math.Sqrt(c.scores.Factor))
	}
	if n := len(r.Last); n > shownWindows {
		r.Last = r.Last[n-shownWindows:]
	}
	return &r
}

// A lawEquation is a linear law as left u = reference r - output y, deviations, in powers of z^-1.
type lawEquation struct {
	left, reference, output lti.Poly
	windows                 int // that it was held against
}

func newLawEquation(l *lti.Law) *lawEquation {
	one := lti.DTF{Num: lti.Poly{1}, Den: lti.Poly{1}}
	f := one
	if l.Prefilter != nil {
		f = *l.Prefilter
	}
	if l.Outer == nil {
		return &lawEquation{left: l.Inner.Den.Mul(f.Den), reference: l.Inner.Num.Mul(f.Num), output: l.Inner.Num.Mul(f.Den)}
	}
	o := *l.Outer
	return &lawEquation{
		left: l.Inner.Den.Mul(o.Den).Mul(f.Den), reference: l.Inner.Num.Mul(o.Num).Mul(f.Num), output: l.Inner.Num.Mul(o.Num.Add(o.Den)).Mul(f.Den),
	}
}

// unexplained is the share of the filtered input that the law leaves in rows whose past kept off the limits; +Inf where
// there is none.
func (l *lawEquation) unexplained(pieces []data.Segment, limits *[2]float64) float64 {
	n := max(len(l.left), len(l.reference), len(l.output))
	var rest, all float64
	for _, s := range pieces {
		var w, v []float64
		free := 0 // rows in a row
		for k := range s.Y {
			if free++; atLimit(s.U[k], limits) {
				free = 0
			}
			if free <= n {
				continue
			}
			var left, right float64
			for i, c := range l.left {
				u := s.U[k-i]
				if s.D != nil {
					u -= s.D[k-i]
				}
				left += c * u
			}
			for i, c := range l.output {
				right += c * s.Y[k-i]
			}
			if s.R != nil {
				for i, c := range l.reference {
					right -= c * s.R[k-i]
				}
			}
			w, v = append(w, left+right), append(v, left)
		}
		if len(w) > 0 {
			rest, all = rest+about(w), all+about(v)
		}
	}
	if all == 0 {
		return math.Inf(1)
	}
	return rest / all
}
