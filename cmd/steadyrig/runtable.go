package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"unicode"
	"unicode/utf8"

	"github.com/spf13/cobra"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/ident"
)

// tableSchema names the version of what `table --json` prints.
const tableSchema = "steadyrig/table/1"

// A selection says what of a run table is wanted.
type selection struct {
	columns, sort, join, on string
	where                   []string
	fit                     bool
}

func newTable(a *app) *cobra.Command {
	var s settings
	var q selection
	var list []string
	for _, c := range testColumns(data.Units{Input: "input", Output: "output"}) {
		list = append(list, c.Name+map[bool]string{true: " (" + c.Unit + ")"}[c.Unit != ""])
	}
	var b strings.Builder
	wrap(&b, "  ", strings.Join(list, ", "))
	cmd := &cobra.Command{
		Use:   "table RIG.toml LOG.csv|MODEL.json...",
		Short: "Make a table of tests, one row a log",
		Long: `table audits each log alone and lists what was found, one row a log, for whoever
keeps a test record. A model file (*.json) fills in the row of the log that it
was fitted to, known by its SHA-256, or adds one; --fit fits the logs that have
none. A log that is refused, or cannot be read, has its row all the same, with
the reason under "problem"; the exit status is then 3.

--out writes CSV, or JSON where the name ends in .json: all columns, all
digits, no cell where nothing is known or an interval is open. A record of your
own joins by --join; its cells are copied as text.

A condition is COLUMN OPERATOR VALUE with one of = != < <= > >= has. Several
must all hold. "" is an empty cell; names and values with blanks stand in double
quotes.

Columns:
` + strings.TrimSuffix(b.String(), "\n"),
		Example: `  steadyrig table rig.toml 'run*.csv' --out tests.csv
  steadyrig table rig.toml */model.json --where 'delay > 0' --sort -gain
  steadyrig table rig.toml run*.csv --join record.csv --columns file,operator`,
		Args: wants(2, -1, "a rig file and one or more logs or models"),
		RunE: func(cmd *cobra.Command, args []string) error {
			if err := a.checkTarget(&s, ""); err != nil {
				return err
			}
			if cmd.Flags().Changed("on") && q.join == "" {
				return callErrorf("--on says how --join finds its rows: give --join, too")
			}
			rig, err := a.rig(args[0])
			if err != nil {
				return err
			}
			record, err := q.record(a)
			if err != nil {
				return err
			}
			// With nothing in it, so that a wrong name is told before any work.
			if _, err := q.of(a, &settings{quiet: true}, sheetOf(nil, rig.Units), record); err != nil {
				return err
			}
			tests, err := a.tests(cmd.Context(), rig, args[1:], &s, q.fit)
			if err != nil {
				return err
			}
			sheet, err := q.of(a, &s, sheetOf(tests, rig.Units), record)
			if err != nil {
				return err
			}
			if err := a.deliverTable(&s, &q, sheet, tests, rig); err != nil {
				return err
			}
			return refusal(tests)
		},
	}
	s.add(cmd, "write the table here as CSV (*.json: as JSON), too")
	s.addSeed(cmd)
	f := cmd.Flags()
	f.BoolVar(&q.fit, "fit", false, "fit the logs that no model is given for, each alone")
	f.StringVar(&q.columns, "columns", "", "columns to keep, in this order, with commas between them")
	f.StringArrayVar(&q.where, "where", nil, "keep rows for which this holds, such as 'fit = sound'; may be repeated")
	f.StringVar(&q.sort, "sort", "", "columns to sort by, with commas between them; -COLUMN: falling")
	f.StringVar(&q.join, "join", "", "a table of your own (CSV), whose columns are put beside")
	f.StringVar(&q.on, "on", "file", "column that tells which of its rows belongs to which log; or OURS=THEIRS")
	return cmd
}

// refusal is the error that tells how many tests came to nothing; nil: none did.
func refusal(tests []test) error {
	n := 0
	for _, t := range tests {
		if t.problem != "" {
			n++
		}
	}
	if n == 0 {
		return nil
	}
	return &ident.RefusedError{What: fmt.Sprintf("%d of %s came to nothing", n, words.Count(len(tests), "test")), Do: `the column "problem" says why`}
}

