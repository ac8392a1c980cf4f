package rehearsal

import (
	"context"
	"fmt"

	"proofrate/instruments"
	"proofrate/instruments/virtual"
	"proofrate/limits"
	"proofrate/procedures"
	"proofrate/results"
	"proofrate/results/recording"
	"proofrate/sequencer/engine"
)

// Bench is a virtual bench that was opened for one trial.
type Bench struct {
	*instruments.Bench
	World *virtual.World
	Close func() error
}

// Config says what is rehearsed.
type Config struct {
	Plan  *procedures.Plan
	Open  func(ctx context.Context, seed uint64) (*Bench, error) // a freshly drawn bench, gyro included
	Slot  instruments.SlotID
	Gyros int
	Seed  uint64 // of the first trial; the others follow
	Done  func(trials int)
}

// trial is what one carrying-out came to.
type trial struct {
	seed       uint64
	evaluation *procedures.Evaluation
	truths     []truth // of the evaluation's figures, in their order
	bench      float64 // s
}

// truth is a figure element's, in the figure's unit. Reason says why there is none.
type truth struct {
	value  float64
	reason string
}

// memory keeps a run's recordings and nothing else.
type memory struct{ sink *recording.Memory }

func (m *memory) Note(results.Event) error { return nil }
func (m *memory) Sink(instruments.SlotID) (recording.Sink, error) {
	m.sink = recording.NewMemory()
	return m.sink, nil
}

// carryOut runs one trial and finds its truths.
func (c Config) carryOut(ctx context.Context, seed uint64) (t trial, err error) {
	bench, err := c.Open(ctx, seed)
	if err != nil {
		return t, err
	}
	defer func() {
		if failed := bench.Close(); err == nil {
			err = failed
		}
	}()
	bench.World.KeepTrace()
	recorder := &memory{}
	began := bench.Clock.Now()
	e := engine.New(engine.Config{Plan: c.Plan, Bench: bench.Bench, Recorder: recorder, Seed: seed,
		Trials: []engine.Trial{{Slot: c.Slot, Part: c.Plan.Part, Serial: fmt.Sprintf("rehearsed %d", seed)}}})
	outcome, err := e.Run(ctx)
	switch {
	case ctx.Err() != nil:
		return t, context.Cause(ctx)
	case err != nil:
		return t, fmt.Errorf("trial of seed %d: %w", seed, err)
	case outcome.Ended != engine.Completed:
		return t, fmt.Errorf("trial of seed %d ended as %s: %s", seed, outcome.Ended, outcome.Reason)
	}
	t = trial{seed: seed, evaluation: outcome.Trials[0].Evaluation, bench: outcome.BenchSeconds}
	knows := knower{plan: c.Plan, truth: bench.World.Truth(c.Slot), recordings: recorder.sink.Recordings(), began: began, sense: sense(bench.Description, c.Slot)}
	t.truths = knows.all(t.evaluation.Figures)
	return t, nil
}

func sense(d *instruments.Description, slot instruments.SlotID) float64 {
	for _, s := range d.Slots {
		if s.ID == slot {
			return s.Sense
		}
	}
	return 1
}

// verdicts counts a trial's verdicts by clause.
func (t trial) verdicts(count map[string]map[limits.Verdict]int) {
	worst := map[string]limits.Verdict{}
	for _, j := range t.evaluation.Judgements {
		worst[j.Clause] = max(worst[j.Clause], j.Verdict)
	}
	for clause, v := range worst {
		if count[clause] == nil {
			count[clause] = map[limits.Verdict]int{}
		}
		count[clause][v]++
	}
}
