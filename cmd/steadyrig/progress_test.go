package main

import (
	"bytes"
	"strings"
	"sync"
	"testing"
	"time"
)

// A bar is drawn from many goroutines, ends at 100 %, and is wiped off its line.
func TestProgress(t *testing.T) {
	var b bytes.Buffer
	p := &progress{w: &b, label: "design"}
	const total = 500
	var g sync.WaitGroup
	for k := range total {
		g.Go(func() { p.step(k+1, total) })
	}
	g.Wait()
	p.step(total, total)
	if last := b.String()[strings.LastIndex(b.String(), "\r")+1:]; !strings.Contains(last, "100 %") || strings.Contains(last, "= ") {
		t.Errorf("the bar ends with %q", last)
	}
	if strings.Contains(b.String(), "\n") {
		t.Error("the bar takes more than one line")
	}
	drawn := b.Len()
	p.wipe()
	if wiped := b.String()[drawn:]; strings.Trim(wiped, " \r") != "" || !strings.HasPrefix(wiped, "\r") || !strings.HasSuffix(wiped, "\r") {
		t.Errorf("wiping writes %q", wiped)
	}
	drawn = b.Len()
	p.wipe()
	if b.Len() != drawn {
		t.Error("a line that is not there is wiped again")
	}
	// A block that knows no end stays within the bar.
	for range 3 * barWidth {
		p.last = time.Time{}
		drawn = b.Len()
		p.step(0, 0)
		if line := b.String()[drawn:]; len(line) != len("\rdesign     [] 100 %")+barWidth || strings.Count(line, "====") != 1 {
			t.Fatalf("drawn: %q", line)
		}
	}
}

// Where nobody sees it move, nothing is drawn.
func TestProgressOffTerminal(t *testing.T) {
	var b bytes.Buffer
	a := newApp(nil, nil, &b, &b)
	p := a.progress("fit", false)
	p.step(1, 2)
	p.step(2, 2)
	p.step(1, 0) // total unknown
	p.wipe()
	if b.Len() != 0 {
		t.Errorf("drawn into a buffer: %q", b.String())
	}
}
