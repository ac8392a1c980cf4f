package engine

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"strings"

	"proofrate/instruments"
	"proofrate/limits/quantity"
	"proofrate/procedures"
)

// power switches the gyros' supplies, all or one. A supply that does not come up ends that trial only.
type power struct {
	plain
	e     *Engine
	power procedures.Power
}

func (p *power) start(ctx context.Context) error {
	needs := p.e.cfg.Plan.Needs
	for _, s := range p.e.slots {
		if s.ended != "" || p.power.Slot != "" && p.power.Slot != s.id {
			continue
		}
		var err error
		switch {
		case !p.power.On:
			err = p.e.switchOff(ctx, s)
		case !s.powered:
			err = p.e.switchOn(ctx, s, needs.Voltage, needs.Current)
		}
		failure, atBench := errors.AsType[*instruments.Error](err)
		switch {
		case err == nil:
		case ctx.Err() != nil:
			return err
		case p.power.On && atBench && failure.Kind == instruments.Refused:
			p.e.endTrial(ctx, s, "power on: "+err.Error())
		default:
			return err
		}
	}
	return nil
}

func (p *power) tick(context.Context) (bool, error) { return true, nil }

// question waits for the operator. The loop goes on meanwhile: gyros are drained and guards hold. The goroutine ends
// with the answer or with the run's context.
type question struct {
	plain
	e        *Engine
	ask      procedures.Ask
	answered chan reply
	cancel   context.CancelFunc
}

type reply struct {
	text string
	err  error
}

func (q *question) start(ctx context.Context) error {
	if q.e.cfg.Operator == nil {
		return &instruments.Error{Op: "ask", Kind: instruments.Refused,
			Err: fmt.Errorf("%q needs an operator and nobody is there; run at a terminal", q.ask.Prompt)}
	}
	ctx, q.cancel = context.WithCancel(ctx)
	q.answered = make(chan reply, 1)
	go func() {
		text, err := q.e.cfg.Operator.Answer(ctx, q.ask)
		q.answered <- reply{text, err}
	}()
	return nil
}

func (q *question) tick(ctx context.Context) (bool, error) {
	var got reply
	if q.e.bench.Description.Virtual && q.e.bench.Description.Pace == 0 {
		// Nobody answers in virtual time: the virtual bench stands still until the person has.
		got = <-q.answered
	} else {
		select {
		case got = <-q.answered:
		default:
			return false, nil
		}
	}
	if got.err != nil {
		return false, got.err
	}
	if err := acceptable(q.ask, got.text); err != nil {
		q.e.note("answer refused", "", err.Error())
		q.cancel()
		q.ask.Prompt = err.Error() + " - " + q.ask.Prompt
		return false, q.start(ctx)
	}
	q.e.note("answer", "", fmt.Sprintf("%s: %s", q.ask.Prompt, strings.TrimSpace(got.text)))
	return true, nil
}

func (q *question) stop() {
	if q.cancel != nil {
		q.cancel()
	}
}

// acceptable says what is wrong with an answer.
func acceptable(q procedures.Ask, text string) error {
	text = strings.TrimSpace(text)
	switch q.Kind {
	case "confirmation":
		if !strings.EqualFold(text, "yes") {
			return fmt.Errorf("%q is no confirmation; answer yes, or stop the run with Ctrl-C", text)
		}
	case "number", "attitude":
		if _, err := quantity.ParseAs(text, q.Unit.Dimension()); err != nil {
			return fmt.Errorf("%w; give a number with its unit, such as 1 %s", err, q.Unit)
		}
	case "choice":
		if !slices.Contains(q.Choices, text) {
			return fmt.Errorf("%q is none of the choices: %s", text, strings.Join(q.Choices, ", "))
		}
	}
	return nil
}
