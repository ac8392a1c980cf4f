package engine

import (
	"context"
	"errors"
	"fmt"
	"time"

	"proofrate/instruments"
	"proofrate/procedures"
)

// machine is a step being carried out.
type machine interface {
	start(ctx context.Context) error
	tick(ctx context.Context) (done bool, err error)
	stop()          // cut short or done: let go of what is held
	due() time.Time // when it wants its next tick; zero: after the next round
}

// plain is what a machine without needs of its own embeds.
type plain struct{}

func (plain) stop()          {}
func (plain) due() time.Time { return time.Time{} }

// machine makes the machine of a step.
func (e *Engine) machine(s procedures.Step) machine {
	switch a := s.Action.(type) {
	case procedures.Soak:
		return &soak{e: e, soak: a}
	case procedures.Settle:
		return &settle{e: e, ask: a}
	case procedures.Turn:
		return &turn{e: e, rate: a.Rate}
	case procedures.Hold:
		return &hold{e: e}
	case procedures.Position:
		return &position{e: e, angle: a.Angle}
	case procedures.Power:
		return &power{e: e, power: a}
	case procedures.Wait:
		return &wait{e: e, length: a.For}
	case procedures.Record:
		return &record{e: e, step: s, ask: a}
	case procedures.Ask:
		return &question{e: e, ask: a}
	case procedures.Park:
		return &park{e: e, target: a.Temperature}
	}
	panic(fmt.Sprintf("engine: no machine for step %T; the plan and the engine are of different builds", s.Action))
}

// sequence carries out steps one after the other.
type sequence struct {
	e       *Engine
	steps   []procedures.Step
	top     bool // the plan's own steps, whose progress the status tells
	at      int
	current machine
}

func (e *Engine) sequence(steps []procedures.Step, top bool) *sequence {
	return &sequence{e: e, steps: steps, top: top}
}

func (q *sequence) start(ctx context.Context) error { return q.begin(ctx) }

// begin starts the step at hand.
func (q *sequence) begin(ctx context.Context) error {
	if q.at >= len(q.steps) {
		return nil
	}
	step := q.steps[q.at]
	q.e.place.step = step
	if q.top {
		q.e.place.top = q.at
	}
	q.e.note("step", "", "begins")
	q.current = q.e.machine(step)
	return q.placed(q.current.start(ctx))
}

// tick goes on to the next step in the same moment, so that no time is lost between steps.
func (q *sequence) tick(ctx context.Context) (bool, error) {
	for q.at < len(q.steps) {
		if q.top && q.e.live() == 0 {
			return true, nil
		}
		done, err := q.current.tick(ctx)
		if err != nil || !done {
			return false, q.placed(err)
		}
		q.current.stop()
		q.at++
		if err := q.begin(ctx); err != nil {
			return false, err
		}
	}
	return true, nil
}

func (q *sequence) stop() {
	if q.current != nil && q.at < len(q.steps) {
		q.current.stop()
	}
}

func (q *sequence) due() time.Time {
	if q.at >= len(q.steps) || q.current == nil {
		return time.Time{}
	}
	return q.current.due()
}

// placed adds the step to a failure that does not name one yet.
func (q *sequence) placed(err error) error {
	if err == nil {
		return nil
	}
	if failure, ok := errors.AsType[*instruments.Error](err); ok && failure.Where.Step == "" {
		failure.Where.Step = q.e.place.String()
	}
	return err
}

// wait lets time pass.
type wait struct {
	plain
	e      *Engine
	length time.Duration
	end    time.Time
}

func (w *wait) start(context.Context) error {
	w.end = w.e.clock.Now().Add(w.length)
	return nil
}

func (w *wait) tick(context.Context) (bool, error) { return !w.e.clock.Now().Before(w.end), nil }
func (w *wait) due() time.Time                     { return w.end }

// spoken says a length of time as people do.
func spoken(d time.Duration) string {
	switch {
	case d >= time.Hour && d%time.Hour == 0:
		return fmt.Sprintf("%d h", d/time.Hour)
	case d >= time.Minute && d%time.Minute == 0:
		return fmt.Sprintf("%d min", d/time.Minute)
	}
	return fmt.Sprintf("%.4g s", d.Seconds())
}
