package data

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"math"
	"regexp"
	"runtime"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"
)

// checkParseError fails unless err is a ParseError of one line that says where.
func checkParseError(t *testing.T, err error, file string) {
	t.Helper()
	var e *ParseError
	if !errors.As(err, &e) {
		t.Fatalf("%T: %v", err, err)
	}
	if text := err.Error(); strings.ContainsAny(text, "\n\r\x00\x1b") || !strings.HasPrefix(text, file) {
		t.Fatalf("no error of one line about %s: %q", file, text)
	}
}

func FuzzReadRig(f *testing.F) {
	for _, s := range []string{hoverPuck, "", "[log]\ninput='u'\noutput='y'\nsample_period=1e-3\n", "log.input = 'u'\nlog = 3", "[log]\nx.y.z=1\n[[spec]]\n",
		"[limits]\ninput=[nan,inf]\noutput=[1,[2]]", "name=\"\"\"\na\n\"\"\"\nlog={input='a',output=\"b\"}\n",
		"[layout]\ndelimiter=\"|\"\nnames_line=3\nunits_line=4\nnumbers_line=5\ncomment=\"é\"\n[log]\nclock_skew=nan\ninput_time=\"x\"\n", "[layout]\ndelimiter=\"\\u0000\"\nnames_line=9223372036854775807\n", "[loop]\nsample_period=1_0\nhold=1979-05-27\n"} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		g, err := ReadRig(bytes.NewReader(text), "rig.toml")
		if err != nil {
			checkParseError(t, err, "rig.toml: ")
			return
		}
		if err := g.Validate(); err != nil {
			t.Fatalf("read, but not valid: %v", err)
		}
		for _, err := range []error{g.NeedLog(), g.NeedDesign()} {
			if err != nil {
				checkParseError(t, err, "rig.toml: ")
			}
		}
	})
}

// The settings under which FuzzReadLog reads a log, by the bits of a byte.
func fuzzRig(how byte) *Rig {
	g := &Rig{Log: LogColumns{Time: "t", Input: "u", Output: "y"}, Limits: Limits{Input: &[2]float64{-1, 1}, Output: &[2]float64{-2, 2}, InputRate: 1}}
	if how&1 != 0 {
		g.Log = LogColumns{Input: "c2", Output: "c3", SamplePeriod: 0.5, InputRow: InputBefore}
	}
	if how&2 != 0 {
		g.Log.Dither, g.Log.ClockSkew, g.Log.ControllerPeriod = "r", 0.01, 1e-3
	}
	if how&4 != 0 && g.Log.Time != "" {
		g.Log.InputTime = "r"
		g.Log.Dither = ""
	}
	line := func(n int) *int { return &n }
	if how&8 != 0 {
		g.Layout = Layout{Delimiter: "|", DecimalMark: ",", Comment: "!", NumbersLine: 3}
	}
	if how&16 != 0 {
		g.Layout.NamesLine, g.Layout.UnitsLine = line(1), line(2)
	}
	if how&32 != 0 {
		g.Layout.NamesLine, g.Layout.Delimiter = line(0), DelimiterBlanks
	}
	return g
}

func FuzzReadLog(f *testing.F) {
	plain := newPlainLog(70).csv()
	for _, s := range []string{plain, strings.ReplaceAll(strings.ReplaceAll(plain, ",", ";"), ".", ","), strings.ReplaceAll(plain, ",", " "),
		"# t u y r\n" + strings.SplitN(plain, "\n", 2)[1], "\xef\xbb\xbf\"t\",\"u\",y\r\ns,A,\"m\"\"m\"\r\n2025-12-17T20:58:11.7Z,1,2\r\n2025-12-17T20:58:11.8Z,,NaN\r\n",
		"t,u,y\r1,2,3\r2,3,4", "1764512345678901234;1;2\n1764512345678901235;3;4\n", "\x1f\x8b\x08\x00", "t;u;y;\n23:59:59;1e999;0x1;\n", "%\n\n,,,\n\"\n",
		strings.ReplaceAll(strings.ReplaceAll(plain, ",", "|"), ".", ","), "\xff\xfe" + wide(plain, binary.LittleEndian), "\xfe\xff\xd8\x00\x00t\x00,\xdc",
		"t,u,y,r\n2025-03-30T01:59:59,1,2,3\n2025-03-30T03:00:00,2,1,4\n", "t,u,y,r\n9223372036854775807,1e308,-1e308,1e-400\n-9223372036854775808,2,3,4\n"} {
		for _, how := range []byte{0, 1, 2, 5, 8, 16, 24, 34} {
			f.Add([]byte(s), how)
		}
	}
	f.Fuzz(func(t *testing.T, text []byte, how byte) {
		g := fuzzRig(how)
		exp, err := ReadLog(bytes.NewReader(text), "log.csv", g)
		if err != nil {
			checkParseError(t, err, "log.csv: ")
		} else {
			checkExperiment(t, exp)
			again, err := ReadLog(bytes.NewReader(text), "log.csv", g)
			if err != nil || again.Used != exp.Used || again.SHA256 != exp.SHA256 {
				t.Fatal("read twice, it differs")
			}
		}
		if _, err := Header(bytes.NewReader(text), "log.csv"); err != nil {
			checkParseError(t, err, "log.csv: ")
		}
	})
}