// record reads the table to join; nil: there is none.
func (q *selection) record(a *app) (*data.Sheet, error) {
	if q.join == "" {
		return nil, nil
	}
	sheet, _, err := load(a, q.join, data.ReadSheet)
	return sheet, err
}

// of joins, selects and sorts as asked.
func (q *selection) of(a *app, s *settings, sheet, record *data.Sheet) (*data.Sheet, error) {
	var err error
	if record != nil {
		var alone []string
		if sheet, alone, err = sheet.Join(record, q.on); err != nil {
			return nil, callErrorf("--join %s --on %s: %w", q.join, q.on, err)
		}
		if n := len(alone); n > 0 {
			a.warn(s, []string{fmt.Sprintf("%s: %s without a test here, %s", q.join, words.Count(n, "row"), some(alone))})
		}
	}
	for _, c := range q.where {
		if sheet, err = sheet.Where(c); err != nil {
			return nil, callErrorf("--where: %w", err)
		}
	}
	if q.sort != "" {
		if sheet, err = sheet.Sort(q.sort); err != nil {
			return nil, callErrorf("--sort: %w", err)
		}
	}
	if q.columns != "" {
		if sheet, err = sheet.Select(q.columns); err != nil {
			return nil, callErrorf("--columns: %w", err)
		}
	}
	return sheet, nil
}

// some names the first few of a list.
func some(list []string) string {
	const few = 5
	if len(list) > few {
		return fmt.Sprintf("%s and %d more", strings.Join(list[:few], ", "), len(list)-few)
	}
	return strings.Join(list, ", ")
}

// A modelOf is a model that a test may have.
type modelOf struct {
	*ident.Model
	path string
}

// tests audits logs one by one, and fits them where asked; models bring their own logs. What one of them cannot tell is a
// problem of its row alone, but a file that is not there stops all, as does ctx.
func (a *app) tests(ctx context.Context, rig *data.Rig, names []string, s *settings, fit bool) ([]test, error) {
	paths, err := expand(names)
	if err != nil {
		return nil, err
	}
	var logs []string
	var models []modelOf
	var broken []test
	for _, path := range paths {
		if _, err := os.Stat(path); path != "-" && err != nil {
			return nil, callErrorf("%s: %w", path, plainPathError(err))
		}
		if !strings.EqualFold(filepath.Ext(path), ".json") {
			logs = append(logs, path)
			continue
		}
		m, _, err := load(a, path, ident.ReadModel)
		if err != nil {
			broken = append(broken, test{path: path, problem: oneLine(err.Error())})
			continue
		}
		if m.Rig != rig.Name {
			a.warn(s, []string{fmt.Sprintf("%s is of rig %q, the rig file of %q", path, m.Rig, rig.Name)})
		}
		models = append(models, modelOf{m, path})
	}
	bar := a.progress("table", s.quiet)
	defer bar.wipe()
	var tests []test
	seen := map[string]string{} // paths by digest
	for i, path := range logs {
		bar.step(i, len(logs))
		t, exp, err := a.audited(ctx, rig, path)
		if err != nil {
			return nil, err
		}
		if first, again := seen[t.log.SHA256]; again && exp != nil {
			t.audit, t.problem, exp = nil, "the same bytes as "+first, nil
		} else if exp != nil {
			seen[t.log.SHA256] = path
		}
		with := 0
		for _, m := range models {
			for _, use := range m.Logs {
				if exp != nil && use.SHA256 == t.log.SHA256 {
					tests = append(tests, t.with(m))
					with++
				}
			}
		}
		if with > 0 {
			continue
		}
		if fit && exp != nil && t.problem == "" {
			m, err := a.fit(ctx, []*data.Experiment{exp}, rig, &settings{quiet: true, seed: s.seed})
			switch {
			case ctx.Err() != nil:
				return nil, ctx.Err()
			case m != nil:
				t = t.with(modelOf{m, ""})
			case err != nil:
				t.problem = oneLine(err.Error())
			}
		}
		tests = append(tests, t)
	}
	for _, m := range models {
		for _, use := range m.Logs {
			if _, given := seen[use.SHA256]; !given {
				tests = append(tests, test{path: use.File, log: use, period: m.Noise.SamplePeriod}.with(m))
			}
		}
	}
	return append(tests, broken...), nil
}

