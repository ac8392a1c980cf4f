package procedures

import (
	"regexp"
	"slices"
	"strconv"

	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
	"proofrate/results/recording"
)

// selector is one label of `per`, with whether its visits are told apart.
type selector struct {
	name  string
	visit bool
}

// String is the selector as `per` has it.
func (s selector) String() string {
	if s.visit {
		return s.name + " visit"
	}
	return s.name
}

// selectors reads `per: temperature visit`. The second result is false when it was refused.
func (p *planner) selectors(m document.Map, key string) ([]selector, bool) {
	var list []selector
	sound := m.Has(key) || !m.Stands(key)
	for _, word := range m.Words(key) {
		switch {
		case word == "visit" && len(list) == 0:
			p.add(p.wordSpan(m, key, word), "wrong-value", "write the label first, as in temperature visit", "%s: visit follows the label whose visits it tells apart", key)
			sound = false
		case word == "visit":
			list[len(list)-1].visit = true
		case slices.ContainsFunc(list, func(s selector) bool { return s.name == word }):
			p.add(m.ValueSpan(key), "duplicate-name", "", "%s: %q stands here twice", key, word)
			sound = false
		default:
			list = append(list, selector{name: word})
		}
	}
	return list, sound
}

// wordSpan is where a word of a key's value stands.
func (p *planner) wordSpan(m document.Map, key, word string) source.Span {
	span := m.ValueSpan(key)
	for _, item := range m.Node(key).Items() {
		if item.Text() == word {
			return item.Span
		}
	}
	pattern := regexp.MustCompile(`(?:^|\s)(` + regexp.QuoteMeta(word) + `)(?:\s|$)`)
	if at := pattern.FindSubmatchIndex(p.plan.File.Text[span.Start:span.End]); at != nil {
		return p.plan.File.Span(span.Start+at[2], span.Start+at[3])
	}
	return span
}

// condition is one entry of `at:`.
type condition struct {
	name  string
	value quantity.Value
	visit int // 0: any
	span  source.Span
}

type conditions []condition

// conditions reads `at: {temperature: 23 degC, visit: 1}`; visit belongs to the label before it. The second result is
// false when some of it was refused.
func (p *planner) conditions(m document.Map) (list conditions, sound bool) {
	before := len(p.list)
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
		if e.Value.Form != document.Scalar {
			p.add(e.Value.Span, "wrong-value", "", "at %s: a quantity was expected, this is %s", e.Key.Text(), e.Value.Form)
			continue
		}
		v, err := quantity.Parse(e.Value.Text())
		if err != nil {
			p.add(e.Value.Span, "wrong-value", "", "at %s: %v", e.Key.Text(), err)
			continue
		}
		list = append(list, condition{e.Key.Text(), v, 0, e.Key.Span})
	}
	return list, len(p.list) == before
}

// fit says whether labels meet all conditions.
func (list conditions) fit(labels recording.Labels) bool {
	return !slices.ContainsFunc(list, func(c condition) bool {
		l, ok := labels.Find(c.name)
		return !ok || !l.Value.Same(c.value) || c.visit != 0 && c.visit != l.Visit
	})
}

// elements groups the recordings of a figure that the steps will make.
func (p *planner) elements(f *Figure, m document.Map) {
	of := m.Text("of")
	per, perSound := p.selectors(m, "per")
	over, overSound := p.selectors(m, "over")
	at, atSound := p.conditions(m)
	for _, s := range per {
		f.labels = append(f.labels, s.String())
	}
	all := p.made(of)
	if len(all) == 0 {
		if !p.partial {
			p.add(m.ValueSpan("of"), "no-recording", source.DidYouMean(of, p.recordingNames()), "no step makes a recording %q", of)
		}
		return
	}
	if !perSound || !overSound || !atSound || !p.conditionsKnown(of, all, at) {
		return
	}
	all = slices.DeleteFunc(all, func(i int) bool { return !at.fit(p.plan.expected[i].labels) })
	if len(all) == 0 {
		if !p.partial {
			p.add(m.KeySpan("at"), "no-recording", "", "no recording %q is made at that", of)
		}
		return
	}
	inner := innerLabels(f.Method.Needs, over)
	if !p.labelled(m, f, all, per, over) {
		return
	}
	groups := map[string]int{}
	for _, i := range all {
		labels := elementLabels(p.plan.expected[i].labels, per)
		key := elementKey(labels)
		at, known := groups[key]
		if !known {
			at = len(f.Elements)
			groups[key] = at
			f.Elements = append(f.Elements, ElementSpec{Labels: labels, noise: none})
		}
		f.Elements[at].recordings = append(f.Elements[at].recordings, i)
	}
	for i := range f.Elements {
		p.choose(f, &f.Elements[i], m, inner)
	}
	if slices.Contains(f.Method.Options, "noise") {
		p.noise(f, m)
	}
}

// made are the recordings of a name, by their place among those expected.
func (p *planner) made(name string) []int {
	var list []int
	for i, e := range p.plan.expected {
		if e.name == name {
			list = append(list, i)
		}
	}
	return list
}

func (p *planner) recordingNames() []string {
	var names []string
	for _, e := range p.plan.expected {
		if !slices.Contains(names, e.name) {
			names = append(names, e.name)
		}
	}
	return names
}

