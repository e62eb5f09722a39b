package main

import (
	"bytes"
	"encoding/csv"
	"encoding/json"
	"fmt"
	"os"
	"strconv"
	"strings"
	"testing"

	"steadyrig/fit/demorig"
	"steadyrig/ident"
)

// readTable returns the rows of a table as CSV, by file and model, each by column.
func readTable(t *testing.T, name string) map[string]map[string]string {
	t.Helper()
	text, err := os.ReadFile(name)
	if err != nil {
		t.Fatal(err)
	}
	records, err := csv.NewReader(bytes.NewReader(text)).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	rows := map[string]map[string]string{}
	for _, r := range records[1:] {
		row := map[string]string{}
		for j, cell := range r {
			row[records[0][j]] = cell
		}
		rows[strings.TrimSpace(row["path"]+" "+row["model"])] = row
	}
	return rows
}

// The row of a log says what audit and fit say of it, in all digits; a log that is refused or cannot be read has a row with
// the reason and does not stop the others.
func TestRunTable(t *testing.T) {
	if testing.Short() {
		t.Skip("fits a log")
	}
	files := demoFiles(t, "hover", 1, func(r *demorig.Rig) { r.Rows = 4500 })
	files["run1.csv"] = files["log.csv"]
	lines := strings.SplitAfter(files["log.csv"], "\n")
	files["run2.csv"] = strings.Join(lines[:1800], "") + strings.Join(lines[1805:], "")
	files["run3.csv"] = demoFiles(t, "hover", 3, func(r *demorig.Rig) { r.Rows, r.Dither, r.Step = 3000, 1e-12, 0 })["log.csv"]
	files["run4.csv"] = strings.Join(lines[:50], "") + "0.1,ERR,1,2,3\n"
	files["run5.csv"] = files["run1.csv"]
	files["bad.json"] = "{}"
	files["record.csv"] = "file;operator;payload;rows\nrun2.csv;Bo;0012;1\nrun1.csv;\"Ana; Li\";;2\nrun9.csv;x;3;3\n"
	inFolder(t, files)
	if status, _, stderr := call(t, "fit", "rig.toml", "run1.csv", "--out", "m1.json"); status != statusDone {
		t.Fatal(stderr)
	}
	status, page, stderr := call(t, "table", "rig.toml", "run*.csv", "m1.json", "bad.json", "--join", "record.csv", "--out", "t.csv")
	if status != statusRefused {
		t.Errorf("exit status %d, want %d", status, statusRefused)
	}
	fits80(t, "table", page)
	for _, want := range []string{"6 tests, 4 came to nothing; 6 rows shown", "Left out here: path, sha256", "Wrote t.csv."} {
		if !strings.Contains(page, want) {
			t.Errorf("the page does not say %q:\n%s", want, page)
		}
	}
	if !strings.Contains(stderr, "4 of 6 tests came to nothing") || !strings.Contains(stderr, "warning: record.csv: 1 row without a test here, run9.csv") {
		t.Errorf("standard error: %s", stderr)
	}
	rows := readTable(t, "t.csv")
	if len(rows) != 6 {
		t.Fatalf("%d rows", len(rows))
	}

	text, err := os.ReadFile("m1.json")
	if err != nil {
		t.Fatal(err)
	}
	m, err := ident.ReadModel(bytes.NewReader(text), "m1.json")
	if err != nil {
		t.Fatal(err)
	}
	_, stdout, _ := call(t, "audit", "rig.toml", "run1.csv", "--json")
	var audit ident.AuditReport
	if err := json.Unmarshal([]byte(stdout), &audit); err != nil {
		t.Fatal(err)
	}
	row := rows["run1.csv m1.json"]
	far := m.Poles[0]
	for _, p := range m.Poles {
		if p.Re > far.Re {
			far = p
		}
	}
	for column, want := range map[string]float64{
		"rows": 4500, "used": 4500, "duration": 4.5, "sample_period": 1e-3, "outside_share": audit.Outside.Share,
		"unstable_pole": far.Re, "unstable_lo": far.Re95.Lo, "unstable_hi": far.Re95.Hi, "probability_unstable": far.ProbabilityUnstable,
		"gain": m.Gain.DC.Value, "gain_lo": m.Gain.DC.Interval95.Lo, "noise_sd": m.Noise.SD, "glance_pole": audit.LoopRate.UnstablePole.Value,
		"explained_share": m.Evidence.ExplainedShare, "record.rows": 2,
	} {
		if x, err := strconv.ParseFloat(row[column], 64); err != nil || x != want {
			t.Errorf("%s is %q, want %v", column, row[column], want)
		}
	}
	for column, want := range map[string]string{
		"file": "run1.csv", "sha256": m.Logs[0].SHA256, "audit": audit.Verdict, "next_step": audit.NextStep, "fit": m.Verdict, "made": m.Made,
		"operator": "Ana; Li", "payload": "", "problem": "", "flaws": "", "delay_lo": "",
	} {
		if row[column] != want {
			t.Errorf("%s is %q, want %q", column, row[column], want)
		}
	}
	gap := rows["run2.csv"]
	if gap["worst_flaw"] != "gap 1" || gap["segments"] != "2" || gap["payload"] != "0012" || gap["fit"] != "" || gap["unstable_pole"] != "" {
		t.Errorf("run2.csv: %q", gap)
	}
	for path, want := range map[string]struct{ problem, audit string }{
		"run3.csv": {"outside", ident.Refused}, "run4.csv": {"line 51", ""}, "run5.csv": {"the same bytes as run1.csv", ""}, "bad.json": {"schema", ""},
	} {
		if r := rows[path]; !strings.Contains(r["problem"], want.problem) || r["audit"] != want.audit || r["file"] != path {
			t.Errorf("%s: %q", path, r)
		}
	}

	// A model alone has a row; so has a log that is fitted here, with the same figures.
	if status, _, stderr := call(t, "table", "rig.toml", "m1.json", "--out", "alone.csv"); status != statusDone {
		t.Fatal(stderr)
	}
	status, stdout, stderr = call(t, "table", "rig.toml", "run1.csv", "--fit", "--out", "fitted.csv", "--json", "--where", "unstable_pole > 3")
	if status != statusDone || stderr != "" {
		t.Fatal(stderr)
	}
	alone, fitted := readTable(t, "alone.csv")["run1.csv m1.json"], readTable(t, "fitted.csv")["run1.csv"]
	for column, cell := range row {
		if fitted[column] != cell && column != "model" && fitted[column] != "" {
			t.Errorf("fitted here, %s is %q, by its model %q", column, fitted[column], cell)
		}
		if alone[column] != "" && alone[column] != cell {
			t.Errorf("of the model alone, %s is %q, with its log %q", column, alone[column], cell)
		}
	}
	if fitted["unstable_pole"] == "" || alone["unstable_pole"] == "" || alone["audit"] != "" {
		t.Errorf("fitted here %q, of the model alone %q", fitted, alone)
	}
	oneDocument(t, "table", stdout)
	var doc struct {
		Columns []struct{ Name, Unit string }
		Rows    []map[string]any
	}
	if err := json.Unmarshal([]byte(stdout), &doc); err != nil || len(doc.Rows) != 1 {
		t.Fatalf("%v: %s", err, stdout)
	}
	if r := doc.Rows[0]; r["unstable_pole"] != far.Re || r["fit"] != m.Verdict || r["delay_lo"] != nil || len(r) != len(doc.Columns) {
		t.Errorf("as JSON: %v", r)
	}
}

