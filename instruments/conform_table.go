package instruments

import (
	"context"
	"errors"
	"fmt"
	"math"
	"time"

	"proofrate/limits/quantity"
)

// The motion of CheckTable: slow enough for every rate table with a fixture on it.
const (
	tryRate   = 10.0 // deg/s
	tryAccel  = 5.0  // deg/s^2: two seconds from rest
	tryAngle  = 10.0 // deg
	trySwing  = 1.0  // deg
	trySwingF = 0.5  // Hz
	atRest    = 0.05 // deg/s: no table of the trade reads more while it stands
	restMost  = time.Minute
)

var (
	degPerS  = quantity.MustUnit("deg/s")
	degPerS2 = quantity.MustUnit("deg/s^2")
	deg      = quantity.MustUnit("deg")
	hertz    = quantity.MustUnit("Hz")
	volt     = quantity.MustUnit("V")
)

// CheckTable exercises t and lists all that breaks the contract of Table, Positioner and Oscillator. It moves the
// table, at 10 deg/s at most, and leaves it at rest; it takes about a minute and a half of c's time.
func CheckTable(ctx context.Context, c Clock, t Table) []Finding {
	return conform(ctx, c, t, tableRules, restTable)
}

var tableRules = append(shared[Table]("table.rate", "table.position"), []rule[Table]{
	{"range", true, tableRefuses},
	{"measured", true, tableMeasures},
	{"sense", true, tableSense},
	{"stop", true, tableStops},
	{"position", true, tableGoes},
	{"swing", true, tableSwings},
}...)

func restTable(ctx context.Context, c Clock, t Table) error {
	if err := t.Stop(ctx); err != nil {
		return err
	}
	return reaches(ctx, c, t, "table.rate", 0, atRest, restMost)
}

func setRate(ctx context.Context, t Table, rate float64) error {
	return t.SetRate(ctx, quantity.Of(rate, degPerS), quantity.Of(tryAccel, degPerS2))
}

// tableRefuses: a rate beyond the range, of a wrong dimension or of no value is refused and moves nothing.
func tableRefuses(ctx context.Context, c Clock, t Table) error {
	accel := quantity.Of(tryAccel, degPerS2)
	rates := []quantity.Value{quantity.Of(1e7, degPerS), quantity.Of(-1e7, degPerS), quantity.Of(tryRate, volt), quantity.Of(math.NaN(), degPerS)}
	var requests []request
	for _, rate := range rates {
		requests = append(requests, request{fmt.Sprintf("a rate of %v", rate), func(ctx context.Context) error { return t.SetRate(ctx, rate, accel) }})
	}
	if p, ok := t.(Positioner); ok {
		requests = append(requests, request{"a position of 1 V", func(ctx context.Context) error { return p.GoTo(ctx, quantity.Of(1, volt)) }})
	}
	if err := refuses(ctx, requests); err != nil {
		return err
	}
	if err := c.Sleep(ctx, 2*time.Second); err != nil {
		return err
	}
	rate, _, err := ask(ctx, c, t, "table.rate")
	if err == nil && math.Abs(rate) > atRest {
		err = fmt.Errorf("the refused rates left the table at %g deg/s", rate)
	}
	return err
}

// tableMeasures: the rate that is read differs from the command until the table has it, and then agrees.
func tableMeasures(ctx context.Context, c Clock, t Table) error {
	begin := c.Now()
	if err := setRate(ctx, t, tryRate); err != nil {
		return err
	}
	rate, at, err := ask(ctx, c, t, "table.rate")
	if err != nil {
		return err
	}
	passed := at.Sub(begin).Seconds()
	if could := tryAccel * passed; could < 0.8*tryRate && rate > could+0.1*tryRate {
		return fmt.Errorf("table.rate is %g deg/s %.3g s after the command; at %g deg/s^2 it can be %.3g deg/s: a command's echo, no measurement",
			rate, passed, tryAccel, could)
	}
	return reaches(ctx, c, t, "table.rate", tryRate, 0.02*tryRate, 30*time.Second)
}

// tableSense: a positive rate raises the position, by rate times time, over turns; a negative one lowers it.
func tableSense(ctx context.Context, c Clock, t Table) error {
	for _, rate := range []float64{tryRate, -tryRate} {
		if err := setRate(ctx, t, rate); err != nil {
			return err
		}
		if err := reaches(ctx, c, t, "table.rate", rate, 0.02*tryRate, 30*time.Second); err != nil {
			return err
		}
		from, began, err := ask(ctx, c, t, "table.position")
		if err != nil {
			return err
		}
		if err := c.Sleep(ctx, 5*time.Second); err != nil {
			return err
		}
		to, ended, err := ask(ctx, c, t, "table.position")
		if err != nil {
			return err
		}
		turned, want := to-from, rate*ended.Sub(began).Seconds()
		if math.Abs(turned-want) > 0.1*math.Abs(want) {
			return fmt.Errorf("at %g deg/s table.position went by %.3g deg in %v; expected %.3g deg", rate, turned, ended.Sub(began), want)
		}
	}
	return nil
}

