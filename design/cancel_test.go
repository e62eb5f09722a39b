package design

import (
	"context"
	"errors"
	"strings"
	"testing"
	"time"

	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// A context that ends stops the bounds and the tuning, not only the proof.
func TestDesignStopsEarly(t *testing.T) {
	r := testRigs()[3]
	m := r.model(t)
	for _, after := range []time.Duration{0, 30 * time.Millisecond} {
		ctx, cancel := context.WithTimeout(t.Context(), after)
		_, err := Design(ctx, m, r.rig(), Options{Seed: 1})
		cancel()
		if !errors.Is(err, context.DeadlineExceeded) {
			t.Errorf("after %v: %v", after, err)
		}
	}
}

// A delay of thousands of samples is answered at once: by e^(p tau) where the plant is unstable (Astrom (2000)), by
// the number of samples where it is not.
func TestDelayOfManySamples(t *testing.T) {
	for _, c := range []struct {
		name    string
		plant   lti.TF
		compute float64 // s
		delay   float64 // of the plant, s
		want    string
	}{
		{"unstable", lti.TF{Num: lti.Poly{4}, Den: lti.Poly{-2, 1}}, 5, 0, "no peak sensitivity below 10 is in reach"},
		{"unstable, and more than memory holds", lti.TF{Num: lti.Poly{4}, Den: lti.Poly{-2, 1}}, 0, 1e6, "no peak sensitivity below 10 is in reach"},
		{"integrating", lti.TF{Num: lti.Poly{4}, Den: lti.Poly{0, 1}}, 5, 0, "5000 samples"},
		{"stable", lti.TF{Num: lti.Poly{4}, Den: lti.Poly{1, 1}}, 5, 1e300, "samples"},
	} {
		rig, m := bareRig(0.001, c.compute, 2), bare(c.plant, 0.001)
		m.Plant.Delay = c.delay
		l, err := Design(t.Context(), m, rig, Options{Seed: 1})
		var refused *ident.RefusedError
		if !errors.As(err, &refused) || !strings.Contains(refused.What, c.want) || l == nil || l.Verdict != Refused || l.SamplePeriod != 0.001 {
			t.Errorf("%s: %v", c.name, err)
		}
	}
	// Several unstable poles and a few hundred samples: the limit is then that of one pole, which is lower but holds.
	r := testRigs()[3]
	rig := r.rig()
	rig.Loop.ComputeDelay = 3
	if _, err := Design(t.Context(), r.model(t), rig, Options{Seed: 1}); err == nil || !strings.Contains(err.Error(), "peak sensitivity") {
		t.Errorf("two poles: %v", err)
	}
}
