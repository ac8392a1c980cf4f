package procedures

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"proofrate/limits"
	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// planLimits works out every limit.
func (p *planner) planLimits() {
	var clauses, structured []string
	said := map[string]bool{}
	for _, m := range p.procedure.root.List("limits") {
		l := Limit{Clause: m.Text("clause"), EndsTrial: m.Has("otherwise"), Span: m.KeySpan("clause")}
		clauses = append(clauses, l.Clause)
		l.Rule = p.rule(m)
		switch bounded, expression := m.Stands("figure"), m.Stands("require"); {
		case bounded && expression:
			p.add(l.Span, "wrong-limit", "write two limits", "the limit of clause %s has a figure and a requirement", l.Clause)
			continue
		case !bounded && !expression:
			p.add(l.Span, "wrong-limit", "give figure with at-most, at-least or between, or give require", "the limit of clause %s names no figure and no requirement", l.Clause)
			continue
		case expression:
			p.required(&l, m)
		default:
			structured = append(structured, l.Clause)
			p.bounded(&l, m)
		}
		if key := l.Clause + "\x00" + l.Require; l.Require != "" && said[key] {
			p.add(l.Span, "duplicate-limit", "leave one out", "clause %s requires %s twice", l.Clause, l.Require)
		} else {
			said[key] = true
		}
		p.plan.Limits = append(p.plan.Limits, l)
	}
	for _, e := range p.entries(p.variant.Node("bounds"), "bounds") {
		switch {
		case !slices.Contains(clauses, e.Key.Text()):
			p.add(e.Key.Span, "unknown-clause", "", "no limit has the clause %s", e.Key.Text())
		case !slices.Contains(structured, e.Key.Text()):
			p.add(e.Key.Span, "wrong-limit", "write the limit with figure, or use a parameter", "the limit of clause %s is an expression; a variant gives other bounds to a figure's", e.Key.Text())
		}
	}
}

func (p *planner) rule(m document.Map) limits.Rule {
	text := m.Text("rule")
	if text == "" {
		text = p.procedure.root.Text("rule")
	}
	if text == "" {
		if !m.Stands("rule") && !p.procedure.root.Stands("rule") {
			p.add(m.KeySpan("clause"), "missing-rule", "state rule: guarded or rule: simple, here or for the whole procedure", "the limit of clause %s has no decision rule; none is implied", m.Text("clause"))
		}
		return limits.Rule{}
	}
	rule, err := limits.ParseRule(text)
	if err != nil {
		return limits.Rule{} // reported by the table
	}
	return rule
}

// required compiles an expression.
func (p *planner) required(l *Limit, m document.Map) {
	for _, key := range []string{"at-most", "at-least", "between", "at", "per"} {
		if m.Stands(key) {
			p.add(m.KeySpan(key), "wrong-limit", "put it into the expression", "%s goes with figure, not with require", key)
		}
	}
	if !m.Has("require") || p.broken(m.Text("require")) {
		return
	}
	l.Require = m.Text("require")
	compiled, problems := limits.Compile(p.place(m, "require"), p.figures)
	if len(problems) > 0 {
		p.report(problems)
		return
	}
	if len(compiled.Figures()) == 0 {
		p.add(m.ValueSpan("require"), "no-figure", source.DidYouMean("", p.names), "the requirement names no figure")
	}
	l.parts = []limitPart{{limit: compiled}}
}

// bound is what a structured limit says of its figure.
type bound struct {
	limit  *Limit
	figure *Figure
	key    string // at-most, at-least or between
	at     conditions
}

// bounded makes a structured limit.
func (p *planner) bounded(l *Limit, m document.Map) {
	name := m.Text("figure")
	if name == "" {
		return // refused by the table
	}
	b := bound{limit: l, figure: p.planned(name)}
	if !slices.Contains(p.names, name) {
		p.add(m.ValueSpan("figure"), "unknown-figure", source.DidYouMean(name, p.names), "unknown figure %q", name)
	}
	for _, key := range []string{"at-most", "at-least", "between"} {
		switch {
		case !m.Stands(key):
		case b.key != "":
			p.add(m.KeySpan(key), "wrong-limit", "for both, write between: LOW HIGH UNIT", "the limit of clause %s has two bounds", l.Clause)
			return
		default:
			b.key = key
		}
	}
	if b.key == "" {
		p.add(l.Span, "wrong-limit", "give at-most, at-least or between", "the limit of clause %s has no bound", l.Clause)
		return
	}
	at, sound := p.conditions(m)
	node := p.variantBound(b, m.Node(b.key))
	if b.figure == nil || !sound {
		return
	}
	b.at = at
	for _, c := range b.at {
		if !b.figure.over(c.name) {
			p.noFigureLabel(c.span, b.figure, c.name)
			return
		}
	}
	if m.Stands("per") {
		p.boundsPer(b, m, node)
		return
	}
	l.Require = fmt.Sprintf("%s %s %s", name, strings.ReplaceAll(b.key, "-", " "), p.inWords(b.key, node))
	if len(b.at) > 0 {
		l.Require += " at " + b.at.String()
	}
	p.boundPart(b, node, b.at)
}

// inWords says a bound as people do: a parameter by its value, the two of a between as -2 and 2 deg/h.
func (p *planner) inWords(key string, node *document.Node) string {
	if v, ok := p.scope.values[node.Text()]; ok {
		return v.String()
	}
	if key == "between" {
		return strings.Replace(node.Text(), " ", " and ", 1)
	}
	return node.Text()
}

func (list conditions) String() string {
	parts := make([]string, len(list))
	for i, c := range list {
		if parts[i] = c.name + " " + c.value.String(); c.visit > 0 {
			parts[i] += fmt.Sprintf(" (visit %d)", c.visit)
		}
	}
	return strings.Join(parts, ", ")
}

