package main

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"io"
	"math"
	"os"
	"path/filepath"
	"regexp"
	"runtime"
	"slices"
	"strings"
	"testing"
	"unicode/utf8"

	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/fit/demorig"
	"steadyrig/ident"
)

var update = flag.Bool("update", false, "write golden files anew")

// call runs one call as a shell would, with the clock stopped.
func call(t *testing.T, args ...string) (status int, stdout, stderr string) {
	t.Helper()
	return callWith(t, context.Background(), strings.NewReader(""), args...)
}

func callWith(t *testing.T, ctx context.Context, stdin io.Reader, args ...string) (status int, stdout, stderr string) {
	t.Helper()
	t.Setenv("SOURCE_DATE_EPOCH", "1700000000")
	var out, errs bytes.Buffer
	status = run(ctx, args, stdin, &out, &errs)
	return status, out.String(), errs.String()
}

// folder is a fresh working folder with files in it.
func inFolder(t *testing.T, files map[string]string) {
	t.Helper()
	t.Chdir(t.TempDir())
	for name, text := range files {
		if err := os.WriteFile(name, []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
}

// listing names all files below the working folder.
func listing(t *testing.T) []string {
	t.Helper()
	var names []string
	err := filepath.WalkDir(".", func(path string, d os.DirEntry, err error) error {
		if path != "." {
			names = append(names, path)
		}
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	return names
}

// demoFiles returns rig file and log of a built-in rig, changed first.
func demoFiles(t *testing.T, name string, seed uint64, change func(*demorig.Rig)) map[string]string {
	t.Helper()
	r, ok := demorig.ByName(name)
	if !ok {
		t.Fatalf("no rig %q", name)
	}
	if change != nil {
		change(&r)
	}
	var log bytes.Buffer
	if err := r.WriteCSV(&log, seed); err != nil {
		t.Fatal(err)
	}
	return map[string]string{"rig.toml": r.File(), "log.csv": log.String()}
}

// oneErrorLine checks that standard error is one line that holds all of want.
func oneErrorLine(t *testing.T, stderr string, want ...string) {
	t.Helper()
	if strings.Count(stderr, "\n") != 1 || !strings.HasPrefix(stderr, "steadyrig: ") {
		t.Errorf("standard error is not one line of the tool:\n%s", stderr)
	}
	for _, w := range want {
		if !strings.Contains(stderr, w) {
			t.Errorf("standard error does not say %q:\n%s", w, stderr)
		}
	}
}

const smallRig = `name = "small"
[log]
time   = "t"
input  = "u"
output = "y"
`

// designPart is what a rig file needs beside smallRig before loops can be designed.
const designPart = `
[loop]
sample_period = 0.01
[limits]
input = [-5.0, 5.0]
[spec]
step = 0.1
overshoot = 0.2
settling = 1.0
band = 0.02
peak_sensitivity = 2.0
`

// smallLog is a log of n rows that move, one every 10 ms; slowLog has one every 20 ms.
func smallLog(n int) string { return logEvery(n, 0.01) }
func slowLog(n int) string  { return logEvery(n, 0.02) }

func logEvery(n int, period float64) string {
	var b strings.Builder
	b.WriteString("t,u,y\n")
	for k := range n {
		fmt.Fprintf(&b, "%.2f,%.3f,%.3f\n", period*float64(k), math.Sin(float64(k*k)), math.Cos(float64(k)))
	}
	return b.String()
}

// Each bad rig file and log gives one line that says what, where and what to do, exit status 2, nothing on standard
// output and no file.
func TestBadInputs(t *testing.T) {
	log := smallLog(80)
	lines := strings.SplitAfter(log, "\n")
	withRow := func(k int, row string) string {
		return strings.Join(lines[:k-1], "") + row + strings.Join(lines[k:], "")
	}
	flat := "t,u,y\n"
	for k := range 80 {
		flat += fmt.Sprintf("%.2f,1.5,1.5\n", 0.01*float64(k))
	}
	for _, c := range []struct {
		name     string
		rig, log string // contents; "-": no such file; "/": a directory
		says     []string
	}{
		{"missing column", strings.Replace(smallRig, `"y"`, `"height"`, 1), log, []string{"log.csv", "height", "line 1"}},
		{"text in a number column", smallRig, withRow(40, "0.38,abc,0.2\n"), []string{"log.csv", "line 40", "abc"}},
		{"one row", smallRig, "t,u,y\n0,1,2\n", []string{"log.csv", "row"}},
		{"all equal", smallRig, flat, []string{"log.csv", "every row"}},
		{"unknown key", strings.Replace(smallRig, "output =", "outputt =", 1), log, []string{"rig.toml", "line 5", "outputt", "output"}},
		{"broken rig file", "name = \n", log, []string{"rig.toml", "line 1"}},
		{"second output", smallRig + "outer_output = \"z\"\n", log, []string{"rig.toml", "one input and one output"}},
		{"no rig file", "-", log, []string{"rig.toml", "not exist"}},
		{"no log", smallRig, "-", []string{"log.csv", "not exist"}},
		{"directory for a rig file", "/", log, []string{"rig.toml", "directory"}},
		{"directory for a log", smallRig, "/", []string{"log.csv", "directory"}},
		{"empty log", smallRig, "", []string{"log.csv"}},
		{"log without rows", smallRig, "t,u,y\n", []string{"log.csv"}},
		{"log and rig file exchanged", log, smallRig, []string{"rig.toml"}},
	} {
		for _, command := range []string{"audit", "fit", "run"} {
			t.Run(c.name+"/"+command, func(t *testing.T) {
				inFolder(t, nil)
				for name, content := range map[string]string{"rig.toml": c.rig, "log.csv": c.log} {
					switch content {
					case "-":
					case "/":
						if err := os.Mkdir(name, 0o755); err != nil {
							t.Fatal(err)
						}
					default:
						if name == "rig.toml" && strings.Contains(content, "[log]") {
							content += designPart
						}
						if err := os.WriteFile(name, []byte(content), 0o644); err != nil {
							t.Fatal(err)
						}
					}
				}
				before := listing(t)
				status, stdout, stderr := call(t, command, "rig.toml", "log.csv")
				if status != statusCall {
					t.Errorf("exit status %d, want %d", status, statusCall)
				}
				oneErrorLine(t, stderr, c.says...)
				if stdout != "" {
					t.Errorf("standard output: %q", stdout)
				}
				if after := listing(t); !slices.Equal(before, after) {
					t.Errorf("files before %v, after %v", before, after)
				}
			})
		}
	}
}

// Wrong calls give exit status 2 and one line that says how it goes.
func TestBadCalls(t *testing.T) {
	inFolder(t, map[string]string{"rig.toml": smallRig, "whole.toml": smallRig + designPart, "log.csv": smallLog(80), "slow.csv": slowLog(80), "model.json": "{}", "text.json": "not json\n"})
	before := listing(t)
	for _, c := range []struct {
		args string
		says string
	}{
		{"fti rig.toml log.csv", "did you mean fit"},
		{"frobnicate", "--help"},
		{"help frobnicate", "no command"},
		{"fit", "wants a rig file and one or more logs"},
		{"fit rig.toml", "one was given"},
		{"fit rig.toml log.csv --sed 3", "--help"},
		{"design rig.toml model.json --seed three", "--help"},
		{"design rig.toml", "a rig file and a model"},
		{"fit rig.toml log.csv", "model.json: exists"},
		{"fit rig.toml log.csv --out nowhere/m.json", "no folder nowhere"},
		{"fit rig.toml log.csv --out .", "directory"},
		{"design rig.toml model.json --out l.json", "schema"},
		{"design rig.toml text.json --out l.json", "text.json:1"},
		{"design rig.toml absent.json --out l.json", "absent.json"},
		{"design rig.toml model.json --inner PI --out l.json", "choose one of gain, lead, lead with roll-off, second order, observer-based"},
		{"run whole.toml log.csv --outer gain --dir a", "choose one of I, PI, PI with lag, PI with lead, PID with roll-off"},
		{"demo --rig boat", "hover"},
		{"demo hover", "--rig"},
		{"run whole.toml log.csv --dir rig.toml", "a file; name a folder"},
		{"run whole.toml log.csv --dir a --out b", "--help"},
		{"fit rig.toml log.csv slow.csv --out m.json", "slow.csv: sampled every 20 ms"},
		{"run rig.toml log.csv", "[loop]"},
		{"new", "one log"},
		{"new absent.csv", "not exist"},
	} {
		status, stdout, stderr := call(t, strings.Fields(c.args)...)
		if status != statusCall || stdout != "" {
			t.Errorf("%s: exit status %d and standard output %q, want %d and nothing", c.args, status, stdout, statusCall)
		}
		oneErrorLine(t, stderr, c.says)
	}
	if after := listing(t); !slices.Equal(before, after) {
		t.Errorf("files before %v, after %v", before, after)
	}
}

// broken is an input that fails as no input should.
type broken struct{ err error }

func (b broken) Read([]byte) (int, error) {
	if b.err == nil {
		panic("an input that panics\nover two lines")
	}
	return 0, b.err
}

func TestFaultsOfTheTool(t *testing.T) {
	inFolder(t, map[string]string{"rig.toml": smallRig})
	status, stdout, stderr := callWith(t, context.Background(), broken{}, "audit", "rig.toml", "-")
	if status != statusFault || stdout != "" {
		t.Errorf("a panic: exit status %d and standard output %q, want %d and nothing", status, stdout, statusFault)
	}
	oneErrorLine(t, stderr, "fault in the tool", "panics over two lines")
	status, _, stderr = callWith(t, context.Background(), broken{errors.New("the disk is gone")}, "audit", "rig.toml", "-")
	if status != statusCall {
		t.Errorf("a log that cannot be read: exit status %d, want %d", status, statusCall)
	}
	oneErrorLine(t, stderr, "standard input", "the disk is gone")
}

// ctrl-C ends a run without a file.
func TestInterrupted(t *testing.T) {
	inFolder(t, nil)
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	status, stdout, stderr := callWith(t, ctx, strings.NewReader(""), "demo", "--dir", "d")
	if status != statusInterrupted || stdout != "" {
		t.Errorf("exit status %d, standard output %q", status, stdout)
	}
	oneErrorLine(t, stderr, "interrupted")
	if names := listing(t); len(names) > 0 {
		t.Errorf("left behind: %v", names)
	}
}

// onRead calls a function before the second read.
type onRead struct {
	io.Reader
	reads int
	call  func()
}

func (r *onRead) Read(p []byte) (int, error) {
	if r.reads++; r.reads == 2 {
		r.call()
	}
	return r.Reader.Read(p)
}

// ctrl-C in the middle of a log ends a fit, too.
func TestInterruptedReading(t *testing.T) {
	files := demoFiles(t, "hover", 1, func(r *demorig.Rig) { r.Rows = 20000 })
	inFolder(t, map[string]string{"rig.toml": files["rig.toml"]})
	ctx, cancel := context.WithCancel(context.Background())
	status, stdout, stderr := callWith(t, ctx, &onRead{Reader: strings.NewReader(files["log.csv"]), call: cancel}, "fit", "rig.toml", "-")
	if status != statusInterrupted || stdout != "" {
		t.Errorf("exit status %d, standard output %q", status, stdout)
	}
	oneErrorLine(t, stderr, "interrupted")
	if names := listing(t); !slices.Equal(names, []string{"rig.toml"}) {
		t.Errorf("left behind: %v", names)
	}
}

// A log without power from outside under a fixed linear law says nothing about the plant (Söderström & Stoica, System
// Identification, 1989, ch. 10): it is refused with status 3 and a sentence that says what to do, and the partial
// result is still written and printed.
func TestQuietLogIsRefused(t *testing.T) {
	inFolder(t, demoFiles(t, "hover", 1, func(r *demorig.Rig) { r.Dither, r.Step, r.Rows = 0, 0, 3000 }))
	status, stdout, stderr := call(t, "audit", "rig.toml", "log.csv")
	if status != statusRefused || !strings.HasPrefix(stdout, "REFUSED") {
		t.Errorf("audit: exit status %d, standard output %q", status, stdout)
	}
	oneErrorLine(t, stderr, "probe")
	status, stdout, stderr = call(t, "fit", "rig.toml", "log.csv")
	if status != statusRefused || !strings.HasPrefix(stdout, "REFUSED") {
		t.Errorf("fit: exit status %d, standard output %q", status, stdout)
	}
	oneErrorLine(t, stderr, "probe")
	verdictIn(t, "model.json", "refused")
	status, stdout, stderr = call(t, "run", "rig.toml", "log.csv", "--dir", "d")
	if status != statusRefused || !strings.HasPrefix(stdout, "REFUSED") {
		t.Errorf("run: exit status %d, standard output %q", status, stdout)
	}
	if !strings.Contains(stderr, "probe") {
		t.Errorf("run: standard error %q", stderr)
	}
	for _, name := range []string{"audit.json", "model.json", "loops.json"} {
		verdictIn(t, filepath.Join("d", name), "refused")
	}
	page, err := os.ReadFile(filepath.Join("d", "report.html"))
	if err != nil || !bytes.Contains(page, []byte("Refused")) {
		t.Errorf("the report does not say refused: %v", err)
	}
	status, _, stderr = call(t, "design", "rig.toml", "model.json")
	if status != statusRefused {
		t.Errorf("design of a refused model: exit status %d, %s", status, stderr)
	}
	oneErrorLine(t, stderr)
}

func verdictIn(t *testing.T, name, want string) {
	t.Helper()
	text, err := os.ReadFile(name)
	if err != nil {
		t.Error(err)
		return
	}
	var v struct{ Verdict string }
	if err := json.Unmarshal(text, &v); err != nil || v.Verdict != want {
		t.Errorf("%s: verdict %q (%v), want %q", name, v.Verdict, err, want)
	}
}

// The whole job, step by step and at once: the files of run are those of the single commands, the console fits 80
// columns, --json prints one document and nothing else, and a file is not written over without --force.
func TestWholeJob(t *testing.T) {
	if testing.Short() {
		t.Skip("a whole job takes seconds")
	}
	inFolder(t, demoFiles(t, "hover", 1, func(r *demorig.Rig) { r.Rows = 4500 }))
	must := func(args ...string) (stdout, stderr string) {
		t.Helper()
		status, stdout, stderr := call(t, args...)
		if status != statusDone {
			t.Fatalf("%v: exit status %d: %s", args, status, stderr)
		}
		return stdout, stderr
	}
	text, _ := must("run", "rig.toml", "log.csv", "--dir", "d")
	fits80(t, "run", text)
	if !strings.HasPrefix(text, "SOUND  hover") {
		t.Errorf("run does not begin with its verdict: %.80q", text)
	}
	text, _ = must("audit", "rig.toml", "log.csv", "--out", "audit.json")
	fits80(t, "audit", text)
	text, _ = must("fit", "rig.toml", "log.csv")
	fits80(t, "fit", text)
	text, _ = must("design", "rig.toml", "model.json")
	fits80(t, "design", text)
	for _, name := range []string{"audit.json", "model.json", "loops.json"} {
		sameFile(t, name, filepath.Join("d", name))
	}
	text, stderr := must("verify", "rig.toml", "model.json", "loops.json")
	fits80(t, "verify", text)
	if strings.Contains(text, "What simplicity costs") {
		t.Error("verify tells of forms that it did not compare")
	}
	if strings.Contains(stderr, "another model") {
		t.Errorf("verify does not know its model again: %s", stderr)
	}

	for _, args := range [][]string{
		{"audit", "rig.toml", "log.csv"}, {"fit", "rig.toml", "log.csv"}, {"verify", "rig.toml", "model.json", "loops.json"},
		{"simulate", "rig.toml", "model.json", "loops.json", "--rows", "50"}, {"new", "log.csv"}, {"demo", "--list"},
	} {
		before := listing(t)
		stdout, _ := must(append(args, "--json")...)
		oneDocument(t, args[0], stdout)
		if after := listing(t); !slices.Equal(before, after) {
			t.Errorf("%s --json wrote a file: %v", args[0], after)
		}
	}
	status, stdout, stderr := call(t, "fit", "rig.toml", "log.csv")
	if status != statusCall || stdout != "" {
		t.Errorf("a second fit: exit status %d, standard output %q", status, stdout)
	}
	oneErrorLine(t, stderr, "model.json", "--force")
	status, _, stderr = call(t, "run", "rig.toml", "log.csv", "--dir", "d")
	if status != statusCall {
		t.Errorf("a second run into d: exit status %d", status)
	}
	oneErrorLine(t, stderr, "--force")

	// What simulate writes, the reader reads and the fit fits.
	must("simulate", "rig.toml", "model.json", "loops.json", "--probe", "0.1", "--rows", "4500", "--out", "sim.csv")
	text, _ = must("fit", "rig.toml", "sim.csv", "--out", "again.json")
	if !strings.HasPrefix(text, "SOUND") {
		t.Errorf("the fit of a simulated log begins with %.80q", text)
	}
	must("new", "log.csv", "--out", "again.json", "--force")
}

// The same seed gives the same bytes in all files, on one core as on many.
func TestSameSeedSameBytes(t *testing.T) {
	if testing.Short() {
		t.Skip("a whole job takes seconds")
	}
	inFolder(t, nil)
	for _, dir := range []string{"a", "b"} {
		if dir == "b" {
			defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(1))
		}
		if status, _, stderr := call(t, "demo", "--dir", dir, "--seed", "7"); status != statusDone {
			t.Fatalf("exit status %d: %s", status, stderr)
		}
	}
	for _, name := range []string{"rig.toml", "log.csv", "audit.json", "model.json", "loops.json", "report.html", "rig.history.jsonl"} {
		read := func(dir string) string {
			text, err := os.ReadFile(filepath.Join(dir, name))
			if err != nil {
				t.Fatal(err)
			}
			return strings.ReplaceAll(string(text), "--dir "+dir, "--dir")
		}
		if read("a") != read("b") {
			t.Errorf("%s differs between two calls with one seed", name)
		}
	}
}

// The draft of new is a rig file that audit takes as it is.
func TestNewDraft(t *testing.T) {
	files := demoFiles(t, "slider", 1, func(r *demorig.Rig) { r.Rows = 2000 })
	delete(files, "rig.toml")
	inFolder(t, files)
	status, text, stderr := call(t, "new", "log.csv")
	if status != statusDone || stderr != "" {
		t.Fatalf("exit status %d: %s", status, stderr)
	}
	golden(t, "new", text)
	if status, _, stderr := call(t, "new", "log.csv", "--out", "rig.toml"); status != statusDone {
		t.Fatalf("exit status %d: %s", status, stderr)
	}
	if status, _, stderr := call(t, "audit", "rig.toml", "log.csv"); status != statusDone {
		t.Errorf("audit of the draft: exit status %d: %s", status, stderr)
	}
	if status, _, stderr := call(t, "new", "log.csv", "--out", "rig.toml"); status != statusCall || !strings.Contains(stderr, "--force") {
		t.Errorf("new over a rig file: exit status %d: %s", status, stderr)
	}
}

// openKept opens a result that testdata keeps, whatever the working folder.
func openKept(t testing.TB, name string) *os.File {
	t.Helper()
	f, err := os.Open(filepath.Join(sourceFolder, "testdata", name))
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { f.Close() })
	return f
}

// keptResults reads the rig file, model and loops that testdata keeps.
func keptResults(t testing.TB) (*data.Rig, *ident.Model, *design.Loops) {
	t.Helper()
	rig, err := data.ReadRig(openKept(t, "rig.toml"), "rig.toml")
	if err != nil {
		t.Fatal(err)
	}
	model, err := ident.ReadModel(openKept(t, "model.json"), "model.json")
	if err != nil {
		t.Fatal(err)
	}
	loops, err := design.ReadLoops(openKept(t, "loops.json"), "loops.json")
	if err != nil {
		t.Fatal(err)
	}
	return rig, model, loops
}

// The pages as a person sees them, from results that are kept in testdata.
func TestPages(t *testing.T) {
	rig, model, loops := keptResults(t)
	var audit ident.AuditReport
	if err := json.NewDecoder(openKept(t, "audit.json")).Decode(&audit); err != nil {
		t.Fatal(err)
	}
	small, err := data.ReadRig(strings.NewReader(smallRig), "small.toml")
	if err != nil {
		t.Fatal(err)
	}
	exp, err := data.ReadLog(strings.NewReader(smallLog(80)), "log.csv", small)
	if err != nil {
		t.Fatal(err)
	}
	refused := refusedLoops(rig, "no design was tried: the log was refused")
	for _, c := range []struct {
		name string
		show func(*page)
	}{
		{"audit", func(p *page) { showAudit(p, &audit, []*data.Experiment{exp}, rig) }},
		{"fit", func(p *page) { showModel(p, model, rig.Units) }},
		{"design", func(p *page) {
			showBounds(p, loops.Bounds)
			p.line("")
			showDesign(p, loops, rig.Units)
		}},
		{"run", func(p *page) {
			j := job{rig: rig, dir: "study", audit: &audit, model: model, loops: loops, files: []file{{name: "model.json"}}}
			j.show(p)
		}},
		{"refused", func(p *page) {
			j := job{rig: rig, dir: "study", audit: &audit, model: &ident.Model{Verdict: ident.Refused}, loops: refused, files: []file{{name: "model.json"}}}
			j.show(p)
		}},
	} {
		var b bytes.Buffer
		c.show(&page{w: &b})
		fits80(t, c.name, b.String())
		golden(t, c.name, b.String())
		var coloured bytes.Buffer
		c.show(&page{w: &coloured, colour: true})
		if bare := ansi.ReplaceAllString(coloured.String(), ""); bare != b.String() || bare == coloured.String() {
			t.Errorf("%s: colour changes more than the colour", c.name)
		}
	}
}

// ansi is what sets a colour on a terminal.
var ansi = regexp.MustCompile("\x1b\\[[0-9;]*m")

func TestHelp(t *testing.T) {
	inFolder(t, nil)
	_, text, _ := call(t)
	golden(t, "help", text)
	for _, name := range []string{"new", "run", "audit", "fit", "design", "verify", "recheck", "simulate", "watch", "demo", "history", "table"} {
		status, text, stderr := call(t, "help", name)
		if status != statusDone || stderr != "" {
			t.Errorf("help %s: exit status %d: %s", name, status, stderr)
		}
		for _, flag := range []string{"--json", "--out", "--quiet", "--force"} {
			if !strings.Contains(text, flag) {
				t.Errorf("%s does not take %s", name, flag)
			}
		}
		fits80(t, "help "+name, text)
	}
}

func oneDocument(t *testing.T, name, text string) {
	t.Helper()
	dec := json.NewDecoder(strings.NewReader(text))
	var v any
	if err := dec.Decode(&v); err != nil {
		t.Errorf("%s --json prints no JSON: %v", name, err)
		return
	}
	if _, err := dec.Token(); err != io.EOF {
		t.Errorf("%s --json prints more than one document", name)
	}
}

func sameFile(t *testing.T, a, b string) {
	t.Helper()
	x, err := os.ReadFile(a)
	if err != nil {
		t.Fatal(err)
	}
	y, err := os.ReadFile(b)
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(x, y) {
		t.Errorf("%s and %s differ", a, b)
	}
}

// fits80 checks that no line is wider than a terminal.
func fits80(t *testing.T, name, text string) {
	t.Helper()
	for line := range strings.Lines(text) {
		if n := utf8.RuneCountInString(strings.TrimRight(line, "\n")); n > pageWidth {
			t.Errorf("%s: a line of %d columns: %s", name, n, line)
		}
	}
}

// golden compares text with testdata/NAME.golden.
func golden(t *testing.T, name, text string) {
	t.Helper()
	path := filepath.Join(moduleRoot(t, sourceFolder), "cmd", "steadyrig", "testdata", name+".golden")
	if *update {
		if err := os.WriteFile(path, []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
		return
	}
	want, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	if text != string(want) {
		t.Errorf("%s differs from %s:\n%s\nwant:\n%s", name, path, text, want)
	}
}

// sourceFolder is the working folder that the tests start in.
var sourceFolder, _ = os.Getwd()

// Patterns reach the command where the shell leaves them, in quotes.
func TestLogsByPattern(t *testing.T) {
	inFolder(t, map[string]string{"run1.csv": "", "run2.csv": "", "run10.csv": "", "odd[1].csv": "", "odd1.csv": ""})
	for _, c := range []struct{ names, want []string }{
		{[]string{"run?.csv"}, []string{"run1.csv", "run2.csv"}},
		{[]string{"run2.csv", "run*.csv"}, []string{"run2.csv", "run1.csv", "run10.csv"}},
		{[]string{"run[12].csv", "-"}, []string{"run1.csv", "run2.csv", "-"}},
		{[]string{"odd[1].csv"}, []string{"odd[1].csv"}},
		{[]string{"none.csv"}, []string{"none.csv"}},
	} {
		got, err := expand(c.names)
		if err != nil || !slices.Equal(got, c.want) {
			t.Errorf("%q: got %q, %v, want %q", c.names, got, err, c.want)
		}
	}
	for name, want := range map[string]string{"walk*.csv": "walk*.csv: no file matches", "run[.csv": "run[.csv: syntax error in pattern"} {
		if _, err := expand([]string{name}); err == nil || !strings.HasPrefix(err.Error(), want) {
			t.Errorf("%s: got %v, want %s", name, err, want)
		}
	}
}

// The same rows twice would look like twice the evidence.
func TestLogGivenTwice(t *testing.T) {
	log := "t,u,y\n"
	for k := range 60 {
		log += fmt.Sprintf("%d,%d,%d\n", k, k%3, k%5)
	}
	inFolder(t, map[string]string{"rig.toml": smallRig, "run1.csv": log, "copy.csv": log})
	status, _, stderr := call(t, "audit", "rig.toml", "run1.csv", "copy.csv")
	if status != statusCall {
		t.Errorf("exit status %d", status)
	}
	oneErrorLine(t, stderr, "copy.csv", "the same bytes as run1.csv")
}