// A log is read under any layout that a rig file may give.
func FuzzLayout(f *testing.F) {
	plain := newPlainLog(70).csv()
	spaced := "! rig\n" + strings.ReplaceAll(strings.ReplaceAll(plain, ",", "|"), ".", ",")
	for _, c := range []struct {
		text, delimiter, mark, comment string
		names, units, numbers          int
	}{
		{plain, "", "", "", -1, -1, 0}, {plain, ",", ".", "#", 1, 0, 2}, {spaced, "|", ",", "!", 2, -1, 3}, {strings.ReplaceAll(plain, ",", "\t"), "tab", ".", "", 1, -1, 2},
		{plain, "blanks", ",", "é", 0, 0, 5}, {plain, ";", ",", "\x00", 499, 500, 500}, {plain, ",", ",", "t", 1, 1, 1},
	} {
		f.Add([]byte(c.text), c.delimiter, c.mark, c.comment, c.names, c.units, c.numbers)
	}
	rig := plainRig()
	rig.lines = nil // else what they name is taken for given, and for wrong
	if err := rig.Validate(); err != nil {
		f.Fatal(err)
	}
	f.Fuzz(func(t *testing.T, text []byte, delimiter, mark, comment string, names, units, numbers int) {
		g := *rig
		g.Layout = Layout{Delimiter: delimiter, DecimalMark: mark, Comment: comment, NumbersLine: numbers}
		if names >= 0 {
			g.Layout.NamesLine = &names
		}
		if units >= 0 {
			g.Layout.UnitsLine = &units
		}
		if g.Validate() != nil {
			return
		}
		exp, err := ReadLog(bytes.NewReader(text), "log.csv", &g)
		if err != nil {
			checkParseError(t, err, "log.csv: ")
			return
		}
		checkExperiment(t, exp)
	})
}

// What the standard library takes for a number, the scanner does, to the last bit.
func FuzzNumber(f *testing.F) {
	for _, s := range []string{"0", "-0.0", "1e5", "12.375", ".5", "5.", "+1", "1e-400", "-1e999", "123456789012345678901234567890e-20", "9007199254740993", "1e23", "2.2250738585072011e-308"} {
		f.Add(s)
	}
	plain := regexp.MustCompile(`^[-+]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][-+]?[0-9]+)?$`)
	f.Fuzz(func(t *testing.T, text string) {
		x, n := scanNumber([]byte(text), '.')
		if n < 0 || n > len(text) {
			t.Fatalf("%d bytes of %q", n, text)
		}
		if !plain.MatchString(text) {
			return
		}
		if want, _ := strconv.ParseFloat(text, 64); n != len(text) || math.Float64bits(x) != math.Float64bits(want) {
			t.Fatalf("%q is %v of %d bytes, want %v", text, x, n, want)
		}
	})
}

// What the standard library takes for a stamp of RFC 3339, the clock does, and to the same moment.
func FuzzStamp(f *testing.F) {
	for _, s := range []string{"2025-12-17T20:58:11.705923+01:00", "2025-03-30 01:59:59", "0000-01-01T00:00:00Z", "2000-02-29T23:59:60z", "23:59:59,5", "2025/01/02 24:00", "9999-12-31T23:59:59.999999999-23:59", "1764512345678901234", "1.5"} {
		f.Add(s, "ms")
		f.Add(s, "")
	}
	f.Fuzz(func(t *testing.T, text, unit string) {
		if len(text) == 0 {
			return // cells without anything are no stamps to the reader
		}
		var k clock
		if k.start([]byte(text), '.', unit) {
			if x, ok := k.read([]byte(text), '.'); ok && (math.IsNaN(x) || math.IsInf(x, 0)) {
				t.Fatalf("%q in %q is %v", text, unit, x)
			}
		}
		want, err := time.Parse(time.RFC3339Nano, text)
		if err != nil {
			return
		}
		s, part, ok := scanStamp([]byte(text))
		// A nanosecond: the library cuts what is finer.
		if !ok || s != want.Unix() || math.Abs(part-1e-9*float64(want.Nanosecond())) > 1.001e-9 {
			t.Fatalf("%q is %d s and %v (%v), want %d s and %d ns", text, s, part, ok, want.Unix(), want.Nanosecond())
		}
	})
}

