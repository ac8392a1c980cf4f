package procedures

import (
	"regexp"
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

// elementKey is the key of labels, which limits use for an element of a series: nominal values, and visits where they
// are told apart.
func elementKey(labels recording.Labels) string {
	var b strings.Builder
	for i, l := range labels {
		if i > 0 {
			b.WriteString(", ")
		}
		b.WriteString(l.Name + " " + l.Value.String())
		if l.Visit > 0 {
			b.WriteString(" (visit " + strconv.Itoa(l.Visit) + ")")
		}
	}
	return b.String()
}

// planFigures works out every figure: method or formula, unit, elements and their recordings. A figure follows those
// that it leans on, whatever the order in the document.
func (p *planner) planFigures() {
	named := p.procedure.root.Free("figures")
	for _, f := range named {
		p.names = append(p.names, f.Name)
		if !identifier.MatchString(f.Name) || slices.Contains(expressionWords, f.Name) {
			p.add(f.Span, "wrong-name", "letters, digits and _, a letter first, and no word of the expressions' own", "%q cannot name a figure: expressions could not use it", f.Name)
		}
	}
	for _, f := range named {
		is, formula := f.Map.Stands("is"), f.Map.Stands("formula")
		switch {
		case is == formula:
			p.add(f.Span, "wrong-figure", "give one of them", "figure %s is a method of the catalogue (`is`) or computed (`formula`)", f.Name)
		case is:
			method, ok := reduce.Find(f.Map.Text("is"))
			if !ok {
				continue // reported by the table
			}
			figure := Figure{Name: f.Name, Method: method, Span: f.Span}
			p.reduced(&figure, f.Map)
			p.figures[f.Name] = limits.FigureType{Unit: figure.Unit, Labels: figure.labels}
			p.plan.Figures = append(p.plan.Figures, figure)
		}
	}
	for _, f := range named {
		if f.Map.Has("scale-factor") {
			p.scaleFactor(f)
		}
	}
	p.formulas(named)
}

// identifier is what a figure's name must be: in an expression, - is a minus.
var identifier = regexp.MustCompile(`^[A-Za-z][A-Za-z0-9_]*$`)

// expressionWords are names that expressions have for themselves.
var expressionWords = []string{"abs", "min", "max", "mean", "spread", "and", "or", "not", "in", "true", "false", "nil", "let", "if", "else",
	"matches", "contains", "startsWith", "endsWith"}

// unit reads a figure's unit and holds it against the dimension that the method yields.
func (p *planner) unit(f *Figure, m document.Map, want *quantity.Dimension, natural quantity.Unit) quantity.Unit {
	if !m.Stands("unit") {
		if want == nil || *want != quantity.Ratio {
			help, in := "state unit, such as unit: deg/h", ""
			if want != nil {
				help, in = "units that fit: "+fitting(*want), ", of "+want.String()
			}
			p.add(f.Span, "missing-unit", help, "figure %s needs its unit of measure%s", f.Name, in)
		}
		return natural
	}
	if !m.Has("unit") {
		return natural
	}
	unit, err := quantity.ParseUnit(m.Text("unit"))
	if err != nil {
		p.add(m.ValueSpan("unit"), "wrong-value", "", "%v", err)
		return natural
	}
	if want != nil && unit.Dimension() != *want {
		p.add(m.ValueSpan("unit"), "wrong-dimension", "units that fit: "+fitting(*want), "%s is a unit of %s; figure %s is in %s", unit, unit.Dimension(), f.Name, want)
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
var methodKeys = []string{"is", "of", "per", "at", "pick", "unit"}

func (p *planner) reduced(f *Figure, m document.Map) {
	method := f.Method
	dimension := method.Unit.Dimension()
	f.Unit = p.unit(f, m, &dimension, method.Unit)
	for _, key := range figureTable.Names() {
		fits := slices.Contains(methodKeys, key) || slices.Contains(method.Options, key) || key == "over" && slices.Contains(method.Needs, key)
		if m.Stands(key) && !fits && key != "formula" {
			p.add(m.KeySpan(key), "unfit-option", "leave it out", "%s has no option %s", method.Name, key)
		}
	}
	if method.Measurand && !m.Stands("measurand") {
		p.add(f.Span, "missing-measurand", "state measurand: sample or measurand: population", "figure %s: is it the statistic of these samples, or the gyro's parameter? There is no default", f.Name)
	}
	if output := p.plan.Gyro.Output; method.Output != "" && output != "" && method.Output != output {
		p.add(m.ValueSpan("is"), "unfit-method", "", "%s is for gyros with output %s; this one's is %s", method.Name, method.Output, output)
	}
	if slices.Contains(method.Options, "tau") {
		if !m.Stands("tau") {
			p.add(f.Span, "missing-key", "state tau, such as tau: 10 s", "figure %s needs an averaging time", f.Name)
		}
		p.above(m, "tau")
	}
	if m.Stands("least") && m.Text("relative-to") != "reading" {
		p.add(m.KeySpan("least"), "unfit-option", "state relative-to: reading", "least has a meaning only for a nonlinearity relative to reading")
	}
	f.Options = reduce.Options{Measurand: m.Text("measurand"), Tau: m.Quantity("tau").SI(), Relative: m.Text("relative-to"),
		Least: m.Quantity("least").SI(), Unscaled: m.Has("scale")}
	switch {
	case m.Has("of"):
		p.elements(f, m)
	case !m.Stands("of"):
		p.add(f.Span, "missing-key", "name the recordings it is reduced from", "figure %s needs the key \"of\"", f.Name)
	}
}

// scaleFactor checks that the figure named by scale-factor can serve: a scale-factor error, single or a series with
// the labels of the figure that leans on it.
func (p *planner) scaleFactor(n document.Named) {
	f, name, at := p.planned(n.Name), n.Map.Text("scale-factor"), n.Map.ValueSpan("scale-factor")
	if f == nil || !slices.Contains(f.Method.Options, "scale-factor") {
		return
	}
	if !slices.Contains(p.names, name) {
		p.add(at, "unknown-figure", source.DidYouMean(name, p.names), "unknown figure %q", name)
		return
	}
	other := p.planned(name)
	if other == nil || other.Method.Name != "scale-factor-error" {
		p.add(at, "unfit-figure", "name a figure that is: scale-factor-error", "figure %s is no scale-factor error", name)
		return
	}
	if len(other.labels) > 0 && !slices.Equal(other.labels, f.labels) {
		p.add(at, "unfit-figure", "give both the same per", "figure %s is a series over %s, %s is not", name, strings.Join(other.labels, " "), f.Name)
		return
	}
	for _, e := range f.Elements {
		if len(other.labels) > 0 && !slices.ContainsFunc(other.Elements, func(o ElementSpec) bool { return elementKey(o.Labels) == elementKey(e.Labels) }) && !p.partial {
			p.add(at, "unfit-figure", "", "figure %s is not measured at %s", name, e.Labels)
			return
		}
	}
	f.ScaleFactor = name
}

// formulas compiles those figures that are computed, each after those that it names.
func (p *planner) formulas(named []document.Named) {
	waiting := map[string]document.Named{}
	for _, f := range named {
		if f.Map.Stands("formula") && !f.Map.Stands("is") {
			waiting[f.Name] = f
		}
	}
	for _, f := range named {
		if _, ok := waiting[f.Name]; ok {
			p.formulaAfter(f, waiting, nil)
		}
	}
}

var wordPattern = regexp.MustCompile(`[A-Za-z][A-Za-z0-9_]*`)

func (p *planner) formulaAfter(f document.Named, waiting map[string]document.Named, path []string) {
	delete(waiting, f.Name)
	path = append(path, f.Name)
	for _, word := range wordPattern.FindAllString(f.Map.Text("formula"), -1) {
		if slices.Contains(path, word) {
			p.add(f.Map.ValueSpan("formula"), "circular", "", "figure %s leans on itself: %s", word, strings.Join(append(path, word), ", "))
			return
		}
		if other, ok := waiting[word]; ok {
			p.formulaAfter(other, waiting, path)
		}
	}
	p.formula(f)
}

func (p *planner) formula(n document.Named) {
	f, m := Figure{Name: n.Name, Span: n.Span}, n.Map
	for _, key := range figureTable.Names() {
		if m.Stands(key) && key != "formula" && key != "unit" {
			p.add(m.KeySpan(key), "unfit-option", "leave it out", "a formula has no option %s", key)
		}
	}
	f.Unit = p.unit(&f, m, nil, quantity.Unit{})
	if !m.Has("formula") {
		return
	}
	if p.broken(m.Text("formula")) {
		return
	}
	compiled, problems := limits.CompileFormula(p.place(m, "formula"), p.figures)
	if len(problems) > 0 {
		p.report(problems)
		return
	}
	f.Formula, f.labels = compiled, compiled.Labels()
	f.Elements = p.elementsLike(f.labels, compiled.Figures())
	p.figures[f.Name] = limits.FigureType{Unit: f.Unit, Labels: f.labels}
	p.plan.Figures = append(p.plan.Figures, f)
}

// broken says whether an expression names a figure that was refused: that is reported, and no further mistake.
func (p *planner) broken(expression string) bool {
	for _, word := range wordPattern.FindAllString(expression, -1) {
		if _, sound := p.figures[word]; !sound && slices.Contains(p.names, word) {
			return true
		}
	}
	return false
}

// elementsLike: a formula that is a series has the elements of the series that it is over.
func (p *planner) elementsLike(labels, figures []string) []ElementSpec {
	if len(labels) == 0 {
		return []ElementSpec{{noise: none}}
	}
	var list []ElementSpec
	for _, name := range figures {
		if other := p.planned(name); other != nil && slices.Equal(other.labels, labels) {
			for _, e := range other.Elements {
				list = append(list, ElementSpec{Labels: e.Labels, noise: none})
			}
			break
		}
	}
	return list
}

func (p *planner) planned(name string) *Figure { return p.plan.figure(name) }
