package procedures

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"proofrate/instruments"
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
}

// unroll turns the document's steps into the plan's.
func (p *planner) unroll(s scope) {
	var st state
	st.rate = quantity.Of(0, quantity.MustUnit("deg/s"))
	p.plan.Steps = p.steps(p.procedure.root.Node("steps"), around{scope: s}, &st)
	if st.number > stepsMax {
		p.add(p.procedure.root.KeySpan("steps"), "too-many-steps", "", "the loops make more than %d steps", stepsMax)
	}
}

func (p *planner) steps(n *document.Node, a around, st *state) []Step {
	if n == nil {
		return nil
	}
	if n.Form != document.Sequence || len(n.Items()) == 0 {
		p.add(n.Span, "wrong-form", "write `- turn: 10 deg/s` and so on", "a list of steps was expected, this is %s", n.Form)
		return nil
	}
	var list []Step
	for _, item := range n.Items() {
		if st.number > stepsMax {
			return list
		}
		list = append(list, p.step(item, a, st)...)
	}
	return list
}

// step unrolls one step; a stage becomes many.
func (p *planner) step(n *document.Node, a around, st *state) []Step {
	if n.Form != document.Mapping || len(n.Entries()) == 0 {
		p.add(n.Span, "wrong-form", "write `- turn: 10 deg/s` and so on", "a step is a map of keys, this is %s", n.Form)
		return nil
	}
	name := n.Entries()[0].Key
	at := slices.IndexFunc(actions, func(row struct {
		name  string
		table *document.Table
	}) bool {
		return row.name == name.Text()
	})
	if at < 0 {
		names := make([]string, len(actions))
		for i, row := range actions {
			names[i] = row.name
		}
		help := source.DidYouMean(name.Text(), names)
		if help == "" {
			help = "the first key of a step says what it is: " + strings.Join(names, ", ")
		}
		p.add(name.Span, "unknown-step", help, "there is no step %q", name.Text())
		return nil
	}
	var found source.List
	m := document.Decode(n, actions[at].table, &found)
	for _, d := range found { // once, however many times the loop comes by
		p.add(d.Span, d.Code, d.Help, "%s", d.Message)
	}
	if name.Text() == "stage" {
		return p.stage(m, a, st)
	}
	st.number++
	s := Step{Stage: a.stage, Number: st.number, Labels: a.labels, Leg: a.leg, Span: name.Span}
	s.Action, s.Text = p.action(name.Text(), m, a, st)
	if s.Action == nil {
		return nil
	}
	return []Step{s}
}

// action makes a step's action and the words for it.
func (p *planner) action(name string, m document.Map, a around, st *state) (Action, string) {
	value := func(key string, d quantity.Dimension) quantity.Value {
		v, _ := p.value(m.Node(key), key, d, a.scope)
		return v
	}
	length := func(key string) time.Duration { return p.length(m.Node(key), key, a.scope) }
	switch name {
	case "soak":
		t := value("soak", quantity.Temperature)
		p.withinChamber(m.ValueSpan("soak"), t)
		return Soak{Target: t, Of: m.Text("of"), Band: value("band", quantity.TemperatureDifference), Drift: value("drift", quantity.TemperatureRate),
			Hold: length("hold"), AtMost: length("at-most")}, "soak " + t.String()
	case "settle":
		return p.settle(m, a)
	case "turn":
		rate := value("turn", quantity.AngularRate)
		if p.plan.Needs.Table && math.Abs(rate.SI()) > p.plan.Needs.TableRate.SI()*(1+1e-12) {
			p.add(m.ValueSpan("turn"), "beyond-needs", "raise needs: table, or turn slower", "%s is beyond the %s that the procedure needs of the table", rate, p.plan.Needs.TableRate)
		}
		if !p.plan.Needs.Table {
			p.add(m.KeySpan("turn"), "beyond-needs", "state needs: table", "the procedure turns the table and does not say what rate it needs")
		}
		st.rate = rate
		return Turn{rate}, "turn " + rate.String()
	case "hold":
		st.rate.Number = 0
		return Hold{}, "hold position"
	case "position":
		angle := value("position", quantity.Angle)
		st.rate.Number = 0
		return Position{angle}, "go to " + angle.String()
	case "power":
		return p.power(m, st)
	case "wait":
		d := length("wait")
		return Wait{d}, "wait " + words(d)
	case "record":
		return p.record(m, a, st)
	case "ask":
		return p.ask(m)
	case "park":
		t := value("park", quantity.Temperature)
		p.withinChamber(m.ValueSpan("park"), t)
		st.powered, st.rate.Number = false, 0
		return Park{t}, "park at " + t.String()
	}
	panic("procedures: no planner for step " + name)
}

