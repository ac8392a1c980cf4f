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

// driver speaks to one instrument over its line.
type driver struct {
	profile  *Profile
	line     *line
	role     string
	channel  int
	readings []string
}

// driver makes one; drivers on one link share its line.
func (p *Profile) driver(l link.Link, name, role string, channel int) (*driver, error) {
	if !slices.Contains(p.Roles, role) || p.speech == nil {
		return nil, fmt.Errorf("profile %s does not fill the role %s", p.Name, role)
	}
	if channel < 0 || channel > max(p.SupplyChannels, 0) {
		return nil, fmt.Errorf("profile %s has no channel %d", p.Name, channel)
	}
	shared := p.shared[l]
	if shared == nil {
		shared = &line{link: l, name: name, timeout: p.Timeout, tries: p.Tries, Trace: p.Trace}
		if b, ok := p.speech.(*modbus); ok && !b.tcp {
			shared.rest = silentInterval(p.Serial.Baud)
		}
		p.shared[l] = shared
	}
	return &driver{profile: p, line: shared, role: role, channel: channel, readings: p.Readings[role]}, nil
}

// Readings are those of the role.
func (d *driver) Readings() []string { return d.readings }

// pending is a reading on its way.
type pending struct {
	driver *driver
	job    *job
	name   string
	value  quantity.Value
}

// Ask sends or queues the request.
func (d *driver) Ask(_ context.Context, reading string) (instruments.Pending, error) {
	key := reading
	if d.role == "meter" {
		key = "value"
	} else if !slices.Contains(d.readings, reading) {
		return nil, &instruments.Error{Op: "read " + reading, Where: instruments.Where{Instrument: d.line.name}, Kind: instruments.Refused,
			Err: fmt.Errorf("this %s has no such reading", d.role)}
	}
	p := &pending{driver: d, name: reading}
	p.job = d.profile.speech.ask(d.line, key, d.channel, &p.value)
	return p, d.line.put(p.job)
}

// Take waits for the answer.
func (p *pending) Take(ctx context.Context) (instruments.Reading, error) {
	if err := p.driver.line.take(ctx, p.job); err != nil {
		return instruments.Reading{}, err
	}
	return instruments.Reading{Name: p.name, Value: p.value, At: p.driver.line.link.Clock().Now()}, nil
}

// Identify asks the instrument who it is.
func (d *driver) Identify(ctx context.Context) (instruments.Identity, error) {
	var id instruments.Identity
	err := d.all(ctx, d.profile.speech.identify(d.line, &id))
	return id, err
}

// all carries out jobs in order.
func (d *driver) all(ctx context.Context, jobs []*job) error {
	for _, j := range jobs {
		if err := d.line.do(ctx, j); err != nil {
			return err
		}
	}
	return nil
}

// act carries out an action; a value of another dimension, or none, is refused before anything is sent.
func (d *driver) act(ctx context.Context, name string, v values) error {
	refused := func(err error) error {
		return &instruments.Error{Op: name, Where: instruments.Where{Instrument: d.line.name}, Kind: instruments.Refused, Err: err}
	}
	for _, a := range actionTable {
		if a.role != d.role || a.name != name {
			continue
		}
		for _, c := range a.values {
			x := v[c.name]
			if x.Dimension() != c.dimension {
				return refused(fmt.Errorf("%s of %s: %s was expected", c.name, x, c.dimension))
			}
			if math.IsNaN(x.Number) || math.IsInf(x.Number, 0) {
				return refused(fmt.Errorf("%s of %v is no value", c.name, x.Number))
			}
		}
	}
	jobs, err := d.profile.speech.act(d.line, name, v, d.channel)
	if err != nil {
		return refused(err)
	}
	return d.all(ctx, jobs)
}

type table struct{ *driver }

func (t table) SetRate(ctx context.Context, rate, accel quantity.Value) error {
	return t.act(ctx, "set-rate", values{"rate": rate, "acceleration": accel})
}
func (t table) Stop(ctx context.Context) error { return t.act(ctx, "stop", nil) }

type positioner struct{ table }

func (p positioner) GoTo(ctx context.Context, position quantity.Value) error {
	return p.act(ctx, "go-to", values{"position": position})
}

type oscillator struct{ table }

func (o oscillator) Oscillate(ctx context.Context, amplitude, frequency quantity.Value) error {
	return o.act(ctx, "oscillate", values{"amplitude": amplitude, "frequency": frequency})
}

type fullTable struct {
	positioner
	swing oscillator
}

