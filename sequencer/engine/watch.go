package engine

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"time"

	"proofrate/instruments"
	"proofrate/limits/quantity"
	"proofrate/procedures"
)

// watch makes the rounds: it asks every instrument, takes every answer, keeps the newest, puts them beside the open
// recordings, and holds the guards against them.
type watch struct {
	e       *Engine
	bench   []*channel
	slots   map[instruments.SlotID][]*channel
	guards  []*guarding
	unnoted error
}

// channel is one reading that every round takes.
type channel struct {
	name   string
	unit   quantity.Unit
	from   instruments.Reader
	slot   *slot // nil: of the bench
	asked  instruments.Pending
	newest float64 // in unit; NaN: none
	at     time.Time
	failed error // of the newest round
}

// guarding is a guard's state on the bench or on one slot.
type guarding struct {
	procedures.Guard
	slot   *slot // nil: of the bench
	broken time.Time
}

func newWatch(e *Engine) *watch {
	w := &watch{e: e, slots: map[instruments.SlotID][]*channel{}}
	if t := e.bench.Table; t != nil {
		w.bench = append(w.bench, readable(t, nil, "table.rate", "table.position")...)
	}
	if c := e.bench.Chamber; c != nil {
		w.bench = append(w.bench, readable(c, nil, "chamber.temperature")...)
	}
	for _, s := range e.slots {
		list := readable(s.Gyro, s, "gyro.temperature")
		if s.Supply != nil {
			list = append(list, readable(s.Supply, s, "supply.current")...)
		}
		w.slots[s.id] = list
	}
	for _, g := range e.cfg.Plan.Guards {
		if g.Bench {
			w.guards = append(w.guards, &guarding{Guard: g})
			continue
		}
		for _, s := range e.slots {
			w.add(s, g.Check.Readings())
			w.guards = append(w.guards, &guarding{Guard: g, slot: s})
		}
	}
	return w
}

// readable makes channels of those readings that an instrument gives.
func readable(from instruments.Reader, s *slot, names ...string) []*channel {
	var list []*channel
	for _, name := range names {
		if slices.Contains(from.Readings(), name) {
			list = append(list, &channel{name: name, unit: readingUnit(name), from: from, slot: s, newest: math.NaN()})
		}
	}
	return list
}

// add makes sure that a slot's readings are taken.
func (w *watch) add(s *slot, names []string) {
	for _, name := range names {
		if benchReading(name) || slices.ContainsFunc(w.slots[s.id], func(c *channel) bool { return c.name == name }) {
			continue
		}
		for _, from := range s.readers() {
			w.slots[s.id] = append(w.slots[s.id], readable(from, s, name)...)
		}
	}
}

// readers are the slot's instruments, in a fixed order.
func (s *slot) readers() []instruments.Reader {
	list := []instruments.Reader{s.Gyro}
	if s.Supply != nil {
		list = append(list, s.Supply)
	}
	names := make([]string, 0, len(s.Meters))
	for name := range s.Meters {
		names = append(names, name)
	}
	slices.Sort(names)
	for _, name := range names {
		list = append(list, s.Meters[name])
	}
	return list
}

// readingUnit is the unit in which the engine keeps a reading; a meter's is that of its first answer.
func readingUnit(name string) quantity.Unit {
	kind, _ := instruments.ReadingOf(name)
	return kind.Unit
}

func benchReading(name string) bool {
	kind, _ := instruments.ReadingOf(name)
	return kind.Bench
}

// differenceSI gives a band or a drift in the reading's unit (a drift: per second).
func differenceSI(v quantity.Value, reading quantity.Unit) float64 {
	if reading.Dimension() == quantity.Temperature {
		return v.SI() // K, or K/s
	}
	return v.SI() / quantity.Of(1, reading).SI()
}

// first makes the round before the first step; a bench that cannot be read is not started.
func (w *watch) first(ctx context.Context) error {
	w.e.next = w.e.clock.Now().Add(roundEvery)
	if err := w.round(ctx); err != nil {
		return err
	}
	w.e.publish()
	return nil
}

// round asks all, then takes all, then judges.
func (w *watch) round(ctx context.Context) error {
	channels := w.asked()
	for _, c := range channels {
		c.asked, c.failed = c.from.Ask(ctx, c.name)
	}
	for _, c := range channels {
		if err := w.take(ctx, c); err != nil {
			return err
		}
	}
	if err := context.Cause(ctx); err != nil {
		return err
	}
	for _, c := range channels {
		if err := w.answer(ctx, c); err != nil {
			return err
		}
	}
	return w.judge(ctx)
}