// Wrong calls of table are told before any work, and write nothing.
func TestBadTables(t *testing.T) {
	inFolder(t, map[string]string{"rig.toml": smallRig, "log.csv": smallLog(80), "record.csv": "file,x\nlog.csv,1\nlog.csv,2\n", "ragged.csv": "file,x\na\n"})
	before := fmt.Sprint(listing(t))
	for _, c := range []struct {
		args []string
		says string
	}{
		{[]string{"--columns", "file,rwos"}, `did you mean "rows"?`},
		{[]string{"--where", "rows"}, "there is no operator"},
		{[]string{"--where", "rows > many"}, "has numbers"},
		{[]string{"--sort", "-poels"}, `did you mean "poles"?`},
		{[]string{"--join", "record.csv"}, "stands twice"},
		{[]string{"--join", "ragged.csv"}, "line 2: 1 cell where 2 belong"},
		{[]string{"--join", "absent.csv"}, "absent.csv"},
		{[]string{"--on", "file"}, "give --join"},
		{[]string{"nolog.csv"}, "nolog.csv: no such file"},
		{[]string{"--out", "record.csv"}, "--force"},
	} {
		status, stdout, stderr := call(t, append([]string{"table", "rig.toml", "log.csv"}, c.args...)...)
		if status != statusCall || stdout != "" {
			t.Errorf("%q: exit status %d, standard output %q", c.args, status, stdout)
		}
		oneErrorLine(t, stderr, c.says)
	}
	if after := fmt.Sprint(listing(t)); after != before {
		t.Errorf("files before %s, after %s", before, after)
	}
}
