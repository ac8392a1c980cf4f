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
	findings
	procedure *Procedure
	plan      *Plan
	variant   document.Map
	scope     scope                        // the parameters
	spans     map[string]source.Span       // of the parameters
	places    map[finding]bool             // with a mistake of a kind, while loops are unrolled
	seen      map[string]bool              // recordings, by key
	figures   map[string]limits.FigureType // worked out so far
	names     []string                     // of all figures
	unrolled  int                          // unrolled
	unrolling bool                         // steps are being unrolled: a loop comes by a mistake more than once
	refused   bool                         // there are mistakes in the steps
	partial   bool                         // some steps are not in the plan, for mistakes that are reported
}

// Plan works a procedure out for a part and its parameters: loops unrolled, figures and limits resolved. It finds every
// mistake that can be found without a bench.
func (p *Procedure) Plan(o Options) (*Plan, source.List) {
	w := p.plan(o)
	if len(w.list) > 0 {
		return nil, w.list
	}
	return w.plan, nil
}

func (p *Procedure) plan(o Options) *planner {
	w := &planner{procedure: p, seen: map[string]bool{}, places: map[finding]bool{}, figures: map[string]limits.FigureType{}}
	root := p.root
	w.plan = &Plan{Name: p.Name, Title: root.Text("title"), Revision: root.Text("revision"), Specification: root.Text("specification"),
		Digest: p.Digest, Text: p.text, File: p.file, Part: o.Part}
	w.plan.places = map[string]source.Span{"needs": root.KeySpan("needs"), "gyro": root.KeySpan("gyro")}
	w.part(o.Part)
	w.gyro()
	w.needs()
	w.parameters(o)
	w.guards()
	w.unroll()
	w.planFigures()
	w.planLimits()
	for _, q := range w.plan.Parameters {
		if !w.scope.used[q.Name] && !w.refused {
			w.add(w.spans[q.Name], "unused-parameter", "use it in a step or a bound, or leave it out", "parameter %q is used nowhere", q.Name)
		}
	}
	w.list.Sort()
	return w
}

// add reports a mistake; while loops are unrolled, one of a kind for each place.
func (p *planner) add(span source.Span, code, help, format string, args ...any) {
	if !p.unrolling {
		p.findings.add(span, code, help, format, args...)
		return
	}
	if key := (finding{span, code}); !p.places[key] {
		p.places[key] = true
		p.findings.add(span, code, help, format, args...)
	}
}

// top is the place of what concerns the document as a whole.
func (p *planner) top() source.Span { return p.procedure.root.KeySpan("procedure") }

// part checks that the procedure is for the part and finds its variant.
func (p *planner) part(part string) {
	root := p.procedure.root
	variants := p.entries(root.Node("variants"), "variants")
	var names []string
	at := root.ValueSpan("applies-to")
	for _, v := range variants {
		names = append(names, v.Key.Text())
		var problems source.List
		decoded := document.Decode(v.Value, &variantTable, &problems)
		p.report(problems)
		if v.Key.Text() == part {
			p.variant, at = decoded, v.Key.Span
		}
	}
	switch {
	case part == "":
	case root.Has("applies-to") && !p.procedure.applies(part):
		p.add(at, "wrong-part", "", "the procedure is not for part %q; it applies to %s", part, strings.Join(root.Words("applies-to"), ", "))
	case len(variants) > 0 && !slices.Contains(names, part):
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
	p.above(g, "range", "sample-rate")
	if g.Has("acceleration-sensitivity") && g.Quantity("acceleration-sensitivity").Number < 0 {
		p.add(g.ValueSpan("acceleration-sensitivity"), "wrong-value", "", "acceleration-sensitivity: a standard uncertainty is not below zero")
	}
}

// above holds that quantities are more than zero.
func (p *planner) above(m document.Map, keys ...string) {
	for _, key := range keys {
		if m.Has(key) && m.Quantity(key).Number <= 0 {
			p.add(m.ValueSpan(key), "wrong-value", "", "%s: more than zero was expected", key)
		}
	}
}

func (p *planner) needs() {
	n := p.procedure.root.Map("needs")
	p.plan.Needs = Needs{TableRate: n.Quantity("table"), Table: n.Has("table"), Voltage: n.Quantity("supply"), Current: n.Quantity("current")}
	p.above(n, "table", "supply", "current")
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

// place is where an expression stands in the document, with its text as it stands there: what YAML folds together
// would shift the positions inside.
func (p *planner) place(m document.Map, key string) limits.Place {
	span, n := m.ValueSpan(key), m.Node(key)
	if n.Quoted {
		span.Start++
		span.End = max(span.Start, span.End-1)
		return limits.Place{Span: span, Text: n.Text()}
	}
	raw := string(p.plan.File.Text[span.Start:span.End])
	if strings.Join(strings.Fields(raw), " ") != n.Text() {
		raw = n.Text()
	}
	return limits.Place{Span: span, Text: raw}
}

// guards compiles them and decides of each whether it is the bench's or a slot's.
func (p *planner) guards() {
	for _, g := range p.procedure.root.List("guards") {
		if g.Has("tolerate") && g.Quantity("tolerate").Number < 0 {
			p.add(g.ValueSpan("tolerate"), "wrong-value", "", "tolerate: a time is not below zero")
		}
		if !g.Has("require") {
			continue
		}
		at := p.place(g, "require")
		check, problems := limits.CompileGuard(at, append(readingNames(), meters(at.Text)...))
		if len(problems) > 0 {
			p.report(problems)
			continue
		}
		guard := Guard{Text: g.Text("require"), Span: at.Span, Check: check, Tolerate: duration(g.Quantity("tolerate"))}
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
			p.add(at.Span, "no-reading", "known here: "+strings.Join(readingNames(), ", "), "the guard names no reading")
		}
		p.plan.Guards = append(p.plan.Guards, guard)
	}
}

func readingNames() []string {
	names := make([]string, len(instruments.ReadingKinds))
	for i, kind := range instruments.ReadingKinds {
		names[i] = kind.Name
	}
	return names
}

// meters are names in an expression that can be a meter's reading; whether the bench has that meter is for CheckBench.
func meters(text string) []string {
	var names []string
	for _, word := range strings.FieldsFunc(text, func(r rune) bool { return !(r == '.' || r == '_' || r >= '0' && r <= '9' || r >= 'A' && r <= 'z') }) {
		if kind, ok := instruments.ReadingOf(word); ok && kind.Unit == (quantity.Unit{}) && !slices.Contains(readingNames(), word) {
			names = append(names, word)
		}
	}
	return names
}
