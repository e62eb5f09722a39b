package data

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"path"
	"reflect"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"unicode"

	"github.com/BurntSushi/toml"
)

// More than any rig file needs, in bytes; a longer one is another file given by mistake. What nests deeply enough to make
// the TOML reader slow needs a longer line.
const (
	maxRigFile = 1 << 16
	maxRigLine = 1 << 11
)

// ReadRig reads a rig file. name is the file's name, for messages and as the rig's name where none is given.
//
// The rig is checked for what contradicts itself, not for what a command needs: see Rig.NeedLog and Rig.NeedDesign.
// Faults of the file come back as a *ParseError.
func ReadRig(r io.Reader, name string) (*Rig, error) {
	text, err := io.ReadAll(io.LimitReader(r, maxRigFile+1))
	if err != nil {
		return nil, fmt.Errorf("reading %q: %w", name, err)
	}
	if len(text) > maxRigFile {
		return nil, &ParseError{File: name, Err: errors.New("longer than 64 kB, so no rig file"),
			Hint: "give the rig file first, then the logs"}
	}
	if bytes.HasPrefix(text, []byte("\x1f\x8b")) {
		return nil, &ParseError{File: name, Err: errors.New("compressed, so no rig file"),
			Hint: "give the rig file first, then the logs"}
	}
	for number, rest := 1, text; len(rest) > 0; number++ {
		i := bytes.IndexByte(rest, '\n')
		if i < 0 {
			i = len(rest) - 1
		}
		if i > maxRigLine {
			return nil, &ParseError{File: name, Line: number, Err: fmt.Errorf("longer than %d bytes, so no rig file", maxRigLine),
				Hint: "give the rig file first, then the logs"}
		}
		rest = rest[i+1:]
	}
	text = bytes.TrimPrefix(text, []byte("\xef\xbb\xbf"))

	g := &Rig{file: name, lines: keyLines(string(text))}
	tree := map[string]any{}
	meta, err := toml.Decode(string(text), &tree)
	if err != nil {
		return nil, tomlFault(name, string(text), err)
	}
	if err := g.checkKeys(meta.Keys()); err != nil {
		return nil, err
	}
	if err := g.checkTypes(tree); err != nil {
		return nil, err
	}
	if _, err := toml.Decode(string(text), g); err != nil {
		return nil, tomlFault(name, string(text), err)
	}
	if err := g.checkRequired(&meta); err != nil {
		return nil, err
	}
	g.setDefaults()
	if err := g.Validate(); err != nil {
		return nil, err
	}
	return g, nil
}

// tomlFault turns an error of the TOML reader into a ParseError.
func tomlFault(name, text string, err error) error {
	var fault toml.ParseError
	if !errors.As(err, &fault) {
		return &ParseError{File: name, Err: err}
	}
	e := &ParseError{File: name, Line: fault.Position.Line, Err: errors.New(strings.TrimSuffix(oneLine(fault.Message), "."))}
	if start := fault.Position.Start; 0 <= start && start <= len(text) {
		e.Column = start - strings.LastIndexByte(text[:start], '\n')
	}
	line := lineOf(text, e.Line)
	switch {
	case decimalComma.MatchString(line):
		e.Hint = "TOML writes the decimal mark as a point"
	case bareWord.MatchString(line):
		e.Hint = "text stands in double quotes"
	case e.Line == 1 && !strings.ContainsAny(line, "=[#"):
		e.Hint = "this does not look like a rig file; give the rig file first, then the logs"
	}
	return e
}

var (
	decimalComma = regexp.MustCompile(`=\s*[-+]?\d+,\d`)
	bareWord     = regexp.MustCompile(`=\s*[A-Za-z_]+\s*(#.*)?$`)
)

func lineOf(text string, line int) string {
	for range line - 1 {
		_, rest, ok := strings.Cut(text, "\n")
		if !ok {
			return ""
		}
		text = rest
	}
	first, _, _ := strings.Cut(text, "\n")
	return strings.TrimSuffix(first, "\r")
}

// oneLine puts s on one line of bearable length and takes out whatever a terminal might take as a command.
func oneLine(s string) string {
	const longest = 200
	if runes := []rune(s); len(runes) > longest {
		s = string(runes[:longest]) + "…"
	}
	return strings.Map(func(r rune) rune {
		if !unicode.IsPrint(r) {
			return '?'
		}
		return r
	}, strings.Join(strings.Fields(s), " "))
}

