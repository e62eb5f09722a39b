package data

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
)

func TestHeader(t *testing.T) {
	rows := "0;1,5;0,2;0;AUTO\n10;1,6;0,3;0;AUTO\n20;1,4;;0;AUTO\n30;1,5;0,1;1;AUTO\n"
	h, err := Header(strings.NewReader("\xef\xbb\xbfTime;Coil current;Position;r;mode\nms;A;mm;mm;-\n"+rows), "puck.csv")
	if err != nil {
		t.Fatal(err)
	}
	if h.Time != "Time" || h.Input != "Coil current" || h.Output != "Position" || h.Reference != "r" || h.Dither != "" {
		t.Errorf("guessed time %q, input %q, output %q, reference %q, dither %q", h.Time, h.Input, h.Output, h.Reference, h.Dither)
	}
	if h.Period != 0.01 || h.Rows != 4 {
		t.Errorf("period %v, rows %d", h.Period, h.Rows)
	}
	if want := "semicolons between cells, decimal comma, names on line 1, units on line 2, numbers from line 3"; h.Layout != want {
		t.Errorf("layout %q, want %q", h.Layout, want)
	}
	if c := h.Columns[1]; c.Unit != "A" || c.Kind != KindNumber || c.Min != 1.4 || c.Max != 1.6 || c.Mean != 1.5 || c.Why != "a word in its name" {
		t.Errorf("column 2: %+v", c)
	}
	if c := h.Columns[2]; c.Missing != 1 || c.Max != 0.3 {
		t.Errorf("column 3: %+v", c)
	}
	if c := h.Columns[4]; c.Kind != KindText || c.Part != "" {
		t.Errorf("column 5: %+v", c)
	}
}

func TestHeaderWithoutNames(t *testing.T) {
	var b strings.Builder
	for i, u := range []string{"1", "2", "1", "3", "2", "1", "4", "1", "2", "5", "1", "2"} {
		b.WriteString("2025-12-17T20:58:1" + string(rune('0'+i/4)) + "." + []string{"00", "25", "50", "75"}[i%4] + "," + u + "," + u + "\n")
	}
	h, err := Header(strings.NewReader(b.String()), "x.csv")
	if err != nil {
		t.Fatal(err)
	}
	if h.Time != "c1" || h.Input != "c2" || h.Output != "c3" || h.Period != 0.25 {
		t.Errorf("guessed time %q, input %q, output %q, period %v", h.Time, h.Input, h.Output, h.Period)
	}
}

// Numbers that rise from row to row are stamps.
func TestHeaderRisingColumn(t *testing.T) {
	p := newPlainLog(100)
	var b strings.Builder
	for k := range p.t {
		b.WriteString(text(p.u[k]) + " " + text(p.y[k]) + " " + text(p.t[k]) + "\n")
	}
	h, err := Header(strings.NewReader(b.String()), "x.dat")
	if err != nil {
		t.Fatal(err)
	}
	if h.Time != "c3" || h.Input != "c1" || h.Output != "c2" || h.Period != 0.01 {
		t.Errorf("guessed time %q, input %q, output %q, period %v", h.Time, h.Input, h.Output, h.Period)
	}
}

func TestHeaderMeasured(t *testing.T) {
	f, err := os.Open(filepath.Join(datasets, "maglev_levitador/dataset_multiescalon_20251217_210203.txt"))
	if err != nil {
		t.Skipf("measured log is not here: %v", err)
	}
	defer f.Close()
	h, err := Header(f, "multiescalon.txt")
	if err != nil {
		t.Fatal(err)
	}
	if h.Time != "t" || h.Input != "u" || h.Output != "y" || h.Reference != "yd" || h.Period != 0.01 {
		t.Errorf("guessed time %q, input %q, output %q, reference %q, period %v", h.Time, h.Input, h.Output, h.Reference, h.Period)
	}
}
