package engine

import (
	"context"
	"errors"
	"fmt"
	"os"
	"strings"
	"testing"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/bench"
	"proofrate/limits"
	"proofrate/limits/quantity"
	"proofrate/procedures"
	"proofrate/results"
	"proofrate/results/recording"
)

// memory keeps events and recordings.
type memory struct {
	events []results.Event
	sinks  map[instruments.SlotID]*recording.Memory
}

func (m *memory) Note(e results.Event) error { m.events = append(m.events, e); return nil }
func (m *memory) Sink(slot instruments.SlotID) (recording.Sink, error) {
	if m.sinks == nil {
		m.sinks = map[instruments.SlotID]*recording.Memory{}
	}
	m.sinks[slot] = recording.NewMemory()
	return m.sinks[slot], nil
}

func (m *memory) has(kind, text string) bool {
	for _, e := range m.events {
		if e.Kind == kind && strings.Contains(e.Text, text) {
			return true
		}
	}
	return false
}

// rig is a procedure on the shipped virtual bench, with what a test puts in between.
type rig struct {
	plan   *procedures.Plan
	bench  *instruments.Bench
	memory *memory
}

const head = `
procedure: test
title: A test
revision: A
applies-to: [OG-*]
rule: simple
gyro:  {family: optical, output: rate, range: 250 deg/s, sample-rate: 100 Hz, polarity: +}
needs: {table: 250 deg/s, chamber: -40 71 degC, supply: 5 V, current: 1.5 A}
`

const biasFigure = `
figures:
  bias: {is: bias, of: rest, unit: deg/h}
limits:
  - {clause: "1", figure: bias, between: -50 50 deg/h}
`

const steps = `
steps:
  - power: on
  - wait: 5 s
  - turn: 30 deg/s
  - wait: 5 s
  - hold: position
  - record: rest
    for: 10 s
`

func rigged(t testing.TB, document string) *rig {
	t.Helper()
	text, _ := bench.Shipped("virtual-bench")
	loaded, _, problems := bench.Load("virtual-bench", text, nil)
	if len(problems) > 0 {
		t.Fatal(problems)
	}
	p, _, problems := procedures.Load("test.yaml", []byte(document))
	if len(problems) > 0 {
		t.Fatal(problems)
	}
	plan, problems := p.Plan(procedures.Options{Part: "OG-250"})
	if len(problems) > 0 {
		t.Fatal(problems)
	}
	opened, err := bench.Open(context.Background(), loaded, 1)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { opened.Close() })
	return &rig{plan, opened.Bench, &memory{}}
}

func (r *rig) run(ctx context.Context) (Outcome, error) {
	var trials []Trial
	for _, s := range r.bench.Slots {
		trials = append(trials, Trial{Slot: s.ID, Part: "OG-250", Serial: string(s.ID)})
	}
	return New(Config{Plan: r.plan, Bench: r.bench, Trials: trials, Recorder: r.memory, Seed: 1}).Run(ctx)
}

// safe reads the bench itself: the table at rest, no voltage anywhere.
func (r *rig) safe(t *testing.T) {
	t.Helper()
	rate, err := instruments.Read(context.Background(), r.bench.Table, "table.rate")
	if err != nil || rate.Value.As(degPerS) > rateFloor || rate.Value.As(degPerS) < -rateFloor {
		t.Errorf("the table reads %v, %v", rate.Value, err)
	}
	for _, s := range r.bench.Slots {
		voltage, err := instruments.Read(context.Background(), s.Supply, "supply.voltage")
		if err != nil || voltage.Value.SI() > offVoltage {
			t.Errorf("slot %s reads %v, %v", s.ID, voltage.Value, err)
		}
	}
	if !r.memory.has("make safe", "confirmed") {
		t.Error("nothing says that the bench was made safe")
	}
}

func TestCompletedRunIsSafeAndWhole(t *testing.T) {
	r := rigged(t, head+steps+biasFigure)
	out, err := r.run(context.Background())
	if err != nil || out.Ended != Completed || len(out.Unsafe) > 0 || out.Reason != "" {
		t.Fatalf("%+v, %v", out, err)
	}
	r.safe(t)
	for _, trial := range out.Trials {
		if trial.Evaluation.Verdict != limits.Accept || trial.Reason != "" {
			t.Errorf("%+v", trial)
		}
	}
	for slot, sink := range r.memory.sinks {
		rest := sink.Recordings()[0]
		if rest.Len() != 1000 || !rest.Quality.Complete || rest.SincePowerOn < 10 || len(rest.Gaps) > 0 {
			t.Errorf("slot %s: %d samples, %+v", slot, rest.Len(), rest.Section)
		}
		for _, name := range []string{"table.rate", "table.position", "chamber.temperature", "gyro.temperature", "supply.current"} {
			if series, ok := rest.Series(name); !ok || len(series.At) < 18 {
				t.Errorf("slot %s: %d readings of %s during ten seconds", slot, len(series.At), name)
			}
		}
	}
}

