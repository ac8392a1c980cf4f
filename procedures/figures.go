package procedures

import (
	"fmt"
	"slices"
	"strconv"
	"strings"

	"proofrate/limits"
	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
	"proofrate/results/recording"
	"proofrate/results/reduce"
)

// recordingKey tells recordings of a run apart: by name and labels, nominal values and visits.
func recordingKey(name string, labels recording.Labels) string {
	return name + "|" + elementKey(labels, true)
}

// elementKey is the key of labels, which limits use for an element of a series.
func elementKey(labels recording.Labels, visits bool) string {
	parts := make([]string, len(labels))
	for i, l := range labels {
		parts[i] = l.Name + " " + l.Value.String()
		if visits && l.Visit > 0 {
			parts[i] += fmt.Sprintf(" (visit %d)", l.Visit)
		}
	}
	return strings.Join(parts, ", ")
}

// figures works out every figure: method or formula, unit, elements and their recordings.
func (p *planner) planFigures() {
	var known []string
	named := p.procedure.root.Free("figures")
	for _, f := range named {
		known = append(known, f.Name)
	}
	for _, f := range named {
		figure := Figure{Name: f.Name, Span: f.Span}
		is, formula := f.Map.Stands("is"), f.Map.Stands("formula")
		switch {
		case is == formula:
			p.add(f.Span, "wrong-figure", "give one of them", "figure %s is a method of the catalogue (`is`) or computed (`formula`)", f.Name)
			p.figures[f.Name] = limits.FigureType{}
			continue
		case formula:
			p.formula(&figure, f.Map)
		default:
			p.reduced(&figure, f.Map, known)
		}
		p.figures[f.Name] = limits.FigureType{Unit: figure.Unit, Labels: figure.labels}
		p.plan.Figures = append(p.plan.Figures, figure)
	}
	p.scaleFactors(named)
}

// unit reads a figure's unit and holds it against the dimension that the method yields.
func (p *planner) unit(m document.Map, want *quantity.Dimension, natural quantity.Unit) quantity.Unit {
	if !m.Has("unit") {
		if want != nil && *want != quantity.Ratio {
			p.add(m.Span, "missing-key", "state unit, such as "+fitting(*want), "a figure in %s needs its unit of measure", want)
		}
		return natural
	}
	unit, err := quantity.ParseUnit(m.Text("unit"))
	if err != nil {
		p.add(m.ValueSpan("unit"), "wrong-value", "", "%v", err)
		return natural
	}
	if want != nil && unit.Dimension() != *want {
		p.add(m.ValueSpan("unit"), "wrong-dimension", "units that fit: "+fitting(*want), "%s is a unit of %s; this figure is in %s", unit, unit.Dimension(), want)
		return natural
	}
	return unit
}

func fitting(d quantity.Dimension) string {
	var names []string
	for _, u := range d.Units() {
		names = append(names, u.String())
	}
	return strings.Join(names, ", ")
}

// methodKeys are the keys of a reduced figure that every method has; others need the method's leave.
var methodKeys = []string{"is", "of", "per", "over", "at", "pick", "unit"}

func (p *planner) reduced(f *Figure, m document.Map, figures []string) {
	method, ok := reduce.Find(m.Text("is"))
	if !ok {
		return // reported by the table
	}
	f.Method = method
	dimension := method.Unit.Dimension()
	f.Unit = p.unit(m, &dimension, method.Unit)
	for _, key := range figureTable.Names() {
		if m.Stands(key) && !slices.Contains(methodKeys, key) && !slices.Contains(method.Options, key) {
			p.add(m.KeySpan(key), "unfit-option", "leave it out", "%s has no option %s", method.Name, key)
		}
	}
	if method.Measurand && !m.Has("measurand") {
		p.add(f.Span, "missing-measurand", "state measurand: sample or measurand: population", "figure %s: is it the statistic of these samples, or the gyro's parameter?", f.Name)
	}
	if method.Output != "" && method.Output != p.plan.Gyro.Output {
		p.add(m.ValueSpan("is"), "unfit-method", "", "%s is for gyros with output %s; this one's is %s", method.Name, method.Output, p.plan.Gyro.Output)
	}
	if slices.Contains(method.Options, "tau") && !m.Has("tau") {
		p.add(f.Span, "missing-key", "state tau, such as tau: 10 s", "figure %s needs an averaging time", f.Name)
	}
	f.options = reduce.Options{Measurand: m.Text("measurand"), Tau: m.Quantity("tau").SI(), Relative: m.Text("relative-to"),
		Least: m.Quantity("least").SI(), Unscaled: m.Has("scale")}
	f.scaleFactor = m.Text("scale-factor")
	if m.Has("scale-factor") && !slices.Contains(figures, f.scaleFactor) {
		p.add(m.ValueSpan("scale-factor"), "unknown-figure", source.DidYouMean(f.scaleFactor, figures), "unknown figure %q", f.scaleFactor)
		f.scaleFactor = ""
	}
	p.noise(f, m)
	if !m.Has("of") {
		p.add(f.Span, "missing-key", "name the recordings it is reduced from", "figure %s needs the key \"of\"", f.Name)
		return
	}
	p.elements(f, m)
}

