package history

import (
	"bytes"
	"crypto/sha256"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"reflect"
	"slices"
	"strconv"
	"strings"
	"sync"
	"testing"
	"testing/iotest"

	"steadyrig/ident"
)

// entry is a fit of one log of its own.
func entry(log string, pole, logGain float64) Entry {
	iv := func(x, sd float64) ident.Interval { return ident.Interval{Lo: x - 1.96*sd, Hi: x + 1.96*sd} }
	return Entry{
		Kind: Fit, Made: "2026-01-02T03:04:05Z", Tool: "steadyrig test", Command: "steadyrig fit rig.toml " + log, Rig: "small",
		Logs: []Log{{log, fmt.Sprintf("%064x", sha256.Sum256([]byte(log)))}}, ModelSHA256: strings.Repeat("0123456789abcdef", 4), Verdict: ident.Sound,
		Plant: &Plant{
			Poles: []Pole{{Re: -9, ReSD: 1, Re95: iv(-9, 1)}, {Re: pole, ReSD: 0.2, Re95: iv(pole, 0.2), ProbabilityUnstable: 1}},
			Gain:  &Gain{"dc", "mm/A", -math.Exp(logGain), 0.01 * math.Exp(logGain), iv(-math.Exp(logGain), 0.01*math.Exp(logGain))}, NoiseSD: 0.1, SamplePeriod: 0.01,
			Followed: &ident.Followed{Names: []string{"pole_re", "log_gain mm/A -"}, Values: []float64{pole, logGain}, Covariance: [][]float64{{0.04, 0.001}, {0.001, 1e-4}}},
		},
	}
}

// drawn are n entries of logs of their own about one plant, changed by so much from one on.
func drawn(n int, seed uint64, from int, by float64) []Entry {
	rnd := rand.New(rand.NewPCG(seed, 1))
	var list []Entry
	for k := range n {
		x, y := rnd.NormFloat64(), rnd.NormFloat64()
		// The covariance of entry: deviations 0.2 and 0.01, correlation 0.5.
		pole, gain := 36+0.2*x, 1.8+0.01*(0.5*x+math.Sqrt(0.75)*y)
		if k >= from {
			gain += by
		}
		list = append(list, entry(fmt.Sprintf("run%d.csv", k+1), pole, gain))
	}
	return list
}

func read(t *testing.T, path string) ([]Entry, []BadLine) {
	t.Helper()
	f, err := os.Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	list, bad, err := Read(f)
	if err != nil {
		t.Fatal(err)
	}
	return list, bad
}

// bare takes off what reading adds.
func bare(e Entry) Entry {
	e.Schema, e.Line, e.Text = "", 0, nil
	return e
}

func appendTo(t *testing.T, path string, entries ...Entry) {
	t.Helper()
	if err := Append(path, entries...); err != nil {
		t.Fatal(err)
	}
}

func TestRoundTrip(t *testing.T) {
	path := filepath.Join(t.TempDir(), "a.history.jsonl")
	peak := 1.5
	want := []Entry{
		entry("run1.csv", 36, 1.8),
		{Kind: Design, Made: "2026-01-02T03:04:05+02:00", Loops: &Loops{InnerForm: "lead", Plants: 2000, MeetSpec: 1996, LowerBound: 0.9954, PeakSensitivity: &peak}},
		{Kind: Recheck, Made: "2026-01-02T03:04:05Z", Verdict: "keep", Changed: &Changed{Moved: true, Probability: 1e-4}},
	}
	open := entry("run2.csv", 36, 1.8)
	open.Plant.Poles[0].Re95.Lo = math.Inf(-1)
	want = append(want, open)
	appendTo(t, path, want[0], want[1])
	appendTo(t, path, want[2:]...)
	got, bad := read(t, path)
	if len(bad) > 0 || len(got) != len(want) {
		t.Fatalf("%d entries, bad lines %+v, want %d and none", len(got), bad, len(want))
	}
	for i, e := range got {
		if e.Line != i+1 || !reflect.DeepEqual(bare(e), want[i]) {
			t.Errorf("line %d: got %+v, want %+v", e.Line, bare(e), want[i])
		}
	}
}

