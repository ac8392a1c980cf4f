package instruments_test

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"

	. "proofrate/instruments"
	"proofrate/instruments/instrumentstest"
	"proofrate/limits/quantity"
)

func TestSoundInstrumentsConform(t *testing.T) {
	instrumentstest.TestTable(t, func(testing.TB) (Table, Clock) { s := newTable(); return s, s.clock })
	instrumentstest.TestChamber(t, func(testing.TB) (Chamber, Clock) { s := newChamber(); return s, s.clock })
	instrumentstest.TestSupply(t, func(testing.TB) (Supply, Clock) { s := newSupply(); return s, s.clock })
	instrumentstest.TestGyro(t, func(testing.TB) (Gyro, Clock) { s := newGyro(); return s, s.clock })
}

// wrong is an instrument that breaks one rule on purpose, which the suite must name.
type wrong struct {
	rule string
	find func(ctx context.Context) []Finding
}

func asTable(change func(*table) Table) func(context.Context) []Finding {
	return func(ctx context.Context) []Finding {
		sound := newTable()
		return CheckTable(ctx, sound.clock, change(sound))
	}
}

func asChamber(change func(*chamber) Chamber) func(context.Context) []Finding {
	return func(ctx context.Context) []Finding {
		sound := newChamber()
		return CheckChamber(ctx, sound.clock, change(sound))
	}
}

func asSupply(change func(*supply) Supply) func(context.Context) []Finding {
	return func(ctx context.Context) []Finding {
		sound := newSupply()
		return CheckSupply(ctx, sound.clock, change(sound))
	}
}

func asGyro(change func(*gyro) Gyro) func(context.Context) []Finding {
	return func(ctx context.Context) []Finding {
		sound := newGyro()
		return CheckGyro(ctx, sound.clock, change(sound))
	}
}

// reader replaces how an instrument is asked.
type reader struct {
	readings func() []string
	ask      func(ctx context.Context, name string) (Pending, error)
}

func (r reader) Readings() []string                                    { return r.readings() }
func (r reader) Ask(ctx context.Context, name string) (Pending, error) { return r.ask(ctx, name) }

// taken is a Pending from a function.
type taken func(context.Context) (Reading, error)

func (f taken) Take(ctx context.Context) (Reading, error) { return f(ctx) }

// renamed gives each reading another's name.
func renamed(a *asker, to string) reader {
	return reader{a.Readings, func(ctx context.Context, name string) (Pending, error) {
		pending, err := a.Ask(ctx, name)
		return taken(func(ctx context.Context) (Reading, error) {
			reading, err := pending.Take(ctx)
			reading.Name = to
			return reading, err
		}), err
	}}
}

type nameless struct{ Table }

func (nameless) Identify(context.Context) (Identity, error) { return Identity{}, nil }

type namelessChamber struct{ Chamber }

func (namelessChamber) Identify(context.Context) (Identity, error) {
	return Identity{}, errors.New("deaf")
}

type namelessSupply struct{ Supply }

func (namelessSupply) Identify(context.Context) (Identity, error) {
	return Identity{Serial: "7"}, nil
}

// asked is a table that is asked in another way.
type asked struct {
	Table
	reader
}

func (a asked) Readings() []string                                    { return a.reader.Readings() }
func (a asked) Ask(ctx context.Context, name string) (Pending, error) { return a.reader.Ask(ctx, name) }

type askedChamber struct {
	Chamber
	reader
}

func (a askedChamber) Readings() []string { return a.reader.Readings() }
func (a askedChamber) Ask(ctx context.Context, name string) (Pending, error) {
	return a.reader.Ask(ctx, name)
}

type askedSupply struct {
	Supply
	reader
}

func (a askedSupply) Readings() []string { return a.reader.Readings() }
func (a askedSupply) Ask(ctx context.Context, name string) (Pending, error) {
	return a.reader.Ask(ctx, name)
}

type askedGyro struct {
	Gyro
	reader
}

func (a askedGyro) Readings() []string { return a.reader.Readings() }
func (a askedGyro) Ask(ctx context.Context, name string) (Pending, error) {
	return a.reader.Ask(ctx, name)
}

// guessing gives zero for a reading that it does not have.
func guessing(a *asker) reader {
	return reader{a.Readings, func(ctx context.Context, name string) (Pending, error) {
		if slices.Contains(a.names, name) {
			return a.Ask(ctx, name)
		}
		return taken(func(context.Context) (Reading, error) { return Reading{Name: name, At: a.clock.Now()}, nil }), nil
	}}
}

