package lti

import (
	"fmt"
	"math"
)

// Run is one simulated run of the sampled loop: a continuous plant in deviations from the law's operating point,
// the law, a hold, a delay. It is exact between samples. Row k: y[k] is read at k Period, u[k] computed from it acts
// from k Period + ComputeDelay on, so a plant without delay shows its first response to u[k] in y[k+1].
//
// All sequences are indexed by the sample and must be nil or at least Steps long.
type Run struct {
	Plant        TF      // Delay counts from the input's change to the output
	Period       float64 // s
	ComputeDelay float64 // s, from sampling y to the change of u; added to Plant.Delay
	Law          *Law    // its period is Period
	Steps        int
	// Reference is absolute (nil: Y0), Dither adds to u before its limits, InputDisturbance to the input at the
	// plant (held, and delayed like u), OutputDisturbance to the output itself, Noise to the measured y only.
	Reference, Dither, InputDisturbance, OutputDisturbance, Noise []float64
	// Innovations act as identified noise that shares the plant's denominator: A y = B u + Shape e with A the monic
	// sampled denominator of Plant and Shape = C/D stable (nil: 1). They drive the plant's state and the measured y.
	Innovations []float64
	Shape       *DTF
	Initial     []float64 // plant state at the start, in the basis of Plant.SS (delay taken out); nil: rest
	// OutputOffset starts the plant on the mode of its pole with the largest real part, with the input at rest and
	// the output this far from Y0: e^{pt} for a real pole, Re e^{pt} for a pair, a constant for a double integrator.
	// It adds to Initial.
	OutputOffset float64
	Trip         [2]float64 // absolute limits of the measured output, both zero: none
	Fine         int        // > 1: Trace.Fine holds the output at this many instants a period
	// Before, if not nil, acts in the first HandOver steps while Law follows it (LawState.Follow, with FollowShare). In
	// step HandOver the last input is sent once more; from the next one on Law runs alone.
	Before      *Law
	HandOver    int
	FollowShare float64
}

// Trace is what a run did. All slices have one entry a step; after a trip they end with the step that tripped.
type Trace struct {
	U     []float64 // input as sent
	Y     []float64 // output as read: with noise, quantised
	YTrue []float64 // output without noise
	R     []float64 // reference
	V     []float64 // input of the inner loop, deviation, after its clamp
	// Fine[k Fine + j] is the output without noise at (k + j/Fine) Period; nil unless Run.Fine > 1.
	Fine    []float64
	Tripped int // the step at which the output left Run.Trip or ceased to be a number, -1: never
}

// Simulate runs the loop. It returns an error for numbers that cannot be simulated; a loop that diverges is not one.
func (r Run) Simulate() (Trace, error) {
	var s Simulator
	var t Trace
	err := s.Simulate(&t, r)
	return t, err
}

// Simulator runs many loops without allocating: it keeps the sampled plant, the law and its memory between runs as
// long as they do not change. The zero value is ready. Not for concurrent use.
type Simulator struct {
	plant   TF
	period  float64
	compute float64
	fine    int
	p       *sampled
	fineRow []float64 // (fine - 1) × (n + 2): the output at a sub-instant from x, w[k-delay], w[k-delay-1]
	x, next []float64
	mode    []float64 // unstable mode of unit output, nil until asked for
	inj     *injection
	shape   DTF
	xd      []float64 // states of the noise shape
	nextD   []float64
	w       []float64 // past plant inputs, newest first
	law     Law
	state   *LawState
	before  *LawState // of Run.Before
}

