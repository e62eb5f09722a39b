package lti

import (
	"fmt"
	"math/cmplx"

	"gonum.org/v1/gonum/mat"
)

// TwoLoops is a Law around a sampled plant, linear, in deviations: v = Outer (Prefilter r - y), u = Inner (v - y).
// The zero Outer means none (v = Prefilter r), the zero Prefilter means 1.
type TwoLoops struct {
	Plant                   SS // one input, one output, sampled
	Inner, Outer, Prefilter DTF
	// Response is the plant's frequency response, nil: Plant.At. NewTwoLoops sets it: with long delays it is far
	// cheaper.
	Response func(omega float64) complex128
}

// NewTwoLoops samples g with its delay and the compute delay (s) and puts law around it.
func NewTwoLoops(g TF, computeDelay float64, law *Law) (TwoLoops, error) {
	if err := law.Validate(); err != nil {
		return TwoLoops{}, err
	}
	g.Delay += computeDelay
	t := TwoLoops{Inner: law.Inner}
	var err error
	if t.Plant, err = ZOH(g, law.Inner.Period); err != nil {
		return TwoLoops{}, err
	}
	if t.Response, err = ZOHResponse(g, law.Inner.Period); err != nil {
		return TwoLoops{}, err
	}
	if law.Outer != nil {
		t.Outer = *law.Outer
	}
	if law.Prefilter != nil {
		t.Prefilter = *law.Prefilter
	}
	if t.Plant.D.At(0, 0) != 0 {
		return TwoLoops{}, fmt.Errorf("closing the loops: the plant answers at once (as many zeros as poles, no delay)")
	}
	return t, nil
}

func (t TwoLoops) plant(w float64) complex128 {
	if t.Response != nil {
		return t.Response(w)
	}
	return t.Plant.At(w)
}

func (t TwoLoops) hasOuter() bool { return len(t.Outer.Den) > 0 }

// Inputs and outputs of TwoLoops.Closed.
const (
	FromReference    = iota // reference, deviation
	FromDisturbance         // added to the plant's input
	FromNoise               // added to the measured output
	FromPlantNoise          // second input of a plant made by NoisyPlant, if any
	ToOutput         = 0    // output, without the noise added to its measurement
	ToInput          = 1    // input as sent
	ToInnerReference = 2    // v
)

// Closed returns the closed loops as one block, inputs From…, outputs To…. All states are kept.
func (t TwoLoops) Closed() SS {
	blocks := []SS{t.Plant, t.Inner.SS()}
	// Places of u_plant, e_inner (inputs) and y, u (outputs).
	_, pin := t.Plant.D.Dims()
	const y, u = 0, 1
	e := pin
	ins, outs, outer, pre := pin+1, 2, -1, -1
	if t.hasOuter() {
		blocks, outer = append(blocks, t.Outer.SS()), outs
		ins, outs = ins+1, outs+1
	}
	if len(t.Prefilter.Den) > 0 {
		blocks, pre = append(blocks, t.Prefilter.SS()), outs
		ins, outs = ins+1, outs+1
	}
	shift := pin - 1 // input place = output place + shift, the plant apart
	m, n := mat.NewDense(ins, outs, nil), mat.NewDense(ins, pin+2, nil)
	k := mat.NewDense(3, outs, nil)
	m.Set(0, u, 1)
	n.Set(0, FromDisturbance, 1)
	if pin == 2 {
		n.Set(1, FromPlantNoise, 1)
	}
	m.Set(e, y, -1)
	n.Set(e, FromNoise, -1)
	ref := e // where the prefiltered reference goes
	if outer >= 0 {
		m.Set(e, outer, 1)
		ref = outer + shift
		m.Set(ref, y, -1)
		n.Set(ref, FromNoise, -1)
		k.Set(ToInnerReference, outer, 1)
	}
	if pre >= 0 {
		n.Set(pre+shift, FromReference, 1)
		m.Set(ref, pre, 1)
		if outer < 0 {
			k.Set(ToInnerReference, pre, 1)
		}
	} else {
		n.Set(ref, FromReference, 1)
	}
	k.Set(ToOutput, y, 1)
	k.Set(ToInput, u, 1)
	g := Connect(blocks, m, n, k)
	if outer < 0 && pre < 0 { // v = r, which no block puts out
		g.D.Set(ToInnerReference, FromReference, 1)
	}
	return g
}

// Poles returns the eigenvalues of the interconnection of all realised blocks, in the z-plane: all inside the unit
// circle means internally stable, hidden modes and prefilter included.
func (t TwoLoops) Poles() []complex128 { return t.Closed().Poles() }

// inside is how far inside the unit circle a pole must lie to count as stable: a mode that neither grows nor decays is
// not held, whichever way rounding pushes it.
const inside = 1e-12

// Stable reports whether all poles lie inside the unit circle.
func (t TwoLoops) Stable() bool {
	for _, p := range t.Poles() {
		if !(cmplx.Abs(p) < 1-inside) {
			return false
		}
	}
	return true
}

// LoopAtInput is the loop gain at the plant input with both loops closed, plant Inner (1 + Outer): with negative
// feedback the sensitivity is 1/(1 + LoopAtInput).
func (t TwoLoops) LoopAtInput(w float64) complex128 {
	l := t.InnerLoop(w)
	if t.hasOuter() {
		l *= 1 + t.Outer.At(w)
	}
	return l
}

// InnerLoop is plant Inner, what is left when the outer loop is clamped or off.
func (t TwoLoops) InnerLoop(w float64) complex128 { return t.plant(w) * t.Inner.At(w) }

// OuterBreak is the loop gain with the loop opened at v only: it looks better than the loop is.
func (t TwoLoops) OuterBreak(w float64) complex128 {
	if !t.hasOuter() {
		return 0
	}
	l := t.InnerLoop(w)
	return t.Outer.At(w) * l / (1 + l)
}

// NoiseCovariance returns the covariance of output, input and v (in the order of To…) in the stable linear loop under
// white noise of standard deviation sd: the innovations of a plant made by NoisyPlant, else noise on the measured
// output alone. Limits and quantisation are left out.
func (t TwoLoops) NoiseCovariance(sd float64) (*mat.SymDense, error) {
	g := t.Closed()
	_, in := g.D.Dims()
	w := mat.NewDense(in, in, nil)
	w.Set(in-1, in-1, sd*sd)
	return OutputCovariance(g, w)
}
