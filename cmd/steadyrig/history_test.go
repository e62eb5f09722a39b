package main

import (
	"bytes"
	"encoding/csv"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"steadyrig/cmd/steadyrig/history"
	"steadyrig/data"
	"steadyrig/fit/demorig"
	"steadyrig/ident"
)

// pastOf writes a history of n logs; from the one with index change on the gain is 12 % higher.
func pastOf(t *testing.T, path string, n, change int) {
	t.Helper()
	rnd := rand.New(rand.NewPCG(4, 4))
	around := func(x, sd float64) ident.Interval { return ident.Interval{Lo: x - 1.96*sd, Hi: x + 1.96*sd} }
	var list []history.Entry
	for k := range n {
		pole, gain := 36+0.2*rnd.NormFloat64(), 5.8*math.Exp(0.01*rnd.NormFloat64())
		if k >= change {
			gain *= 1.12
		}
		log := fmt.Sprintf("run%d.csv", k+1)
		list = append(list, history.Entry{
			Kind: history.Fit, Made: fmt.Sprintf("2026-%02d-%02dT08:00:00Z", 1+k/28%12, 1+k%28), Tool: "steadyrig test", Command: "steadyrig fit rig.toml " + log,
			Rig: "hover", Logs: []history.Log{{File: log, SHA256: log}}, ModelSHA256: "m", Verdict: ident.Sound,
			Plant: &history.Plant{
				Poles: []history.Pole{{Re: -44, ReSD: 1, Re95: around(-44, 1)}, {Re: pole, ReSD: 0.2, Re95: around(pole, 0.2), ProbabilityUnstable: 1}},
				Gain:  &history.Gain{Of: "dc", Unit: "mm/A", Value: -gain, SD: 0.01 * gain, Interval95: around(-gain, 0.01*gain)}, NoiseSD: 0.003, SamplePeriod: 0.001,
				Followed: &ident.Followed{Names: []string{"pole_re", "log_gain mm/A -"}, Values: []float64{pole, math.Log(gain)}, Covariance: [][]float64{{0.04, 0}, {0, 1e-4}}},
			},
		})
		if k == 2 {
			list = append(list, history.Entry{Kind: history.Design, Made: "2026-01-03T09:00:00Z", Rig: "hover", Verdict: ident.Sound, Loops: &history.Loops{InnerForm: "lead", OuterForm: "PI", Plants: 2000, MeetSpec: 1996, LowerBound: 0.9954}})
		}
	}
	if err := history.Append(path, list...); err != nil {
		t.Fatal(err)
	}
}