func (s *Simulator) prepare(r *Run) error {
	if r.Law == nil {
		return fmt.Errorf("simulating a loop: no law")
	}
	if r.Steps < 0 {
		return fmt.Errorf("simulating a loop: %d steps", r.Steps)
	}
	if r.Law.Inner.Period != r.Period {
		return fmt.Errorf("simulating a loop: period %g s, but the law runs at %g s", r.Period, r.Law.Inner.Period)
	}
	if !(r.ComputeDelay >= 0) {
		return fmt.Errorf("simulating a loop: compute delay %g s is negative", r.ComputeDelay)
	}
	for _, q := range []struct {
		name string
		x    []float64
	}{{"reference", r.Reference}, {"dither", r.Dither}, {"input disturbance", r.InputDisturbance},
		{"output disturbance", r.OutputDisturbance}, {"noise", r.Noise}, {"innovations", r.Innovations}} {
		if q.x != nil && len(q.x) < r.Steps {
			return fmt.Errorf("simulating a loop: %s has %d values for %d steps", q.name, len(q.x), r.Steps)
		}
	}
	if s.p == nil || !s.plant.Equal(r.Plant) || s.period != r.Period || s.compute != r.ComputeDelay || s.fine != r.Fine {
		s.p, s.mode = nil, nil
		g := r.Plant
		g.Delay += r.ComputeDelay
		p, err := sample(g, r.Period)
		if err != nil {
			return err
		}
		if p.delay == 0 && p.d0 != 0 {
			return fmt.Errorf("simulating a loop: the plant answers at once (as many zeros as poles, no delay), so u and y would need each other")
		}
		s.p, s.plant, s.period, s.compute, s.fine = p, r.Plant.clone(), r.Period, r.ComputeDelay, r.Fine
		s.x, s.next = make([]float64, p.n()), make([]float64, p.n())
		s.w = make([]float64, p.delay+2)
		s.prepareFine()
		s.inj = nil
	}
	if r.Innovations != nil {
		shape := DTF{Num: Poly{1}, Den: Poly{1}, Period: r.Period}
		if r.Shape != nil {
			shape = *r.Shape
		}
		if shape.Period != r.Period || len(shape.Den) == 0 || shape.Den[0] == 0 {
			return fmt.Errorf("simulating a loop: the noise shape needs period %g s and a denominator", r.Period)
		}
		if s.inj == nil || !s.shape.same(&shape) {
			inj, err := s.p.inject(r.Plant, shape)
			if err != nil {
				return fmt.Errorf("simulating a loop: %w", err)
			}
			s.inj, s.shape = inj, *shape.clone()
			s.xd, s.nextD = make([]float64, len(inj.rest.b)), make([]float64, len(inj.rest.b))
		}
		clear(s.xd)
	}
	if s.state == nil || !s.law.same(r.Law) {
		if err := r.Law.Validate(); err != nil {
			return fmt.Errorf("simulating a loop: %w", err)
		}
		s.law = r.Law.clone()
		s.state = r.Law.Start()
	}
	s.state.Reset()
	s.before = nil
	if r.Before != nil {
		if err := r.Before.Validate(); err != nil {
			return fmt.Errorf("simulating a loop: the law before: %w", err)
		}
		if r.Before.Inner.Period != r.Period || r.HandOver < 1 || r.Dither != nil {
			return fmt.Errorf("simulating a loop: a hand-over needs a law before of the same period, a step to run it, and no dither")
		}
		s.before = r.Before.Start()
	}
	clear(s.w)
	return s.start(r)
}

// start sets the plant's initial state.
func (s *Simulator) start(r *Run) error {
	clear(s.x)
	if r.Initial != nil {
		if len(r.Initial) != len(s.x) {
			return fmt.Errorf("simulating a loop: %d initial states for a plant of order %d", len(r.Initial), len(s.x))
		}
		copy(s.x, r.Initial)
	}
	if r.OutputOffset == 0 {
		return nil
	}
	if s.mode == nil {
		mode, err := s.p.unstableMode(r.Plant.Poles())
		if err != nil {
			return fmt.Errorf("simulating a loop: %w", err)
		}
		s.mode = mode
	}
	for i, v := range s.mode {
		s.x[i] += r.OutputOffset * v
	}
	return nil
}