// noise checks the recording that a figure's noise is taken from: without one, its uncertainty could not be told.
func (p *planner) noise(f *Figure, m document.Map) {
	f.noise = m.Text("noise")
	if !slices.Contains(f.Method.Options, "noise") {
		return
	}
	if !m.Has("noise") {
		p.add(f.Span, "missing-key", "state noise: with the name of a recording at rest", "figure %s needs a recording at rest from which the gyro's noise is taken", f.Name)
		return
	}
	var names []string
	for _, e := range p.plan.expected {
		if e.name == f.noise {
			return
		}
		names = append(names, e.name)
	}
	p.add(m.ValueSpan("noise"), "no-recording", source.DidYouMean(f.noise, names), "no step makes a recording %q", f.noise)
}

// selector is one label of `per`, with whether its visits are told apart.
type selector struct {
	name  string
	visit bool
}

// selectors reads `per: temperature visit`.
func (p *planner) selectors(m document.Map, key string) []selector {
	var list []selector
	for _, word := range m.Words(key) {
		if word != "visit" {
			list = append(list, selector{name: word})
			continue
		}
		if len(list) == 0 {
			p.add(m.ValueSpan(key), "wrong-value", "write the label first, as in temperature visit", "%s: visit follows the label whose visits it tells apart", key)
			continue
		}
		list[len(list)-1].visit = true
	}
	return list
}

// condition is one entry of `at:`.
type condition struct {
	name  string
	value quantity.Value
	visit int // 0: any
}

// conditions reads `at: {temperature: 23 degC, visit: 1}`; visit belongs to the label before it.
func (p *planner) conditions(m document.Map) []condition {
	var list []condition
	for _, e := range p.entries(m.Node("at"), "at") {
		if e.Key.Text() == "visit" {
			n, err := strconv.Atoi(e.Value.Text())
			if err != nil || n < 1 || len(list) == 0 {
				p.add(e.Key.Span, "wrong-value", "write {temperature: 23 degC, visit: 1}", "visit is a number from 1 and follows its label")
				continue
			}
			list[len(list)-1].visit = n
			continue
		}
		v, err := quantity.Parse(e.Value.Text())
		if err != nil {
			p.add(e.Value.Span, "wrong-value", "", "at %s: %v", e.Key.Text(), err)
			continue
		}
		list = append(list, condition{name: e.Key.Text(), value: v})
	}
	return list
}

func (c condition) fits(labels recording.Labels) bool {
	l, ok := labels.Find(c.name)
	return ok && l.Value.Same(c.value) && (c.visit == 0 || c.visit == l.Visit)
}

// elements groups the expected recordings of a figure.
func (p *planner) elements(f *Figure, m document.Map) {
	of := m.Text("of")
	f.recordings = []string{of}
	var all []int
	var names []string
	for i, e := range p.plan.expected {
		if e.name == of {
			all = append(all, i)
		}
		if !slices.Contains(names, e.name) {
			names = append(names, e.name)
		}
	}
	if len(all) == 0 {
		p.add(m.ValueSpan("of"), "no-recording", source.DidYouMean(of, names), "no step makes a recording %q", of)
		return
	}
	per, over := p.selectors(m, "per"), p.selectors(m, "over")
	conditions := p.conditions(m)
	if !p.labelled(m, all, per, over, conditions) {
		return
	}
	groups := map[string]int{}
	for _, i := range all {
		labels := p.plan.expected[i].labels
		if slices.ContainsFunc(conditions, func(c condition) bool { return !c.fits(labels) }) {
			continue
		}
		element := elementLabels(labels, per)
		key := elementKey(element, true)
		at, known := groups[key]
		if !known {
			at = len(f.Elements)
			groups[key] = at
			f.Elements = append(f.Elements, ElementSpec{Labels: element})
		}
		f.Elements[at].recordings = append(f.Elements[at].recordings, i)
	}
	for _, s := range per {
		f.labels = append(f.labels, s.name)
		if s.visit {
			f.labels = append(f.labels, s.name+" visit")
		}
	}
	if len(f.Elements) == 0 {
		p.add(m.KeySpan("at"), "no-recording", "", "no recording %q is made at that", of)
	}
	for i := range f.Elements {
		p.chosen(f, &f.Elements[i], m)
	}
}