// audited is the test that one log makes, and the log; the latter is nil where it cannot be read. It errs where ctx ends.
func (a *app) audited(ctx context.Context, rig *data.Rig, path string) (test, *data.Experiment, error) {
	t := test{path: path, log: ident.LogUse{File: path}}
	exp, sum, err := load(a, path, func(r io.Reader, name string) (*data.Experiment, error) { return data.ReadLog(r, name, rig) })
	if err != nil {
		t.problem = oneLine(err.Error())
		return t, nil, ctx.Err()
	}
	t.log = ident.LogUse{File: path, SHA256: sum, Rows: exp.Rows, Used: exp.Used, Segments: len(exp.Segments)}
	t.period = exp.Period
	t.audit, err = a.audit(ctx, []*data.Experiment{exp}, rig)
	if ctx.Err() != nil {
		return t, nil, ctx.Err()
	}
	var refused *ident.RefusedError
	if err != nil {
		t.problem = oneLine(err.Error())
	}
	if err != nil && !errors.As(err, &refused) {
		return t, nil, nil
	}
	return t, exp, nil
}

// deliverTable writes a table to its file, and to standard output as JSON or as a page.
func (a *app) deliverTable(s *settings, q *selection, sheet *data.Sheet, tests []test, rig *data.Rig) error {
	asJSON, err := document("the table", tableDocument(a, sheet, rig))
	if err != nil {
		return err
	}
	if s.out != "" {
		content := asJSON
		if !strings.EqualFold(filepath.Ext(s.out), ".json") {
			if content, err = rendered(sheet.WriteCSV); err != nil {
				return fmt.Errorf("writing the table: %w", err)
			}
		}
		if err := writeFile(s.out, s.force, content); err != nil {
			return err
		}
	}
	if s.json {
		_, err := a.stdout.Write(asJSON)
		return err
	}
	p := a.page()
	showTable(p, sheet, tests, q.columns != "")
	if s.out != "" {
		p.line("\nWrote %s.", s.out)
	}
	return nil
}

// A tableFile is what `table --json` prints.
type tableFile struct {
	Schema  string                        `json:"schema"`
	Tool    string                        `json:"tool"`
	Rig     string                        `json:"rig"`
	Made    string                        `json:"made"`
	Columns []tableColumn                 `json:"columns"`
	Rows    []map[string]*json.RawMessage `json:"rows"`
}

type tableColumn struct {
	Name string `json:"name"`
	Unit string `json:"unit"`
}

// tableDocument is a sheet as JSON holds it: numbers as they are written, where JSON can write them so, else text.
func tableDocument(a *app, sheet *data.Sheet, rig *data.Rig) *tableFile {
	f := &tableFile{Schema: tableSchema, Tool: a.tool, Rig: rig.Name, Made: a.made(), Columns: []tableColumn{}, Rows: []map[string]*json.RawMessage{}}
	for _, c := range sheet.Columns {
		f.Columns = append(f.Columns, tableColumn{c.Name, c.Unit})
	}
	for _, row := range sheet.Rows() {
		cells := map[string]*json.RawMessage{}
		for j, cell := range row {
			raw := json.RawMessage(cell)
			if !sheet.Columns[j].Number || !json.Valid(raw) {
				raw, _ = json.Marshal(cell) // text
			}
			if cells[sheet.Columns[j].Name] = &raw; cell == "" {
				cells[sheet.Columns[j].Name] = nil
			}
		}
		f.Rows = append(f.Rows, cells)
	}
	return f
}