// A history as a person and as a program sees it.
func TestHistoryPages(t *testing.T) {
	inFolder(t, nil)
	pastOf(t, "rig.history.jsonl", 30, 20)
	f, err := os.OpenFile("rig.history.jsonl", os.O_APPEND|os.O_WRONLY, 0)
	if err != nil {
		t.Fatal(err)
	}
	fmt.Fprint(f, "no entry\n{\"schema\":")
	f.Close()
	status, text, stderr := call(t, "history", "rig.toml", "--out", "page.html", "--csv", "table.csv")
	if status != statusDone {
		t.Fatalf("exit status %d: %s", status, stderr)
	}
	fits80(t, "history", text)
	golden(t, "history", text)
	for _, want := range []string{"rig.history.jsonl, line 32: no entry", "rig.history.jsonl, line 33: half written"} {
		if strings.Count(stderr, want) != 1 || strings.Count(stderr, "\n") != 2 {
			t.Errorf("warnings do not say %q once:\n%s", want, stderr)
		}
	}
	page, err := os.ReadFile("page.html")
	if err != nil || !bytes.Contains(page, []byte("Once in 30 logs, last since entry 22.")) || bytes.Contains(page, []byte("Caution")) {
		t.Errorf("the page does not tell of the change: %v", err)
	}
	table, err := os.Open("table.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer table.Close()
	rows, err := csv.NewReader(table).ReadAll()
	if err != nil || len(rows) != 32 || rows[0][5] != "changed" || rows[22][5] != "true" || rows[4][2] != "design" {
		t.Errorf("the table has %d rows: %v", len(rows), err)
	}

	status, text, _ = call(t, "history", "rig.toml", "--json")
	oneDocument(t, "history", text)
	var d historyDocument
	if err := json.Unmarshal([]byte(text), &d); err != nil || status != statusDone {
		t.Fatalf("exit status %d: %v", status, err)
	}
	if d.Verdict != "changed" || len(d.Entries) != 31 || len(d.Unreadable) != 2 || len(d.Tested.Changes) != 1 || d.Tested.Changes[0].At != 22 {
		t.Errorf("verdict %s, %d entries, %d unreadable, changes %+v", d.Verdict, len(d.Entries), len(d.Unreadable), d.Tested.Changes)
	}
	status, stdout, stderr := call(t, "history", "rig.toml", "--csv", "table.csv")
	if status != statusCall || stdout != "" {
		t.Errorf("a second table: exit status %d and standard output %q", status, stdout)
	}
	oneErrorLine(t, stderr, "table.csv: exists")
}

// Histories of all lengths and shapes fit the console, and their pages can be drawn.
func TestOddHistories(t *testing.T) {
	inFolder(t, nil)
	pastOf(t, "one.history.jsonl", 1, 1)
	pastOf(t, "many.history.jsonl", 700, 650)
	whole := history.Entry{Kind: history.Fit, Made: "2026-01-01T00:00:00Z", Rig: "a", Verdict: ident.Sound, Logs: []history.Log{{File: "x", SHA256: "x"}}}
	open, wide := whole, whole
	open.Plant = &history.Plant{
		Poles:    []history.Pole{{Re: 1, Re95: ident.Interval{Lo: math.Inf(-1), Hi: math.Inf(1)}}},
		Gain:     &history.Gain{Of: "high_frequency", Value: 123456.78, Interval95: ident.Interval{Lo: math.Inf(-1), Hi: 1e9}},
		Followed: &ident.Followed{Names: []string{"log_lead 2"}, Values: []float64{3}, Covariance: [][]float64{{1}}},
	}
	wide.Plant = &history.Plant{
		Poles:    []history.Pole{{Re: -12345.6789, Re95: ident.Interval{Lo: -12345.67891, Hi: -12345.67889}}},
		Gain:     &history.Gain{Of: "high_frequency", Unit: "degrees/percent", Value: 1.2345678e-7, Interval95: ident.Interval{Lo: 1.23456779e-7, Hi: 1.23456781e-7}},
		Followed: &ident.Followed{Names: []string{"log_lead 2"}, Values: []float64{3}, Covariance: [][]float64{{1}}},
	}
	second := open
	second.Logs = []history.Log{{File: "y", SHA256: "y"}}
	third := wide
	third.Logs = []history.Log{{File: "z", SHA256: "z"}}
	refused := whole
	refused.Kind, refused.Verdict = "a kind of a later version", "a verdict of a later version"
	for name, list := range map[string][]history.Entry{"open": {open, second}, "wide": {open, third, wide}, "none": {refused}} {
		if err := history.Append(name+".history.jsonl", list...); err != nil {
			t.Fatal(err)
		}
	}
	for _, name := range []string{"one", "many", "open", "wide", "none"} {
		status, text, stderr := call(t, "history", name+".toml", "--out", name+".html")
		if status != statusDone || stderr != "" {
			t.Errorf("%s: exit status %d: %s", name, status, stderr)
		}
		fits80(t, name, text)
	}
	if err := os.WriteFile("bad.history.jsonl", []byte("{}\n"), 0o644); err != nil {
		t.Fatal(err)
	}
	for name, want := range map[string]string{"absent.toml": "there is no history yet", "bad.toml": "no entries"} {
		status, stdout, stderr := call(t, "history", name, "--quiet")
		if status != statusCall || stdout != "" {
			t.Errorf("%s: exit status %d and standard output %q", name, status, stdout)
		}
		oneErrorLine(t, stderr, want)
	}
}

// What fit, design and run find is recorded, unless that is not wanted; a history that cannot be written costs a
// warning and nothing else.
func TestResultsAreRecorded(t *testing.T) {
	inFolder(t, demoFiles(t, "hover", 1, func(r *demorig.Rig) { r.Dither, r.Step, r.Rows = 0, 0, 3000 }))
	kinds := func(path string) string {
		f, err := os.Open(path)
		if err != nil {
			return "no file"
		}
		defer f.Close()
		list, bad, err := history.Read(f)
		if err != nil || len(bad) > 0 {
			t.Errorf("%s: %v, bad lines %+v", path, err, bad)
		}
		var words []string
		for _, e := range list {
			words = append(words, e.Kind+" "+e.Verdict+" "+e.Made)
		}
		return strings.Join(words, ", ")
	}
	call(t, "fit", "rig.toml", "log.csv", "--no-history")
	if got := kinds("rig.history.jsonl"); got != "no file" {
		t.Errorf("after --no-history: %s", got)
	}
	// A refused fit is a finding, too.
	const refused = "fit refused 2023-11-14T22:13:20Z"
	_, want, _ := call(t, "fit", "rig.toml", "log.csv", "--force")
	if got := kinds("rig.history.jsonl"); got != refused {
		t.Errorf("after fit: %s, want %s", got, refused)
	}
	call(t, "run", "rig.toml", "log.csv", "--dir", "d")
	if got := kinds(filepath.Join("d", "rig.history.jsonl")); got != refused {
		t.Errorf("after run: %s, want %s", got, refused)
	}
	if got := kinds("rig.history.jsonl"); got != refused {
		t.Errorf("run wrote beside the rig file that it was given: %s", got)
	}
	if err := os.Remove("rig.history.jsonl"); err != nil {
		t.Fatal(err)
	}
	target, says := "d", "is a directory"
	for range 2 {
		if err := os.Symlink(target, "rig.history.jsonl"); err != nil {
			t.Skip("no symbolic links")
		}
		status, stdout, stderr := call(t, "fit", "rig.toml", "log.csv", "--force")
		if status != statusRefused || stdout != want || !strings.Contains(stderr, "rig.history.jsonl: the result is not in the history: "+says) {
			t.Errorf("a history at %s: exit status %d, %s", target, status, stderr)
		}
		if err := os.Remove("rig.history.jsonl"); err != nil {
			t.Fatal(err)
		}
		if target, says = "/dev/full", "no space left on device"; !exists(target) {
			return
		}
	}
}

func exists(path string) bool {
	_, err := os.Stat(path)
	return err == nil
}

// The entry of a model and of loops that are kept in testdata.
func TestEntryOfResults(t *testing.T) {
	text, err := os.ReadFile("testdata/model.json")
	if err != nil {
		t.Fatal(err)
	}
	m, err := ident.ReadModel(bytes.NewReader(text), "model.json")
	if err != nil {
		t.Fatal(err)
	}
	e := history.OfModel(m, data.Units{Input: "deg", Output: "mm"}, sha256Of(text))
	pole := e.Plant.Rightmost()
	if len(e.Logs) != len(m.Logs) || e.Logs[0].SHA256 != m.Logs[0].SHA256 || e.Verdict != m.Verdict || len(e.Plant.Poles) != len(m.Poles) || !(pole.Im > 0) || pole.Im95 == nil {
		t.Errorf("entry %+v", e)
	}
	if f := e.Plant.Followed; f == nil || f.Values[0] != pole.Re || f.Values[1] != pole.Im || math.Abs(math.Exp(f.Values[2])-math.Abs(e.Plant.Gain.Value)) > 1e-9*math.Abs(e.Plant.Gain.Value) {
		t.Errorf("followed %+v of %+v", f, e.Plant)
	}
}
