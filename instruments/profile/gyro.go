package profile

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/link"
	"proofrate/limits/quantity"
)

// gyroRate is a reading that comes from the channel.
const gyroRate = "gyro.rate"

var degPerS = quantity.MustUnit("deg/s")

// gyro drains a stream of frames.
type gyro struct {
	profile *Profile
	link    link.Link
	name    string
	decoder *decoder
	at      time.Time // when the newest drained frame had come
	trace   func(Exchange)
}

// Gyro makes a gyro's driver.
func (p *Profile) Gyro(l link.Link, name string) (instruments.Gyro, error) {
	if p.frame == nil {
		return nil, fmt.Errorf("profile %s does not fill the role gyro", p.Name)
	}
	return &gyro{profile: p, link: l, name: name, decoder: newDecoder(p.frame), trace: p.Trace}, nil
}

func (g *gyro) Channels() []instruments.Channel { return g.profile.Channels }
func (g *gyro) Readings() []string              { return g.profile.Readings["gyro"] }

// Drain takes what has arrived. A link that is gone is an error once all that had come is taken.
func (g *gyro) Drain(ctx context.Context, batch *instruments.Batch) error {
	if ctx.Err() != nil {
		return context.Cause(ctx)
	}
	if len(batch.Counts) != len(g.profile.Channels) {
		batch.Counts = make([][]int64, len(g.profile.Channels))
	}
	used := g.decoder.take(g.link.Peek(), batch)
	if used > 0 {
		g.at = g.link.LastArrival()
		batch.Arrived = g.at
		g.link.Discard(used)
		return nil
	}
	if err := g.link.Await(ctx, g.link.Clock().Now()); err != nil && ctx.Err() == nil { // it does not wait
		return g.failure("drain", instruments.Gone, err)
	}
	return nil
}

// Restart forgets what has arrived and the counter: the gyro has been switched.
func (g *gyro) Restart() {
	g.link.Discard(len(g.link.Peek()))
	g.decoder.restart()
}

// Ask reads the newest frame, drained or not.
func (g *gyro) Ask(_ context.Context, reading string) (instruments.Pending, error) {
	if !slices.Contains(g.Readings(), reading) {
		return nil, g.failure("read "+reading, instruments.Refused, errors.New("this gyro's profile has no such reading"))
	}
	return frameAnswer{g, reading}, nil
}

// frameAnswer is a reading of the newest frame.
type frameAnswer struct {
	gyro *gyro
	name string
}

// Take gives the reading. A rate is that of the newest frame whose output is valid.
func (a frameAnswer) Take(ctx context.Context) (instruments.Reading, error) {
	if ctx.Err() != nil {
		return instruments.Reading{}, context.Cause(ctx)
	}
	g, d := a.gyro, a.gyro.decoder
	valid := a.name == gyroRate
	at, p := g.link.LastArrival(), d.newestOf(g.link.Peek(), valid)
	if p == nil {
		if at, p = g.at, d.newest; valid {
			p = d.newestSample
		}
	}
	if len(p) == 0 {
		err := errors.New("the gyro has sent no frame since it was switched")
		if len(d.newest) > 0 {
			err = errors.New("the gyro has marked no output as valid since it was switched")
		}
		return instruments.Reading{}, g.failure("read "+a.name, instruments.Timeout, err)
	}
	reading := instruments.Reading{Name: a.name, Value: g.value(a.name, p), At: at}
	if g.trace != nil {
		g.trace(Exchange{Instrument: g.name, Op: "read " + a.name, Received: slices.Clone(p), Value: reading.Value.String()})
	}
	return reading, nil
}

// value is a reading's in a frame.
func (g *gyro) value(name string, p []byte) quantity.Value {
	for i := range g.decoder.readings {
		if r := &g.decoder.readings[i]; r.name == name {
			return quantity.Of(r.number(float64(r.of(p))), r.unit)
		}
	}
	count, one := float64(g.decoder.channels[0].of(p)), g.profile.Channels[0].Count
	if one.Dimension() == quantity.AngularRate {
		return quantity.Of(count*one.Number, one.Unit)
	}
	return quantity.FromSI(count*one.SI()*g.profile.SampleRate.SI(), degPerS) // an increment of angle each frame
}

func (g *gyro) failure(op string, kind instruments.Kind, err error) error {
	return &instruments.Error{Op: op, Where: instruments.Where{Instrument: g.name}, Kind: kind, Err: err}
}
