package procedures

import (
	"slices"
	"strings"

	"proofrate/instruments"
	"proofrate/limits"
	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// planner makes one plan and gathers what is wrong.
type planner struct {
	procedure *Procedure
	plan      *Plan
	variant   document.Map
	problems  source.List
	spans     map[string]source.Span // of the parameters
	seen      map[string]bool        // recordings, by key
	reported  map[string]bool        // diagnostics, so that a loop reports a mistake once
	figures   map[string]limits.FigureType
}

// Plan works a procedure out for a part and its parameters: loops unrolled, figures and limits resolved. It finds every
// mistake that can be found without a bench.
func (p *Procedure) Plan(o Options) (*Plan, source.List) {
	w := &planner{procedure: p, seen: map[string]bool{}, reported: map[string]bool{}, figures: map[string]limits.FigureType{}}
	root := p.root
	w.plan = &Plan{Name: p.Name, Title: root.Text("title"), Revision: root.Text("revision"), Specification: root.Text("specification"),
		Digest: p.Digest, Text: p.text, File: p.file, Part: o.Part}
	w.part(o.Part)
	w.gyro()
	w.needs()
	s := w.parameters(o)
	w.guards()
	w.unroll(s)
	for _, name := range s.names {
		if span, own := w.spans[name]; own && !s.used[name] {
			w.add(span, "unused-parameter", "use it in a step, or leave it out", "parameter %q is used nowhere", name)
		}
	}
	w.planFigures()
	w.planLimits()
	w.problems.Sort()
	if len(w.problems) > 0 {
		return nil, w.problems
	}
	return w.plan, nil
}

// add reports a mistake, once however often a loop comes by it.
func (p *planner) add(span source.Span, code, help, format string, args ...any) {
	var one source.List
	one.Addf(span, code, help, format, args...)
	key := one[0].Message + one[0].Span.File + string(rune(one[0].Span.Start))
	if !p.reported[key] {
		p.reported[key] = true
		p.problems = append(p.problems, one...)
	}
}

// top is the place of what concerns the document as a whole.
func (p *planner) top() source.Span { return p.procedure.root.KeySpan("procedure") }

// part checks that the procedure is for the part and finds its variant.
func (p *planner) part(part string) {
	root := p.procedure.root
	variants := p.entries(root.Node("variants"), "variants")
	if part != "" && !p.procedure.applies(part) {
		p.add(root.ValueSpan("applies-to"), "wrong-part", "", "the procedure is not for part %q; it applies to %s", part, strings.Join(root.Words("applies-to"), ", "))
	}
	var names []string
	for _, v := range variants {
		names = append(names, v.Key.Text())
		decoded := document.Decode(v.Value, &variantTable, &p.problems)
		if v.Key.Text() == part {
			p.variant = decoded
		}
	}
	if part != "" && len(variants) > 0 && !slices.Contains(names, part) {
		p.add(root.KeySpan("variants"), "no-variant", source.DidYouMean(part, names), "part %q has no variant", part)
	}
}

func (p *planner) gyro() {
	g := p.procedure.root.Map("gyro")
	polarity := 1.0
	if g.Text("polarity") == "-" {
		polarity = -1
	}
	p.plan.Gyro = GyroSpec{Family: g.Text("family"), Output: g.Text("output"), Range: g.Quantity("range"), SampleRate: g.Quantity("sample-rate"),
		Polarity: polarity, AccelerationSensitivity: g.Quantity("acceleration-sensitivity")}
	for _, key := range []string{"range", "sample-rate"} {
		if g.Has(key) && g.Quantity(key).Number <= 0 {
			p.add(g.ValueSpan(key), "wrong-value", "", "%s: more than zero was expected", key)
		}
	}
}

func (p *planner) needs() {
	n := p.procedure.root.Map("needs")
	p.plan.Needs = Needs{TableRate: n.Quantity("table"), Table: n.Has("table"), Voltage: n.Quantity("supply"), Current: n.Quantity("current")}
	if !n.Has("chamber") {
		return
	}
	span := n.Quantities("chamber")
	if len(span) != 2 || span[0].Number > span[1].Number {
		p.add(n.ValueSpan("chamber"), "wrong-value", "", "chamber: the lowest and the highest temperature were expected, as in -40 71 degC")
		return
	}
	p.plan.Needs.Chamber, p.plan.Needs.ChamberLow, p.plan.Needs.ChamberHigh = true, span[0], span[1]
}

// place is where an expression stands in the document.
func place(m document.Map, key string) limits.Place {
	span := m.ValueSpan(key)
	if n := m.Node(key); n != nil && n.Quoted {
		span.Start++
		span.End = max(span.Start, span.End-1)
	}
	return limits.Place{Span: span, Text: m.Text(key)}
}

// guards compiles them and decides of each whether it is the bench's or a slot's.
func (p *planner) guards() {
	var known []string
	for _, kind := range instruments.ReadingKinds {
		known = append(known, kind.Name)
	}
	for _, g := range p.procedure.root.List("guards") {
		if !g.Has("require") {
			continue
		}
		at := place(g, "require")
		check, problems := limits.CompileGuard(at, append(slices.Clone(known), meters(at.Text)...))
		if len(problems) > 0 {
			p.problems = append(p.problems, problems...)
			continue
		}
		guard := Guard{Text: at.Text, Span: at.Span, Check: check, Bench: true, Tolerate: duration(g.Quantity("tolerate"))}
		bench, slot := 0, 0
		for _, name := range check.Readings() {
			if kind, _ := instruments.ReadingOf(name); kind.Bench {
				bench++
			} else {
				slot++
			}
		}
		guard.Bench = slot == 0
		if bench > 0 && slot > 0 {
			p.add(at.Span, "mixed-guard", "write two guards", "a guard is over a slot's readings or over the bench's, not both")
		}
		if bench+slot == 0 {
			p.add(at.Span, "no-reading", "", "the guard names no reading")
		}
		p.plan.Guards = append(p.plan.Guards, guard)
	}
}

// meters are names that can be a meter's reading; whether the bench has that meter is for CheckBench.
func meters(text string) []string {
	var names []string
	for _, word := range strings.FieldsFunc(text, func(r rune) bool { return !(r == '.' || r == '_' || r >= '0' && r <= '9' || r >= 'A' && r <= 'z') }) {
		if kind, ok := instruments.ReadingOf(word); ok && kind.Unit == (quantity.Unit{}) {
			names = append(names, word)
		}
	}
	return names
}