// unstableMode returns the state along the mode of the pole with the largest real part, scaled to unit output. For a
// pair p, p* it is Re(w/(c w)) with w the eigenvector of p: the output starts at 1 and follows Re e^{pt}.
func (r chain) unstableMode(poles []complex128) ([]float64, error) {
	if len(poles) == 0 {
		return nil, fmt.Errorf("offset along the unstable mode: the plant has no pole")
	}
	p := poles[len(poles)-1] // sorted: largest real part, of a pair the member with positive imaginary part
	w := r.eigenvector(p)
	var y complex128
	size := 0.0
	for i, v := range w {
		y += complex(r.c[i], 0) * v
		size += math.Abs(r.c[i]) * math.Hypot(real(v), imag(v))
	}
	if m := math.Hypot(real(y), imag(y)); !(m > 1e-9*size) {
		return nil, fmt.Errorf("offset along the unstable mode: the mode of pole %.4g does not show in the output", p)
	}
	mode := make([]float64, len(w))
	for i, v := range w {
		mode[i] = real(v / y)
	}
	return mode, nil
}

// prepareFine computes the rows that give the output at sub-instants.
func (s *Simulator) prepareFine() {
	if s.fine <= 1 {
		s.fineRow = nil
		return
	}
	p, n := s.p, s.p.n()
	s.fineRow = make([]float64, (s.fine-1)*(n+2))
	for j := range s.fine - 1 {
		row := s.fineRow[j*(n+2) : (j+1)*(n+2)]
		t := float64(j+1) / float64(s.fine) * p.period
		// From k Period to frac the plant still sees w[k-delay-1], then w[k-delay].
		before := math.Min(t, p.frac)
		after := t - before
		phi, _ := p.hold(t)
		phiAfter, gamAfter := p.hold(after)
		_, gamBefore := p.hold(before)
		moved := make([]float64, n)
		matvec(moved, phiAfter, gamBefore)
		for i := range n {
			for m := range n {
				row[m] += p.c[i] * phi[i*n+m]
			}
			row[n] += p.c[i] * gamAfter[i]
			row[n+1] += p.c[i] * moved[i]
		}
		if t >= p.frac {
			row[n] += p.d
		} else {
			row[n+1] += p.d
		}
	}
}

// Simulate runs r and writes to dst, whose slices it reuses. It gives the same numbers, bit for bit, as Run.Simulate,
// whatever ran before.
func (s *Simulator) Simulate(dst *Trace, r Run) error {
	if err := s.prepare(&r); err != nil {
		return err
	}
	n := r.Steps
	dst.U, dst.Y, dst.YTrue = resize(dst.U, n), resize(dst.Y, n), resize(dst.YTrue, n)
	dst.R, dst.V = resize(dst.R, n), resize(dst.V, n)
	if s.fine > 1 {
		dst.Fine = resize(dst.Fine, n*s.fine)
	} else {
		dst.Fine = nil
	}
	dst.Tripped = -1
	trips := r.Trip != [2]float64{}
	for k := range n {
		out := s.output()
		base := r.Law.Y0
		if r.OutputDisturbance != nil {
			base += r.OutputDisturbance[k]
		}
		y := base + out
		measured := y
		if r.Noise != nil {
			measured += r.Noise[k]
		}
		if r.Innovations != nil {
			measured += r.Innovations[k]
		}
		ref, dither := r.Law.Y0, 0.0
		if r.Reference != nil {
			ref = r.Reference[k]
		}
		if r.Dither != nil {
			dither = r.Dither[k]
		}
		u := 0.0
		switch {
		case s.before == nil || k > r.HandOver:
			u = s.state.StepProbe(ref, measured, dither)
		case k < r.HandOver:
			u = s.before.Step(ref, measured)
			s.state.Follow(ref, measured, u, r.FollowShare)
		default:
			u = dst.U[k-1]
			s.state.Follow(ref, measured, u, r.FollowShare)
		}
		dst.U[k], dst.Y[k], dst.YTrue[k], dst.R[k], dst.V[k] = u, s.state.yRead, y, ref, s.state.v
		w := u - r.Law.U0
		if r.InputDisturbance != nil {
			w += r.InputDisturbance[k]
		}
		s.push(w)
		if s.fine > 1 {
			fine := dst.Fine[k*s.fine : (k+1)*s.fine]
			fine[0] = y
			s.sub(fine[1:], base)
		}
		if trips && !(measured >= r.Trip[0] && measured <= r.Trip[1]) || !(math.Abs(measured) <= math.MaxFloat64) {
			dst.Tripped = k
			n = k + 1
			break
		}
		s.advance()
		if r.Innovations != nil {
			s.disturb(r.Innovations[k])
		}
	}
	dst.U, dst.Y, dst.YTrue, dst.R, dst.V = dst.U[:n], dst.Y[:n], dst.YTrue[:n], dst.R[:n], dst.V[:n]
	if s.fine > 1 {
		dst.Fine = dst.Fine[:n*s.fine]
	}
	return nil
}

