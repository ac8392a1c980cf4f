package instruments

import (
	"context"
	"fmt"
	"math"
	"time"

	"proofrate/limits/quantity"
)

// The steps of CheckChamber and CheckSupply: small enough for a gyro that is on the bench.
const (
	tryWarmer  = 5.0 // K
	tryRamp    = 1.0 // K/min
	tryVoltage = 1.0 // V
	tryCurrent = 1.0 // A
	offVoltage = 0.3 // V: below it an output counts as off
)

var (
	degC    = quantity.MustUnit("degC")
	kPerMin = quantity.MustUnit("K/min")
	ampere  = quantity.MustUnit("A")
)

// CheckChamber exercises h and lists all that breaks the contract of Chamber. It warms the chamber by 5 K, or cools it
// if it is warm, and leaves it off; it takes up to an hour of c's time.
func CheckChamber(ctx context.Context, c Clock, h Chamber) []Finding {
	return conform(ctx, c, h, chamberRules, func(ctx context.Context, _ Clock, h Chamber) error { return h.Off(ctx) })
}

var chamberRules = append(shared[Chamber]("chamber.temperature"), []rule[Chamber]{
	{"range", true, chamberRefuses},
	{"measured", true, chamberMeasures},
	{"ramp", true, chamberRamps},
	{"off", true, chamberSwitchesOff},
}...)

// chamberRefuses: what lies beyond every chamber, is of a wrong dimension or of no value is refused.
func chamberRefuses(ctx context.Context, _ Clock, h Chamber) error {
	ramp := quantity.Of(tryRamp, kPerMin)
	var requests []request
	for _, t := range []quantity.Value{quantity.Of(2000, degC), quantity.Of(-300, degC), quantity.Of(23, volt), quantity.Of(math.NaN(), degC)} {
		requests = append(requests, request{fmt.Sprintf("a temperature of %v", t), func(ctx context.Context) error { return h.SetTemperature(ctx, t, ramp) }})
	}
	requests = append(requests, request{"a ramp of 1 V", func(ctx context.Context) error {
		return h.SetTemperature(ctx, quantity.Of(23, degC), quantity.Of(1, volt))
	}})
	return refuses(ctx, requests)
}

// step sends the chamber away from where it is.
func step(ctx context.Context, c Clock, h Chamber, ramp float64) (from, to float64, err error) {
	if from, _, err = ask(ctx, c, h, "chamber.temperature"); err != nil {
		return 0, 0, err
	}
	if to = math.Round(from + tryWarmer); from > 30 {
		to = math.Round(from - tryWarmer)
	}
	return from, to, h.SetTemperature(ctx, quantity.Of(to, degC), quantity.Of(ramp, kPerMin))
}

// chamberMeasures: the temperature that is read is the air's, not the set-point, and comes to the set-point.
func chamberMeasures(ctx context.Context, c Clock, h Chamber) error {
	_, to, err := step(ctx, c, h, 0)
	if err != nil {
		return err
	}
	got, _, err := ask(ctx, c, h, "chamber.temperature")
	if err != nil {
		return err
	}
	if math.Abs(got-to) < tryWarmer/5 {
		return fmt.Errorf("chamber.temperature is %g degC at once after a command to %g degC: the set-point's echo, no measurement", got, to)
	}
	return reaches(ctx, c, h, "chamber.temperature", to, 1.5, 30*time.Minute)
}

// chamberRamps: a slow ramp is kept. Half a kelvin is left to the control.
func chamberRamps(ctx context.Context, c Clock, h Chamber) error {
	const minutes = 2
	from, to, err := step(ctx, c, h, tryRamp)
	if err != nil {
		return err
	}
	if err := c.Sleep(ctx, minutes*time.Minute); err != nil {
		return err
	}
	got, _, err := ask(ctx, c, h, "chamber.temperature")
	if moved := math.Abs(got - from); err == nil && moved > tryRamp*minutes+0.5 {
		err = fmt.Errorf("on the way from %g to %g degC at %g K/min it moved %.3g K in %d min", from, to, tryRamp, moved, minutes)
	}
	return err
}

