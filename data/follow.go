package data

import (
	"bytes"
	"fmt"
	"io"
	"math"
	"slices"
)

// Row is one row of a log that is read as it comes.
type Row struct {
	Line int     // 1-based line in the file
	Time float64 // stamp, s; the row's number from 0 times the period where there are no stamps
	// U acts from the moment of Y on: already taken from the next row where the rig file says input_row = "before".
	U, Y, R, D float64 // R and D are NaN where they are not logged
	Starts     bool    // it does not come one period after the row before, or is the first
	Missing    bool    // U or Y is no number: the row can only be counted
}

// Rows reads a log row by row, in memory that does not grow with it: the same layouts and numbers as ReadLog, but
// without what takes the whole log.
type Rows struct {
	Columns []string // names as in the header, or c1, c2, …
	Layout  string   // how the log is written, in words
	Clipped int      // rows so far whose input was past [limits] input, taken for the limit
	Bad     int      // lines so far that are no rows of numbers, counted as missing ones

	*reader
	l       *log // the parts of the columns
	src     *source
	live    bool
	period  float64
	buf     []byte
	at      int // of the first byte of buf that is not read
	number  int // line there
	ended   bool
	count   int // rows taken from the file
	coarse  float64
	queue   []Row
	last    Row // handed out last, before its input was moved
	started bool
}

// liveLines is how many lines a log that is being written has to have before its layout is recognised; where they show
// no numbers, twice as many, and so on. startRows is how many rows its period is measured on.
const (
	liveLines = 60
	startRows = 100
)

// ReadRows begins to read a log, plain or packed by gzip, whose rows should come every period seconds. live: it may be
// written at the same time, so that no more is waited for than needed, and a last line without its end is not a row.
// What is wrong with log or rig file comes back as a *ParseError, other errors as r gives them.
func ReadRows(r io.Reader, file string, rig *Rig, period float64, live bool) (*Rows, error) {
	if err := rig.NeedLog(); err != nil {
		return nil, err
	}
	if rig.Log.ClockSkew != 0 || rig.Log.InputTime != "" {
		return nil, rig.fault("log", "take clock_skew and input_time out, or audit the log as a whole", "rows of two clocks are not put together as they come")
	}
	src, err := newSource(r)
	if err != nil {
		return nil, readingError(file, err)
	}
	f := &Rows{l: &log{file: file, rig: rig}, src: src, live: live, period: period, number: 1}
	lay, err := f.head(file, &rig.Layout)
	if err != nil {
		return nil, err
	}
	fields, stamps, err := f.l.choose(lay)
	if err != nil {
		return nil, inFile(file, err)
	}
	f.reader = &reader{table: table{layout: *lay}, file: file, want: fields, values: make([]float64, len(fields)),
		part: make([]int, len(lay.names)), clock: make([]*clock, len(lay.names))}
	f.clocks = make([]clock, len(stamps))
	for i := range f.part {
		f.part[i] = -1
	}
	for i, k := range fields {
		f.part[k] = i
		f.reader.last = max(f.reader.last, k)
	}
	for i, k := range stamps {
		f.clock[fields[k]] = &f.clocks[i]
	}
	f.Columns, f.Layout = lay.names, src.how+lay.describe()
	return f, f.begin()
}

// head reads as much as it takes to recognise the layout.
func (f *Rows) head(file string, given *Layout) (*layout, error) {
	if !f.live {
		head, whole, err := readHead(f.src, file)
		if err != nil {
			return nil, err
		}
		f.buf, f.ended = head, whole
		l, err := recognise(head, whole, given)
		return l, inFile(file, err)
	}
	f.buf = make([]byte, 0, 2*headSize)
	for want := liveLines; ; want *= 2 {
		for !f.ended && len(f.buf) < headSize && bytes.Count(f.buf, []byte{'\n'}) < want {
			n, err := f.src.Read(f.buf[len(f.buf):cap(f.buf)])
			f.buf = f.buf[:len(f.buf)+n]
			if err == io.EOF {
				f.ended = true
			} else if err != nil {
				return nil, readingError(file, err)
			}
		}
		f.buf = bytes.TrimPrefix(f.buf, []byte("\xef\xbb\xbf"))
		l, err := recognise(f.buf, f.ended, given)
		if err == nil || f.ended || len(f.buf) >= headSize {
			return l, inFile(file, err)
		}
	}
}

