package main

import (
	"context"
	"io"
	"os"
	"runtime/debug"
	"strconv"
	"strings"
	"time"
)

// app is what a call has to do with the outside: its streams, the clock, its own name and words.
type app struct {
	args   []string
	stdin  io.Reader
	stdout io.Writer
	stderr io.Writer
	now    time.Time
	tool   string // name and version, as files carry it
	ctx    context.Context
	quiet  bool // no progress
}

func newApp(args []string, stdin io.Reader, stdout, stderr io.Writer) *app {
	a := &app{args: args, stdin: stdin, stdout: stdout, stderr: stderr, now: time.Now(), tool: "steadyrig " + version(), ctx: context.Background()}
	if s, err := strconv.ParseInt(os.Getenv("SOURCE_DATE_EPOCH"), 10, 64); err == nil {
		a.now = time.Unix(s, 0).UTC()
	}
	return a
}

// made is the time stamp that files carry.
func (a *app) made() string { return a.now.Format(time.RFC3339) }

// command is the call as a shell would take it again.
func (a *app) command() string {
	words := []string{"steadyrig"}
	for _, w := range a.args {
		words = append(words, shellWord(w))
	}
	return strings.Join(words, " ")
}

// shellWord quotes a word where a shell would take it apart.
func shellWord(w string) string {
	plain := func(r rune) bool {
		return r >= 'a' && r <= 'z' || r >= 'A' && r <= 'Z' || r >= '0' && r <= '9' || strings.ContainsRune("-_./=:,+@%", r) || r > 127
	}
	if w != "" && strings.IndexFunc(w, func(r rune) bool { return !plain(r) }) < 0 {
		return w
	}
	return "'" + strings.ReplaceAll(w, "'", `'\''`) + "'"
}

// version tells the build: the module's version, or the revision that it was built from.
func version() string {
	info, ok := debug.ReadBuildInfo()
	if !ok {
		return "unknown version"
	}
	v := strings.Trim(info.Main.Version, "()")
	if v == "" {
		v = "devel"
	}
	for _, s := range info.Settings {
		if s.Key == "vcs.revision" && len(s.Value) >= 12 && !strings.Contains(v, s.Value[:12]) {
			v += " " + s.Value[:12]
		}
	}
	return v
}

// onTerminal reports whether what is written to w is seen as it is written.
func onTerminal(w io.Writer) bool {
	f, ok := w.(*os.File)
	if !ok || os.Getenv("TERM") == "dumb" {
		return false
	}
	info, err := f.Stat()
	return err == nil && info.Mode()&os.ModeCharDevice != 0
}

// inColour reports whether w may be given colour.
func inColour(w io.Writer) bool { return os.Getenv("NO_COLOR") == "" && onTerminal(w) }
