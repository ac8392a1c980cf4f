package main

import (
	"bufio"
	"context"
	"fmt"
	"os"
	"strings"

	"github.com/spf13/cobra"
	"golang.org/x/term"

	"proofrate/procedures"
	"proofrate/sequencer/engine"
)

// keyboard is the operator at the terminal.
type keyboard struct {
	cmd   *cobra.Command
	lines chan string
}

// terminalOperator is nil where nobody can answer.
func terminalOperator(cmd *cobra.Command) engine.Operator {
	if f, ok := cmd.InOrStdin().(*os.File); ok && !term.IsTerminal(int(f.Fd())) {
		if info, err := f.Stat(); err != nil || info.Mode()&os.ModeNamedPipe == 0 {
			return nil
		}
	}
	return &keyboard{cmd: cmd}
}

// Answer asks once. A read from a terminal cannot be called off, so one goroutine reads all lines; it ends with the
// process.
func (k *keyboard) Answer(ctx context.Context, q procedures.Ask) (string, error) {
	if k.lines == nil {
		k.lines = make(chan string)
		go func() {
			in := bufio.NewScanner(k.cmd.InOrStdin())
			for in.Scan() {
				k.lines <- in.Text()
			}
			close(k.lines)
		}()
	}
	fmt.Fprintf(k.cmd.ErrOrStderr(), "\n%s %s ", q.Prompt, expected(q))
	select {
	case <-ctx.Done():
		return "", context.Cause(ctx)
	case line, ok := <-k.lines:
		if !ok {
			return "", fmt.Errorf("nobody answered %q: the input has ended", q.Prompt)
		}
		return strings.TrimSpace(line), nil
	}
}

func expected(q procedures.Ask) string {
	switch q.Kind {
	case "confirmation":
		return "[yes]"
	case "choice":
		return "[" + strings.Join(q.Choices, " | ") + "]"
	}
	return "[in " + q.Unit.String() + "]"
}
