package data

import (
	"math"
	"math/rand/v2"
	"strconv"
	"strings"
	"testing"
)

func TestScanNumber(t *testing.T) {
	for _, c := range []struct {
		text string
		mark byte
		want float64
		n    int
	}{
		{"0", '.', 0, 1}, {"-0.0", '.', math.Copysign(0, -1), 4}, {"12.5,3", '.', 12.5, 4}, {"12,5;3", ',', 12.5, 4},
		{"+1e3", '.', 1000, 4}, {"1.E-3", '.', 0.001, 5}, {".5", '.', 0.5, 2}, {"5.", '.', 5, 2}, {"1.0000000e+000", '.', 1, 14},
		{"1.5D+02", '.', 150, 7}, {"1e", '.', 1, 1}, {"1e+", '.', 1, 1}, {"1.2.3", '.', 1.2, 3}, {"", '.', 0, 0}, {"-", '.', 0, 0},
		{".", '.', 0, 0}, {"e5", '.', 0, 0}, {"x", '.', 0, 0}, {"1e999", '.', math.Inf(1), 5}, {"-1e999", '.', math.Inf(-1), 6},
		{"1e-999", '.', 0, 6}, {"1e99999999999999999999", '.', math.Inf(1), 22},
		{"0.30000000000000004", '.', 0.30000000000000004, 19}, {"9007199254740993", '.', 9007199254740992, 16},
		{"123456789012345678901234567890", '.', 123456789012345678901234567890, 30},
		{"0.000000000000000000000000000000012345", '.', 1.2345e-32, 38},
		{"1," + strings.Repeat("0", 80) + "1", ',', 1, 83},
	} {
		x, n := scanNumber([]byte(c.text), c.mark)
		if n != c.n || math.Float64bits(x) != math.Float64bits(c.want) {
			t.Errorf("scanNumber(%q, %c) = %v, %d; want %v, %d", c.text, c.mark, x, n, c.want, c.n)
		}
	}
}

// Every text must give the same bits as the standard library's parser.
func TestScanNumberIsExact(t *testing.T) {
	rnd := rand.New(rand.NewPCG(1, 1))
	check := func(text string) {
		want, _ := strconv.ParseFloat(text, 64)
		if x, n := scanNumber([]byte(text), '.'); n != len(text) || x != want {
			t.Fatalf("scanNumber(%q) = %v, %d; strconv says %v", text, x, n, want)
		}
	}
	for range 50_000 {
		x := math.Float64frombits(rnd.Uint64())
		if math.IsNaN(x) || math.IsInf(x, 0) {
			continue
		}
		check(strconv.FormatFloat(x, 'g', 1+rnd.IntN(20), 64))
		y := rnd.NormFloat64() * math.Pow(10, float64(rnd.IntN(12)-6))
		check(strconv.FormatFloat(y, 'f', rnd.IntN(20), 64))
		check(strconv.FormatFloat(y, 'e', -1, 64))
	}
}

func BenchmarkScanNumber(b *testing.B) {
	for _, text := range []string{"3", "-0.0415", "12.345678", "1.2345678e-03", "0.30000000000000004"} {
		b.Run(text, func(b *testing.B) {
			b.SetBytes(int64(len(text)))
			cell := []byte(text)
			for b.Loop() {
				scanNumber(cell, '.')
			}
		})
	}
}