// line returns the next line, without its end. open: the log ends within it.
func (f *Rows) line() (text []byte, open bool, err error) {
	for {
		rest := f.buf[f.at:]
		if i := bytes.IndexByte(rest, f.lineEnd); i >= 0 {
			f.at += i + 1
			f.number++
			return rest[:i], false, nil
		}
		if f.ended {
			f.at = len(f.buf)
			if len(rest) == 0 || f.live {
				return nil, false, io.EOF
			}
			return rest, true, nil
		}
		if len(rest) > maxLine {
			return nil, false, inFile(f.file, tooLong(f.number))
		}
		if cap(f.buf) < 2*headSize {
			f.buf = slices.Grow(f.buf, 2*headSize)
		}
		f.buf, f.at = f.buf[:copy(f.buf[:cap(f.buf)], rest)], 0
		n, err := f.src.Read(f.buf[len(f.buf):cap(f.buf)])
		f.buf = f.buf[:len(f.buf)+n]
		if err == io.EOF {
			f.ended = true
		} else if err != nil {
			return nil, false, readingError(f.file, err)
		}
	}
}

// read puts the next row of the file into the queue.
func (f *Rows) read() error {
	again := false
	for {
		number := f.number
		text, open, err := f.line()
		if err != nil {
			return err
		}
		if number < f.from {
			if number == f.layout.header {
				f.header = bytes.Clone(text)
			}
			continue
		}
		if n := len(text); n > 0 && text[n-1] == '\r' {
			text = text[:n-1]
		}
		row := Row{Line: number, R: math.NaN(), D: math.NaN(), Starts: again}
		f.rows = f.count // where slow looks for a header that comes again
		bad := f.faults.count
		if !f.quick(text) && !f.slow(text, number, open) && f.faults.count == bad {
			again = again || len(f.again) > 0 // the header: two logs put together
			f.again = f.again[:0]
			continue
		}
		row.Missing = f.faults.count > bad
		if row.Missing {
			f.Bad++
			for i := range f.values {
				f.values[i] = math.NaN()
			}
		}
		f.fill(&row)
		f.count++
		f.queue = append(f.queue, row)
		return nil
	}
}

// fill takes the values of the line just read.
func (f *Rows) fill(row *Row) {
	v := f.values
	row.U, row.Y, row.Time = v[f.l.u], v[f.l.y], float64(f.count)*f.period
	if f.l.time >= 0 {
		row.Time = v[f.l.time]
	}
	if f.l.r >= 0 {
		row.R = v[f.l.r]
	}
	if f.l.d >= 0 {
		row.D = v[f.l.d]
	}
	if lim := f.l.rig.Limits.Input; lim != nil {
		if slack := limitSlack * (lim[1] - lim[0]); row.U > lim[1]+slack || row.U < lim[0]-slack {
			f.Clipped++
			row.U = min(max(row.U, lim[0]), lim[1])
		}
	}
	row.Missing = row.Missing || math.IsNaN(row.U) || math.IsNaN(row.Y) || math.IsNaN(row.Time)
}

