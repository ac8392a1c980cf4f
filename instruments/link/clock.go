package link

import (
	"context"
	"time"
)

// Wall is a clock that the wall's drives: at pace 1 the wall's own, else faster or slower from its making on.
type Wall struct {
	origin time.Time
	pace   float64 // seconds of this clock a wall second
}

// WallClock is the clock of a bench with hardware.
func WallClock() *Wall { return ScaledClock(1) }

// ScaledClock is the clock of a virtual bench that is offered on ports: pace of its seconds pass in a wall second. It
// starts at the wall's time. The pace must be positive.
func ScaledClock(pace float64) *Wall {
	if !(pace > 0) {
		panic("link: a clock's pace must be positive")
	}
	return &Wall{time.Now(), pace}
}

// Now is the time on this clock.
func (w *Wall) Now() time.Time {
	if w.pace == 1 {
		return time.Now()
	}
	return w.origin.Add(time.Duration(float64(time.Since(w.origin)) * w.pace))
}

// Sleep waits for d of this clock's time, or returns the cause of ctx's cancelling.
func (w *Wall) Sleep(ctx context.Context, d time.Duration) error {
	if ctx.Err() != nil {
		return context.Cause(ctx)
	}
	if d <= 0 {
		return nil
	}
	timer := time.NewTimer(w.wall(d))
	defer timer.Stop()
	select {
	case <-timer.C:
		return nil
	case <-ctx.Done():
		return context.Cause(ctx)
	}
}

// wall is how long d of this clock takes on the wall, rounded up so that a wait never ends early.
func (w *Wall) wall(d time.Duration) time.Duration {
	if w.pace == 1 {
		return d
	}
	return time.Duration(float64(d)/w.pace) + 1
}

// Until is the time, on l's clock, from which an answer is late that may take timeout. Where the clock runs faster
// than the wall, the timeout is of the wall: however fast a virtual bench is offered, the ports and the two programs
// take the time that they take.
func Until(l Link, timeout time.Duration) time.Time {
	if w, ok := l.Clock().(*Wall); ok && w.pace > 1 {
		timeout = time.Duration(float64(timeout) * w.pace)
	}
	return l.Clock().Now().Add(timeout)
}
