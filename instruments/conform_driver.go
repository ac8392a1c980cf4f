package instruments

import (
	"context"
	"errors"
	"fmt"
	"math"
	"time"
)

// Rig is what CheckDriver needs to try a driver against a peer that misbehaves, whatever protocol they speak.
type Rig struct {
	Reading  string        // one that the driver can be asked for
	Patience time.Duration // within which the driver gives up an answer, all its repeats included
	// Answer is what a sound instrument sends to a request while the reading's value, in the unit of ReadingKinds, is
	// value. Nil is no answer.
	Answer func(request []byte, value float64) []byte
	// Open makes a driver on a fresh link. The far end hands each request to peer and sends what it returns.
	Open func(peer Peer) (Bed, error)
}

// Peer scripts the far end of a driver's link: the parts that it sends to a request.
type Peer func(request []byte) []Part

// Part is a piece of an answer and when it arrives, counted from the request.
type Part struct {
	Bytes []byte
	After time.Duration
}

// Bed is a driver on its link.
type Bed struct {
	Clock  Clock
	Driver Reader
	Close  func() error // of the link; may be called while the driver waits
}

// CheckDriver lists all at which a driver breaks on a peer whose replies are late, split, doubled, garbled, cut or
// missing, on a request that is cancelled, and on a link that is closed under it. It never gives a wrong value; it
// gives up in time, with the right kind; and the next request has its own answer.
func CheckDriver(ctx context.Context, rig Rig) []Finding {
	var findings []Finding
	broken := func(rule string, err error) {
		if err != nil {
			findings = append(findings, Finding{Rule: rule, Detail: err.Error()})
		}
	}
	for _, f := range faults {
		broken(f.name, rig.suffers(ctx, f.spoil, f.must))
	}
	broken("garbled", rig.garbled(ctx))
	broken("cancelled", rig.cancelled(ctx))
	broken("closed", rig.closed(ctx))
	return findings
}

// outcome is what a driver may make of a spoilt answer. A wrong value it may never make of it.
type outcome uint8

const (
	valueOrError outcome = iota + 1
	valueOnly
	errorOnly
)

// faults are the ways to spoil a sound answer; patience is the driver's.
var faults = []struct {
	name  string
	must  outcome
	spoil func(answer []byte, patience time.Duration) []Part
}{
	{"plain", valueOnly, func(answer []byte, _ time.Duration) []Part { return []Part{{answer, replyAfter}} }},
	{"split", valueOnly, func(answer []byte, _ time.Duration) []Part {
		var parts []Part
		for i := range answer {
			parts = append(parts, Part{answer[i : i+1], replyAfter + time.Duration(i)*200*time.Microsecond})
		}
		return parts
	}},
	{"doubled", valueOnly, func(answer []byte, _ time.Duration) []Part {
		return []Part{{answer, replyAfter}, {answer, replyAfter}}
	}},
	{"late", errorOnly, func(answer []byte, patience time.Duration) []Part {
		return []Part{{answer, patience + time.Second}}
	}},
	{"silent", errorOnly, func([]byte, time.Duration) []Part { return nil }},
	{"cut", errorOnly, func(answer []byte, _ time.Duration) []Part {
		return []Part{{answer[:len(answer)/2], replyAfter}}
	}},
	{"noise before", valueOrError, func(answer []byte, _ time.Duration) []Part {
		return []Part{{[]byte{0xff, 0x00, 0xfe, 0x81}, replyAfter}, {answer, replyAfter + time.Millisecond}}
	}},
	{"noise after", valueOrError, func(answer []byte, _ time.Duration) []Part {
		return []Part{{answer, replyAfter}, {[]byte{0xff, 0x00, 0xfe, 0x81}, replyAfter}}
	}},
}

// replyAfter is how long the scripted peer thinks.
const replyAfter = 2 * time.Millisecond

// The values that the peer gives: whole numbers, which every instrument can say exactly.
const (
	firstValue = 11.0
	nextValue  = 12.0
)

