package engine

import (
	"context"
	"errors"
	"fmt"
	"runtime/debug"
	"sync/atomic"
	"time"

	"proofrate/instruments"
	"proofrate/procedures"
	"proofrate/results"
	"proofrate/results/recording"
)

// roundEvery is the time between two rounds of readings: guards are held against fresh ones twice a bench second.
const roundEvery = 500 * time.Millisecond

// Trial says which gyro sits in which slot.
type Trial struct {
	Slot         instruments.SlotID
	Part, Serial string
}

// Recorder keeps the evidence; the ledger's open run is one.
type Recorder interface {
	Note(results.Event) error
	Sink(instruments.SlotID) (recording.Sink, error)
}

// Operator is the person at the bench. Answer waits for the person or for ctx.
type Operator interface {
	Answer(ctx context.Context, question procedures.Ask) (string, error)
}

// Config is all that a run needs.
type Config struct {
	Plan     *procedures.Plan
	Bench    *instruments.Bench
	Trials   []Trial
	Recorder Recorder
	Operator Operator // nil: nobody is there, and a question stops the run
	Seed     uint64
}

// How a run ended.
const (
	Completed   = "completed"
	Stopped     = "stopped"
	BenchFailed = "bench-failed"
)

// Outcome is what a run came to.
type Outcome struct {
	Ended        string // Completed, Stopped or BenchFailed
	Reason       string // why, unless completed whole
	BenchSeconds float64
	Trials       []TrialOutcome
	Unsafe       []string // what could not be confirmed safe; empty when the bench is safe
}

// TrialOutcome is what one gyro's part came to.
type TrialOutcome struct {
	Slot       instruments.SlotID
	Evaluation *procedures.Evaluation
	Reason     string // why the trial ended early, or ""
}

// Engine carries out one run.
type Engine struct {
	cfg    Config
	bench  *instruments.Bench
	clock  instruments.Clock
	began  time.Time
	slots  []*slot
	watch  *watch
	table  tableState
	next   time.Time // of the next round
	place  place
	ahead  []time.Duration // estimated bench time of each top-level step
	status atomic.Pointer[Status]
}

// place is where the run stands, for messages and the status.
type place struct {
	top  int // index of the top-level step
	step procedures.Step
}

func (p place) String() string {
	if p.step.Text == "" {
		return ""
	}
	return fmt.Sprintf("step %d (%s)", p.step.Number, p.step.Text)
}

// New prepares a run; nothing moves until Run.
func New(cfg Config) *Engine {
	e := &Engine{cfg: cfg, bench: cfg.Bench, clock: cfg.Bench.Clock, ahead: cfg.Plan.Estimate(cfg.Bench.Description)}
	e.status.Store(&Status{})
	return e
}

// Run carries out the plan. The error is of the program or its storage; what happened at the bench is in the Outcome.
func (e *Engine) Run(ctx context.Context) (Outcome, error) {
	e.began = e.clock.Now()
	e.next = e.began
	out := Outcome{Ended: Completed}
	if err := e.seat(); err != nil {
		return out, err
	}
	failure := e.carryOut(ctx)
	out.Ended, out.Reason = e.ending(ctx, failure)
	e.cutSections(out.Reason)
	out.Unsafe = e.makeSafe(context.WithoutCancel(ctx))
	out.BenchSeconds = e.since(e.clock.Now())
	e.publish()
	return out, e.judge(&out)
}

// carryOut runs the steps. A panic is a fault of ours: it ends the run like any other failure, so that the bench is
// made safe, and its trace goes into the evidence, not to the screen.
func (e *Engine) carryOut(ctx context.Context) (failure error) {
	defer func() {
		if fault := recover(); fault != nil {
			e.note("fault", "", fmt.Sprintf("%v\n%s", fault, debug.Stack()))
			failure = &instruments.Error{Op: "carry out", Where: instruments.Where{Step: e.place.String()},
				Kind: instruments.Internal, Err: fmt.Errorf("%v; the trace is among the run's events", fault)}
		}
	}()
	if err := e.watch.first(ctx); err != nil {
		return err
	}
	whole := e.sequence(e.cfg.Plan.Steps, true)
	if err := whole.start(ctx); err != nil {
		return err
	}
	for {
		done, err := whole.tick(ctx)
		if err != nil || done || e.live() == 0 {
			whole.stop()
			return err
		}
		if err := e.pass(ctx, whole.due()); err != nil {
			whole.stop()
			return err
		}
	}
}

// pass lets time go by until the next round or until due, whichever is first, then drains and, when it is time,
// makes a round.
func (e *Engine) pass(ctx context.Context, due time.Time) error {
	until := e.next
	if !due.IsZero() && due.Before(until) {
		until = due
	}
	if now := e.clock.Now(); until.After(now) {
		if err := e.clock.Sleep(ctx, until.Sub(now)); err != nil {
			return err
		}
	}
	if err := e.drain(ctx); err != nil {
		return err
	}
	if e.clock.Now().Before(e.next) {
		return nil
	}
	if err := e.watch.round(ctx); err != nil {
		return err
	}
	e.publish()
	if e.next = e.next.Add(roundEvery); e.next.Before(e.clock.Now()) {
		e.next = e.clock.Now() // a round took longer than its turn: the next follows at once
	}
	return nil
}

// ending names what a failure amounts to.
func (e *Engine) ending(ctx context.Context, failure error) (ended, reason string) {
	switch {
	case failure == nil && e.live() == 0:
		return Completed, "ended early: no trial was left"
	case failure == nil:
		return Completed, ""
	case ctx.Err() != nil:
		return Stopped, context.Cause(ctx).Error()
	default:
		return BenchFailed, failure.Error()
	}
}

// judge evaluates every trial from its recordings. The bench is safe by now.
func (e *Engine) judge(out *Outcome) error {
	var failures []error
	for _, s := range e.slots {
		trial := TrialOutcome{Slot: s.id, Reason: s.ended}
		if trial.Reason == "" && out.Ended != Completed {
			trial.Reason = out.Reason
		}
		evaluation, err := e.cfg.Plan.Evaluate(context.Background(), s.sink.Recordings(), e.bench.Description, s.id, e.cfg.Seed)
		if err != nil {
			failures = append(failures, fmt.Errorf("slot %s: evaluate: %w", s.id, err))
		}
		trial.Evaluation = evaluation
		out.Trials = append(out.Trials, trial)
	}
	return errors.Join(failures...)
}

// patient lengthens a wait for an instrument to a second of the wall at least: on a virtual bench that is offered on
// ports at a pace, bench time runs on while this computer does something else for a moment.
func (e *Engine) patient(d time.Duration) time.Duration {
	return max(d, time.Duration(e.bench.Description.Pace*float64(time.Second)))
}

// since is bench time: seconds from the start of the run.
func (e *Engine) since(t time.Time) float64 { return t.Sub(e.began).Seconds() }

// note adds evidence. Storage that fails is found when the run is sealed or a recording is written; a run is not
// ended because a remark about it could not be kept.
func (e *Engine) note(kind string, slot instruments.SlotID, text string) {
	err := e.cfg.Recorder.Note(results.Event{At: e.since(e.clock.Now()), Kind: kind, Slot: slot, Step: e.place.String(), Text: text})
	if err != nil && e.watch != nil {
		e.watch.unnoted = err
	}
}