// output is the plant's output before the input of this step is known: w[0] is still that of the last step.
func (s *Simulator) output() float64 {
	p := s.p
	y := 0.0
	for i, c := range p.c {
		y += c * s.x[i]
	}
	if p.d != 0 {
		if p.delay > 0 {
			y += p.d0 * s.w[p.delay-1]
		}
		y += p.d1 * s.w[p.delay]
	}
	return y
}

// push makes w the newest plant input; s.w[i] is then the input i samples ago.
func (s *Simulator) push(w float64) {
	if len(s.w) > 8 {
		copy(s.w[1:], s.w)
	} else {
		for i := len(s.w) - 1; i > 0; i-- {
			s.w[i] = s.w[i-1]
		}
	}
	s.w[0] = w
}

// advance moves the plant to the next sample.
func (s *Simulator) advance() {
	p := s.p
	n := len(s.x)
	w0, w1 := s.w[p.delay], s.w[p.delay+1]
	x, next, phi, g0, g1 := s.x[:n], s.next[:n], p.phi, p.g0[:n], p.g1[:n]
	for i := range next {
		v := g0[i]*w0 + g1[i]*w1
		row := phi[i*n:][:n]
		for j, a := range row {
			v += a * x[j]
		}
		next[i] = v
	}
	s.x, s.next = next, x
}

// disturb adds what the innovation e of this sample does to the state at the next one.
func (s *Simulator) disturb(e float64) {
	c := &s.inj.rest
	n := len(s.xd)
	rest := 0.0
	for i, x := range s.xd {
		rest += c.c[i] * x
		v := x + c.b[i]*e
		for j, a := range c.a[i*n : i*n+n] {
			v += a * s.xd[j]
		}
		s.nextD[i] = v
	}
	s.xd, s.nextD = s.nextD, s.xd
	for i := range s.x {
		s.x[i] += s.inj.k[i]*e + s.inj.l[i]*rest
	}
}

// sub writes the output at the sub-instants after the sample of the present period.
func (s *Simulator) sub(dst []float64, base float64) {
	x := s.x
	n := len(x)
	w0, w1 := s.w[s.p.delay], s.w[s.p.delay+1]
	rows := s.fineRow
	for j := range dst {
		row := rows[j*(n+2) : (j+1)*(n+2)]
		y := row[n]*w0 + row[n+1]*w1
		for i, v := range row[:n] {
			y += v * x[i]
		}
		dst[j] = base + y
	}
}

func resize(x []float64, n int) []float64 {
	if cap(x) < n {
		return make([]float64, n)
	}
	return x[:n]
}

func (g TF) clone() TF {
	return TF{Num: append(Poly(nil), g.Num...), Den: append(Poly(nil), g.Den...), Delay: g.Delay}
}
