package report

import (
	"bytes"
	"encoding/json"
	"encoding/xml"
	"errors"
	"io"
	"math"
	"os"
	"regexp"
	"slices"
	"strings"
	"testing"
	"time"

	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/fit/demorig"
	"steadyrig/ident"
)

// kept reads the results that the pages of the console are drawn from, and the log that they were made of.
func kept(t *testing.T) Input {
	t.Helper()
	open := func(name string) *os.File {
		f, err := os.Open("../testdata/" + name)
		if err != nil {
			t.Fatal(err)
		}
		t.Cleanup(func() { f.Close() })
		return f
	}
	in := Input{Verdict: "sound", Command: "steadyrig demo --rig flap", Tool: "steadyrig test", Made: time.Unix(1700000000, 0).UTC(), Seed: 1}
	var err error
	if in.Rig, err = data.ReadRig(open("rig.toml"), "rig.toml"); err != nil {
		t.Fatal(err)
	}
	if in.Model, err = ident.ReadModel(open("model.json"), "model.json"); err != nil {
		t.Fatal(err)
	}
	if in.Loops, err = design.ReadLoops(open("loops.json"), "loops.json"); err != nil {
		t.Fatal(err)
	}
	in.Audit = new(ident.AuditReport)
	if err := json.NewDecoder(open("audit.json")).Decode(in.Audit); err != nil {
		t.Fatal(err)
	}
	r, _ := demorig.ByName("flap")
	var log bytes.Buffer
	if err := r.WriteCSV(&log, 1); err != nil {
		t.Fatal(err)
	}
	exp, err := data.ReadLog(&log, "log.csv", in.Rig)
	if err != nil {
		t.Fatal(err)
	}
	in.Logs = []*data.Experiment{exp}
	return in
}

func written(t *testing.T, in Input) string {
	t.Helper()
	var b strings.Builder
	if err := Write(&b, in); err != nil {
		t.Fatal(err)
	}
	return b.String()
}

var drawing = regexp.MustCompile(`(?s)<svg viewBox="[^"]*" role="img".*?</svg>`)

func TestReport(t *testing.T) {
	page := written(t, kept(t))
	// In this order: the verdict before any figure, and the cautions before the loops.
	at := 0
	for _, part := range []string{
		`<b>Sound</b>`, "people can be hurt", "licensed practitioner", `id="log"`, `id="plant"`, `id="bounds"`, `id="loops"`, `id="margins"`,
		`id="promise"`, `id="closure"`, "Trip on the output", `id="origin"`, "steadyrig demo --rig flap",
	} {
		i := strings.Index(page[at:], part)
		if i < 0 {
			t.Fatalf("no %q after what must come before it", part)
		}
		at += i
	}
	if i, j := strings.Index(page, "<b>Sound</b>"), strings.Index(page, "<svg"); i > j {
		t.Error("a figure comes before the verdict")
	}
	for _, title := range []string{
		"Output of log.csv", "Input of log.csv", "Where the rightmost pole is told from", "One-step prediction", "What the model leaves over", "Poles × and zeros ○", "The rightmost pole by each method",
		"Frequency response: gain", "Frequency response: phase", "Sensitivity at the plant input, both loops", "Sensitivity of the inner loop alone",
		"Step of the reference", "What the step takes of the actuator",
	} {
		if !strings.Contains(page, "<strong>"+title) {
			t.Errorf("no figure %q", title)
		}
	}
	figures := drawing.FindAllString(page, -1)
	if n := strings.Count(page, "<figure>"); len(figures) != n || n < 12 {
		t.Errorf("%d drawings in %d figures", len(figures), n)
	}
	for _, f := range figures {
		if !strings.Contains(f, `aria-label="`) || strings.Contains(f, `aria-label=""`) {
			t.Errorf("a drawing without words for it: %.200s", f)
		}
		dec := xml.NewDecoder(strings.NewReader(f))
		for {
			if _, err := dec.Token(); errors.Is(err, io.EOF) {
				break
			} else if err != nil {
				t.Fatalf("a drawing is not well formed: %v in %.200s", err, f)
			}
		}
		if strings.Contains(f, "NaN") || strings.Contains(f, "Inf") {
			t.Errorf("a drawing with a number that is none: %.200s", f)
		}
	}
	// One file: nothing is fetched.
	for _, m := range regexp.MustCompile(`(?i)(src|href|url\()[^ >]*`).FindAllString(page, -1) {
		t.Errorf("the page refers to something outside: %s", m)
	}
}

