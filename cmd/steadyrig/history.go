package main

import (
	"encoding/csv"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"strconv"
	"strings"

	"github.com/spf13/cobra"

	"steadyrig/cmd/steadyrig/history"
	"steadyrig/cmd/steadyrig/report"
	"steadyrig/cmd/steadyrig/words"
	"steadyrig/ident"
)

func newHistory(a *app) *cobra.Command {
	var s settings
	var table string
	cmd := &cobra.Command{
		Use:   "history RIG.toml",
		Short: "Show how pole and gain went over the years, and where they changed",
		Long: `history shows what fit, design, recheck and run found about a rig: a table, the
rightmost pole and the gain over time with their 95 % intervals, and where the
rig changed. That is told by a test that stays honest however often it is
looked at. The entries are lines of RIG.history.jsonl beside the rig file.

--out writes a page with drawings, --csv all entries as a table.`,
		Example: "  steadyrig history rig.toml\n  steadyrig history rig.toml --out history.html --csv history.csv",
		Args:    wants(1, 1, "a rig file"),
		RunE: func(cmd *cobra.Command, args []string) error {
			for _, path := range []string{s.out, table} {
				if path != "" {
					if err := checkFree(path, s.force); err != nil {
						return err
					}
				}
			}
			path := history.Path(args[0])
			entries, bad, err := readHistory(path)
			if err != nil {
				return err
			}
			for _, b := range bad {
				a.warn(&s, []string{fmt.Sprintf("%s, line %d: %s; it is left out", path, b.Line, b.Why)})
			}
			if len(entries) == 0 {
				return callErrorf("%s: no entries; fit, design, recheck and run write them", path)
			}
			tested := history.Test(entries)
			if table != "" {
				content, err := rendered(func(w io.Writer) error { return historyTable(w, entries, tested) })
				if err != nil {
					return fmt.Errorf("writing %s: %w", table, err)
				}
				if err := writeFile(table, s.force, content); err != nil {
					return err
				}
			}
			if s.out != "" {
				content, err := rendered(func(w io.Writer) error {
					return report.WriteHistory(w, report.HistoryInput{Entries: entries, Tested: tested, Bad: bad, File: path, Command: a.command(), Tool: a.tool, Made: a.now})
				})
				if err != nil {
					return err
				}
				if err := writeFile(s.out, s.force, content); err != nil {
					return err
				}
			}
			if s.json {
				return printJSON(a.stdout, newHistoryDocument(path, entries, bad, tested))
			}
			p := a.page()
			showHistory(p, entries, tested)
			for _, path := range []string{s.out, table} {
				if path != "" {
					p.line("\nWrote %s.", path)
				}
			}
			return nil
		},
	}
	s.add(cmd, "write a page with drawings here")
	cmd.Flags().StringVar(&table, "csv", "", "write all entries as a table here")
	return cmd
}

func readHistory(path string) ([]history.Entry, []history.BadLine, error) {
	f, err := os.Open(path)
	if errors.Is(err, fs.ErrNotExist) {
		return nil, nil, callErrorf("%s: there is no history yet; fit, design, recheck and run write it", path)
	} else if err != nil {
		return nil, nil, callErrorf("%s: %w", path, plainPathError(err))
	}
	defer f.Close()
	entries, bad, err := history.Read(f)
	if err != nil {
		return nil, nil, callErrorf("%s: %w", path, plainPathError(err))
	}
	return entries, bad, nil
}

// historyDocument is the JSON document of history.
type historyDocument struct {
	File       string            `json:"file"`
	Verdict    string            `json:"verdict"`
	Entries    []json.RawMessage `json:"entries"`    // as they were read
	Lines      []int             `json:"lines"`      // of the entries, from 1
	Unreadable []history.BadLine `json:"unreadable"` // lines that hold no entry
	Tested     history.Tested    `json:"tested"`
}

func newHistoryDocument(path string, entries []history.Entry, bad []history.BadLine, t history.Tested) historyDocument {
	d := historyDocument{File: path, Unreadable: append([]history.BadLine{}, bad...), Tested: t}
	d.Verdict, _ = t.Verdict()
	for _, e := range entries {
		d.Entries, d.Lines = append(d.Entries, e.Text), append(d.Lines, e.Line)
	}
	return d
}

