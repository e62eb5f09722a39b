package main

import (
	"bytes"
	"context"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"regexp"
	"strconv"
	"strings"
	"sync"
	"testing"

	"steadyrig/design"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// kept returns the results that testdata keeps, as files of a working folder.
func kept(t *testing.T, names ...string) map[string]string {
	t.Helper()
	files := map[string]string{}
	for _, name := range names {
		text, err := os.ReadFile(filepath.Join("testdata", name))
		if err != nil {
			t.Fatal(err)
		}
		files[name] = string(text)
	}
	return files
}

func readLoops(t *testing.T, text string) *design.Loops {
	t.Helper()
	l, err := design.ReadLoops(strings.NewReader(text), "loops.json")
	if err != nil {
		t.Fatal(err)
	}
	return l
}

// The tool's own loops, given again in every way, are judged as from their file.
func TestVerifyFromFlagsAndRigFile(t *testing.T) {
	if testing.Short() {
		t.Skip("three proofs take seconds")
	}
	files := kept(t, "rig.toml", "model.json", "loops.json")
	own := readLoops(t, files["loops.json"])
	list := func(c []float64) string {
		text, err := json.Marshal(c)
		if err != nil {
			t.Fatal(err)
		}
		return string(text)
	}
	z := func(b *design.Block) string {
		return list(b.Discrete.Numerator) + " / " + list(b.Discrete.Denominator) + " in z^-1"
	}
	limits := fmt.Sprintf("outer_limits = %s\n", list(own.OuterLimits[:]))
	files["own.toml"] = files["rig.toml"] + fmt.Sprintf("\n[loops]\ninner = \"7\"\nouter = %q\nprefilter = %q\n", z(own.Outer), z(own.Prefilter)) + limits
	inFolder(t, files)
	// verified calls verify --json and returns its document.
	verified := func(want int, args ...string) (l *design.Loops, stderr string) {
		t.Helper()
		status, stdout, stderr := call(t, append([]string{"verify", "--json"}, args...)...)
		if status != want {
			t.Fatalf("%v: exit status %d: %s", args, status, stderr)
		}
		return readLoops(t, stdout), stderr
	}
	want, stderr := verified(statusDone, "own.toml", "model.json", "loops.json")
	if !strings.Contains(stderr, "[loops] of the rig file is not looked at") {
		t.Errorf("two sources of loops: %s", stderr)
	}
	got, _ := verified(statusDone, "own.toml", "model.json", "--inner", z(own.Inner))
	if !same(got.Margins, want.Margins) || !same(got.Promise, want.Promise) || got.Verdict != want.Verdict {
		t.Errorf("margins %+v, promise %+v", got.Margins.PlantInput, got.Promise)
	}
	// A flag replaces one controller of a file; in s its mapping is chosen by checking, and 10 ms hardly change it.
	c := own.Inner.Continuous
	s := fmt.Sprintf("(%v*s + %v)/(%v*s + %v)", c.Numerator[0], c.Numerator[1], c.Denominator[0], c.Denominator[1])
	status, text, stderr := call(t, "verify", "rig.toml", "model.json", "loops.json", "--inner", s, "--out", "mapped.json")
	if status != statusDone || !strings.Contains(text, "From s to z") || !strings.Contains(text, "worst of 200") {
		t.Errorf("exit status %d: %s%s", status, text, stderr)
	}
	fits80(t, "verify", text)
	mapped, err := os.ReadFile("mapped.json")
	if err != nil {
		t.Fatal(err)
	}
	got = readLoops(t, string(mapped))
	if m := got.Sampling; m == nil || m.Mapping == "" || got.Inner.Given != s || !same(got.Outer, want.Outer) ||
		math.Abs(got.Margins.PlantInput.PeakSensitivity-want.Margins.PlantInput.PeakSensitivity) > 0.05 {
		t.Errorf("in s: %+v, peak %v", m, got.Margins.PlantInput.PeakSensitivity)
	}
	// Without an outer loop the inner one is all there is; this one is too weak to hold any plant.
	alone, _ := verified(statusRefused, "own.toml", "model.json", "--inner", "1e-6", "--outer", "none", "--prefilter", "1")
	if alone.Outer != nil || alone.Prefilter != nil || alone.Margins.OuterBreak != nil || alone.Promise.Stable != 0 {
		t.Errorf("no outer loop: %+v", alone.Promise)
	}
}

func same(a, b any) bool {
	x, errA := json.Marshal(a)
	y, errB := json.Marshal(b)
	return errA == nil && errB == nil && bytes.Equal(x, y)
}

// A controller that cannot be read gives one line with its place, exit status 2 and nothing else.
func TestVerifyBadControllers(t *testing.T) {
	files := kept(t, "rig.toml", "model.json", "loops.json")
	files["bad.toml"] = files["rig.toml"] + "\n[loops]\ninner = \"2*(s+1)/(0.1*s+1\"\n"
	inFolder(t, files)
	line := strings.Count(files["rig.toml"], "\n") + 3
	for _, c := range []struct {
		args []string
		says []string
	}{
		{[]string{"rig.toml", "model.json"}, []string{"no loops to verify", "--inner"}},
		{[]string{"rig.toml", "model.json", "--outer", "2/s"}, []string{"no loops to verify"}},
		{[]string{"rig.toml", "model.json", "--inner", "2*(s+1)/(0.1*p+1)"}, []string{"--inner, column 14", `"p"`}},
		{[]string{"rig.toml", "model.json", "loops.json", "--prefilter", "s"}, []string{"--prefilter, column 1", "more zeros"}},
		{[]string{"bad.toml", "model.json"}, []string{fmt.Sprintf("bad.toml: line %d: loops.inner, column 9", line), "never closed"}},
		{[]string{"rig.toml"}, []string{"a rig file and a model"}},
	} {
		status, stdout, stderr := call(t, append([]string{"verify"}, c.args...)...)
		if status != statusCall || stdout != "" {
			t.Errorf("%v: exit status %d, standard output %q", c.args, status, stdout)
		}
		oneErrorLine(t, stderr, c.says...)
	}
}

// A controller that cancels the unstable pair, exactly or within 1 %, is refused, though the nominal step looks perfect
// (exactly, it is that of 1/(1 + s/6.3)); and the seconds that the refusal prints are those of the simulator.
func TestVerifyRefusesCancellingController(t *testing.T) {
	files := kept(t, "rig.toml", "model.json")
	inFolder(t, files)
	model, err := ident.ReadModel(strings.NewReader(files["model.json"]), "model.json")
	if err != nil {
		t.Fatal(err)
	}
	g := model.TF()
	for _, off := range []float64{0, 0.01, -0.01} {
		zeros := "0.02"
		for _, p := range g.Poles() {
			switch {
			case imag(p) > 0:
				re := real(p) * (1 + off)
				zeros += fmt.Sprintf("*(s^2 - %v s + %v)", 2*re, re*re+imag(p)*imag(p))
			case imag(p) == 0:
				zeros += fmt.Sprintf("*(s + %v)", -real(p))
			}
		}
		inner := fmt.Sprintf("%s/((s + %v)*s*(0.005s + 1))", zeros, -real(g.Zeros()[0]))
		status, stdout, stderr := call(t, "verify", "rig.toml", "model.json", "--inner", inner, "--out", "l.json", "--force")
		if status != statusRefused || !strings.HasPrefix(stdout, "REFUSED") {
			t.Fatalf("exit status %d: %s", status, stderr)
		}
		lines := strings.Split(strings.TrimSpace(stderr), "\n")
		last := lines[len(lines)-1]
		seconds := regexp.MustCompile(`after ([0-9.e-]+) s a step of one deg at the plant input has driven the output to its trip level, 9\.9 deg off`).FindStringSubmatch(last)
		if seconds == nil || !strings.Contains(last, "never cancelled") || !strings.Contains(last, "grows by e every") {
			t.Fatalf("off by %g: %s", off, last)
		}
		said, _ := strconv.ParseFloat(seconds[1], 64)
		text, err := os.ReadFile("l.json")
		if err != nil {
			t.Fatal(err)
		}
		l := readLoops(t, string(text))
		if l.Verdict != design.Refused || l.Hidden == nil {
			t.Fatalf("verdict %s, hidden %+v", l.Verdict, l.Hidden)
		}
		law := l.LTI()
		law.InputLimits = [2]float64{} // the mode's own growth, before anything holds it
		const steps = 1500
		run := lti.Run{Plant: g, Period: l.SamplePeriod, Law: law, Steps: steps, Reference: make([]float64, steps)}
		for k := range run.Reference {
			run.Reference[k] = law.Y0 + 1
		}
		step, err := run.Simulate()
		if err != nil {
			t.Fatal(err)
		}
		if off == 0 {
			for k, y := range step.YTrue[:250] {
				if over := y - law.Y0 - 1; over > 0.02 || k >= 100 && over < -0.02 {
					t.Fatalf("the step does not look perfect: %v after %d samples", y, k)
				}
			}
		}
		run.Reference, run.InputDisturbance = nil, make([]float64, steps)
		for k := range run.InputDisturbance {
			run.InputDisturbance[k] = 1
		}
		push, err := run.Simulate()
		if err != nil {
			t.Fatal(err)
		}
		at := 0
		for k, y := range push.YTrue {
			if math.Abs(y-law.Y0) >= 9.9 {
				at = k
				break
			}
		}
		if simulated := float64(at) * l.SamplePeriod; at == 0 || math.Abs(said-simulated) > 0.02*simulated+l.SamplePeriod {
			t.Errorf("off by %g: %g s said, %g s in simulation", off, said, simulated)
		}
		t.Log(last)
	}
}

// What physics allows is printed before anything is tuned or tried: when the
// first plant is tried, all limits with their sources are on the page.
func TestLimitsAreToldFirst(t *testing.T) {
	inFolder(t, kept(t, "rig.toml", "model.json"))
	var out bytes.Buffer
	a := &app{stdout: &out}
	rig, model, _, err := a.rigAndModel([]string{"rig.toml", "model.json"}, &settings{})
	if err != nil {
		t.Fatal(err)
	}
	var once sync.Once
	loops, err := design.Design(context.Background(), model, rig, design.Options{Plants: 20, Limits: a.limits(&settings{}), Progress: func(int, int) {
		once.Do(func() { out.WriteString("plants are tried") })
	}})
	if loops == nil {
		t.Fatal(err)
	}
	told, _, tried := strings.Cut(out.String(), "plants are tried")
	if got := strings.Count(told, "Source: "); !tried || got != len(loops.Bounds) || !strings.HasPrefix(told, "What physics allows") {
		t.Errorf("before plants are tried %d of %d limits are told:\n%s", got, len(loops.Bounds), told)
	}
	if a.limits(&settings{json: true}) != nil {
		t.Error("limits are printed beside the JSON document")
	}
}
