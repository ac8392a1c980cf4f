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
	var names []string
	for _, f := range p.procedure.root.Free("figures") {
		names = append(names, f.Name)
	}
	clauses := map[string]bool{}
	for _, m := range p.procedure.root.List("limits") {
		l := Limit{Clause: m.Text("clause"), EndsTrial: m.Has("otherwise"), Span: m.KeySpan("clause")}
		clauses[l.Clause] = true
		l.Rule = p.rule(m)
		switch structured, expression := m.Stands("figure"), m.Stands("require"); {
		case structured == expression:
			p.add(l.Span, "wrong-limit", "give figure with at-most, at-least or between, or give require", "the limit of clause %s names no figure and no requirement, or both", l.Clause)
			continue
		case expression:
			p.required(&l, m)
		default:
			p.boundedFigure(&l, m, names)
		}
		p.plan.Limits = append(p.plan.Limits, l)
	}
	for _, e := range p.entries(p.variant.Node("bounds"), "bounds") {
		if !clauses[e.Key.Text()] {
			p.add(e.Key.Span, "unknown-clause", "", "no limit has the clause %s", e.Key.Text())
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
	if !m.Has("require") {
		return
	}
	l.Require = m.Text("require")
	compiled, problems := limits.Compile(place(m, "require"), p.figures)
	if len(problems) > 0 {
		p.problems = append(p.problems, problems...)
		return
	}
	if len(compiled.Figures()) == 0 {
		p.add(m.ValueSpan("require"), "no-figure", "", "the requirement names no figure")
	}
	l.parts = []limitPart{{limit: compiled}}
}

// boundedFigure makes a structured limit.
func (p *planner) boundedFigure(l *Limit, m document.Map, names []string) {
	name := m.Text("figure")
	if name == "" {
		return
	}
	if !slices.Contains(names, name) {
		p.add(m.ValueSpan("figure"), "unknown-figure", source.DidYouMean(name, names), "unknown figure %q", name)
		return
	}
	key := ""
	for _, k := range []string{"at-most", "at-least", "between"} {
		if m.Stands(k) {
			if key != "" {
				p.add(m.KeySpan(k), "wrong-limit", "for both, write between: LOW HIGH UNIT", "the limit of clause %s has two bounds", l.Clause)
				return
			}
			key = k
		}
	}
	if key == "" {
		p.add(l.Span, "wrong-limit", "give at-most, at-least or between", "the limit of clause %s has no bound", l.Clause)
		return
	}
	f := p.planned(name)
	if f == nil {
		return
	}
	node := m.Node(key)
	for _, e := range p.entries(p.variant.Node("bounds"), "bounds") {
		if e.Key.Text() == l.Clause {
			if other := e.Value.Value(key); other != nil {
				node = other
			} else {
				p.add(e.Key.Span, "wrong-limit", "", "clause %s is bounded by %s; the variant gives none", l.Clause, key)
			}
		}
	}
	at := p.conditions(m)
	for _, c := range at {
		if !slices.Contains(f.labels, c.name) {
			p.add(m.ValueSpan("at"), "no-label", source.DidYouMean(c.name, f.labels), "figure %s has no label %q", name, c.name)
			return
		}
	}
	if !m.Has("per") {
		l.Require = fmt.Sprintf("%s %s %s", name, strings.ReplaceAll(key, "-", " "), node.Text())
		p.boundPart(l, f, key, node, at)
		return
	}
	p.boundsPer(l, f, m, key, node, at)
}

func (p *planner) planned(name string) *Figure {
	for i := range p.plan.Figures {
		if p.plan.Figures[i].Name == name {
			return &p.plan.Figures[i]
		}
	}
	return nil
}

// boundsPer reads `per: temperature` with bounds by its value.
func (p *planner) boundsPer(l *Limit, f *Figure, m document.Map, key string, node *document.Node, at []condition) {
	per := m.Text("per")
	if !slices.Contains(f.labels, per) {
		p.add(m.ValueSpan("per"), "no-label", source.DidYouMean(per, f.labels), "figure %s has no label %q", f.Name, per)
		return
	}
	var said []string
	covered := map[string]bool{}
	for _, e := range p.entries(node, key) {
		v, err := quantity.Parse(e.Key.Text())
		if err != nil {
			p.add(e.Key.Span, "wrong-value", "", "%s per %s: %v", key, per, err)
			continue
		}
		c := append(slices.Clone(at), condition{name: per, value: v})
		for _, element := range f.Elements {
			if !slices.ContainsFunc(c, func(c condition) bool { return !c.fits(element.Labels) }) {
				covered[elementKey(element.Labels, true)] = true
			}
		}
		said = append(said, fmt.Sprintf("%s at %s", e.Value.Text(), v))
		p.boundPart(l, f, key, e.Value, c)
	}
	for _, element := range f.Elements {
		inside := !slices.ContainsFunc(at, func(c condition) bool { return !c.fits(element.Labels) })
		if inside && !covered[elementKey(element.Labels, true)] {
			p.add(m.KeySpan(key), "no-bound", "", "the limit of clause %s has no bound at %s", l.Clause, element.Labels)
			break
		}
	}
	l.Require = fmt.Sprintf("%s %s %s", f.Name, strings.ReplaceAll(key, "-", " "), strings.Join(said, ", "))
}

// part adds bounds for the elements that fit.
func (p *planner) boundPart(l *Limit, f *Figure, key string, node *document.Node, at []condition) {
	if node.Form != document.Scalar {
		p.add(node.Span, "wrong-value", "", "%s: a bound with its unit was expected, this is %s", key, node.Form)
		return
	}
	bounds, err := quantity.ParseList(node.Text())
	if err != nil {
		p.add(node.Span, "wrong-value", "", "%s: %v", key, err)
		return
	}
	want := 1
	if key == "between" {
		want = 2
	}
	if len(bounds) != want {
		p.add(node.Span, "wrong-value", "", "%s: %d bound(s) were expected, %d stand there", key, want, len(bounds))
		return
	}
	numbers := make([]float64, want)
	for i, b := range bounds {
		if numbers[i], err = b.In(f.Unit); err != nil {
			p.add(node.Span, "wrong-dimension", "", "%s: figure %s is in %s: %v", key, f.Name, f.Unit, err)
			return
		}
	}
	low, high := math.Inf(-1), math.Inf(1)
	switch key {
	case "at-most":
		high = numbers[0]
	case "at-least":
		low = numbers[0]
	default:
		low, high = numbers[0], numbers[1]
		if low >= high {
			p.add(node.Span, "wrong-value", "", "between: the lower bound comes first and is below the upper one")
			return
		}
	}
	part := limitPart{limit: limits.Between(f.Name, limits.FigureType{Unit: f.Unit, Labels: f.labels}, low, high, l.Require)}
	if len(at) > 0 {
		part.only = map[string]bool{}
		for _, element := range f.Elements {
			if !slices.ContainsFunc(at, func(c condition) bool { return !c.fits(element.Labels) }) {
				part.only[elementKey(element.Labels, true)] = true
			}
		}
		if len(part.only) == 0 {
			p.add(node.Span, "no-element", "", "figure %s has no element there", f.Name)
		}
	}
	l.parts = append(l.parts, part)
}
