package procedures

import (
	"math"
	"slices"
	"strings"
	"time"

	"proofrate/instruments"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// CheckBench holds the plan against a bench's description: roles, rates, temperatures, supplies, readings and samples.
// No hardware is touched.
func (p *Plan) CheckBench(d *instruments.Description) source.List {
	c := benchCheck{plan: p, bench: d}
	c.table()
	c.chamber()
	c.slots()
	for _, s := range d.Slots {
		c.slot(s)
	}
	c.readings()
	c.calibration()
	c.list.Sort()
	return c.list
}

type benchCheck struct {
	findings
	plan  *Plan
	bench *instruments.Description
}

func (c *benchCheck) cannot(span source.Span, format string, args ...any) {
	c.add(span, "bench-cannot", "", "bench "+c.bench.Name+" "+format, args...)
}

// needs is the place where a procedure states what it needs, gyro where it states the gyro.
func (c *benchCheck) needs() source.Span { return c.plan.places["needs"] }
func (c *benchCheck) gyro() source.Span  { return c.plan.places["gyro"] }

func (c *benchCheck) table() {
	t := c.bench.Table
	if c.plan.Needs.Table {
		switch {
		case t == nil:
			c.cannot(c.needs(), "has no table; the procedure needs one of %s", c.plan.Needs.TableRate)
		case c.plan.Needs.TableRate.SI() > t.MaxRate.SI():
			c.cannot(c.needs(), "turns at %s at most; the procedure needs %s", t.MaxRate, c.plan.Needs.TableRate)
		}
	}
	c.plan.walk(c.plan.Steps, func(s Step) {
		switch s.Action.(type) {
		case Position:
			if t == nil || !t.CanPosition {
				c.cannot(s.Span, "has no table that can go to a position")
			}
		case Hold:
			if t == nil {
				c.cannot(s.Span, "has no table to hold")
			}
		}
	})
}

func (c *benchCheck) chamber() {
	n := c.plan.Needs
	if !n.Chamber {
		return
	}
	ch := c.bench.Chamber
	switch {
	case ch == nil:
		c.cannot(c.needs(), "has no chamber; the procedure needs one from %s to %s", n.ChamberLow, n.ChamberHigh)
	case n.ChamberLow.SI() < ch.Low.SI() || n.ChamberHigh.SI() > ch.High.SI():
		c.cannot(c.needs(), "has a chamber from %s to %s; the procedure needs %s to %s", ch.Low, ch.High, n.ChamberLow, n.ChamberHigh)
	}
}

// slots checks that the steps name slots that there are.
func (c *benchCheck) slots() {
	var names []string
	for _, s := range c.bench.Slots {
		names = append(names, string(s.ID))
	}
	if len(names) == 0 {
		c.cannot(c.needs(), "has no slot")
	}
	c.plan.walk(c.plan.Steps, func(s Step) {
		if power, ok := s.Action.(Power); ok && power.Slot != "" && !slices.Contains(names, string(power.Slot)) {
			c.add(s.Span, "bench-cannot", source.DidYouMean(string(power.Slot), names), "bench %s has no slot %q", c.bench.Name, power.Slot)
		}
	})
}

func (c *benchCheck) slot(s instruments.SlotDescription) {
	p := c.plan
	if s.Supply == "" {
		c.cannot(c.needs(), "gives slot %s no supply", s.ID)
	}
	if s.MaxVoltage.Number != 0 && p.Needs.Voltage.SI() > s.MaxVoltage.SI() {
		c.cannot(c.needs(), "gives slot %s %s at most; the procedure needs %s", s.ID, s.MaxVoltage, p.Needs.Voltage)
	}
	if s.MaxCurrent.Number != 0 && p.Needs.Current.SI() > s.MaxCurrent.SI() {
		c.cannot(c.needs(), "gives slot %s %s at most; the procedure needs %s", s.ID, s.MaxCurrent, p.Needs.Current)
	}
	if len(s.Channels) == 0 {
		return
	}
	if s.SampleRate.Number != 0 && !s.SampleRate.Same(p.Gyro.SampleRate) {
		c.cannot(c.gyro(), "reads slot %s at %s; the procedure expects %s", s.ID, s.SampleRate, p.Gyro.SampleRate)
	}
	if !slices.ContainsFunc(s.Channels, func(ch instruments.Channel) bool { return ch.Name == p.Gyro.Output }) {
		c.cannot(c.gyro(), "reads %q in slot %s; the procedure expects %s", s.Channels[0].Name, s.ID, p.Gyro.Output)
	}
}

// readings checks that guards and settling steps name what the bench can read.
func (c *benchCheck) readings() {
	check := func(span source.Span, name string) {
		kind, _ := instruments.ReadingOf(name)
		switch {
		case kind.Bench && strings.HasPrefix(name, "table.") && c.bench.Table == nil,
			kind.Bench && strings.HasPrefix(name, "chamber.") && c.bench.Chamber == nil:
			c.cannot(span, "has no %s", name)
		case kind.Bench:
		default:
			for _, s := range c.bench.Slots {
				if !slices.Contains(s.Readings, name) {
					c.cannot(span, "cannot read %s in slot %s; it reads %s there", name, s.ID, strings.Join(s.Readings, ", "))
				}
			}
		}
	}
	for _, g := range c.plan.Guards {
		for _, name := range g.Check.Readings() {
			check(g.Span, name)
		}
	}
	seen := map[string]bool{}
	c.plan.walk(c.plan.Steps, func(s Step) {
		name := ""
		switch a := s.Action.(type) {
		case Soak:
			name = a.Of
		case Settle:
			name = a.Reading
		}
		if name != "" && !seen[name] {
			seen[name] = true
			check(s.Span, name)
		}
	})
}

// calibration checks that the table's rate has a certificate's entry where a sweep leans on it: without one, its
// uncertainty would read as none. Figures take it relative to the rate.
func (c *benchCheck) calibration() {
	for _, f := range c.plan.Figures {
		if !slices.Contains(f.Method.Needs, "rate") || f.Method.Name == "polarity" || c.bench.Table == nil {
			continue
		}
		entry, ok := tableRate(c.bench)
		switch {
		case !ok:
			c.cannot(f.Span, "has no calibration of table.rate; figure %s needs its uncertainty", f.Name)
		case entry.Correction.Dimension() != quantity.Ratio || entry.U.Dimension() != quantity.Ratio || entry.Drift.Dimension() != quantity.Ratio:
			c.cannot(f.Span, "states the calibration of table.rate as a rate; figure %s needs it relative, such as 20 ppm", f.Name)
		}
	}
}

// tableRate is the table's calibration entry for its rate.
func tableRate(d *instruments.Description) (instruments.Calibration, bool) {
	for _, i := range d.Instruments {
		for _, entry := range i.Calibrations {
			if i.Name == d.Table.Instrument && entry.Reading == "table.rate" {
				return entry, true
			}
		}
	}
	return instruments.Calibration{}, false
}

// walk visits every step, inner ones too.
func (p *Plan) walk(steps []Step, visit func(Step)) {
	for _, s := range steps {
		visit(s)
		if r, ok := s.Action.(Record); ok {
			p.walk(r.While, visit)
		}
	}
}

// What an estimate assumes. A gyro follows the air with a lag of some ten minutes (common practice); settling costs a
// few seconds beyond the slew.
const (
	gyroLag      = 12 * time.Minute
	tableSettles = 4 * time.Second
	powerSettles = time.Second
)

// Estimate gives the bench time that each top-level step should take on a bench.
func (p *Plan) Estimate(d *instruments.Description) []time.Duration {
	e := estimator{bench: d, temperature: 23}
	list := make([]time.Duration, len(p.Steps))
	for i, s := range p.Steps {
		list[i] = e.step(s)
	}
	return list
}

type estimator struct {
	bench       *instruments.Description
	rate        float64 // rad/s
	temperature float64 // degC
}

func (e *estimator) step(s Step) time.Duration {
	switch a := s.Action.(type) {
	case Soak:
		return e.soak(a)
	case Settle:
		return a.Hold
	case Turn:
		return e.slew(a.Rate.SI())
	case Hold:
		return e.slew(0)
	case Position:
		return e.slew(0) + 10*time.Second
	case Power:
		return powerSettles
	case Wait:
		return a.For
	case Record:
		total := a.For
		for _, inner := range a.While {
			total += e.step(inner)
		}
		return total
	case Park:
		return e.slew(0) + e.ramp(a.Temperature.SI())
	}
	return 0
}

func (e *estimator) slew(to float64) time.Duration {
	change := math.Abs(to - e.rate)
	e.rate = to
	if e.bench.Table == nil || e.bench.Table.MaxAcceleration.SI() == 0 {
		return tableSettles
	}
	return seconds(change/e.bench.Table.MaxAcceleration.SI()) + tableSettles
}

func (e *estimator) ramp(to float64) time.Duration {
	change := math.Abs(to - e.temperature)
	e.temperature = to
	if e.bench.Chamber == nil || e.bench.Chamber.Ramp.SI() == 0 {
		return 0
	}
	return seconds(change / e.bench.Chamber.Ramp.SI())
}

// soak: the ramp, then the lag until the drift is small enough, dT/dt = (change / lag) exp(-t/lag), then the hold.
func (e *estimator) soak(a Soak) time.Duration {
	change := math.Abs(a.Target.SI() - e.temperature)
	total := e.ramp(a.Target.SI()) + a.Hold
	if drift := a.Drift.SI(); drift > 0 && a.Of != "" {
		if tail := math.Log(change / gyroLag.Seconds() / drift); tail > 0 {
			total += seconds(tail * gyroLag.Seconds())
		}
	}
	return min(total, a.AtMost)
}

func seconds(s float64) time.Duration { return time.Duration(s * float64(time.Second)) }