// historyTable writes all entries with all digits, one a row; a column is empty where an entry has nothing to say.
func historyTable(w io.Writer, entries []history.Entry, t history.Tested) error {
	counts, changed := make(map[int]bool), make(map[int]bool)
	for _, e := range t.Evidence {
		counts[e.Plant] = true
	}
	for _, c := range t.Changes {
		changed[c.At] = true
	}
	out := csv.NewWriter(w)
	out.Write([]string{
		"line", "made", "kind", "verdict", "counts", "changed", "rig", "logs_sha256", "model_sha256",
		"pole_re", "pole_re_sd", "pole_re_95_lo", "pole_re_95_hi", "pole_im", "pole_im_sd",
		"gain_of", "gain_unit", "gain", "gain_sd", "gain_95_lo", "gain_95_hi", "noise_sd", "sample_period",
		"inner_form", "outer_form", "promise_lower_bound_95", "peak_sensitivity", "moved", "probability_by_chance", "tool", "command",
	})
	for _, e := range entries {
		row := []string{strconv.Itoa(e.Line), e.Made, e.Kind, e.Verdict, strconv.FormatBool(counts[e.Line]), strconv.FormatBool(changed[e.Line]), e.Rig, "", e.ModelSHA256}
		var sums []string
		for _, l := range e.Logs {
			sums = append(sums, l.SHA256)
		}
		row[7] = strings.Join(sums, " ")
		pole, gain, plant := make([]string, 6), make([]string, 6), make([]string, 2)
		loops, moved := make([]string, 4), make([]string, 2)
		if e.Plant != nil {
			plant = []string{full(e.Plant.NoiseSD), full(e.Plant.SamplePeriod)}
			if r := e.Plant.Rightmost(); r != nil {
				pole = []string{full(r.Re), full(r.ReSD), full(r.Re95.Lo), full(r.Re95.Hi), full(r.Im), full(r.ImSD)}
			}
			if g := e.Plant.Gain; g != nil {
				gain = []string{g.Of, g.Unit, full(g.Value), full(g.SD), full(g.Interval95.Lo), full(g.Interval95.Hi)}
			}
		}
		if l := e.Loops; l != nil {
			loops[0], loops[1], loops[2] = l.InnerForm, l.OuterForm, full(l.LowerBound)
			if l.PeakSensitivity != nil {
				loops[3] = full(*l.PeakSensitivity)
			}
		}
		if c := e.Changed; c != nil {
			moved = []string{strconv.FormatBool(c.Moved), full(c.Probability)}
		}
		for _, part := range [][]string{pole, gain, plant, loops, moved, {e.Tool, e.Command}} {
			row = append(row, part...)
		}
		out.Write(row)
	}
	out.Flush()
	return out.Error()
}

// full is a number with all its digits; an open end of an interval is empty.
func full(x float64) string {
	if s := strconv.FormatFloat(x, 'g', -1, 64); !strings.HasSuffix(s, "Inf") {
		return s
	}
	return ""
}

// shownEntries is the number of entries in the table of a page; --csv has all.
const shownEntries = 20

// showHistory prints a history: what it comes to, the changes, pole and gain over the logs, and the last entries.
func showHistory(p *page, entries []history.Entry, t history.Tested) {
	last := entries[len(entries)-1]
	word, meaning := t.Verdict()
	p.verdict(word, last.Rig+": "+meaning)
	wrap(p.w, "", strings.Join(t.Notes(), " "))
	if len(t.Changes) > 0 {
		p.heading("Changes")
		var since, what, before, after, moved []string
		for _, c := range t.Changes {
			at := fmt.Sprint(c.At)
			if c.Range[0] < c.Range[1] {
				at += fmt.Sprintf(" (%d to %d)", c.Range[0], c.Range[1])
			}
			for i, n := range c.Numbers {
				if i > 0 {
					at = ""
				}
				name, unit := history.What(n.Name)
				x, y, by := n.Words()
				since, what = append(since, at), append(what, words.Unit(name+",", unit))
				before, after, moved = append(before, x), append(after, y), append(moved, by)
			}
		}
		p.table(columns("since entry", since, "what", what, ">before", before, ">after", after, "moved by, 95 %", moved))
	}
	showCourses(p, t)
	from := max(0, len(entries)-shownEntries)
	p.heading("Entries")
	if from > 0 {
		p.line("  the last %d of %d; --csv writes all", len(entries)-from, len(entries))
	}
	changed := make(map[int]bool)
	for _, c := range t.Changes {
		changed[c.At] = true
	}
	var number, made, kind, verdict, pole, gain []string
	for _, e := range entries[from:] {
		mark := ""
		if changed[e.Line] {
			mark = "*"
		}
		poleText, gainText := "", ""
		if e.Plant != nil {
			if r := e.Plant.Rightmost(); r != nil {
				poleText = brief(r.Re95)
			}
			if g := e.Plant.Gain; g != nil {
				gainText = brief(g.Interval95)
				if shown := t.Gain(); shown != nil && !g.Like(shown) {
					gainText = "of another kind"
				}
			}
		}
		number, made = append(number, mark+fmt.Sprint(e.Line)), append(made, e.Day())
		kind, verdict = append(kind, clipped(e.Kind, 7)), append(verdict, clipped(e.Verdict, 7))
		pole, gain = append(pole, poleText), append(gain, gainText)
	}
	p.table(columns(">#", number, "made", made, "what", kind, "verdict", verdict, ">pole, 95 %", pole, ">gain, 95 %", gain))
	text := "The rightmost pole's real part in rad/s"
	if g := t.Gain(); g != nil {
		text += "; " + g.Name()
		if g.Unit != "" {
			text += " in " + g.Unit
		}
	}
	if len(changed) > 0 {
		text += "; * changed since this entry"
	}
	wrap(p.w, "  ", text+".")
}

func clipped(s string, n int) string {
	if r := []rune(s); len(r) > n {
		return string(r[:n])
	}
	return s
}

// brief is an interval that leaves room for the other columns.
func brief(iv ident.Interval) string {
	s := words.Interval(iv)
	if len(s) > 18 {
		s = words.Brief(iv.Lo) + " to " + words.Brief(iv.Hi)
	}
	return s
}