// crossed answers the requests that wait in the wrong order: the last question is given the first answer.
func crossed(a *asker) reader {
	var waiting []string
	return reader{a.Readings, func(ctx context.Context, name string) (Pending, error) {
		if !slices.Contains(a.names, name) {
			return a.Ask(ctx, name)
		}
		waiting = append(waiting, name)
		return taken(func(ctx context.Context) (Reading, error) {
			first := waiting[0]
			waiting = waiting[1:]
			return Read(ctx, a, first)
		}), nil
	}}
}

// sticky goes wrong only after a request was given up: the next question is given that one's answer.
func sticky(a *asker) reader {
	var left string
	return reader{a.Readings, func(ctx context.Context, name string) (Pending, error) {
		pending, err := a.Ask(ctx, name)
		if err != nil {
			return nil, err
		}
		return taken(func(ctx context.Context) (Reading, error) {
			if ctx.Err() != nil {
				left = name
				return Reading{}, context.Cause(ctx)
			}
			reading, err := pending.Take(ctx)
			if left != "" {
				reading.Name, left = left+" (late)", ""
			}
			return reading, err
		}), nil
	}}
}

// The tables that are wrong on purpose.

// unlimited takes a rate that no table has, at its greatest.
type unlimited struct{ *table }

func (u unlimited) SetRate(ctx context.Context, rate, accel quantity.Value) error {
	if rate.Unit == degPerS && rate.Number > 200 {
		rate.Number = 200
	}
	return u.table.SetRate(ctx, rate, accel)
}

// vague refuses without saying that it refuses.
type vague struct{ *table }

func (v vague) SetRate(ctx context.Context, rate, accel quantity.Value) error {
	if v.table.SetRate(ctx, rate, accel) != nil {
		return errors.New("no")
	}
	return nil
}