// chamberSwitchesOff: off works from every state and twice, and the temperature can be read afterwards.
func chamberSwitchesOff(ctx context.Context, c Clock, h Chamber) error {
	if _, _, err := step(ctx, c, h, 0); err != nil {
		return err
	}
	if h.SetTemperature(ctx, quantity.Of(2000, degC), quantity.Value{Unit: kPerMin}) == nil {
		return fmt.Errorf("a temperature of 2000 degC was accepted")
	}
	for range 2 {
		if err := h.Off(ctx); err != nil {
			return err
		}
	}
	_, _, err := ask(ctx, c, h, "chamber.temperature")
	return err
}

// CheckSupply exercises s and lists all that breaks the contract of Supply. It puts 1 V on the slot, limited to 1 A,
// and leaves the output off; it takes about a minute of c's time.
func CheckSupply(ctx context.Context, c Clock, s Supply) []Finding {
	return conform(ctx, c, s, supplyRules, restSupply)
}

var supplyRules = append(shared[Supply]("supply.voltage", "supply.current"), []rule[Supply]{
	{"measured", true, supplyMeasures}, // first: rest leans on it
	{"range", true, supplyRefuses},
	{"on and off", true, supplySwitches},
}...)

func restSupply(ctx context.Context, c Clock, s Supply) error {
	if err := s.Off(ctx); err != nil {
		return err
	}
	return reaches(ctx, c, s, "supply.voltage", 0, offVoltage, 30*time.Second)
}

// setSupply sets the voltage and current of the suite.
func setSupply(ctx context.Context, s Supply) error {
	return s.Set(ctx, quantity.Of(tryVoltage, volt), quantity.Of(tryCurrent, ampere))
}

// supplyRefuses: what lies beyond every supply, is of a wrong dimension or of no value is refused and changes nothing.
func supplyRefuses(ctx context.Context, c Clock, s Supply) error {
	if err := setSupply(ctx, s); err != nil {
		return err
	}
	set := func(voltage, current quantity.Value) request {
		return request{fmt.Sprintf("%v, limited to %v,", voltage, current), func(ctx context.Context) error { return s.Set(ctx, voltage, current) }}
	}
	good, limit := quantity.Of(tryVoltage, volt), quantity.Of(tryCurrent, ampere)
	err := refuses(ctx, []request{
		set(quantity.Of(1e6, volt), limit), set(good, quantity.Of(1e6, ampere)),
		set(quantity.Of(1, degC), limit), set(good, quantity.Of(1, volt)), set(quantity.Of(math.NaN(), volt), limit),
	})
	if err != nil {
		return err
	}
	if err := s.On(ctx); err != nil {
		return err
	}
	if err := reaches(ctx, c, s, "supply.voltage", tryVoltage, 0.1*tryVoltage, 10*time.Second); err != nil {
		return fmt.Errorf("after refused settings: %w", err)
	}
	return nil
}

// supplyMeasures: an output that is off reads no voltage, whatever is set.
func supplyMeasures(ctx context.Context, c Clock, s Supply) error {
	if err := setSupply(ctx, s); err != nil {
		return err
	}
	if err := reaches(ctx, c, s, "supply.voltage", 0, offVoltage, 10*time.Second); err != nil {
		return fmt.Errorf("set to %g V and off: %w: the set-point's echo, no measurement", tryVoltage, err)
	}
	return nil
}

// supplySwitches: on gives the voltage, off takes it away; each may be asked for twice.
func supplySwitches(ctx context.Context, c Clock, s Supply) error {
	if err := setSupply(ctx, s); err != nil {
		return err
	}
	for _, turn := range []struct {
		name       string
		do         func(context.Context) error
		want, band float64
	}{{"on", s.On, tryVoltage, 0.1 * tryVoltage}, {"off", s.Off, 0, offVoltage}} {
		for range 2 {
			if err := turn.do(ctx); err != nil {
				return fmt.Errorf("%s: %w", turn.name, err)
			}
		}
		if err := reaches(ctx, c, s, "supply.voltage", turn.want, turn.band, 30*time.Second); err != nil {
			return fmt.Errorf("%s: %w", turn.name, err)
		}
		current, _, err := ask(ctx, c, s, "supply.current")
		if err != nil {
			return err
		}
		if current > 1.1*tryCurrent || current < -0.1*tryCurrent {
			return fmt.Errorf("%s: supply.current is %g A, limited to %g A", turn.name, current, tryCurrent)
		}
	}
	return nil
}
