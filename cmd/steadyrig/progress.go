package main

import (
	"fmt"
	"io"
	"strings"
	"sync"
	"time"
)

// progress draws one line about a long step. It is drawn on a terminal only, and wiped at the end.
type progress struct {
	mu    sync.Mutex
	w     io.Writer // nil: draws nothing
	label string
	last  time.Time
	drawn bool
	moves int // of the block, where the total is unknown
}

// progress returns a line on standard error, which stays silent where nobody would see it move.
func (a *app) progress(label string, quiet bool) *progress {
	p := &progress{label: label}
	if !quiet && onTerminal(a.stderr) {
		p.w = a.stderr
	}
	return p
}

const barWidth = 30

// step is called from any goroutine with what is done so far. Where the total is unknown, 0, a block runs to and fro.
func (p *progress) step(done, total int) {
	if p.w == nil {
		return
	}
	p.mu.Lock()
	defer p.mu.Unlock()
	if time.Since(p.last) < 50*time.Millisecond && (done < total || total <= 0) {
		return
	}
	p.last, p.drawn = time.Now(), true
	if total <= 0 {
		const block = 4
		at := p.moves % (2 * (barWidth - block))
		at = min(at, 2*(barWidth-block)-at)
		p.moves++
		fmt.Fprintf(p.w, "\r%-10s [%s%s%s]      ", p.label, strings.Repeat(" ", at), strings.Repeat("=", block), strings.Repeat(" ", barWidth-block-at))
		return
	}
	full := min(barWidth, barWidth*done/total)
	fmt.Fprintf(p.w, "\r%-10s [%s%s] %3d %%", p.label, strings.Repeat("=", full), strings.Repeat(" ", barWidth-full), 100*done/total)
}

// wipe takes the line away.
func (p *progress) wipe() {
	p.mu.Lock()
	defer p.mu.Unlock()
	if p.drawn {
		fmt.Fprintf(p.w, "\r%s\r", strings.Repeat(" ", 12+barWidth+8))
		p.drawn = false
	}
}
