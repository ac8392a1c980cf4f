package engine

import (
	"context"
	"fmt"
	"math"
	"slices"
	"time"

	"proofrate/instruments"
	"proofrate/limits"
	"proofrate/limits/quantity"
	"proofrate/procedures"
	"proofrate/results/recording"
)

// silence is how long a powered gyro may send nothing during a recording. Issue of common practice: two seconds are
// two hundred frames at 100 Hz, far beyond any pause of a link that works.
const silence = 2 * time.Second

// tap cuts one recording out of a slot's stream.
//
// A window is counted in frames, lost ones included: it starts at the first frame that lies whole after the step's
// start and spans want counters, so that its length in time does not depend on what was lost.
type tap struct {
	e     *Engine
	slot  *slot
	head  recording.Section
	want  uint64 // counters; 0: until cut
	whole bool   // take the very first frame too: recording from power-on

	id    int
	open  bool
	begun uint64 // counter of the first sample
	lost  uint64
	bad   uint64 // the slot's damaged frames at the start
	done  bool
	why   string // it ended incomplete
}

// take appends the part of the batch that belongs to the recording.
func (t *tap) take(b *instruments.Batch) error {
	n := b.Len()
	if t.done || n == 0 {
		return nil
	}
	counters := counterOf(b)
	from := 0
	if !t.open {
		if !t.whole {
			from = 1 // this frame's interval began before the step did
		}
		if from >= n {
			t.whole = true
			return nil
		}
		if err := t.begin(b, counters, from); err != nil {
			return err
		}
	}
	to := n
	if t.want > 0 {
		for to > from && counters(to-1) >= t.begun+t.want {
			to--
		}
	}
	if err := t.append(b, from, to); err != nil {
		return err
	}
	if t.want > 0 && counters(n-1)+1 >= t.begun+t.want {
		return t.finish(recording.Quality{Complete: true})
	}
	return nil
}

// counterOf gives the counter of a sample of the batch; gaps are few.
func counterOf(b *instruments.Batch) func(i int) uint64 {
	return func(i int) uint64 {
		c := b.First + uint64(i)
		for _, g := range b.Gaps {
			if g.Before <= i && g.Before > 0 {
				c += g.Lost
			}
		}
		return c
	}
}

func (t *tap) begin(b *instruments.Batch, counters func(int) uint64, from int) (err error) {
	t.begun = counters(from)
	t.head.First = t.begun
	last := counters(b.Len() - 1)
	interval := t.head.SampleInterval
	t.head.Start = t.e.since(b.Arrived) - float64(last-t.begun+1)*interval
	t.head.SincePowerOn = t.head.Start - t.e.since(t.slot.since)
	t.id, err = t.slot.sink.Begin(t.head)
	t.open, t.bad = true, t.slot.bad
	return err
}

func (t *tap) append(b *instruments.Batch, from, to int) error {
	if to <= from {
		return nil
	}
	counts := make([][]int64, len(b.Counts))
	for c := range b.Counts {
		counts[c] = b.Counts[c][from:to]
	}
	var gaps []recording.Gap
	for _, g := range b.Gaps {
		if g.Before > from && g.Before < to {
			gaps = append(gaps, recording.Gap{Before: g.Before - from, Lost: g.Lost})
			t.lost += g.Lost
		} else if g.Before == from && from == 0 && t.begun != b.First {
			gaps = append(gaps, recording.Gap{Before: 0, Lost: g.Lost})
			t.lost += g.Lost
		}
	}
	return t.slot.sink.Append(t.id, counts, gaps)
}

func (t *tap) finish(q recording.Quality) error {
	t.done, t.why = true, q.Reason
	if !t.open { // nothing came: the recording that is missing makes its figures void
		return nil
	}
	q.Lost, q.Damaged = t.lost, t.slot.bad-t.bad
	return t.slot.sink.End(t.id, q)
}

// cut ends the recording before its time.
func (t *tap) cut(reason string) {
	if !t.done {
		t.finish(recording.Quality{Reason: reason})
	}
}

