package data

import (
	"bytes"
	"compress/gzip"
	"crypto/sha256"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"
	"testing/fstest"
	"testing/iotest"
	"time"
	"unicode/utf16"
)

// A plainLog is a log without flaws, to be spoilt by tests: a noisy first-order lag under a random input.
type plainLog struct {
	t, u, y, r []float64
}

func newPlainLog(rows int) *plainLog {
	rnd := rand.New(rand.NewPCG(1, 1))
	p := &plainLog{}
	y := 0.0
	for k := range rows {
		u := math.Round(rnd.NormFloat64()*1e4) / 1e4
		p.t = append(p.t, float64(k)/100)
		p.u = append(p.u, u)
		p.y = append(p.y, math.Round(y*1e6)/1e6)
		p.r = append(p.r, float64(k/100%2))
		y = 0.9*y + 0.1*u + 0.05*rnd.NormFloat64()
	}
	return p
}

// csv writes the log: header on line 1, row k on line k+2.
func (p *plainLog) csv() string {
	var b strings.Builder
	b.WriteString("t,u,y,r\n")
	for k := range p.t {
		fmt.Fprintf(&b, "%s,%s,%s,%s\n", text(p.t[k]), text(p.u[k]), text(p.y[k]), text(p.r[k]))
	}
	return b.String()
}

func text(x float64) string { return strconv.FormatFloat(x, 'g', -1, 64) }

// plainRig names the columns of a plainLog.
func plainRig() *Rig {
	return &Rig{Log: LogColumns{Time: "t", Input: "u", Output: "y", Reference: "r", InputRow: InputAfter}, file: "rig.toml", lines: map[string]int{"log": 1, "log.input": 3, "log.sample_period": 7}}
}

func mustRead(t *testing.T, text string, g *Rig) *Experiment {
	t.Helper()
	exp, err := ReadLog(strings.NewReader(text), "log.csv", g)
	if err != nil {
		t.Fatal(err)
	}
	checkExperiment(t, exp)
	return exp
}

// checkExperiment holds what every experiment promises.
func checkExperiment(t *testing.T, exp *Experiment) {
	t.Helper()
	used := 0
	for i, s := range exp.Segments {
		used += len(s.Y) - len(s.Wrong)
		if len(s.Y) < MinSegment || len(s.U) != len(s.Y) || s.R != nil && len(s.R) != len(s.Y) || s.D != nil && len(s.D) != len(s.Y) {
			t.Errorf("segment %d: %d outputs, %d inputs, %d references, %d dithers", i, len(s.Y), len(s.U), len(s.R), len(s.D))
		}
		for _, c := range [][]float64{s.U, s.Y, s.R, s.D} {
			for _, x := range c {
				if math.IsNaN(x) || math.IsInf(x, 0) {
					t.Fatalf("segment %d holds %v", i, x)
				}
			}
		}
		if s.Line < 1 || math.IsNaN(s.Start) {
			t.Errorf("segment %d starts on line %d at %v s", i, s.Line, s.Start)
		}
	}
	if used != exp.Used || exp.Used > exp.Rows {
		t.Errorf("%d rows in segments, %d said to be used, %d in all", used, exp.Used, exp.Rows)
	}
	if !(exp.Period > 0) || math.IsInf(exp.Period, 0) {
		t.Errorf("period %v", exp.Period)
	}
	for _, f := range exp.Flaws {
		if f.Name == "" || f.Count < 1 || f.Detail == "" || f.Effect == "" || strings.ContainsAny(f.Detail+f.Effect, "\n\r") {
			t.Errorf("flaw %+v", f)
		}
	}
}

func flawNames(exp *Experiment) []string {
	var names []string
	for _, f := range exp.Flaws {
		names = append(names, f.Name)
	}
	return names
}

func findFlaw(t *testing.T, exp *Experiment, name string) Flaw {
	t.Helper()
	for _, f := range exp.Flaws {
		if f.Name == name {
			return f
		}
	}
	t.Fatalf("no flaw %q among %q", name, flawNames(exp))
	return Flaw{}
}

func TestReadLogPlain(t *testing.T) {
	p := newPlainLog(500)
	exp := mustRead(t, p.csv(), plainRig())
	if len(exp.Flaws) > 0 || exp.Rows != 500 || exp.Used != 500 || len(exp.Segments) != 1 || exp.Period != 0.01 {
		t.Errorf("%d of %d rows, %d segments, period %v, flaws %+v", exp.Used, exp.Rows, len(exp.Segments), exp.Period, exp.Flaws)
	}
	s := exp.Segments[0]
	if s.Line != 2 || s.Start != 0 || !slices.Equal(s.U, p.u) || !slices.Equal(s.Y, p.y) || !slices.Equal(s.R, p.r) || s.D != nil {
		t.Errorf("the segment is not what was written")
	}
	if want := fmt.Sprintf("%x", sha256.Sum256([]byte(p.csv()))); exp.SHA256 != want {
		t.Errorf("SHA-256 %s, want %s", exp.SHA256, want)
	}
	if exp.File != "log.csv" || !slices.Equal(exp.Columns, []string{"t", "u", "y", "r"}) || exp.Layout != "commas between cells, names on line 1, numbers from line 2" {
		t.Errorf("file %q, columns %q, layout %q", exp.File, exp.Columns, exp.Layout)
	}
}

