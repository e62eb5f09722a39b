package data_test

import (
	"bytes"
	"compress/gzip"
	"errors"
	"fmt"
	"io"
	"math"
	"slices"
	"strings"
	"testing"
	"testing/iotest"
	"unicode/utf16"

	"steadyrig/data"
)

const followRig = "[log]\ntime = \"t\"\ninput = \"u\"\noutput = \"y\"\nreference = \"r\"\n"

func followedRig(t *testing.T, extra string) *data.Rig {
	t.Helper()
	rig, err := data.ReadRig(strings.NewReader(followRig+extra), "rig.toml")
	if err != nil {
		t.Fatal(err)
	}
	return rig
}

// plainLog is a log of n rows, 10 ms apart.
func plainLog(n int) string {
	var b strings.Builder
	b.WriteString("t,u,y,r\n")
	for k := range n {
		fmt.Fprintf(&b, "%.2f,%.4f,%.4f,%d\n", float64(k)/100, math.Sin(float64(k*k)), 5+math.Cos(float64(3*k)), k/50)
	}
	return b.String()
}

func allRows(r io.Reader, rig *data.Rig, live bool) ([]data.Row, *data.Rows, error) {
	rows, err := data.ReadRows(r, "log.csv", rig, 0.01, live)
	if err != nil {
		return nil, nil, err
	}
	var out []data.Row
	for {
		row, err := rows.Next()
		if err == io.EOF {
			return out, rows, nil
		}
		if err != nil {
			return out, rows, err
		}
		out = append(out, row)
	}
}

// Row by row a log reads as it does as a whole, however it is written and however it arrives.
func TestRowsAreThoseOfTheLog(t *testing.T) {
	plain := plainLog(400)
	lines := strings.SplitAfter(plain, "\n")
	wide := []byte{0xff, 0xfe}
	for _, v := range utf16.Encode([]rune(plain)) {
		wide = append(wide, byte(v), byte(v>>8))
	}
	var packed bytes.Buffer
	z := gzip.NewWriter(&packed)
	io.WriteString(z, plain)
	z.Close()
	late := strings.NewReplacer("\n1.50,", "\n1.52,", "\n1.51,", "\n1.52,").Replace(plain)
	back := strings.NewReplacer("\n1.50,", "\n1.53,", "\n1.51,", "\n1.53,").Replace(plain)
	for name, log := range map[string]string{
		"plain": plain, "no end of line": strings.TrimSuffix(plain, "\n"), "CRLF": strings.ReplaceAll(plain, "\n", "\r\n"),
		"decimal comma":  strings.NewReplacer(",", ";", ".", ",").Replace(plain),
		"comments":       "# from a logger\n" + strings.Join(lines[:200], "") + "# half way\n\n" + strings.Join(lines[200:], ""),
		"gap":            strings.Join(lines[:151], "") + strings.Join(lines[160:], ""),
		"repeated row":   strings.Join(lines[:151], "") + lines[150] + strings.Join(lines[151:], ""),
		"missing output": strings.Replace(plain, lines[211], strings.Join([]string{"2.10", "0.5", "", "4\n"}, ","), 1),
		"late stamps":    late, "stamps back": back, "UTF-16": string(wide), "gzip": packed.String(), "header again": plain + "t,u,y,r\n" + strings.Join(lines[1:], ""),
	} {
		for _, extra := range []string{"", "input_row = \"before\"\n", "\n[limits]\ninput = [-0.9, 0.8]\n"} {
			rig := followedRig(t, extra)
			exp, err := data.ReadLog(strings.NewReader(log), "log.csv", rig)
			if err != nil {
				t.Fatalf("%s: %v", name, err)
			}
			for how, read := range map[string]func() ([]data.Row, *data.Rows, error){
				"as a whole": func() ([]data.Row, *data.Rows, error) { return allRows(strings.NewReader(log), rig, false) },
				"byte by byte": func() ([]data.Row, *data.Rows, error) {
					return allRows(iotest.OneByteReader(strings.NewReader(log)), rig, name != "no end of line")
				},
			} {
				rows, all, err := read()
				if err != nil {
					t.Fatalf("%s %s: %v", name, how, err)
				}
				var segments [][]data.Row
				broken := true
				for _, r := range rows {
					if broken = broken || r.Starts; !r.Missing {
						if broken {
							segments = append(segments, nil)
						}
						segments[len(segments)-1] = append(segments[len(segments)-1], r)
					}
					broken = r.Missing
				}
				segments = slices.DeleteFunc(segments, func(s []data.Row) bool { return len(s) < data.MinSegment })
				if len(segments) != len(exp.Segments) {
					t.Errorf("%s%s %s: %d stretches, %d segments", name, extra, how, len(segments), len(exp.Segments))
					continue
				}
				for i, s := range exp.Segments {
					if len(s.Y) != len(segments[i]) {
						t.Errorf("%s%s %s: stretch %d has %d rows, the segment %d", name, extra, how, i, len(segments[i]), len(s.Y))
						continue
					}
					for k, r := range segments[i] {
						if r.U != s.U[k] || r.Y != s.Y[k] || r.R != s.R[k] || r.Line != s.LineAt(k) || !math.IsNaN(r.D) {
							t.Fatalf("%s%s %s: row %d of stretch %d is %+v, in the segment %g %g %g on line %d", name, extra, how, k, i, r, s.U[k], s.Y[k], s.R[k], s.LineAt(k))
						}
					}
				}
				if sum, err := all.Checksum(); err != nil || sum != exp.SHA256 {
					t.Errorf("%s %s: checksum %s, %v", name, how, sum, err)
				}
			}
		}
	}
}