// reading puts a bench reading beside the samples if it was taken during them.
func (t *tap) reading(name string, unit quantity.Unit, at, value float64) error {
	if !t.open || t.done || at < t.head.Start || math.IsNaN(value) {
		return nil
	}
	return t.slot.sink.Reading(t.id, name, unit, at, value)
}

// record records every live slot: for a time, or for as long as inner steps take.
type record struct {
	e     *Engine
	step  procedures.Step
	ask   procedures.Record
	inner *sequence
	taps  []*tap
	begun time.Time
}

func (r *record) start(ctx context.Context) error {
	r.begun = r.e.clock.Now()
	interval := 1 / r.e.cfg.Plan.Gyro.SampleRate.SI()
	for _, s := range r.e.slots {
		if s.ended != "" {
			continue
		}
		t := &tap{e: r.e, slot: s, whole: r.ask.FromPowerOn, head: recording.Section{Name: r.ask.Name, Step: r.e.place.String(),
			Labels: r.step.Labels, Leg: r.step.Leg, SampleInterval: interval, Channels: channels(s.Gyro)}}
		if len(r.ask.While) == 0 {
			t.want = max(1, uint64(math.Round(r.ask.For.Seconds()/interval)))
		}
		r.taps, s.taps = append(r.taps, t), append(s.taps, t)
	}
	if len(r.ask.While) == 0 {
		return nil
	}
	r.inner = r.e.sequence(r.ask.While, false)
	return r.inner.start(ctx)
}

func channels(g instruments.Gyro) []recording.Channel {
	var list []recording.Channel
	for _, c := range g.Channels() {
		list = append(list, recording.Channel{Name: c.Name, Count: c.Count})
	}
	return list
}

func (r *record) tick(ctx context.Context) (bool, error) {
	done := true
	if r.inner != nil {
		var err error
		if done, err = r.inner.tick(ctx); err != nil {
			return false, err
		}
	}
	for _, t := range r.taps {
		if r.inner == nil && !t.done && t.slot.ended == "" {
			done = false
			r.listen(ctx, t)
		}
	}
	if !done {
		return false, nil
	}
	r.e.place.step = r.step
	for _, t := range r.taps {
		if !t.done {
			if err := t.finish(recording.Quality{Complete: true}); err != nil {
				return false, err
			}
		}
	}
	return true, r.judgeEarly(ctx)
}

// listen ends the trial of a gyro that has gone silent.
func (r *record) listen(ctx context.Context, t *tap) {
	heard := r.begun
	if t.slot.last.After(heard) {
		heard = t.slot.last
	}
	if r.e.clock.Now().Sub(heard) > r.e.patient(silence) {
		r.e.endTrial(ctx, t.slot, fmt.Sprintf("the gyro has sent no valid sample for %s during the recording %q", spoken(r.e.patient(silence)), r.ask.Name))
	}
}

// judgeEarly ends the trials that a limit with `otherwise: ends-trial` rejects.
func (r *record) judgeEarly(ctx context.Context) error {
	if !slices.ContainsFunc(r.e.cfg.Plan.Limits, func(l procedures.Limit) bool { return l.EndsTrial }) {
		return nil
	}
	for _, s := range r.e.slots {
		if s.ended != "" {
			continue
		}
		for _, j := range r.e.cfg.Plan.Early(ctx, s.sink.Recordings(), r.e.bench.Description, s.id, r.e.cfg.Seed) {
			if j.Verdict == limits.Reject {
				r.e.endTrial(ctx, s, fmt.Sprintf("clause %s is not met: %s", j.Clause, j.Reason))
				break
			}
		}
	}
	return nil
}

// stop takes the taps off; one that is still open was cut short.
func (r *record) stop() {
	if r.inner != nil {
		r.inner.stop()
	}
	for _, t := range r.taps {
		t.cut("the run ended during it")
		t.slot.taps = slices.DeleteFunc(t.slot.taps, func(other *tap) bool { return other == t })
	}
}

func (r *record) due() time.Time {
	if r.inner != nil {
		return r.inner.due()
	}
	return r.begun.Add(r.ask.For + 2*time.Duration(float64(time.Second)/r.e.cfg.Plan.Gyro.SampleRate.SI()))
}
