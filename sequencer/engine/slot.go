package engine

import (
	"context"
	"fmt"
	"math"
	"time"

	"proofrate/instruments"
	"proofrate/limits/quantity"
	"proofrate/results/recording"
)

// slot is one gyro's place in the run.
type slot struct {
	instruments.Slot
	id      instruments.SlotID
	trial   Trial
	sink    recording.Sink
	ended   string // why the trial ended early; "" while it is live
	powered bool
	since   time.Time // of power-on
	frames  bool      // samples have come since power-on
	last    time.Time // of the newest sample
	batch   instruments.Batch
	taps    []*tap
	bad     uint64 // damaged frames since power-on
}

// seat opens a sink for every trial and prepares the watch.
func (e *Engine) seat() error {
	for _, trial := range e.cfg.Trials {
		at := e.find(trial.Slot)
		if at == nil {
			return fmt.Errorf("slot %q: this bench has no such slot", trial.Slot)
		}
		sink, err := e.cfg.Recorder.Sink(trial.Slot)
		if err != nil {
			return fmt.Errorf("slot %s: open its recordings: %w", trial.Slot, err)
		}
		e.slots = append(e.slots, &slot{Slot: *at, id: trial.Slot, trial: trial, sink: sink})
	}
	e.watch = newWatch(e)
	return nil
}

func (e *Engine) find(id instruments.SlotID) *instruments.Slot {
	for i := range e.bench.Slots {
		if e.bench.Slots[i].ID == id {
			return &e.bench.Slots[i]
		}
	}
	return nil
}

// live counts the slots whose trial goes on.
func (e *Engine) live() int {
	n := 0
	for _, s := range e.slots {
		if s.ended == "" {
			n++
		}
	}
	return n
}

// drain takes what every powered gyro has sent and gives it to the slot's taps.
func (e *Engine) drain(ctx context.Context) error {
	for _, s := range e.slots {
		if !s.powered || s.ended != "" {
			continue
		}
		s.batch.Reset()
		if err := s.Gyro.Drain(ctx, &s.batch); err != nil {
			e.endTrial(ctx, s, "gyro: "+err.Error())
			continue
		}
		s.bad += uint64(s.batch.Damaged)
		if s.batch.Len() > 0 {
			s.frames, s.last = true, s.batch.Arrived
		}
		for _, t := range s.taps {
			if err := t.take(&s.batch); err != nil {
				return err
			}
		}
	}
	return nil
}

// endTrial takes a gyro out of the run: its supply is cut, its recordings are closed as they are, the others go on.
func (e *Engine) endTrial(ctx context.Context, s *slot, reason string) {
	if s.ended != "" {
		return
	}
	s.ended = reason
	e.note("trial ended", s.id, reason)
	for _, t := range s.taps {
		t.cut(reason)
	}
	s.taps = nil
	if err := e.switchOff(ctx, s); err != nil {
		e.note("not confirmed", s.id, "supply off: "+err.Error())
	}
}

// cutSections closes the recordings that the end of the run left open.
func (e *Engine) cutSections(reason string) {
	for _, s := range e.slots {
		for _, t := range s.taps {
			t.cut(reason)
		}
		s.taps = nil
	}
}

// switchOn sets and switches a slot's supply and confirms the voltage.
func (e *Engine) switchOn(ctx context.Context, s *slot, voltage, current quantity.Value) error {
	if s.Supply == nil {
		return &instruments.Error{Op: "power on", Where: instruments.Where{Slot: s.id}, Kind: instruments.Refused,
			Err: fmt.Errorf("the bench file gives this slot no supply")}
	}
	if err := s.Supply.Set(ctx, voltage, current); err != nil {
		return err
	}
	s.Gyro.Restart()
	s.powered, s.frames, s.since = true, false, e.clock.Now()
	if err := s.Supply.On(ctx); err != nil {
		return err
	}
	e.note("power on", s.id, fmt.Sprintf("%s, at most %s", voltage, current))
	want := voltage.SI()
	return e.confirmVoltage(ctx, s, "power on", func(v float64) bool { return math.Abs(v-want) <= supplyTolerance*want },
		fmt.Sprintf("%s within %.0f %%", voltage, 100*supplyTolerance))
}

// switchOff cuts a slot's supply and confirms it.
func (e *Engine) switchOff(ctx context.Context, s *slot) error {
	if s.Supply == nil {
		return nil
	}
	wasOn := s.powered
	s.powered = false
	ctx = context.WithoutCancel(ctx)
	if err := s.Supply.Off(ctx); err != nil {
		return err
	}
	if wasOn {
		e.note("power off", s.id, "")
	}
	return e.confirmVoltage(ctx, s, "power off", func(v float64) bool { return math.Abs(v) <= offVoltage },
		fmt.Sprintf("at most %.1f V", offVoltage))
}

const (
	supplyTolerance = 0.05            // of the voltage asked for, at the supply's own read-back
	offVoltage      = 0.5             // V; below it no gyro runs (common practice)
	confirmWithin   = 3 * time.Second // for a supply's capacitors to charge or drain
	confirmEvery    = 100 * time.Millisecond
)

func (e *Engine) confirmVoltage(ctx context.Context, s *slot, op string, good func(float64) bool, want string) error {
	until := e.clock.Now().Add(e.patient(confirmWithin))
	for {
		reading, err := instruments.Read(ctx, s.Supply, "supply.voltage")
		if err != nil {
			return err
		}
		if good(reading.Value.SI()) {
			return nil
		}
		if !e.clock.Now().Before(until) {
			return &instruments.Error{Op: op, Where: instruments.Where{Slot: s.id}, Kind: instruments.Refused,
				Err: fmt.Errorf("the supply reads %s after %s, expected %s; look at its wiring and current limit", reading.Value, spoken(confirmWithin), want)}
		}
		if err := e.clock.Sleep(ctx, confirmEvery); err != nil {
			return err
		}
	}
}
