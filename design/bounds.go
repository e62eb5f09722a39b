package design

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"math/cmplx"
	"slices"
	"strings"

	"steadyrig/data"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// Names of the bounds.
const (
	BoundSampled   = "peak sensitivity: sampled loop"
	BoundDelay     = "peak sensitivity: unstable pole and delay"
	BoundZero      = "peak sensitivity: unstable pole and right-half-plane zero"
	BoundBandwidth = "peak sensitivity: available bandwidth"
	BoundNoise     = "input noise"
	BoundEffort    = "input per output"
	BoundStepInput = "steady input for the step"
	BoundKickInput = "steady input for the kick"
	BoundReachUp   = "reach above the operating point"
	BoundReachDown = "reach below the operating point"
	BoundDeadTime  = "settling: dead time"
	BoundTrip      = "step inside the trip limits"
	BoundOvershoot = "overshoot: one loop without prefilter"
	BoundReverse   = "step the wrong way: right-half-plane zero"
	BoundKickPeak  = "output after the kick: dead time"

	stepMode = "mode of the step" // not listed: what a step takes of the reach
)

// boundDraws is the number of plants over which a bound's interval is taken.
const boundDraws = 200

// Bounds computes what physics allows, whatever the controller: each limit at the nominal model with its interval
// over plants drawn from the model, and what the spec asks. OK is judged at the unfavourable end of the interval,
// because a promise has to hold there too. The only errors are a rig or a model that cannot be worked with.
func Bounds(model *ident.Model, rig *data.Rig) ([]Bound, error) {
	p, err := newProblem(model, rig)
	if err != nil {
		return nil, err
	}
	return p.bounds(context.Background(), p.drawTFs(boundDraws, streamBounds, 0)), nil
}

// plantLimits are the limits of one plant, by name; a limit that does not apply is absent.
type plantLimits map[string]float64

// limitsOf computes the limits of one plant. The delay of the computer is in it.
func (p *problem) limitsOf(pl *plant) plantLimits {
	out := plantLimits{}
	s := &p.spec
	tau := pl.tf.Delay
	var unstable, zUnstable, right []complex128
	sum, fastest := 0.0, 0.0
	for _, r := range pl.tf.Poles() {
		if real(r) > 0 {
			unstable = append(unstable, r)
			zUnstable = append(zUnstable, cmplx.Exp(r*complex(p.period, 0)))
			sum += real(r)
			fastest = math.Max(fastest, real(r))
		}
	}
	for _, q := range pl.tf.Zeros() {
		if real(q) > 0 {
			right = append(right, q)
			if imag(q) == 0 {
				out[BoundReverse] = math.Max(out[BoundReverse], s.step*LeastUndershoot(real(q), s.settling-tau, s.band))
			}
		}
	}
	d := lti.DTF{Num: pl.num, Den: pl.den, Period: p.period}
	var zOut []complex128
	for _, z := range d.Zeros() {
		// Zeros on the circle cost nothing; one beyond 1e4 is the next sample of delay.
		if r := cmplx.Abs(z); r > 1+1e-6 && r < 1e4 {
			zOut = append(zOut, z)
		}
	}
	out[BoundDeadTime] = tau + p.period
	if dc := pl.tf.DC(); dc != 0 && !math.IsNaN(dc) && !math.IsInf(dc, 0) {
		out[BoundStepInput] = s.step / dc
	} else {
		out[BoundStepInput] = 0
	}
	if s.kick > 0 {
		out[BoundKickPeak] = s.kick * leastKickPeak(pl)
	}
	if len(unstable) == 0 {
		return out
	}
	out[BoundSampled] = leastPeak(pl.lag, zUnstable, zOut)
	out[BoundDelay] = LeastPeakDelay(fastest, tau)
	out[BoundBandwidth] = LeastPeakBandwidth(sum, math.Pi/p.period)
	if len(right) > 0 {
		out[BoundZero] = leastPeakZeros(unstable, right, tau)
	}
	side := math.Min(-p.input[0], p.input[1])
	for _, r := range unstable {
		if imag(r) == 0 {
			out[BoundOvershoot] = math.Max(out[BoundOvershoot], leastOvershoot(pl, math.Exp(real(r)*p.period), s.settling/p.period, s.band, side/s.step))
		}
	}
	num := append(make(lti.Poly, pl.lag), pl.num...)
	perNoise := leastNoise(num, pl.den, zUnstable)
	if p.noise.split {
		out[BoundNoise] = perNoise * p.noise.sensor
	}
	if len(unstable) == 1 && imag(unstable[0]) == 0 {
		r := real(unstable[0])
		out[BoundEffort] = LeastEffort(pl.tf)
		// The mode x' = r x + u enters the output with the residue of G at the pole.
		residue := real(pl.tf.Num.Eval(complex(r, 0)) / pl.tf.Den.Deriv().Eval(complex(r, 0)))
		taken := 3 * math.Hypot(out[BoundNoise], p.noise.onMode(math.Exp(r*p.period), p.period))
		lo, hi := math.Min(0, p.input[0]+taken), math.Max(0, p.input[1]-taken)
		from, to := Reach(r, residue, lo, hi, tau)
		out[BoundReachDown], out[BoundReachUp] = -from, to
		out[stepMode] = math.Abs(residue * out[BoundStepInput] / r)
	}
	return out
}

