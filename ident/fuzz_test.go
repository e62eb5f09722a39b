package ident

import (
	"bytes"
	"fmt"
	"runtime"
	"strings"
	"testing"
)

// smallModel is a model file of two poles, by hand: 2/((s + 3)(s - 2)).
const smallModel = `{"schema": "steadyrig/model/1", "rig": "x", "verdict": "sound", "logs": [{"file": "a.csv", "rows": 10}],
"plant": {"numerator": [2], "denominator": [1, 1, -6], "delay": 0.1, "delay_95": [0.1, null], "parameters": ["b0", "a1", "a2", "delay"],
"covariance": [[1, 0.5, 0, 0], [0.5, 1, 0, 0], [0, 0, 1, 0], [0, 0, 0, 1e-9]]%s},
"poles": [{"re": -3, "re_95": [null, -2]}, {"re": 2, "unstable": true}],
"gain": {"dc": {"value": -0.3, "sd": 1, "interval_95": [null, null]}}, "noise": {"numerator": [1, 0.5], "denominator": [1], "sd": 0.1, "sample_period": 0.01}}`

func modelSeeds() []string {
	return []string{
		fmt.Sprintf(smallModel, ""),
		fmt.Sprintf(smallModel, `, "draws": [{"numerator": [2.1], "denominator": [1, 1, -5.9], "delay": 0.1}, {"numerator": [1, 2], "denominator": [1, 2, -6], "delay": 0}]`),
		`{"schema": "steadyrig/model/1", "verdict": "refused", "warnings": ["no"]}`,
		strings.Replace(fmt.Sprintf(smallModel, ""), `"a2", "delay"]`, `"a2", "b0x"]`, 1),
		strings.Replace(fmt.Sprintf(smallModel, ""), `[1, 1, -6]`, `[1, 1e308, -1e308]`, 1),
		strings.Replace(fmt.Sprintf(smallModel, ""), `0.1,`, `NaN,`, 1), strings.Replace(fmt.Sprintf(smallModel, ""), `0.1,`, `1e999,`, 1),
		"", "null", "[]", strings.Repeat("[", 20000), `{"plant": {"draws": ` + strings.Repeat(`[{"numerator":`, 50),
	}
}

// A model that is read is one that can be used: its plants and their noise are there, and what is written of it reads as the same.
func FuzzReadModel(f *testing.F) {
	for _, s := range modelSeeds() {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		m, err := ReadModel(bytes.NewReader(text), "model.json")
		if err != nil {
			if s := err.Error(); strings.ContainsAny(s, "\n\r\x00\x1b") || !strings.HasPrefix(s, "model.json") || len(s) > 1000 {
				t.Fatalf("no error of one line about the file: %q", s)
			}
			return
		}
		var first, second bytes.Buffer
		if err := m.Write(&first); err != nil {
			t.Fatalf("read, but not to be written: %v", err)
		}
		again, err := ReadModel(bytes.NewReader(first.Bytes()), "again.json")
		if err != nil {
			t.Fatalf("written, but not to be read: %v", err)
		}
		if err := again.Write(&second); err != nil || first.String() != second.String() {
			t.Fatalf("round trip differs (%v):\n%s\n%s", err, first.String(), second.String())
		}
		if len(m.Plant.Denominator) == 0 {
			return
		}
		for _, g := range append(m.Draw(2, 1), m.TF()) {
			if len(g.Den) != len(m.Plant.Denominator) || g.Delay < 0 {
				t.Fatalf("%+v is no plant of the model", g)
			}
		}
		if h := m.NoiseShape(); h.Num[0] != 1 || h.Den[0] != 1 {
			t.Fatalf("noise shape %+v", h)
		}
		if m.Plant.Delay < 1e3*m.Noise.SamplePeriod { // a longer one takes its samples
			m.Colour()
		}
	})
}

// endless is text that goes on for ever after a head, near enough, and counts how much of it was taken.
type endless struct {
	head, text string
	taken      int64
}

func (r *endless) Read(p []byte) (int, error) {
	n := 0
	if r.taken == 0 {
		n = copy(p, r.head)
	}
	for n < len(p) {
		n += copy(p[n:], r.text)
	}
	r.taken += int64(n)
	return n, nil
}

// What is hostile is refused within bounds of memory, and an absurd order before its cube is worked out.
func TestHostileModels(t *testing.T) {
	for _, c := range []struct{ head, text string }{{"", "["}, {`{"plant": {"numerator": [`, "1,"}, {`{"rig": "`, "x"}, {`{"x":[`, "[],"}} {
		var before, after runtime.MemStats
		runtime.ReadMemStats(&before)
		r := &endless{head: c.head, text: strings.Repeat(c.text, 1<<12)}
		_, err := ReadModel(r, "model.json")
		runtime.ReadMemStats(&after)
		if err == nil || !strings.Contains(err.Error(), "16 MB") {
			t.Errorf("%q without end: %v", c.text, err)
		}
		if n := after.TotalAlloc - before.TotalAlloc; r.taken > 20<<20 || n > 128<<20 {
			t.Errorf("%q without end: %d bytes taken, %d allocated", c.text, r.taken, n)
		}
	}
	many := strings.Repeat("1,", 200_000) + "1"
	for old, text := range map[string]string{`[1, 1, -6]`: "[" + many + "]", `"denominator": [1]`: `"denominator": [` + many + "]", `"numerator": [1, 0.5]`: `"numerator": [` + many + "]"} {
		_, err := ReadModel(strings.NewReader(strings.Replace(fmt.Sprintf(smallModel, ""), old, text, 1)), "model.json")
		if err == nil || !strings.Contains(err.Error(), "order 200000") {
			t.Errorf("200 000 coefficients for %s: %v", old, err)
		}
	}
	if _, err := ReadModel(strings.NewReader(fmt.Sprintf(smallModel, "")), "model.json"); err != nil {
		t.Error(err)
	}
}
