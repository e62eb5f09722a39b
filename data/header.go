package data

import (
	"io"
	"math"
	"strconv"
	"strings"

	"github.com/go-gota/gota/dataframe"
	"github.com/go-gota/gota/series"
)

// A LogHeader is what the first some hundred rows of a log tell, without a rig file: for the first draft of one.
type LogHeader struct {
	File    string
	Layout  string // how the log is written, in words
	Columns []LogColumn
	Rows    int     // rows looked at
	Period  float64 // s, from the column guessed to hold stamps; 0: unknown

	// Guesses: the names of the columns that play each part; empty where none looks like it.
	Time, Input, Output, Reference, Dither string
}

// A LogColumn describes one column of the rows looked at.
type LogColumn struct {
	Name, Unit string
	Kind       string // KindNumber, KindStamp or KindText
	Part       string // "time", "input", "output", "reference", "dither", or empty
	Why        string // what the guess of Part rests on; empty without a guess
	Missing    int    // cells without a number

	Min, Max, Mean, SD float64 // of a column of numbers, else NaN

	rising float64 // share of its steps that rise
}

// Kinds of columns.
const (
	KindNumber = "number"
	KindStamp  = "stamp"
	KindText   = "text"
)

// Header looks at the first rows of a log, plain or packed by gzip, and guesses which column plays which part.
func Header(r io.Reader, file string) (*LogHeader, error) {
	src, err := newSource(r)
	if err != nil {
		return nil, readingError(file, err)
	}
	head, whole, err := readHead(src, file)
	if err != nil {
		return nil, err
	}
	l, err := recognise(head, whole, &Layout{})
	if err != nil {
		return nil, inFile(file, err)
	}
	h := &LogHeader{File: file, Layout: src.how + l.describe()}
	h.describe(l, l.frame(l.headLines(head, whole)))
	h.guess()
	h.measure(l, l.headLines(head, whole))
	return h, nil
}

// frame makes a table of the rows in the head, its column types inferred.
func (l *layout) frame(lines []headLine) dataframe.DataFrame {
	names := make([]string, len(l.names))
	for i := range names {
		names[i] = strconv.Itoa(i) // unlike the log's own, certain to differ
	}
	records := [][]string{names}
	var cells [][]byte
	for _, line := range lines {
		if line.number < l.from || line.comment || line.blank {
			continue
		}
		if cells = l.cells(cells, line.text); len(cells) != len(names) {
			continue
		}
		row := make([]string, len(cells))
		for i, c := range cells {
			switch l.kind(c) {
			case cellMissing:
				row[i] = "NaN"
			case cellNumber:
				x, _ := scanNumber(c, l.mark)
				row[i] = strconv.FormatFloat(x, 'g', -1, 64)
			default:
				row[i] = string(c)
			}
		}
		records = append(records, row)
	}
	return dataframe.LoadRecords(records, dataframe.HasHeader(true), dataframe.DetectTypes(true), dataframe.DefaultType(series.String))
}

// describe fills in the columns.
func (h *LogHeader) describe(l *layout, df dataframe.DataFrame) {
	h.Rows = df.Nrow()
	for i, name := range l.names {
		c := LogColumn{Name: name, Unit: l.unit(i), Kind: KindText, Min: math.NaN(), Max: math.NaN(), Mean: math.NaN(), SD: math.NaN()}
		if df.Err != nil {
			h.Columns = append(h.Columns, c)
			continue
		}
		column := df.Col(strconv.Itoa(i))
		switch column.Type() {
		case series.Float, series.Int:
			c.Kind = KindNumber
		case series.String:
			if rows := column.Records(); len(rows) > 0 {
				if _, _, ok := scanStamp([]byte(rows[0])); ok {
					c.Kind = KindStamp
				}
			}
		}
		var there []int
		for k, nan := range column.IsNaN() {
			if nan {
				c.Missing++
			} else {
				there = append(there, k)
			}
		}
		if c.Kind == KindNumber && len(there) > 0 {
			some := column.Subset(there)
			c.Min, c.Max, c.Mean, c.SD = some.Min(), some.Max(), some.Mean(), some.StdDev()
			x := some.Float()
			forward, zero, back := countSteps(x)
			c.rising = float64(forward) / float64(max(1, forward+zero+back))
		}
		h.Columns = append(h.Columns, c)
	}
}