// innerLabels are those that a method works over.
func innerLabels(needs []string, over []selector) []string {
	var names []string
	for _, s := range over {
		names = append(names, s.name)
	}
	for _, need := range needs {
		if need != "over" {
			names = append(names, need)
		}
	}
	return names
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

// conditionsKnown checks that the recordings of `at` have its labels, in its dimension.
func (p *planner) conditionsKnown(of string, all []int, at conditions) bool {
	var known []string
	for _, i := range all {
		for _, l := range p.plan.expected[i].labels {
			if !slices.Contains(known, l.Name) {
				known = append(known, l.Name)
			}
		}
	}
	sound := true
	for _, c := range at {
		if !slices.Contains(known, c.name) {
			sound = p.noLabel(c.span, of, c.name, known)
			continue
		}
		for _, i := range all {
			if l, ok := p.plan.expected[i].labels.Find(c.name); ok && l.Value.Dimension() != c.value.Dimension() {
				p.add(c.span, "wrong-dimension", "", "at %s: %s was expected, this is %s", c.name, aQuantity(l.Value.Dimension()), c.value)
				sound = false
				break
			}
		}
	}
	return sound
}

// noLabel reports a label that recordings do not carry.
func (p *planner) noLabel(at source.Span, of, name string, known []string) bool {
	if p.partial {
		return false
	}
	help := source.DidYouMean(name, known)
	if len(known) == 0 {
		help = "it is made in no loop"
	}
	p.add(at, "no-label", help, "recording %q is made without the label %q", of, name)
	return false
}

// labelled checks that each recording carries every label that the figure asks for.
func (p *planner) labelled(m document.Map, f *Figure, all []int, per, over []selector) bool {
	sound := true
	check := func(at source.Span, name string) {
		for _, i := range all {
			labels := p.plan.expected[i].labels
			if _, ok := labels.Find(name); !ok {
				known := make([]string, len(labels))
				for k, l := range labels {
					known[k] = l.Name
				}
				sound = p.noLabel(at, m.Text("of"), name, known)
				return
			}
		}
	}
	for _, s := range per {
		check(p.wordSpan(m, "per", s.name), s.name)
	}
	for _, s := range over {
		check(p.wordSpan(m, "over", s.name), s.name)
	}
	for _, need := range f.Method.Needs {
		switch {
		case need != "over":
			check(m.ValueSpan("of"), need)
		case !m.Stands("over"):
			p.add(f.Span, "missing-key", "say over which label, as in over: cycle", "figure %s needs the key \"over\"", f.Name)
			sound = false
		case len(over) == 0:
			sound = false
		}
	}
	return sound
}

// choose holds the recordings of an element against what the method takes: those that differ only in the labels that
// it works over, of which a method that takes one has none. If several such sets fit, `pick` takes the first or last.
func (p *planner) choose(f *Figure, e *ElementSpec, m document.Map, inner []string) {
	var sets [][]int
	index := map[string]int{}
	for _, i := range e.recordings {
		outer := slices.DeleteFunc(slices.Clone(p.plan.expected[i].labels), func(l recording.Label) bool { return slices.Contains(inner, l.Name) })
		key := elementKey(outer)
		at, known := index[key]
		if !known {
			at = len(sets)
			index[key] = at
			sets = append(sets, nil)
		}
		sets[at] = append(sets[at], i)
	}
	where := ""
	if len(e.Labels) > 0 {
		where = " at " + e.Labels.String()
	}
	switch {
	case len(sets) == 1:
		e.recordings = sets[0]
	case m.Text("pick") == "first":
		e.recordings = sets[0]
	case m.Text("pick") == "last":
		e.recordings = sets[len(sets)-1]
	default:
		key, what := "of", "recordings"
		if m.Stands("at") {
			key = "at"
		}
		if f.Method.Several {
			what = "sets of recordings"
		}
		if !p.partial {
			p.add(m.ValueSpan(key), "ambiguous", "name the visit, make it a series with per, or pick: first or last", "%d %s %q fit%s; %s takes one", len(sets), what, m.Text("of"), where, f.Method.Name)
		}
		return
	}
	if f.Method.Several && len(e.recordings) < 2 && !p.partial {
		p.add(m.ValueSpan("of"), "too-few", "", "%s needs several recordings; %q has %d%s", f.Method.Name, m.Text("of"), len(e.recordings), where)
	}
}

// noise finds, for every element, the recording at rest that tells the gyro's noise: of the name that the figure
// states, else any; the one that shares most labels with the element, then the longest, then the first.
func (p *planner) noise(f *Figure, m document.Map) {
	name := m.Text("noise")
	if m.Stands("noise") && !m.Has("noise") {
		return
	}
	var resting []int
	for i, x := range p.plan.expected {
		if x.rest > 0 && (name == "" || x.name == name) {
			resting = append(resting, i)
		}
	}
	switch {
	case len(resting) > 0:
	case p.partial:
		return
	case name == "":
		p.add(f.Span, "no-noise", "record a while with hold: position", "figure %s needs a recording at rest, which tells the gyro's noise; no step makes one", f.Name)
		return
	case len(p.made(name)) == 0:
		p.add(m.ValueSpan("noise"), "no-recording", source.DidYouMean(name, p.recordingNames()), "no step makes a recording %q", name)
		return
	default:
		p.add(m.ValueSpan("noise"), "no-noise", "name one that is made with hold: position", "recording %q is not made at rest", name)
		return
	}
	for k := range f.Elements {
		e := &f.Elements[k]
		best, most := none, -1
		for _, i := range resting {
			x := p.plan.expected[i]
			shared := 0
			for _, l := range e.Labels {
				if other, ok := x.labels.Find(l.Name); ok && other.Value.Same(l.Value) && (l.Visit == 0 || l.Visit == other.Visit) {
					shared++
				}
			}
			if shared > most || shared == most && x.rest > p.plan.expected[best].rest {
				best, most = i, shared
			}
		}
		e.noise = best
	}
}
