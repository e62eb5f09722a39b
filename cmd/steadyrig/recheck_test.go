package main

import (
	"bytes"
	"encoding/json"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/fit/demorig"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// demoRig is a built-in rig with its rig file read.
func demoRig(t *testing.T, name string) (demorig.Rig, *data.Rig) {
	t.Helper()
	r, ok := demorig.ByName(name)
	if !ok {
		t.Fatalf("no rig %q", name)
	}
	rig, err := data.ReadRig(strings.NewReader(r.File()), "rig.toml")
	if err != nil {
		t.Fatal(err)
	}
	return r, rig
}

// inTestdata is the path of a file that is kept for the tests.
func inTestdata(t *testing.T, name string) string {
	return filepath.Join(moduleRoot(t, sourceFolder), "cmd", "steadyrig", "testdata", name)
}

// testdata reads a file that is kept for the tests.
func testdata(t *testing.T, name string) string { return text(t, inTestdata(t, name)) }

// The pages of rechecks of hover: with 20 % more gain, with its gain at 0.3, and without loops. With -update the results
// that they are drawn from are made anew, which takes a minute.
func TestRecheckPages(t *testing.T) {
	_, rig := demoRig(t, "hover")
	if *update {
		inFolder(t, demoFiles(t, "hover", 1, nil))
		must := func(args ...string) {
			t.Helper()
			if status, _, stderr := call(t, args...); status != statusDone && status != statusRefused {
				t.Fatalf("%v: exit status %d: %s", args, status, stderr)
			}
		}
		must("fit", "rig.toml", "log.csv")
		must("design", "rig.toml", "model.json")
		for _, c := range []struct {
			name  string
			gain  float64
			loops []string
		}{{"recheck", 1.2, []string{"loops.json"}}, {"recheck-stop", 0.3, []string{"loops.json"}}, {"recheck-model", 1.2, nil}} {
			log := demoFiles(t, "hover", 2, func(r *demorig.Rig) { r.Truth.Num = r.Truth.Num.Scale(c.gain) })["log.csv"]
			if err := os.WriteFile("after.csv", []byte(log), 0o644); err != nil {
				t.Fatal(err)
			}
			must(slices.Concat([]string{"recheck", "rig.toml", "model.json"}, c.loops, []string{"after.csv", "--force", "--out", inTestdata(t, c.name+".json"), "--report", "page.html", "--loops", "new.json", "--model", "new-model.json"})...)
		}
	}
	for _, name := range []string{"recheck", "recheck-stop", "recheck-model"} {
		found := new(design.Recheck)
		if err := json.Unmarshal([]byte(testdata(t, name+".json")), found); err != nil {
			t.Fatal(err)
		}
		var b bytes.Buffer
		showRecheck(&page{w: &b}, found, rig)
		fits80(t, name, b.String())
		golden(t, name, b.String())
		var coloured bytes.Buffer
		showRecheck(&page{w: &coloured, colour: true}, found, rig)
		if bare := ansi.ReplaceAllString(coloured.String(), ""); bare != b.String() || bare == coloured.String() {
			t.Errorf("%s: colour changes more than the colour", name)
		}
	}
}

// A wrong call or input file of recheck gives one line that says what and what to do, exit status 2, and no file.
func TestBadRechecks(t *testing.T) {
	r, _ := demoRig(t, "flap")
	other := r
	other.Period = 0.02
	half := func(r demorig.Rig) string {
		r.Stopgap = lti.Tustin(lti.TF{Num: lti.Poly{0.9, 0.1}, Den: lti.Poly{1, 1.0 / 60}}, r.Period)
		r.Rows = 200
		var b bytes.Buffer
		if err := r.WriteCSV(&b, 5); err != nil {
			t.Fatal(err)
		}
		return b.String()
	}
	short := r
	short.Rows = 200
	var log bytes.Buffer
	if err := short.WriteCSV(&log, 5); err != nil {
		t.Fatal(err)
	}
	after := log.String()
	rig, model, loops := r.File(), testdata(t, "model.json"), testdata(t, "loops.json")
	known := demoFiles(t, "flap", 1, nil)["log.csv"]
	inFolder(t, map[string]string{
		"rig.toml": rig, "model.json": model, "loops.json": loops, "after.csv": after, "known.csv": known,
		"renamed.csv":  strings.Replace(after, "t,u,y,r,d", "t,u,out,r,d", 1),
		"period.csv":   half(other),
		"fit.toml":     rig[:strings.Index(rig, "[loop]")],
		"slow.toml":    strings.Replace(rig, "[loop]\nsample_period = 0.01", "[loop]\nsample_period = 0.02", 1),
		"units.json":   strings.Replace(model, `"operating_point"`, `"units": {"input": "deg", "output": "rad"}, "operating_point"`, 1),
		"empty.json":   "",
		"none.json":    "{}",
		"loops.txt":    strings.Replace(loops, `"sample_period": 0.01`, `"sample_period": -1`, 1),
		"refused.json": `{"schema": "steadyrig/model/1", "rig": "flap", "verdict": "refused"}`,
	})
	before := listing(t)
	for _, c := range []struct {
		args string
		says []string
	}{
		{"rig.toml model.json", []string{"wants a rig file, a model", "--help"}},
		{"rig.toml model.json loops.json", []string{"no log", "loops.json"}},
		{"rig.toml model.json loops.json absent.csv", []string{"absent.csv", "not exist"}},
		{"rig.toml model.json after.csv loops.json", []string{"loops.json"}},
		{"rig.toml loops.json after.csv", []string{"loops.json", "is this a model file"}},
		{"rig.toml model.json model.json after.csv", []string{"model.json", "schema", "steadyrig/loops/1"}},
		{"rig.toml model.json empty.json after.csv", []string{"empty.json", "empty"}},
		{"rig.toml model.json none.json after.csv", []string{"none.json", "schema"}},
		{"rig.toml model.json loops.txt after.csv", []string{"loops.txt", "sample_period"}},
		{"rig.toml model.json loops.json renamed.csv", []string{"renamed.csv", `"y"`, `"out"`}},
		{"rig.toml model.json loops.json period.csv", []string{"period.csv", "0.02 s apart", "sample_period"}},
		{"rig.toml units.json after.csv", []string{"deg and rad", "deg and deg"}},
		{"rig.toml model.json loops.json known.csv", []string{"known.csv", "was fitted to", "taken since"}},
		{"rig.toml model.json loops.json after.csv --out rig.toml", []string{"rig.toml", "--force"}},
		{"rig.toml model.json loops.json after.csv --loops a.json --model a.json", []string{"a.json", "two results"}},
		{"fit.toml model.json loops.json after.csv", []string{"fit.toml", "[loop]"}},
	} {
		status, stdout, stderr := call(t, append([]string{"recheck"}, strings.Fields(c.args)...)...)
		if status != statusCall || stdout != "" {
			t.Errorf("%s: exit status %d and standard output %q, want %d and nothing", c.args, status, stdout, statusCall)
		}
		oneErrorLine(t, stderr, c.says...)
	}
	if after := listing(t); !slices.Equal(before, after) {
		t.Errorf("files before %v, after %v", before, after)
	}
}

// A recheck without loops, from end to end: an unchanged rig keeps its model, which the new log tightens, and a model that
// the new log was given to is written; a rig with 20 % more gain has moved, ends with status 3, and its new model is
// written, too. --json prints one document and writes nothing. Each is a line in the rig's history.
func TestRecheckOfAModel(t *testing.T) {
	if testing.Short() {
		t.Skip("fits three logs")
	}
	inFolder(t, demoFiles(t, "hover", 1, nil))
	for name, gain := range map[string]float64{"same.csv": 1, "more.csv": 1.2} {
		log := demoFiles(t, "hover", 2, func(r *demorig.Rig) { r.Truth.Num = r.Truth.Num.Scale(gain) })["log.csv"]
		if err := os.WriteFile(name, []byte(log), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	if status, _, stderr := call(t, "fit", "rig.toml", "log.csv"); status != statusDone {
		t.Fatalf("fit: exit status %d: %s", status, stderr)
	}
	read := func(name string) *ident.Model {
		t.Helper()
		m, err := ident.ReadModel(strings.NewReader(text(t, name)), name)
		if err != nil {
			t.Fatal(err)
		}
		return m
	}
	status, stdout, stderr := call(t, "recheck", "rig.toml", "model.json", "same.csv", "--pool")
	if status != statusDone || !strings.HasPrefix(stdout, "KEEP") {
		t.Errorf("unchanged: exit status %d, %.60q, %s", status, stdout, stderr)
	}
	fits80(t, "recheck", stdout)
	verdictIn(t, "recheck.json", "keep")
	width := func(m *ident.Model) float64 {
		return m.Poles[len(m.Poles)-1].Re95.Hi - m.Poles[len(m.Poles)-1].Re95.Lo
	}
	// Two logs of one length and one rig: 1/sqrt(2) of the width.
	if one, two := width(read("model.json")), width(read("recheck-model.json")); !(two < 0.8*one && two > 0.6*one) {
		t.Errorf("the pooled interval of the unstable pole is %.3g wide, that of one log %.3g", two, one)
	}
	if !strings.Contains(text(t, "recheck.html"), "<b>Keep</b>") {
		t.Error("the page does not say keep")
	}
	status, stdout, stderr = call(t, "recheck", "rig.toml", "model.json", "more.csv", "--out", "more.json", "--pool", "--quiet")
	if status != statusRefused || !strings.HasPrefix(stdout, "RETUNE") || !strings.Contains(stdout, "gain up") {
		t.Errorf("more gain: exit status %d, %.60q", status, stdout)
	}
	oneErrorLine(t, stderr, "retune", "moved", "design")
	if g, h := read("model.json").Gain.DC.Value, read("more-model.json").Gain.DC.Value; !(h/g > 1.15 && h/g < 1.25) {
		t.Errorf("the model that was written has %.3g times the gain: it is not the new one", h/g)
	}
	before := listing(t)
	status, stdout, stderr = call(t, "recheck", "rig.toml", "model.json", "more.csv", "--json", "--no-history")
	if status != statusRefused || strings.Count(stderr, "\n") != 1 {
		t.Errorf("--json: exit status %d, %s", status, stderr)
	}
	oneDocument(t, "recheck", stdout)
	if after := listing(t); !slices.Equal(before, after) {
		t.Errorf("--json wrote a file: %v", after)
	}
	if n := strings.Count(text(t, "rig.history.jsonl"), `"kind":"recheck"`); n != 2 {
		t.Errorf("%d rechecks in the history, want 2", n)
	}
}

func text(t *testing.T, name string) string {
	t.Helper()
	b, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}
