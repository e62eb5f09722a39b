package design

import (
	"bytes"
	"math"
	"strings"
	"testing"
)

// Clopper & Pearson (1934), Biometrika 26, 404-413: zero failures in closed form; 950 of 1000 from the incomplete
// beta function.
func TestClopperPearson(t *testing.T) {
	for _, c := range []struct {
		name      string
		got, want float64
	}{
		{"0 of 59, upper 95 %", ClopperPearsonUpper(0, 59, 0.95), 0.049507609888227},
		{"0 of 10, upper 95 %", ClopperPearsonUpper(0, 10, 0.95), 0.258865550893052},
		{"950 of 1000, lower 97.5 %", ClopperPearsonLower(950, 1000, 0.975), 0.934609512085},
		{"950 of 1000, upper 97.5 %", ClopperPearsonUpper(950, 1000, 0.975), 0.962664602395},
	} {
		// 1e-10: the quantile is found by bisection on the incomplete beta function.
		if !(math.Abs(c.got-c.want) < 1e-10) {
			t.Errorf("%s: got %.15g, want %.15g", c.name, c.got, c.want)
		}
	}
	// Four misses in 2000 are the most for a promise of 99.5 % at 95 %.
	if b := ClopperPearsonLower(1996, 2000, 0.95); !(b > 0.995 && b < 0.9955) {
		t.Errorf("1996 of 2000: %v", b)
	}
	if b := ClopperPearsonLower(1995, 2000, 0.95); !(b < 0.995) {
		t.Errorf("1995 of 2000: %v", b)
	}
	if ClopperPearsonLower(0, 7, 0.95) != 0 {
		t.Error("nothing seen bounds nothing from below")
	}
}

const ownLoops = `{"schema": "steadyrig/loops/1", "rig": "x", "sample_period": 0.02,
 "inner": {"continuous": {"numerator": [1, 2], "denominator": [0.1, 1]}},
 "outer": {"discrete": {"numerator": [0.2, -0.1], "denominator": [2, -2]}},
 "prefilter": 1, "input_limits": [-1, 1], "outer_limits": null}`

func TestReadLoops(t *testing.T) {
	l, err := ReadLoops(strings.NewReader(ownLoops), "own.json")
	if err != nil {
		t.Fatal(err)
	}
	// (s+2)/(0.1s+1) at s = 100 (1-w)/(1+w): (102 - 98 w)/(11 - 9 w).
	want := Rational{[]float64{102. / 11, -98. / 11}, []float64{1, -9. / 11}}
	for i := range want.Numerator {
		if math.Abs(l.Inner.Discrete.Numerator[i]-want.Numerator[i]) > 1e-12 || math.Abs(l.Inner.Discrete.Denominator[i]-want.Denominator[i]) > 1e-12 {
			t.Errorf("Tustin: got %v, want %v", l.Inner.Discrete, want)
		}
	}
	if d := l.Outer.Discrete; d.Denominator[0] != 1 || d.Denominator[1] != -1 || d.Numerator[0] != 0.1 {
		t.Errorf("outer not normalised: %v", d)
	}
	if l.Prefilter != nil || len(l.Warnings) != 1 {
		t.Errorf("prefilter %v, warnings %q", l.Prefilter, l.Warnings)
	}
	var first, second bytes.Buffer
	if err := l.Write(&first); err != nil {
		t.Fatal(err)
	}
	again, err := ReadLoops(bytes.NewReader(first.Bytes()), "again.json")
	if err != nil {
		t.Fatal(err)
	}
	if err := again.Write(&second); err != nil {
		t.Fatal(err)
	}
	if first.String() != second.String() {
		t.Errorf("round trip differs:\n%s\n%s", first.String(), second.String())
	}
}

func TestReadLoopsFaults(t *testing.T) {
	swap := func(old, new string) string { return strings.Replace(ownLoops, old, new, 1) }
	for _, c := range []struct{ name, text, want string }{
		{"empty", "", "empty"},
		{"syntax", swap(`"rig": "x",`, `"rig": "x"`), "line 1"},
		{"kind", swap(`0.02`, `"fast"`), "sample_period"},
		{"schema", swap(`loops/1`, `model/1`), "schema"},
		{"period", swap(`0.02`, `-1`), "sample_period"},
		{"no inner", swap(`"inner"`, `"inside"`), "inner"},
		{"improper", swap(`[1, 2]`, `[1, 2, 3]`), "roll-off"},
		{"no leading", swap(`[2, -2]`, `[0, -2]`), "outer"},
		{"limits", swap(`[-1, 1]`, `[1, -1]`), "input_limits"},
		{"point", swap(`"rig"`, `"operating_point": {"input": 3, "output": 0}, "rig"`), "operating_point"},
		{"outer limits", swap(`"outer_limits": null`, `"outer_limits": [1, 2]`), "outer_limits"},
	} {
		_, err := ReadLoops(strings.NewReader(c.text), "own.json")
		if err == nil {
			t.Errorf("%s: accepted", c.name)
		} else if msg := err.Error(); !strings.Contains(msg, c.want) || strings.Contains(msg, "\n") || !strings.Contains(msg, "own.json") {
			t.Errorf("%s: %q", c.name, msg)
		}
	}
}
