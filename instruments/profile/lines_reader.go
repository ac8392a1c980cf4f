package profile

import (
	"time"

	"proofrate/limits/document"
	"proofrate/limits/source"
)

const (
	defaultEvery = 100 * time.Millisecond
	atMostMost   = 10 * time.Second // the guards are not watched meanwhile
)

// lines reads what a profile of the family lines says.
func (r *reader) lines() speech {
	m := r.m.Map("lines")
	t := &textLines{end: lineEnds[m.Text("end")], answerEnd: lineEnds[m.Text("end")], commands: map[string]*command{}, questions: map[string]*question{}}
	if m.Has("answer-end") {
		t.answerEnd = lineEnds[m.Text("answer-end")]
	}
	if m.Has("refusal") {
		t.refusal.form = r.form(m.Node("refusal"), []string{"code", "text", "any"})
	}
	if q := m.Map("error-query"); m.Has("error-query") {
		t.errors = &errorQuery{question: r.question(q, m.KeySpan("error-query"), "the error query", nil, []string{"code", "text"}), good: q.Text("good")}
		r.captures(q, &t.errors.reply, "code")
		t.errors.code = t.errors.reply.index("code")
	}
	if n := r.m.Node("identify"); n != nil {
		q := r.question(document.Decode(n, &identityTable, r.problems), r.m.KeySpan("identify"), "identify", nil, identityFields)
		t.identity = &q
	}
	for _, e := range r.entries(r.m, "actions") {
		a := r.actionOf(e.Key)
		c := r.command(a, e)
		if a != nil {
			t.commands[a.name] = c
		}
	}
	for _, e := range r.entries(r.m, "readings") {
		q := document.Decode(e.Value, &questionTable, r.problems)
		unit, _ := r.readingOf(e.Key, q)
		got := r.question(q, e.Key.Span, "the reading "+e.Key.Text(), r.channel(), []string{"value"})
		r.captures(q, &got.reply, "value")
		got.unit, got.value = unit, got.reply.index("value")
		t.questions[e.Key.Text()] = &got
	}
	return t
}

// channel is what a line may be filled with beside values.
func (r *reader) channel() []string {
	if r.p.SupplyChannels > 0 {
		return []string{"channel"}
	}
	return nil
}

// question reads the keys send, reply and pattern.
func (r *reader) question(m document.Map, at source.Span, of string, filled, captured []string) question {
	var q question
	if n := m.Node("send"); n != nil {
		q.send = r.form(n, filled)
	}
	q.reply = *r.reply(m, at, of, true, captured)
	return q
}

// command reads an action: each value that it carries is sent, in a unit that fits.
func (r *reader) command(a *action, e document.Entry) *command {
	m := document.Decode(e.Value, &commandTable, r.problems)
	c := &command{reply: *r.reply(m, e.Key.Span, "the action "+e.Key.Text(), false, nil)}
	if n := m.Map("until"); m.Has("until") {
		c.until = &settling{question: r.question(n, m.KeySpan("until"), "until", r.channel(), nil),
			every: r.duration(n, "every", defaultEvery, atMostMost), atMost: r.duration(n, "at-most", atMostMost, atMostMost)}
	}
	lines := []*document.Node{}
	if n := m.Node("send"); n != nil && n.Form == document.Sequence {
		lines = n.Items()
	} else if n != nil {
		lines = append(lines, n)
	}
	if a == nil {
		return c
	}
	sent := map[string]bool{}
	for _, n := range lines {
		f := r.form(n, append(r.channel(), a.valueNames()...))
		for _, p := range f {
			v := a.value(p.name)
			if v == nil {
				continue
			}
			sent[v.name] = true
			switch at := r.within(n, p.from, p.to); {
			case !p.hasUnit:
				r.add(at, "missing-unit", "as in {"+v.name+" .3f "+v.dimension.Units()[0].String()+"}", "a value is sent with a format and a unit")
			case p.unit.Dimension() != v.dimension:
				r.add(at, "wrong-unit", "units that fit: "+unitsOf(v.dimension), "%s is a unit of %s, and %s is of %s", p.unit, p.unit.Dimension(), v.name, v.dimension)
			}
		}
		c.send = append(c.send, f)
	}
	for _, v := range a.values {
		if !v.optional && !sent[v.name] && len(lines) > 0 {
			r.add(e.Key.Span, "unsent-value", "send it as {"+v.name+" .3f "+v.dimension.Units()[0].String()+"}", "the action %s does not send its %s", a.name, v.name)
		}
	}
	if m.Has("send") && len(lines) == 0 {
		r.add(m.ValueSpan("send"), "wrong-form", "", "the action %s sends nothing", a.name)
	}
	return c
}
