package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"os/signal"
	"strings"
	"syscall"

	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/ident"
)

// Exit statuses.
const (
	statusDone        = 0
	statusFault       = 1
	statusCall        = 2
	statusRefused     = 3
	statusInterrupted = 130
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	context.AfterFunc(ctx, stop) // a second signal ends the program at once
	os.Exit(run(ctx, os.Args[1:], os.Stdin, os.Stdout, os.Stderr))
}

// run executes one call and returns its exit status. It is the whole program but for the process around it.
func run(ctx context.Context, args []string, stdin io.Reader, stdout, stderr io.Writer) (status int) {
	defer func() {
		if p := recover(); p != nil {
			fmt.Fprintln(stderr, "steadyrig: fault in the tool:", oneLine(fmt.Sprint(p))+"; please report it with the command, the rig file and the log")
			status = statusFault
		}
	}()
	a := newApp(args, stdin, stdout, stderr)
	a.ctx = ctx
	root := newRoot(a)
	root.SetArgs(append([]string{}, args...)) // nil would mean the process's own
	root.SetIn(stdin)
	root.SetOut(stdout)
	root.SetErr(stderr)
	err := root.ExecuteContext(ctx)
	if err == nil {
		return statusDone
	}
	status = statusOf(err)
	switch status {
	case statusInterrupted:
		var left *stopped
		if !errors.As(err, &left) {
			err = errors.New("interrupted; no file was written")
		}
		fmt.Fprintln(stderr, "steadyrig:", err)
	case statusFault:
		fmt.Fprintln(stderr, "steadyrig: fault in the tool:", oneLine(err.Error()))
	default:
		fmt.Fprintln(stderr, "steadyrig:", oneLine(err.Error()))
	}
	return status
}

// A callError is a call or an input file that is wrong.
type callError struct{ err error }

func (e *callError) Error() string { return e.err.Error() }
func (e *callError) Unwrap() error { return e.err }

func callErrorf(format string, args ...any) error { return &callError{fmt.Errorf(format, args...)} }

// inputError marks an error of a reader as the input's fault; nil stays nil.
func inputError(err error) error {
	if err == nil {
		return nil
	}
	return &callError{err}
}

// statusOf says what an error means to the caller.
func statusOf(err error) int {
	var (
		call    *callError
		parse   *data.ParseError
		loops   *design.LoopsError
		refused *ident.RefusedError
		path    *fs.PathError
	)
	switch {
	case errors.Is(err, context.Canceled):
		return statusInterrupted
	case errors.As(err, &refused):
		return statusRefused
	case errors.As(err, &call), errors.As(err, &parse), errors.As(err, &loops), errors.As(err, &path):
		return statusCall
	}
	return statusFault
}

// oneLine keeps a message on one line whatever a library put into it.
func oneLine(s string) string { return strings.Join(strings.Fields(s), " ") }