// The same rows, however written, are the same experiment.
func TestReadLogLayouts(t *testing.T) {
	p := newPlainLog(200)
	plain := p.csv()
	lines := strings.Split(strings.TrimSuffix(plain, "\n"), "\n")
	each := func(f func(i int, line string) string) string {
		var b strings.Builder
		for i, line := range lines {
			b.WriteString(f(i, line) + "\n")
		}
		return b.String()
	}
	semicolon := strings.ReplaceAll(strings.ReplaceAll(plain, ",", ";"), ".", ",")
	quoted := each(func(_ int, line string) string { return `"` + strings.ReplaceAll(line, ",", `","`) + `"` })
	for _, c := range []struct{ name, text string }{
		{"crlf", strings.ReplaceAll(plain, "\n", "\r\n")},
		{"bare cr", strings.ReplaceAll(plain, "\n", "\r")},
		{"bom", "\xef\xbb\xbf" + plain},
		{"utf-16, little end first", "\xff\xfe" + wide(plain, binary.LittleEndian)},
		{"utf-16, big end first", "\xfe\xff" + wide(strings.Replace(plain, "t,", "# Größe 𝛥\nt,", 1), binary.BigEndian)},
		{"bom and crlf", "\xef\xbb\xbf" + strings.ReplaceAll(plain, "\n", "\r\n")},
		{"no end of last line", strings.TrimSuffix(plain, "\n")},
		{"semicolon", strings.ReplaceAll(plain, ",", ";")},
		{"decimal comma", semicolon},
		{"tab", strings.ReplaceAll(plain, ",", "\t")},
		{"tab and decimal comma", strings.ReplaceAll(semicolon, ";", "\t")},
		{"blanks", strings.ReplaceAll(plain, ",", "   ")},
		{"blanks and decimal comma", strings.ReplaceAll(semicolon, ";", " ")},
		{"blanks ahead and behind", each(func(_ int, s string) string { return "  " + strings.ReplaceAll(s, ",", " \t ") + " " })},
		{"comma and blank", strings.ReplaceAll(plain, ",", ", ")},
		{"quoted", quoted},
		{"quoted decimal comma", strings.ReplaceAll(each(func(i int, s string) string {
			return `"` + strings.ReplaceAll(strings.ReplaceAll(s, ",", `"|"`), ".", ",") + `"`
		}), "|", ";")},
		{"trailing comma", each(func(_ int, s string) string { return s + "," })},
		{"trailing comma in rows only", each(func(i int, s string) string { return s + strings.Repeat(",", min(i, 1)) })},
		{"trailing tab", each(func(_ int, s string) string { return strings.ReplaceAll(s, ",", "\t") + "\t" })},
		{"units row", strings.Replace(plain, "\n", "\ns,A,mm,mm\n", 1)},
		{"units row in brackets", strings.Replace(plain, "\n", "\n[s],[A],[mm],[-]\n", 1)},
		{"units in the names", strings.Replace(plain, "t,u,y,r", "t [s],u [A],y (mm),r", 1)},
		{"units row with ratios", strings.Replace(plain, "\n", "\ns,1,mm,1\n", 1)},
		{"comments ahead", "# made by a logger\n#\n# gain 1,2,3,4\n" + plain},
		{"comments in a broken encoding", "# Gr\xf6\xdfe, M\xe9xico\n" + plain},
		{"comments between", strings.ReplaceAll(plain, "\n0.5,", "\n# half time, 1,2,3\n0.5,")},
		{"blank lines", strings.ReplaceAll(plain, "\n", "\n\n")},
		{"preamble without comment signs", "Logger X 1.2\nDate;2025-12-17\nRate,100,Hz,\n\n" + plain},
		{"preamble of numbers", "1,2,3,4\n" + plain},
		{"preamble with as many cells", "Gain,2,3,4\n" + plain},
		{"header in a comment", "# t u y r\n" + strings.Join(lines[1:], "\n")},
		{"header in a comment, with commas", "#t,u,y,r\n" + strings.Join(lines[1:], "\n")},
		{"header in a labelled comment", "# a b c d\n# Columns: t u y r\n#\n" + strings.Join(lines[1:], "\n")},
		{"a column of text", each(func(i int, s string) string { return s + map[bool]string{true: ",mode", false: ",AUTO"}[i == 0] })},
		{"a column of text ahead", each(func(i int, s string) string { return map[bool]string{true: "mode,", false: `"a, b",`}[i == 0] + s })},
		{"a column of text ahead and comments between", each(func(i int, s string) string {
			return map[bool]string{true: "mode,", false: "AUTO,"}[i == 0] + s + map[bool]string{true: "\n# 1,2,3,4,5", false: ""}[i%50 == 1]
		})},
		{"exponents", each(func(i int, s string) string {
			if i == 0 {
				return s
			}
			cells := strings.Split(s, ",")
			for k := range cells {
				x, _ := strconv.ParseFloat(cells[k], 64)
				cells[k] = strconv.FormatFloat(x, 'e', -1, 64)
			}
			return strings.Join(cells, ",")
		})},
		{"epoch s", each(func(i int, s string) string {
			if i == 0 {
				return s
			}
			return fmt.Sprintf("17645%05d.%02d%s", 12345+(i-1)/100, (i-1)%100, s[strings.Index(s, ","):])
		})},
		{"epoch ms", each(func(i int, s string) string {
			return withStamp(i, s, strconv.Itoa(1764512345678+10*(i-1)))
		})},
		{"epoch us", each(func(i int, s string) string {
			return withStamp(i, s, strconv.Itoa(1764512345678901+10_000*(i-1)))
		})},
		{"epoch ns", each(func(i int, s string) string {
			return withStamp(i, s, strconv.Itoa(1764512345678901234+10_000_000*(i-1)))
		})},
		{"iso 8601", each(func(i int, s string) string {
			return withStamp(i, s, fmt.Sprintf("2025-12-31T23:59:%02d.%02d0", 58+(i-1)/100, (i-1)%100))
		})},
		{"iso 8601 with zone", each(func(i int, s string) string {
			return withStamp(i, s, fmt.Sprintf("2025-12-31 23:59:%02d.%02d+01:00", 58+(i-1)/100, (i-1)%100))
		})},
		{"time of day past midnight", each(func(i int, s string) string {
			if i <= 100 {
				return withStamp(i, s, fmt.Sprintf("23:59:59.%02d", max(i-1, 0)%100))
			}
			return withStamp(i, s, fmt.Sprintf("00:00:%02d.%02d", (i-101)/100, (i-1)%100))
		})},
		{"ms by units row", strings.Replace(each(func(i int, s string) string { return withStamp(i, s, strconv.Itoa(10*(i-1))) }), "\n", "\nms,A,mm,mm\n", 1)},
	} {
		t.Run(c.name, func(t *testing.T) {
			exp := mustRead(t, c.text, plainRig())
			if exp.Rows != 200 || len(exp.Segments) != 1 || exp.Period != 0.01 {
				t.Fatalf("%d rows, %d segments, period %v; %s", exp.Rows, len(exp.Segments), exp.Period, exp.Layout)
			}
			s := exp.Segments[0]
			if !slices.Equal(s.U, p.u) || !slices.Equal(s.Y, p.y) || !slices.Equal(s.R, p.r) {
				t.Errorf("the numbers differ; %s", exp.Layout)
			}
			for _, f := range exp.Flaws {
				if f.Name != FlawClock {
					t.Errorf("flaw %+v", f)
				}
			}
		})
	}
}

