package procedures

import (
	"maps"
	"math"
	"regexp"
	"slices"
	"strconv"
	"time"

	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// scope holds the names that a value may be: parameters, and the variables of the loops around it.
type scope struct {
	names  []string
	values map[string]quantity.Value
	broken map[string]bool // names that stand there and were refused: using one is no further mistake
	used   map[string]bool // shared by all scopes of a plan
}

// with adds a name.
func (s scope) with(name string, v quantity.Value) scope {
	inner := scope{names: append(slices.Clone(s.names), name), values: maps.Clone(s.values), broken: s.broken, used: s.used}
	inner.values[name] = v
	return inner
}

// without adds a name whose values were refused.
func (s scope) without(name string) scope {
	s.broken = maps.Clone(s.broken)
	s.broken[name] = true
	return s
}

var variablePattern = regexp.MustCompile(`^[A-Za-z][A-Za-z0-9_-]*$`)

// value resolves a node to a quantity of a dimension: a literal, a variable or a parameter. The second result is false
// when it was refused.
func (p *planner) value(n *document.Node, key string, want quantity.Dimension, s scope) (quantity.Value, bool) {
	if n == nil {
		return quantity.Value{}, false
	}
	if n.Form != document.Scalar {
		p.add(n.Span, "wrong-value", "", "%s: %s was expected, this is %s", key, aQuantity(want), n.Form)
		return quantity.Value{}, false
	}
	if variablePattern.MatchString(n.Text()) {
		v, known := s.values[n.Text()]
		if s.broken[n.Text()] {
			s.used[n.Text()] = true
			return quantity.Value{}, false
		}
		if !known {
			p.add(n.Span, "unknown-name", source.DidYouMean(n.Text(), s.names), "%s: %q is neither a quantity nor a loop's variable nor a parameter", key, n.Text())
			return v, false
		}
		s.used[n.Text()] = true
		if v.Dimension() != want {
			p.add(n.Span, "wrong-dimension", "", "%s: %s is %s, %s was expected", key, n.Text(), v, aQuantity(want))
			return v, false
		}
		return v, true
	}
	v, err := quantity.ParseAs(n.Text(), want)
	if err != nil {
		p.add(n.Span, "wrong-value", "", "%s: %v", key, err)
		return v, false
	}
	return v, true
}

func aQuantity(d quantity.Dimension) string {
	name := d.String()
	article := "a "
	if name[0] == 'a' {
		article = "an "
	}
	return article + name
}

// length resolves a time that must not be negative. The second result is false when it was refused.
func (p *planner) length(n *document.Node, key string, s scope) (time.Duration, bool) {
	v, ok := p.value(n, key, quantity.Time, s)
	if !ok {
		return 0, false
	}
	if v.SI() < 0 || v.SI() > benchSecondsMax {
		p.add(n.Span, "wrong-value", "", "%s: %s; a time from 0 to %d days was expected", key, v, benchSecondsMax/86400)
		return 0, false
	}
	return duration(v), true
}

func duration(v quantity.Value) time.Duration {
	return time.Duration(math.Round(v.SI() * float64(time.Second)))
}

// Bounds of a plan.
const (
	stepsMax        = 10_000
	stepsOfAllMax   = 100_000 // over all variants, which Load plans
	repeatsMax      = 10_000
	benchSecondsMax = 90 * 86400
)

// count resolves a whole number from 1 to most.
func (p *planner) count(n *document.Node, key string, most int, s scope) int {
	if n == nil {
		return 0
	}
	if n.Form == document.Scalar {
		if s.broken[n.Text()] {
			s.used[n.Text()] = true
			return 0
		}
		if v, known := s.values[n.Text()]; known && v.Dimension() == quantity.Ratio && v.Number == math.Trunc(v.Number) && v.Number >= 1 && v.Number <= float64(most) {
			s.used[n.Text()] = true
			return int(v.Number)
		}
		if i, err := strconv.Atoi(n.Text()); err == nil && i >= 1 && i <= most {
			return i
		}
	}
	p.add(n.Span, "wrong-value", "", "%s: a whole number from 1 to %d was expected", key, most)
	return 0
}

// parameters reads the procedure's, the variant's and those set for the run.
func (p *planner) parameters(o Options) {
	s := scope{values: map[string]quantity.Value{}, broken: map[string]bool{}, used: map[string]bool{}}
	p.spans = map[string]source.Span{}
	for _, e := range p.entries(p.procedure.root.Node("parameters"), "parameters") {
		v, ok := p.parameter(e)
		if !ok {
			s.broken[e.Key.Text()] = true
			continue
		}
		p.spans[e.Key.Text()] = e.Key.Span
		s = s.with(e.Key.Text(), v)
		p.plan.Parameters = append(p.plan.Parameters, Parameter{Name: e.Key.Text(), Value: v})
	}
	for _, e := range p.entries(p.variant.Node("parameters"), "parameters of the variant") {
		if v, ok := p.parameter(e); ok && !s.broken[e.Key.Text()] {
			p.override(e.Key.Text(), v, e.Key.Span, s, false)
		}
	}
	for _, name := range slices.Sorted(maps.Keys(o.Parameters)) {
		v, err := quantity.Parse(o.Parameters[name])
		if err != nil {
			p.add(p.top(), "wrong-value", "", "--set %s: %v", name, err)
			continue
		}
		p.override(name, v, p.top(), s, true)
	}
	p.scope = s
}

func (p *planner) parameter(e document.Entry) (quantity.Value, bool) {
	if !variablePattern.MatchString(e.Key.Text()) {
		p.add(e.Key.Span, "wrong-name", "a name is letters, digits, - and _, a letter first", "parameters: %q is no name", e.Key.Text())
		return quantity.Value{}, false
	}
	if e.Value.Form != document.Scalar {
		p.add(e.Value.Span, "wrong-value", "", "parameter %s: a quantity was expected, this is %s", e.Key.Text(), e.Value.Form)
		return quantity.Value{}, false
	}
	v, err := quantity.Parse(e.Value.Text())
	if err != nil {
		p.add(e.Value.Span, "wrong-value", "", "parameter %s: %v", e.Key.Text(), err)
	}
	return v, err == nil
}

// override gives a parameter another value of its dimension.
func (p *planner) override(name string, v quantity.Value, at source.Span, s scope, set bool) {
	i := slices.IndexFunc(p.plan.Parameters, func(q Parameter) bool { return q.Name == name })
	who := "variant"
	if set {
		who = "--set " + name
	}
	switch {
	case i < 0:
		p.add(at, "unknown-parameter", source.DidYouMean(name, s.names), "%s: the procedure has no parameter %q", who, name)
	case v.Dimension() != p.plan.Parameters[i].Value.Dimension():
		p.add(at, "wrong-dimension", "", "%s: parameter %s is %s, %s was given", who, name, aQuantity(p.plan.Parameters[i].Value.Dimension()), v)
	default:
		p.plan.Parameters[i].Value, p.plan.Parameters[i].Overridden = v, p.plan.Parameters[i].Overridden || set
		s.values[name] = v
	}
}

// entries are a map's; what is no map is reported.
func (p *planner) entries(n *document.Node, what string) []document.Entry {
	if n == nil {
		return nil
	}
	if n.Form != document.Mapping {
		p.add(n.Span, "wrong-form", "", "%s: a map was expected, this is %s", what, n.Form)
		return nil
	}
	return n.Entries()
}
