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
)

// action makes a step's action and the words for it.
func (p *planner) action(name string, m document.Map, a around, st *state) (Action, string) {
	switch name {
	case "soak":
		return p.soak(m, a, st)
	case "settle":
		return p.settle(m, a, st)
	case "turn":
		return p.turn(m, a, st)
	case "hold":
		st.rate.Number = 0
		return Hold{}, "hold position"
	case "position":
		angle, _ := p.value(m.Node("position"), "position", quantity.Angle, a.scope)
		st.rate.Number = 0
		return Position{angle}, "go to " + angle.String()
	case "power":
		return p.power(m, st)
	case "wait":
		d, _ := p.length(m.Node("wait"), "wait", a.scope)
		return Wait{d}, "wait " + words(d)
	case "record":
		return p.record(m, a, st)
	case "ask":
		return p.ask(m)
	case "park":
		t := p.temperature(m, "park", a)
		st.powered, st.rate.Number = false, 0
		return Park{t}, "park at " + t.String()
	}
	panic("procedures: no planner for step " + name)
}

// temperature resolves one for the chamber and holds it against the needs.
func (p *planner) temperature(m document.Map, key string, a around) quantity.Value {
	t, ok := p.value(m.Node(key), key, quantity.Temperature, a.scope)
	n := p.plan.Needs
	switch {
	case !ok:
	case !n.Chamber && p.procedure.root.Map("needs").Stands("chamber"): // refused and reported
	case !n.Chamber:
		p.add(m.ValueSpan(key), "beyond-needs", "state needs: chamber", "the procedure sets a temperature and does not say what range it needs")
	case t.SI() < n.ChamberLow.SI() || t.SI() > n.ChamberHigh.SI():
		p.add(m.ValueSpan(key), "beyond-needs", "widen needs: chamber, or change the temperature", "%s is beyond the %s to %s that the procedure needs of the chamber", t, n.ChamberLow, n.ChamberHigh)
	}
	return t
}

func (p *planner) turn(m document.Map, a around, st *state) (Action, string) {
	rate, ok := p.value(m.Node("turn"), "turn", quantity.AngularRate, a.scope)
	n := p.plan.Needs
	switch {
	case !ok:
	case !n.Table && p.procedure.root.Map("needs").Stands("table"): // refused and reported
	case !n.Table:
		p.add(m.KeySpan("turn"), "beyond-needs", "state needs: table", "the procedure turns the table and does not say what rate it needs")
	case math.Abs(rate.SI()) > n.TableRate.SI()*(1+1e-12):
		p.add(m.ValueSpan("turn"), "beyond-needs", "raise needs: table, or turn slower", "%s is beyond the %s that the procedure needs of the table", rate, n.TableRate)
	}
	st.rate = rate
	return Turn{rate}, "turn " + rate.String()
}

// settled are what soak and settle share.
type settled struct {
	band, drift  quantity.Value
	hold, atMost time.Duration
}

func (p *planner) settled(m document.Map, a around, band, drift quantity.Dimension) settled {
	var s settled
	above := func(key string, want quantity.Dimension) quantity.Value {
		v, ok := p.value(m.Node(key), key, want, a.scope)
		if ok && v.Number <= 0 {
			p.add(m.ValueSpan(key), "wrong-value", "", "%s: more than zero was expected", key)
		}
		return v
	}
	s.band, s.drift = above("band", band), above("drift", drift)
	var heldOK, mostOK bool
	s.hold, heldOK = p.length(m.Node("hold"), "hold", a.scope)
	s.atMost, mostOK = p.length(m.Node("at-most"), "at-most", a.scope)
	if heldOK && mostOK && s.hold >= s.atMost {
		p.add(m.ValueSpan("at-most"), "wrong-value", "allow more", "at-most: %s leaves no time to hold for %s", words(s.atMost), words(s.hold))
	}
	return s
}

func (p *planner) soak(m document.Map, a around, st *state) (Action, string) {
	t := p.temperature(m, "soak", a)
	p.sends(m, "of", m.Text("of"), st)
	s := p.settled(m, a, quantity.TemperatureDifference, quantity.TemperatureRate)
	return Soak{Target: t, Of: m.Text("of"), Band: s.band, Drift: s.drift, Hold: s.hold, AtMost: s.atMost}, "soak " + t.String()
}

// sends checks that the gyros are powered where one of their readings is waited for.
func (p *planner) sends(m document.Map, key, reading string, st *state) {
	if strings.HasPrefix(reading, "gyro.") && !st.powered {
		p.add(m.ValueSpan(key), "no-power", "power on first", "the gyros are not powered when %s is waited for", reading)
	}
}

func (p *planner) settle(m document.Map, a around, st *state) (Action, string) {
	name := m.Text("settle")
	kind, ok := instruments.ReadingOf(name)
	if !ok {
		if name != "" {
			p.add(m.ValueSpan("settle"), "unknown-reading", source.DidYouMean(name, readingNames()), "unknown reading %q", name)
		}
		return Settle{}, "settle"
	}
	p.sends(m, "settle", name, st)
	unit := kind.Unit
	if n := m.Node("at"); n != nil && n.Form == document.Scalar && !slices.Contains(readingNames(), name) {
		// A meter's unit is its profile's: without a bench, the target's own must do.
		if v, err := quantity.Parse(n.Text()); err == nil {
			unit = v.Unit
		}
	}
	t, _ := p.value(m.Node("at"), "at", unit.Dimension(), a.scope)
	band, drift := changes(unit)
	s := p.settled(m, a, band, drift)
	return Settle{Reading: kind.Name, Target: t, Band: s.band, Drift: s.drift, Hold: s.hold, AtMost: s.atMost}, fmt.Sprintf("settle %s at %s", kind.Name, t)
}

