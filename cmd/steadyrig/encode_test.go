package main

import (
	"bytes"
	"math"
	"strings"
	"testing"

	"steadyrig/ident"
)

// A number that JSON cannot hold is refused by its name, and nothing is written. An open end of an interval is none.
func TestNumbersThatAreNone(t *testing.T) {
	nan := math.NaN()
	open := ident.Interval{Lo: math.Inf(-1), Hi: 2}
	good := ident.Root{Re: 1, Re95: open}
	for _, c := range []struct {
		v    any
		says string // empty: it can be written
	}{
		{&ident.Model{Poles: []ident.Root{good}}, ""},
		{&ident.Model{Poles: []ident.Root{good, {ReSD: nan}}}, "poles[1].re_sd (NaN)"},
		{&ident.Model{Gain: ident.Gain{DC: &ident.Estimate{Value: math.Inf(1)}}}, "gain.dc.value (+Inf)"},
		{&ident.Model{Plant: ident.Plant{Covariance: [][]float64{{1, 0}, {0, nan}}}}, "plant.covariance[1][1] (NaN)"},
		{map[string]any{"audit": &ident.AuditReport{Spread: ident.OperatingPoint{Output: nan}}}, "audit.spread.output (NaN)"},
	} {
		var b bytes.Buffer
		err := printJSON(&b, c.v)
		switch {
		case c.says == "":
			if err != nil || b.Len() == 0 {
				t.Errorf("%d bytes and %v", b.Len(), err)
			}
		case err == nil || !strings.Contains(err.Error(), c.says) || statusOf(err) != statusRefused || b.Len() > 0:
			t.Errorf("%v, status %d, %d bytes written, want %q, status %d and nothing", err, statusOf(err), b.Len(), c.says, statusRefused)
		}
	}
}