// clock calls a function at its n-th sleep.
type clock struct {
	instruments.Clock
	left int
	do   func()
}

func (c *clock) Sleep(ctx context.Context, d time.Duration) error {
	if c.left--; c.left == 0 {
		c.do()
	}
	return c.Clock.Sleep(ctx, d)
}

var errTest = errors.New("stopped by the test")

// TestCancelledAnywhereIsSafe cancels at every sleep of the run, some forty moments, and holds the bench to be safe after each.
func TestCancelledAnywhereIsSafe(t *testing.T) {
	stopped := 0
	for n := 1; n < 60; n++ {
		r := rigged(t, head+steps+biasFigure)
		ctx, cancel := context.WithCancelCause(context.Background())
		r.bench.Clock = &clock{r.bench.Clock, n, func() { cancel(errTest) }}
		out, err := r.run(ctx)
		cancel(nil)
		if err != nil {
			t.Fatal(err)
		}
		if out.Ended == Completed {
			break
		}
		stopped++
		if out.Ended != Stopped || !strings.Contains(out.Reason, errTest.Error()) || len(out.Unsafe) > 0 {
			t.Fatalf("at sleep %d: %+v", n, out)
		}
		r.safe(t)
		for _, trial := range out.Trials {
			if trial.Evaluation == nil || trial.Evaluation.Verdict != limits.Void {
				t.Errorf("at sleep %d: %+v", n, trial)
			}
		}
	}
	if stopped < 30 {
		t.Errorf("the run was stopped at %d moments", stopped)
	}
}

// table stands between the engine and the bench's table.
type table struct {
	instruments.Table
	setRate func() error
	stop    func() error
}

func (d *table) SetRate(ctx context.Context, rate, accel quantity.Value) error {
	if d.setRate != nil {
		if err := d.setRate(); err != nil {
			return err
		}
	}
	return d.Table.SetRate(ctx, rate, accel)
}

func (d *table) Stop(ctx context.Context) error {
	if d.stop != nil {
		if err := d.stop(); err != nil {
			return err
		}
	}
	return d.Table.Stop(ctx)
}

func TestFailuresMakeSafe(t *testing.T) {
	refused := &instruments.Error{Op: "set rate", Kind: instruments.Refused, Err: errors.New("no")}
	for name, c := range map[string]struct {
		setRate func() error
		want    string
	}{
		"an instrument that refuses": {func() error { return refused }, "step 3 (turn 30 deg/s): set rate: refused: no"},
		"a panic":                    {func() error { panic("boom") }, "boom"},
	} {
		t.Run(name, func(t *testing.T) {
			r := rigged(t, head+steps+biasFigure)
			r.bench.Table = &table{Table: r.bench.Table, setRate: c.setRate}
			out, err := r.run(context.Background())
			if err != nil || out.Ended != BenchFailed || !strings.Contains(out.Reason, c.want) || len(out.Unsafe) > 0 {
				t.Fatalf("%+v, %v", out, err)
			}
			if strings.Contains(out.Reason, ".go:") {
				t.Errorf("a trace reaches people: %s", out.Reason)
			}
			r.safe(t)
		})
	}
}

// TestUnsafeIsSaid: a table that does not stop is reported, and the supplies are cut all the same.
func TestUnsafeIsSaid(t *testing.T) {
	r := rigged(t, head+steps+biasFigure)
	r.bench.Table = &table{Table: r.bench.Table, stop: func() error { return errors.New("the link is dead") }}
	out, err := r.run(context.Background())
	if err != nil || out.Ended != BenchFailed || len(out.Unsafe) != 1 || !strings.Contains(out.Unsafe[0], "table at rest: the link is dead") {
		t.Fatalf("%+v, %v", out, err)
	}
	for _, s := range r.bench.Slots {
		if voltage, err := instruments.Read(context.Background(), s.Supply, "supply.voltage"); err != nil || voltage.Value.SI() > offVoltage {
			t.Errorf("slot %s still reads %v, %v", s.ID, voltage.Value, err)
		}
	}
}

// current reads more than it should from a moment on.
type current struct {
	instruments.Supply
	clock instruments.Clock
	from  time.Time
	value float64
}

type answer struct{ instruments.Reading }

func (a answer) Take(context.Context) (instruments.Reading, error) { return a.Reading, nil }