// A table that is read, selected, sorted and joined with itself stays a table, and what is written of it reads as the same.
func FuzzSheet(f *testing.F) {
	for _, where := range []string{"payload > 1.5", `operator has "b"`, `"payload" != ""`, "file=run1.csv", "payload >= 1e999", `x = "`, "a has"} {
		f.Add([]byte(tests), where, "file, -payload", "-payload,operator", "file")
	}
	f.Add([]byte("\xef\xbb\xbfa;b c;\n1,5;\"x\n;y\";\n;;\n"), `"b c" has x`, `"b c"`, "- a", "a=b c")
	f.Add([]byte("a\tb\n\x00\t\x1b[2J\n"), "a = NaN", "a,a", "b,b,b", "b")
	f.Fuzz(func(t *testing.T, text []byte, where, list, by, on string) {
		s, err := ReadSheet(bytes.NewReader(text), "record.csv")
		if err != nil {
			checkParseError(t, err, "record.csv: ")
			return
		}
		check := func(got *Sheet, err error) {
			if err != nil {
				if strings.ContainsAny(err.Error(), "\n\r\x00\x1b") {
					t.Fatalf("no error of one line: %q", err)
				}
				return
			}
			if len(got.Rows()) > 0 && len(got.Rows()[0]) != len(got.Columns) {
				t.Fatalf("%d cells for %d columns", len(got.Rows()[0]), len(got.Columns))
			}
		}
		some, err := s.Where(where)
		check(some, err)
		check(s.Select(list))
		sorted, err := s.Sort(by)
		check(sorted, err)
		if err == nil && len(sorted.Rows()) != len(s.Rows()) {
			t.Fatal("rows lost in sorting")
		}
		both, _, err := s.Join(s, on)
		check(both, err)
		if err == nil && len(both.Rows()) != len(s.Rows()) {
			t.Fatal("rows lost in joining")
		}
		if strings.ContainsAny(s.text(), ";\t") || len(s.Columns) == 1 {
			return // such names could be told from their delimiters no more, and a row of one empty cell is no row
		}
		again, err := ReadSheet(strings.NewReader(s.text()), "again.csv")
		if err != nil || again.text() != s.text() || !slices.Equal(again.Columns, s.Columns) {
			t.Fatalf("round trip differs (%v):\n%q\n%q", err, s.text(), again.text())
		}
	})
}

// A repeated is text that goes on for a number of bytes, and counts how many of them were taken.
type repeated struct {
	head, text string
	size       int64
	taken      int64
}

func (r *repeated) Read(p []byte) (int, error) {
	if r.taken >= r.size {
		return 0, io.EOF
	}
	n := 0
	for n < len(p) && r.taken < r.size {
		var c int
		if at := r.taken; at < int64(len(r.head)) {
			c = copy(p[n:], r.head[at:])
		} else {
			c = copy(p[n:], r.text[(at-int64(len(r.head)))%int64(len(r.text)):])
		}
		n += c
		r.taken += int64(c)
	}
	return n, nil
}

// What is hostile, or no log, is refused before much of it was read, and takes no more memory than is read.
func TestHostileLogs(t *testing.T) {
	const (
		size   = 100 << 20
		little = 4 << 20
	)
	head := newPlainLog(12_000).csv() // longer than what is looked at for the layout
	for _, c := range []struct{ name, head, text string }{
		{"a line of 100 MB", "t,u,y,r\n0,1,2,3\n", "1,"},
		{"a header of a million columns and more", "", "t,u,y,r,"},
		{"a line of 100 MB below good rows", head, "1,"},
		{"a quoted cell of 100 MB", head + "1,\"", "x"},
		{"zeros", "t,u,y,r\n", "\x00"},
		{"prose", "", "This is no log at all, but goes on. "},
		{"UTF-16 of one line", "\xff\xfe", "a\x00"},
		{"half signs", "\xff\xfe", "\x00\xd8"},
	} {
		var before, after runtime.MemStats
		runtime.ReadMemStats(&before)
		r := &repeated{head: c.head, text: c.text, size: size}
		_, err := ReadLog(r, "log.csv", plainRig())
		runtime.ReadMemStats(&after)
		if err == nil {
			t.Errorf("%s: read", c.name)
			continue
		}
		checkParseError(t, err, "log.csv: ")
		if r.taken > little || after.TotalAlloc-before.TotalAlloc > 8*little {
			t.Errorf("%s: %d bytes taken, %d allocated: %v", c.name, r.taken, after.TotalAlloc-before.TotalAlloc, err)
		}
	}
	// A long line of a rig file, and a long rig file.
	for _, text := range []string{"name = \"x", "# x\n"} {
		r := &repeated{text: text, size: size}
		if _, err := ReadRig(r, "rig.toml"); err == nil || r.taken > little {
			t.Errorf("%q: %d bytes taken: %v", text, r.taken, err)
		}
	}
}

// A log of nothing but bad rows is counted, not kept.
func TestBadRowsAreCounted(t *testing.T) {
	r := &repeated{head: "t,u,y,r\n0,1,2,3\n1,2,3,4\n2,3,4,5\n", text: "3,ERR,4,5\n", size: 8 << 20}
	var before, after runtime.MemStats
	runtime.ReadMemStats(&before)
	_, err := ReadLog(r, "log.csv", plainRig())
	runtime.ReadMemStats(&after)
	rows := (8<<20 - len(r.head)) / len(r.text)
	if err == nil || !strings.Contains(err.Error(), fmt.Sprintf("and %d more", rows+1-faultsShown)) && !strings.Contains(err.Error(), fmt.Sprintf("and %d more", rows-faultsShown)) {
		t.Errorf("%d rows: %v", rows, err)
	}
	if n := after.TotalAlloc - before.TotalAlloc; n > 160<<20 {
		t.Errorf("%d bytes allocated", n)
	}
}
