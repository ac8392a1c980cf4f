package profile

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"slices"
	"strconv"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/link"
)

// Exchange is one request and what came back, for those who watch a driver work.
type Exchange struct {
	Instrument     string
	Op             string // "read table.rate"
	Sent, Received []byte
	Value          string // what was read out of it: "12.5 deg/s"; empty if nothing was
	Err            error
}

// job is one request on its way.
type job struct {
	op      string
	request []byte
	// parse looks at what has arrived: how many bytes are spent, and whether the answer was among them. Nil: nothing
	// answers.
	parse func(received []byte) (used int, answered bool, err error)
	// numbered says that the answer repeats a number of the request, so that it cannot be taken for another's.
	numbered bool
	value    func() string // for watchers

	sent, done         bool
	tries              int // so far
	begun, ended, late time.Time
	stray              []byte // what came and was no answer
	err                error
}

// line is a link with its requests in order: the head is in flight, the others wait.
type line struct {
	link    link.Link
	name    string // of the instrument
	timeout time.Duration
	tries   int
	rest    time.Duration // of silence before a request: what a Modbus line needs between frames
	trace   func(Exchange)

	queue  []*job
	owed   []owed
	number uint16 // of the newest numbered request
}

// owed is an answer that may still come to a request that nobody waits for any more.
type owed struct {
	parse func(received []byte) (used int, answered bool, err error)
	until time.Time
}

// shownMost is how much of a request or of what came stands in a message.
const shownMost = 60

// put queues a job and sends it if nothing is in the way.
func (l *line) put(j *job) {
	l.queue = append(l.queue, j)
	l.start()
}

// start sends the head if it can go at once.
func (l *line) start() {
	for len(l.queue) > 0 && !l.queue[0].sent && len(l.owed) == 0 && l.restLeft() <= 0 {
		l.send(l.queue[0])
	}
}

func (l *line) restLeft() time.Duration {
	if l.rest == 0 || l.link.LastArrival().IsZero() {
		return 0
	}
	return l.link.LastArrival().Add(l.rest).Sub(l.link.Clock().Now())
}

// send sends the head. What arrived before it answers nothing.
func (l *line) send(j *job) {
	l.link.Discard(len(l.link.Peek()))
	j.sent, j.begun = true, l.link.Clock().Now()
	j.tries++
	j.late = link.Until(l.link, l.timeout)
	if err := l.link.Send(j.request); err != nil {
		l.lost(j, err)
	} else if j.parse == nil {
		l.show(j, nil, nil)
		l.finish(j, nil)
	}
}

// do sends a request and waits for its answer.
func (l *line) do(ctx context.Context, j *job) error {
	if ctx.Err() != nil {
		return context.Cause(ctx)
	}
	l.put(j)
	return l.take(ctx, j)
}

// take works the queue up to and including a job. Other jobs are left to those who take them.
func (l *line) take(ctx context.Context, j *job) error {
	for !j.done {
		head := l.queue[0]
		if head.sent {
			if err := l.step(ctx, head); err != nil {
				l.abandon(j, err)
			}
			continue
		}
		if err := l.clear(ctx); err != nil {
			l.abandon(j, err)
			continue
		}
		l.send(head)
	}
	return j.err
}

// step looks at what has arrived for the head, and waits if it is not all. Its error is that of the context.
func (l *line) step(ctx context.Context, j *job) error {
	received := l.link.Peek()
	used, answered, err := j.parse(received)
	switch {
	case answered:
		l.show(j, received[:used], err)
		l.link.Discard(used)
		l.answered(j, err)
	case used > 0: // something else: an unasked line, the answer to an earlier request
		j.stray = append(j.stray, received[:used]...)
		j.stray = j.stray[:min(len(j.stray), shownMost)]
		l.show(j, received[:used], errStray)
		l.link.Discard(used)
	case !l.link.Clock().Now().Before(j.late):
		l.overdue(j, received)
	default:
		return l.await(ctx, j, j.late)
	}
	return nil
}

var errStray = errors.New("not the answer")

func (l *line) await(ctx context.Context, j *job, until time.Time) error {
	err := l.link.Await(ctx, until)
	if err == nil {
		return nil
	}
	if ctx.Err() != nil {
		return context.Cause(ctx)
	}
	l.lost(j, err)
	return nil
}

