package main

import (
	"go/parser"
	"go/token"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
)

// ranks orders the rooms: a package may import packages of its own room and of rooms of a lower rank.
var ranks = map[string]int{"data": 0, "fit": 1, "ident": 2, "design": 3, "cmd": 4}

const module = "steadyrig"

// onlyInCmd are packages that read flags, files and clocks, or draw: they belong to the person's room. A prefix
// stands for all packages below it.
var onlyInCmd = []string{"os", "log", "flag", "github.com/spf13/cobra", "github.com/spf13/pflag", "gonum.org/v1/plot"}

// importFault says what is wrong with an import in a folder of the module, or nothing. Tests may import upward, and
// may read files.
func importFault(dir string, test bool, path string) string {
	room, _, _ := strings.Cut(dir, "/")
	rank, known := ranks[room]
	under := func(prefix string) bool { return path == prefix || strings.HasPrefix(path, prefix+"/") }
	switch {
	case !known:
		return "the folder is no room: choose data, fit, ident, design or cmd"
	case path == "math/rand":
		return "math/rand has a global state: use math/rand/v2 with a source passed in"
	case under("golang.org/x/sync") && room != "ident" && room != "design":
		return "work is spread over cores in ident and design only"
	}
	for _, p := range onlyInCmd {
		if under(p) && room != "cmd" && !(test && p != "github.com/spf13/cobra" && p != "gonum.org/v1/plot") {
			return "only cmd may import " + p
		}
	}
	if !under(module) {
		return ""
	}
	if dir == "fit/lti" && !test {
		return "fit/lti imports nothing of ours"
	}
	other, _, _ := strings.Cut(strings.TrimPrefix(path, module+"/"), "/")
	otherRank, known := ranks[other]
	switch {
	case !known:
		return "it imports a folder that is no room"
	case otherRank > rank && !test:
		return room + " may not import " + other + ": imports go data <- fit <- ident <- design <- cmd"
	}
	return ""
}

func TestImportDirection(t *testing.T) {
	root := moduleRoot(t, sourceFolder)
	files := 0
	err := filepath.WalkDir(root, func(name string, d fs.DirEntry, err error) error {
		switch {
		case err != nil:
			return err
		case d.IsDir() && name != root && (strings.HasPrefix(d.Name(), ".") || d.Name() == "testdata"):
			return filepath.SkipDir
		case d.IsDir() || filepath.Ext(name) != ".go":
			return nil
		}
		f, err := parser.ParseFile(token.NewFileSet(), name, nil, parser.ImportsOnly)
		if err != nil {
			return err
		}
		files++
		rel, err := filepath.Rel(root, name)
		if err != nil {
			return err
		}
		rel = filepath.ToSlash(rel)
		for _, spec := range f.Imports {
			imported, err := strconv.Unquote(spec.Path.Value)
			if err != nil {
				return err
			}
			if fault := importFault(path.Dir(rel), strings.HasSuffix(rel, "_test.go"), imported); fault != "" {
				t.Errorf("%s imports %s: %s", rel, imported, fault)
			}
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	if files < 50 {
		t.Errorf("only %d files were looked at, from %s", files, root)
	}
}

func TestImportFaults(t *testing.T) {
	for _, c := range []struct {
		dir   string
		test  bool
		path  string
		fault bool
	}{
		{"data", false, "steadyrig/fit", true},
		{"fit", false, "steadyrig/ident", true},
		{"fit", false, "steadyrig/data", false},
		{"fit/demorig", false, "steadyrig/fit/lti", false},
		{"fit/demorig", false, "steadyrig/design", true},
		{"fit/lti", false, "steadyrig/fit", true},
		{"fit/lti", false, "gonum.org/v1/gonum/mat", false},
		{"ident", false, "steadyrig/design", true},
		{"ident", true, "steadyrig/design", false},
		{"design", false, "steadyrig/ident", false},
		{"design", false, "steadyrig/cmd/steadyrig/report", true},
		{"cmd/steadyrig", false, "steadyrig/design", false},
		{"cmd/steadyrig", false, "os", false},
		{"data", false, "os", true},
		{"data", true, "os", false},
		{"ident", false, "log/slog", true},
		{"design", false, "gonum.org/v1/plot/vg", true},
		{"design", true, "gonum.org/v1/plot/vg", true},
		{"ident", false, "math/rand", true},
		{"ident", true, "math/rand", true},
		{"ident", false, "math/rand/v2", false},
		{"fit", false, "golang.org/x/sync/errgroup", true},
		{"ident", false, "golang.org/x/sync/errgroup", false},
		{"util", false, "fmt", true},
		{"cmd/steadyrig", false, "steadyrig/util", true},
	} {
		if fault := importFault(c.dir, c.test, c.path); (fault != "") != c.fault {
			t.Errorf("%s (test: %v) imports %s: fault %q, want one: %v", c.dir, c.test, c.path, fault, c.fault)
		}
	}
}

// moduleRoot finds the folder of go.mod above dir.
func moduleRoot(t *testing.T, dir string) string {
	t.Helper()
	for ; ; dir = filepath.Dir(dir) {
		if _, err := os.Stat(filepath.Join(dir, "go.mod")); err == nil {
			return dir
		}
		if dir == filepath.Dir(dir) {
			t.Fatal("no go.mod above the test")
		}
	}
}
