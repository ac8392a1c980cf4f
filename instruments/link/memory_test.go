package link

import (
	"context"
	"errors"
	"testing"
	"time"
)

// world is a pacer with a list of events and no physics.
type world struct {
	now   time.Time
	due   []event
	moves int
}

type event struct {
	at time.Time
	do func()
}

func (w *world) Now() time.Time { return w.now }

func (w *world) Sleep(ctx context.Context, d time.Duration) error {
	return w.Advance(ctx, w.now.Add(d), func() bool { return false })
}

func (w *world) Advance(ctx context.Context, until time.Time, stop func() bool) error {
	w.moves++
	for len(w.due) > 0 && !w.due[0].at.After(until) {
		next := w.due[0]
		w.due, w.now = w.due[1:], next.at
		if next.do(); stop() {
			return nil
		}
	}
	w.now = until
	return context.Cause(ctx)
}

var start = time.Date(2026, 3, 1, 8, 0, 0, 0, time.UTC)

func at(d time.Duration) time.Time { return start.Add(d) }

func TestMemoryAnswersAfterItsDelay(t *testing.T) {
	w := &world{now: start}
	host, device := Memory(w, "table")
	device.OnSend(func() {
		if got := string(device.Received()); got != "RATE?\r\n" {
			t.Errorf("device received %q", got)
		}
		device.Discard(len("RATE?\r\n"))
		device.Deliver([]byte("+1.0\r\n"), w.Now().Add(2*time.Millisecond))
	})
	if err := host.Send([]byte("RATE?\r\n")); err != nil {
		t.Fatal(err)
	}
	if got := host.Peek(); len(got) != 0 {
		t.Fatalf("answer %q before its time", got)
	}
	if err := host.Await(t.Context(), at(time.Second)); err != nil {
		t.Fatal(err)
	}
	if w.now != at(2*time.Millisecond) || string(host.Peek()) != "+1.0\r\n" || host.LastArrival() != w.now {
		t.Errorf("at %v: %q, arrived %v", w.now.Sub(start), host.Peek(), host.LastArrival())
	}
	// All is shown: only more than this ends the next wait.
	if err := host.Await(t.Context(), at(time.Second)); err != nil || w.now != at(time.Second) {
		t.Errorf("await of nothing: %v at %v", err, w.now.Sub(start))
	}
	host.Discard(5)
	if got := string(host.Peek()); got != "\n" {
		t.Errorf("after discard: %q", got)
	}
}

func TestMemoryWakesForAnEventOfTheWorld(t *testing.T) {
	w := &world{now: start}
	host, device := Memory(w, "chamber")
	w.due = []event{
		{at(time.Second), func() {}},
		{at(2 * time.Second), func() { device.Deliver([]byte("late"), w.now) }},
		{at(3 * time.Second), func() { t.Error("the world went on after the delivery") }},
	}
	if err := host.Await(t.Context(), at(time.Minute)); err != nil || w.now != at(2*time.Second) {
		t.Errorf("%v at %v", err, w.now.Sub(start))
	}
	if got := string(host.Peek()); got != "late" {
		t.Errorf("got %q", got)
	}
}

func TestMemoryKeepsTheOrderOfDeliveries(t *testing.T) {
	w := &world{now: start}
	host, device := Memory(w, "table")
	device.Deliver([]byte("a"), at(3*time.Second))
	device.Deliver([]byte("b"), at(time.Second))
	for range 2 {
		if err := host.Await(t.Context(), at(time.Minute)); err != nil {
			t.Fatal(err)
		}
	}
	if got := string(host.Peek()); got != "ab" || host.LastArrival() != at(3*time.Second) {
		t.Errorf("%q at %v", got, host.LastArrival().Sub(start))
	}
}