// keyLines finds the line of each key and each table. It knows the layout people write, one key a line; what it
// does not find has no line in a message, nothing worse.
func keyLines(text string) map[string]int {
	lines := map[string]int{}
	table := ""
	for i, line := range strings.Split(text, "\n") {
		line = strings.TrimSpace(line)
		if m := tableLine.FindStringSubmatch(line); m != nil {
			table = strings.Trim(m[1], ` "'`)
			if lines[table] == 0 {
				lines[table] = i + 1
			}
			continue
		}
		if m := keyLine.FindStringSubmatch(line); m != nil {
			key := strings.Trim(m[1], ` "'`)
			if table != "" {
				key = table + "." + key
			}
			if lines[key] == 0 {
				lines[key] = i + 1
			}
		}
	}
	return lines
}

var (
	tableLine = regexp.MustCompile(`^\[+([^\[\]]+)\]+`)
	keyLine   = regexp.MustCompile(`^([A-Za-z0-9_."' -]+?)\s*=`)
)

// split cuts "log.input" into "log" and "input"; a key without a table has table "".
func split(key string) (table, name string) {
	if i := strings.IndexByte(key, '.'); i >= 0 {
		return key[:i], key[i+1:]
	}
	return "", key
}

// known lists the keys of each table in the order of Rig's fields, from the struct tags; table "" is the top.
var known = func() map[string][]string {
	tables := map[string][]string{}
	top := reflect.TypeFor[Rig]()
	for i := range top.NumField() {
		tag := top.Field(i).Tag.Get("toml")
		if tag == "" {
			continue
		}
		tables[""] = append(tables[""], tag)
		t := top.Field(i).Type
		if t.Kind() == reflect.Pointer {
			t = t.Elem()
		}
		if t.Kind() != reflect.Struct {
			continue
		}
		for j := range t.NumField() {
			tables[tag] = append(tables[tag], t.Field(j).Tag.Get("toml"))
		}
	}
	return tables
}()

// tableNames are the tables in the order of Rig's fields.
func tableNames() []string { return known[""][1:] }

// checkKeys reports the first key, in the order of the file, that no rig file has.
func (g *Rig) checkKeys(keys []toml.Key) error {
	for _, key := range keys {
		last := key[len(key)-1]
		full := strings.Join(key, ".")
		e := &ParseError{File: g.file, Line: g.Line(full)}
		if last == "outer_output" {
			e.Err = fmt.Errorf("outer_output (a second sensor for the outer loop) is %w: one input and one output are", ErrUnsupported)
			e.Hint = "take it out, and check that nothing else is left uncontrolled"
			return e
		}
		if len(key) == 1 && slices.Contains(known[""], last) || len(key) == 2 && slices.Contains(known[key[0]], last) {
			continue
		}
		if len(key) == 1 || len(known[key[0]]) == 0 {
			e.Err = fmt.Errorf("unknown key %s", quote(key[0]))
			e.Hint = g.suggest("", key[0])
			return e
		}
		if len(key) > 2 {
			e.Err = fmt.Errorf("unknown key %s in [%s]", quote(strings.Join(key[1:], ".")), key[0])
			e.Hint = "no key of a rig file lies that deep"
			return e
		}
		e.Err = fmt.Errorf("unknown key %s in [%s]", quote(last), key[0])
		e.Hint = g.suggest(key[0], last)
		return e
	}
	return nil
}

// suggest names the key that was probably meant.
func (g *Rig) suggest(table, word string) string {
	if name, near := nearest(word, known[table]); near {
		if table == "" && len(known[name]) > 0 {
			name = "[" + name + "]"
			return "did you mean " + name + "?"
		}
		return "did you mean " + quote(name) + "?"
	}
	elsewhere := append([]string{""}, tableNames()...)
	if like, _ := nearest(table, slices.DeleteFunc(slices.Clone(tableNames()), func(t string) bool { return t == table })); like != "" {
		elsewhere = slices.Insert(elsewhere, 1, like) // [loops] for [loop]
	}
	for _, t := range elsewhere {
		if t == table || !slices.Contains(known[t], word) {
			continue
		}
		if t == "" {
			return quote(word) + " stands at the top of the file, before any [table]"
		}
		return quote(word) + " belongs in [" + t + "]"
	}
	for _, t := range tableNames() {
		if name, near := nearest(word, known[t]); near && t != table {
			return "did you mean " + quote(name) + " in [" + t + "]?"
		}
	}
	where := "the top of a rig file knows "
	if table != "" {
		where = "[" + table + "] knows "
	}
	return where + strings.Join(known[table], ", ")
}

