package main

import (
	"context"
	"fmt"
	"io"
	"math"
	"os"
	"strings"
	"time"

	"golang.org/x/term"

	"proofrate/instruments"
	"proofrate/sequencer/engine"
)

// watched runs the engine and shows its status meanwhile: a block redrawn in place on a terminal, else a line a step.
func watched(ctx context.Context, e *engine.Engine, out io.Writer, wall instruments.Clock) (engine.Outcome, error) {
	type ending struct {
		outcome engine.Outcome
		err     error
	}
	ended := make(chan ending, 1)
	go func() { // ends with the run
		outcome, err := e.Run(ctx)
		ended <- ending{outcome, err}
	}()
	show := lineByStep(out)
	if f, ok := out.(*os.File); ok && term.IsTerminal(int(f.Fd())) {
		show = redrawn(f)
	}
	ticks := time.NewTicker(200 * time.Millisecond)
	defer ticks.Stop()
	for {
		select {
		case end := <-ended:
			show(e.Status())
			return end.outcome, end.err
		case <-ticks.C:
			show(e.Status())
		}
	}
}

// lineByStep writes a line when the top-level step is another than before, for logs and pipes.
func lineByStep(out io.Writer) func(*engine.Status) {
	shown := 0
	return func(s *engine.Status) {
		if s.Number == shown || s.Steps == 0 {
			return
		}
		shown = s.Number
		fmt.Fprintf(out, "%s  step %d of %d  %s\n", clock(s.Done), s.Number, s.Steps, headline(s))
	}
}

// redrawn keeps a block of lines up to date on a terminal.
func redrawn(out *os.File) func(*engine.Status) {
	drawn := 0
	return func(s *engine.Status) {
		if s.Steps == 0 {
			return
		}
		width, _, err := term.GetSize(int(out.Fd()))
		if err != nil || width < 20 {
			width = 80
		}
		var b strings.Builder
		if drawn > 0 {
			fmt.Fprintf(&b, "\x1b[%dA", drawn)
		}
		lines := block(s)
		for _, line := range lines {
			if cells := []rune(line); len(cells) >= width {
				line = string(cells[:width-1])
			}
			b.WriteString("\x1b[2K" + line + "\n")
		}
		drawn = len(lines)
		io.WriteString(out, b.String())
	}
}

// block is the picture of a run at a moment.
func block(s *engine.Status) []string {
	lines := []string{
		fmt.Sprintf("step %d of %d  %s", s.Number, s.Steps, headline(s)),
		fmt.Sprintf("bench time %s done, about %s left    table %s    chamber %s",
			clock(s.Done), clock(s.Left), number(s.TableRate, "%+.3f deg/s"), number(s.ChamberTemperature, "%+.2f degC")),
	}
	for _, slot := range s.Slots {
		lines = append(lines, fmt.Sprintf("  slot %-6s %-14s %s %s  %s", slot.Slot, slot.Serial,
			number(slot.Temperature, "%+7.2f degC"), number(slot.Current, "%6.3f A"), slot.State))
	}
	return lines
}

func headline(s *engine.Status) string {
	if s.Stage == "" {
		return s.Step
	}
	return s.Stage + ": " + s.Step
}

func number(x float64, format string) string {
	if math.Abs(x) < 0.0005 {
		x = 0 // no -0.000
	}
	text := fmt.Sprintf(format, x)
	if math.IsNaN(x) {
		return strings.Repeat(" ", max(0, len(text)-1)) + "-"
	}
	return text
}

// clock shows bench time as hours, minutes and seconds.
func clock(d time.Duration) string {
	s := int(d.Seconds())
	return fmt.Sprintf("%02d:%02d:%02d", s/3600, s/60%60, s%60)
}