// tableStops: Stop brings the table to rest and holds it, from every state, and once more when it rests already.
func tableStops(ctx context.Context, c Clock, t Table) error {
	states := []struct {
		name string
		into func() error
	}{
		{"at rest", func() error { return nil }},
		{"speeding up", func() error { return setRate(ctx, t, tryRate) }},
		{"turning", func() error {
			if err := setRate(ctx, t, -tryRate); err != nil {
				return err
			}
			return reaches(ctx, c, t, "table.rate", -tryRate, 0.02*tryRate, 30*time.Second)
		}},
		{"turning, a request refused", func() error {
			if err := setRate(ctx, t, tryRate); err != nil {
				return err
			}
			if setRate(ctx, t, 1e7) == nil {
				return errors.New("a rate of 1e7 deg/s was accepted")
			}
			return nil
		}},
		{"going to a position", func() error { return unlessUnsupported(GoTo(ctx, t, quantity.Of(2*tryAngle, deg))) }},
		{"swinging", func() error { return unlessUnsupported(swing(ctx, t)) }},
	}
	for _, state := range states {
		if err := state.into(); err != nil {
			return fmt.Errorf("%s: %w", state.name, err)
		}
		for _, time := range []string{"", " a second time"} {
			if err := t.Stop(ctx); err != nil {
				return fmt.Errorf("%s: Stop%s: %w", state.name, time, err)
			}
		}
		if err := reaches(ctx, c, t, "table.rate", 0, atRest, restMost); err != nil {
			return fmt.Errorf("stopped while %s: %w", state.name, err)
		}
		if err := holds(ctx, c, t); err != nil {
			return fmt.Errorf("stopped while %s: %w", state.name, err)
		}
	}
	return nil
}

// holds: once at rest, the table stays where it is. A servo may ring for a second.
func holds(ctx context.Context, c Clock, t Table) error {
	if err := c.Sleep(ctx, time.Second); err != nil {
		return err
	}
	low, high, err := span(ctx, c, t, 3*time.Second)
	if err == nil && high-low > 2*atRest {
		err = fmt.Errorf("table.position went from %g to %g deg in 3 s", low, high)
	}
	return err
}

// span watches the position for d.
func span(ctx context.Context, c Clock, t Table, d time.Duration) (low, high float64, err error) {
	low, high = math.Inf(1), math.Inf(-1)
	for until := c.Now().Add(d); c.Now().Before(until); {
		position, _, err := ask(ctx, c, t, "table.position")
		if err != nil {
			return 0, 0, err
		}
		low, high = min(low, position), max(high, position)
		if err := c.Sleep(ctx, pollEvery); err != nil {
			return 0, 0, err
		}
	}
	return low, high, nil
}

func unlessUnsupported(err error) error {
	if _, unsupported := errors.AsType[*UnsupportedError](err); unsupported {
		return nil
	}
	return err
}

// tableGoes: the table comes to the position that was asked for.
func tableGoes(ctx context.Context, c Clock, t Table) error {
	p, ok := t.(Positioner)
	if !ok {
		return skip("the table cannot go to a position")
	}
	from, _, err := ask(ctx, c, t, "table.position")
	if err != nil {
		return err
	}
	to := math.Round(from) - tryAngle
	if err := p.GoTo(ctx, quantity.Of(to, deg)); err != nil {
		return err
	}
	return reaches(ctx, c, t, "table.position", to, 0.1, restMost)
}

func swing(ctx context.Context, t Table) error {
	return Oscillate(ctx, t, quantity.Of(trySwing, deg), quantity.Of(trySwingF, hertz))
}

// tableSwings: an oscillating table goes to and fro by about the amplitude.
func tableSwings(ctx context.Context, c Clock, t Table) error {
	if _, ok := t.(Oscillator); !ok {
		return skip("the table cannot oscillate")
	}
	if err := swing(ctx, t); err != nil {
		return err
	}
	low, high, err := span(ctx, c, t, 10*time.Second)
	if went := high - low; err == nil && (went < trySwing || went > 4*trySwing) {
		err = fmt.Errorf("swinging by %g deg, table.position spans %.3g deg; expected about %g deg", trySwing, went, 2*trySwing)
	}
	return err
}
