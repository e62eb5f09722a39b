package words

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/ident"
)

// Model says in a sentence what a model comes to.
func Model(m *ident.Model) string {
	if len(m.Plant.Denominator) == 0 {
		return fmt.Sprintf("no plant of %s can be given.", m.Rig)
	}
	meaning := map[string]string{
		ident.Sound:   "no test speaks against it.",
		ident.Weak:    "usable with care, see the warnings.",
		ident.Refused: "not to be designed with.",
	}[m.Verdict]
	return fmt.Sprintf("%s: %s; %s", m.Rig, Unstable(m.Poles), meaning)
}

// Unstable names the unstable poles, those that may be, and those at zero.
func Unstable(poles []ident.Root) string {
	var found, perhaps []string
	zero := 0
	for _, r := range poles {
		if r.Im < 0 {
			continue
		}
		if AtZero(r) {
			zero++
			continue
		}
		if !r.Unstable && !(r.ProbabilityUnstable > 0.025) {
			continue
		}
		what := fmt.Sprintf("at %s rad/s (95 %%: %s)", Number(r.Re), Interval(r.Re95))
		switch {
		case r.Im != 0:
			what = fmt.Sprintf("pair at %s ± %si rad/s (real part 95 %%: %s)", Number(r.Re), Number(r.Im), Interval(r.Re95))
		case r.Re > 0 && r.Re95.Lo > 0:
			what += ", doubling in " + Seconds(math.Ln2/r.Re)
		}
		if r.Re95.Contains(0) {
			perhaps = append(perhaps, what+", probability "+Probability(r.ProbabilityUnstable))
			continue
		}
		found = append(found, what)
	}
	var parts []string
	switch len(found) {
	case 0:
	case 1:
		parts = append(parts, "unstable pole "+found[0])
	default:
		parts = append(parts, "unstable poles "+strings.Join(found, "; "))
	}
	if len(perhaps) > 0 {
		parts = append(parts, "perhaps unstable "+strings.Join(perhaps, "; "))
	}
	switch {
	case zero > 0 && len(parts) == 0:
		return Count(zero, "pole") + " at zero: the rig drifts, it does not grow by itself"
	case zero > 0:
		parts = append(parts, Count(zero, "pole")+" at zero")
	case len(parts) == 0:
		return "no unstable pole was found"
	}
	return strings.Join(parts, "; ")
}

// Assumes says what a method takes for granted.
var Assumes = map[string]string{
	"prediction": "plant and noise shape",
	"state":      "a state of low order",
	"long":       "only a long memory",
	"outside":    "only the outside signal",
}

// RowsSeen says where other methods worked on some rows of a long log only.
func RowsSeen(methods []ident.Method) string {
	for _, e := range methods {
		if e.Rows < methods[0].Rows && e.Rows > 0 {
			return fmt.Sprintf("%s saw all %d rows, the others %d of them, in stretches spread over the log; with --referee they see all.",
				methods[0].Name, methods[0].Rows, e.Rows)
		}
	}
	return ""
}

// Rightmost formats the pole with the largest real part.
func Rightmost(poles [][2]float64) string {
	if len(poles) == 0 {
		return "–"
	}
	best := poles[rightmost(poles)]
	if best[1] != 0 {
		return Number(best[0]) + " ± " + Number(math.Abs(best[1])) + "i"
	}
	return Number(best[0])
}

func rightmost(poles [][2]float64) int {
	best := 0
	for i, q := range poles {
		if q[0] > poles[best][0] {
			best = i
		}
	}
	return best
}

// Within is half the 95 % interval of a method's rightmost pole by its own account, rad/s; a dash where it gives none.
func Within(e ident.Method) string {
	if len(e.Poles) == 0 || len(e.SD) != len(e.Poles) {
		return "–"
	}
	return "± " + Brief(normal95*e.SD[rightmost(e.Poles)])
}

// normal95 is the two-sided 95 % quantile of the normal distribution.
const normal95 = 1.959963984540054

