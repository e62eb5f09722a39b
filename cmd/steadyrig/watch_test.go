package main

import (
	"context"
	"encoding/json"
	"io"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"sync"
	"testing"

	"steadyrig/design"
	"steadyrig/ident"
)

// watchedLog is what the rig of testdata writes under its loops, moved by a probe; from the middle on with gain times the gain.
func watchedLog(t testing.TB, rows int, gain float64) string {
	t.Helper()
	rig, model, loops := keptResults(t)
	var whole design.Record
	for half := range 2 {
		if half == 1 {
			for i := range model.Plant.Numerator {
				model.Plant.Numerator[i] *= gain
			}
		}
		rec, err := loops.Simulate(model, rig, design.Test{Rows: rows / 2, Seed: uint64(half), NoStep: true, Probe: 0.5})
		if err != nil {
			t.Fatal(err)
		}
		whole.Period = rec.Period
		whole.Input, whole.Output = append(whole.Input, rec.Input...), append(whole.Output, rec.Output...)
		whole.Reference, whole.Dither = append(whole.Reference, rec.Reference...), append(whole.Dither, rec.Dither...)
	}
	return string(logText(&whole, rig))
}

// A log in which nothing moves, and one in which the gain does: console, document and exit status, on any number of cores.
func TestWatchCommand(t *testing.T) {
	files := kept(t, "rig.toml", "model.json", "loops.json")
	files["same.csv"], files["moved.csv"] = watchedLog(t, 8000, 1), watchedLog(t, 16000, 1.12)
	inFolder(t, files)
	status, text, stderr := call(t, "watch", "rig.toml", "model.json", "loops.json", "same.csv")
	if status != statusDone || stderr != "" {
		t.Errorf("exit status %d: %s", status, stderr)
	}
	if !strings.Contains(text, "alarms             none") || !strings.Contains(text, "100 % of the windows were taken under these loops") {
		t.Errorf("the same rig:\n%s", text)
	}
	args := []string{"watch", "rig.toml", "model.json", "loops.json", "moved.csv"}
	status, text, stderr = call(t, args...)
	if status != statusRefused {
		t.Errorf("exit status %d", status)
	}
	oneErrorLine(t, stderr, "moved.csv", "gain up since about", "compare it with the model")
	fits80(t, "watch", text)
	golden(t, "watch", text)
	status, doc, _ := call(t, append(args, "--json", "--out", "watch.json")...)
	kept, err := os.ReadFile("watch.json")
	if status != statusRefused || err != nil || string(kept) != doc {
		t.Errorf("exit status %d, %v; document and file differ: %v", status, err, string(kept) != doc)
	}
	var report ident.WatchReport
	if err := json.Unmarshal([]byte(doc), &report); err != nil {
		t.Fatal(err)
	}
	if report.Schema != ident.WatchSchema || len(report.Alarms) != 1 || report.Alarms[0].Name != "gain" || !report.Alarms[0].Now.Interval95.Contains(0.12) ||
		report.Log.Rows != 16000 || report.Windows != 16 || len(report.Last) != 16 {
		t.Errorf("document: %+v", report)
	}
	defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(1))
	if _, alone, _ := call(t, append(args, "--json")...); alone != doc {
		t.Error("one core says something else")
	}
}

// A log is followed while it is written, and given up in one line when it is no longer what it was.
func TestWatchFollows(t *testing.T) {
	log := watchedLog(t, 4000, 1)
	cut := strings.LastIndex(log, ",") // within the last row
	files := kept(t, "rig.toml", "model.json")
	files["log.csv"] = log[:len(log)/3]
	for _, c := range []struct {
		name   string
		then   func() error // once all is read
		status int
		stderr string
	}{
		{"stopped", nil, statusInterrupted, "interrupted after 3"},
		{"cut short", func() error { return os.Truncate("log.csv", 100) }, statusCall, "log.csv: was cut short while it was watched"},
		{"moved away", func() error { return os.Rename("log.csv", "old.csv") }, statusCall, "log.csv: was moved away while it was watched"},
	} {
		inFolder(t, files)
		ctx, stop := context.WithCancel(context.Background())
		f, err := os.OpenFile("log.csv", os.O_APPEND|os.O_WRONLY, 0)
		if err != nil {
			t.Fatal(err)
		}
		out := newWatchedLines()
		done := make(chan struct{})
		go func() {
			defer close(done)
			out.wait(1)
			io.WriteString(f, log[len(log)/3:len(log)/2+3])
			out.wait(2)
			io.WriteString(f, log[len(log)/2+3:cut])
			out.wait(3)
			f.Close()
			if c.then == nil {
				stop()
			} else if err := c.then(); err != nil {
				t.Error(err)
				stop()
			}
		}()
		var errs strings.Builder
		status := run(ctx, []string{"watch", "rig.toml", "model.json", "log.csv", "--follow"}, strings.NewReader(""), out, &errs)
		out.done()
		<-done
		stop()
		if status != c.status || !strings.Contains(errs.String(), c.stderr) || strings.Count(errs.String(), "\n") != 1 {
			t.Errorf("%s: exit status %d: %s", c.name, status, errs.String())
		}
		if text := out.text.String(); !strings.Contains(text, " rows, 3 windows, 3 of which could tell") || strings.Contains(text, "4000 rows") {
			t.Errorf("%s: no summary:\n%s", c.name, text)
		}
	}
}