// begin reads the first rows and measures their period.
func (f *Rows) begin() error {
	for len(f.queue) < startRows {
		if err := f.read(); err == io.EOF {
			break
		} else if err != nil {
			return err
		}
	}
	if n := len(f.queue); 2*f.Bad > n || n == 0 {
		if err := f.faults.err(); err != nil {
			return err
		}
		return &ParseError{File: f.file, Err: fmt.Errorf("%w: none", ErrTooShort), Hint: "the log has a header and nothing else"}
	}
	if f.l.time < 0 || len(f.queue) < 3 {
		return nil
	}
	var t []float64
	for _, r := range f.queue {
		if !math.IsNaN(r.Time) {
			t = append(t, r.Time)
		}
	}
	forward, zero, _ := countSteps(t)
	if forward == 0 {
		return &ParseError{File: f.file, Line: f.queue[0].Line, Err: fmt.Errorf("column %s (time) does not run", quote(f.l.columnOf(f.names))),
			Hint: "name the column of the stamps, or give [log] sample_period without time"}
	}
	step := medianStep(t)
	if float64(zero) > coarseShare*float64(len(t)) {
		f.coarse = step
		step = (t[len(t)-1] - t[0]) / float64(len(t)-1)
		if math.Abs(step-f.period) <= 2*f.coarse/float64(len(t)-1) {
			return nil
		}
	}
	var sum float64
	regular := 0
	for i := 1; i < len(t); i++ {
		if d := t[i] - t[i-1]; math.Abs(d-step) <= regularStep*step {
			sum, regular = sum+d, regular+1
		}
	}
	if regular > 0 {
		step = sum / float64(regular)
	}
	if math.Abs(step-f.period) > f.tolerance(t)*f.period {
		return &ParseError{File: f.file, Line: f.queue[0].Line, Err: fmt.Errorf("rows come every %s s, those of the model every %s s", number(step), number(f.period)),
			Hint: "watch a log of the period that the model was fitted at, or fit one of this period"}
	}
	return nil
}

// tolerance is how far the mean of the steps in t may be off, relative to the period.
func (f *Rows) tolerance(t []float64) float64 { return periodTolerance + 2*regularStep/float64(len(t)) }

func (l *log) columnOf(names []string) string { return names[l.fields[l.time]] }

// step says whether the queue's first row comes one period after the last one, and drops it where it repeats that.
func (f *Rows) step() (starts, repeats bool, err error) {
	if !f.started || f.queue[0].Starts {
		return true, false, nil
	}
	d := f.queue[0].Time - f.last.Time
	switch {
	case f.l.time < 0, math.IsNaN(d), math.Abs(d-f.period) <= regularStep*f.period:
		return false, false, nil
	case f.coarse > 0:
		return d < 0 || d > 1.5*max(f.coarse, f.period), false, nil
	case d == 0 && f.queue[0].U == f.last.U && f.queue[0].Y == f.last.Y:
		return false, true, nil
	}
	// A late stamp, or a few rows stamped together, shows by those that follow.
	for len(f.queue) < longestBurst {
		if err := f.read(); err == io.EOF {
			break
		} else if err != nil {
			return false, false, err
		}
	}
	t := []float64{f.last.Time}
	for _, r := range f.queue[:min(longestBurst, len(f.queue))] {
		t = append(t, r.Time)
	}
	if n := burst(t, f.period); n > 0 {
		for k := range n - 1 { // as if stamped in time
			f.queue[k].Time = f.last.Time + float64(k+1)*f.period
		}
		return false, false, nil
	}
	return true, false, nil
}

// Next returns the next row. The error is io.EOF at the end of the log.
func (f *Rows) Next() (Row, error) {
	for {
		if len(f.queue) == 0 {
			if err := f.read(); err != nil {
				return Row{}, err
			}
		}
		starts, repeats, err := f.step()
		if err != nil {
			return Row{}, err
		}
		row := f.queue[0]
		f.queue = f.queue[:copy(f.queue, f.queue[1:])]
		if repeats {
			continue
		}
		row.Starts = starts
		before, had := f.last, f.started
		f.last, f.started = row, true
		if f.l.rig.Log.InputRow != InputBefore {
			return row, nil
		}
		// The input of this row acted from the output of the one before on.
		if had && !row.Starts {
			before.U, before.D = row.U, row.D
			before.Missing = before.Missing || row.Missing
			return before, nil
		}
		if had {
			before.Missing = true // its input is in a row that was lost
			return before, nil
		}
	}
}

// Fault says what was wrong with the lines that are no rows, the first few of them; nil where none was.
func (f *Rows) Fault() error { return f.faults.err() }

// Checksum returns the SHA-256 in hex of all bytes, those not yet read among them.
func (f *Rows) Checksum() (string, error) {
	sum, err := f.src.checksum()
	if err != nil {
		return "", readingError(f.file, err)
	}
	return sum, nil
}