func (c *current) Ask(ctx context.Context, reading string) (instruments.Pending, error) {
	if now := c.clock.Now(); reading == "supply.current" && !now.Before(c.from) {
		return answer{instruments.Reading{Name: reading, Value: quantity.Of(c.value, quantity.MustUnit("A")), At: now}}, nil
	}
	return c.Supply.Ask(ctx, reading)
}

// TestGuards: a slot's guard ends that trial and cuts its supply while the others go on; the bench's makes it safe.
func TestGuards(t *testing.T) {
	guards := "guards:\n  - require: supply.current < 1.4\n    tolerate: 1 s\n"
	r := rigged(t, head+guards+steps+biasFigure)
	r.bench.Slots[1].Supply = &current{r.bench.Slots[1].Supply, r.bench.Clock, r.bench.Clock.Now().Add(9 * time.Second), 1.7}
	out, err := r.run(context.Background())
	if err != nil || out.Ended != Completed {
		t.Fatalf("%+v, %v", out, err)
	}
	for i, trial := range out.Trials {
		want := limits.Accept
		if i == 1 {
			want = limits.Void
			if !strings.Contains(trial.Reason, `guard "supply.current < 1.4" is broken: supply.current = 1.7 A`) {
				t.Errorf("reason %q", trial.Reason)
			}
		}
		if trial.Evaluation.Verdict != want {
			t.Errorf("slot %s: %s, expected %s", trial.Slot, trial.Evaluation.Verdict, want)
		}
	}
	r.safe(t)

	r = rigged(t, head+"guards:\n  - require: abs(table.rate) < 20\n"+steps+biasFigure)
	out, err = r.run(context.Background())
	if err != nil || out.Ended != BenchFailed || !strings.Contains(out.Reason, `guard "abs(table.rate) < 20" is broken`) {
		t.Fatalf("%+v, %v", out, err)
	}
	r.safe(t)
}

// TestRejectionEndsTrials: a limit with ends-trial rejects at once; with nobody left the run ends.
func TestRejectionEndsTrials(t *testing.T) {
	r := rigged(t, head+`
steps:
  - power: on
  - wait: 5 s
  - stage: polarity
    each: {rate: 10 -10 deg/s}
    steps:
      - turn: rate
      - record: polarity
        for: 2 s
  - wait: 80 min
figures:
  polarity: {is: polarity, of: polarity}
limits:
  - {clause: "1", require: polarity == -1, otherwise: ends-trial}
`)
	out, err := r.run(context.Background())
	if err != nil || out.Ended != Completed || !strings.Contains(out.Reason, "no trial was left") || out.BenchSeconds > 600 {
		t.Fatalf("%+v, %v", out, err)
	}
	for _, trial := range out.Trials {
		if trial.Evaluation.Verdict != limits.Reject || !strings.Contains(trial.Reason, "clause 1 is not met") {
			t.Errorf("%+v", trial)
		}
	}
	r.safe(t)
}

// operator answers in turn.
type operator struct {
	answers []string
	asked   []string
}

func (o *operator) Answer(_ context.Context, q procedures.Ask) (string, error) {
	o.asked = append(o.asked, q.Prompt)
	if len(o.answers) == 0 {
		return "", errors.New("nobody is there")
	}
	text := o.answers[0]
	o.answers = o.answers[1:]
	return text, nil
}

func TestQuestions(t *testing.T) {
	document := head + `
steps:
  - ask: Is the gyro bolted down?
    for: confirmation
  - ask: What is the insulation?
    for: number
    unit: Mohm
  - power: on
  - wait: 5 s
  - record: rest
    for: 1 s
` + biasFigure
	for _, c := range []struct {
		answers []string
		ended   string
		asked   int
	}{
		{[]string{"yes", "120 Mohm"}, Completed, 2},
		{[]string{"no", "yes", "120", "120 V", "0.2 kohm"}, Completed, 5},
		{[]string{"yes"}, BenchFailed, 2},
	} {
		r := rigged(t, document)
		o := &operator{answers: c.answers}
		out, err := New(Config{Plan: r.plan, Bench: r.bench, Trials: []Trial{{Slot: "A"}}, Recorder: r.memory, Operator: o, Seed: 1}).Run(context.Background())
		if err != nil || out.Ended != c.ended || len(o.asked) != c.asked {
			t.Errorf("%v: %+v, %v, asked %q", c.answers, out, err, o.asked)
		}
		if c.ended == Completed && !r.memory.has("answer", "What is the insulation?: ") {
			t.Errorf("%v: the answer is no evidence", c.answers)
		}
	}
}

