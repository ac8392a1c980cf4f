package bench

import (
	"fmt"
	"slices"

	"proofrate/instruments"
	"proofrate/instruments/virtual"
	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// overridesTable has each parameter that a population may have; the world itself knows which family has which.
var overridesTable = func() *document.Table {
	t := &document.Table{Name: "set of overrides", Doc: "parameters of one virtual gyro that are set and not drawn"}
	parameters := virtual.PopulationTable.Keys[slices.IndexFunc(virtual.PopulationTable.Keys, func(k document.Key) bool { return k.Name == "parameters" })]
	for _, k := range parameters.Of.Keys {
		t.Keys = append(t.Keys, document.Key{Name: k.Name, Kind: document.Quantity, Dimension: k.Of.Keys[0].Dimension, Doc: k.Doc})
	}
	return t
}()

// world reads the virtual section. Nil without a complaint is a bench whose links lead out of the program.
func (l *loader) world(m document.Map) *virtual.Config {
	var inside, outside []*instrument
	for _, i := range l.instruments {
		switch i.link.scheme {
		case "":
		case "virtual":
			inside = append(inside, i)
		default:
			outside = append(outside, i)
		}
	}
	if len(inside) > 0 && len(outside) > 0 {
		l.wrong.Add(source.Diagnostic{Span: outside[0].linkSpan, Code: "mixed-links", Help: "link all instruments to the virtual world, or none",
			Message: "this link leads out of the program: the virtual world's time is not the wall's",
			Related: []source.Note{{Span: inside[0].linkSpan, Message: "in the virtual world"}}})
		return nil
	}
	virtualLinks := len(outside) == 0 && len(inside) > 0
	switch {
	case virtualLinks && !m.Stands("virtual"):
		l.wrong.Addf(inside[0].linkSpan, "no-world", "add the section virtual: its ambient and gyros", "the link leads into a virtual world, which the file does not describe")
	case !virtualLinks && m.Stands("virtual"):
		l.wrong.Addf(m.KeySpan("virtual"), "no-world", "take the section out, or give links virtual:ENDPOINT", "no link leads into this virtual world")
	case virtualLinks && m.Stands("pace"):
		l.wrong.Addf(m.KeySpan("pace"), "no-pace", "take the key out", "a virtual world inside the program goes as fast as it can")
	}
	if !virtualLinks || !m.Has("virtual") {
		return nil
	}
	l.description.Virtual = true
	if !l.misplaced {
		l.endpoints()
	}
	section := m.Map("virtual")
	config := &virtual.Config{Description: l.description, Ambient: section.Quantity("ambient"), Gyros: map[instruments.SlotID]virtual.Setup{}}
	for _, named := range section.Free("gyros") {
		l.virtualGyro(named, config)
	}
	for _, slot := range l.description.Slots {
		if _, there := config.Gyros[slot.ID]; section.Has("gyros") && !there {
			l.wrong.Addf(section.KeySpan("gyros"), "missing-gyro", fmt.Sprintf("add %s: {population: ...}", slot.ID), "slot %s has no virtual gyro", slot.ID)
		}
	}
	if len(l.wrong) == 0 {
		if _, err := virtual.New(*config); err != nil { // what only the whole world can say
			l.wrong.Addf(m.KeySpan("virtual"), "broken-world", "", "%v", err)
		}
	}
	return config
}

// endpoints holds each virtual link to the place in the world that its role has there.
func (l *loader) endpoints() {
	want := map[string]string{}
	if l.description.Table != nil {
		want[l.description.Table.Instrument] = "table"
	}
	if l.description.Chamber != nil {
		want[l.description.Chamber.Instrument] = "chamber"
	}
	for at, slot := range l.description.Slots {
		want[slot.Supply] = "supply"
		want[slot.Gyro] = fmt.Sprintf("gyro-%d", at+1)
	}
	for _, i := range l.instruments {
		if endpoint, ok := want[i.name]; ok && i.link.place != endpoint && i.link.scheme != "" {
			l.wrong.Addf(i.linkSpan, "wrong-endpoint", "", "in the virtual world this instrument is at virtual:%s", endpoint)
		}
	}
}

func (l *loader) virtualGyro(named document.Named, config *virtual.Config) {
	m, slot := named.Map, instruments.SlotID(named.Name)
	var ids []string
	for _, s := range l.description.Slots {
		ids = append(ids, string(s.ID))
	}
	if !slices.Contains(ids, named.Name) {
		l.wrong.Addf(named.Span, "unknown-slot", source.DidYouMean(named.Name, ids), "the bench has no slot %q", named.Name)
	}
	setup := virtual.Setup{Population: m.Text("population"), Overrides: map[string]quantity.Value{}}
	overrides := m.Map("overrides")
	for _, name := range overridesTable.Names() {
		if overrides.Has(name) {
			setup.Overrides[name] = overrides.Quantity(name)
		}
	}
	config.Gyros[slot] = setup
	l.gyros[slot] = Gyro{m.Text("part"), m.Text("serial")}
	if m.Has("population") {
		l.population(m, slot)
	}
}

// population holds a virtual gyro to its slot's profile: what it sends is what the profile reads.
func (l *loader) population(m document.Map, slot instruments.SlotID) {
	name, span := m.Text("population"), m.ValueSpan("population")
	text, ok := virtual.Shipped(name)
	if !ok {
		l.wrong.Addf(span, "unknown-population", source.DidYouMean(name, virtual.Populations()), "there is no population %q", name)
		return
	}
	population, _, wrong := virtual.LoadPopulation(name, text)
	if err := wrong.Err(); err != nil {
		l.wrong.Addf(span, "broken-population", "", "population %s: %v", name, err)
		return
	}
	for _, s := range l.description.Slots {
		if s.ID == slot && len(s.Channels) > 0 && !s.Channels[0].Count.Same(population.Count) {
			i := l.named(s.Gyro)
			l.wrong.Addf(span, "wrong-population", "", "a gyro of population %s sends counts of %v; profile %s of %s reads counts of %v",
				name, population.Count, i.profile.Name, s.Gyro, s.Channels[0].Count)
		}
	}
}