// unfavourable is the limit of a plant drawn from the model at the end of the interval where a promise fails first.
type unfavourable struct {
	limit float64
	plant lti.TF
}

// bounds lists the limits with intervals over the drawn plants, as many as ctx leaves time for.
func (p *problem) bounds(ctx context.Context, draws []lti.TF) []Bound {
	nominal := p.limitsOf(&p.nominal)
	over := map[string][]unfavourable{}
	for _, g := range draws {
		if ctx.Err() != nil {
			break
		}
		pl, err := p.behindHold(g)
		if err != nil {
			continue
		}
		for name, v := range p.limitsOf(&pl) {
			if !math.IsNaN(v) {
				over[name] = append(over[name], unfavourable{v, g})
			}
		}
	}
	for _, v := range over {
		slices.SortStableFunc(v, func(a, b unfavourable) int { return cmp.Compare(a.limit, b.limit) })
	}
	// at is the draw at a quantile of a limit; the nominal plant where there are too few draws with that limit.
	at := func(name string, share float64) unfavourable {
		v := over[name]
		if len(v) < 20 {
			return unfavourable{nominal[name], p.model.TF()}
		}
		return v[int(math.Round(share*float64(len(v)-1)))]
	}
	interval := func(name string) *[2]float64 {
		if len(over[name]) < 20 {
			return nil
		}
		return &[2]float64{at(name, 0.025).limit, at(name, 0.975).limit}
	}
	// plants lists the draws from the unfavourable end of a limit's interval on.
	plants := func(name string, share float64) []lti.TF {
		v := slices.Clone(over[name])
		if len(v) < 20 {
			return []lti.TF{p.model.TF()}
		}
		if share > 0.5 {
			slices.Reverse(v)
		}
		v = v[int(math.Round(0.025*float64(len(v)-1))):]
		list := make([]lti.TF, len(v))
		for i := range v {
			list[i] = v[i].plant
		}
		return list
	}
	var out []Bound
	add := func(name, limit, unit string, asked *float64, source, key string, nearest float64) *Bound {
		v, ok := nominal[name]
		if !ok || math.IsNaN(v) || math.IsInf(v, 0) {
			return new(Bound)
		}
		b := Bound{Name: name, Value: v, Interval: interval(name), Limit: limit, Unit: unit, Asked: asked, Source: source, OK: true}
		share := 0.025
		if limit == "least" {
			share = 0.975
		}
		if asked != nil {
			if limit == "least" {
				b.OK = *asked >= b.unfavourable()
			} else {
				b.OK = *asked <= b.unfavourable()
			}
			if !b.OK {
				b.key, b.nearest, b.plants = key, nearest, plants(name, share)
			}
		}
		out = append(out, b)
		return &out[len(out)-1]
	}
	s, units := &p.spec, p.rig.Units
	worst := func(name string) float64 { return math.Max(nominal[name], at(name, 0.975).limit) }
	least := func(name, unit string, asked *float64, source, key string) {
		add(name, "least", unit, asked, source, key, worst(name)*spare)
	}
	least(BoundSampled, "", &s.peakS, "|S| and |T|, Nevanlinna-Pick on the sampled plant with its delay; one pole: |z|^d, Astrom (2000)", keyPeakS)
	least(BoundDelay, "", &s.peakS, "|S| and |T|, e^(p tau), Astrom (2000), Eur. J. Control 6", keyPeakS)
	least(BoundZero, "", &s.peakS, "|S| and |T|, (z+p)/|z-p|, over all poles or all zeros, with e^(p tau), Freudenberg & Looze (1985), IEEE Trans. AC 30", keyPeakS)
	least(BoundBandwidth, "", &s.peakS, "Bode's integral up to the Nyquist frequency, Sung & Hara (1988), Stein (2003)", keyPeakS)
	least(BoundNoise, units.Input, &s.noise, "least H2 norm of K S, Havre & Skogestad (2003)", "input_noise")
	least(BoundEffort, ratioUnit(units.Input, units.Output), nil, "1/|G| at the pole, pole mirrored, Havre & Skogestad (2003)", "")
	p.addAuthority(&out, nominal[BoundStepInput], [2]unfavourable{at(BoundStepInput, 0.025), at(BoundStepInput, 0.975)})
	settling := &s.settling
	if p.assumed {
		settling = nil
	}
	least(BoundDeadTime, "s", settling, "nothing moves before the delay and one sample have passed", "settling")
	if worst(BoundOvershoot) > 0 && !p.assumed {
		b := add(BoundOvershoot, "least", "", nil, "any loop u = K (r - y): the integral of (1-y) e^(-pt) is zero, Middleton (1991), Automatica 27; Seron, Braslavsky & Goodwin (1997)", "", 0)
		b.Asked, b.Relaxed = &s.overshoot, relaxedByPrefilter
	}
	if nominal[BoundReverse] > 0 && !p.assumed {
		var room *float64
		nearest := 0.0
		if p.output != nil {
			r := p.room()
			room = &r
			// The zero that gives the worst figure, and when it would give the room.
			dead := p.nominal.tf.Delay
			rate := math.Log1p((1-s.band)*s.step/worst(BoundReverse)) / (s.settling - dead)
			nearest = spare * (dead + math.Log1p((1-s.band)*s.step/r)/rate)
		}
		add(BoundReverse, "least", units.Output, room, "(1-band)/(e^(z settling)-1) of the step, whatever the loops and the prefilter, Middleton (1991), Automatica 27; Seron, Braslavsky & Goodwin (1997)", "settling", nearest)
	}
	if s.kickPeak > 0 {
		least(BoundKickPeak, units.Output, &s.kickPeak, "the kick acts on the plant alone for two delays, before any answer to it arrives", "kick_peak")
	}
	modeAsked := worst(stepMode)
	for _, name := range []string{BoundReachUp, BoundReachDown} {
		least := math.Min(nominal[name], at(name, 0.025).limit)
		add(name, "most", units.Output, &modeAsked, "b u/p e^(-p tau), u less three deviations of what noise and disturbance take, Hu & Lin (2001), Stein (2003)",
			"step", s.step*least/math.Max(modeAsked, 1e-300)/spare)
	}
	p.advise(out)
	return out
}