// Text of the user's own is shown, not run.
func TestReportEscapes(t *testing.T) {
	in := kept(t)
	in.Rig.Name = `<script>alert("rig")</script>`
	in.Logs[0].File = `a"b<i>.csv`
	in.Command = `steadyrig run '<b>.toml'`
	page := written(t, in)
	for _, bad := range []string{"<script", "<i>", "<b>.toml"} {
		if strings.Contains(page, bad) {
			t.Errorf("the page holds %q", bad)
		}
	}
}

// A refused run has a report, too: it says why, and gives no loops.
func TestReportOfRefusal(t *testing.T) {
	in := kept(t)
	in.Verdict = "refused"
	in.Refusal = &ident.RefusedError{What: "nothing from outside moves the input", Do: "log a run with a probe"}
	in.Model = &ident.Model{Verdict: ident.Refused}
	in.Loops = &design.Loops{Verdict: design.Refused}
	page := written(t, in)
	for _, want := range []string{"<b>Refused</b>", "Nothing from outside moves the input; log a run with a probe.", "stopgap law is all that holds the rig", "Next step"} {
		if !strings.Contains(page, want) {
			t.Errorf("the page does not say %q", want)
		}
	}
	if strings.Contains(page, `id="closure"`) {
		t.Error("a page without loops says how to close them")
	}
}

// A structure with integrators is told as chosen, and what was asked of the input noise is the same wherever it stands.
func TestReportOfIntegrators(t *testing.T) {
	in := kept(t)
	in.Rig.Spec.InputNoise = 0 // so the default counts: a twentieth of the range, -14 to 16 deg
	page := written(t, in)
	if strings.Contains(page, "integrator") {
		t.Error("a page of a rig without integrators speaks of them")
	}
	row := regexp.MustCompile(`input noise(, standard deviation)?</td>.*`).FindAllString(page, -1)
	if len(row) != 2 || !strings.Contains(row[0], ">1.5 deg<") || !strings.Contains(row[1], ">1.5 deg<") {
		t.Errorf("1.5 deg are not asked in all of %q", row)
	}
	for i := range in.Model.Poles {
		in.Model.Poles[i] = ident.Root{Re95: ident.Interval{Lo: -0.03, Hi: 0.82}, ProbabilityUnstable: 0.0003}
	}
	in.Model.Gain.DC = nil
	page = written(t, in)
	for _, want := range []string{"3 poles at zero: the rig drifts", "at zero (integrator)", "chosen, not measured", "none: the plant integrates", "integrator, held at zero"} {
		if !strings.Contains(page, want) {
			t.Errorf("the page does not say %q", want)
		}
	}
}

func TestThinnedKeepsPeaks(t *testing.T) {
	n := 100000
	x, y := make([]float64, n), make([]float64, n)
	for i := range x {
		x[i], y[i] = float64(i), math.Sin(float64(i))
	}
	y[54321], y[777] = 9, -9
	tx, ty := thinned(x, y, 300)
	if len(tx) > 600 || len(tx) != len(ty) || !slices.IsSorted(tx) {
		t.Fatalf("%d points", len(tx))
	}
	if slices.Max(ty) != 9 || slices.Min(ty) != -9 {
		t.Errorf("peaks are lost: %g to %g", slices.Min(ty), slices.Max(ty))
	}
}

func TestTicks(t *testing.T) {
	labels := func(ticks []string, want ...string) {
		t.Helper()
		if !slices.Equal(ticks, want) {
			t.Errorf("ticks %q, want %q", ticks, want)
		}
	}
	read := func(lo, hi float64, log bool) []string {
		var out []string
		ticks := niceTicks{}.Ticks(lo, hi)
		if log {
			ticks = decadeTicks{}.Ticks(lo, hi)
		}
		for _, k := range ticks {
			if k.Label != "" {
				out = append(out, k.Label)
			}
		}
		return out
	}
	labels(read(-0.13, 0.42, false), "-0.1", "0", "0.1", "0.2", "0.3", "0.4")
	labels(read(4.95, 5.5, false), "5.0", "5.1", "5.2", "5.3", "5.4", "5.5")
	labels(read(3, 4000, true), "10", "100", "1000")
	labels(read(0.4, 3, true), "0.5", "1", "2")
}