func (f fullTable) Oscillate(ctx context.Context, amplitude, frequency quantity.Value) error {
	return f.swing.Oscillate(ctx, amplitude, frequency)
}

// Table makes a table's driver, with the abilities that the profile has.
func (p *Profile) Table(l link.Link, name string) (instruments.Table, error) {
	d, err := p.driver(l, name, "table", 0)
	if err != nil {
		return nil, err
	}
	t := table{d}
	switch {
	case p.CanPosition && p.CanOscillate:
		return fullTable{positioner{t}, oscillator{t}}, nil
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

func (s supply) Set(ctx context.Context, voltage, current quantity.Value) error {
	return s.act(ctx, "set", values{"voltage": voltage, "current": current})
}
func (s supply) On(ctx context.Context) error  { return s.act(ctx, "on", nil) }
func (s supply) Off(ctx context.Context) error { return s.act(ctx, "off", nil) }

// Supply makes the driver of one channel of a supply; channel 0 is the only one of a supply without numbers.
func (p *Profile) Supply(l link.Link, name string, channel int) (instruments.Supply, error) {
	d, err := p.driver(l, name, "supply", channel)
	if err != nil {
		return nil, err
	}
	return supply{d}, nil
}

// Meter makes a meter's driver; its reading is "<name>.value".
func (p *Profile) Meter(l link.Link, name string) (instruments.Instrument, error) {
	d, err := p.driver(l, name, "meter", 0)
	if err != nil {
		return nil, err
	}
	d.readings = []string{name + ".value"}
	return d, nil
}

// gyro drains a stream of frames.
type gyro struct {
	profile  *Profile
	link     link.Link
	name     string
	decoder  *decoder
	readings []string
}

// Gyro makes a gyro's driver.
func (p *Profile) Gyro(l link.Link, name string) (instruments.Gyro, error) {
	if p.decoding == nil {
		return nil, fmt.Errorf("profile %s does not fill the role gyro", p.Name)
	}
	return &gyro{profile: p, link: l, name: name, decoder: newDecoder(p.decoding), readings: p.Readings["gyro"]}, nil
}

func (g *gyro) Channels() []instruments.Channel { return g.profile.Channels }
func (g *gyro) Readings() []string              { return g.readings }

// Drain takes what has arrived. A stream that has ended is an error once all of it has been taken.
func (g *gyro) Drain(ctx context.Context, batch *instruments.Batch) error {
	if len(batch.Counts) != len(g.profile.Channels) {
		batch.Counts = make([][]int64, len(g.profile.Channels))
	}
	received := g.link.Peek()
	if len(received) == 0 {
		if err := g.link.Await(ctx, g.link.Clock().Now()); err != nil && context.Cause(ctx) == nil {
			return &instruments.Error{Op: "drain", Where: instruments.Where{Instrument: g.name}, Kind: instruments.Gone, Err: err}
		}
		return context.Cause(ctx)
	}
	before := batch.Len()
	g.link.Discard(g.decoder.take(received, batch))
	if batch.Len() > before {
		batch.Arrived = g.link.LastArrival()
	}
	return context.Cause(ctx)
}

// Restart forgets what has arrived: the gyro has been switched.
func (g *gyro) Restart() {
	g.link.Discard(len(g.link.Peek()))
	g.decoder.restart()
}

// Ask reads the newest frame.
func (g *gyro) Ask(_ context.Context, reading string) (instruments.Pending, error) {
	for i := range g.profile.decoding.readings {
		if g.profile.decoding.readings[i].name == reading {
			return frameAnswer{g, &g.profile.decoding.readings[i]}, nil
		}
	}
	return nil, &instruments.Error{Op: "read " + reading, Where: instruments.Where{Instrument: g.name}, Kind: instruments.Refused, Err: errors.New("this gyro has no such reading")}
}

type frameAnswer struct {
	gyro    *gyro
	reading *frameReading
}

func (f frameAnswer) Take(context.Context) (instruments.Reading, error) {
	d := f.gyro.decoder
	if len(d.newest) == 0 {
		return instruments.Reading{}, &instruments.Error{Op: "read " + f.reading.name, Where: instruments.Where{Instrument: f.gyro.name}, Kind: instruments.Timeout,
			Err: errors.New("the gyro has sent no frame yet")}
	}
	x := float64(f.reading.of(d.newest, d.big)) * f.reading.scale
	return instruments.Reading{Name: f.reading.name, Value: quantity.Of(x, f.reading.unit), At: f.gyro.link.LastArrival()}, nil
}