// Loops says in a sentence what a design comes to.
func Loops(l *design.Loops) string {
	q := l.Promise
	switch {
	case l.Inner == nil:
		return l.Rig + ": no loops are given."
	case q == nil:
		return l.Rig + ": the loops were not proven."
	}
	if l.Verdict == design.Refused {
		return fmt.Sprintf("%s: of %d plants drawn from the model %d stay stable and %d keep the spec.", l.Rig, q.Plants, q.Stable, q.MeetSpec)
	}
	return fmt.Sprintf("%s: of the plants that the data allow, at least %s keep the spec (%g %% confidence; %d of %d drawn).",
		l.Rig, Share(q.LowerBound), 100*q.Confidence, q.MeetSpec, q.Plants)
}

// halfWidth is half the width of the 95 % interval of a parameter of the plant, 0 where it was not estimated.
func halfWidth(m *ident.Model, parameter string) float64 {
	i := slices.Index(m.Plant.Parameters, parameter)
	if i < 0 || i >= len(m.Plant.Covariance) || !(m.Plant.Covariance[i][i] > 0) {
		return 0
	}
	return 1.96 * math.Sqrt(m.Plant.Covariance[i][i])
}

// Delay is the plant's delay with half the width of its 95 % interval where it was estimated.
func Delay(m *ident.Model) string {
	if half := halfWidth(m, "delay"); half > 0 {
		return Seconds(m.Plant.Delay) + " ± " + Seconds(half)
	}
	return "held at " + Seconds(m.Plant.Delay)
}

// Numerator and Denominator are the plant's polynomials, each coefficient with half the width of its 95 % interval.
func Numerator(m *ident.Model) string {
	c := m.Plant.Numerator
	half := make([]float64, len(c))
	for i := range c {
		half[i] = halfWidth(m, fmt.Sprintf("b%d", len(c)-1-i))
	}
	return PolynomialWithin(c, half, "s")
}

func Denominator(m *ident.Model) string {
	c := m.Plant.Denominator
	half := make([]float64, len(c))
	for i := range c {
		half[i] = halfWidth(m, fmt.Sprintf("a%d", i))
	}
	return PolynomialWithin(c, half, "s")
}

// PlantUnits says in what units the plant's transfer function is, those of the log where the rig file names them.
func PlantUnits(u data.Units) string {
	text := "s in rad/s"
	if u.Output != "" {
		text += ", y in " + u.Output
	}
	if u.Input != "" {
		text += ", u in " + u.Input
	}
	return text
}

// Basis tells what the intervals rest on where it is not the curvature of the likelihood at its peak; else empty.
func Basis(m *ident.Model) string {
	switch m.Evidence.IntervalsBy {
	case ident.ByDraws:
		return fmt.Sprintf("those of %s drawn from the likelihood of a short log, over all structures of %s that it leaves open",
			Count(len(m.Plant.Draws), "plant"), Count(len(m.Poles), "pole"))
	case ident.BySandwich:
		return "by the sandwich form, about the best plant of this structure and not about the true one"
	}
	return ""
}

// LeftOut tells which outputs were left out because they are wrong, a line for each log and reason.
func LeftOut(m *ident.Model) []string {
	var lines []string
	for _, l := range m.Evidence.LeftOut {
		lines = append(lines, fmt.Sprintf("%s of %s, the first on line %d at %s s (%s)", Count(l.Rows, "output"), l.File, l.Line, Number(l.Time), l.Why))
	}
	return lines
}

// Memories tells the length of the logs in memories of the predictor, which is what intervals rest on.
func Memories(n float64) string { return Brief(n) + " memories of the predictor" }

// LogUsed tells what a log gave to the fit, and of several how noisy it is and how well it goes with the others; unit is
// the output's.
func LogUsed(m *ident.Model, i int, unit string) string {
	l := m.Logs[i]
	text := fmt.Sprintf("%s: %d of %d rows used, %s", l.File, l.Used, l.Rows, Count(l.Segments, "segment"))
	if a := m.Evidence.Agreement; a != nil && i < len(a.Logs) {
		text += ", prediction errors of " + Unit(Number(a.Logs[i].NoiseSD), unit)
		if p := a.Logs[i].Probability; p != nil {
			text += ", one plant with the others: probability " + Probability(*p)
		} else {
			text += ", not compared: alone it does not determine the plant"
		}
	}
	return text
}