// The first decimal mark of a log may stand below its head.
func TestReadLogLateDecimalComma(t *testing.T) {
	p := newPlainLog(1500)
	g := plainRig()
	g.Log.Time, g.Log.Reference, g.Log.SamplePeriod = "", "", 0.01
	for k := range 1200 {
		p.u[k], p.y[k] = math.Round(10*p.u[k]), math.Round(100*p.y[k])
	}
	var b strings.Builder
	b.WriteString("u;y\n")
	for k := range p.u {
		b.WriteString(strings.ReplaceAll(text(p.u[k])+";"+text(p.y[k])+"\n", ".", ","))
	}
	exp := mustRead(t, b.String(), g)
	if s := exp.Segments[0]; len(exp.Segments) != 1 || !slices.Equal(s.U, p.u) || !slices.Equal(s.Y, p.y) {
		t.Errorf("the numbers differ; %s", exp.Layout)
	}
	_, err := ReadLog(strings.NewReader(b.String()+"1.5;2\n"), "log.csv", g)
	if want := `log.csv: line 1502, column 1: "1.5" is no number (column "u"); mend or remove these lines; an empty cell or NaN may stand for a missing value`; message(err) != want {
		t.Errorf("got  %v\nwant %s", err, want)
	}
}

// A delimiter within quotes is none, wherever it stands.
func TestReadLogQuotedDelimiter(t *testing.T) {
	p := newPlainLog(100)
	text := strings.ReplaceAll(p.csv(), "\n", `,note`+"\n")
	text = strings.Replace(text, ",note", ",a,b", 1)
	text = strings.ReplaceAll(text, ",note", `,1,"x, y"`)
	mustRead(t, text, plainRig())
	text = spoil(text, 50, func(s string) string { return strings.TrimSuffix(s, `,1,"x, y"`) + `,"x, y"` })
	_, err := ReadLog(strings.NewReader(text), "log.csv", plainRig())
	if got, want := message(err), "log.csv: line 50: 5 cells where 6 belong; mend or remove these lines"; got != want {
		t.Errorf("got %s, want %s", got, want)
	}
}

// Stamps since 1970 in a float64 have a resolution of 0.2 us: they must be brought near zero before.
func TestReadLogEpochResolution(t *testing.T) {
	p := newPlainLog(300)
	for _, format := range []string{"1764512345.%06d", "1764512345%06d", "1764512345%06d000"} {
		var b strings.Builder
		b.WriteString("t,u,y,r\n")
		for k := range p.t {
			fmt.Fprintf(&b, format+",%s,%s,%d\n", 3*k, text(p.u[k]), text(p.y[k]), k%2)
		}
		if exp := mustRead(t, b.String(), plainRig()); exp.Period != 3e-6 || len(exp.Segments) != 1 || slices.Contains(flawNames(exp), FlawJitter) {
			t.Errorf("%s: period %v, flaws %+v", format, exp.Period, exp.Flaws)
		}
	}
}

