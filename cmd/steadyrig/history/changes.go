package history

import (
	"math"
	"slices"

	"steadyrig/fit"
	"steadyrig/ident"
)

// Level bounds the probability that a history has a wrong mark, however long it grows.
const Level = 0.05

// Tested says where the rig changed.
type Tested struct {
	Level    float64    `json:"level"`
	By       []string   `json:"by"` // names of what is compared, see ident.Followed
	Evidence []Evidence `json:"evidence"`
	Lacking  int        `json:"lacking"` // logs that count but do not tell all of By
	Changes  []Change   `json:"changes"`
}

// Evidence is what logs say that were used for no plant before. A log counts once, by the plant that was fitted to it
// last; a plant that shares a log with others besides, as a pooled one does, does not count.
type Evidence struct {
	Line  int    `json:"line"`  // of the entry in which the logs came first
	Plant int    `json:"plant"` // line of the entry whose plant it is
	Entry *Entry `json:"-"`     // that one
}

// A Change is told by the lines in which logs came first.
type Change struct {
	At    int    `json:"at"`    // the first log after it, most likely
	Range [2]int `json:"range"` // with 95 % that log is one of these or between
	Seen  int    `json:"seen"`  // the log that brought the proof
	// Numbers are those of Tested.By, over all logs from the last change on and up to the next.
	Numbers []Number `json:"numbers"`
}

// A Number before and after a change, with 95 % intervals. Rise is After - Before.
type Number struct {
	Name   string         `json:"name"`
	Before ident.Estimate `json:"before"`
	After  ident.Estimate `json:"after"`
	Rise   ident.Estimate `json:"rise"`
}

// Test looks for changes.
func Test(entries []Entry) Tested {
	t := Tested{Level: Level, By: []string{}, Evidence: []Evidence{}, Changes: []Change{}}
	counted := evidence(entries)
	var list []*ident.Followed
	for _, e := range counted {
		list = append(list, e.Entry.Plant.Followed)
	}
	names := ident.FollowedNames(list)
	var readings []fit.Reading
	for i, f := range list {
		if f.Pick(names) == nil {
			continue
		}
		if r, err := reading(f, names); err == nil {
			readings = append(readings, r)
			t.Evidence = append(t.Evidence, counted[i])
		}
	}
	t.Lacking = len(counted) - len(readings)
	if len(readings) == 0 {
		return t
	}
	t.By = names
	found := fit.Changes(readings, Level)
	line := func(i int) int { return t.Evidence[i].Line }
	from := 0
	for i, c := range found {
		to := len(readings)
		if i+1 < len(found) {
			to = found[i+1].At
		}
		x, sx := fit.Mean(readings[from:c.At])
		y, sy := fit.Mean(readings[c.At:to])
		change := Change{At: line(c.At), Range: [2]int{line(c.From), line(c.To)}, Seen: line(c.Seen)}
		for j, name := range names {
			change.Numbers = append(change.Numbers, Number{name, estimate(x[j], sx[j]), estimate(y[j], sy[j]), estimate(y[j]-x[j], math.Hypot(sx[j], sy[j]))})
		}
		t.Changes = append(t.Changes, change)
		from = c.At
	}
	return t
}

func estimate(x, sd float64) ident.Estimate {
	const z95 = 1.959963984540054
	return ident.Estimate{Value: x, SD: sd, Interval95: ident.Interval{Lo: x - z95*sd, Hi: x + z95*sd}}
}

// evidence returns what counts, in the order in which the logs first came.
func evidence(entries []Entry) []Evidence {
	var list []Evidence
	place := make(map[string]int) // in list, of a log by its digest
	for i := range entries {
		e := &entries[i]
		if e.Plant == nil || e.Plant.Followed == nil || len(e.Logs) == 0 || e.Verdict == ident.Refused {
			continue
		}
		at, used := 0, 0
		for _, l := range e.Logs {
			if k, ok := place[l.SHA256]; ok {
				at = k
				used++
			}
		}
		switch {
		case used == 0:
			for _, l := range e.Logs {
				place[l.SHA256] = len(list)
			}
			list = append(list, Evidence{e.Line, e.Line, e})
		case used == len(e.Logs) && sameLogs(e, list[at].Entry):
			list[at].Plant, list[at].Entry = e.Line, e
		}
	}
	return list
}

// sameLogs reports whether a and b rest on the same logs.
func sameLogs(a, b *Entry) bool {
	if len(a.Logs) != len(b.Logs) {
		return false
	}
	return !slices.ContainsFunc(a.Logs, func(l Log) bool {
		return !slices.ContainsFunc(b.Logs, func(m Log) bool { return l.SHA256 == m.SHA256 })
	})
}
