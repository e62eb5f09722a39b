package design

import (
	"bytes"
	"strings"
	"testing"
)

// Loops that are read can be run, and what is written of them reads as the same.
func FuzzReadLoops(f *testing.F) {
	swap := func(old, new string) string { return strings.Replace(ownLoops, old, new, 1) }
	for _, s := range []string{
		ownLoops, "", "null", "[]", "1", strings.Repeat("[", 20000),
		swap("[0.1, 1]", "[1e-308, 1]"), swap("[2, -2]", "[1e-308, 1e308]"), swap(`"prefilter": 1`, `"prefilter": {"discrete": {"numerator": [0.5], "denominator": [1, -0.5]}}`),
		swap("0.02", "1e308"), swap("0.02", "1e999"), swap(`"outer": {`, `"outer": 1, "front": [{"outer": 1, "inner": null}], "bounds": [{"asked": null}], "x": {`),
		`{"schema": "steadyrig/loops/1", "verdict": "refused", "inner": null}`,
	} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		l, err := ReadLoops(bytes.NewReader(text), "loops.json")
		if err != nil {
			if s := err.Error(); strings.ContainsAny(s, "\n\r\x00\x1b") || !strings.Contains(s, "loops.json") || len(s) > 1000 {
				t.Fatalf("no error of one line about the file: %q", s)
			}
			return
		}
		var first, second bytes.Buffer
		if err := l.Write(&first); err != nil {
			t.Fatalf("read, but not to be written: %v", err)
		}
		again, err := ReadLoops(bytes.NewReader(first.Bytes()), "again.json")
		if err != nil {
			t.Fatalf("written, but not to be read: %v", err)
		}
		if err := again.Write(&second); err != nil || first.String() != second.String() {
			t.Fatalf("round trip differs (%v):\n%s\n%s", err, first.String(), second.String())
		}
		if err := l.LTI().Validate(); err == nil {
			s := l.LTI().Start()
			s.Step(1, 0.5)
		}
	})
}

// endless is text that goes on for ever after a head.
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

// What is hostile is refused within bounds, and an absurd order before its cube is worked out.
func TestHostileLoops(t *testing.T) {
	for _, c := range []struct{ head, text string }{{"", "["}, {`{"inner": {"discrete": {"numerator": [`, "1,"}} {
		r := &endless{head: c.head, text: strings.Repeat(c.text, 1<<12)}
		if _, err := ReadLoops(r, "loops.json"); err == nil || !strings.Contains(err.Error(), "16 MB") || r.taken > 20<<20 {
			t.Errorf("%q without end: %d bytes taken: %v", c.text, r.taken, err)
		}
	}
	many := "[" + strings.Repeat("1,", 200_000) + "1]"
	for _, old := range []string{"[1, 2]", "[0.1, 1]", "[0.2, -0.1]", "[2, -2]"} {
		_, err := ReadLoops(strings.NewReader(strings.Replace(ownLoops, old, many, 1)), "loops.json")
		if err == nil || !strings.Contains(err.Error(), "order 200000") {
			t.Errorf("200 000 coefficients for %s: %v", old, err)
		}
	}
}