// firstColumns are those that a page shows first, where nobody chose; what stands together makes sense together only. A
// record of one's own comes right behind the file.
var firstColumns = [][]string{{"file"}, {"fit"}, {"unstable_pole", "unstable_lo", "unstable_hi"}, {"audit"}, {"worst_flaw"}, {"used"},
	{"gain", "gain_lo", "gain_hi"}, {"delay", "delay_lo", "delay_hi"}, {"noise_sd"}, {"duration"}}

// pageOrder groups the columns of a sheet in the order in which a page tries to show them.
func pageOrder(sheet *data.Sheet, rows [][]string, chosen bool) (groups [][]int) {
	for j, c := range sheet.Columns {
		if chosen || !isTestColumn(c.Name) {
			groups = append(groups, []int{j})
		}
	}
	if chosen {
		return groups
	}
	for i, names := range firstColumns {
		var group []int
		for j, c := range sheet.Columns {
			if slices.Contains(names, c.Name) && slices.ContainsFunc(rows, func(row []string) bool { return row[j] != "" }) {
				group = append(group, j)
			}
		}
		if i == 0 {
			groups = slices.Insert(groups, 0, group)
		} else {
			groups = append(groups, group)
		}
	}
	return groups
}

// showTable prints as many columns as fit, names what it leaves out, and then the problems.
func showTable(p *page, sheet *data.Sheet, tests []test, chosen bool) {
	rows := sheet.Rows()
	bad := slices.DeleteFunc(slices.Clone(tests), func(t test) bool { return t.problem == "" })
	p.line("%s, %d came to nothing; %s shown", words.Count(len(tests), "test"), len(bad), words.Count(len(rows), "row"))
	var pairs []any
	width := 0
	shown := map[int]bool{}
	for _, group := range pageOrder(sheet, rows, chosen) {
		var more []any
		wide := 0
		for _, j := range group {
			c := sheet.Columns[j]
			name, cells := shownText(c.Name), []string{c.Unit}
			for _, row := range rows {
				cells = append(cells, shownCell(c, row[j]))
			}
			longest := utf8.RuneCountInString(name)
			for _, cell := range cells {
				longest = max(longest, utf8.RuneCountInString(cell))
			}
			if wide += 2 + longest; c.Number {
				name = ">" + name
			}
			more = append(more, name, cells)
		}
		if width+wide > pageWidth {
			continue
		}
		width += wide
		pairs = append(pairs, more...)
		for _, j := range group {
			shown[j] = true
		}
	}
	if !slices.ContainsFunc(sheet.Columns, func(c data.SheetColumn) bool { return c.Unit != "" && shown[slices.Index(sheet.Columns, c)] }) {
		for i := 1; i < len(pairs); i += 2 {
			pairs[i] = pairs[i].([]string)[1:] // no line of units
		}
	}
	if len(pairs) > 0 {
		p.line("")
		p.table(columns(pairs...))
	}
	var left []string
	for j, c := range sheet.Columns {
		if !shown[j] {
			left = append(left, shownText(c.Name))
		}
	}
	if len(left) > 0 {
		p.line("")
		wrap(p.w, "  ", "Left out here: "+strings.Join(left, ", ")+". --columns chooses, --out writes them all.")
	}
	if len(bad) > 0 {
		p.heading("Problems")
		for _, t := range bad {
			p.item(shownText(filepath.Base(t.path)), strings.TrimPrefix(t.problem, t.path+": "))
		}
	}
}

// shownCell is a cell on a page: four digits of a figure of ours, the start of any other text.
func shownCell(c data.SheetColumn, cell string) string {
	if x, err := strconv.ParseFloat(cell, 64); err == nil && c.Number && isTestColumn(c.Name) {
		return words.Number(x)
	}
	return shownText(cell)
}

// shownText is the start of a text, without what a terminal might obey.
func shownText(text string) string {
	const longest = 24
	text = strings.Map(func(r rune) rune {
		if !unicode.IsPrint(r) {
			return ' '
		}
		return r
	}, text)
	if r := []rune(text); len(r) > longest {
		return string(r[:longest-1]) + "…"
	}
	return text
}