// Seconds since 1970 by the date command of GNU coreutils (date -u -d STAMP +%s.%N).
func TestScanStamp(t *testing.T) {
	for _, c := range []struct {
		stamp    string
		seconds  int64
		fraction float64
	}{
		{"1970-01-01T00:00:00Z", 0, 0}, {"2025-12-17T20:58:11.705923", 1766005091, 0.705923}, {"2025-12-17 20:58:11,5", 1766005091, 0.5},
		{"2025-12-17T20:58:11+01:00", 1766001491, 0}, {"2025-12-17T20:58:11-0530", 1766024891, 0}, {"2025-12-17T20:58:11+02", 1765997891, 0},
		{"2024-02-29T12:00:00Z", 1709208000, 0}, {"2000-03-01 00:00:00", 951868800, 0}, {"1969-12-31T23:59:59Z", -1, 0},
		{"2025/12/17 20:58", 1766005080, 0}, {"20:58:11.25", 75491, 0.25},
	} {
		s, f, ok := scanStamp([]byte(c.stamp))
		if !ok || s != c.seconds || f != c.fraction {
			t.Errorf("scanStamp(%q) = %d, %v, %v; want %d, %v", c.stamp, s, f, ok, c.seconds, c.fraction)
		}
	}
	for _, stamp := range []string{"", "2025", "2025-12-17", "2025-13-17T20:58:11", "2025-12-17T20:61:11", "2025-12-17T20:58:11.", "2025-12-17T20:58:11x",
		"2025-12-17T20:58:11+", "2025-12-17T20:58:11+1", "2025-12-17T20:58:11+01:0", "2025-12-17T20:58:11+01:000", "ab:cd", "20:5"} {
		if s, f, ok := scanStamp([]byte(stamp)); ok {
			t.Errorf("scanStamp(%q) = %d, %v", stamp, s, f)
		}
	}
}

func TestReadLogOneColumnTwoParts(t *testing.T) {
	g := plainRig()
	g.Log.Reference = "r"
	g.Log.Output = "u [A]"
	_, err := ReadLog(strings.NewReader(strings.Replace(newPlainLog(100).csv(), "t,u,", "t,u [A],", 1)), "log.csv", g)
	if got, want := message(err), `log.csv: line 1: [log] input and output (rig.toml line 3) are both column 2, "u [A]"; each part needs a column of its own`; got != want {
		t.Errorf("got  %s\nwant %s", got, want)
	}
}

// wide writes text as UTF-16.
func wide(text string, order binary.AppendByteOrder) string {
	var b []byte
	for _, c := range utf16.Encode([]rune(text)) {
		b = order.AppendUint16(b, c)
	}
	return string(b)
}

func withStamp(i int, line, stamp string) string {
	if i == 0 {
		return line
	}
	return stamp + line[strings.Index(line, ","):]
}

func TestReadLogGzip(t *testing.T) {
	p := newPlainLog(200)
	var packed bytes.Buffer
	w := gzip.NewWriter(&packed)
	io.WriteString(w, p.csv())
	w.Close()
	exp, err := ReadLog(bytes.NewReader(packed.Bytes()), "log.csv.gz", plainRig())
	if err != nil {
		t.Fatal(err)
	}
	if exp.Rows != 200 || !slices.Equal(exp.Segments[0].Y, p.y) || exp.Layout != "gzip, commas between cells, names on line 1, numbers from line 2" {
		t.Errorf("%d rows, %s", exp.Rows, exp.Layout)
	}
	if want := fmt.Sprintf("%x", sha256.Sum256(packed.Bytes())); exp.SHA256 != want {
		t.Errorf("SHA-256 %s, want that of the packed bytes %s", exp.SHA256, want)
	}

	_, err = ReadLog(bytes.NewReader(packed.Bytes()[:packed.Len()/2]), "log.csv.gz", plainRig())
	if got, want := message(err), "log.csv.gz: the packed file ends before its end; copy it again"; got != want {
		t.Errorf("cut: got %s, want %s", got, want)
	}
	spoilt := bytes.Clone(packed.Bytes())
	spoilt[len(spoilt)-6] ^= 1
	_, err = ReadLog(bytes.NewReader(spoilt), "log.csv.gz", plainRig())
	if got, want := message(err), "log.csv.gz: gzip: invalid checksum; the packed file is damaged: copy it again"; got != want {
		t.Errorf("damaged: got %s, want %s", got, want)
	}
}

// A sign of four bytes may be cut by any buffer.
func TestReadLogWideInPieces(t *testing.T) {
	p := newPlainLog(200)
	text := "\xff\xfe" + wide(strings.Replace(p.csv(), "u,", "𝛥u,", 1), binary.LittleEndian)
	g := plainRig()
	g.Log.Input = "𝛥u"
	for name, r := range map[string]io.Reader{"bytes": iotest.OneByteReader(strings.NewReader(text)), "half": iotest.HalfReader(strings.NewReader(text))} {
		exp, err := ReadLog(r, "log.csv", g)
		if err != nil {
			t.Fatal(err)
		}
		if !slices.Equal(exp.Segments[0].U, p.u) || exp.Layout != "UTF-16, commas between cells, names on line 1, numbers from line 2" {
			t.Errorf("%s: %s", name, exp.Layout)
		}
	}
}

