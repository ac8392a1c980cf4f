package engine

import (
	"context"
	"fmt"
	"math"
	"time"

	"proofrate/instruments"
)

// Making safe: each thing is told, read back, told again if need be, and the others are carried on with when one is
// dead. The limits are in the Clock's time, since a context deadline is blind to bench time.
const (
	safeTries = 3
	safeEvery = 500 * time.Millisecond
)

// makeSafe brings the table to rest, cuts the supplies and switches the chamber off, in the order of what can hurt
// first, and returns what it could not confirm.
func (e *Engine) makeSafe(ctx context.Context) (unconfirmed []string) {
	e.note("make safe", "", "begins")
	if e.bench.Table != nil {
		if err := e.rest(ctx); err != nil {
			unconfirmed = append(unconfirmed, "table at rest: "+err.Error())
		}
	}
	for _, s := range e.slots {
		if err := tryAgain(func() error { return e.switchOff(ctx, s) }); err != nil {
			unconfirmed = append(unconfirmed, fmt.Sprintf("slot %s supply off: %v", s.id, err))
		}
	}
	if e.bench.Chamber != nil {
		if err := tryAgain(func() error { return e.bench.Chamber.Off(ctx) }); err != nil {
			unconfirmed = append(unconfirmed, "chamber off: "+err.Error())
		}
	}
	for _, what := range unconfirmed {
		e.note("not confirmed", "", what)
	}
	if len(unconfirmed) == 0 {
		e.note("make safe", "", "confirmed: table at rest, supplies off, chamber off")
	}
	return unconfirmed
}

func tryAgain(do func() error) (err error) {
	for range safeTries {
		if err = do(); err == nil {
			return nil
		}
	}
	return err
}

// rest stops the table and waits until it reads rest.
func (e *Engine) rest(ctx context.Context) error {
	if err := tryAgain(func() error { return e.bench.Table.Stop(ctx) }); err != nil {
		return err
	}
	allowed := e.bench.Description.Table.MaxRate.As(degPerS)/e.acceleration().As(degPerS2) + settleSlack.Seconds()
	until := e.clock.Now().Add(time.Duration(allowed * float64(time.Second)))
	for {
		reading, err := instruments.Read(ctx, e.bench.Table, "table.rate")
		if err == nil && math.Abs(reading.Value.As(degPerS)) <= rateFloor {
			return nil
		}
		if !e.clock.Now().Before(until) {
			if err != nil {
				return err
			}
			return fmt.Errorf("it still reads %s", reading.Value)
		}
		if err := e.clock.Sleep(ctx, safeEvery); err != nil {
			return err
		}
	}
}