func (p *planner) withinChamber(at source.Span, t quantity.Value) {
	n := p.plan.Needs
	switch {
	case t == (quantity.Value{}):
	case !n.Chamber:
		p.add(at, "beyond-needs", "state needs: chamber", "the procedure sets a temperature and does not say what range it needs")
	case t.SI() < n.ChamberLow.SI() || t.SI() > n.ChamberHigh.SI():
		p.add(at, "beyond-needs", "widen needs: chamber, or change the temperature", "%s is beyond the %s to %s that the procedure needs of the chamber", t, n.ChamberLow, n.ChamberHigh)
	}
}

func (p *planner) settle(m document.Map, a around) (Action, string) {
	kind, ok := instruments.ReadingOf(m.Text("settle"))
	if !ok {
		var known []string
		for _, k := range instruments.ReadingKinds {
			known = append(known, k.Name)
		}
		p.add(m.ValueSpan("settle"), "unknown-reading", source.DidYouMean(m.Text("settle"), known), "unknown reading %q", m.Text("settle"))
		return nil, ""
	}
	target := kind.Unit.Dimension()
	band, drift := target, target
	if target == quantity.Temperature {
		band = quantity.TemperatureDifference
	}
	switch band {
	case quantity.TemperatureDifference:
		drift = quantity.TemperatureRate
	case quantity.Angle:
		drift = quantity.AngularRate
	case quantity.AngularRate:
		drift = quantity.AngularAcceleration
	}
	t, _ := p.value(m.Node("at"), "at", target, a.scope)
	b, _ := p.value(m.Node("band"), "band", band, a.scope)
	s := Settle{Reading: kind.Name, Target: t, Band: b, Hold: p.length(m.Node("hold"), "hold", a.scope), AtMost: p.length(m.Node("at-most"), "at-most", a.scope)}
	if m.Stands("drift") {
		s.Drift, _ = p.value(m.Node("drift"), "drift", drift, a.scope)
	}
	return s, fmt.Sprintf("settle %s at %s", s.Reading, s.Target)
}

func (p *planner) power(m document.Map, st *state) (Action, string) {
	n := m.Node("power")
	word, slot := n, ""
	if n.Form == document.Mapping && len(n.Entries()) == 1 {
		word, slot = n.Entries()[0].Key, n.Entries()[0].Value.Text()
	}
	if word.Text() != "on" && word.Text() != "off" {
		p.add(n.Span, "wrong-value", "write on, off, or {off: SLOT}", "power: on or off was expected")
		return nil, ""
	}
	on := word.Text() == "on"
	if slot == "" {
		st.powered = on
	}
	return Power{On: on, Slot: instruments.SlotID(slot)}, strings.TrimSpace("power " + word.Text() + " " + slot)
}

func (p *planner) record(m document.Map, a around, st *state) (Action, string) {
	r := Record{Name: m.Text("record"), FromPowerOn: m.Has("from")}
	text := "record " + r.Name
	inner := m.Node("while")
	switch {
	case m.Stands("for") == m.Stands("while"):
		p.add(m.KeySpan("record"), "wrong-record", "give one of them", "a recording lasts `for` a time or goes on `while` steps do")
	case m.Stands("from") && inner == nil:
		p.add(m.KeySpan("from"), "wrong-record", "put the power step into while", "recording from power-on goes on while the steps that power on are carried out")
	case m.Stands("for"):
		r.For = p.recordFor(m.Node("for"), a, st)
		text += " for " + words(r.For)
	}
	if !r.FromPowerOn && !st.powered {
		p.add(m.KeySpan("record"), "no-power", "power on first, or record from: power-on", "the gyros are not powered when %q is recorded", r.Name)
	}
	if inner != nil {
		before := st.powered
		r.While = p.steps(inner, a, st)
		if r.FromPowerOn && (before || !st.powered) {
			p.add(m.KeySpan("from"), "wrong-record", "", "recording from power-on needs gyros that are off before and on after")
		}
		for _, s := range r.While {
			if _, nested := s.Action.(Record); nested && s.Action.(Record).Name == r.Name {
				p.add(s.Span, "duplicate-recording", "give it another name", "a recording %q goes on already", r.Name)
			}
		}
	}
	e := expected{r.Name, a.labels, a.leg, m.ValueSpan("record")}
	if r.Name != "" && p.seen[e.key()] {
		p.add(e.span, "duplicate-recording", "give it another name, or a loop with a label", "a second recording %q with the same labels (%s)", r.Name, orNone(a.labels.String()))
	}
	p.seen[e.key()] = true
	p.plan.expected = append(p.plan.expected, e)
	return r, text
}

func orNone(text string) string {
	if text == "" {
		return "none"
	}
	return text
}

