package link

import (
	"context"
	"time"

	"proofrate/instruments"
)

// Pacer is the clock of a virtual world, which moves the physics as time passes.
type Pacer interface {
	instruments.Clock
	// Advance carries out what falls due, in order, up to the time until or to the event after which stop is true.
	Advance(ctx context.Context, until time.Time, stop func() bool) error
}

// Memory makes a link in memory: the host's end and the instrument's. Both belong to one goroutine, the one that
// moves the pacer; the host's waiting is what lets the world go on.
func Memory(p Pacer, name string) (Link, *Device) {
	m := &memory{name: name, pacer: p}
	return m, &Device{m}
}

// memory is the host's end.
type memory struct {
	name      string
	pacer     Pacer
	in        inbox
	coming    []delivery // on the line: sorted by time
	delivered uint64     // counts deliveries, so that a wait notices one
	sent      inbox      // from the host, unread by the device
	gone      error

	onSend func()
	onLook func(now time.Time)
	next   func() (time.Time, bool)
}

type delivery struct {
	bytes []byte
	at    time.Time
}

func (m *memory) Send(p []byte) error {
	if m.gone != nil {
		return m.gone
	}
	m.sent.put(p, m.pacer.Now())
	if m.onSend != nil {
		m.onSend()
	}
	return nil
}

func (m *memory) Peek() []byte {
	m.look()
	return m.in.peek()
}

func (m *memory) Discard(n int)            { m.in.discard(n) }
func (m *memory) Clock() instruments.Clock { return m.pacer }

func (m *memory) LastArrival() time.Time {
	m.look()
	return m.in.last
}

// look brings in all that has arrived by now.
func (m *memory) look() {
	now := m.pacer.Now()
	if m.onLook != nil && m.gone == nil {
		m.onLook(now)
	}
	m.arrive(now)
}

// arrive takes from the line what has reached the host by now.
func (m *memory) arrive(now time.Time) {
	due := 0
	for ; due < len(m.coming) && !m.coming[due].at.After(now); due++ {
		m.in.put(m.coming[due].bytes, m.coming[due].at)
	}
	m.coming = m.coming[:copy(m.coming, m.coming[due:])]
}

func (m *memory) Await(ctx context.Context, until time.Time) error {
	for {
		if m.look(); m.in.more() {
			return nil
		}
		if m.gone != nil {
			return m.gone
		}
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		now := m.pacer.Now()
		if !now.Before(until) {
			return nil
		}
		before := m.delivered
		stop := func() bool { return m.delivered != before || m.gone != nil }
		if err := m.pacer.Advance(ctx, m.nextLook(now, until), stop); err != nil {
			return err
		}
	}
}

// nextLook is when looking again may show more: the next delivery or the stream's next bytes, at the latest until.
func (m *memory) nextLook(now, until time.Time) time.Time {
	if len(m.coming) > 0 && m.coming[0].at.Before(until) {
		until = m.coming[0].at
	}
	if m.next != nil {
		if at, ok := m.next(); ok && at.After(now) && at.Before(until) {
			until = at
		}
	}
	return until
}

func (m *memory) Close() error {
	m.end(ErrClosed)
	return nil
}

func (m *memory) end(cause error) {
	if m.gone == nil {
		m.gone = &GoneError{m.name, cause}
	}
}

// Device is the instrument's end of a memory link.
type Device struct{ host *memory }

// Received shows what the host has sent and the device has not discarded; valid until the next call.
func (d *Device) Received() []byte { return d.host.sent.peek() }

// Discard forgets the first n bytes of what Received showed.
func (d *Device) Discard(n int) { d.host.sent.discard(n) }

// Deliver puts p on the line so that the host has it at the time at, now or later; bytes never overtake those
// delivered before. The device may use p again. Nothing arrives on a link that has ended.
func (d *Device) Deliver(p []byte, at time.Time) {
	m := d.host
	if m.gone != nil || len(p) == 0 {
		return
	}
	m.delivered++
	if n := len(m.coming); n > 0 && at.Before(m.coming[n-1].at) {
		at = m.coming[n-1].at
	}
	now := m.pacer.Now()
	m.arrive(now)
	if len(m.coming) == 0 && !at.After(now) {
		m.in.put(p, at)
		return
	}
	m.coming = append(m.coming, delivery{append([]byte(nil), p...), at})
}

// OnSend has f called each time the host has sent something.
func (d *Device) OnSend(f func()) { d.host.onSend = f }

// OnLook makes the device a stream in bulk, with no event a frame: produce is called when the host looks and delivers
// all bytes up to now; next says when the stream's next bytes will be complete, false if none are to come.
func (d *Device) OnLook(produce func(now time.Time), next func() (time.Time, bool)) {
	d.host.onLook, d.host.next = produce, next
}

// Unplug loses the link: what is still on the line never arrives.
func (d *Device) Unplug() {
	d.host.coming = nil
	d.host.end(errUnplugged)
}
