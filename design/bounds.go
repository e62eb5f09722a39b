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

// limitsOf computes the limits of one plant. Delay of the computer included by the caller's newPlant.
func (p *problem) limitsOf(pl *plant) plantLimits {
	out := plantLimits{}
	tau := pl.tf.Delay
	var unstable, zUnstable []complex128
	sum, fastest := 0.0, 0.0
	for _, s := range pl.tf.Poles() {
		if real(s) > 0 {
			unstable = append(unstable, s)
			zUnstable = append(zUnstable, cmplx.Exp(s*complex(p.period, 0)))
			sum += real(s)
			fastest = math.Max(fastest, real(s))
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
		out[BoundStepInput] = p.spec.step / dc
	} else {
		out[BoundStepInput] = 0
	}
	if len(unstable) == 0 {
		return out
	}
	out[BoundSampled] = leastPeak(pl.lag, zUnstable, zOut)
	out[BoundDelay] = LeastPeakDelay(fastest, tau)
	out[BoundBandwidth] = LeastPeakBandwidth(sum, math.Pi/p.period)
	if len(unstable) == 1 {
		for _, z := range pl.tf.Zeros() {
			if imag(z) == 0 && real(z) > 0 {
				out[BoundZero] = math.Max(out[BoundZero], LeastPeakZero(real(unstable[0]), real(z)))
			}
		}
	}
	sensor := p.noise.sensor
	num := append(make(lti.Poly, pl.lag), pl.num...)
	perNoise := leastNoise(num, pl.den, zUnstable)
	if p.noise.split {
		out[BoundNoise] = perNoise * sensor
	}
	if len(unstable) == 1 && imag(unstable[0]) == 0 {
		s := real(unstable[0])
		out[BoundEffort] = LeastEffort(pl.tf)
		// The mode x' = s x + u enters the output with the residue of G at the pole.
		residue := real(pl.tf.Num.Eval(complex(s, 0)) / pl.tf.Den.Deriv().Eval(complex(s, 0)))
		taken := 3 * out[BoundNoise] // what the noise takes of the authority at the least
		lo, hi := math.Min(0, p.input[0]+taken), math.Max(0, p.input[1]-taken)
		from, to := Reach(s, residue, lo, hi, tau)
		out[BoundReachDown], out[BoundReachUp] = -from, to
		out[stepMode] = math.Abs(residue * out[BoundStepInput] / s)
	}
	return out
}

// bounds lists the limits with intervals over the drawn plants, as many as ctx leaves time for.
func (p *problem) bounds(ctx context.Context, draws []lti.TF) []Bound {
	nominal := p.limitsOf(&p.nominal)
	over := map[string][]float64{}
	for _, g := range draws {
		if ctx.Err() != nil {
			break
		}
		pl, err := p.newPlant(g)
		if err != nil {
			continue
		}
		for name, v := range p.limitsOf(&pl) {
			if !math.IsNaN(v) {
				over[name] = append(over[name], v)
			}
		}
	}
	for _, v := range over {
		slices.Sort(v)
	}
	interval := func(name string) *[2]float64 {
		v := over[name]
		if len(v) < 20 {
			return nil
		}
		q := func(share float64) float64 { return v[int(math.Round(share*float64(len(v)-1)))] }
		return &[2]float64{q(0.025), q(0.975)}
	}
	units := p.rig.Units
	var out []Bound
	add := func(name, limit, unit string, asked *float64, source, key string, nearest float64, other string) {
		v, ok := nominal[name]
		if !ok || math.IsNaN(v) || math.IsInf(v, 0) {
			return
		}
		b := Bound{Name: name, Value: v, Interval: interval(name), Limit: limit, Unit: unit, Asked: asked, Source: source, OK: true}
		if asked != nil {
			if limit == "least" {
				b.OK = *asked >= b.unfavourable()
			} else {
				b.OK = *asked <= b.unfavourable()
			}
			if !b.OK {
				b.key, b.nearest, b.other = key, nearest, other
			}
		}
		out = append(out, b)
	}
	s := &p.spec
	faster := fmt.Sprintf("shorten the sample period (%.4g s)", p.period)
	if tau := p.nominal.tf.Delay; tau > 0 {
		faster = fmt.Sprintf("shorten the delay (%.4g s in all) or the sample period (%.4g s)", tau, p.period)
	}
	worst := func(name string) float64 {
		if iv := interval(name); iv != nil {
			return iv[1]
		}
		return nominal[name]
	}
	least := func(name, unit string, asked *float64, source, key, other string) {
		add(name, "least", unit, asked, source, key, worst(name)*1.02, other)
	}
	least(BoundSampled, "", &s.peakS, "Nevanlinna-Pick on the sampled plant with its delay; one pole: |z|^d, Astrom (2000)", keyPeakS, faster)
	least(BoundDelay, "", &s.peakS, "e^(p tau), Astrom (2000), Eur. J. Control 6", keyPeakS, faster)
	least(BoundZero, "", &s.peakS, "(z+p)/|z-p|, Freudenberg & Looze (1985), IEEE Trans. AC 30", keyPeakS, "move the sensor or the actuator, which moves the zero")
	least(BoundBandwidth, "", &s.peakS, "Bode's integral up to the Nyquist frequency, Sung & Hara (1988), Stein (2003)", keyPeakS, "shorten the sample period")
	least(BoundNoise, units.Input, &s.noise, "least H2 norm of K S, Havre & Skogestad (2003)", "input_noise", "a quieter sensor or a shorter delay")
	least(BoundEffort, ratioUnit(units.Input, units.Output), nil, "1/|G| at the pole, pole mirrored, Havre & Skogestad (2003)", "", "")
	p.addAuthority(&out, nominal, interval)
	settling := &s.settling
	if p.assumed {
		settling = nil
	}
	least(BoundDeadTime, "s", settling, "nothing moves before the delay and one sample have passed", "settling", faster)
	modeAsked := worst(stepMode)
	for _, name := range []string{BoundReachUp, BoundReachDown} {
		unfavourable := nominal[name]
		if iv := interval(name); iv != nil {
			unfavourable = iv[0]
		}
		add(name, "most", units.Output, &modeAsked, "b u/p e^(-p tau) less three deviations of the input noise, Hu & Lin (2001), Stein (2003)",
			"step", 0.9*s.step*unfavourable/math.Max(modeAsked, 1e-300), "more actuator, or a shorter delay")
	}
	advise(out)
	return out
}

const keyPeakS = "peak_sensitivity"

// advise writes what is within reach into the bounds that are broken: one value per key of the spec, which keeps all
// of its bounds.
func advise(bounds []Bound) {
	strictest := map[string]float64{}
	for _, b := range bounds {
		if b.OK {
			continue
		}
		v, ok := strictest[b.key]
		if !ok || b.stricter(v) {
			strictest[b.key] = b.nearest
		}
	}
	for i := range bounds {
		if b := &bounds[i]; !b.OK {
			b.nearest = strictest[b.key]
			b.Advice = b.within() + "; or " + b.other
		}
	}
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

// addAuthority adds the bounds in units of the input: the limits leave so much on the lesser side, the step and
// the kick take so much for good.
func (p *problem) addAuthority(out *[]Bound, nominal plantLimits, interval func(string) *[2]float64) {
	s := &p.spec
	side := math.Min(-p.input[0], p.input[1])
	need := math.Abs(nominal[BoundStepInput])
	if iv := interval(BoundStepInput); iv != nil {
		need = math.Max(math.Abs(iv[0]), math.Abs(iv[1]))
	}
	b := Bound{Name: BoundStepInput, Value: side, Limit: "most", Unit: p.rig.Units.Input, Asked: &need, OK: need < side,
		Source: "the step's share of the input's range on its lesser side, step/G(0)"}
	if !b.OK {
		b.key, b.nearest, b.other = "step", 0.9*s.step*side/need, "more actuator"
	}
	*out = append(*out, b)
	if s.kick > 0 {
		kick := math.Abs(s.kick)
		b := Bound{Name: BoundKickInput, Value: side, Limit: "most", Unit: p.rig.Units.Input, Asked: &kick, OK: kick < side,
			Source: "the actuator has to cancel the kick for good"}
		if !b.OK {
			b.key, b.nearest, b.other = "kick", 0.9*side, "more actuator"
		}
		*out = append(*out, b)
	}
	if p.output != nil {
		room := math.Min(-p.output[0], p.output[1])
		most := s.step * (1 + s.overshoot)
		b := Bound{Name: BoundTrip, Value: room, Limit: "most", Unit: p.rig.Units.Output, Asked: &most, OK: most < room,
			Source: "step and overshoot in both directions against [limits] output"}
		if !b.OK {
			b.key, b.nearest, b.other = "step", 0.95*room/(1+s.overshoot), "wider trip limits"
		}
		*out = append(*out, b)
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
		text += fmt.Sprintf("asked %.4g, physics allows at %s %.4g%s", *worst.Asked, worst.Limit, worst.unfavourable(), withUnit(worst.Unit))
		if worst.Interval != nil {
			text += fmt.Sprintf(" (nominal %.4g)", worst.Value)
		}
	}
	if broken > 1 {
		text += fmt.Sprintf("; %d more in the file", broken-1)
	}
	advice := worst.other
	if len(do) > 0 {
		advice = strings.Join(do, "; ") + "; or " + advice
	}
	return &ident.RefusedError{What: text, Do: advice}
}

func withUnit(u string) string {
	if u == "" {
		return ""
	}
	return " " + u
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
	return fmt.Sprintf("%.3g", to(x/unit-1e-9*cmpSign(x))*unit)
}

func cmpSign(x float64) float64 { return float64(cmp.Compare(x, 0)) }

// Streams of random numbers: tuning, bounds and proofs never share plants.
const (
	streamTuning = iota + 1
	streamBounds
	streamProof
	streamNoise
	streamMargins
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