const (
	keyPeakS = "peak_sensitivity"

	// spare is by how much the nearest spec and the advised rig stay on the safe side of a limit.
	spare = 1.02

	relaxedByPrefilter = "Two loops and a prefilter are not held to it: for them the integral of (1-y) e^(-pt) is (1/p) (1 - F(p) K2(p)/(1 + K2(p))), which F may choose"
)

// relaxed says in the bound that two loops are not held to what these make of their freedom, at the nominal plant's
// fastest real unstable pole: at that pole the plant's gain is infinite, and the response to the reference is
// F K2/(1 + K2).
func (p *problem) relaxed(l *Loops) {
	i := slices.IndexFunc(l.Bounds, func(b Bound) bool { return b.Name == BoundOvershoot })
	if i < 0 || l.Outer == nil {
		return
	}
	rate := 0.0
	for _, s := range p.nominal.tf.Poles() {
		if imag(s) == 0 {
			rate = math.Max(rate, real(s))
		}
	}
	law, w := l.LTI(), complex(math.Exp(-rate*p.period), 0)
	k2 := law.Outer.Num.Eval(w) / law.Outer.Den.Eval(w)
	share := k2 / (1 + k2)
	if law.Prefilter != nil {
		share *= law.Prefilter.Num.Eval(w) / law.Prefilter.Den.Eval(w)
	}
	l.Bounds[i].Relaxed = fmt.Sprintf("%s; here F(p) K2(p)/(1 + K2(p)) is %.3g, where one loop has 1", relaxedByPrefilter, real(share))
}