// Agreement says whether several logs show one plant, and what differs most clearly; empty for a single log.
func Agreement(m *ident.Model) []string {
	a := m.Evidence.Agreement
	if a == nil {
		return nil
	}
	text := fmt.Sprintf("%s (probability of more difference by chance: %s)", YesNo(a.Agree), Probability(a.Probability))
	if a.Odd != "" {
		text += "; the odd one out is " + a.Odd
	}
	list := []string{text}
	for i, c := range a.Changes {
		if i == shownChanges || i > 0 && c.Probability > 0.05 {
			break
		}
		here, others := a.Odd, "the others"
		if here == "" {
			here, others = "the second", "the first"
		}
		list = append(list, fmt.Sprintf("%s: %s in %s, %s in %s (probability %s)", c.Name, Estimate(&c.Here, c.Unit), here, Estimate(&c.Others, c.Unit), others, Probability(c.Probability)))
	}
	return list
}

// shownChanges is the number of differences between logs that are told; the file has them all.
const shownChanges = 3

// Agrees says whether a method agrees with the model, nothing where it gives no poles.
func Agrees(e ident.Method) string {
	if len(e.Poles) == 0 {
		return "–"
	}
	return YesNo(e.Agrees)
}

// ByChance tells how probable so large a difference from the model is by chance, nothing where it was not tested.
func ByChance(e ident.Method) string {
	if e.Probability == nil {
		return "–"
	}
	return Probability(*e.Probability)
}

// Flaw tells a flaw of a log, how often and where first; named: with its file.
func Flaw(f ident.Flaw, named bool) string {
	text := f.Name
	if f.Column != "" {
		text += " in " + f.Column
	}
	if named {
		text += " of " + f.File
	}
	if f.Count > 1 {
		text += fmt.Sprintf(", %d times", f.Count)
	}
	switch {
	case f.Line > 0 && f.Count > 1:
		text += fmt.Sprintf(", first on line %d", f.Line)
	case f.Line > 0:
		text += fmt.Sprintf(", on line %d", f.Line)
	}
	return text
}

// FlawText tells in sentences what a flaw is, what was done about it, and what its owner can do.
func FlawText(f ident.Flaw) string {
	return sentence(strings.TrimSuffix(f.Detail, ".")) + " " + sentence(f.Effect) + " What to do: " + f.Remedy + "."
}

// Miss tells the worst figure of what a promise missed and what was asked, each with its unit; both empty for what is
// kept or not, without a figure.
func Miss(m design.MissReason, u data.Units) (worst, asked string) {
	show := Number
	switch m.What {
	case "overshoot":
		show = Share
	case "settling":
		show = Seconds
	case "input_noise":
		show = func(x float64) string { return Unit(Number(x), u.Input) }
	case "kick_peak":
		show = func(x float64) string { return Unit(Number(x), u.Output) }
	case "peak_sensitivity":
	default:
		return "", ""
	}
	return show(m.Worst), show(m.Asked)
}

// Estimate is a figure with its unit and its 95 % interval.
func Estimate(e *ident.Estimate, unit string) string {
	if e.Interval95.Lo == e.Interval95.Hi {
		return Unit(Number(e.Value), unit)
	}
	return fmt.Sprintf("%s (95 %%: %s)", Unit(Number(e.Value), unit), Interval(e.Interval95))
}

// Leading is the leading numerator coefficient, ratio the unit of output over input.
func Leading(m *ident.Model, ratio string) string {
	excess := len(m.Plant.Denominator) - len(m.Plant.Numerator)
	return Estimate(m.Gain.HighFrequency, Unit(ratio, "s"+power(-excess))) + fmt.Sprintf(", over s%s at high frequency", power(excess))
}

// Residuals tells the tests on what a model leaves over.
func Residuals(m *ident.Model) string {
	r := m.Evidence.Residuals
	if r.Lags == 0 {
		return fmt.Sprintf("white: not tested, the log is in pieces too short; free of the input: %s, linear: %s (probability of more by chance)", Probability(r.CrossInput), Probability(r.Linearity))
	}
	return fmt.Sprintf("white: %s, free of the input: %s, linear: %s (probability of more by chance, %d lags)",
		Probability(r.Whiteness), Probability(r.CrossInput), Probability(r.Linearity), r.Lags)
}

