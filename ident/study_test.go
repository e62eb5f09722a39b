package ident

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"strconv"
	"strings"
	"testing"
	"time"

	"steadyrig/data"
	"steadyrig/fit/demorig"
)

// experiment reads the log of a demo rig as a user would.
func experiment(t testing.TB, r demorig.Rig, seed uint64) (*data.Experiment, *data.Rig) {
	t.Helper()
	rig, err := data.ReadRig(strings.NewReader(r.File()), r.Name+".toml")
	if err != nil {
		t.Fatal(err)
	}
	var log bytes.Buffer
	if err := r.WriteCSV(&log, seed); err != nil {
		t.Fatal(err)
	}
	e, err := data.ReadLog(&log, r.Name+".csv", rig)
	if err != nil {
		t.Fatal(err)
	}
	return e, rig
}

// tally counts how a rig's fits came out.
type tally struct {
	logs, right, allIn   int
	poleIn, poles        int
	sound, weak, refused int
	ratio                float64 // sum of squared errors of the unstable part over reported variance
	ratios               int
	elapsed              time.Duration
	wrong                []string
}

// study fits seeds logs of a rig.
func study(t testing.TB, r demorig.Rig, from, seeds uint64) tally {
	var c tally
	truth := r.Truth.Den.Roots()
	for seed := from; seed < from+seeds; seed++ {
		e, rig := experiment(t, r, seed)
		start := time.Now()
		m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
		c.elapsed += time.Since(start)
		c.logs++
		var refused *RefusedError
		if errors.As(err, &refused) {
			c.refused++
			c.wrong = append(c.wrong, fmt.Sprintf("seed %d: %v", seed, err))
			continue
		}
		if err != nil {
			t.Fatal(err)
		}
		switch m.Verdict {
		case Sound:
			c.sound++
		case Weak:
			c.weak++
			c.wrong = append(c.wrong, fmt.Sprintf("seed %d: %q", seed, m.Warnings))
		}
		hasDelay := len(m.Plant.Parameters) == len(m.Plant.Numerator)+len(m.Plant.Denominator)
		if len(m.Poles) != len(truth) || len(m.Plant.Numerator) != len(r.Truth.Num) || hasDelay != (r.Truth.Delay > 0) {
			c.wrong = append(c.wrong, fmt.Sprintf("seed %d: %d poles %d zeros delay %.3g: %v", seed, len(m.Poles), len(m.Zeros), m.Plant.Delay, m.Warnings))
			if len(m.Poles) != len(truth) {
				continue
			}
		} else {
			c.right++
		}
		all := true
		for i, p := range m.Poles {
			in := p.Re95All.Contains(real(truth[i])) && p.Im95All.Contains(imag(truth[i]))
			c.poles++
			if p.Re95.Contains(real(truth[i])) {
				c.poleIn++
			}
			all = all && in
			if real(truth[i]) > 0 {
				c.ratio += math.Pow((p.Re-real(truth[i]))/p.ReSD, 2)
				c.ratios++
			}
		}
		if all {
			c.allIn++
		}
	}
	return c
}

func TestStudyOfDemoRigs(t *testing.T) {
	seeds := 2
	if v := os.Getenv("STEADYRIG_STUDY"); v != "" {
		seeds, _ = strconv.Atoi(v)
	}
	for _, r := range demorig.All() {
		if name := os.Getenv("STEADYRIG_RIG"); name != "" && name != r.Name {
			continue
		}
		c := study(t, r, 1000, uint64(seeds))
		t.Logf("%-8s logs %d right %d, all poles in %d, poles in %d/%d, unstable rms z %.2f, sound %d weak %d refused %d, %v a log",
			r.Name, c.logs, c.right, c.allIn, c.poleIn, c.poles, math.Sqrt(c.ratio/float64(max(1, c.ratios))), c.sound, c.weak, c.refused, (c.elapsed / time.Duration(c.logs)).Round(time.Millisecond))
		for _, w := range c.wrong {
			t.Log("   ", w)
		}
	}
}