// room is how far the output may go either way before a trip; only where there are trips.
func (p *problem) room() float64 { return math.Min(-p.output[0], p.output[1]) }

// advise writes what is within reach into the bounds that are broken: one value per key of the spec, which keeps all
// of its bounds, and what to change at the rig instead, with the number.
func (p *problem) advise(bounds []Bound) {
	strictest := map[string]float64{}
	var broken []*Bound
	for i := range bounds {
		b := &bounds[i]
		if b.OK {
			continue
		}
		broken = append(broken, b)
		v, ok := strictest[b.key]
		if !ok || b.stricter(v) {
			strictest[b.key] = b.nearest
		}
	}
	together := p.changes(broken)
	for _, b := range broken {
		b.nearest = strictest[b.key]
		b.other, b.together = p.changes([]*Bound{b}), together
		b.Advice = b.within() + "; or " + b.other
	}
}

// A lever is something to change at the rig. now is its present value; apply changes a problem and a plant by a factor.
type lever struct {
	now   float64
	up    bool // more of it helps, else less
	apply func(q *problem, g *lti.TF, factor float64)
	say   func(value, factor float64) string
}

func (p *problem) levers() []lever {
	units := p.rig.Units
	return []lever{
		{p.nominal.tf.Delay, false, func(q *problem, g *lti.TF, f float64) { q.compute *= f; g.Delay *= f },
			func(v, _ float64) string { return "a delay below " + roundDown(v) + " s in all" }},
		{p.period, false, func(q *problem, _ *lti.TF, f float64) { q.period *= f },
			func(v, _ float64) string { return "a sample period below " + roundDown(v) + " s" }},
		{p.side(), true, func(q *problem, _ *lti.TF, f float64) { q.input = [2]float64{f * q.input[0], f * q.input[1]} },
			func(_, f float64) string {
				return fmt.Sprintf("an input range of at least %s to %s", round3(p.point.Input+f*p.input[0], math.Floor), withUnit(round3(p.point.Input+f*p.input[1], math.Ceil), units.Input))
			}},
		{p.noise.sensor, false, func(q *problem, _ *lti.TF, f float64) { q.noise.sensor *= f },
			func(v, _ float64) string {
				return "sensor noise below " + withUnit(roundDown(v), units.Output) + " (standard deviation)"
			}},
	}
}

// mostLever is the most by which a change at the rig is thought of, as a factor.
const mostLever = 1000

