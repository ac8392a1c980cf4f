package profile

import (
	"bytes"
	"context"
	"fmt"
	"slices"
	"strings"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/link"
	"proofrate/limits/quantity"
)

const (
	lineMost   = 4096 // bytes of an answer without an end, before it counts as noise
	errorsMost = 20   // that are read out of an instrument's queue at once
)

// textLines is what a profile of the family lines says.
type textLines struct {
	end, answerEnd string
	refusal        reply
	errors         *errorQuery
	identity       *question
	commands       map[string]*command
	questions      map[string]*question
}

// command is an action: lines to send, and the answer to each.
type command struct {
	send  []form
	reply reply // not stated: nothing answers
	until *settling
}

// settling is a question that is asked until it is answered so.
type settling struct {
	question
	every, atMost time.Duration
}

type question struct {
	send  form
	reply reply
	unit  quantity.Unit // of a reading
	value int           // of a reading: which capture is the number
}

type errorQuery struct {
	question
	code int // which capture it is
	good string
}

func (t *textLines) can(action string) bool    { return t.commands[action] != nil }
func (t *textLines) reads(reading string) bool { return t.questions[reading] != nil }
func (t *textLines) rest(int) time.Duration    { return 0 }

func (t *textLines) sends(action, value string) bool {
	return slices.ContainsFunc(t.commands[action].send, func(f form) bool {
		return slices.ContainsFunc(f, func(p part) bool { return p.name == value })
	})
}

// line is a question as it goes out.
func (t *textLines) line(f form, channel int) []byte { return t.filled(f, nil, channel) }

// filled is a form as it goes out.
func (t *textLines) filled(f form, v values, channel int) []byte {
	return append(f.fill(make([]byte, 0, 32), v, channel), t.end...)
}

// job makes one of a line to send. Each line that comes is shown to accept, until it says that it is the answer; a line
// that refuses is one.
func (t *textLines) job(l *line, op string, request []byte, accept func(text string) (bool, error)) *job {
	j := &job{op: op, request: request}
	j.parse = func(received []byte) (used int, answered bool, err error) {
		end := bytes.Index(received, []byte(t.answerEnd))
		if end < 0 {
			if len(received) > lineMost {
				return len(received), false, nil
			}
			return 0, false, nil
		}
		text := string(received[:end])
		used = end + len(t.answerEnd)
		if t.refusal.stated() {
			if _, refused := t.refusal.match(text, nil); refused {
				return used, true, l.failure(op, instruments.Refused, fmt.Errorf("the instrument answers %q to %s", text, shown(request)))
			}
		}
		answered, err = accept(text)
		return used, answered, err
	}
	return j
}

// matches accepts a line that fits a reply.
func matches(r *reply) func(string) (bool, error) {
	return func(text string) (bool, error) {
		_, ok := r.match(text, nil)
		return ok, nil
	}
}

func (t *textLines) act(ctx context.Context, l *line, action string, v values, channel int) error {
	c := t.commands[action]
	for _, f := range c.send {
		j := t.job(l, action, t.filled(f, v, channel), matches(&c.reply))
		if !c.reply.stated() {
			j.parse = nil
		}
		if err := l.do(ctx, j); err != nil {
			return err
		}
		if !c.reply.stated() && t.errors != nil {
			complaints, err := t.complaints(ctx, l, action)
			if err != nil {
				return err
			}
			if len(complaints) > 0 {
				return l.failure(action, instruments.Refused, fmt.Errorf("after %s the instrument reports %s", shown(j.request), strings.Join(complaints, "; ")))
			}
		}
	}
	if c.until != nil {
		return t.settle(ctx, l, action, c.until, channel)
	}
	return nil
}

// complaints empties the instrument's queue of errors.
func (t *textLines) complaints(ctx context.Context, l *line, op string) (list []string, err error) {
	for len(list) < errorsMost {
		complaint := ""
		err := l.do(ctx, t.job(l, op, t.line(t.errors.send, 0), func(text string) (bool, error) {
			captured, ok := t.errors.reply.match(text, nil)
			if ok && !sameCode(captured[t.errors.code], t.errors.good) {
				complaint = text
			}
			return ok, nil
		}))
		if err != nil || complaint == "" {
			return list, err
		}
		list = append(list, complaint)
	}
	return list, nil
}

// sameCode compares two codes as numbers where they are: +0 is 0.
func sameCode(a, b string) bool {
	x, isA := parseNumber(a)
	y, isB := parseNumber(b)
	if isA && isB {
		return x == y
	}
	return strings.TrimSpace(a) == b
}

// settle asks until the answer says that the command is over.
func (t *textLines) settle(ctx context.Context, l *line, op string, s *settling, channel int) error {
	last, clock := "", l.link.Clock()
	for until := link.Until(l.link, s.atMost); ; {
		over := false
		err := l.do(ctx, t.job(l, op, t.line(s.send, channel), func(text string) (bool, error) {
			_, over = s.reply.match(text, nil)
			last = text
			return true, nil
		}))
		if err != nil || over {
			return err
		}
		if !clock.Now().Before(until) {
			return l.failure(op, instruments.Timeout, fmt.Errorf("not settled after %s: it still answers %q to %s", s.atMost, last, shown(t.line(s.send, channel))))
		}
		if err := clock.Sleep(ctx, s.every); err != nil {
			return err
		}
	}
}

func (t *textLines) ask(l *line, reading string, channel int, into *quantity.Value) *job {
	q := t.questions[reading]
	var room [2]string
	j := t.job(l, "read "+reading, t.line(q.send, channel), func(text string) (bool, error) {
		captured, ok := q.reply.match(text, room[:0])
		if !ok {
			return false, nil
		}
		x, ok := parseNumber(captured[q.value])
		*into = quantity.Of(x, q.unit)
		return ok, nil
	})
	j.value = func() string { return into.String() }
	return j
}

func (t *textLines) identify(ctx context.Context, l *line) (id instruments.Identity, err error) {
	if t.errors != nil { // what stands in the queue is of before
		if _, err := t.complaints(ctx, l, "identify"); err != nil {
			return id, err
		}
	}
	if t.identity == nil {
		return id, nil
	}
	fields := map[string]*string{"maker": &id.Maker, "model": &id.Model, "serial": &id.Serial, "firmware": &id.Firmware}
	j := t.job(l, "identify", t.line(t.identity.send, 0), func(text string) (bool, error) {
		captured, ok := t.identity.reply.match(text, nil)
		for i := range captured {
			if field := fields[t.identity.reply.names[i]]; ok && field != nil {
				*field = strings.TrimSpace(captured[i])
			}
		}
		return ok, nil
	})
	return id, l.do(ctx, j)
}
