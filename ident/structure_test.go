package ident

import (
	"context"
	"testing"

	"steadyrig/data"
)

// Starts are compared on part of a long log: in one piece, or the constants of
// several hide the slow disturbance and the plant takes it in.
func TestSlowDisturbanceOfALongLog(t *testing.T) {
	if testing.Short() {
		t.Skip("fits two long logs")
	}
	for _, seed := range []uint64{6001, 6003} {
		e, rig := experiment(t, rigNamed(t, "flap"), seed)
		m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
		if err != nil {
			t.Fatal(err)
		}
		if s := m.Evidence.Structures[0]; s.Poles != 3 || s.Zeros != 1 || s.Colour != 1 {
			t.Errorf("seed %d: %d poles, %d zeros, %d disturbance poles, want 3, 1, 1", seed, s.Poles, s.Zeros, s.Colour)
		}
	}
}
