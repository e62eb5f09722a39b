package data

import (
	"bytes"
	"fmt"
	"math/rand/v2"
	"strings"
	"testing"
)

// wideLog returns a log of five columns as a logger writes it, 41 bytes a row.
func wideLog(rows int) []byte {
	rnd := rand.New(rand.NewPCG(1, 1))
	var b bytes.Buffer
	b.WriteString("t,u,y,r,d\n")
	y := 0.0
	for k := range rows {
		u := rnd.NormFloat64()
		fmt.Fprintf(&b, "%.3f,%.6f,%.6f,%.2f,%.5f\n", float64(k)/1000, u, y, float64(k/1000%2), rnd.NormFloat64())
		y = 0.9*y + 0.1*u
	}
	return b.Bytes()
}

func BenchmarkReadLog(b *testing.B) {
	for _, rows := range []int{10_000, 200_000} {
		text := wideLog(rows)
		g := &Rig{Log: LogColumns{Time: "t", Input: "u", Output: "y", Reference: "r", Dither: "d"}}
		for name, log := range map[string][]byte{
			"comma": text, "blanks": bytes.ReplaceAll(text, []byte(","), []byte(" ")), "quoted": []byte(strings.ReplaceAll(strings.ReplaceAll(string(text), ",", `","`), "\n", "\"\n\"")),
		} {
			log := bytes.TrimSuffix(log, []byte{'"'})
			if name == "quoted" {
				log = append([]byte{'"'}, log...)
			}
			b.Run(fmt.Sprintf("%s/rows=%d", name, rows), func(b *testing.B) {
				b.SetBytes(int64(len(log)))
				b.ReportAllocs()
				for b.Loop() {
					if _, err := ReadLog(bytes.NewReader(log), "log.csv", g); err != nil {
						b.Fatal(err)
					}
				}
				b.ReportMetric(float64(rows)*float64(b.N)/b.Elapsed().Seconds(), "rows/s")
			})
		}
	}
}

// BenchmarkReadTable is the parsing alone, without time base, flaws and checksum.
func BenchmarkReadTable(b *testing.B) {
	const rows = 200_000
	text := wideLog(rows)
	b.SetBytes(int64(len(text)))
	b.ReportAllocs()
	for b.Loop() {
		_, err := readTable(b.Context(), bytes.NewReader(text), "log.csv", &Layout{}, func(*layout) ([]int, []int, error) { return []int{0, 1, 2, 3, 4}, []int{0}, nil })
		if err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(rows*float64(b.N)/b.Elapsed().Seconds(), "rows/s")
}

// BenchmarkLog is what reading does with columns: all of it, and the search for flaws alone.
func BenchmarkLog(b *testing.B) {
	const rows = 200_000
	g := &Rig{Log: LogColumns{Time: "t", Input: "u", Output: "y", Reference: "r", Dither: "d"}}
	l := &log{file: "log.csv", rig: g}
	var err error
	if l.table, err = readTable(b.Context(), bytes.NewReader(wideLog(rows)), "log.csv", &Layout{}, l.choose); err != nil {
		b.Fatal(err)
	}
	for name, do := range map[string]func() error{
		"experiment": func() error { l.flaws = nil; _, err := l.experiment(b.Context()); return err },
		"flaws":      func() error { l.flaws = nil; clear(l.dropped); return l.findFlaws(b.Context()) },
	} {
		b.Run(name, func(b *testing.B) {
			if _, err := l.experiment(b.Context()); err != nil {
				b.Fatal(err)
			}
			for b.Loop() {
				if err := do(); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(rows*float64(b.N)/b.Elapsed().Seconds(), "rows/s")
		})
	}
}
