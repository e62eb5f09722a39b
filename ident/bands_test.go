package ident

import (
	"math"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/demorig"
)

// cutAt is a log in pieces: every so many rows a few are missing.
func cutAt(exps []*data.Experiment, rows int) []*data.Experiment {
	whole := exps[0].Segments[0]
	e := *exps[0]
	e.Segments = nil
	for from := 0; from+rows <= len(whole.Y); from += rows + 5 {
		s := data.Segment{U: whole.U[from : from+rows], Y: whole.Y[from : from+rows]}
		if whole.R != nil {
			s.R, s.D = whole.R[from:from+rows], whole.D[from:from+rows]
		}
		e.Segments = append(e.Segments, s)
	}
	return []*data.Experiment{&e}
}

// The signal-to-noise ratio of a band is that of the true loop: what acts from outside moves the output by B/(A Q - B P), the
// disturbance by A Q/(A Q - B P). A coherence c has the ratio c/(1-c), hence a relative deviation SD/(c(1-c)); four of them are
// allowed, of some forty bands 3e-3 by chance. Segments of finite length add to the noise what the response to rows before a
// segment amounts to: that takes something off large ratios, so that those above 15 dB are only bounded from above.
func TestSignalToNoiseIsTheLoops(t *testing.T) {
	for _, r := range demorig.All() {
		exps := logged(t, r, r.Signals(r.Rows, 7), true)
		o := outside(exps)
		c := coherence(exps, o, r.Period)
		inf := expected(t, exps, truth(t, r))
		checked := 0
		for _, b := range c.Bands {
			var signal, noise float64
			for k, at := range inf.slopes {
				if w := inf.omega(k) / r.Period; w > b.From && w <= b.To {
					signal += inf.eta[k] * at.fromOutside * at.gainSquare
					noise += float64(inf.rows) / float64(len(inf.slopes)) * at.fromDither / at.overNoise
				}
			}
			want := signal / noise
			t.Logf("%-8s %7.3g to %7.3g rad/s: %6.1f dB in truth, coherence %.3f ± %.3f", r.Name, b.From, b.To, 10*math.Log10(want), b.Output.Coherence, b.Output.SD)
			if b.SignalToNoise == nil {
				if v := want / (1 + want); v > b.Output.ByChance+4*b.Output.SD {
					t.Errorf("%s, %.3g to %.3g rad/s: nothing seen of a coherence of %.3g", r.Name, b.From, b.To, v)
				}
				continue
			}
			checked++
			got, within := *b.SignalToNoise, 4*b.Output.SD/(b.Output.Coherence*(1-b.Output.Coherence))
			if off := math.Log(got / want); off > within || off < -within && want < 30 {
				t.Errorf("%s, %.3g to %.3g rad/s: ratio %.3g, in truth %.3g, within a factor of %.3g", r.Name, b.From, b.To, got, want, math.Exp(within))
			}
		}
		if checked < 3 {
			t.Errorf("%s: only %d bands tell a ratio", r.Name, checked)
		}
	}
}

// What the law leaves unexplained shows the same coherence as a signal of short holds itself, when that is not logged; a log in
// pieces the same as whole; a quiet log and one of a few rows none.
func TestCoherenceOfWhatIsNotLogged(t *testing.T) {
	alike := func(name string, a, b *Coherence) {
		t.Helper()
		if a == nil || b == nil {
			t.Fatalf("%s: no coherence", name)
		}
		shared := 0
		for _, x := range a.Bands {
			for _, y := range b.Bands {
				if x.From != y.From || x.To != y.To {
					continue
				}
				shared++
				if d, sd := math.Abs(x.Output.Coherence-y.Output.Coherence), math.Hypot(x.Output.SD, y.Output.SD); d > 4*sd+0.02 {
					t.Errorf("%s, %.3g to %.3g rad/s: coherence %.3f and %.3f, deviations %.3f", name, x.From, x.To, x.Output.Coherence, y.Output.Coherence, sd)
				}
			}
		}
		if shared < 4 {
			t.Errorf("%s: only %d bands in common", name, shared)
		}
	}
	of := func(exps []*data.Experiment) *Coherence { return coherence(exps, outside(exps), exps[0].Period) }
	for _, r := range demorig.All() {
		s := r.Signals(r.Rows, 8)
		with, without := logged(t, r, s, true), logged(t, r, s, false)
		c, l := of(with), of(without)
		if l == nil || l.Signals[0] != "law" || c.Signals[0] == "law" {
			t.Errorf("%s: %+v and %+v", r.Name, c, l)
			continue
		}
		// A probe that is held for as long as the law is looked at is foretold from the output, too, which mixes noise in.
		if r.Dither > 0 && r.DitherHold < lawOrder {
			alike(r.Name+", not logged", c, l)
		}
		alike(r.Name+", in pieces", c, of(cutAt(with, 700)))
		alike(r.Name+", in pieces, not logged", l, of(cutAt(without, 700)))
		two := append(logged(t, r, r.Signals(r.Rows, 9), true), with...)
		alike(r.Name+", two logs", c, of(two))
		quiet := r
		quiet.Dither, quiet.Step = 0, 0
		if q := logged(t, quiet, quiet.Signals(2000, 8), true); of(q) != nil || len(excitation(q, outside(q))) != 2 {
			t.Errorf("%s: a quiet log has a coherence", r.Name)
		}
		if q := of(cutAt(with, 30)); q != nil && len(q.Bands) == 0 {
			t.Errorf("%s: a coherence without bands", r.Name)
		}
	}
}

// Order of excitation of what demo rigs log, and of sines.
func TestExcitationOfLogs(t *testing.T) {
	r := rigNamed(t, "flap")
	s := r.Signals(3000, 4)
	for k := range s.Dither {
		s.Dither[k] = 0.3*math.Sin(0.1*float64(k)) + 0.2*math.Sin(0.45*float64(k)+1)
	}
	for _, c := range []struct {
		exps []*data.Experiment
		want []Excitation
	}{
		{logged(t, r, r.Signals(3000, 4), true), []Excitation{{Signal: "reference"}, {Signal: "dither", Order: mostOrder, AtLeast: true}}},
		{logged(t, r, s, true), []Excitation{{Signal: "reference"}, {Signal: "dither", Order: 4}}},
	} {
		got := excitation(c.exps, outside(c.exps))
		if len(got) != len(c.want) {
			t.Errorf("%+v, want %+v", got, c.want)
			continue
		}
		for i := range got {
			if got[i] != c.want[i] {
				t.Errorf("%+v, want %+v", got[i], c.want[i])
			}
		}
	}
}
