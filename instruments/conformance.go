package instruments

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"time"

	"proofrate/limits/quantity"
)

// Finding is one point at which a driver breaks the contract of its role, or at which it could not be tried.
type Finding struct {
	Rule    string // "stop": stable, for tests and tools
	Detail  string // what was expected and what was found
	Skipped bool   // the rule was not tried; Detail says why
}

func (f Finding) String() string {
	if f.Skipped {
		return f.Rule + ": not tried: " + f.Detail
	}
	return f.Rule + ": " + f.Detail
}

// rule is one clause of a role's contract. Its check returns the detail of what is broken, or a skip.
type rule[R any] struct {
	name  string
	moves bool // leaves the instrument in another state
	check func(ctx context.Context, c Clock, role R) error
}

type skip string

func (s skip) Error() string { return string(s) }

// conform tries the rules in order. After each that moves the instrument, rest brings it back to a safe state.
func conform[R any](ctx context.Context, c Clock, role R, rules []rule[R], rest func(context.Context, Clock, R) error) []Finding {
	var findings []Finding
	for _, r := range rules {
		if ctx.Err() != nil {
			return append(findings, Finding{Rule: r.name, Skipped: true, Detail: context.Cause(ctx).Error()})
		}
		err := r.check(ctx, c, role)
		if why, skipped := errors.AsType[skip](err); skipped {
			findings = append(findings, Finding{Rule: r.name, Skipped: true, Detail: string(why)})
		} else if err != nil {
			findings = append(findings, Finding{Rule: r.name, Detail: err.Error()})
		}
		if !r.moves {
			continue
		}
		if err := rest(context.WithoutCancel(ctx), c, role); err != nil {
			return append(findings, Finding{Rule: "rest", Detail: fmt.Sprintf("after %q the instrument could not be brought to rest, so that no more was tried: %v", r.name, err)})
		}
	}
	return findings
}

// The bounds within which a sound driver works on any bench, generous on purpose: the suite may miss a fault but must
// not accuse a sound driver.
const (
	answerMost = 10 * time.Second // for one reading
	pollEvery  = 100 * time.Millisecond
)

// shared are the rules of every instrument that can be asked. needs are the readings that each of its role has.
func shared[R Instrument](needs ...string) []rule[R] {
	return []rule[R]{
		{"identity", false, func(ctx context.Context, _ Clock, r R) error { return identifies(ctx, r) }},
		{"readings", false, func(ctx context.Context, c Clock, r R) error { return readable(ctx, c, r, needs) }},
		{"unknown reading", false, func(ctx context.Context, _ Clock, r R) error { return knowsItsReadings(ctx, r) }},
		{"queue", false, func(ctx context.Context, _ Clock, r R) error { return queues(ctx, r) }},
		{"cancelled", false, func(ctx context.Context, c Clock, r R) error { return survivesCancel(ctx, c, r) }},
	}
}

// identifies: an instrument says who it is.
func identifies(ctx context.Context, i Instrument) error {
	id, err := i.Identify(ctx)
	if err != nil {
		return fmt.Errorf("identify: %w", err)
	}
	if id.Maker == "" && id.Model == "" {
		return errors.New("neither maker nor model is given, so that the ledger could not say what measured")
	}
	return nil
}

// readable: all readings that are listed can be had, each under its own name, in its own dimension, with a time that
// lies between question and answer.
func readable(ctx context.Context, c Clock, r Reader, needs []string) error {
	listed := r.Readings()
	for _, name := range needs {
		if !slices.Contains(listed, name) {
			return fmt.Errorf("%s is not listed; every instrument of this role has it", name)
		}
	}
	for _, name := range listed {
		if _, _, err := ask(ctx, c, r, name); err != nil {
			return err
		}
	}
	return nil
}

