package engine

import (
	"time"

	"proofrate/instruments"
)

// Status is a snapshot of the run for the screen; it is no evidence.
type Status struct {
	Stage, Step        string
	Number, Steps      int           // the top-level step at hand, and how many there are
	Done, Left         time.Duration // bench time; Left is an estimate
	TableRate          float64       // deg/s; NaN if there is no table
	ChamberTemperature float64       // degC; NaN if there is no chamber
	Slots              []SlotStatus
}

// SlotStatus is one slot's line.
type SlotStatus struct {
	Slot        instruments.SlotID
	Serial      string
	State       string  // "off", "on", "recording sweep", or why the trial ended
	Ended       bool    // the trial is over
	Temperature float64 // degC of the gyro; NaN if unknown
	Current     float64 // A; NaN if unknown
}

// Status is the newest snapshot; any goroutine may ask for it.
func (e *Engine) Status() *Status { return e.status.Load() }

// publish makes a new snapshot.
func (e *Engine) publish() {
	s := &Status{
		Stage: e.place.step.Stage, Step: e.place.step.Text, Number: e.place.top + 1, Steps: len(e.cfg.Plan.Steps),
		Done:      e.clock.Now().Sub(e.began),
		TableRate: e.watch.value("table.rate"), ChamberTemperature: e.watch.value("chamber.temperature"),
	}
	for _, ahead := range e.ahead[min(e.place.top, len(e.ahead)):] {
		s.Left += ahead
	}
	for _, at := range e.slots {
		s.Slots = append(s.Slots, SlotStatus{Slot: at.id, Serial: at.trial.Serial, State: at.state(), Ended: at.ended != "",
			Temperature: e.watch.of(at, "gyro.temperature"), Current: e.watch.of(at, "supply.current")})
	}
	e.status.Store(s)
}

func (s *slot) state() string {
	switch {
	case s.ended != "":
		return s.ended
	case len(s.taps) > 0:
		return "recording " + s.taps[len(s.taps)-1].head.Name
	case s.powered:
		return "on"
	default:
		return "off"
	}
}