// answered ends a job, or repeats its request if the answer was damaged. To a request that was repeated more than one
// answer may come.
func (l *line) answered(j *job, err error) {
	j.ended = l.link.LastArrival()
	if kindOf(err) == instruments.Garbled && j.tries < l.tries {
		l.send(j)
		return
	}
	l.owe(j, j.tries-1, j.late)
	l.finish(j, err)
}

// overdue repeats a request that was not answered in time, or gives it up.
func (l *line) overdue(j *job, received []byte) {
	l.show(j, received, errLate)
	if j.tries < l.tries {
		l.send(j)
		return
	}
	l.owe(j, j.tries, link.Until(l.link, l.timeout))
	if came := append(j.stray, received...); len(came) > 0 {
		l.finish(j, l.failure(j.op, instruments.Garbled, fmt.Errorf("%s came to %s within %s, which is no whole answer; look at the cable, the link's settings and the profile",
			shown(came), shown(j.request), l.timeout)))
		return
	}
	l.finish(j, l.failure(j.op, instruments.Timeout, fmt.Errorf("nothing came to %s within %s, asked %d times; look at its power, its cable and the link's settings",
		shown(j.request), l.timeout, j.tries)))
}

var errLate = errors.New("no whole answer in time")

// lost ends a job whose link is gone.
func (l *line) lost(j *job, err error) {
	kind := instruments.Internal
	if _, gone := errors.AsType[*link.GoneError](err); gone {
		kind = instruments.Gone
	}
	l.owed = nil
	l.show(j, nil, err)
	l.finish(j, l.failure(j.op, kind, err))
}

// owe notes answers that may come until a time.
func (l *line) owe(j *job, answers int, until time.Time) {
	if j.numbered || j.parse == nil {
		return
	}
	for range answers {
		l.owed = append(l.owed, owed{j.parse, until})
	}
}

// clear waits until the line is free for a request: the answers owed have come or are overdue, and its silence is kept.
func (l *line) clear(ctx context.Context) error {
	for len(l.owed) > 0 {
		head := l.owed[0]
		received := l.link.Peek()
		used, answered, _ := head.parse(received)
		switch {
		case answered || used > 0:
			l.link.Discard(used)
			if answered {
				l.owed = l.owed[1:]
			}
		case !l.link.Clock().Now().Before(head.until):
			l.owed = l.owed[1:]
		default:
			if err := l.link.Await(ctx, head.until); err != nil {
				if ctx.Err() != nil {
					return context.Cause(ctx)
				}
				l.owed = nil // the link is gone; the next request will say so
			}
		}
	}
	if wait := l.restLeft(); wait > 0 {
		return l.link.Clock().Sleep(ctx, wait)
	}
	return nil
}

// abandon gives one job up. If it is in flight, its answer is owed.
func (l *line) abandon(j *job, cause error) {
	if j.sent {
		l.owe(j, j.tries, j.late)
	}
	l.finish(j, cause)
}

// finish takes a job off the queue and lets the next one go.
func (l *line) finish(j *job, err error) {
	j.done, j.err = true, err
	l.queue = slices.DeleteFunc(l.queue, func(other *job) bool { return other == j })
	l.start()
}

func (l *line) show(j *job, received []byte, err error) {
	if l.trace == nil {
		return
	}
	e := Exchange{Instrument: l.name, Op: j.op, Sent: j.request, Received: slices.Clone(received), Err: err}
	if err == nil && j.value != nil {
		e.Value = j.value()
	}
	l.trace(e)
}

func (l *line) failure(op string, kind instruments.Kind, err error) error {
	return &instruments.Error{Op: op, Where: instruments.Where{Instrument: l.name}, Kind: kind, Err: err}
}

func kindOf(err error) instruments.Kind {
	if e, ok := errors.AsType[*instruments.Error](err); ok {
		return e.Kind
	}
	return instruments.KindUnset
}

// shown is what was sent or came, for a message: text in quotes, anything else in hexadecimal.
func shown(p []byte) string {
	p = bytes.TrimRight(p[:min(len(p), shownMost)], "\r\n")
	for _, b := range p {
		if b < ' ' || b > '~' {
			return fmt.Sprintf("% X", p)
		}
	}
	return strconv.Quote(string(p))
}