// watchedLines is what a watch has printed, for another goroutine to wait on.
type watchedLines struct {
	mu   sync.Mutex
	text strings.Builder
	more *sync.Cond
	over bool
}

func newWatchedLines() *watchedLines {
	l := &watchedLines{}
	l.more = sync.NewCond(&l.mu)
	return l
}

func (l *watchedLines) Write(b []byte) (int, error) {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.text.Write(b)
	l.more.Broadcast()
	return len(b), nil
}

// wait returns once so many windows have been printed, or nothing more will be.
func (l *watchedLines) wait(windows int) {
	l.mu.Lock()
	defer l.mu.Unlock()
	for !l.over && strings.Count(l.text.String(), " ± ") < 3*windows+1 { // three figures a window, one in the heading
		l.more.Wait()
	}
}

func (l *watchedLines) done() {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.over = true
	l.more.Broadcast()
}

func TestWatchReadsStandardInput(t *testing.T) {
	inFolder(t, kept(t, "rig.toml", "model.json"))
	status, text, stderr := callWith(t, context.Background(), strings.NewReader(watchedLog(t, 2000, 1)), "watch", "rig.toml", "model.json", "-")
	if status != statusDone || !strings.Contains(text, "2000 rows, 2 windows") {
		t.Errorf("exit status %d: %s\n%s", status, stderr, text)
	}
}

func TestWatchOfWrongCalls(t *testing.T) {
	files := kept(t, "rig.toml", "model.json", "loops.json")
	files["log.csv"] = watchedLog(t, 400, 1)
	files["slow.csv"] = strings.ReplaceAll(files["log.csv"], "\n0.", "\n1")
	inFolder(t, files)
	for _, c := range []struct {
		args string
		want string
	}{
		{"log.csv --window 1ms", "this model's predictor wants"},
		{"log.csv --false-alarm-every 1s", "allow one in 20 windows at the most"},
		{"log.csv --window -3s", "give a time above zero"},
		{"log.csv --window 20", "missing unit"},
		{"none.csv", "none.csv"},
		{"slow.csv", "rows come every"},
	} {
		status, _, stderr := call(t, append([]string{"watch", "rig.toml", "model.json"}, strings.Fields(c.args)...)...)
		if status != statusCall {
			t.Errorf("%s: exit status %d", c.args, status)
		}
		oneErrorLine(t, stderr, c.want)
	}
}

// BenchmarkWatch reads and watches a log as the command does.
func BenchmarkWatch(b *testing.B) {
	log := watchedLog(b, 100000, 1)
	b.Chdir(b.TempDir())
	for _, name := range []string{"rig.toml", "model.json", "loops.json"} {
		text, err := os.ReadFile(filepath.Join(sourceFolder, "testdata", name))
		if err == nil {
			err = os.WriteFile(name, text, 0o644)
		}
		if err != nil {
			b.Fatal(err)
		}
	}
	if err := os.WriteFile("log.csv", []byte(log), 0o644); err != nil {
		b.Fatal(err)
	}
	defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(1))
	n := 0
	for b.Loop() {
		if status := run(context.Background(), []string{"watch", "rig.toml", "model.json", "loops.json", "log.csv"}, nil, io.Discard, io.Discard); status != statusDone {
			b.Fatalf("exit status %d", status)
		}
		n += 100000
	}
	b.ReportMetric(float64(n)/b.Elapsed().Seconds(), "rows/s")
}