// ask reads name and holds the reading to what every reading must keep. The number is in the unit of ReadingKinds.
func ask(ctx context.Context, c Clock, r Reader, name string) (float64, time.Time, error) {
	before := c.Now()
	reading, err := Read(ctx, r, name)
	after := c.Now()
	if err != nil {
		return 0, time.Time{}, fmt.Errorf("%s: %w", name, err)
	}
	if reading.Name != name {
		return 0, time.Time{}, fmt.Errorf("%s: the answer is named %q", name, reading.Name)
	}
	if after.Sub(before) > answerMost {
		return 0, time.Time{}, fmt.Errorf("%s: took %v", name, after.Sub(before))
	}
	if reading.At.Before(before) || reading.At.After(after) {
		return 0, time.Time{}, fmt.Errorf("%s: is of %v, but was asked for at %v and answered at %v", name, reading.At, before, after)
	}
	number, err := inUnitOf(name, reading.Value)
	return number, reading.At, err
}

func inUnitOf(name string, v quantity.Value) (float64, error) {
	number := v.Number
	if kind, known := ReadingOf(name); known && kind.Unit != (quantity.Unit{}) {
		var err error
		if number, err = v.In(kind.Unit); err != nil {
			return 0, fmt.Errorf("%s: %w", name, err)
		}
	}
	if math.IsNaN(number) || math.IsInf(number, 0) {
		return 0, fmt.Errorf("%s: is %v without an error", name, number)
	}
	return number, nil
}

// knowsItsReadings: a reading that it does not have is an error, not a zero.
func knowsItsReadings(ctx context.Context, r Reader) error {
	const none = "table.colour"
	if reading, err := Read(ctx, r, none); err == nil {
		return fmt.Errorf("asked for %s, which no instrument has, it gave %v", none, reading.Value)
	}
	return nil
}

// queues: two requests may wait on one link, and each is given its own answer whichever is taken first.
func queues(ctx context.Context, r Reader) error {
	names := r.Readings()
	if len(names) < 2 {
		return skip("it has one reading only")
	}
	var pending [2]Pending
	for i := range pending {
		var err error
		if pending[i], err = r.Ask(ctx, names[i]); err != nil {
			return fmt.Errorf("ask for %s with a request waiting: %w", names[i], err)
		}
	}
	for i := len(pending) - 1; i >= 0; i-- {
		reading, err := pending[i].Take(ctx)
		if err != nil {
			return fmt.Errorf("take %s: %w", names[i], err)
		}
		if reading.Name != names[i] {
			return fmt.Errorf("asked for %s and was given %s", names[i], reading.Name)
		}
	}
	return nil
}

// survivesCancel: a request that was given up leaves the driver usable, and its answer is not taken for the next one's.
func survivesCancel(ctx context.Context, c Clock, r Reader) error {
	names := r.Readings()
	pending, err := r.Ask(ctx, names[0])
	if err != nil {
		return err
	}
	given, cancel := context.WithCancel(ctx)
	cancel()
	before := c.Now()
	pending.Take(given) // whether it still succeeds is left to the driver
	if took := c.Now().Sub(before); took > answerMost {
		return fmt.Errorf("a cancelled request for %s took %v to return", names[0], took)
	}
	last := names[len(names)-1]
	if _, _, err := ask(ctx, c, r, last); err != nil {
		return fmt.Errorf("after a cancelled request: %w", err)
	}
	return nil
}

// request is one that an instrument must refuse.
type request struct {
	what string
	do   func(context.Context) error
}

// refuses: every one of the requests is refused, and says so by its kind.
func refuses(ctx context.Context, requests []request) error {
	for _, r := range requests {
		err := r.do(ctx)
		if err == nil {
			return fmt.Errorf("%s was accepted; beyond the range a request is refused, never clipped", r.what)
		}
		refusal, ok := errors.AsType[*Error](err)
		if !ok || refusal.Kind != Refused {
			return fmt.Errorf("%s gave %q, which is not of the kind %q", r.what, err, Refused)
		}
	}
	return nil
}

// reaches polls a reading until it is within band of target, at the longest for most.
func reaches(ctx context.Context, c Clock, r Reader, name string, target, band float64, most time.Duration) error {
	for until := c.Now().Add(most); ; {
		got, _, err := ask(ctx, c, r, name)
		if err != nil {
			return err
		}
		if math.Abs(got-target) <= band {
			return nil
		}
		if !c.Now().Before(until) {
			kind, _ := ReadingOf(name)
			return fmt.Errorf("%s is %g %v after %v; expected %g within %g", name, got, kind.Unit, most, target, band)
		}
		if err := c.Sleep(ctx, pollEvery); err != nil {
			return err
		}
	}
}