// changes are the dimensions of a difference, and of a change in time, of what is measured in a unit.
func changes(unit quantity.Unit) (difference, rate quantity.Dimension) {
	if unit.Dimension() == quantity.Temperature {
		return quantity.TemperatureDifference, quantity.TemperatureRate
	}
	perSecond, err := quantity.ParseUnit("(" + unit.String() + ")/s")
	if err != nil {
		return unit.Dimension(), quantity.Dimension{}
	}
	return unit.Dimension(), perSecond.Dimension()
}

func (p *planner) power(m document.Map, st *state) (Action, string) {
	n := m.Node("power")
	word, slot := n, ""
	if n.Form == document.Mapping && len(n.Entries()) == 1 && n.Entries()[0].Value.Form == document.Scalar {
		word, slot = n.Entries()[0].Key, n.Entries()[0].Value.Text()
	}
	if word.Form != document.Scalar || word.Text() != "on" && word.Text() != "off" {
		p.add(n.Span, "wrong-value", "write on, off, or {off: SLOT}", "power: on or off was expected")
		st.powered = true // so that this mistake makes no others
		return Power{}, "power"
	}
	on := word.Text() == "on"
	if on || slot == "" {
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
		if r.For = p.recordFor(m.Node("for"), a, st); r.For > 0 {
			text += " for " + words(r.For)
		}
	}
	if !m.Stands("from") && !st.powered {
		p.add(m.KeySpan("record"), "no-power", "power on first, or record from: power-on", "the gyros are not powered when %q is recorded", r.Name)
	}
	p.expect(m, a, st, r.For)
	if inner != nil {
		before := st.powered
		r.While = p.steps(inner, a, st)
		if r.FromPowerOn && (before || !st.powered) {
			p.add(m.KeySpan("from"), "wrong-record", "switch them off before, and on in while", "recording from power-on needs gyros that are off before and on after")
		}
	}
	return r, text
}

// expect notes a recording that the steps will make.
func (p *planner) expect(m document.Map, a around, st *state, lasts time.Duration) {
	e := expected{name: m.Text("record"), labels: a.labels, leg: a.leg, span: m.ValueSpan("record")}
	if st.rate.Number == 0 {
		e.rest = lasts
	}
	if e.name == "" {
		return
	}
	key := e.key()
	if p.seen[key] {
		with := "no labels"
		if len(a.labels) > 0 {
			with = "the same labels, " + a.labels.String()
		}
		p.add(e.span, "duplicate-recording", "give it another name, or a loop with a label", "a second recording %q with %s", e.name, with)
	}
	p.seen[key] = true
	p.plan.expected = append(p.plan.expected, e)
}

// recordFor reads a time, or whole turns of the table that last at least a time:
//
//	T = ceil(at-least |rate| / (turns 360 deg)) turns 360 deg / |rate|;  at rest, at-least
func (p *planner) recordFor(n *document.Node, a around, st *state) time.Duration {
	if n.Form != document.Mapping {
		return p.positive(n, "for", a.scope)
	}
	var problems source.List
	m := document.Decode(n, &turnsTable, &problems)
	p.report(problems)
	turns := p.count(m.Node("turns"), "turns", 1000, a.scope)
	var least time.Duration
	if m.Stands("at-least") {
		least = p.positive(m.Node("at-least"), "at-least", a.scope)
	}
	rate := math.Abs(st.rate.SI())
	if rate == 0 || turns == 0 {
		return least
	}
	group := float64(turns) * 2 * math.Pi / rate // s
	whole := math.Max(1, math.Ceil(least.Seconds()/group-1e-9))
	if whole*group > benchSecondsMax {
		p.add(n.Span, "wrong-value", "turn faster, or record for a time", "for: %d turns at %s last more than %d days", turns, st.rate, benchSecondsMax/86400)
		return least
	}
	return time.Duration(math.Round(whole * group * float64(time.Second)))
}

// positive resolves a time that must be more than zero.
func (p *planner) positive(n *document.Node, key string, s scope) time.Duration {
	d, ok := p.length(n, key, s)
	if ok && d == 0 {
		p.add(n.Span, "wrong-value", "", "%s: a recording lasts longer than nothing", key)
	}
	return d
}

func (p *planner) ask(m document.Map) (Action, string) {
	q := Ask{Prompt: m.Text("ask"), Kind: m.Text("for"), Choices: m.Words("choices")}
	text := "ask: " + q.Prompt
	for _, only := range [...]struct{ key, kind string }{{"unit", "number"}, {"choices", "choice"}} {
		if m.Stands(only.key) && m.Has("for") && q.Kind != only.kind {
			p.add(m.KeySpan(only.key), "wrong-ask", "leave it out", "%s belongs to a question for: %s", only.key, only.kind)
		}
	}
	switch q.Kind {
	case "attitude":
		q.Unit = quantity.MustUnit("deg")
	case "number":
		if !m.Stands("unit") {
			p.add(m.KeySpan("ask"), "missing-key", "state its unit of measure; 1 for a ratio or a count", "a number is asked for with its unit")
			break
		}
		unit, err := quantity.ParseUnit(m.Text("unit"))
		if err != nil && m.Has("unit") {
			p.add(m.ValueSpan("unit"), "wrong-value", "", "%v", err)
		}
		q.Unit = unit
	case "choice":
		if len(q.Choices) < 2 {
			p.add(m.KeySpan("ask"), "missing-key", "two choices or more", "a choice is asked for with its choices")
		}
	}
	return q, text
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
