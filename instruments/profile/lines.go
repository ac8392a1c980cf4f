package profile

import (
	"bytes"
	"errors"
	"fmt"
	"slices"

	"proofrate/instruments"
	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// lineMost is the longest answer that is read.
const lineMost = 4096

// textLines is a profile of family lines.
type textLines struct {
	end        string
	refusal    template
	errorQuery *spoken
	good       string // code of the error query that says no error
	identity   *spoken
	actions    map[string][]spoken
	readings   map[string]spoken
}

// spoken is one exchange: a line and, if it has one, its answer.
type spoken struct {
	send  template
	reply template
	unit  quantity.Unit
	value int // which capture is the value; -1 none
}

var ends = map[string]string{"CR LF": "\r\n", "LF": "\n", "CR": "\r"}

// lines reads the family's part of a profile.
func (r *reader) lines() speaker {
	m := r.map_.Map("lines")
	t := &textLines{end: ends[m.Text("end")], actions: map[string][]spoken{}, readings: map[string]spoken{}}
	if m.Has("refusal") {
		t.refusal = r.template(m.Node("refusal"), []string{"code", "text", "any"})
	}
	if q := m.Map("error-query"); m.Has("error-query") {
		t.errorQuery = &spoken{send: r.template(q.Node("send"), nil), reply: r.template(q.Node("reply"), []string{"code", "text", "any"})}
		t.good = q.Text("good")
		r.mustCapture(q.Node("reply"), t.errorQuery.reply, "code")
	}
	if n := r.map_.Node("identify"); n != nil {
		i := document.Decode(n, &lineTable, r.problems)
		t.identity = &spoken{send: r.template(i.Node("send"), nil), reply: r.template(i.Node("reply"), []string{"maker", "model", "serial", "firmware", "any"})}
		if !i.Has("reply") {
			r.add(n.Span, "missing-key", "", "identify needs the key \"reply\"")
		}
	}
	for _, e := range r.entries("actions") {
		a := r.actionOf(e.Key)
		l := document.Decode(e.Value, &lineTable, r.problems)
		if a == nil || !l.Has("send") {
			continue
		}
		t.actions[a.name] = r.spokenAction(a, e, l)
	}
	for _, e := range r.entries("readings") {
		l := document.Decode(e.Value, &lineTable, r.problems)
		unit, ok := r.readingOf(e.Key, l)
		if !ok || !l.Has("send") {
			continue
		}
		s := spoken{send: r.template(l.Node("send"), []string{"channel"}), reply: r.template(l.Node("reply"), []string{"value", "any"}), unit: unit}
		if !l.Has("reply") {
			r.add(e.Key.Span, "missing-key", "as in reply: \"{value}\"", "reading %s needs the key \"reply\"", e.Key.Text())
			continue
		}
		r.mustCapture(l.Node("reply"), s.reply, "value")
		s.value = slices.Index(s.reply.captures(), "value")
		t.readings[e.Key.Text()] = s
	}
	return t
}

// spokenAction reads an action's lines: each value that the action carries must be sent, and in a unit that fits.
func (r *reader) spokenAction(a *action, e document.Entry, l document.Map) []spoken {
	lines := []*document.Node{l.Node("send")}
	if lines[0].Form == document.Sequence {
		lines = lines[0].Items()
	}
	var names []string
	for _, v := range a.values {
		names = append(names, v.name)
	}
	var list []spoken
	sent := map[string]bool{}
	for _, n := range lines {
		s := spoken{send: r.template(n, append([]string{"channel"}, names...)), value: -1}
		for _, p := range s.send {
			for _, v := range a.values {
				if p.name != v.name {
					continue
				}
				sent[p.name] = true
				if !p.hasUnit || p.unit.Dimension() != v.dimension {
					r.add(n.Span, "wrong-dimension", "write it as in {"+v.name+" .3f "+unitOf(v.dimension)+"}", "%s is sent in a unit of %s", v.name, v.dimension)
					s.send = nil
				}
			}
		}
		list = append(list, s)
	}
	for _, v := range a.values {
		if !sent[v.name] && v.name != "ramp" && v.name != "acceleration" {
			r.add(e.Key.Span, "unsent-value", "", "action %s does not send %s", a.name, v.name)
		}
	}
	if l.Has("reply") && len(list) > 0 {
		list[len(list)-1].reply = r.template(l.Node("reply"), []string{"any"})
	}
	return list
}

func unitOf(d quantity.Dimension) string {
	if units := d.Units(); len(units) > 0 {
		return units[0].String()
	}
	return "UNIT"
}

// template reads one and refuses captures that nothing uses.
func (r *reader) template(n *document.Node, known []string) template {
	if n == nil {
		return nil
	}
	if n.Form != document.Scalar {
		r.add(n.Span, "wrong-value", "", "a template was expected, this is %s", n.Form)
		return nil
	}
	t, err := parseTemplate(n.Text())
	if err != nil {
		r.add(n.Span, "wrong-template", "", "%v", err)
		return nil
	}
	for _, name := range t.captures() {
		if !slices.Contains(known, name) {
			help := source.DidYouMean(name, known)
			if len(known) == 0 {
				help = "nothing is captured or filled in here"
			}
			r.add(n.Span, "unused-capture", help, "nothing uses the capture {%s}", name)
			return nil
		}
	}
	return t
}

func (r *reader) mustCapture(n *document.Node, t template, name string) {
	if n != nil && t != nil && !slices.Contains(t.captures(), name) {
		r.add(n.Span, "missing-capture", "", "the template captures no {%s}", name)
	}
}

func (t *textLines) has(action string) bool { return len(t.actions[action]) > 0 }

func (t *textLines) unit(reading string) (quantity.Unit, bool) {
	s, ok := t.readings[reading]
	return s.unit, ok
}

// request is a line with its end.
func (t *textLines) request(s spoken, v values, channel int) []byte {
	return append(s.send.fill(make([]byte, 0, 32), v, channel), t.end...)
}

// answer takes one line off what has arrived. Lines that are not the answer (unasked ones, echoes) are passed over as
// long as the request has time; a damaged one is not.
func (t *textLines) answer(l *line, j *job, accept func(text string) (bool, error)) {
	j.parse = func(received []byte) (int, bool, error) {
		end := bytes.Index(received, []byte(t.end))
		if end < 0 {
			if len(received) > lineMost {
				return len(received), true, l.failure(j, instruments.Garbled, fmt.Errorf("%d bytes without a line's end", len(received)))
			}
			return 0, false, nil
		}
		text, used := string(received[:end]), end+len(t.end)
		if code, ok := t.refusal.match(text, nil); ok && t.refusal != nil {
			return used, true, l.failure(j, instruments.Refused, fmt.Errorf("the instrument answers %q to %q (%v)", text, bytes.TrimRight(j.request, "\r\n"), code))
		}
		ok, err := accept(text)
		if err == nil && !ok {
			err = l.failure(j, instruments.Garbled, fmt.Errorf("%q is no answer to %q", clipped([]byte(text)), bytes.TrimRight(j.request, "\r\n")))
		}
		return used, true, err
	}
}

func (t *textLines) act(l *line, name string, v values, channel int) ([]*job, error) {
	list := t.actions[name]
	if len(list) == 0 {
		return nil, errors.New("the profile has no such action")
	}
	var jobs []*job
	for _, s := range list {
		j := &job{op: name, request: t.request(s, v, channel)}
		if s.reply != nil {
			t.answer(l, j, func(text string) (bool, error) { _, ok := s.reply.match(text, nil); return ok, nil })
		} else {
			j.parse = func([]byte) (int, bool, error) { return 0, true, nil } // nothing answers
		}
		jobs = append(jobs, j)
		if s.reply == nil && t.errorQuery != nil {
			jobs = append(jobs, t.errors(l, j))
		}
	}
	return jobs, nil
}

// errors asks the instrument what was wrong with a request that it does not answer.
func (t *textLines) errors(l *line, of *job) *job {
	j := &job{op: of.op, request: t.request(*t.errorQuery, nil, 0)}
	names := t.errorQuery.reply.captures()
	t.answer(l, j, func(text string) (bool, error) {
		got, ok := t.errorQuery.reply.match(text, nil)
		if !ok {
			return false, nil
		}
		if code := got[slices.Index(names, "code")]; code != t.good {
			return true, l.failure(j, instruments.Refused, fmt.Errorf("to %q the instrument reports %s", bytes.TrimRight(of.request, "\r\n"), text))
		}
		return true, nil
	})
	return j
}

func (t *textLines) ask(l *line, reading string, channel int, into *quantity.Value) *job {
	s := t.readings[reading]
	j := &job{op: "read " + reading, request: t.request(s, nil, channel)}
	var captured []string
	t.answer(l, j, func(text string) (bool, error) {
		var ok bool
		if captured, ok = s.reply.match(text, captured); !ok {
			return false, nil
		}
		x, ok := parseNumber(captured[s.value])
		*into = quantity.Of(x, s.unit)
		return ok, nil
	})
	return j
}

func (t *textLines) identify(l *line, into *instruments.Identity) []*job {
	if t.identity == nil {
		return nil
	}
	j := &job{op: "identify", request: t.request(*t.identity, nil, 0)}
	fields := map[string]*string{"maker": &into.Maker, "model": &into.Model, "serial": &into.Serial, "firmware": &into.Firmware}
	names := t.identity.reply.captures()
	t.answer(l, j, func(text string) (bool, error) {
		got, ok := t.identity.reply.match(text, nil)
		for i := range got {
			if field := fields[names[i]]; field != nil {
				*field = got[i]
			}
		}
		return ok, nil
	})
	return []*job{j}
}
