// Command proofrate takes a gyro from "built" to "accepted" and keeps the proof.
//
// The files here parse flags, call, print, and turn an error into an exit code; what is done stands in the packages.
package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"syscall"

	"github.com/spf13/cobra"

	"proofrate/limits/source"
)

func main() { os.Exit(proofrate(os.Args[1:], os.Stdout, os.Stderr)) }

// Exit codes.
const (
	exitAccepted    = 0 // all accepted
	exitNotAccepted = 1 // some trial rejected, undecided or void
	exitInput       = 2 // the inputs are wrong; nothing was touched
	exitStopped     = 3 // the bench failed or the run was stopped; the bench was made safe
	exitUnsafe      = 4 // the bench could not be confirmed safe
)

// exit is an error that carries the code to end with. Its message has been said already when it is empty.
type exit struct {
	code int
	err  error
}

func (e exit) Error() string {
	if e.err == nil {
		return ""
	}
	return e.err.Error()
}
func (e exit) Unwrap() error { return e.err }

// errOperator is the cause of a run that a person ended.
var errOperator = errors.New("interrupted from the keyboard or by a signal")

// proofrate runs one command. The first signal stops what is going on; a second one is said to be heard already.
func proofrate(args []string, stdout, stderr io.Writer) int {
	ctx, cancel := context.WithCancelCause(context.Background())
	defer cancel(nil)
	signals := make(chan os.Signal, 4)
	signal.Notify(signals, os.Interrupt, syscall.SIGTERM)
	defer signal.Stop(signals)
	go func() { // ends with the process
		for n := 0; ; n++ {
			<-signals
			if n > 0 {
				fmt.Fprintln(stderr, "\nheard; the bench is being made safe, which is not cut short")
			}
			cancel(errOperator)
		}
	}()

	root := &cobra.Command{
		Use:   "proofrate",
		Short: "Proves gyros against their specification and keeps the evidence",
		Long: `proofrate is the program of a gyro acceptance line: it carries out a procedure on a bench, reduces the
recordings to figures with uncertainty, judges the limits, and seals the result in a ledger.`,
		SilenceErrors: true, SilenceUsage: true,
	}
	root.CompletionOptions.HiddenDefaultCmd = true
	for _, add := range commands {
		root.AddCommand(add())
	}
	root.SetArgs(args)
	root.SetOut(stdout)
	root.SetErr(stderr)
	return code(root.ExecuteContext(ctx), stderr)
}

// commands is the table of verbs.
var commands = []func() *cobra.Command{
	runCommand, checkCommand, reduceCommand, historyCommand, showCommand, virtualCommand, probeCommand, rehearseCommand,
}

// code says an error once and gives the exit code: what carries none is wrong input.
func code(err error, stderr io.Writer) int {
	if err == nil {
		return exitAccepted
	}
	if text := err.Error(); text != "" {
		fmt.Fprintln(stderr, "proofrate: "+text)
	}
	if e, ok := errors.AsType[exit](err); ok {
		return e.code
	}
	return exitInput
}

// refuse prints diagnostics, to stdout as JSON where that was asked for, and ends with exitInput.
func refuse(cmd *cobra.Command, asJSON bool, list source.List, files ...*source.File) error {
	if asJSON {
		if err := printJSON(cmd, map[string]any{"diagnostics": list.MarshalFor(files...)}); err != nil {
			return err
		}
	} else {
		list.Render(cmd.ErrOrStderr(), files...)
	}
	return exit{code: exitInput}
}