// recordFor reads a time, or whole turns of the table that last at least a time:
//
//	T = ceil(at-least |rate| / (turns 360 deg)) turns 360 deg / |rate|;  at rest, at-least
func (p *planner) recordFor(n *document.Node, a around, st *state) time.Duration {
	if n.Form != document.Mapping {
		return p.positive(n, p.length(n, "for", a.scope))
	}
	least := time.Duration(0)
	turns := 1
	for _, e := range n.Entries() {
		switch e.Key.Text() {
		case "turns":
			turns = p.count(e.Value, "turns", 1000, a.scope)
		case "at-least":
			least = p.positive(e.Value, p.length(e.Value, "at-least", a.scope))
		default:
			p.add(e.Key.Span, "unknown-key", source.DidYouMean(e.Key.Text(), []string{"turns", "at-least"}), "for has no key %q", e.Key.Text())
		}
	}
	if n.Value("turns") == nil || n.Value("at-least") == nil {
		p.add(n.Span, "missing-key", "write {turns: 1, at-least: 20 s}", "for: whole turns need both turns and at-least")
		return 0
	}
	rate := math.Abs(st.rate.SI())
	if rate == 0 || turns == 0 {
		return least
	}
	group := float64(turns) * 2 * math.Pi / rate // s
	groups := math.Max(1, math.Ceil(least.Seconds()/group-1e-9))
	return time.Duration(math.Round(groups * group * float64(time.Second)))
}

func (p *planner) positive(n *document.Node, d time.Duration) time.Duration {
	if d == 0 {
		p.add(n.Span, "wrong-value", "", "a recording lasts longer than nothing")
	}
	return d
}

func (p *planner) ask(m document.Map) (Action, string) {
	q := Ask{Prompt: m.Text("ask"), Kind: m.Text("for"), Choices: m.Words("choices")}
	switch q.Kind {
	case "attitude":
		q.Unit = quantity.MustUnit("deg")
	case "number":
		unit, err := quantity.ParseUnit(m.Text("unit"))
		if err != nil || m.Text("unit") == "" {
			p.add(m.KeySpan("ask"), "missing-key", "unit of the number", "a number is asked for with its unit")
		}
		q.Unit = unit
	case "choice":
		if len(q.Choices) < 2 {
			p.add(m.KeySpan("ask"), "missing-key", "two choices or more", "a choice is asked for with its choices")
		}
	}
	return q, "ask: " + q.Prompt
}

// stage unrolls a group of steps, once or in a loop.
func (p *planner) stage(m document.Map, a around, st *state) []Step {
	inner := a
	inner.stage = m.Text("stage")
	if a.stage != "" {
		inner.stage = a.stage + " / " + inner.stage
	}
	body := m.Node("steps")
	switch {
	case m.Stands("each") && m.Stands("repeat"):
		p.add(m.KeySpan("repeat"), "wrong-stage", "nest two stages", "a stage loops over each value or repeats, not both")
		return nil
	case m.Stands("each"):
		return p.each(m, inner, body, st)
	case m.Stands("repeat"):
		return p.repeat(m, inner, body, st)
	}
	if m.Stands("as") {
		p.add(m.KeySpan("as"), "wrong-stage", "", "as names the count of a repeat; this stage has none")
	}
	return p.steps(body, inner, st)
}

func (p *planner) each(m document.Map, a around, body *document.Node, st *state) []Step {
	entries := p.entries(m.Node("each"), "each")
	if len(entries) != 1 || entries[0].Value.Form != document.Scalar {
		p.add(m.ValueSpan("each"), "wrong-value", "write {rate: 0 50 deg/s}", "each: one name with its values was expected")
		return nil
	}
	name := entries[0].Key
	if !p.loopName(name, a) {
		return nil
	}
	values, err := quantity.ParseList(entries[0].Value.Text())
	if err != nil {
		p.add(entries[0].Value.Span, "wrong-value", "", "each %s: %v", name.Text(), err)
		return nil
	}
	var list []Step
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
		list = append(list, p.steps(body, inner, st)...)
		if st.number > stepsMax {
			break
		}
	}
	return list
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

func (p *planner) repeat(m document.Map, a around, body *document.Node, st *state) []Step {
	times := p.count(m.Node("repeat"), "repeat", 10_000, a.scope)
	name := m.Node("as")
	if name != nil && !p.loopName(name, a) {
		return nil
	}
	var list []Step
	for i := 1; i <= times && st.number <= stepsMax; i++ {
		inner := a
		if name != nil {
			v := quantity.Of(float64(i), quantity.Unit{})
			inner.scope = a.scope.with(name.Text(), v)
			inner.labels = append(slices.Clone(a.labels), recording.Label{Name: name.Text(), Value: v, Visit: 1})
		}
		list = append(list, p.steps(body, inner, st)...)
	}
	return list
}

// words says a time as people do.
func words(d time.Duration) string {
	switch {
	case d >= time.Minute && d%time.Minute == 0:
		return fmt.Sprintf("%d min", d/time.Minute)
	case d >= 2*time.Minute:
		return fmt.Sprintf("%.1f min", d.Minutes())
	}
	return fmt.Sprintf("%.4g s", d.Seconds())
}
