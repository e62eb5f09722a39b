package main

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"io"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"runtime/debug"
	"slices"
	"strings"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/ident"
)

// samePeriod is the relative difference up to which two measured periods count as one.
const samePeriod = 1e-3

// open opens an input file; "-" is standard input.
func (a *app) open(path string) (io.ReadCloser, string, error) {
	if path == "-" {
		return io.NopCloser(a.stdin), "standard input", nil
	}
	f, err := data.Open(path, func(name string) (fs.File, error) { return os.Open(name) })
	return f, path, err
}

// load reads one input file with read and returns its bytes' SHA-256 in hex as well.
func load[T any](a *app, path string, read func(io.Reader, string) (T, error)) (T, string, error) {
	var none T
	f, name, err := a.open(path)
	if err != nil {
		return none, "", inputError(err)
	}
	defer f.Close()
	sum := sha256.New()
	v, err := read(io.TeeReader(f, sum), name)
	if err != nil {
		return none, "", inputError(err)
	}
	return v, hex.EncodeToString(sum.Sum(nil)), nil
}

func (a *app) rig(path string) (*data.Rig, error) {
	rig, _, err := load(a, path, data.ReadRig)
	return rig, err
}

// rigAndLogs reads a rig file and the logs that follow it.
func (a *app) rigAndLogs(args []string) (*data.Rig, []*data.Experiment, error) {
	rig, err := a.rig(args[0])
	if err != nil {
		return nil, nil, err
	}
	exps, err := a.logs(rig, args[1:])
	return rig, exps, err
}

// logs reads logs by their names or by patterns such as "run*.csv", which shells pass on where they stand in quotes.
func (a *app) logs(rig *data.Rig, names []string) ([]*data.Experiment, error) {
	paths, err := expand(names)
	if err != nil {
		return nil, err
	}
	var exps []*data.Experiment
	for _, path := range paths {
		exp, err := a.log(rig, path)
		if err != nil {
			return nil, err
		}
		if first := exp; len(exps) > 0 {
			first = exps[0]
			if math.Abs(exp.Period-first.Period) > samePeriod*first.Period {
				return nil, &data.ParseError{
					File: exp.File, Err: fmt.Errorf("sampled every %s, %s every %s", words.Seconds(exp.Period), first.File, words.Seconds(first.Period)),
					Hint: "fit logs of one period together",
				}
			}
		}
		for _, other := range exps {
			if exp.SHA256 == other.SHA256 {
				return nil, &data.ParseError{File: exp.File, Err: fmt.Errorf("the same bytes as %s", other.File), Hint: "give each log once: twice the same rows are no more evidence"}
			}
		}
		exps = append(exps, exp)
	}
	rows := 0
	for _, exp := range exps {
		rows += exp.Rows
	}
	if rows >= longLogs {
		debug.SetGCPercent(longGarbage)
	}
	return exps, nil
}

// Of logs of so many rows and more, the columns are most of the memory; garbage may then come to less of it than usual,
// and costs little to collect, since columns hold no pointers.
const (
	longLogs    = 1_000_000
	longGarbage = 25 // per cent of what is in use
)

// log reads one log, and shows how far it is.
func (a *app) log(rig *data.Rig, path string) (*data.Experiment, error) {
	f, name, err := a.open(path)
	if err != nil {
		return nil, inputError(err)
	}
	defer f.Close()
	in := &watched{Reader: f, bar: a.progress("read", a.quiet)}
	defer in.bar.wipe()
	if f, ok := f.(fs.File); ok {
		if info, err := f.Stat(); err == nil && info.Mode().IsRegular() {
			in.size = info.Size()
		}
	}
	exp, err := data.ReadLogContext(a.ctx, in, name, rig)
	return exp, inputError(err)
}

// watched is a reader that a bar follows.
type watched struct {
	io.Reader
	bar        *progress
	done, size int64 // size 0: unknown
}

func (w *watched) Read(p []byte) (int, error) {
	n, err := w.Reader.Read(p)
	w.done += int64(n)
	w.bar.step(int(w.done), int(w.size))
	return n, err
}

// Size returns how many bytes there are, where that is known.
func (w *watched) Size() int64 { return w.size }

// expand puts the files that a pattern matches in its place, by name; each file once. What is a file's name is no pattern.
func expand(names []string) ([]string, error) {
	var paths []string
	for _, name := range names {
		if _, err := os.Stat(name); err == nil || !strings.ContainsAny(name, "*?[") {
			paths = append(paths, name)
			continue
		}
		found, err := filepath.Glob(name)
		switch {
		case err != nil:
			return nil, callErrorf("%s: %w; write run*.csv, run?.csv or run[1-3].csv", name, err)
		case len(found) == 0:
			return nil, callErrorf("%s: no file matches; check the pattern and the folder", name)
		}
		for _, path := range found {
			if !slices.Contains(paths, path) {
				paths = append(paths, path)
			}
		}
	}
	return paths, nil
}

// rigAndModel reads a rig file and a model, and the model's SHA-256.
func (a *app) rigAndModel(args []string, s *settings) (*data.Rig, *ident.Model, string, error) {
	rig, err := a.rig(args[0])
	if err != nil {
		return nil, nil, "", err
	}
	model, sum, err := load(a, args[1], ident.ReadModel)
	if err != nil {
		return nil, nil, "", err
	}
	if model.Rig != rig.Name {
		a.warn(s, []string{fmt.Sprintf("%s is of rig %q, %s of rig %q", args[1], model.Rig, args[0], rig.Name)})
	}
	return rig, model, sum, nil
}

// sha256Of is the SHA-256 of a file that is about to be written.
func sha256Of(content []byte) string {
	sum := sha256.Sum256(content)
	return hex.EncodeToString(sum[:])
}

// rendered is what a result writes.
func rendered(write func(io.Writer) error) ([]byte, error) {
	var b bytes.Buffer
	err := write(&b)
	return b.Bytes(), err
}