// changes lists the changes at the rig that keep all of some broken bounds, each by itself, with the number that it
// takes: found by bisection on the plant at the unfavourable end of each bound.
func (p *problem) changes(broken []*Bound) string {
	var ways []string
	for _, l := range p.levers() {
		if l.now == 0 {
			continue
		}
		keeps := func(factor float64, every int) bool {
			for _, b := range broken {
				for i := 0; i < len(b.plants); i += every {
					q, g := *p, b.plants[i]
					l.apply(&q, &g, factor)
					if !q.keeps(b, g) {
						return false
					}
				}
			}
			return true
		}
		no, yes := 0.0, math.Log(mostLever)
		if !l.up {
			yes = -yes
		}
		if !keeps(math.Exp(yes), 1) {
			continue
		}
		step := yes / 400
		for range 14 {
			if mid := (no + yes) / 2; keeps(math.Exp(mid), 10) {
				yes = mid
			} else {
				no = mid
			}
		}
		for !keeps(math.Exp(yes), 1) {
			yes += step
		}
		ways = append(ways, l.say(l.now*math.Exp(yes), math.Exp(yes)))
	}
	for _, b := range broken {
		switch b.Name {
		case BoundZero, BoundReverse:
			ways = append(ways, "another place of the sensor or the actuator, which moves the right-half-plane zero")
		case BoundTrip:
			ways = append(ways, "trip limits of at least "+withUnit(roundUp(*b.Asked*spare), b.Unit)+" to either side of the operating point")
		}
	}
	if len(ways) == 0 {
		return "change more than one thing at the rig: neither delay, sample period, input range nor sensor is enough alone"
	}
	return "at the rig: " + strings.Join(ways, ", or ")
}

// keeps reports whether a plant keeps a bound that the problem as it was breaks, with something to spare.
func (p *problem) keeps(b *Bound, g lti.TF) bool {
	if b.Name == BoundTrip {
		return false
	}
	pl, err := p.behindHold(g)
	if err != nil {
		return false
	}
	limits := p.limitsOf(&pl)
	switch b.Name {
	case BoundStepInput:
		return math.Abs(limits[b.Name])*spare < p.side()
	case BoundKickInput:
		return *b.Asked*spare < p.side()
	}
	if b.Limit == "most" {
		return *b.Asked*spare <= limits[b.Name]
	}
	return limits[b.Name]*spare <= *b.Asked
}

// stricter reports whether the bound's nearest value asks less than v does.
func (b *Bound) stricter(v float64) bool {
	if b.Limit == "least" {
		return b.nearest > v
	}
	return b.nearest < v
}

// within says which value of the spec's key is in reach.
func (b *Bound) within() string {
	switch {
	case b.hopeless() && b.key == keyPeakS:
		return fmt.Sprintf("no peak sensitivity below %g is in reach", hopelessPeak)
	case b.hopeless():
		return fmt.Sprintf("no %s is in reach", b.key)
	case b.Limit == "least":
		return fmt.Sprintf("the nearest spec within reach is %s = %s", b.key, roundUp(b.nearest))
	}
	return fmt.Sprintf("the nearest spec within reach is %s = %s", b.key, roundDown(b.nearest))
}

// side is how far the input may go from the operating point on its lesser side.
func (p *problem) side() float64 { return math.Min(-p.input[0], p.input[1]) }

// addAuthority adds the bounds in units of the input and of the trips: the limits leave so much on the lesser side, the
// step and the kick take so much for good.
func (p *problem) addAuthority(out *[]Bound, nominal float64, ends [2]unfavourable) {
	s, side := &p.spec, p.side()
	need, worst := math.Abs(nominal), p.model.TF()
	for _, e := range ends {
		if math.Abs(e.limit) > need {
			need, worst = math.Abs(e.limit), e.plant
		}
	}
	most := func(name string, room, asked float64, unit, key string, nearest float64, source string) {
		b := Bound{Name: name, Value: room, Limit: "most", Unit: unit, Asked: &asked, OK: asked < room, Source: source}
		if !b.OK {
			b.key, b.nearest, b.plants = key, nearest, []lti.TF{worst}
		}
		*out = append(*out, b)
	}
	most(BoundStepInput, side, need, p.rig.Units.Input, "step", s.step*side/need/spare,
		"the step's share of the input's range on its lesser side, step/G(0)")
	if s.kick > 0 {
		most(BoundKickInput, side, s.kick, p.rig.Units.Input, "kick", side/spare, "the actuator has to cancel the kick for good")
	}
	if p.output != nil {
		most(BoundTrip, p.room(), s.step*(1+s.overshoot), p.rig.Units.Output, "step", p.room()/(1+s.overshoot)/spare,
			"step and overshoot in both directions against [limits] output")
	}
}