// elementLabels are the labels of `per`, with a visit only where it is told apart.
func elementLabels(labels recording.Labels, per []selector) recording.Labels {
	var list recording.Labels
	for _, s := range per {
		l, _ := labels.Find(s.name)
		if !s.visit {
			l.Visit = 0
		}
		list = append(list, l)
	}
	return list
}

// labelled checks that the recordings carry every label that the figure asks for.
func (p *planner) labelled(m document.Map, all []int, per, over []selector, conditions []condition) bool {
	var known []string
	for _, l := range p.plan.expected[all[0]].labels {
		known = append(known, l.Name)
	}
	sound := true
	check := func(span source.Span, name string) {
		if slices.Contains(known, name) {
			return
		}
		sound = false
		help := source.DidYouMean(name, known)
		if len(known) == 0 {
			help = "it is made in no loop"
		}
		p.add(span, "no-label", help, "recording %q has no label %q", m.Text("of"), name)
	}
	for _, s := range per {
		check(m.ValueSpan("per"), s.name)
	}
	for _, s := range over {
		check(m.ValueSpan("over"), s.name)
	}
	for _, c := range conditions {
		check(m.ValueSpan("at"), c.name)
	}
	if method, ok := reduce.Find(m.Text("is")); ok {
		for _, need := range method.Needs {
			if need == "over" {
				if len(over) == 0 {
					p.add(m.KeySpan("is"), "missing-key", "say over which label, as in over: cycle", "%s needs the key \"over\"", method.Name)
					sound = false
				}
				continue
			}
			check(m.ValueSpan("of"), need)
		}
	}
	return sound
}

// chosen holds the number of recordings of an element against what the method takes.
func (p *planner) chosen(f *Figure, e *ElementSpec, m document.Map) {
	n := len(e.recordings)
	where := ""
	if len(e.Labels) > 0 {
		where = " at " + e.Labels.String()
	}
	switch {
	case f.Method.Several && n < 2:
		p.add(m.ValueSpan("of"), "too-few", "", "%s needs several recordings; %q has %d%s", f.Method.Name, m.Text("of"), n, where)
	case !f.Method.Several && n > 1 && m.Text("pick") == "first":
		e.recordings = e.recordings[:1]
	case !f.Method.Several && n > 1 && m.Text("pick") == "last":
		e.recordings = e.recordings[n-1:]
	case !f.Method.Several && n > 1:
		key := "of"
		if m.Stands("at") {
			key = "at"
		}
		p.add(m.ValueSpan(key), "ambiguous", "name the visit, make it a series with per, or pick: first or last", "%d recordings %q fit%s; %s takes one", n, m.Text("of"), where, f.Method.Name)
	}
}

func (p *planner) formula(f *Figure, m document.Map) {
	for _, key := range figureTable.Names() {
		if m.Stands(key) && key != "formula" && key != "unit" {
			p.add(m.KeySpan(key), "unfit-option", "leave it out", "a formula has no option %s", key)
		}
	}
	f.Unit = p.unit(m, nil, quantity.Unit{})
	if !m.Has("formula") {
		return
	}
	compiled, problems := limits.CompileFormula(place(m, "formula"), p.figures)
	if len(problems) > 0 {
		p.problems = append(p.problems, problems...)
		return
	}
	f.formula, f.labels = compiled, compiled.Labels()
	for _, name := range compiled.Figures() {
		f.Elements = p.elementsOf(f, name)
	}
}

// elementsOf: a formula that is a series has the elements of the series it is over.
func (p *planner) elementsOf(f *Figure, name string) []ElementSpec {
	if len(f.labels) == 0 {
		return []ElementSpec{{}}
	}
	for _, other := range p.plan.Figures {
		if other.Name == name && slices.Equal(other.labels, f.labels) {
			var list []ElementSpec
			for _, e := range other.Elements {
				list = append(list, ElementSpec{Labels: e.Labels})
			}
			return list
		}
	}
	return f.Elements
}

// scaleFactors checks that a figure named by scale-factor is one, with the same series.
func (p *planner) scaleFactors(named []document.Named) {
	for i, f := range p.plan.Figures {
		if f.scaleFactor == "" {
			continue
		}
		for _, other := range p.plan.Figures {
			if other.Name != f.scaleFactor {
				continue
			}
			var span source.Span
			for _, n := range named {
				if n.Name == f.Name {
					span = n.Map.ValueSpan("scale-factor")
				}
			}
			if other.Method.Name != "scale-factor-error" || len(other.labels) > 0 && !slices.Equal(other.labels, p.plan.Figures[i].labels) {
				p.add(span, "unfit-figure", "name a scale-factor-error that is single, or a series over the same labels", "figure %s cannot serve as scale factor here", other.Name)
			}
		}
	}
}