// over says whether the figure is a series over a label.
func (f *Figure) over(name string) bool {
	return slices.Contains(f.labels, name) || slices.Contains(f.labels, name+" visit")
}

// noFigureLabel reports a label that a figure is no series over.
func (p *planner) noFigureLabel(at source.Span, f *Figure, name string) {
	var labels []string
	for _, l := range f.labels {
		labels = append(labels, strings.TrimSuffix(l, " visit"))
	}
	help := source.DidYouMean(name, labels)
	if len(labels) == 0 {
		help = "it is a single figure; per makes it a series"
	}
	p.add(at, "no-label", help, "figure %s has no label %q", f.Name, name)
}

// variantBound is the bound that the variant gives for the clause, or the limit's own.
func (p *planner) variantBound(b bound, own *document.Node) *document.Node {
	for _, e := range p.entries(p.variant.Node("bounds"), "bounds") {
		if e.Key.Text() != b.limit.Clause {
			continue
		}
		var problems source.List
		m := document.Decode(e.Value, &boundTable, &problems)
		p.report(problems)
		if other := m.Node(b.key); other != nil {
			return other
		}
		p.add(e.Key.Span, "wrong-limit", "", "clause %s is bounded by %s; the variant gives none", b.limit.Clause, b.key)
	}
	return own
}

// boundsPer reads `per: temperature` with bounds by its value.
func (p *planner) boundsPer(b bound, m document.Map, node *document.Node) {
	per := m.Text("per")
	if per == "" {
		return // refused by the table
	}
	if !b.figure.over(per) {
		p.noFigureLabel(m.ValueSpan("per"), b.figure, per)
		return
	}
	var said []string
	covered := map[string]bool{}
	for _, e := range p.entries(node, b.key+" per "+per) {
		v, err := quantity.Parse(e.Key.Text())
		if err != nil {
			p.add(e.Key.Span, "wrong-value", "", "%s per %s: %v", b.key, per, err)
			continue
		}
		at := append(slices.Clone(b.at), condition{per, v, 0, e.Key.Span})
		for _, element := range b.figure.Elements {
			if key := elementKey(element.Labels); at.fit(element.Labels) {
				if covered[key] {
					p.add(e.Key.Span, "duplicate-name", "", "%s has a bound already", v)
				}
				covered[key] = true
			}
		}
		said = append(said, fmt.Sprintf("%s at %s", p.inWords(b.key, e.Value), v))
		p.boundPart(b, e.Value, at)
	}
	if node.Form != document.Mapping {
		return
	}
	for _, element := range b.figure.Elements {
		if b.at.fit(element.Labels) && !covered[elementKey(element.Labels)] {
			p.add(m.KeySpan(b.key), "no-bound", "", "the limit of clause %s has no bound at %s", b.limit.Clause, element.Labels)
			break
		}
	}
	b.limit.Require = fmt.Sprintf("%s %s %s", b.figure.Name, strings.ReplaceAll(b.key, "-", " "), strings.Join(said, ", "))
}

// boundPart adds bounds for the elements that fit.
func (p *planner) boundPart(b bound, node *document.Node, at conditions) {
	low, high, ok := p.range2(b, node)
	if !ok {
		return
	}
	f := b.figure
	part := limitPart{limit: limits.Between(f.Name, limits.FigureType{Unit: f.Unit, Labels: f.labels}, low, high, b.limit.Require)}
	if len(at) > 0 {
		part.only = map[string]bool{}
		for _, element := range f.Elements {
			if at.fit(element.Labels) {
				part.only[elementKey(element.Labels)] = true
			}
		}
		if len(part.only) == 0 && len(f.Elements) > 0 {
			p.add(at[len(at)-1].span, "no-element", "", "figure %s is not measured at %s", f.Name, at)
		}
	}
	b.limit.parts = append(b.limit.parts, part)
}

// range2 resolves a bound, or both, to numbers in the figure's unit.
func (p *planner) range2(b bound, node *document.Node) (low, high float64, ok bool) {
	f := b.figure
	low, high = math.Inf(-1), math.Inf(1)
	if b.key != "between" {
		v, ok := p.value(node, b.key, f.Unit.Dimension(), p.scope)
		if !ok {
			return 0, 0, false
		}
		if b.key == "at-most" {
			return low, v.As(f.Unit), true
		}
		return v.As(f.Unit), high, true
	}
	if node.Form != document.Scalar {
		p.add(node.Span, "wrong-value", "write LOW HIGH UNIT, as in -2 2 deg/h", "between: two bounds with their unit were expected, this is %s", node.Form)
		return 0, 0, false
	}
	bounds, err := quantity.ParseList(node.Text())
	switch {
	case err != nil:
		p.add(node.Span, "wrong-value", "write LOW HIGH UNIT, as in -2 2 deg/h", "between: %v", err)
		return 0, 0, false
	case len(bounds) != 2:
		p.add(node.Span, "wrong-value", "write LOW HIGH UNIT, as in -2 2 deg/h", "between: two bounds were expected, %d stand there", len(bounds))
		return 0, 0, false
	}
	if d := bounds[0].Dimension(); d != f.Unit.Dimension() {
		p.add(node.Span, "wrong-dimension", "units that fit: "+fitting(f.Unit.Dimension()), "between: figure %s is %s, this is %s", f.Name, aQuantity(f.Unit.Dimension()), aQuantity(d))
		return 0, 0, false
	}
	low, high = bounds[0].As(f.Unit), bounds[1].As(f.Unit)
	if low >= high {
		p.add(node.Span, "wrong-value", "", "between: the lower bound comes first and is below the upper one")
		return 0, 0, false
	}
	return low, high, true
}
