package bench

import (
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"proofrate/instruments"
	"proofrate/instruments/virtual"
	"proofrate/limits/document"
	"proofrate/limits/source"
)

// Loaded is a bench file that has been found sound.
type Loaded struct {
	Description *instruments.Description
	Gyros       map[instruments.SlotID]Gyro // of a virtual bench; empty where people put the gyros in
	instruments []*instrument               // in the order of the file
	meters      map[instruments.SlotID][]string
	world       *virtual.Config // without its seed; nil if the links lead out of the program
	file        *source.File
	worldSpan   source.Span // of the virtual section
}

// Gyro is which gyro sits in a slot of a virtual bench.
type Gyro struct{ Part, Serial string }

// loader goes through a decoded bench file and notes all that is wrong.
type loader struct {
	file        *source.File
	read        func(path string) ([]byte, error)
	wrong       source.List
	description *instruments.Description
	instruments []*instrument
	gyros       map[instruments.SlotID]Gyro
	meters      map[instruments.SlotID][]string
	feeds       map[string]source.Span // supply and channel, gyro: to the slot that has it
	misplaced   bool                   // some role has the wrong instrument: what follows from that is not said
}

// Load reads a bench file with no hardware touched. A profile that is not shipped is read with read, which is given the
// path as the bench file has it: from the bench file's own folder. Loaded is nil if anything is wrong.
func Load(name string, text []byte, read func(path string) ([]byte, error)) (*Loaded, *source.File, source.List) {
	file, root, wrong := document.Read(name, text)
	if root == nil {
		return nil, file, wrong
	}
	digest := sha256.Sum256(text)
	l := &loader{file: file, read: read, wrong: wrong, feeds: map[string]source.Span{}, meters: map[instruments.SlotID][]string{}, gyros: map[instruments.SlotID]Gyro{},
		description: &instruments.Description{File: name, Text: text, Digest: "sha256:" + hex.EncodeToString(digest[:]), Pace: 1}}
	m := document.Decode(root, Table, &l.wrong)
	world := l.bench(m)
	if len(l.wrong) > 0 {
		l.wrong.Sort()
		return nil, file, l.wrong
	}
	section := m.KeySpan("virtual")
	section.End = m.ValueSpan("virtual").End
	return &Loaded{l.description, l.gyros, l.instruments, l.meters, world, file, section}, file, nil
}

func (l *loader) bench(m document.Map) *virtual.Config {
	d := l.description
	d.Name, d.Station = m.Text("bench"), m.Text("station")
	d.Site = l.site(m.Map("site"))
	for _, named := range m.Free("instruments") {
		l.instrument(named)
	}
	if m.Has("table") {
		d.Table = l.table(m.Map("table"))
	}
	if m.Has("chamber") {
		d.Chamber = l.chamber(m.Map("chamber"))
	}
	slots := m.Free("slots")
	for _, named := range slots {
		d.Slots = append(d.Slots, l.slot(named))
	}
	if m.Has("slots") && len(slots) == 0 {
		l.wrong.Addf(m.ValueSpan("slots"), "no-slot", "", "a bench has one slot at least")
	}
	for _, i := range l.instruments {
		if !i.used && !l.misplaced {
			l.wrong.Addf(i.span, "unused-instrument", "put it to a role in table, chamber or slots, or take it out", "nothing uses instrument %q", i.name)
		}
	}
	if m.Has("pace") {
		d.Pace, d.Virtual = m.Number("pace"), true
		l.positive(m, "pace", d.Pace)
	}
	return l.world(m)
}

func (l *loader) site(m document.Map) instruments.Site {
	site := instruments.Site{Latitude: m.Quantity("latitude"), Gravity: m.Quantity("gravity")}
	if m.Has("latitude") && math.Abs(site.Latitude.SI()) > math.Pi/2 {
		l.wrong.Addf(m.ValueSpan("latitude"), "wrong-latitude", "", "a latitude lies between -90 and 90 deg, not at %v", site.Latitude)
	}
	// From the equator to the poles, and up to 5 km of height, gravity lies between 9.76 and 9.84 m/s^2.
	if g := site.Gravity.SI(); m.Has("gravity") && (g < 9.7 || g > 9.9) {
		l.wrong.Addf(m.ValueSpan("gravity"), "wrong-gravity", "", "gravity is between 9.7 and 9.9 m/s^2 everywhere on Earth, not %v", site.Gravity)
	}
	return site
}

