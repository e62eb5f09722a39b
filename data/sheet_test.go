package data

import (
	"bytes"
	"fmt"
	"runtime"
	"slices"
	"strings"
	"testing"
)

const tests = `file,payload,operator,digest,when
run1.csv,2,Ana,12e4,2025-01-03
run2.csv,,"Bo, Li",0012,2025-01-02
run3.csv,10,NA,1e999,2025-01-01
run4.csv,1e-9,true,7,
`

func sheet(t *testing.T, text string) *Sheet {
	t.Helper()
	s, err := ReadSheet(strings.NewReader(text), "dir/record.csv")
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// text is the sheet as it is written.
func (s *Sheet) text() string {
	var b bytes.Buffer
	if err := s.WriteCSV(&b); err != nil {
		return err.Error()
	}
	return b.String()
}

// cells is a column by name, joined.
func (s *Sheet) cells(t *testing.T, name string) string {
	t.Helper()
	_, cells, err := s.column(name)
	if err != nil {
		t.Fatal(err)
	}
	return strings.Join(cells, " ")
}

// What is read is written as it was: no digest becomes a number, no small number zero, no NA nothing.
func TestSheetsKeepCells(t *testing.T) {
	if got := sheet(t, tests).text(); got != tests {
		t.Errorf("%q", got)
	}
	for _, c := range []struct{ name, text, want string }{
		{"semicolons, mark and CR", "\xef\xbb\xbffile;mass kg\r\na;1,5\r\n;\r\nb;2\r\n", "file,mass kg\na,\"1,5\"\nb,2\n"},
		{"tabs", "file\tmass\na\t1\n", "file,mass\na,1\n"},
		{"one byte a sign", "file,pr\xfcfer\na,J\xf6rg\n", "file,pr\u00fcfer\na,J\u00f6rg\n"},
		{"UTF-16", "\xff\xfef\x00,\x00g\x00\n\x001\x00,\x002\x00", "f,g\n1,2\n"},
		{"a column without anything", "file,,mass,\na,,1,\n", "file,mass\na,1\n"},
		{"names alone", "file,mass\n", "file,mass\n"},
		{"NaN is nothing", "file,mass\na,NaN\n", "file,mass\na,\n"},
	} {
		if got := sheet(t, c.text).text(); got != c.want {
			t.Errorf("%s: %q, want %q", c.name, got, c.want)
		}
	}
}

func TestSheetConditions(t *testing.T) {
	s := sheet(t, tests)
	for _, c := range []struct{ where, want string }{
		{"payload > 1.5", "run1.csv run3.csv"}, // as text, 10 is less than 2
		{"payload>=2", "run1.csv run3.csv"},
		{"payload < 2", "run4.csv"},
		{"payload <= 2", "run1.csv run4.csv"},
		{"payload = 2.0", "run1.csv"},
		{"payload == 2", "run1.csv"},
		{"payload != 2", "run3.csv run4.csv"},
		{`payload = ""`, "run2.csv"},
		{`payload != ""`, "run1.csv run3.csv run4.csv"},
		{`operator = "Bo, Li"`, "run2.csv"},
		{`operator has li`, "run2.csv"},
		{`"operator" != NA`, "run1.csv run2.csv run4.csv"},
		{`operator has "a"`, "run1.csv run3.csv"},
		{"operator = NaN", ""},
		{`digest = 0012`, "run2.csv"}, // text, since 1e999 is no number
		{`digest = 12`, ""},
	} {
		got, err := s.Where(c.where)
		if err != nil {
			t.Errorf("%s: %v", c.where, err)
		} else if text := got.cells(t, "file"); text != c.want {
			t.Errorf("%s: %s, want %s", c.where, text, c.want)
		}
	}
	for _, c := range []struct{ where, says string }{
		{"paylaod > 2", `did you mean "payload"?`},
		{"mass > 2", `the columns are "file"`},
		{"payload > two", `"two" is none`},
		{"payload > 2 kg", "no unit"},
		{"payload > inf", `"inf" is none`},
		{"payload has 2", "has looks into text"},
		{"operator > Ana", "compare it by ="},
		{`operator > ""`, "compare it by ="},
		{"payload", "there is no operator"},
		{"payload hasten", "there is no operator"},
		{"payload >", `"" is an empty cell`},
		{"> 3", "there is no column"},
		{"", "there is no column"},
		{`"payload > 2`, "not closed"},
		{`payload = "2`, "not closed"},
		{`payload = "2" or 3`, "more follows"},
	} {
		if _, err := s.Where(c.where); err == nil || !strings.Contains(err.Error(), c.says) || strings.Contains(err.Error(), "\n") {
			t.Errorf("%s: %v, want %q", c.where, err, c.says)
		}
	}
}

func TestSheetOrder(t *testing.T) {
	s := sheet(t, tests)
	for _, c := range []struct{ by, want string }{
		{"payload", "run4.csv run1.csv run3.csv run2.csv"},
		{"-payload", "run3.csv run1.csv run4.csv run2.csv"}, // what is not known stays last
		{"when", "run3.csv run2.csv run1.csv run4.csv"},
		{"- when", "run1.csv run2.csv run3.csv run4.csv"},
	} {
		got, err := s.Sort(c.by)
		if err != nil {
			t.Errorf("%s: %v", c.by, err)
		} else if text := got.cells(t, "file"); text != c.want {
			t.Errorf("%s: %s, want %s", c.by, text, c.want)
		}
	}
	// Three keys, all orders of 0 and 1 in them: the sorted rows count up.
	text := "a,b,-c,n\n"
	for _, n := range []int{5, 2, 7, 0, 3, 6, 1, 4, 2} {
		text += fmt.Sprintf("%d,%d,%d,%d\n", n/4, n/2%2, n%2, n)
	}
	for by, want := range map[string]string{"a,b,-c": "0 1 2 2 3 4 5 6 7", `-a, "b", - -c`: "5 4 7 6 1 0 3 2 2"} {
		got, err := sheet(t, text).Sort(by)
		if err != nil {
			t.Fatal(err)
		}
		if text := got.cells(t, "n"); text != want {
			t.Errorf("%s: %s, want %s", by, text, want)
		}
	}
	some, err := s.Select(`when, "file"`)
	if err != nil || !strings.HasPrefix(some.text(), "when,file\n2025-01-03,run1.csv\n") {
		t.Errorf("%v: %v", some, err)
	}
	for _, c := range []struct{ list, says string }{
		{"file,fiel", `did you mean "file"?`}, {"file,file", "stands twice"}, {"file,,when", "no list of columns"}, {"", "no list"}, {`"file`, "no list"}, {"file\nwhen", "no list"},
	} {
		if _, err := s.Select(c.list); err == nil || !strings.Contains(err.Error(), c.says) || strings.Contains(err.Error(), "\n") {
			t.Errorf("%q: %v, want %q", c.list, err, c.says)
		}
	}
	none, err := s.Where("payload > 1000")
	if err == nil {
		none, err = none.Sort("payload,-when")
	}
	if err != nil || none.text() != "file,payload,operator,digest,when\n" {
		t.Errorf("no rows: %v", err)
	}
}

func TestSheetJoin(t *testing.T) {
	s := NewSheet([]SheetColumn{{Name: "file"}, {Name: "rows", Number: true}, {Name: "model"}}, [][]string{
		{"run3.csv", "30", "m1"}, {"run9.csv", "90", ""}, {"run1.csv", "10", "m1"}, {"run3.csv", "30", "m2"}})
	both, alone, err := s.Join(sheet(t, "rows,file,operator\n5,run1.csv,0012\n6,run3.csv,\n7,run4.csv,x\n8,,y\n"), "file")
	if err != nil {
		t.Fatal(err)
	}
	if want := "file,rows,model,record.rows,operator\nrun3.csv,30,m1,6,\nrun9.csv,90,,,\nrun1.csv,10,m1,5,0012\nrun3.csv,30,m2,6,\n"; both.text() != want {
		t.Errorf("%q, want %q", both.text(), want)
	}
	if !slices.Equal(alone, []string{"run4.csv"}) {
		t.Errorf("without a row here: %q", alone)
	}
	if c, _, err := both.column("record.rows"); err != nil || !c.Number {
		t.Errorf("%+v: %v", c, err)
	}
	if other, _, err := s.Join(sheet(t, "Log,by\nrun9.csv,Ana\n"), "file=Log"); err != nil || other.cells(t, "by") != " Ana  " {
		t.Errorf("two names: %v", err)
	}
	for _, c := range []struct{ text, on, says string }{
		{"rows,x\n10,a\n", "rows", "join on text"},
		{"name,x\nrun1.csv,a\n", "file", `record: there is no column "file"`},
		{"file,x\nrun1.csv,a\n", "fiel", `did you mean "file"?`},
		{"file,x\nrun1.csv,a\nrun1.csv,b\n", "file", "stands twice"},
		{"file,rows,record.rows\nrun1.csv,1,2\n", "file", "would stand there twice"},
	} {
		if _, _, err := s.Join(sheet(t, c.text), c.on); err == nil || !strings.Contains(err.Error(), c.says) || strings.Contains(err.Error(), "\n") {
			t.Errorf("%q: %v, want %q", c.text, err, c.says)
		}
	}
}

func TestBadSheets(t *testing.T) {
	for _, c := range []struct{ name, text, says string }{
		{"nothing", "", "no line of names"},
		{"blank", "\n,,\n", "no line of names"},
		{"a name twice", "file,mass,file\n", "column 3: the name \"file\" again, which column 1 has"},
		{"no name", "file,\na,1\n", "column 2: a column without a name"},
		{"cells lost", "file,mass\na,1\n\nb\n", "line 4: 1 cell where 2 belong"},
		{"a quote", "file,mass\na,1\"2\n", "line 2, column"},
		{"an open quote", "file,mass\n\"a,1\n", "line 2"},
		{"a damaged packed file", "\x1f\x8b\x08\x00", "packed file"},
	} {
		_, err := ReadSheet(strings.NewReader(c.text), "record.csv")
		if err == nil || !strings.Contains(err.Error(), c.says) {
			t.Errorf("%s: %v, want %q", c.name, err, c.says)
			continue
		}
		checkParseError(t, err, "record.csv: ")
	}
	for _, c := range []struct{ head, text string }{{"", "x,"}, {"file,mass\n", "a,1\n"}, {"file\n\"", "x"}, {"", "\n"}} {
		var before, after runtime.MemStats
		runtime.ReadMemStats(&before)
		r := &repeated{head: c.head, text: c.text, size: 100 << 20}
		_, err := ReadSheet(r, "record.csv")
		runtime.ReadMemStats(&after)
		if err == nil {
			t.Errorf("%q for 100 MB: read", c.text)
			continue
		}
		checkParseError(t, err, "record.csv: ")
		if n := after.TotalAlloc - before.TotalAlloc; r.taken > 9<<20 || n > 64<<20 {
			t.Errorf("%q: %d bytes taken, %d allocated", c.text, r.taken, n)
		}
	}
}