// Root is a pole or a zero, a pair as one, and its 95 % intervals.
func Root(r ident.Root) (value, bounds string) {
	if r.Im == 0 {
		return Number(r.Re), Interval(r.Re95)
	}
	return Number(r.Re) + " ± " + Number(r.Im) + "i", Interval(r.Re95) + "; ± " + Interval(r.Im95)
}

// AtZero reports whether a root is an integrator: the structure holds it at zero, nothing measured it there.
func AtZero(r ident.Root) bool { return r.Re == 0 && r.Im == 0 }

// Unstableness says whether a root lies in the right half-plane, "open" where its interval holds zero, and how
// probable that is. Of a pole held at zero there is no probability to tell.
func Unstableness(r ident.Root) (verdict, probability string) {
	probability = Probability(r.ProbabilityUnstable)
	switch {
	case AtZero(r):
		return "at zero (integrator)", "–"
	case r.Re95.Contains(0):
		return "open", probability
	case r.Unstable:
		return "YES", probability
	}
	return "no", probability
}

// PoleNotes tells what the table of the poles leaves unsaid.
func PoleNotes(poles []ident.Root) []string {
	var notes []string
	if slices.ContainsFunc(poles, AtZero) {
		notes = append(notes, "Poles at zero are a structure that was chosen, not measured: the interval beside one is that of a free pole in its place.")
	}
	for _, r := range poles {
		if r.Re95All != (ident.Interval{}) && r.Re95All != r.Re95 {
			return append(notes, "Each interval holds for its pole alone; model.json has wider ones that hold for all at once (re_95_all, im_95_all).")
		}
	}
	return notes
}

// ExactTitle heads the intervals that rest on no long log.
func ExactTitle(e *ident.Exact) string { return "Finite-sample intervals of poles, rad/s: " + e.Claim }

// ExactIntervals lists the intervals that rest on no long log: which pole, which part of it, from where to where.
func ExactIntervals(e *ident.Exact) (pole, part, bounds []string) {
	for _, q := range e.Poles {
		at, of := Number(q.Re), "real pole"
		switch {
		case q.Im95 != nil:
			at, of = Number(q.Re)+" ± "+Number(q.Im)+"i", "real part"
		case q.OfTwo:
			of = "larger of two"
		}
		pole, part, bounds = append(pole, at), append(part, of), append(bounds, Interval(q.Re95))
		if q.Im95 != nil {
			pole, part, bounds = append(pole, ""), append(part, "imaginary part"), append(bounds, "± "+Interval(*q.Im95))
		}
	}
	return pole, part, bounds
}

// ExactNotes tells what those intervals rest on, and why no more is claimed.
func ExactNotes(e *ident.Exact) []string {
	if e.Claim == ident.ClaimNone {
		return []string{sentence("none can be given: " + e.Note)}
	}
	notes := []string{
		sentence("assumed: " + e.Assumption),
		fmt.Sprintf("If so, each holds the truth in at least %s of logs of any length; at least, since the region that it is a projection of is one for the whole plant. %s, %d sums, seed %d.",
			Share(e.Level), Count(e.Rows, "row"), e.Draws, e.Seed),
	}
	if e.Claim == ident.ClaimApproximate {
		notes = append(notes, "Approximate, since the noise shape comes from the same log; not exact, since "+e.Note+".")
	}
	return notes
}

// sentence gives a text a capital and a full stop.
func sentence(s string) string {
	if s == "" {
		return ""
	}
	return strings.ToUpper(s[:1]) + s[1:] + "."
}

// SteadyGain is the gain at rest, ratio the unit of output over input, or why there is none.
func SteadyGain(m *ident.Model, ratio string) string {
	switch {
	case m.Gain.DC != nil:
		return Estimate(m.Gain.DC, ratio)
	case slices.ContainsFunc(m.Poles, AtZero):
		return "none: the plant integrates"
	}
	return "not determined: the interval of the slowest pole holds zero"
}

// YesNo is yes or NO.
func YesNo(yes bool) string {
	if yes {
		return "yes"
	}
	return "NO"
}