// checkTypes reports the first value, in the order of Rig's fields, of another type than its field's.
func (g *Rig) checkTypes(tree map[string]any) error {
	top := reflect.TypeFor[Rig]()
	for i := range top.NumField() {
		tag := top.Field(i).Tag.Get("toml")
		value, given := tree[tag]
		if tag == "" || !given {
			continue
		}
		t := top.Field(i).Type
		if t.Kind() == reflect.Pointer {
			t = t.Elem()
		}
		if t.Kind() != reflect.Struct {
			if err := g.checkType(tag, value, t); err != nil {
				return err
			}
			continue
		}
		table, ok := value.(map[string]any)
		if !ok {
			return &ParseError{File: g.file, Line: g.Line(tag), Err: fmt.Errorf("%s must be a table", tag),
				Hint: fmt.Sprintf("write [%s] on a line of its own, once, and its keys below", tag)}
		}
		for j := range t.NumField() {
			name := t.Field(j).Tag.Get("toml")
			value, given := table[name]
			if !given {
				continue
			}
			if err := g.checkType(tag+"."+name, value, t.Field(j).Type); err != nil {
				return err
			}
		}
	}
	return nil
}

func (g *Rig) checkType(key string, value any, want reflect.Type) error {
	if want.Kind() == reflect.Pointer {
		want = want.Elem()
	}
	list, isList := value.([]any)
	hint, ok := "", false
	switch want.Kind() {
	case reflect.String:
		_, ok = value.(string)
		hint = `write text in double quotes`
	case reflect.Int:
		_, ok = value.(int64)
		hint = "write a whole number"
	case reflect.Float64:
		ok = isNumber(value)
		hint = "write a number without quotes"
	case reflect.Array:
		ok = isList && len(list) == 2 && isNumber(list[0]) && isNumber(list[1])
		hint = "write [lowest, highest]"
	case reflect.Slice:
		ok = isList
		for _, x := range list {
			ok = ok && isNumber(x)
		}
		hint = "write a list of numbers, [c0, c1, …]"
	}
	if ok {
		return nil
	}
	return &ParseError{File: g.file, Line: g.Line(key), Err: fmt.Errorf("%s is %s", key, describe(value)), Hint: hint}
}

func isNumber(value any) bool {
	switch value.(type) {
	case float64, int64:
		return true
	}
	return false
}

func describe(value any) string {
	switch v := value.(type) {
	case string:
		return "the text " + quote(v)
	case bool:
		return strconv.FormatBool(v)
	case int64:
		return "the number " + strconv.FormatInt(v, 10)
	case float64:
		return "the number " + number(v)
	case []any:
		for _, x := range v {
			if !isNumber(x) {
				return "a list with " + describe(x) + " in it"
			}
		}
		return "a list of " + plural(len(v), "number", "numbers")
	case map[string]any, []map[string]any:
		return "a table"
	}
	return "a date or time"
}

// required lists the keys that a table cannot do without, once it is there.
var required = map[string][]string{
	"operating_point": {"input", "output"},
	"stopgap":         {"numerator", "denominator"},
	"loop":            {"sample_period"},
	"spec":            {"step", "overshoot", "band", "peak_sensitivity"},
}

func (g *Rig) checkRequired(meta *toml.MetaData) error {
	for _, table := range tableNames() {
		if !meta.IsDefined(table) {
			continue
		}
		for _, key := range required[table] {
			if !meta.IsDefined(table, key) {
				return &ParseError{File: g.file, Line: g.Line(table), Err: fmt.Errorf("[%s] has no %s", table, key),
					Hint: "add it or take the table out"}
			}
		}
	}
	if meta.IsDefined("spec", "kick") != meta.IsDefined("spec", "kick_peak") {
		return &ParseError{File: g.file, Line: g.Line("spec"), Err: errors.New("[spec] has only one of kick and kick_peak"),
			Hint: "kick says how hard the push is, kick_peak how far it may move the output: give both or neither"}
	}
	return nil
}

// setDefaults fills in what the file may leave out.
func (g *Rig) setDefaults() {
	if g.Name == "" {
		base := path.Base(strings.ReplaceAll(g.file, `\`, "/"))
		g.Name = strings.TrimSuffix(base, path.Ext(base))
	}
	if g.Log.InputRow == "" {
		g.Log.InputRow = InputAfter
	}
	if g.Log.InputStamp == "" {
		g.Log.InputStamp = InputApplied
	}
	if g.Loop != nil && g.Loop.Hold == "" {
		g.Loop.Hold = HoldZeroOrder
	}
}