func TestWrongOnPurpose(t *testing.T) {
	cases := map[string]wrong{
		"table without a name":             {"identity", asTable(func(s *table) Table { return nameless{s} })},
		"table with another reading":       {"readings", asTable(func(s *table) Table { return asked{s, renamed(s.asker, "table.rate")} })},
		"table without position":           {"readings", asTable(func(s *table) Table { s.names = s.names[:1]; return s })},
		"table that guesses":               {"unknown reading", asTable(func(s *table) Table { return asked{s, guessing(s.asker)} })},
		"table that crosses answers":       {"queue", asTable(func(s *table) Table { return asked{s, crossed(s.asker)} })},
		"table with a late answer":         {"cancelled", asTable(func(s *table) Table { return asked{s, sticky(s.asker)} })},
		"table that clips":                 {"range", asTable(func(s *table) Table { return unlimited{s} })},
		"table that refuses vaguely":       {"range", asTable(func(s *table) Table { return vague{s} })},
		"table that echoes":                {"measured", asTable(echo)},
		"table that stays short":           {"measured", asTable(func(s *table) Table { return scaled{s, 0.9} })},
		"table with its sign turned":       {"sense", asTable(func(s *table) Table { return mirrored(s) })},
		"table deaf to stop":               {"stop", asTable(func(s *table) Table { return deaf{s} })},
		"table that stops once":            {"stop", asTable(func(s *table) Table { return &stopsOnce{table: s} })},
		"table that creeps":                {"stop", asTable(func(s *table) Table { return creeps(s) })},
		"table that misses its position":   {"position", asTable(func(s *table) Table { return short{s} })},
		"table that does not swing":        {"swing", asTable(func(s *table) Table { return stiff{s} })},
		"chamber without a name":           {"identity", asChamber(func(s *chamber) Chamber { return namelessChamber{s} })},
		"chamber with another reading":     {"readings", asChamber(func(s *chamber) Chamber { return askedChamber{s, renamed(s.asker, "chamber.heat")} })},
		"chamber that guesses":             {"unknown reading", asChamber(func(s *chamber) Chamber { return askedChamber{s, guessing(s.asker)} })},
		"chamber with a late answer":       {"cancelled", asChamber(func(s *chamber) Chamber { return askedChamber{s, sticky(s.asker)} })},
		"chamber that clips":               {"range", asChamber(func(s *chamber) Chamber { return boundless{s} })},
		"chamber that echoes":              {"measured", asChamber(setPoint)},
		"chamber that does not heat":       {"measured", asChamber(func(s *chamber) Chamber { return cold{s} })},
		"chamber that ramps as it likes":   {"ramp", asChamber(func(s *chamber) Chamber { return hasty{s} })},
		"chamber that is off once":         {"off", asChamber(func(s *chamber) Chamber { return &offOnce{chamber: s} })},
		"supply without a name":            {"identity", asSupply(func(s *supply) Supply { return namelessSupply{s} })},
		"supply with another reading":      {"readings", asSupply(func(s *supply) Supply { s.names = []string{"supply.current"}; return s })},
		"supply that guesses":              {"unknown reading", asSupply(func(s *supply) Supply { return askedSupply{s, guessing(s.asker)} })},
		"supply that crosses answers":      {"queue", asSupply(func(s *supply) Supply { return askedSupply{s, crossed(s.asker)} })},
		"supply with a late answer":        {"cancelled", asSupply(func(s *supply) Supply { return askedSupply{s, sticky(s.asker)} })},
		"supply that takes half a refusal": {"range", asSupply(func(s *supply) Supply { return halfway{s} })},
		"supply that echoes":               {"measured", asSupply(preset)},
		"supply that stays off":            {"on and off", asSupply(func(s *supply) Supply { return &idle{supply: s} })},
		"gyro without channels":            {"channels", asGyro(func(s *gyro) Gyro { return channels{s, nil} })},
		"gyro that counts volts":           {"channels", asGyro(func(s *gyro) Gyro { return channels{s, []Channel{{"rate", quantity.Of(1, volt)}}} })},
		"gyro that miscounts":              {"samples", asGyro(func(s *gyro) Gyro { return miscounts{s} })},
		"gyro that waits":                  {"no wait", asGyro(func(s *gyro) Gyro { return &waits{gyro: s} })},
		"gyro that empties the batch":      {"append", asGyro(func(s *gyro) Gyro { return empties{s} })},
		"gyro that forgets nothing":        {"restart", asGyro(func(s *gyro) Gyro { return keeps{s} })},
		"gyro with an old temperature":     {"readings", asGyro(old)},
		"gyro that guesses":                {"unknown reading", asGyro(func(s *gyro) Gyro { return askedGyro{s, guessing(s.asker)} })},
	}
	caught := map[string]bool{}
	for name, c := range cases {
		role, _, _ := strings.Cut(name, " ")
		caught[role+" "+c.rule], caught["any "+c.rule] = true, true
		t.Run(name, func(t *testing.T) {
			var rules []string
			var all strings.Builder
			for _, f := range c.find(t.Context()) {
				if fmt.Fprintln(&all, f); !f.Skipped {
					rules = append(rules, f.Rule)
				}
			}
			if !slices.Contains(rules, c.rule) {
				t.Errorf("found %v, want %q\n%s", rules, c.rule, all.String())
			}
		})
	}
	for role, rules := range RuleNames() {
		for _, rule := range rules {
			if !caught[role+" "+rule] {
				t.Errorf("no %s is wrong on purpose at %q", role, rule)
			}
		}
	}
}

// echo reads the command back.
func echo(s *table) Table {
	value := s.value
	s.value = func(name string) quantity.Value {
		if v := value(name); name != "table.rate" {
			return v
		}
		return quantity.Of(s.target, degPerS)
	}
	return s
}

type scaled struct {
	*table
	by float64
}

func (s scaled) SetRate(ctx context.Context, rate, accel quantity.Value) error {
	rate.Number *= s.by
	return s.table.SetRate(ctx, rate, accel)
}

func mirrored(s *table) Table {
	value := s.value
	s.value = func(name string) quantity.Value {
		v := value(name)
		if name == "table.position" {
			v.Number = -v.Number
		}
		return v
	}
	return s
}

type deaf struct{ *table }

func (d deaf) Stop(ctx context.Context) error {
	if d.table.swing != nil {
		return nil
	}
	return d.table.Stop(ctx)
}

type stopsOnce struct {
	*table
	stopped bool
}

func (s *stopsOnce) SetRate(ctx context.Context, rate, accel quantity.Value) error {
	s.stopped = false
	return s.table.SetRate(ctx, rate, accel)
}

func (s *stopsOnce) Stop(ctx context.Context) error {
	if s.stopped {
		return &Error{Op: "stop", Kind: Refused, Err: errors.New("it rests")}
	}
	s.stopped = true
	return s.table.Stop(ctx)
}

