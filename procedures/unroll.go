package procedures

import (
	"slices"
	"strings"

	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
	"proofrate/results/recording"
)

// around is what surrounds a step while loops are unrolled.
type around struct {
	scope  scope
	stage  string
	labels recording.Labels
	leg    string
}

// state is what the steps so far have done to the bench, as far as later steps depend on it.
type state struct {
	powered bool
	rate    quantity.Value // of the table
	number  int
	rounds  int  // through lists of steps: a loop around nothing must end too
	partial bool // a mistake kept steps, and so perhaps recordings, out of the plan
}

// unroll turns the document's steps into the plan's.
func (p *planner) unroll() {
	st := state{rate: quantity.Of(0, quantity.MustUnit("deg/s"))}
	before := len(p.list)
	p.unrolling = true
	p.plan.Steps = p.steps(p.procedure.root.Node("steps"), around{scope: p.scope}, &st)
	if st.full() {
		p.add(p.procedure.root.KeySpan("steps"), "too-many-steps", "", "the loops make more than %d steps", stepsMax)
	}
	p.unrolling, p.unrolled = false, st.number
	p.refused = len(p.list) > before
	p.partial = st.partial || st.full() || !p.procedure.root.Has("steps")
}

func (st *state) full() bool { return st.number > stepsMax || st.rounds > 4*stepsMax }

func (p *planner) steps(n *document.Node, a around, st *state) []Step {
	st.rounds++
	if n == nil {
		return nil
	}
	if n.Form != document.Sequence || len(n.Items()) == 0 {
		st.partial = true
		p.add(n.Span, "wrong-form", "write `- turn: 10 deg/s` and so on", "a list of steps was expected, this is %s", n.Form)
		return nil
	}
	var list []Step
	for _, item := range n.Items() {
		if st.full() {
			return list
		}
		list = append(list, p.step(item, a, st)...)
	}
	return list
}

// step unrolls one step; a stage becomes many.
func (p *planner) step(n *document.Node, a around, st *state) []Step {
	if n.Form != document.Mapping || len(n.Entries()) == 0 {
		st.partial = true
		p.add(n.Span, "wrong-form", "write `- turn: 10 deg/s` and so on", "a step is a map of keys, this is %s", n.Form)
		return nil
	}
	name := n.Entries()[0].Key
	at := slices.IndexFunc(actions, func(row action) bool { return row.name == name.Text() })
	if at < 0 {
		names := make([]string, len(actions))
		for i, row := range actions {
			names[i] = row.name
		}
		help := source.DidYouMean(name.Text(), names)
		if help == "" {
			help = "the first key of a step says what it is: " + strings.Join(names, ", ")
		}
		st.partial = true
		p.add(name.Span, "unknown-step", help, "there is no step %q", name.Text())
		return nil
	}
	var problems source.List
	m := document.Decode(n, actions[at].table, &problems)
	p.report(problems)
	if name.Text() == "stage" {
		return p.stage(m, a, st)
	}
	st.number++
	s := Step{Stage: a.stage, Number: st.number, Labels: a.labels, Leg: a.leg, Span: name.Span}
	s.Action, s.Text = p.action(name.Text(), m, a, st)
	return []Step{s}
}

// stage unrolls a group of steps, once or in a loop.
func (p *planner) stage(m document.Map, a around, st *state) []Step {
	inner := a
	inner.stage = m.Text("stage")
	if a.stage != "" {
		inner.stage = a.stage + " / " + inner.stage
	}
	body := m.Node("steps")
	if body == nil {
		st.partial = true // the missing key is reported
	}
	if m.Stands("as") && !m.Stands("repeat") {
		p.add(m.KeySpan("as"), "wrong-stage", "", "as names the count of a repeat; this stage has none")
	}
	switch {
	case m.Stands("each") && m.Stands("repeat"):
		st.partial = true
		p.add(m.KeySpan("repeat"), "wrong-stage", "nest two stages", "a stage loops over each value or repeats, not both")
		return nil
	case m.Stands("each"):
		return p.each(m, inner, body, st)
	case m.Stands("repeat"):
		return p.repeat(m, inner, body, st)
	}
	return p.steps(body, inner, st)
}

// each unrolls a loop over values.
func (p *planner) each(m document.Map, a around, body *document.Node, st *state) []Step {
	n := m.Node("each")
	if n.Form != document.Mapping || len(n.Entries()) != 1 || n.Entries()[0].Value.Form != document.Scalar {
		p.add(n.Span, "wrong-value", "write {rate: 0 50 deg/s}", "each: one name with its values was expected")
		for _, e := range n.Entries() {
			a.scope = a.scope.without(e.Key.Text())
		}
		return p.once("", a, body, st)
	}
	name, list := n.Entries()[0].Key, n.Entries()[0].Value
	sound := p.loopName(name, a)
	values, err := quantity.ParseList(list.Text())
	if err != nil {
		p.add(list.Span, "wrong-value", "", "each %s: %v", name.Text(), err)
	}
	if !sound || err != nil {
		return p.once(name.Text(), a, body, st)
	}
	var steps []Step
	for i, v := range values {
		visit := 1
		for _, before := range values[:i] {
			if before.Same(v) {
				visit++
			}
		}
		inner := a
		inner.scope = a.scope.with(name.Text(), v)
		inner.labels = append(slices.Clone(a.labels), recording.Label{Name: name.Text(), Value: v, Visit: visit})
		inner.leg = leg(values, i)
		steps = append(steps, p.steps(body, inner, st)...)
		if st.full() {
			break
		}
	}
	return steps
}

// once goes through the body of a loop that was refused, so that its own mistakes are found in the same pass.
func (p *planner) once(name string, a around, body *document.Node, st *state) []Step {
	a.scope = a.scope.without(name)
	st.partial = true
	return p.steps(body, a, st)
}

// leg tells whether a value was come to from below or from above; the first goes where the second will.
func leg(values []quantity.Value, i int) string {
	if i == 0 {
		if len(values) < 2 {
			return ""
		}
		i = 1
	}
	for ; i > 0; i-- {
		switch a, b := values[i-1].Number, values[i].Number; {
		case b > a:
			return "up"
		case b < a:
			return "down"
		}
	}
	return ""
}

func (p *planner) loopName(n *document.Node, a around) bool {
	_, taken := a.labels.Find(n.Text())
	_, parameter := p.spans[n.Text()]
	switch {
	case !variablePattern.MatchString(n.Text()) || n.Text() == "visit":
		p.add(n.Span, "wrong-name", "a name is letters, digits, - and _, a letter first; visit has a meaning of its own", "%q cannot name a loop", n.Text())
	case taken || parameter:
		p.add(n.Span, "duplicate-name", "choose another name", "%q is a parameter or a loop around this one already", n.Text())
	default:
		return true
	}
	return false
}

// repeat unrolls a counted loop.
func (p *planner) repeat(m document.Map, a around, body *document.Node, st *state) []Step {
	times := p.count(m.Node("repeat"), "repeat", repeatsMax, a.scope)
	name := m.Node("as")
	if times == 0 || m.Stands("as") && !m.Has("as") || name != nil && !p.loopName(name, a) {
		return p.once(m.Text("as"), a, body, st)
	}
	var steps []Step
	for i := 1; i <= times && !st.full(); i++ {
		inner := a
		if name != nil {
			v := quantity.Of(float64(i), quantity.Unit{})
			inner.scope = a.scope.with(name.Text(), v)
			inner.labels = append(slices.Clone(a.labels), recording.Label{Name: name.Text(), Value: v, Visit: 1})
		}
		steps = append(steps, p.steps(body, inner, st)...)
	}
	return steps
}