// TestTap: a window is counted in frames, lost ones included, from the first that lies whole after the start.
func TestTap(t *testing.T) {
	began := time.Unix(1000, 0)
	e := &Engine{began: began}
	batch := func(first uint64, arrived float64, counts []int64, gaps ...instruments.Gap) *instruments.Batch {
		return &instruments.Batch{First: first, Counts: [][]int64{counts}, Gaps: gaps, Arrived: began.Add(time.Duration(arrived * float64(time.Second)))}
	}
	for name, c := range map[string]struct {
		whole   bool
		want    uint64
		batches []*instruments.Batch
		counts  []int64
		gaps    []recording.Gap
		first   uint64
		start   float64
	}{
		"plain":         {false, 3, []*instruments.Batch{batch(10, 1.02, []int64{1, 2}), batch(12, 1.05, []int64{3, 4, 5})}, []int64{2, 3, 4}, nil, 11, 1.01},
		"from power-on": {true, 0, []*instruments.Batch{batch(7, 1.02, []int64{1, 2})}, []int64{1, 2}, nil, 7, 1.00},
		"a gap inside": {false, 5, []*instruments.Batch{batch(10, 1.06, []int64{1, 2, 3, 4}, instruments.Gap{Before: 2, Lost: 2}), batch(16, 1.08, []int64{5, 6})},
			[]int64{2, 3, 4}, []recording.Gap{{Before: 1, Lost: 2}}, 11, 1.01},
		"a gap between batches": {false, 4, []*instruments.Batch{batch(10, 1.02, []int64{1, 2}), batch(13, 1.05, []int64{3, 4}, instruments.Gap{Before: 0, Lost: 1})},
			[]int64{2, 3, 4}, []recording.Gap{{Before: 1, Lost: 1}}, 11, 1.01},
		"one sample at a time": {false, 2, []*instruments.Batch{batch(10, 1.01, []int64{1}), batch(11, 1.02, []int64{2}), batch(12, 1.03, []int64{3}), batch(13, 1.04, []int64{4})},
			[]int64{2, 3}, nil, 11, 1.01},
	} {
		t.Run(name, func(t *testing.T) {
			sink := recording.NewMemory()
			s := &slot{sink: sink, since: began}
			tp := &tap{e: e, slot: s, whole: c.whole, want: c.want, head: recording.Section{Name: "x", SampleInterval: 0.01, Channels: []recording.Channel{{Name: "rate"}}}}
			for _, b := range c.batches {
				if err := tp.take(b); err != nil {
					t.Fatal(err)
				}
			}
			if !tp.done {
				tp.cut("the test is over")
			}
			got := sink.Recordings()[0]
			if fmt.Sprint(got.Counts[0]) != fmt.Sprint(c.counts) || fmt.Sprint(got.Gaps) != fmt.Sprint(c.gaps) || got.First != c.first || got.Start < c.start-1e-6 || got.Start > c.start+1e-6 {
				t.Errorf("counts %v, gaps %v, first %d, start %g", got.Counts[0], got.Gaps, got.First, got.Start)
			}
			if got.Quality.Complete != (c.want > 0) {
				t.Errorf("%+v", got.Quality)
			}
		})
	}
}

// TestSteady: band, drift and hold of a settling reading.
func TestSteady(t *testing.T) {
	began := time.Unix(0, 0)
	settles := func(c criterion, value func(seconds float64) float64) float64 {
		s := steady{criterion: c}
		for at := 0.0; at < 4000; at += 0.5 {
			if s.add(began.Add(time.Duration(at*float64(time.Second))), value(at)) {
				return at
			}
		}
		return -1
	}
	c := criterion{target: 20, band: 1, drift: 0.01 / 60, hold: 100 * time.Second}
	if got := settles(c, func(float64) float64 { return 20.5 }); got < 220 || got > 222 { // two minutes to know the drift, then the hold
		t.Errorf("a constant reading settles at %g s", got)
	}
	if got := settles(c, func(s float64) float64 { return 20 + 0.02/60*s }); got != -1 {
		t.Errorf("a reading that drifts at twice the limit settles at %g s", got)
	}
	if got := settles(c, func(s float64) float64 { return 22 - 0.005*min(s, 400) }); got < 600 || got > 622 { // the line forgets the ramp within its two minutes
		t.Errorf("a reading that stops at 400 s settles at %g s", got)
	}
	if got := settles(criterion{target: 20, band: 1, drift: c.drift, hold: 0}, func(float64) float64 { return 22 }); got != -1 {
		t.Errorf("a reading outside the band settles at %g s", got)
	}
}

// TestTinyProcedure: the procedure that fast tests use is carried out whole.
func TestTinyProcedure(t *testing.T) {
	text, err := os.ReadFile("../../testdata/procedures/tiny-optical.yaml")
	if err != nil {
		t.Fatal(err)
	}
	r := rigged(t, string(text))
	out, err := r.run(context.Background())
	if err != nil || out.Ended != Completed {
		t.Fatalf("%+v, %v", out, err)
	}
	r.safe(t)
}