// creeps drifts at a rate that the rate's reading does not show.
func creeps(s *table) Table {
	value, begin := s.value, s.clock.Now()
	s.value = func(name string) quantity.Value {
		v := value(name)
		if name == "table.position" {
			v.Number += 0.2 * s.clock.Now().Sub(begin).Seconds()
		}
		return v
	}
	return s
}

type short struct{ *table }

func (s short) GoTo(ctx context.Context, position quantity.Value) error {
	if position.Unit == deg {
		position.Number++
	}
	return s.table.GoTo(ctx, position)
}

type stiff struct{ *table }

func (stiff) Oscillate(context.Context, quantity.Value, quantity.Value) error { return nil }

// The chambers that are wrong on purpose.

type boundless struct{ *chamber }

func (b boundless) SetTemperature(ctx context.Context, t, ramp quantity.Value) error {
	if t.Unit == degC {
		t.Number = max(-60, min(t.Number, 100))
	}
	return b.chamber.SetTemperature(ctx, t, ramp)
}

func setPoint(s *chamber) Chamber {
	value := s.value
	s.value = func(name string) quantity.Value {
		if v := value(name); !s.on {
			return v
		}
		return quantity.Of(s.target, degC)
	}
	return s
}

type cold struct{ *chamber }

func (c cold) SetTemperature(ctx context.Context, t, ramp quantity.Value) error {
	err := c.chamber.SetTemperature(ctx, t, ramp)
	c.chamber.on = false
	return err
}

type hasty struct{ *chamber }

func (h hasty) SetTemperature(ctx context.Context, t, ramp quantity.Value) error {
	err := h.chamber.SetTemperature(ctx, t, ramp)
	h.chamber.kelvinPerMin = 10
	return err
}

type offOnce struct {
	*chamber
	times int
}

func (o *offOnce) SetTemperature(ctx context.Context, t, ramp quantity.Value) error {
	o.times = 0
	return o.chamber.SetTemperature(ctx, t, ramp)
}

func (o *offOnce) Off(ctx context.Context) error {
	if o.times++; o.times == 2 {
		return errors.New("it is off")
	}
	return o.chamber.Off(ctx)
}

// The supplies that are wrong on purpose.

// halfway sets the voltage before it looks at the current.
type halfway struct{ *supply }

func (h halfway) Set(ctx context.Context, voltage, current quantity.Value) error {
	if _, err := voltage.In(volt); err == nil && voltage.Number < 1e3 {
		h.supply.set = voltage.Number * 3
	}
	if err := h.supply.Set(ctx, voltage, current); err != nil {
		return err
	}
	h.supply.set = voltage.Number
	return nil
}

func preset(s *supply) Supply {
	value := s.value
	s.value = func(name string) quantity.Value {
		if name == "supply.voltage" && s.set != 0 {
			return quantity.Of(s.set, volt)
		}
		return value(name)
	}
	return s
}

type idle struct {
	*supply
	times int
}

func (i *idle) On(ctx context.Context) error {
	if i.times++; i.times == 1 {
		return i.supply.On(ctx)
	}
	return nil
}

// The gyros that are wrong on purpose.

type channels struct {
	*gyro
	list []Channel
}

func (c channels) Channels() []Channel { return c.list }

type miscounts struct{ *gyro }

func (m miscounts) Drain(ctx context.Context, batch *Batch) error {
	err := m.gyro.Drain(ctx, batch)
	batch.First /= 2
	return err
}

type waits struct {
	*gyro
	drains int
}

func (w *waits) Drain(ctx context.Context, batch *Batch) error {
	if w.drains++; w.gyro.due() == w.gyro.drained {
		w.clock.Sleep(ctx, time.Second)
	}
	return w.gyro.Drain(ctx, batch)
}

type empties struct{ *gyro }

func (e empties) Drain(ctx context.Context, batch *Batch) error {
	batch.Reset()
	return e.gyro.Drain(ctx, batch)
}

type keeps struct{ *gyro }

func (keeps) Restart() {}

func old(s *gyro) Gyro {
	stale := s.begin
	return askedGyro{s, reader{s.Readings, func(ctx context.Context, name string) (Pending, error) {
		if name != "gyro.temperature" {
			return s.Ask(ctx, name)
		}
		return taken(func(context.Context) (Reading, error) {
			return Reading{name, quantity.Of(25, degC), stale}, nil
		}), nil
	}}}
}