// Names that people give to columns, by part; lower case, without blanks, '_' and '-'.
var partNames = []struct {
	part  string
	names []string
}{
	{"time", []string{"t", "time", "timestamp", "stamp", "datetime", "date", "sec", "seconds", "clock", "elapsed", "zeit", "tiempo", "temps"}},
	{"dither", []string{"d", "dither", "probe", "excitation", "prbs", "testsignal", "injected"}},
	{"reference", []string{"r", "ref", "reference", "setpoint", "sp", "target", "desired", "yd", "yref", "w", "demand"}},
	{"input", []string{"u", "input", "in", "cmd", "command", "control", "ctrl", "actuator", "drive", "current", "i", "voltage", "volt", "force", "torque", "power", "duty", "pwm", "valve", "heater", "elevator"}},
	{"output", []string{"y", "output", "out", "position", "pos", "angle", "theta", "height", "gap", "temperature", "temp", "measured", "meas", "sensor", "pitch", "level", "speed", "x"}},
}

// guess gives parts to columns: by their whole name, then by words in it, then by how they behave.
func (h *LogHeader) guess() {
	taken := map[string]bool{}
	give := func(c *LogColumn, part, why string) {
		c.Part, c.Why = part, why
		taken[part] = true
		switch part {
		case "time":
			h.Time = c.Name
		case "input":
			h.Input = c.Name
		case "output":
			h.Output = c.Name
		case "reference":
			h.Reference = c.Name
		case "dither":
			h.Dither = c.Name
		}
	}
	fits := func(c *LogColumn, part string) bool {
		if c.Part != "" || taken[part] || c.Kind == KindText {
			return false
		}
		return part == "time" || c.Kind == KindNumber
	}
	byName := func(words func(string) []string, why string) {
		for _, p := range partNames {
			for _, name := range p.names {
				for i := range h.Columns {
					c := &h.Columns[i]
					if !fits(c, p.part) {
						continue
					}
					for _, w := range words(c.Name) {
						if w == name {
							give(c, p.part, why)
							break
						}
					}
				}
			}
		}
	}
	byName(func(s string) []string {
		bare, _ := splitUnit(s)
		return []string{string(fold(bare))}
	}, "its name")
	byName(func(s string) []string {
		return strings.FieldsFunc(strings.ToLower(s), func(r rune) bool { return !('a' <= r && r <= 'z') })
	}, "a word in its name")

	for i := range h.Columns {
		if c := &h.Columns[i]; fits(c, "time") && (c.Kind == KindStamp || c.rising > 0.99 && h.Rows > 10) {
			give(c, "time", "it rises from row to row")
		}
	}
	for _, part := range []string{"input", "output"} {
		for i := range h.Columns {
			if c := &h.Columns[i]; fits(c, part) && c.SD > 0 {
				give(c, part, "the order of the columns only")
			}
		}
	}
}

// measure takes the period from the stamps.
func (h *LogHeader) measure(l *layout, lines []headLine) {
	at := -1
	for i, c := range h.Columns {
		if c.Part == "time" {
			at = i
		}
	}
	if at < 0 {
		return
	}
	var k clock
	var t []float64
	var cells [][]byte
	for _, line := range lines {
		if line.number < l.from || line.comment || line.blank {
			continue
		}
		cells = l.cells(cells, line.text)
		if len(cells) != len(l.names) || isMissing(cells[at]) || !k.started && !k.start(cells[at], l.mark, l.unit(at)) {
			continue
		}
		if x, ok := k.read(cells[at], l.mark); ok {
			t = append(t, x)
		}
	}
	if forward, _, _ := countSteps(t); forward == 0 {
		return
	}
	period, sum, largest, n := medianStep(t), 0.0, 0.0, 0
	for i := 1; i < len(t); i++ {
		if off := math.Abs(t[i] - t[i-1] - period); off <= regularStep*period {
			sum += t[i] - t[i-1]
			largest = max(largest, off)
			n++
		}
	}
	h.Period = snap(sum/float64(n), largest, n)
}
