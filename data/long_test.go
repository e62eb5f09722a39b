package data

import (
	"bytes"
	"context"
	"errors"
	"io"
	"runtime"
	"testing"
)

// A row more of a log whose size is known costs the 40 bytes of its numbers, some of which are for guessing their count,
// a mark of what speaks against it, and the steps of its stamps, for a while; no text is kept. Slope between two lengths.
func TestBytesPerRow(t *testing.T) {
	if testing.Short() {
		t.Skip("takes a second")
	}
	const few, many = 100_000, 300_000
	text := wideLog(many)
	g := &Rig{Log: LogColumns{Time: "t", Input: "u", Output: "y", Reference: "r", Dither: "d"}}
	read := func(text []byte) float64 {
		var before, after runtime.MemStats
		runtime.ReadMemStats(&before)
		if _, err := ReadLog(bytes.NewReader(text), "log.csv", g); err != nil {
			t.Fatal(err)
		}
		runtime.ReadMemStats(&after)
		return float64(after.TotalAlloc - before.TotalAlloc)
	}
	end := len("t,u,y,r,d\n")
	for range few {
		end += 1 + bytes.IndexByte(text[end:], '\n')
	}
	const most = 56.0 // measured: 54.3
	if got := (read(text) - read(text[:end])) / (many - few); !(got <= most) {
		t.Errorf("%.3g bytes a row, want %.3g at most", got, most)
	}
}

// A cancelReader cancels after so many bytes.
type cancelReader struct {
	io.Reader
	left   int
	cancel func()
	after  int
}

func (r *cancelReader) Read(p []byte) (int, error) {
	n, err := r.Reader.Read(p)
	if r.left < 0 {
		r.after += n
	} else if r.left -= n; r.left < 0 {
		r.cancel()
	}
	return n, err
}

// Reading ends with its context, in the middle of the log and among the flaws.
func TestReadingEndsWithItsContext(t *testing.T) {
	text := wideLog(50_000)
	g := &Rig{Log: LogColumns{Time: "t", Input: "u", Output: "y"}}
	for _, at := range []int{0, 1_000_000, len(text) - 1} {
		ctx, cancel := context.WithCancel(t.Context())
		r := &cancelReader{Reader: bytes.NewReader(text), left: at, cancel: cancel}
		_, err := ReadLogContext(ctx, r, "log.csv", g)
		if !errors.Is(err, context.Canceled) {
			t.Errorf("cancelled after %d bytes: %v", at, err)
		}
		if r.after > 5*headSize {
			t.Errorf("cancelled after %d bytes: %d more were read", at, r.after)
		}
	}
}