// A writer that is killed leaves any part of its line behind. Nothing earlier is lost, nothing later either, and the
// broken line is told by its number; one that lacks only its end is whole.
func TestKilledWriter(t *testing.T) {
	dir := t.TempDir()
	whole := filepath.Join(dir, "whole")
	first, last, next := entry("run1.csv", 36, 1.8), entry("run2.csv", 37, 1.8), entry("run3.csv", 38, 1.8)
	appendTo(t, whole, first)
	info, err := os.Stat(whole)
	if err != nil {
		t.Fatal(err)
	}
	start := int(info.Size())
	appendTo(t, whole, last)
	text, err := os.ReadFile(whole)
	if err != nil {
		t.Fatal(err)
	}
	step := 1
	if testing.Short() {
		step = 20
	}
	for n := start; n <= len(text); n += step {
		path := filepath.Join(dir, strconv.Itoa(n))
		if err := os.WriteFile(path, text[:n], 0o644); err != nil {
			t.Fatal(err)
		}
		want, broken := []Entry{first}, []BadLine(nil)
		switch {
		case n >= len(text)-1:
			want = append(want, last)
		case n > start:
			broken = []BadLine{{2, "half written"}}
		}
		if got, bad := read(t, path); !sameEntries(got, want) || !slices.Equal(bad, broken) {
			t.Errorf("%d bytes: %d entries and bad lines %+v, want %d and %+v", n, len(got), bad, len(want), broken)
		}
		appendTo(t, path, next)
		got, bad := read(t, path)
		if !sameEntries(got, append(want, next)) || len(bad) != len(broken) || len(bad) > 0 && bad[0].Line != 2 {
			t.Errorf("%d bytes and one entry more: %d entries, bad lines %+v", n, len(got), bad)
		}
	}
}

func sameEntries(got, want []Entry) bool {
	return slices.EqualFunc(got, want, func(a, b Entry) bool {
		x, err1 := json.Marshal(bare(a))
		y, err2 := json.Marshal(bare(b))
		return err1 == nil && err2 == nil && bytes.Equal(x, y)
	})
}

// What is no entry costs its own line alone.
func TestBadLines(t *testing.T) {
	good := func(log string) string {
		text, err := encode([]Entry{entry(log, 36, 1.8)})
		if err != nil {
			t.Fatal(err)
		}
		return strings.TrimSpace(string(text))
	}
	unknown := strings.Replace(good("run2.csv"), `{"schema"`, `{"of_a_later_version":[1,{"a":null}],"schema"`, 1)
	lines := []string{
		good("run1.csv"),
		"",
		"{}",
		`{"schema":"steadyrig/history/2","kind":"fit","made":"2026-01-02T03:04:05Z"}`,
		`{"schema":"steadyrig/history/1","kind":"fit","made":"yesterday"}`,
		"\x00\x00\x00\x00",
		"// a remark",
		strings.Repeat("x", longestLine+1),
		strings.Replace(good("run3.csv"), `[0.04,0.001]`, `[0.04]`, 1),
		strings.Replace(good("run3.csv"), `[0.04,0.001]`, `[-0.04,0.001]`, 1),
		unknown + "\r",
		good("run4.csv")[:100],
	}
	got, bad, err := Read(strings.NewReader(strings.Join(lines, "\n")))
	if err != nil {
		t.Fatal(err)
	}
	var at, broken []int
	for _, e := range got {
		at = append(at, e.Line)
	}
	for _, b := range bad {
		broken = append(broken, b.Line)
	}
	if !slices.Equal(at, []int{1, 11}) || !slices.Equal(broken, []int{3, 4, 5, 6, 7, 8, 9, 10, 12}) {
		t.Errorf("entries of lines %v, bad lines %+v", at, bad)
	}
	if len(got) == 2 && string(got[1].Text) != unknown {
		t.Errorf("unknown fields are lost: %s", got[1].Text)
	}
	if _, _, err := Read(iotest.ErrReader(errors.New("the disk is gone"))); err == nil || !strings.Contains(err.Error(), "line 1: the disk is gone") {
		t.Errorf("a disk that is gone: %v", err)
	}
}

