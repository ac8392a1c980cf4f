package instruments_test

import (
	"context"
	"fmt"
	"math"
	"time"

	. "proofrate/instruments"
	"proofrate/instruments/instrumentstest"
	"proofrate/limits/quantity"
)

// The sound instruments of the suite's own tests: as little as keeps each contract. The wrong ones embed them.

var (
	degPerS = quantity.MustUnit("deg/s")
	deg     = quantity.MustUnit("deg")
	degC    = quantity.MustUnit("degC")
	volt    = quantity.MustUnit("V")
	ampere  = quantity.MustUnit("A")
)

// asker answers readings from functions, after a millisecond.
type asker struct {
	clock *instrumentstest.Pacer
	names []string
	value func(name string) quantity.Value
}

func (a *asker) Readings() []string { return a.names }

func (a *asker) Identify(context.Context) (Identity, error) {
	return Identity{Maker: "Sound", Model: "Test"}, nil
}

func (a *asker) Ask(_ context.Context, name string) (Pending, error) {
	for _, known := range a.names {
		if name == known {
			return answer{a, name}, nil
		}
	}
	return nil, &Error{Op: "read " + name, Kind: Refused}
}

type answer struct {
	from *asker
	name string
}

func (p answer) Take(ctx context.Context) (Reading, error) {
	if err := p.from.clock.Sleep(ctx, time.Millisecond); err != nil {
		return Reading{}, err
	}
	return Reading{p.name, p.from.value(p.name), p.from.clock.Now()}, nil
}

// within refuses what is not of the unit's dimension or beyond the range.
func within(op string, v quantity.Value, unit quantity.Unit, most float64) (float64, error) {
	x, err := v.In(unit)
	if err == nil && !(math.Abs(x) <= most) {
		err = fmt.Errorf("%v is beyond %g %v", v, most, unit)
	}
	if err != nil {
		return 0, &Error{Op: op, Kind: Refused, Err: err}
	}
	return x, nil
}

// table accelerates evenly, goes to a position at once after two seconds, and swings as a sine.
type table struct {
	*asker
	at           time.Time
	rate, target float64 // deg/s
	position     float64
	goal         *float64
	swing        func(t float64) float64
	swingFrom    time.Time
}

func newTable() *table {
	t := &table{asker: &asker{clock: instrumentstest.NewPacer(), names: []string{"table.rate", "table.position"}}}
	t.at = t.clock.Now()
	t.value = func(name string) quantity.Value {
		if t.move(); name == "table.rate" {
			return quantity.Of(t.rate, degPerS)
		}
		return quantity.Of(t.position, deg)
	}
	return t
}

// move brings the table to now, in steps of a millisecond.
func (t *table) move() {
	const dt = 0.001
	for now := t.clock.Now(); t.at.Before(now); t.at = t.at.Add(time.Millisecond) {
		switch {
		case t.goal != nil:
			if t.position, t.rate = t.position+(*t.goal-t.position)*3*dt, (*t.goal-t.position)*3; math.Abs(t.rate) < 0.01 {
				t.goal, t.rate, t.target = nil, 0, 0
			}
		case t.swing != nil:
			s := t.at.Sub(t.swingFrom).Seconds()
			t.rate = (t.swing(s+dt) - t.swing(s)) / dt
			t.position += t.rate * dt
		default:
			t.rate += math.Copysign(min(math.Abs(t.target-t.rate), 5*dt), t.target-t.rate)
			t.position += t.rate * dt
		}
	}
}

func (t *table) SetRate(_ context.Context, rate, accel quantity.Value) error {
	x, err := within("set rate", rate, degPerS, 200)
	if err != nil {
		return err
	}
	t.move()
	t.target, t.goal, t.swing = x, nil, nil
	return nil
}

func (t *table) Stop(context.Context) error {
	t.move()
	t.target, t.goal, t.swing = 0, nil, nil
	return nil
}

func (t *table) GoTo(_ context.Context, position quantity.Value) error {
	x, err := within("go to", position, deg, 1e6)
	if err != nil {
		return err
	}
	t.move()
	t.goal, t.swing = &x, nil
	return nil
}

