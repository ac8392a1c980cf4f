package virtual

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"

	"proofrate/instruments"
	"proofrate/limits/quantity"
)

// Config says what stands on a virtual bench.
type Config struct {
	Seed uint64
	// Description gives site, geometry, abilities and stated uncertainties, from which the bench's hidden errors are
	// drawn.
	Description *instruments.Description
	Gyros       map[instruments.SlotID]Setup
	Ambient     quantity.Value // temperature about the chamber; zero: 23 degC
}

// Setup is the gyro in one slot.
type Setup struct {
	Population string                    // a shipped one
	Overrides  map[string]quantity.Value // parameters that are set, not drawn
}

// New makes a bench that has just been switched on: table at hold, chamber off at the ambient temperature, gyros off.
func New(c Config) (*World, error) {
	d := c.Description
	if d == nil {
		return nil, errors.New("a virtual bench needs a description")
	}
	ambient := referenceTemp
	if c.Ambient != (quantity.Value{}) {
		if c.Ambient.Dimension() != quantity.Temperature {
			return nil, fmt.Errorf("ambient: %w", &quantity.UnitError{Text: c.Ambient.String(), Got: c.Ambient.Unit, Want: quantity.Temperature, Fits: quantity.Temperature.Units()})
		}
		ambient = c.Ambient.SI()
	}
	w := &World{tick: 1, climate: newClimate(ambient, stream(c.Seed, "chamber air"))}
	servo, frame := newServo(nil), newAxes(instruments.Vector{0, 0, 1}, [2]float64{})
	if d.Table != nil {
		var err error
		if w.table, frame, err = c.table(w, d.Table); err != nil {
			return nil, err
		}
		servo = w.table.servo
	}
	if t := d.Chamber; t != nil {
		if t.Ramp.Dimension() != quantity.TemperatureRate || t.Ramp.Number <= 0 {
			return nil, fmt.Errorf("the chamber's ramp is %s; it is a positive temperature rate, such as 2 K/min", t.Ramp)
		}
		w.chamber = &chamber{w: w, climate: w.climate, low: t.Low.SI(), high: t.High.SI(), own: t.Ramp.SI(), setPoint: int16(10 * ambient),
			hidden: hidden(d, t.Instrument, "chamber.temperature", stream(c.Seed, "chamber thermometer"))}
	}
	w.supply = newSupply(w, c.Seed)
	site := newEarth(d.Site.Latitude.SI(), d.Site.Gravity.SI())
	for i, s := range d.Slots {
		g, err := c.gyro(s)
		if err != nil {
			return nil, fmt.Errorf("slot %s: %w", s.ID, err)
		}
		off := small(stream(c.Seed, "attitude "+string(s.ID)), s.AttitudeUncertainty.SI())
		g.servo, g.mount = servo, newMounting(site, frame, s.Sense, s.Radius.SI(), off)
		g.body = newBody(ambient, g.p.Lag)
		if err := w.connect(g, s, i); err != nil {
			return nil, err
		}
		w.gyros = append(w.gyros, g)
		g.begin(0)
	}
	return w, nil
}

// table makes the table and the frame of its true axis.
func (c *Config) table(w *World, t *instruments.TableDescription) (*table, axes, error) {
	if dot(t.Axis, t.Axis) == 0 {
		return nil, axes{}, errors.New("the table's axis has no direction; give it as east, north, up")
	}
	maxRate, err := t.MaxRate.In(degPerS)
	if err != nil {
		return nil, axes{}, fmt.Errorf("the table's greatest rate: %w", err)
	}
	maxAccel, err := t.MaxAcceleration.In(degPerS2)
	if err != nil {
		return nil, axes{}, fmt.Errorf("the table's greatest acceleration: %w", err)
	}
	off := hidden(c.Description, t.Instrument, "table.rate", stream(c.Seed, "table rate"))
	tilt := small(stream(c.Seed, "table axis"), t.AxisUncertainty.SI())
	return newTable(w, c.Seed, maxRate, maxAccel, t.Creep.SI(), off), newAxes(t.Axis, tilt), nil
}

var (
	degPerS  = quantity.MustUnit("deg/s")
	degPerS2 = quantity.MustUnit("deg/s^2")
)

// connect puts a gyro on its channel of the supply.
func (w *World) connect(g *gyro, s instruments.SlotDescription, index int) error {
	number := s.SupplyChannel
	if number == 0 {
		number = index + 1
	}
	if number < 1 || number > supplyChannels {
		return fmt.Errorf("slot %s: channel %d; the virtual supply has channels 1 to %d", s.ID, number, supplyChannels)
	}
	if other := w.supply.channels[number-1].gyro; other != nil {
		return fmt.Errorf("slot %s: channel %d feeds slot %s already", s.ID, number, other.slot)
	}
	w.supply.channels[number-1].gyro = g
	return nil
}

func (s *Setup) population() (*Population, error) {
	text, ok := Shipped(s.Population)
	if !ok {
		return nil, &UnknownError{What: "population", Name: s.Population, Known: Populations()}
	}
	population, _, problems := LoadPopulation(s.Population, text)
	return population, problems.Err()
}

// gyro draws the gyro of one slot.
func (c *Config) gyro(s instruments.SlotDescription) (*gyro, error) {
	setup, ok := c.Gyros[s.ID]
	if !ok {
		return nil, errors.New("the virtual bench has no gyro for it")
	}
	population, err := setup.population()
	if err != nil {
		return nil, err
	}
	slot := string(s.ID)
	p, err := population.draw(c.Seed, slot, setup.Overrides)
	if err != nil {
		return nil, err
	}
	if s.Sense != 1 && s.Sense != -1 {
		return nil, fmt.Errorf("sense %v: the input axis lies along (1) or against (-1) the table's", s.Sense)
	}
	g := &gyro{slot: s.ID, p: p, angle: population.Angle, count: population.Count.SI(), cubic: newPolynomial(&p),
		slow:   newSlowNoise(p.B, p.K, stream(c.Seed, "gyro "+slot+" slow noise")),
		white:  newWhite(c.Seed, "gyro "+slot+" white noise"),
		turnOn: stream(c.Seed, "gyro "+slot+" turn-ons"),
		// N^2 is the two-sided density of white noise: a mean over framePeriod has the variance N^2 / framePeriod.
		sigma: p.N * math.Sqrt(frameRate),
	}
	g.mech = mechanisms[population.Family](&g.p)
	return g, nil
}

var mechanisms = map[Family]func(*Parameters) mechanism{
	Optical:      func(p *Parameters) mechanism { return &fibreCoil{p: p} },
	Vibratory:    func(p *Parameters) mechanism { return newDrivenMass(p) },
	SpinningMass: func(p *Parameters) mechanism { return newTorsionGyro(p) },
}

// hidden draws what the entries of an instrument's certificate leave open for one of its readings.
func hidden(d *instruments.Description, instrument, reading string, r *rand.Rand) deviation {
	var all deviation
	for _, i := range d.Instruments {
		if i.Name != instrument {
			continue
		}
		for _, c := range i.Calibrations {
			if c.Reading == reading {
				one := drawDeviation(c.Correction, c.U, c.Drift, c.K, r)
				all.share, all.offset = all.share+one.share, all.offset+one.offset
			}
		}
	}
	return all
}
