package link

import (
	"context"
	"errors"
	"time"

	"proofrate/instruments"
)

// Link is the byte pipe to one instrument.
type Link interface {
	// Send takes p for sending and never waits for the peer. The link keeps no reference to p.
	Send(p []byte) error
	// Peek shows what has arrived and is unread; the bytes are valid until the next call.
	Peek() []byte
	// Discard forgets the first n bytes of what Peek showed.
	Discard(n int)
	// LastArrival is the time at which the newest byte arrived; zero before the first.
	LastArrival() time.Time
	// Await waits until more bytes have arrived than Peek last showed, or for the time until; it returns nil both
	// ways. A lost link is a *GoneError, once all that arrived before has been shown; a cancelled context its cause.
	Await(ctx context.Context, until time.Time) error
	// Clock is the time in which this link's deadlines are given.
	Clock() instruments.Clock
	// Close ends the link. A second call does nothing.
	Close() error
}

// GoneError says that a link no longer reaches its instrument.
type GoneError struct {
	Link string // "serial:/dev/ttyUSB0"
	Err  error
}

func (e *GoneError) Error() string { return e.Link + ": " + e.Err.Error() }
func (e *GoneError) Unwrap() error { return e.Err }

// ErrClosed is the cause when the program itself has closed the link.
var ErrClosed = errors.New("the link has been closed")

// errUnplugged is the cause when a virtual instrument has been taken off its link.
var errUnplugged = errors.New("nothing is connected any more; check the cable and the instrument's power")