func (t *table) Oscillate(_ context.Context, amplitude, frequency quantity.Value) error {
	a, err := within("oscillate", amplitude, deg, 10)
	if err != nil {
		return err
	}
	t.move()
	t.swingFrom, t.goal = t.clock.Now(), nil
	t.swing = func(s float64) float64 { return a * math.Sin(2*math.Pi*frequency.SI()*s) }
	return nil
}

// chamber moves its air at the ramp, at most 10 K/min.
type chamber struct {
	*asker
	at           time.Time
	air, target  float64
	kelvinPerMin float64
	on           bool
}

func newChamber() *chamber {
	h := &chamber{asker: &asker{clock: instrumentstest.NewPacer(), names: []string{"chamber.temperature"}}, air: 22.4}
	h.at = h.clock.Now()
	h.value = func(string) quantity.Value { h.move(); return quantity.Of(h.air, degC) }
	return h
}

func (h *chamber) move() {
	now := h.clock.Now()
	if h.on {
		most := h.kelvinPerMin * now.Sub(h.at).Minutes()
		h.air += math.Copysign(min(most, math.Abs(h.target-h.air)), h.target-h.air)
	}
	h.at = now
}

func (h *chamber) SetTemperature(_ context.Context, t, ramp quantity.Value) error {
	x, err := within("set temperature", t, degC, 150)
	if err != nil {
		return err
	}
	perMin, err := within("set ramp", ramp, quantity.MustUnit("K/min"), 10)
	if err != nil {
		return err
	}
	if perMin == 0 {
		perMin = 10
	}
	h.move()
	h.target, h.kelvinPerMin, h.on = x, perMin, true
	return nil
}

func (h *chamber) Off(context.Context) error { h.move(); h.on = false; return nil }

// supply feeds 5 ohm.
type supply struct {
	*asker
	set float64
	on  bool
}

func newSupply() *supply {
	s := &supply{asker: &asker{clock: instrumentstest.NewPacer(), names: []string{"supply.voltage", "supply.current"}}}
	s.value = func(name string) quantity.Value {
		voltage := 0.0
		if s.on {
			voltage = s.set
		}
		if name == "supply.voltage" {
			return quantity.Of(voltage, volt)
		}
		return quantity.Of(voltage/5, ampere)
	}
	return s
}

func (s *supply) Set(_ context.Context, voltage, current quantity.Value) error {
	v, err := within("set voltage", voltage, volt, 60)
	if err != nil {
		return err
	}
	if _, err := within("set current", current, ampere, 5); err != nil {
		return err
	}
	s.set = v
	return nil
}

func (s *supply) On(context.Context) error  { s.on = true; return nil }
func (s *supply) Off(context.Context) error { s.on = false; return nil }

// gyro sends a hundred samples a second, each the low byte of its own counter.
type gyro struct {
	*asker
	begin   time.Time
	drained uint64
}

func newGyro() *gyro {
	g := &gyro{asker: &asker{clock: instrumentstest.NewPacer(), names: []string{"gyro.temperature"}}}
	g.begin = g.clock.Now()
	g.value = func(string) quantity.Value { return quantity.Of(25, degC) }
	return g
}

func (g *gyro) due() uint64 { return uint64(g.clock.Now().Sub(g.begin) / (10 * time.Millisecond)) }

func (g *gyro) Channels() []Channel { return []Channel{{"rate", quantity.Of(0.05, degPerS)}} }

func (g *gyro) Drain(_ context.Context, batch *Batch) error {
	if len(batch.Counts) == 0 {
		batch.Counts = make([][]int64, 1)
	}
	if batch.Len() == 0 {
		batch.First = g.drained
	}
	for end := g.due(); g.drained < end; g.drained++ {
		batch.Counts[0] = append(batch.Counts[0], int64(g.drained&0xff))
	}
	batch.Arrived = g.begin.Add(time.Duration(g.drained) * 10 * time.Millisecond)
	return nil
}

func (g *gyro) Restart() { g.drained = g.due() }
