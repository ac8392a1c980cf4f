package profile

import (
	"context"
	"errors"
	"fmt"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/link"
)

// Exchange is one request and what came back, for those who watch a driver work.
type Exchange struct {
	Instrument     string
	Sent, Received []byte
	Err            error
}

// job is one request on its way.
type job struct {
	op       string // "read table.rate"
	request  []byte
	parse    func(received []byte) (used int, done bool, err error) // of what has arrived so far
	done     bool
	err      error
	sent     bool
	tries    int // left
	deadline time.Time
}

// line is a link with its requests in order: the head is in flight, the others wait.
type line struct {
	link    link.Link
	name    string // of the instrument
	timeout time.Duration
	tries   int
	rest    time.Duration // of silence before a request: what a Modbus line needs between frames
	queue   []*job
	owed    *job // given up while its answer was on the way: it is waited for before anything else is sent
	Trace   func(Exchange)
}

// put queues a job and sends it if nothing is in flight.
func (l *line) put(j *job) error {
	j.tries = l.tries
	l.queue = append(l.queue, j)
	if len(l.queue) == 1 && l.owed == nil {
		return l.send(j)
	}
	return nil
}

// send sends the head. What arrived before it is an answer to nothing.
func (l *line) send(j *job) error {
	l.link.Discard(len(l.link.Peek()))
	j.sent = true
	j.tries--
	j.deadline = l.link.Clock().Now().Add(l.timeout)
	if err := l.link.Send(j.request); err != nil {
		l.finish(j, l.failure(j, instruments.Gone, err))
		return j.err
	}
	return nil
}

// take works the queue up to and including a job.
func (l *line) take(ctx context.Context, j *job) error {
	for !j.done {
		head := l.queue[0]
		if !head.sent {
			if err := l.pause(ctx); err != nil {
				return l.abandon(j, err)
			}
			if l.send(head) != nil {
				continue
			}
		}
		if err := l.step(ctx, head); err != nil {
			return l.abandon(j, err)
		}
	}
	return j.err
}

// pause lets an answer that is still owed come in, and keeps the silence that the line needs between an answer and the
// next request.
func (l *line) pause(ctx context.Context) error {
	for l.owed != nil {
		received := l.link.Peek()
		used, done, _ := l.owed.parse(received)
		if done || !l.link.Clock().Now().Before(l.owed.deadline) {
			l.link.Discard(used)
			l.owed = nil
			break
		}
		if err := l.link.Await(ctx, l.owed.deadline); err != nil {
			if cause := context.Cause(ctx); cause != nil {
				return cause
			}
			l.owed = nil // the link has gone, which the next request says
		}
	}
	if l.rest == 0 || l.link.LastArrival().IsZero() {
		return nil
	}
	clock := l.link.Clock()
	if wait := l.link.LastArrival().Add(l.rest).Sub(clock.Now()); wait > 0 {
		return clock.Sleep(ctx, wait)
	}
	return nil
}

// step looks at what has arrived for the head, and waits if it is not all. The error is the context's.
func (l *line) step(ctx context.Context, j *job) error {
	received := l.link.Peek()
	used, done, err := j.parse(received)
	if done {
		l.show(j, received[:used], err)
		l.link.Discard(used)
		if err != nil && j.tries > 0 && kindOf(err) == instruments.Garbled {
			return l.again(ctx, j)
		}
		l.finish(j, err)
		return nil
	}
	now := l.link.Clock().Now()
	if !now.Before(j.deadline) {
		l.show(j, received, errors.New("no whole answer in time"))
		if j.tries > 0 {
			return l.again(ctx, j)
		}
		kind, told := instruments.Timeout, fmt.Errorf("no answer within %s, asked %d times; look at its power, its cable and its settings", l.timeout, l.tries)
		if len(received) > 0 {
			kind, told = instruments.Garbled, fmt.Errorf("%q came within %s, which is no whole answer", clipped(received), l.timeout)
		}
		l.finish(j, l.failure(j, kind, told))
		return nil
	}
	if err := l.link.Await(ctx, j.deadline); err != nil {
		if cause := context.Cause(ctx); cause != nil {
			return cause
		}
		l.finish(j, l.failure(j, instruments.Gone, err))
	}
	return nil
}

// again repeats a request.
func (l *line) again(ctx context.Context, j *job) error {
	if err := l.pause(ctx); err != nil {
		return err
	}
	l.send(j) // its failure finishes the job
	return nil
}

func (l *line) show(j *job, received []byte, err error) {
	if l.Trace != nil {
		l.Trace(Exchange{l.name, j.request, append([]byte(nil), received...), err})
	}
}

// finish takes the head off the queue; the next is sent when somebody takes it, after the line's silence.
func (l *line) finish(j *job, err error) {
	j.done, j.err = true, err
	for i, other := range l.queue {
		if other == j {
			l.queue = append(l.queue[:i], l.queue[i+1:]...)
			break
		}
	}
}

// abandon gives every job up. The answer to the one in flight is owed.
func (l *line) abandon(j *job, cause error) error {
	if head := l.queue[0]; head.sent {
		l.owed = head
	}
	for _, other := range append([]*job(nil), l.queue...) {
		l.finish(other, cause)
	}
	return j.err
}

func (l *line) failure(j *job, kind instruments.Kind, err error) error {
	return &instruments.Error{Op: j.op, Where: instruments.Where{Instrument: l.name}, Kind: kind, Err: err}
}

func kindOf(err error) instruments.Kind {
	if e, ok := errors.AsType[*instruments.Error](err); ok {
		return e.Kind
	}
	return instruments.KindUnset
}

// clipped shows the beginning of what came.
func clipped(p []byte) []byte { return p[:min(len(p), 60)] }

// do sends a request and waits for its answer.
func (l *line) do(ctx context.Context, j *job) error {
	if err := l.put(j); err != nil {
		return err
	}
	return l.take(ctx, j)
}