// What the rig file says of the layout counts, where recognising it would go wrong.
func TestReadLogLayoutGiven(t *testing.T) {
	p := newPlainLog(200)
	plain := p.csv()
	rows := strings.SplitN(plain, "\n", 2)[1]
	line := func(n int) *int { return &n }
	for _, c := range []struct {
		name, text string
		given      Layout
		says       string
	}{
		{"bars", strings.ReplaceAll(plain, ",", "|"), Layout{Delimiter: "|"}, `"|" between cells, names on line 1, numbers from line 2, as [layout] says`},
		{"tab", strings.ReplaceAll(plain, ",", "\t"), Layout{Delimiter: "tab"}, "tabs between cells, names on line 1, numbers from line 2, as [layout] says"},
		{"blanks", strings.ReplaceAll(plain, ",", "  "), Layout{Delimiter: "blanks"}, "blanks between cells, names on line 1, numbers from line 2, as [layout] says"},
		{"decimal comma", strings.ReplaceAll(strings.ReplaceAll(plain, ",", ";"), ".", ","), Layout{DecimalMark: ","},
			"semicolons between cells, decimal comma, names on line 1, numbers from line 2, as [layout] says"},
		{"a header of calibrated numbers", "t,u,y,r\n1.5,2.5,3.5,4.5\n" + rows, Layout{NumbersLine: 3}, "commas between cells, names on line 1, numbers from line 3, as [layout] says"},
		{"names not next to the rows", "t,u,y,r\nchannel 1,channel 2,channel 3,channel 4\n\n" + rows, Layout{NamesLine: line(1), UnitsLine: line(0), NumbersLine: 4},
			"commas between cells, names on line 1, numbers from line 4, as [layout] says"},
		{"two rows of text, names below", "one,two,three,four\nt,u,y,r\n" + rows, Layout{NamesLine: line(2)}, "commas between cells, names on line 2, numbers from line 3, as [layout] says"},
		{"names in a comment that is not the last", "; t u y r\n; and so on and on\n" + rows, Layout{NamesLine: line(1), Comment: ";"},
			`commas between cells, names on line 1, numbers from line 3, comments after ";", as [layout] says`},
		{"units apart", "A,mm,s,V\n\nt,u,y,r\nA,s,mm,V\n" + rows, Layout{UnitsLine: line(4)}, "commas between cells, names on line 3, units on line 4, numbers from line 5, as [layout] says"},
		{"own comments", strings.ReplaceAll(plain, "\n0.5,", "\n!half time\n0.5,"), Layout{Comment: "!"}, `commas between cells, names on line 1, numbers from line 2, comments after "!", as [layout] says`},
	} {
		t.Run(c.name, func(t *testing.T) {
			g := plainRig()
			g.Layout = c.given
			if err := g.checkLayout(); err != nil {
				t.Fatal(err)
			}
			exp := mustRead(t, c.text, g)
			if s := exp.Segments[0]; exp.Rows != 200 || !slices.Equal(s.U, p.u) || !slices.Equal(s.Y, p.y) || exp.Layout != c.says {
				t.Errorf("%d rows, %s, want %s", exp.Rows, exp.Layout, c.says)
			}
		})
	}
	for _, c := range []struct {
		name, text string
		given      Layout
		want       string
	}{
		{"no such line", plain, Layout{NamesLine: line(400)}, "log.csv: line 400: no such line in the head of the log, but [layout] names_line names it; correct the rig file"},
		{"names of another number", "Logger X\n" + plain, Layout{NamesLine: line(1)}, "log.csv: line 1: 1 cell, but the rows have 4 ([layout] names_line); correct [layout] in the rig file"},
		{"another delimiter", plain, Layout{Delimiter: ";"}, "log.csv: line 1: no row of two or more numbers below this line; correct [layout] in the rig file"},
		{"rows from where there are none", plain, Layout{NumbersLine: 300}, "log.csv: line 300: no such line in the head of the log, but [layout] numbers_line names it; correct the rig file"},
	} {
		g := plainRig()
		g.Layout = c.given
		if _, err := ReadLog(strings.NewReader(c.text), "log.csv", g); message(err) != c.want {
			t.Errorf("%s: got %v, want %s", c.name, err, c.want)
		}
	}
}