// TestMemoryStreamIsMadeInBulk: a stream of one byte each 10 ms costs the world one move, however long it ran.
func TestMemoryStreamIsMadeInBulk(t *testing.T) {
	const period = 10 * time.Millisecond
	w := &world{now: start}
	host, device := Memory(w, "gyro-1")
	made := 0
	device.OnLook(func(now time.Time) {
		for ; !at(time.Duration(made+1) * period).After(now); made++ {
			device.Deliver([]byte{byte(made)}, at(time.Duration(made+1)*period))
		}
	}, func() (time.Time, bool) { return at(time.Duration(made+1) * period), true })

	if err := w.Sleep(t.Context(), time.Hour); err != nil {
		t.Fatal(err)
	}
	if got := len(host.Peek()); got != 360000 || w.moves != 1 {
		t.Errorf("%d bytes after %d moves, want 360000 after 1", got, w.moves)
	}
	host.Discard(360000)
	if err := host.Await(t.Context(), w.now.Add(time.Hour)); err != nil || w.now != at(time.Hour+period) {
		t.Errorf("await: %v at %v, want the next byte at 1h0m0.01s", err, w.now.Sub(start))
	}
}

func TestMemoryGoesAway(t *testing.T) {
	w := &world{now: start}
	host, device := Memory(w, "supply")
	device.Deliver([]byte("old"), w.now)
	device.Deliver([]byte("on the line"), at(time.Second))
	device.Unplug()
	if err := host.Await(t.Context(), at(time.Minute)); err != nil {
		t.Errorf("what arrived before is to be shown first: %v", err)
	}
	if got := string(host.Peek()); got != "old" {
		t.Errorf("got %q", got)
	}
	var gone *GoneError
	if err := host.Await(t.Context(), at(time.Minute)); !errors.As(err, &gone) || gone.Link != "supply" {
		t.Errorf("await on a lost link: %v", err)
	}
	if err := host.Send([]byte("x")); !errors.As(err, &gone) {
		t.Errorf("send on a lost link: %v", err)
	}
	if w.now != start {
		t.Errorf("a lost link let %v pass", w.now.Sub(start))
	}
}

func TestMemoryCloses(t *testing.T) {
	w := &world{now: start}
	host, device := Memory(w, "supply")
	for range 2 {
		if err := host.Close(); err != nil {
			t.Fatal(err)
		}
	}
	device.Deliver([]byte("x"), w.now)
	if err := host.Await(t.Context(), at(time.Minute)); !errors.Is(err, ErrClosed) {
		t.Errorf("await: %v", err)
	}
}

func TestMemoryAwaitEndsWithItsContext(t *testing.T) {
	w := &world{now: start}
	host, _ := Memory(w, "supply")
	stopped := errors.New("operator")
	ctx, cancel := context.WithCancelCause(t.Context())
	w.due = []event{{at(time.Second), func() { cancel(stopped) }}}
	if err := host.Await(ctx, at(time.Minute)); !errors.Is(err, stopped) {
		t.Errorf("await: %v", err)
	}
}

// TestInboxAgainstModel compares the inbox with a plain slice over many steps of put, peek and discard.
func TestInboxAgainstModel(t *testing.T) {
	var b inbox
	var model []byte
	next := byte(0)
	for step := range 5000 {
		switch step % 3 {
		case 0:
			for range step % 7 {
				b.put([]byte{next}, start)
				model = append(model, next)
				next++
			}
		case 1:
			if got := b.peek(); string(got) != string(model) {
				t.Fatalf("step %d: %v, want %v", step, got, model)
			}
			if b.more() {
				t.Fatalf("step %d: more than all", step)
			}
		case 2:
			n := len(model) * (step % 5) / 4
			b.discard(n)
			model = model[n:]
			if b.size() != len(model) {
				t.Fatalf("step %d: %d unread, want %d", step, b.size(), len(model))
			}
		}
	}
	if cap(b.bytes) > 256 {
		t.Errorf("the inbox grew to %d bytes for at most 12 unread", cap(b.bytes))
	}
}

func TestDrainAllocatesNothing(t *testing.T) {
	w := &world{now: start}
	host, device := Memory(w, "gyro-1")
	frame := make([]byte, 14)
	device.OnLook(func(now time.Time) { device.Deliver(frame, now) }, nil)
	host.Peek()
	if got := testing.AllocsPerRun(1000, func() { host.Discard(len(host.Peek())) }); got != 0 {
		t.Errorf("%v allocations a drain", got)
	}
}
