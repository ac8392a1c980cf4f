package profile

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"

	"proofrate/instruments"
	"proofrate/instruments/link"
	"proofrate/limits/quantity"
)

// driver speaks to one instrument over its line, in one role.
type driver struct {
	profile  *Profile
	line     *line
	role     string
	channel  int
	readings []string
}

func (p *Profile) driver(l link.Link, name, role string, channel int) (*driver, error) {
	if !slices.Contains(p.Roles, role) || p.speech == nil {
		return nil, fmt.Errorf("profile %s does not fill the role %s", p.Name, role)
	}
	if channel < 0 || channel > p.SupplyChannels || channel == 0 && role == "supply" && p.SupplyChannels > 0 {
		return nil, fmt.Errorf("profile %s has no channel %d; it has %d", p.Name, channel, p.SupplyChannels)
	}
	return &driver{profile: p, line: p.line(l, name), role: role, channel: channel, readings: p.Readings[role]}, nil
}

// line is the one of a link: all drivers on it share its queue. Lines whose link is gone are forgotten.
func (p *Profile) line(l link.Link, name string) *line {
	p.mu.Lock()
	defer p.mu.Unlock()
	if known := p.lines[l]; known != nil {
		return known
	}
	for other := range p.lines {
		if other.Await(context.Background(), other.Clock().Now()) != nil { // it does not wait
			delete(p.lines, other)
		}
	}
	made := &line{link: l, name: name, timeout: p.Timeout, tries: p.Tries, rest: p.speech.rest(p.Serial.Baud), trace: p.Trace}
	p.lines[l] = made
	return made
}

// Readings are those of the role.
func (d *driver) Readings() []string { return d.readings }

func (d *driver) refused(op string, err error) error {
	return d.line.failure(op, instruments.Refused, err)
}

// pending is a reading on its way.
type pending struct {
	line  *line
	job   *job
	name  string
	value quantity.Value
}

// Ask sends the request, or queues it behind those on their way.
func (d *driver) Ask(ctx context.Context, reading string) (instruments.Pending, error) {
	if ctx.Err() != nil {
		return nil, context.Cause(ctx)
	}
	if !slices.Contains(d.readings, reading) {
		return nil, d.refused("read "+reading, fmt.Errorf("this %s's profile has no such reading", d.role))
	}
	key := reading
	if d.role == "meter" {
		key = "value"
	}
	p := &pending{line: d.line, name: reading}
	p.job = d.profile.speech.ask(d.line, key, d.channel, &p.value)
	d.line.put(p.job)
	return p, nil
}

// Take waits for the answer. The instrument has measured at some time between the request and the answer; the middle
// of them is wrong by least.
func (p *pending) Take(ctx context.Context) (instruments.Reading, error) {
	if err := p.line.take(ctx, p.job); err != nil {
		return instruments.Reading{}, err
	}
	at := p.job.begun.Add(p.job.ended.Sub(p.job.begun) / 2)
	return instruments.Reading{Name: p.name, Value: p.value, At: at}, nil
}

// Identify asks the instrument who it is. Where its profile has no question for that, the title stands for the model.
func (d *driver) Identify(ctx context.Context) (instruments.Identity, error) {
	id, err := d.profile.speech.identify(ctx, d.line)
	if err == nil && id == (instruments.Identity{}) {
		id.Model = d.profile.Title
	}
	return id, err
}

// act carries out an action. A value of another dimension, no value, one beyond the profile's limits and one that the
// instrument cannot be told are refused before anything is sent.
func (d *driver) act(ctx context.Context, name string, v values) error {
	if ctx.Err() != nil {
		return context.Cause(ctx)
	}
	for _, a := range actionsOf([]string{d.role}) {
		if a.name != name {
			continue
		}
		for i := range a.values {
			if err := d.fits(name, &a.values[i], v[a.values[i].name]); err != nil {
				return d.refused(name, err)
			}
		}
	}
	return d.profile.speech.act(ctx, d.line, name, v, d.channel)
}