// asked are the channels of this round: the bench's and those of live slots that can answer now.
func (w *watch) asked() []*channel {
	list := slices.Clone(w.bench)
	for _, s := range w.e.slots {
		if s.ended != "" {
			continue
		}
		for _, c := range w.slots[s.id] {
			if c.ofGyro() && !s.frames {
				c.newest = math.NaN() // a gyro that has sent nothing since power-on has no readings
				continue
			}
			list = append(list, c)
		}
	}
	return list
}

func (c *channel) ofGyro() bool {
	_, gyro := c.from.(instruments.Gyro)
	return gyro
}

// take waits for one answer and puts it beside the open recordings.
func (w *watch) take(ctx context.Context, c *channel) error {
	if c.failed != nil {
		return nil
	}
	reading, err := c.asked.Take(ctx)
	if err != nil {
		c.failed = err
		return nil
	}
	if c.unit == (quantity.Unit{}) {
		c.unit = reading.Value.Unit
	}
	c.newest, c.at = reading.Value.As(c.unit), reading.At
	at := w.e.since(reading.At)
	for _, s := range w.e.slots {
		if c.slot != nil && c.slot != s {
			continue
		}
		for _, t := range s.taps {
			if err := t.reading(c.name, c.unit, at, c.newest); err != nil {
				return err
			}
		}
	}
	return nil
}

// answer acts on a reading that failed: a slot's ends its trial, the bench's ends the run.
func (w *watch) answer(ctx context.Context, c *channel) error {
	if c.failed == nil {
		return nil
	}
	c.newest = math.NaN()
	if c.slot == nil {
		return c.failed
	}
	w.e.endTrial(ctx, c.slot, fmt.Sprintf("reading %s: %v", c.name, c.failed))
	return nil
}

// judge holds every guard against the newest readings.
func (w *watch) judge(ctx context.Context) error {
	now := w.e.clock.Now()
	for _, g := range w.guards {
		if g.slot != nil && (g.slot.ended != "" || !w.applies(g)) {
			g.broken = time.Time{}
			continue
		}
		values := w.values(g)
		holds, err := g.Check.Holds(values)
		if err != nil {
			return &instruments.Error{Op: "guard " + g.Text, Kind: instruments.Internal, Err: err}
		}
		if holds {
			g.broken = time.Time{}
			continue
		}
		if g.broken.IsZero() {
			g.broken = now
		}
		if now.Sub(g.broken) < g.Tolerate {
			continue
		}
		reason := fmt.Sprintf("guard %q is broken: %s", g.Text, listed(values, g.Check.Readings()))
		if g.slot == nil {
			return &instruments.Error{Op: "watch", Kind: instruments.Unsafe, Err: errors.New(reason)}
		}
		w.e.endTrial(ctx, g.slot, reason)
	}
	return nil
}

// applies says whether a slot's guard has something to watch: a gyro's own readings exist once it has sent frames.
func (w *watch) applies(g *guarding) bool {
	for _, c := range w.slots[g.slot.id] {
		if c.ofGyro() && !g.slot.frames && slices.Contains(g.Check.Readings(), c.name) {
			return false
		}
	}
	return true
}

// values are the readings that a guard names; one that is older than the guard tolerates is NaN and breaks it.
func (w *watch) values(g *guarding) map[string]float64 {
	values := map[string]float64{}
	for _, name := range g.Check.Readings() {
		values[name] = math.NaN()
		if c := w.channel(g.slot, name); c != nil && w.e.clock.Now().Sub(c.at) <= w.e.patient(max(g.Tolerate, 2*roundEvery)) {
			values[name] = c.newest
		}
	}
	return values
}

func listed(values map[string]float64, names []string) string {
	text := ""
	for _, name := range names {
		text += fmt.Sprintf("%s = %.4g %s ", name, values[name], readingUnit(name))
	}
	return text[:max(0, len(text)-1)]
}

// channel finds a slot's or the bench's channel by name.
func (w *watch) channel(s *slot, name string) *channel {
	list := w.bench
	if !benchReading(name) && s != nil {
		list = w.slots[s.id]
	}
	for _, c := range list {
		if c.name == name {
			return c
		}
	}
	return nil
}

// value is the newest reading of the bench by that name, in its unit; NaN if there is none.
func (w *watch) value(name string) float64 { return w.of(nil, name) }

// of is the newest reading of a slot or, for a bench reading, of the bench.
func (w *watch) of(s *slot, name string) float64 {
	if c := w.channel(s, name); c != nil {
		return c.newest
	}
	return math.NaN()
}
