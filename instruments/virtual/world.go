package virtual

import (
	"container/heap"
	"context"
	"fmt"
	"time"

	"proofrate/instruments/link"
)

// began is the instant at which every virtual bench starts.
var began = time.Date(2026, time.March, 2, 8, 0, 0, 0, time.UTC)

// moment is bench time, in ns since the start, as the clock shows it.
func moment(ns int64) time.Time { return began.Add(time.Duration(ns)) }

// World is a virtual bench. It is a link.Pacer: time stands still but for Sleep and Advance.
type World struct {
	now     int64 // ns since the start
	tick    int64 // the next bench second
	due     events
	order   uint64
	climate *climate
	table   *table
	chamber *chamber
	supply  *supply
	gyros   []*gyro
}

// event is something that falls due; of two at one time the one asked for first comes first.
type event struct {
	at    int64
	order uint64
	do    func()
}

type events []event

func (e events) Len() int { return len(e) }
func (e events) Less(i, j int) bool {
	return e[i].at < e[j].at || e[i].at == e[j].at && e[i].order < e[j].order
}
func (e events) Swap(i, j int) { e[i], e[j] = e[j], e[i] }
func (e *events) Push(x any)   { *e = append(*e, x.(event)) }
func (e *events) Pop() any {
	last := (*e)[len(*e)-1]
	*e = (*e)[:len(*e)-1]
	return last
}

// after has f called when d more has passed.
func (w *World) after(d time.Duration, f func()) {
	w.order++
	heap.Push(&w.due, event{w.now + int64(d), w.order, f})
}

// Now is the time on the bench.
func (w *World) Now() time.Time { return moment(w.now) }

// Sleep lets d pass on the bench.
func (w *World) Sleep(ctx context.Context, d time.Duration) error {
	return w.Advance(ctx, w.Now().Add(max(d, 0)), func() bool { return false })
}

// Advance carries out what falls due, in order, up to the time until or to the event after which stop is true. A bench
// second comes before what else falls due at its beginning. It returns the cause if the context ends.
func (w *World) Advance(ctx context.Context, until time.Time, stop func() bool) error {
	end := int64(until.Sub(began))
	for {
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		switch ticks := w.tick * secondNs; {
		case ticks <= end && (len(w.due) == 0 || ticks <= w.due[0].at):
			w.now = max(w.now, ticks)
			w.second()
		case len(w.due) > 0 && w.due[0].at <= end:
			next := heap.Pop(&w.due).(event)
			w.now = next.at
			next.do()
		default:
			w.now = max(w.now, end)
			return nil
		}
		if stop() {
			return nil
		}
	}
}

// second carries the bench into its next second: first the frames of the one that ends, then the slow physics.
func (w *World) second() {
	w.catchUp()
	w.climate.advance()
	for _, g := range w.gyros {
		g.body.advance(w.climate.fixture)
		g.begin(w.tick)
	}
	w.tick++
}

// catchUp makes all frames up to now; it comes before every change of what they depend on.
func (w *World) catchUp() {
	for _, g := range w.gyros {
		g.produce(w.now)
	}
}

// endpoint is one instrument of the bench and how it takes the far end of a link.
type endpoint struct {
	name   string
	attach func(*link.Device)
}

func (w *World) endpoints() []endpoint {
	var all []endpoint
	if w.table != nil {
		all = append(all, endpoint{"table", w.table.attach})
	}
	if w.chamber != nil {
		all = append(all, endpoint{"chamber", w.chamber.attach})
	}
	all = append(all, endpoint{"supply", w.supply.attach})
	for i, g := range w.gyros {
		all = append(all, endpoint{fmt.Sprintf("gyro-%d", i+1), g.attach})
	}
	return all
}

// Link gives the host's end of a memory link to "table", "chamber", "supply" or "gyro-1", "gyro-2" and so on, the slots
// in the order of the description. A link taken anew replaces the one before.
func (w *World) Link(name string) (link.Link, error) {
	var known []string
	for _, e := range w.endpoints() {
		if e.name == name {
			host, device := link.Memory(w, "virtual:"+name)
			e.attach(device)
			return host, nil
		}
		known = append(known, e.name)
	}
	return nil, &UnknownError{What: "endpoint of the virtual bench", Name: name, Known: known}
}