// Bound tells a bound's figure, its interval over the plants that the data allow where it has a width, and what the
// spec asks.
func Bound(b design.Bound) (value, interval, asked string) {
	value, asked = "≥ ", "–"
	if b.Limit == "most" {
		value = "≤ "
	}
	value += Unit(Brief(b.Value), b.Unit)
	if b.Asked != nil {
		asked = Unit(Brief(*b.Asked), b.Unit)
	}
	if iv := b.Interval; iv != nil && iv[1]-iv[0] > 1e-3*math.Abs(b.Value) {
		interval = Interval(ident.Interval{Lo: iv[0], Hi: iv[1]})
	}
	return value, interval, asked
}

// InReach tells whether what is asked can be had, and where one loop could not but two can, that the limit is relaxed.
func InReach(b design.Bound) string {
	if b.Relaxed != "" && b.Asked != nil && b.OK && *b.Asked < b.Value {
		return "relaxed"
	}
	return YesNo(b.OK)
}

// Bands tells of each band its frequencies in rad/s and Hz, its share of the probe's power and of what the log tells,
// how much more power it could get and what that would be worth.
func Bands(i *ident.Informative) [][]string {
	var rows [][]string
	for _, b := range i.Bands {
		rad, hz := Range(b.From, b.To)
		rows = append(rows, []string{
			rad, hz, part(b.Power), part(b.Information), Brief(100*b.Added) + " %", Brief(b.Worth),
		})
	}
	return rows
}

// Range is one of frequencies, given in rad/s, in rad/s and in Hz.
func Range(from, to float64) (rad, hz string) {
	const turn = 2 * math.Pi
	return Brief(from) + " to " + Brief(to), Brief(from/turn) + " to " + Brief(to/turn)
}

// BandNote says what the figures of Bands are.
func BandNote(i *ident.Informative) string {
	return "Power: of what moves the input from outside the loop. Tells: of what the log tells of the pole; the rest, " + part(i.Noise) +
		", rests on the shape assumed for the disturbance. Could add: so much of today's power more, by an even dither in the band, would move the output no more than it moves now. " +
		"Worth: as a log so many times as long."
}

// Excitation tells how rich the signals are that act from outside, and what that is good for; empty where there are none.
func Excitation(list []ident.Excitation, u data.Units) string {
	var parts []string
	for _, e := range list {
		name, unit := "the "+e.Signal, u.Input
		switch e.Signal {
		case "reference":
			unit = u.Output
		case "law":
			name = "what the law leaves unexplained of the input"
		}
		text := fmt.Sprintf("%s is of order %d", name, e.Order)
		switch {
		case e.Order == 0 && e.Noise > 0:
			text = name + " does not stand out (order 0)"
		case e.Order == 0:
			text = name + " does not move (order 0)"
		case e.AtLeast:
			text += " at least"
		}
		if e.Noise > 0 {
			text += ", above rounding of " + Unit(Brief(e.Noise), unit)
		}
		parts = append(parts, text)
	}
	if len(parts) == 0 {
		return ""
	}
	return strings.Join(parts, "; ") + ". A plant of n poles and m zeros takes order n + m + 1"
}

// Bar draws a share of 1 in so many signs, with a mark where chance may reach.
func Bar(s ident.Share, width int) string {
	at := func(x float64) int { return min(width, max(0, int(math.Round(x*float64(width))))) }
	bar := []byte(strings.Repeat("#", at(s.Coherence)) + strings.Repeat(".", width-at(s.Coherence)))
	bar[min(width-1, at(s.ByChance))] = '|'
	return string(bar)
}

// SignalToNoise is a ratio of powers in dB, "none" where there is none.
func SignalToNoise(b ident.CoherenceBand) string {
	if b.SignalToNoise == nil {
		return "none"
	}
	return fmt.Sprintf("%.1f", math.Round(100*math.Log10(*b.SignalToNoise))/10+0) // -0 becomes 0
}

// CoherenceWith names what coherence is taken with.
func CoherenceWith(c *ident.Coherence) string {
	if c.Signals[0] == "law" {
		return "what the law leaves of the input"
	}
	return "the " + strings.Join(c.Signals, " and the ")
}

// CoherenceMeans says what coherence is and how it was found.
func CoherenceMeans(c *ident.Coherence) string {
	return fmt.Sprintf("Coherence: the share of a band's power that moves with %s, bias taken off; as good as %s segments of %s, averaged.",
		CoherenceWith(c), Brief(c.Segments), Seconds(c.Seconds))
}