// Many writers in two processes, each through a handle of its own: every entry is there, whole and once.
func TestTwoProcesses(t *testing.T) {
	const writers, each = 4, 25
	write := func(path, who string) {
		var wait sync.WaitGroup
		for w := range writers {
			wait.Add(1)
			go func() {
				defer wait.Done()
				for k := range each {
					if err := Append(path, entry(fmt.Sprintf("%s-%d-%d", who, w, k), 36, 1.8)); err != nil {
						t.Error(err)
					}
				}
			}()
		}
		wait.Wait()
	}
	if path := os.Getenv("HISTORY_CHILD"); path != "" {
		write(path, "child")
		return
	}
	path := filepath.Join(t.TempDir(), "h")
	child := exec.Command(os.Args[0], "-test.run=^TestTwoProcesses$")
	child.Env = append(os.Environ(), "HISTORY_CHILD="+path)
	var out bytes.Buffer
	child.Stdout, child.Stderr = &out, &out
	if err := child.Start(); err != nil {
		t.Fatal(err)
	}
	write(path, "parent")
	if err := child.Wait(); err != nil {
		t.Fatalf("%v: %s", err, out.String())
	}
	got, bad := read(t, path)
	names := make(map[string]bool)
	for _, e := range got {
		names[e.Logs[0].File] = true
	}
	if len(bad) > 0 || len(got) != 2*writers*each || len(names) != len(got) {
		t.Errorf("%d entries of %d names, bad lines %+v, want %d", len(got), len(names), bad, 2*writers*each)
	}
}

func TestAppendFails(t *testing.T) {
	dir := t.TempDir()
	if err := Append(dir, entry("run1.csv", 36, 1.8)); err == nil {
		t.Error("a folder took an entry")
	}
	if err := Append(filepath.Join(dir, "none", "h"), entry("run1.csv", 36, 1.8)); err == nil {
		t.Error("a folder that is not there took an entry")
	}
	if _, err := os.Stat("/dev/full"); err == nil {
		// Every write to it says that the disk is full.
		if err := Append("/dev/full", entry("run1.csv", 36, 1.8)); err == nil {
			t.Error("a full disk took an entry")
		}
	}
	bad := entry("run1.csv", math.NaN(), 1.8)
	path := filepath.Join(dir, "h")
	if err := Append(path, bad); err == nil {
		t.Error("a number that is none was written")
	}
	if _, err := os.Stat(path); err == nil {
		t.Error("an entry that cannot be written left a file")
	}
}

func TestPath(t *testing.T) {
	for rig, want := range map[string]string{"rig.toml": "rig.history.jsonl", "a/hover.v2.toml": "a/hover.v2.history.jsonl", "RIG.TOML": "RIG.history.jsonl", "rig": "rig.history.jsonl", ".toml": ".toml.history.jsonl"} {
		if got := Path(rig); got != want {
			t.Errorf("%s: %s, want %s", rig, got, want)
		}
	}
}

// A change of the gain by 12 % is found where it is and told with its size.
func TestChangeIsFound(t *testing.T) {
	list := numbered(drawn(20, 1, 12, math.Log(1.12)))
	got := Test(list)
	if len(got.Evidence) != 20 || len(got.Changes) != 1 || got.Changes[0].At != 13 {
		t.Fatalf("%+v, want one change at line 13", got)
	}
	rise := got.Changes[0].Numbers[1].Rise
	if !rise.Interval95.Contains(math.Log(1.12)) || rise.Interval95.Contains(0) {
		t.Errorf("gain rose by %+v, want %v", rise, math.Log(1.12))
	}
}

func numbered(list []Entry) []Entry {
	for i := range list {
		list[i].Line = i + 1
	}
	return list
}