// Stamps in local time: without a zone an hour that the clock is set by shows; with it, or in UTC, the rows go on.
func TestReadLogDaylightSaving(t *testing.T) {
	p := newPlainLog(600)
	at := func(k int, from time.Time) time.Time { return from.Add(time.Duration(k-300) * 10 * time.Millisecond) }
	for _, c := range []struct {
		name   string
		change time.Time     // in UTC
		before time.Duration // the zone
		after  time.Duration
	}{
		{"spring", time.Date(2025, 3, 30, 1, 0, 0, 0, time.UTC), time.Hour, 2 * time.Hour},
		{"autumn", time.Date(2025, 10, 26, 1, 0, 0, 0, time.UTC), 2 * time.Hour, time.Hour},
	} {
		for format, local := range map[string]bool{"2006-01-02T15:04:05.000": true, "15:04:05.000": true, "2006-01-02T15:04:05.000-07:00": false} {
			var b strings.Builder
			b.WriteString("t,u,y,r\n")
			for k := range p.t {
				zone := c.before
				if k >= 300 {
					zone = c.after
				}
				stamp := at(k, c.change).In(time.FixedZone("", int(zone.Seconds()))).Format(format)
				fmt.Fprintf(&b, "%s,%s,%s,%s\n", stamp, text(p.u[k]), text(p.y[k]), text(p.r[k]))
			}
			exp := mustRead(t, b.String(), plainRig())
			if exp.Period != 0.01 || exp.Used != 600 {
				t.Errorf("%s, %s: period %v, %d rows used", c.name, format, exp.Period, exp.Used)
			}
			if !local {
				if len(exp.Flaws) > 0 || len(exp.Segments) != 1 {
					t.Errorf("%s, %s: %+v", c.name, format, exp.Flaws)
				}
				continue
			}
			want := Flaw{FlawHour, "t", 1, 302, "the stamps jump by one hour to the row, as local time does when daylight saving begins or ends", "a new segment starts there; no row is lost"}
			if got := findFlaw(t, exp, FlawHour); got != want || len(exp.Flaws) != 1 || len(exp.Segments) != 2 {
				t.Errorf("%s, %s: got %+v, want %+v of %q, %d segments", c.name, format, got, want, flawNames(exp), len(exp.Segments))
			}
		}
	}
	// An hour that is lost by a clock with a zone is a gap.
	var b strings.Builder
	b.WriteString("t,u,y,r\n")
	for k := range p.t {
		stamp := time.Date(2025, 3, 30, 1, k/300, 0, 10e6*k, time.UTC)
		if k >= 300 {
			stamp = time.Date(2025, 3, 30, 2, 0, 0, 10e6*k, time.UTC)
		}
		fmt.Fprintf(&b, "%s,%s,%s,%s\n", stamp.Format("2006-01-02T15:04:05.000Z"), text(p.u[k]), text(p.y[k]), text(p.r[k]))
	}
	if exp := mustRead(t, b.String(), plainRig()); !slices.Equal(flawNames(exp), []string{FlawGap}) {
		t.Errorf("an hour lost in UTC: %q", flawNames(exp))
	}
	// Stamps that count do not know daylight saving: an hour is an hour.
	q := newPlainLog(600)
	for k := 300; k < 600; k++ {
		q.t[k] += 3600
	}
	if exp := mustRead(t, q.csv(), plainRig()); !slices.Equal(flawNames(exp), []string{FlawGap}) {
		t.Errorf("stamps in s: %q", flawNames(exp))
	}
}

// The stamps of the input by a clock of its own: fast by 200 parts in a million and 1.5 s ahead.
func TestReadLogInputTime(t *testing.T) {
	p := newPlainLog(3000)
	write := func(output, input func(s float64) string) string {
		var b strings.Builder
		b.WriteString("t,u,y,r,tu\n")
		for k, s := range p.t {
			fmt.Fprintf(&b, "%s,%s,%s,%s,%s\n", output(s), text(p.u[k]), text(p.y[k]), text(p.r[k]), input(s))
		}
		return b.String()
	}
	g := plainRig()
	g.Log.InputTime = "tu"
	plain := func(s float64) string { return strconv.FormatFloat(s, 'f', 6, 64) }
	epoch := func(s float64) string { return strconv.FormatFloat(s+1764512345, 'f', 6, 64) }
	iso := func(s float64) string {
		return time.Unix(1764512345, 0).UTC().Add(time.Duration(math.Round(s * 1e9))).Format("2006-01-02T15:04:05.000000Z")
	}
	fast := func(f func(float64) string) func(float64) string {
		return func(s float64) string { return f(1.5 + s*1.0002) }
	}
	for name, log := range map[string]string{"s": write(plain, fast(plain)), "since 1970": write(epoch, fast(epoch)), "ISO 8601": write(iso, fast(iso))} {
		f := findFlaw(t, mustRead(t, log, g), FlawSkew)
		if want := "the stamps of the input lie 1.5 s after those of the output at first and run fast by 200 parts in a million, 0.6 rows over the log"; f.Detail != want || f.Column != "tu" {
			t.Errorf("%s: %+v, want %s", name, f, want)
		}
	}
	if exp := mustRead(t, write(plain, plain), g); len(exp.Flaws) > 0 {
		t.Errorf("one clock: %+v", exp.Flaws)
	}
}

// However the bytes arrive, and wherever a buffer ends, the experiment is the same.
func TestReadLogInPieces(t *testing.T) {
	p := newPlainLog(60_000) // 1.5 MB: more than the head and than the buffer
	whole := mustRead(t, p.csv(), plainRig())
	if !slices.Equal(whole.Segments[0].Y, p.y) {
		t.Fatal("the numbers differ")
	}
	for name, r := range map[string]io.Reader{
		"half": iotest.HalfReader(strings.NewReader(p.csv())), "data and error at once": iotest.DataErrReader(strings.NewReader(p.csv())),
	} {
		exp, err := ReadLog(r, "log.csv", plainRig())
		if err != nil {
			t.Fatal(err)
		}
		if exp.Rows != whole.Rows || exp.SHA256 != whole.SHA256 || !slices.Equal(exp.Segments[0].U, whole.Segments[0].U) {
			t.Errorf("%s: another experiment", name)
		}
	}
	_, err := ReadLog(io.MultiReader(strings.NewReader(p.csv()), iotest.ErrReader(os.ErrDeadlineExceeded)), "log.csv", plainRig())
	if !errors.Is(err, os.ErrDeadlineExceeded) {
		t.Errorf("a reader that breaks gives %v", err)
	}
}