// positive and notNegative hold a number or the numbers of a quantity to their sign.
func (l *loader) positive(m document.Map, key string, x float64) {
	if m.Has(key) && !(x > 0) {
		l.wrong.Addf(m.ValueSpan(key), "not-positive", "", "%s must be above zero", key)
	}
}

func (l *loader) notNegative(m document.Map, key string) {
	if m.Has(key) && !(m.Quantity(key).Number >= 0) {
		l.wrong.Addf(m.ValueSpan(key), "negative", "", "%s must not be negative", key)
	}
}

// directions are the words for an axis, in east, north, up.
var directions = map[string]instruments.Vector{
	"east": {1, 0, 0}, "west": {-1, 0, 0}, "north": {0, 1, 0}, "south": {0, -1, 0}, "up": {0, 0, 1}, "down": {0, 0, -1},
}

func (l *loader) table(m document.Map) *instruments.TableDescription {
	t := &instruments.TableDescription{
		Instrument: m.Text("instrument"), AxisUncertainty: m.Quantity("axis-uncertainty"),
		MaxRate: m.Quantity("max-rate"), MaxAcceleration: m.Quantity("max-acceleration"), Creep: m.Quantity("creep"),
	}
	if axis := m.Node("axis"); axis != nil {
		t.Axis = l.axis(axis)
	}
	l.positive(m, "max-rate", t.MaxRate.Number)
	l.positive(m, "max-acceleration", t.MaxAcceleration.Number)
	l.notNegative(m, "axis-uncertainty")
	l.notNegative(m, "creep")
	if i := l.filling(m, "instrument", "table"); i != nil {
		t.CanPosition, t.CanOscillate = i.able.positions, i.able.oscillates
	}
	return t
}

func (l *loader) axis(n *document.Node) instruments.Vector {
	if v, known := directions[n.Text()]; known {
		return v
	}
	fields := strings.Fields(n.Text())
	var v instruments.Vector
	var length float64
	if len(fields) == len(v) {
		for i, field := range fields {
			x, err := strconv.ParseFloat(field, 64)
			if err != nil {
				length = math.NaN()
			}
			v[i], length = x, math.Hypot(length, x)
		}
	}
	if !(length > 1e-6 && length < 1e6) {
		help := source.DidYouMean(n.Text(), []string{"up", "down", "north", "south", "east", "west"})
		l.wrong.Addf(n.Span, "wrong-axis", help, "an axis is a direction in a word, or three numbers east, north, up: 0 0.6 0.8")
		return v
	}
	for i := range v {
		v[i] /= length
	}
	return v
}

func (l *loader) chamber(m document.Map) *instruments.ChamberDescription {
	c := &instruments.ChamberDescription{Instrument: m.Text("instrument"), Ramp: m.Quantity("ramp")}
	l.positive(m, "ramp", c.Ramp.Number)
	if span := m.Quantities("range"); m.Has("range") {
		if len(span) != 2 || span[0].Number >= span[1].Number {
			l.wrong.Addf(m.ValueSpan("range"), "wrong-range", "", "a range is two temperatures, the lower first: -40 85 degC")
		} else {
			c.Low, c.High = span[0], span[1]
		}
	}
	l.filling(m, "instrument", "chamber")
	return c
}

