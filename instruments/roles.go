package instruments

import (
	"context"
	"fmt"
	"time"

	"proofrate/limits/quantity"
)

// Clock is the only source of time in the program: a virtual world's, or the wall's.
type Clock interface {
	Now() time.Time
	Sleep(ctx context.Context, d time.Duration) error
}

// SlotID names a place on the fixture.
type SlotID string

// Reading is one measured value and the time at which it was true.
type Reading struct {
	Name  string // "table.rate"
	Value quantity.Value
	At    time.Time
}

// Pending is a request that has been sent or queued on its link.
type Pending interface {
	// Take waits for the answer, at most for the time that the instrument's profile allows.
	Take(ctx context.Context) (Reading, error)
}

// Reader is anything that can be asked for readings.
type Reader interface {
	Readings() []string
	Ask(ctx context.Context, reading string) (Pending, error)
}

// Identity is what an instrument says of itself.
type Identity struct {
	Maker, Model, Serial, Firmware string
}

// Instrument is what all roles share.
type Instrument interface {
	Reader
	Identify(ctx context.Context) (Identity, error)
}

// Table turns the gyros. Readings: table.rate, table.position.
type Table interface {
	Instrument
	// SetRate turns at rate, reached at acceleration accel.
	SetRate(ctx context.Context, rate, accel quantity.Value) error
	// Stop brings the table to rest from every state and holds it there.
	Stop(ctx context.Context) error
}

// Positioner is a Table that can go to an angle and hold it.
type Positioner interface {
	Table
	GoTo(ctx context.Context, position quantity.Value) error
}

// Oscillator is a Table that can swing about its present position.
type Oscillator interface {
	Table
	Oscillate(ctx context.Context, amplitude, frequency quantity.Value) error
}

// Chamber heats and cools the gyros. Reading: chamber.temperature.
type Chamber interface {
	Instrument
	// SetTemperature goes to t at ramp at most; a zero ramp is the chamber's own.
	SetTemperature(ctx context.Context, t, ramp quantity.Value) error
	Off(ctx context.Context) error
}

// Supply feeds one slot. Readings: supply.voltage, supply.current.
type Supply interface {
	Instrument
	Set(ctx context.Context, voltage, currentLimit quantity.Value) error
	On(ctx context.Context) error
	Off(ctx context.Context) error
}

// Channel is one stream of counts of a gyro.
type Channel struct {
	Name  string         // "rate" or "angle"; "rate.x" and so on for several axes
	Count quantity.Value // what one count is worth at the nominal scale factor: a rate, or an angle
}

// Gyro streams counts while it is powered. Readings, where it has them: gyro.temperature, gyro.status; they are the
// newest frame's and cost no request.
type Gyro interface {
	Reader
	Channels() []Channel
	// Drain appends what has arrived since the last call to batch. It never waits.
	Drain(ctx context.Context, batch *Batch) error
	// Restart forgets what has arrived and the counter: the gyro has been switched.
	Restart()
}

// Gap is a run of lost frames.
type Gap struct {
	Before int    // index, in the batch or recording, of the first sample after the gap
	Lost   uint64 // frames missing
}

// Batch holds samples as they arrived.
//
// Counts is channel by sample. First is the counter of sample 0, with wraps of the frame's own counter removed and
// lost frames counted in; it starts anew at Restart.
type Batch struct {
	First   uint64
	Counts  [][]int64
	Gaps    []Gap
	Times   []time.Time // polled meters: each sample's own time; nil for a framed gyro
	Arrived time.Time   // when the last frame was complete
	Damaged int         // frames thrown away for their checksum or shape
}

// Len is the number of samples.
func (b *Batch) Len() int {
	if len(b.Counts) == 0 {
		return 0
	}
	return len(b.Counts[0])
}

// Reset empties the batch and keeps its memory.
func (b *Batch) Reset() {
	for i := range b.Counts {
		b.Counts[i] = b.Counts[i][:0]
	}
	b.Gaps, b.Times, b.Damaged, b.First, b.Arrived = b.Gaps[:0], b.Times[:0], 0, 0, time.Time{}
}

// Read asks and takes in one.
func Read(ctx context.Context, r Reader, reading string) (Reading, error) {
	pending, err := r.Ask(ctx, reading)
	if err != nil {
		return Reading{}, err
	}
	return pending.Take(ctx)
}

// GoTo sends a table to a position if it can go to one.
func GoTo(ctx context.Context, t Table, position quantity.Value) error {
	if p, ok := t.(Positioner); ok {
		return p.GoTo(ctx, position)
	}
	return &UnsupportedError{Role: "table", Action: "go to a position"}
}

// Oscillate swings a table if it can swing.
func Oscillate(ctx context.Context, t Table, amplitude, frequency quantity.Value) error {
	if o, ok := t.(Oscillator); ok {
		return o.Oscillate(ctx, amplitude, frequency)
	}
	return &UnsupportedError{Role: "table", Action: "oscillate"}
}

// UnsupportedError says that an instrument lacks an action of its role.
type UnsupportedError struct{ Role, Action string }

func (e *UnsupportedError) Error() string {
	return fmt.Sprintf("this %s cannot %s; its profile has no such action", e.Role, e.Action)
}