func TestReadLogInputBefore(t *testing.T) {
	p := newPlainLog(200)
	g := plainRig()
	g.Log.Dither = "d"
	g.Log.InputRow = InputBefore
	text := strings.ReplaceAll(p.csv(), "t,u,y,r", "t,u,y,d")
	g.Log.Reference = ""
	exp := mustRead(t, text, g)
	s := exp.Segments[0]
	if !slices.Equal(s.U, p.u[1:]) || !slices.Equal(s.Y, p.y[:199]) || !slices.Equal(s.D, p.r[1:]) {
		t.Error(`input_row = "before": the input of the next row must act from this row's output on`)
	}
}

// spoil returns the log with one line changed; line counts from 1.
func spoil(text string, line int, f func(string) string) string {
	lines := strings.Split(text, "\n")
	lines[line-1] = f(lines[line-1])
	return strings.Join(lines, "\n")
}

func to(s string) func(string) string { return func(string) string { return s } }

func TestReadLogRefuses(t *testing.T) {
	plain := newPlainLog(100).csv()
	rows := strings.SplitN(plain, "\n", 2)[1]
	flat := newPlainLog(100)
	for k := range flat.u {
		flat.u[k] = 2
	}
	many := plain
	for line := 10; line < 30; line += 2 {
		many = spoil(many, line, to("0.08,oops,1,0"))
	}
	for _, c := range []struct{ name, text, want string }{
		{"empty", "", "log.csv: empty; give the log as the logger wrote it: a header, then one row per sample"},
		{"comments only", "# a\n\n# b\n", "log.csv: no row of numbers; there are only comments and blank lines"},
		{"header only", "t,u,y,r\n", "log.csv: line 1: no row of two or more numbers below this line; a log has a header and rows of numbers, separated by commas, semicolons, tabs or blanks"},
		{"prose", "Dear reader,\nthis is no log.\n", "log.csv: line 1: no row of two or more numbers below this line; a log has a header and rows of numbers, separated by commas, semicolons, tabs or blanks"},
		{"one row", "t,u,y,r\n0,1,2,3\n", "log.csv: line 2: too few rows: only this one; a fit needs 50 rows at the very least"},
		{"few rows", strings.Join(strings.Split(plain, "\n")[:30], "\n"), "log.csv: too few rows: 29; a fit needs 50 rows on end at the very least, and a few thousand to be good"},
		{"all equal", "t,u,y,r\n" + strings.Repeat("1,1,1,1\n", 100), `log.csv: column "u" (input) is 1 in every row; a fit needs an input and an output that move`},
		{"input flat", flat.csv(), `log.csv: column "u" (input) is 2 in every row; a fit needs an input and an output that move`},
		{"output empty", "t,u,y,r\n0,1,,0\n0.1,2,,0\n", `log.csv: column "y" (output) has no number in any row; name the right column in [log]`},
		{"text in a number column", spoil(plain, 12, to("0.1,abc,1,0")), `log.csv: line 12, column 2: "abc" is no number (column "u"); mend or remove these lines; an empty cell or NaN may stand for a missing value`},
		{"text in the first row", spoil(plain, 2, to("0,abc,1,0")), `log.csv: line 2, column 2: "abc" is no number (column "u"); mend or remove these lines; an empty cell or NaN may stand for a missing value`},
		{"text in many rows", many, `log.csv: line 10, column 2: "oops" is no number (column "u"); line 12, column 2: "oops" is no number (column "u"); line 14, column 2: "oops" is no number (column "u"); line 16, column 2: "oops" is no number (column "u"); and 6 more; mend or remove these lines; an empty cell or NaN may stand for a missing value`},
		{"text in the stamps", spoil(plain, 12, to("noon,1,1,0")), `log.csv: line 12, column 1: "noon" is no time stamp (column "t"); write s, or ISO 8601 like 2025-12-17T20:58:11.705`},
		{"number with two marks", spoil(plain, 12, to("0.1,1.2.3,1,0")), `log.csv: line 12, column 2: "1.2.3" is no number (column "u"); mend or remove these lines; an empty cell or NaN may stand for a missing value`},
		{"number with a unit", spoil(plain, 12, to("0.1,1.2A,1,0")), `log.csv: line 12, column 2: "1.2A" is no number (column "u"); mend or remove these lines; an empty cell or NaN may stand for a missing value`},
		{"number too large", spoil(plain, 12, to("0.1,1e999,1,0")), `log.csv: line 12, column 2: "1e999" is too large for a number (column "u"); mend or remove these lines; an empty cell or NaN may stand for a missing value`},
		{"hexadecimal", spoil(plain, 12, to("0.1,0x10,1,0")), `log.csv: line 12, column 2: "0x10" is no number (column "u"); mend or remove these lines; an empty cell or NaN may stand for a missing value`},
		{"row too short", spoil(plain, 12, to("0.1,1,1")), `log.csv: line 12: 3 cells where 4 belong; mend or remove these lines`},
		{"row too long", spoil(plain, 12, to("0.1,1,1,1,1")), `log.csv: line 12: 5 cells where 4 belong; mend or remove these lines`},
		{"control characters in a cell", spoil(plain, 12, to("0.1,\x1b[31m,1,0")), `log.csv: line 12, column 2: "\x1b[31m" is no number (column "u"); mend or remove these lines; an empty cell or NaN may stand for a missing value`},
		{"column missing", strings.Replace(plain, "t,u,y,r", "t,v,position,r", 1), `log.csv: line 1: [log] input "u" (rig.toml line 3): no such column; the columns are "t", "v", "position", "r"`},
		{"column misspelt", strings.Replace(plain, "t,u,y,r", "t,u1,position,r", 1), `log.csv: line 1: [log] input "u" (rig.toml line 3): no such column; did you mean "u1"? the columns are "t", "u1", "position", "r"`},
		{"column in another case", strings.Replace(plain, "t,u,y,r", "t,U,y,r", 1), `log.csv: line 1: [log] input "u" (rig.toml line 3): no such column; did you mean "U"? the columns are "t", "U", "y", "r"`},
		{"column twice", strings.Replace(plain, "t,u,y,r", "t,u,y,u", 1), `log.csv: line 1: [log] input "u" (rig.toml line 3): columns 2 and 4 both have that name; give each column a name of its own`},
		{"no header", rows, `log.csv: [log] time "t" (rig.toml line 1): no such column; the log has no header: its columns are called c1 to c4`},
		{"header too short", strings.Replace(plain, "t,u,y,r", "t,u,y", 1), `log.csv: line 1: 3 names in the header, 4 cells in the rows below; one name a column`},
		{"decimal commas between commas", "t,u,y\n" + strings.Repeat("0,1,0,2,0,3\n", 9), `log.csv: line 1: 3 names in the header, 6 cells in the rows below; decimal commas cannot be told from commas between cells: export with ';' between cells`},
		{"spreadsheet", "PK\x03\x04\x00\x00", `log.csv: a spreadsheet or an archive, no text; export the log as CSV`},
		{"binary", "t,u,y,r\n0,1,\x00,3\n", `log.csv: line 2: a zero byte, so no text; export the log as CSV, in UTF-8, or in UTF-16 with a byte order mark`},
		{"utf-16 without its mark", "t\x00,\x00u\x00", `log.csv: line 1: a zero byte, so no text; export the log as CSV, in UTF-8, or in UTF-16 with a byte order mark`},
		{"utf-16, cut within a sign", "\xff\xfet\x00,", `log.csv: line 1: no row of two or more numbers below this line; a log has a header and rows of numbers, separated by commas, semicolons, tabs or blanks`},
		{"line without end", "t,u,y,r\n" + strings.Repeat("1,", headSize), `log.csv: line 2: longer than 131072 bytes; a log has one row a line`},
	} {
		t.Run(c.name, func(t *testing.T) {
			_, err := ReadLog(strings.NewReader(c.text), "log.csv", plainRig())
			if got := message(err); got != c.want {
				t.Errorf("got  %s\nwant %s", got, c.want)
			}
			var e *ParseError
			if !errors.As(err, &e) {
				t.Errorf("%T is no *ParseError", err)
			}
		})
	}
}