// suffers asks once with every answer spoilt and once more with none.
func (rig Rig) suffers(ctx context.Context, spoil func([]byte, time.Duration) []Part, must outcome) error {
	value, spoilt := firstValue, true
	bed, err := rig.Open(func(request []byte) []Part {
		answer := rig.Answer(request, value)
		switch {
		case answer == nil:
			return nil
		case spoilt:
			return spoil(answer, rig.Patience)
		}
		return []Part{{answer, replyAfter}}
	})
	if err != nil {
		return err
	}
	defer bed.Close()
	got, err := rig.ask(ctx, bed)
	switch {
	case err != nil && must == valueOnly:
		return fmt.Errorf("expected the reading, got %w", err)
	case err == nil && must == errorOnly:
		return fmt.Errorf("expected an error, got %g", got)
	case err == nil && !same(got, firstValue):
		return fmt.Errorf("the instrument said %g, and the driver %g", firstValue, got)
	case err != nil:
		if failure, ok := errors.AsType[*Error](err); !ok || failure.Kind != Timeout && failure.Kind != Garbled {
			return fmt.Errorf("%q is of neither kind, %q nor %q", err, Timeout, Garbled)
		}
	}
	// Whatever is late arrives before the next request.
	if err := bed.Clock.Sleep(ctx, rig.Patience+2*time.Second); err != nil {
		return err
	}
	value, spoilt = nextValue, false
	switch got, err := rig.ask(ctx, bed); {
	case err != nil:
		return fmt.Errorf("the next request: %w", err)
	case !same(got, nextValue):
		return fmt.Errorf("the next request: the instrument said %g, and the driver %g", nextValue, got)
	}
	return nil
}

// same allows for the coarsest resolution of a wire, 0.01.
func same(got, want float64) bool { return math.Abs(got-want) <= 0.005 }

// ask asks for the rig's reading and holds the driver to its patience.
func (rig Rig) ask(ctx context.Context, bed Bed) (float64, error) {
	before := bed.Clock.Now()
	reading, err := Read(ctx, bed.Driver, rig.Reading)
	if took := bed.Clock.Now().Sub(before); took > rig.Patience {
		return 0, fmt.Errorf("the driver took %v, its patience is %v", took, rig.Patience)
	}
	if err != nil {
		return 0, err
	}
	if reading.Name != rig.Reading {
		return 0, fmt.Errorf("the answer is named %q", reading.Name)
	}
	return inUnitOf(rig.Reading, reading.Value)
}

// garbled turns the top bit of each byte of the answer in turn, which text shows as no character and a checksum as
// an error.
func (rig Rig) garbled(ctx context.Context) error {
	length := 0
	for i := 0; i == 0 || i < length; i++ {
		err := rig.suffers(ctx, func(answer []byte, _ time.Duration) []Part {
			if len(answer) > length {
				length = len(answer)
			}
			wrong := append([]byte(nil), answer...)
			if i < len(wrong) {
				wrong[i] ^= 0x80
			}
			return []Part{{wrong, replyAfter}}
		}, valueOrError)
		if err != nil {
			return fmt.Errorf("byte %d: %w", i, err)
		}
	}
	return nil
}

var errGivenUp = errors.New("given up by the suite")

// cancelled gives a request up while its answer is on the way: the driver returns at once, with the cause, and the
// answer is not taken for the next one's.
func (rig Rig) cancelled(ctx context.Context) error {
	given, cancel := context.WithCancelCause(ctx)
	value, late := firstValue, true
	bed, err := rig.Open(func(request []byte) []Part {
		after := replyAfter
		if late {
			cancel(errGivenUp)
			after = rig.Patience / 4
		}
		return []Part{{rig.Answer(request, value), after}}
	})
	if err != nil {
		return err
	}
	defer bed.Close()
	before := bed.Clock.Now()
	_, err = Read(given, bed.Driver, rig.Reading)
	if took := bed.Clock.Now().Sub(before); took > rig.Patience/8 {
		return fmt.Errorf("returned %v after it was cancelled", took)
	}
	if !errors.Is(err, errGivenUp) && !errors.Is(err, context.Canceled) {
		return fmt.Errorf("returned %v, not the cause of its cancelling", err)
	}
	value, late = nextValue, false
	if err := bed.Clock.Sleep(ctx, rig.Patience); err != nil {
		return err
	}
	got, err := rig.ask(ctx, bed)
	if err != nil {
		return fmt.Errorf("the next request: %w", err)
	}
	if !same(got, nextValue) {
		return fmt.Errorf("the next request: the instrument said %g, and the driver %g", nextValue, got)
	}
	return nil
}

// closed closes the link while the driver waits.
func (rig Rig) closed(ctx context.Context) error {
	var bed Bed
	bed, err := rig.Open(func([]byte) []Part {
		bed.Close()
		return nil
	})
	if err != nil {
		return err
	}
	before := bed.Clock.Now()
	_, err = Read(ctx, bed.Driver, rig.Reading)
	if failure, ok := errors.AsType[*Error](err); !ok || failure.Kind != Gone {
		return fmt.Errorf("returned %v, not an error of the kind %q", err, Gone)
	}
	if took := bed.Clock.Now().Sub(before); took > rig.Patience/8 {
		return fmt.Errorf("returned %v after its link was closed", took)
	}
	return nil
}