func (d *driver) fits(action string, c *carried, x quantity.Value) error {
	if x.Dimension() != c.dimension {
		return fmt.Errorf("%s of %s is of %s; expected a %s", c.name, x, x.Dimension(), c.dimension)
	}
	if math.IsNaN(x.Number) || math.IsInf(x.Number, 0) {
		return fmt.Errorf("%s of %v is no value", c.name, x.Number)
	}
	if limit, stated := d.profile.Limits[c.name]; stated && !(x.SI() >= limit.Low.SI() && x.SI() <= limit.High.SI()) {
		return fmt.Errorf("%s of %s is beyond what the instrument can do, %s to %s", c.name, x, limit.Low, limit.High)
	}
	if c.name == "ramp" && x.Number != 0 && !d.profile.speech.sends(action, c.name) {
		return errors.New("this chamber's profile sends no ramp, so that it keeps its own; ask for none")
	}
	return nil
}

type table struct{ *driver }

func (t table) SetRate(ctx context.Context, rate, accel quantity.Value) error {
	return t.act(ctx, "set-rate", values{"rate": rate, "acceleration": accel})
}

func (t table) Stop(ctx context.Context) error { return t.act(ctx, "stop", nil) }

func (t table) goTo(ctx context.Context, position quantity.Value) error {
	return t.act(ctx, "go-to", values{"position": position})
}

func (t table) oscillate(ctx context.Context, amplitude, frequency quantity.Value) error {
	return t.act(ctx, "oscillate", values{"amplitude": amplitude, "frequency": frequency})
}

// The abilities of a table are methods of its type, so that a table has those of its profile and no other.
type (
	positioner struct{ table }
	oscillator struct{ table }
	versatile  struct{ table }
)

func (p positioner) GoTo(ctx context.Context, position quantity.Value) error {
	return p.goTo(ctx, position)
}

func (o oscillator) Oscillate(ctx context.Context, amplitude, frequency quantity.Value) error {
	return o.oscillate(ctx, amplitude, frequency)
}

func (v versatile) GoTo(ctx context.Context, position quantity.Value) error {
	return v.goTo(ctx, position)
}

func (v versatile) Oscillate(ctx context.Context, amplitude, frequency quantity.Value) error {
	return v.oscillate(ctx, amplitude, frequency)
}

// Table makes a table's driver; it is an instruments.Positioner and an instruments.Oscillator where the profile has
// these actions.
func (p *Profile) Table(l link.Link, name string) (instruments.Table, error) {
	d, err := p.driver(l, name, "table", 0)
	if err != nil {
		return nil, err
	}
	t := table{d}
	switch {
	case p.CanPosition && p.CanOscillate:
		return versatile{t}, nil
	case p.CanPosition:
		return positioner{t}, nil
	case p.CanOscillate:
		return oscillator{t}, nil
	}
	return t, nil
}

type chamber struct{ *driver }

func (c chamber) SetTemperature(ctx context.Context, t, ramp quantity.Value) error {
	return c.act(ctx, "set-temperature", values{"temperature": t, "ramp": ramp})
}

func (c chamber) Off(ctx context.Context) error { return c.act(ctx, "off", nil) }

// Chamber makes a chamber's driver.
func (p *Profile) Chamber(l link.Link, name string) (instruments.Chamber, error) {
	d, err := p.driver(l, name, "chamber", 0)
	if err != nil {
		return nil, err
	}
	return chamber{d}, nil
}

type supply struct{ *driver }

func (s supply) Set(ctx context.Context, voltage, currentLimit quantity.Value) error {
	return s.act(ctx, "set", values{"voltage": voltage, "current": currentLimit})
}

func (s supply) On(ctx context.Context) error  { return s.act(ctx, "on", nil) }
func (s supply) Off(ctx context.Context) error { return s.act(ctx, "off", nil) }

// Supply makes the driver of one output of a supply, numbered from 1; 0 is the only one of a supply without numbers.
func (p *Profile) Supply(l link.Link, name string, channel int) (instruments.Supply, error) {
	d, err := p.driver(l, name, "supply", channel)
	if err != nil {
		return nil, err
	}
	return supply{d}, nil
}

// Meter makes a meter's driver. Its reading is "<name>.value".
func (p *Profile) Meter(l link.Link, name string) (instruments.Instrument, error) {
	d, err := p.driver(l, name, "meter", 0)
	if err != nil {
		return nil, err
	}
	d.readings = []string{name + ".value"}
	return d, nil
}