// A log counts once, by its last plant; pooled plants, refused ones and designs do not count.
func TestWhatCounts(t *testing.T) {
	a, b, c := entry("a.csv", 36, 1.8), entry("b.csv", 36.1, 1.81), entry("c.csv", 36.2, 1.8)
	pooled := entry("a.csv", 36, 1.8)
	pooled.Logs = append(pooled.Logs, c.Logs...)
	refused := entry("d.csv", 50, 1.8)
	refused.Verdict = ident.Refused
	copied := entry("a.csv", 35.9, 1.8)
	copied.Logs[0].File = "copy of a.csv"
	bare := entry("e.csv", 36, 1.8)
	bare.Plant.Followed = nil
	got := Test(numbered([]Entry{a, {Kind: Design}, b, pooled, refused, copied, c, bare, pooled}))
	var pairs [][2]int
	for _, e := range got.Evidence {
		pairs = append(pairs, [2]int{e.Line, e.Plant})
	}
	if want := [][2]int{{1, 6}, {3, 3}, {7, 7}}; !slices.Equal(pairs, want) || got.Lacking != 0 {
		t.Errorf("evidence %v, %d lacking, want %v and none", pairs, got.Lacking, want)
	}
	c.Plant.Followed = &ident.Followed{Names: []string{"pole_re"}, Values: []float64{36}, Covariance: [][]float64{{1}}}
	if got := Test(numbered([]Entry{a, b, c})); len(got.Evidence) != 2 || got.Lacking != 1 {
		t.Errorf("%d logs count and %d lack the gain, want 2 and 1", len(got.Evidence), got.Lacking)
	}
	if got := Test(nil); len(got.Changes) != 0 {
		t.Errorf("an empty history changed: %+v", got)
	}
}

// A log fitted a hundred times is no more evidence of a change than fitted once.
func TestRepeatsAreNoEvidence(t *testing.T) {
	list := drawn(5, 2, 5, 0)
	for range 100 {
		list = append(list, entry("far.csv", 36.5, 1.81)) // 2.5 deviations away
	}
	if got := Test(numbered(list)); len(got.Changes) > 0 || len(got.Evidence) != 6 {
		t.Errorf("%d logs count, changes %+v", len(got.Evidence), got.Changes)
	}
	for i := range list {
		list[i].Logs = []Log{{"", strconv.Itoa(i)}}
	}
	if got := Test(numbered(list)); len(got.Changes) != 1 {
		t.Errorf("a hundred logs make changes %+v, want one", got.Changes)
	}
}

// The reader takes anything. What it accepts is written again to the same entry, and every line that is not blank is
// either an entry or told.
func FuzzRead(f *testing.F) {
	text, err := encode(drawn(2, 1, 0, 0))
	if err != nil {
		f.Fatal(err)
	}
	f.Add(text)
	f.Add(text[:len(text)-10])
	f.Add([]byte("\n\r\n{}\n\x00\x00\n"))
	f.Fuzz(func(t *testing.T, text []byte) {
		list, bad, err := Read(iotest.OneByteReader(bytes.NewReader(text)))
		if err != nil {
			t.Fatal(err)
		}
		lines := 0
		for line := range bytes.Lines(text) {
			if len(bytes.TrimSpace(line)) > 0 {
				lines++
			}
		}
		if len(list)+len(bad) != lines {
			t.Errorf("%d entries and %d bad lines of %d", len(list), len(bad), lines)
		}
		Test(list)
		again, err := encode(list)
		if err != nil {
			t.Fatal(err)
		}
		reread, bad, err := Read(bytes.NewReader(again))
		if err != nil || len(bad) > 0 || !sameEntries(reread, list) {
			t.Errorf("read %+v, written and read again %+v, bad lines %+v, %v", list, reread, bad, err)
		}
	})
}

func BenchmarkOpen(b *testing.B) {
	for _, n := range []int{100, 10000} {
		b.Run(strconv.Itoa(n), func(b *testing.B) {
			list := drawn(n, 1, n/2, 0.05)
			for i := range list {
				// As long as those of a rig of four poles, with all digits.
				p := list[i].Plant
				p.Poles = append(p.Poles, p.Poles...)
				for j := range p.Poles {
					p.Poles[j].Re *= 1 + 1e-3/float64(i+1)
					p.Poles[j].ReSD *= math.Pi
					p.Poles[j].Re95.Lo *= math.Pi
					p.Poles[j].Re95.Hi *= math.Pi
				}
			}
			text, err := encode(list)
			if err != nil {
				b.Fatal(err)
			}
			b.SetBytes(int64(len(text)))
			for b.Loop() {
				list, bad, err := Read(bytes.NewReader(text))
				if err != nil || len(bad) > 0 || len(Test(list).Evidence) != n {
					b.Fatal(err, bad)
				}
			}
		})
	}
}