// unfavourable is the end of the interval at which a promise fails first.
func (b *Bound) unfavourable() float64 {
	if b.Interval == nil {
		return b.Value
	}
	if b.Limit == "least" {
		return math.Max(b.Value, b.Interval[1])
	}
	return math.Min(b.Value, b.Interval[0])
}

// hopeless reports whether no value of the spec's key is worth naming.
func (b *Bound) hopeless() bool {
	return b.key == keyPeakS && b.nearest > hopelessPeak || !(b.nearest > 0) || math.IsInf(b.nearest, 0)
}

// excess is how far the spec is beyond the bound, as a factor.
func (b *Bound) excess() float64 {
	switch {
	case b.hopeless():
		return math.Inf(1)
	case b.Limit == "least":
		return b.unfavourable() / *b.Asked
	}
	return *b.Asked / b.unfavourable()
}

// outOfReach returns the refusal for bounds that the spec breaks, nil if there is none: the worst of them, and what is
// within reach for each key of the spec.
func outOfReach(bounds []Bound) *ident.RefusedError {
	var worst *Bound
	var do []string
	broken := 0
	for i := range bounds {
		b := &bounds[i]
		if b.OK {
			continue
		}
		broken++
		if worst == nil || b.excess() > worst.excess() {
			worst = b
		}
		if text := b.within(); !slices.Contains(do, text) {
			do = append(do, text)
		}
	}
	if worst == nil {
		return nil
	}
	text := "the spec is out of reach: " + worst.Name + ": "
	if worst.hopeless() {
		// The other keys hardly matter before this one can be kept.
		text, do = text+worst.within(), nil
	} else {
		text += fmt.Sprintf("asked %.4g, physics allows at %s %s", *worst.Asked, worst.Limit, withUnit(fmt.Sprintf("%.4g", worst.unfavourable()), worst.Unit))
		if worst.Interval != nil {
			text += fmt.Sprintf(" (nominal %.4g)", worst.Value)
		}
	}
	if broken > 1 {
		text += fmt.Sprintf("; %d more in the file", broken-1)
	}
	advice := worst.together
	if len(do) > 0 {
		advice = strings.Join(do, "; ") + "; or " + advice
	}
	return &ident.RefusedError{What: text, Do: advice}
}

func withUnit(number, u string) string {
	if u == "" {
		return number
	}
	return number + " " + u
}

func ratioUnit(a, b string) string {
	if a == "" || b == "" {
		return ""
	}
	return a + "/" + b
}

// roundUp and roundDown give three digits on the safe side.
func roundUp(x float64) string   { return round3(x, math.Ceil) }
func roundDown(x float64) string { return round3(x, math.Floor) }

func round3(x float64, to func(float64) float64) string {
	if x == 0 || math.IsNaN(x) || math.IsInf(x, 0) {
		return fmt.Sprintf("%.3g", x)
	}
	unit := math.Pow(10, math.Floor(math.Log10(math.Abs(x)))-2)
	return fmt.Sprintf("%.3g", to(x/unit-1e-9*float64(cmp.Compare(x, 0)))*unit)
}

// Streams of random numbers: tuning, bounds and proofs never share plants.
const (
	streamTuning = iota + 1
	streamBounds
	streamProof
	streamNoise
	streamMargins
	streamGap
)

// stream returns the seed of one stream; attempt counts the proofs.
func stream(seed uint64, which, attempt int) uint64 {
	// Splitmix64 of Steele, Lea & Flood (2014), OOPSLA: neighbouring seeds must not give neighbouring streams.
	z := seed + 0x9e3779b97f4a7c15*uint64(16*which+attempt+1)
	z = (z ^ z>>30) * 0xbf58476d1ce4e5b9
	z = (z ^ z>>27) * 0x94d049bb133111eb
	return z ^ z>>31
}

func (p *problem) drawTFs(n, which int, seed uint64) []lti.TF {
	return p.model.Draw(n, stream(seed, which, 0))
}
