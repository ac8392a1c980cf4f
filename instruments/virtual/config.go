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
	// Trace keeps what Truth.Window needs.
	Trace bool
}

// Setup is the gyro in one slot.
type Setup struct {
	Population string                    // a shipped one
	Custom     *Population               // instead of it
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
	w := &World{seed: c.Seed, tick: 1}
	w.climate = newClimate(ambient, stream(c.Seed, "chamber air"))
	servo, frame := newServo(nil), newAxes(instruments.Vector{0, 0, 1}, [2]float64{})
	if t := d.Table; t != nil {
		if dot(t.Axis, t.Axis) == 0 {
			return nil, errors.New("the table's axis has no direction; give it as east, north, up")
		}
		frame = newAxes(t.Axis, small(stream(c.Seed, "table axis"), t.AxisUncertainty.SI()))
		w.table = newTable(w, c.Seed, t.MaxRate.As(degPerS), t.MaxAcceleration.As(degPerS2), t.Creep.SI(),
			hidden(d, t.Instrument, "table.rate", stream(c.Seed, "table rate")))
		servo = w.table.servo
	}
	if t := d.Chamber; t != nil {
		w.chamber = &chamber{w: w, climate: w.climate, low: t.Low.SI(), high: t.High.SI(), own: t.Ramp.SI(),
			hidden: hidden(d, t.Instrument, "chamber.temperature", stream(c.Seed, "chamber thermometer"))}
		w.chamber.setPoint = int16(10 * ambient)
	}
	w.supply = newSupply(w, c.Seed)
	site := newEarth(d.Site.Latitude.SI(), d.Site.Gravity.SI())
	for i, s := range d.Slots {
		setup, ok := c.Gyros[s.ID]
		if !ok {
			return nil, fmt.Errorf("slot %s: the virtual bench has no gyro for it", s.ID)
		}
		g, err := newGyro(c, setup, s)
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

func newGyro(c Config, setup Setup, s instruments.SlotDescription) (*gyro, error) {
	population := setup.Custom
	if population == nil {
		text, ok := Shipped(setup.Population)
		if !ok {
			return nil, &UnknownError{What: "population", Name: setup.Population, Known: Populations()}
		}
		loaded, _, problems := LoadPopulation(setup.Population, text)
		if err := problems.Err(); err != nil {
			return nil, err
		}
		population = loaded
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
	if c.Trace {
		g.trace = &trace{}
	}
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