// CoherenceNote says what the figures of a Coherence are.
func CoherenceNote(c *ident.Coherence) string {
	return CoherenceMeans(c) + fmt.Sprintf(" | is what unrelated signals exceed in %s of bands. S/N: power of the output that moves with it over all other power of the output; "+
		"0 dB is as much, 10 dB ten times as much, above 20 dB it may be more than shown; none is no more than chance.", percent(1-c.Level))
}

// SignalAndNoise tells in which bands the output follows what acts from outside, or why that is not known.
func SignalAndNoise(a *ident.AuditReport) string {
	switch {
	case a.Coherence != nil:
		return a.Coherence.Words
	case a.Outside.Quiet:
		return "not known: nothing acts from outside that input and output could be seen to follow"
	}
	return "not known: the log is too short, or in pieces too short, to tell bands of frequencies apart"
}

// ToExpect tells how well a fit will know the rightmost pole, or why that is not known.
func ToExpect(a *ident.AuditReport) string {
	switch {
	case a.Informative != nil:
		return a.Informative.Words
	case a.Verdict == ident.Refused:
		return "not known: no plant was looked for in this log"
	}
	return "not known: a glance finds no plain plant whose parameters the log tells apart"
}

// NextTests heads the list of next tests.
func NextTests(i *ident.Informative) string {
	iv := i.Pole.Interval95
	return fmt.Sprintf("The rightmost pole after a next test with one change; now ± %s rad/s", Brief((iv.Hi-iv.Lo)/2))
}

// NextTest is half the interval that a change brings, and what to do for it.
func NextTest(n ident.NextTest) (halfWidth, text string) {
	text = n.Words
	if n.What != "longer" && n.What != "logged" {
		text += fmt.Sprintf(": as good as a log %s times as long", Brief(n.Worth))
	}
	if n.HeldBy != "" {
		text += "; held back by " + n.HeldBy
	}
	return "± " + Brief(n.HalfWidth) + " rad/s", text
}

// part formats a share among others.
func part(x float64) string {
	if x < 5e-4 {
		return "< 0.1 %"
	}
	return fmt.Sprintf("%.1f %%", 100*x)
}

// muchAbove is the excess over the yardstick from which on the reason is given.
const muchAbove = 0.25

// Yardstick says in labelled lines how near the loops come to the best that any controller could do.
func Yardstick(y *design.Yardstick, u data.Units) [][2]string {
	least := map[string]string{}
	for _, s := range y.Steps {
		least[s.Demand] = Number(s.Least)
	}
	known := ""
	if y.Reached != nil {
		known = fmt.Sprintf(" (%s is reached)", Number(*y.Reached))
	}
	out := [][2]string{
		{"least peak |S|", fmt.Sprintf("%s for any controller within the input noise asked%s, %s without that limit. The reference's path is free, so overshoot and settling bind no feedback.",
			Number(y.Least), known, least[design.DemandStable])},
		{"these loops", fmt.Sprintf("%s, %s above", Number(y.Pair), percent(y.Excess))},
	}
	if y.Excess > muchAbove {
		out = append(out, [2]string{"why", fmt.Sprintf("with no more input noise than theirs the least is %s, with their hold on slow disturbances too %s; the rest goes to forms this simple, tuned to the spec on all plants drawn",
			least[design.DemandQuiet], least[design.DemandHold])})
	}
	margin := Number(y.Margin)
	if y.Best != nil {
		margin += " of at most " + Number(*y.Best)
	}
	out = append(out, [2]string{"coprime margin", fmt.Sprintf("%s, inner loop alone %s; input counted by %s, output by %s", margin, Number(y.MarginInner),
		Unit(Number(y.InputRange), u.Input), Unit(Number(y.OutputRange), u.Output))})
	gap := fmt.Sprintf("%s from the nominal plant to the farthest of %d drawn: ", Number(y.LargestGap), y.Plants)
	if y.Stabilised == design.Theorem {
		gap += "less than the margins, so that every plant as near is held is a theorem (Vinnicombe 1993)"
	} else {
		gap += "more than the margins cover, so that the plants are held is a count on draws and no theorem"
	}
	return append(out, [2]string{"nu-gap", gap})
}

// percent formats a share without decimals.
func percent(x float64) string { return fmt.Sprintf("%.0f %%", 100*x) }