// A line that is being written is no row before it ends; a log that is not says the same as ReadLog.
func TestHalfWrittenLineWaits(t *testing.T) {
	log := plainLog(200) + "2.00,0.1,5."
	rig := followedRig(t, "")
	if rows, _, err := allRows(strings.NewReader(log), rig, true); err != nil || len(rows) != 200 {
		t.Errorf("%d rows, %v", len(rows), err)
	}
	r, w := io.Pipe()
	go func() {
		io.WriteString(w, log)
		io.WriteString(w, "25,4\n2.0")
		w.Close()
	}()
	rows, _, err := allRows(r, rig, true)
	if err != nil || len(rows) != 201 || rows[200].Y != 5.25 || rows[200].R != 4 {
		t.Errorf("%d rows, %v", len(rows), err)
	}
}

func TestBadLinesAreMissingRows(t *testing.T) {
	log := strings.Replace(plainLog(300), "\n1.50,", "\nnonsense,", 1) + "3.00,1\n" + strings.Repeat("x", 10) + "\n"
	rows, all, err := allRows(strings.NewReader(log), followedRig(t, ""), false)
	if err != nil {
		t.Fatal(err)
	}
	if all.Bad != 3 || len(rows) != 302 || !rows[150].Missing || rows[151].Missing {
		t.Errorf("%d bad lines of %d rows, row 150 %+v", all.Bad, len(rows), rows[150])
	}
	if err := all.Fault(); err == nil || !strings.Contains(err.Error(), "line 152, column 1") {
		t.Errorf("fault %v", err)
	}
}

func TestRowsOfWrongLogs(t *testing.T) {
	torn := errors.New("torn off")
	for _, c := range []struct{ name, log, extra, want string }{
		{"other period", strings.NewReplacer("\n0.", "\n1").Replace(plainLog(90)), "", "those of the model every 0.01 s"},
		{"empty", "", "", "empty"},
		{"header only", "t,u,y,r\n", "", "no row"},
		{"no column", strings.Replace(plainLog(90), "y", "z", 1), "", "no such column"},
		{"two clocks", plainLog(90), "clock_skew = 1e-5\n", "two clocks"},
		{"time rests", strings.Replace(strings.Repeat("1,2,3,4\n1,3,3,4\n", 80), "1,2", "t,u,y,r\n1,2", 1), "", "does not run"},
	} {
		_, _, err := allRows(strings.NewReader(c.log), followedRig(t, c.extra), false)
		var parse *data.ParseError
		if !errors.As(err, &parse) || !strings.Contains(err.Error(), c.want) || strings.Contains(err.Error(), "\n") {
			t.Errorf("%s: %v", c.name, err)
		}
	}
	rows, _, err := allRows(io.MultiReader(strings.NewReader(plainLog(20000)), iotest.ErrReader(torn)), followedRig(t, ""), false)
	if !errors.Is(err, torn) || len(rows) == 0 {
		t.Errorf("%d rows, %v", len(rows), err)
	}
}

// Rows keep nothing: what is allocated for a long log is what is for a short one, but for the buffer at first.
func TestRowsDoNotGrow(t *testing.T) {
	rig := followedRig(t, "")
	allocs := func(n int) float64 {
		log := plainLog(n)
		return testing.AllocsPerRun(1, func() {
			rows, err := data.ReadRows(strings.NewReader(log), "log.csv", rig, 0.01, false)
			for err == nil {
				_, err = rows.Next()
			}
		})
	}
	if short, long := allocs(20000), allocs(100000); long > short+50 {
		t.Errorf("%.0f allocations for 20 000 rows, %.0f for 100 000", short, long)
	}
}