func TestReadLogSentinels(t *testing.T) {
	_, err := ReadLog(strings.NewReader("a,b\n1,2\n2,3\n"), "log.csv", plainRig())
	if !errors.Is(err, ErrNoColumn) {
		t.Errorf("%v is not ErrNoColumn", err)
	}
	_, err = ReadLog(strings.NewReader("t,u,y,r\n1,2,3,4\n"), "log.csv", plainRig())
	if !errors.Is(err, ErrTooShort) {
		t.Errorf("%v is not ErrTooShort", err)
	}
	_, err = ReadLog(strings.NewReader(""), "log.csv", &Rig{})
	if got, want := message(err), `rig file: no [log]; it says which column plays which part: time = "t", input = "u", output = "y"`; got != want {
		t.Errorf("got %s, want %s", got, want)
	}
}

func TestOpen(t *testing.T) {
	files := fstest.MapFS{"logs/run7.csv": {Data: []byte("t,u,y\n")}}
	f, err := Open("logs/run7.csv", files.Open)
	if err != nil {
		t.Fatal(err)
	}
	f.Close()
	for _, c := range []struct{ name, path, want string }{
		{"file not found", "logs/run8.csv", "logs/run8.csv: file does not exist; check the name and the folder"},
		{"directory given", "logs", "logs: a directory; name the file in it"},
	} {
		_, err := Open(c.path, files.Open)
		if got := message(err); got != c.want {
			t.Errorf("%s: got %s, want %s", c.name, got, c.want)
		}
	}
	_, err = Open("x", func(string) (fs.File, error) { return nil, fs.ErrPermission })
	if got, want := message(err), "x: permission denied; you may not read this file"; got != want {
		t.Errorf("got %s, want %s", got, want)
	}
}