func (l *loader) slot(named document.Named) instruments.SlotDescription {
	m := named.Map
	s := instruments.SlotDescription{
		ID: instruments.SlotID(named.Name), Sense: 1, Radius: m.Quantity("radius"),
		AttitudeUncertainty: m.Quantity("attitude-uncertainty"), Gyro: m.Text("gyro"), Supply: m.Text("supply"),
		SupplyChannel: m.Int("channel"), MaxVoltage: m.Quantity("max-voltage"), MaxCurrent: m.Quantity("max-current"),
	}
	if m.Text("sense") == "-" {
		s.Sense = -1
	}
	l.notNegative(m, "radius")
	l.notNegative(m, "attitude-uncertainty")
	l.positive(m, "max-voltage", s.MaxVoltage.Number)
	l.positive(m, "max-current", s.MaxCurrent.Number)
	if i := l.filling(m, "supply", "supply"); i != nil {
		l.channel(m, i)
		s.Readings = append(s.Readings, i.able.readings["supply"]...)
		l.once(m, "supply", fmt.Sprintf("supply %s, channel %d", s.Supply, s.SupplyChannel), "switching one gyro would switch the other")
	}
	if i := l.filling(m, "gyro", "gyro"); i != nil {
		s.Readings = append(s.Readings, i.able.readings["gyro"]...)
		s.Channels, s.SampleRate, s.FrameCounter = i.able.channels, i.able.sampleRate, i.able.frameCounter
		l.once(m, "gyro", "gyro "+s.Gyro, "a gyro sits in one place")
	}
	for _, name := range m.Words("meters") {
		if l.filled(m, "meters", name, "meter") != nil {
			l.meters[s.ID] = append(l.meters[s.ID], name)
			s.Readings = append(s.Readings, name+".value")
		}
	}
	slices.Sort(s.Readings)
	return s
}

// channel holds a slot's channel to those that its supply has.
func (l *loader) channel(m document.Map, supply *instrument) {
	channels, given := supply.able.supplyChannels, m.Int("channel")
	switch {
	case channels == 0 && m.Stands("channel"):
		l.wrong.Addf(m.KeySpan("channel"), "wrong-channel", "take the key out", "supply %s has one channel without a number", supply.name)
	case channels > 0 && !m.Stands("channel"):
		l.wrong.Addf(m.ValueSpan("supply"), "missing-channel", fmt.Sprintf("add channel: 1 to %d", channels), "supply %s has %d channels", supply.name, channels)
	case channels > 0 && m.Has("channel") && (given < 1 || given > channels):
		l.wrong.Addf(m.ValueSpan("channel"), "wrong-channel", "", "supply %s has channels 1 to %d", supply.name, channels)
	}
}

// once notes that a slot has something that no second may have.
func (l *loader) once(m document.Map, key, what, why string) {
	first, taken := l.feeds[what]
	if !taken {
		l.feeds[what] = m.ValueSpan(key)
		return
	}
	l.misplaced = true
	l.wrong.Add(source.Diagnostic{Span: m.ValueSpan(key), Code: "shared", Message: what + " serves another slot already: " + why,
		Related: []source.Note{{Span: first, Message: "first here"}}})
}

// filling is the instrument named behind a key, held to the role that it must fill.
func (l *loader) filling(m document.Map, key, role string) *instrument {
	if !m.Has(key) {
		return nil
	}
	return l.filled(m, key, m.Text(key), role)
}

func (l *loader) filled(m document.Map, key, name, role string) *instrument {
	span := m.ValueSpan(key)
	i := l.named(name)
	if i == nil {
		l.misplaced = true
		var known []string
		for _, i := range l.instruments {
			known = append(known, i.name)
		}
		l.wrong.Addf(span, "unknown-instrument", source.DidYouMean(name, known), "there is no instrument %q", name)
		return nil
	}
	i.used = true
	if i.profile == nil {
		return nil // said where the instrument stands
	}
	if !slices.Contains(i.able.roles, role) {
		l.misplaced = true
		l.wrong.Addf(span, "wrong-role", "", "%s cannot be a %s: its profile %s fills the role %s", name, role, i.profile.Name, strings.Join(i.able.roles, ", "))
		return nil
	}
	return i
}

func (l *loader) named(name string) *instrument {
	for _, i := range l.instruments {
		if i.name == name {
			return i
		}
	}
	return nil
}
