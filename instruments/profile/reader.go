package profile

import (
	"regexp"
	"slices"
	"strings"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/link"
	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

const (
	defaultTimeout = time.Second // the slowest text instruments of the trade answer within half of it
	timeoutMost    = time.Minute
	defaultTries   = 2
	triesMost      = 10
	settleMost     = time.Minute
	channelsMost   = 64
)

// reader turns a decoded document into a profile and notes all that is wrong.
type reader struct {
	file     *source.File
	root     *document.Node
	m        document.Map
	p        *Profile
	problems *source.List
}

func (r *reader) add(span source.Span, code, help, format string, args ...any) {
	r.problems.Addf(span, code, help, format, args...)
}

// within is the span of a stretch of a scalar's text; of all of it where the text does not stand in the document as it
// is (escaped characters, folded lines).
func (r *reader) within(n *document.Node, from, to int) source.Span {
	start := n.Span.Start
	if n.Quoted {
		start++
	}
	text := n.Text()
	if end := start + len(text); end > len(r.file.Text) || string(r.file.Text[start:end]) != text {
		return n.Span
	}
	return r.file.Span(start+from, start+to)
}

func (r *reader) read() {
	m, p := r.m, r.p
	p.Name, p.Title, p.Family = m.Text("profile"), m.Text("title"), m.Text("family")
	r.roles()
	r.settings()
	r.limits()
	for _, only := range []struct{ family, key string }{{"lines", "lines"}, {"registers", "registers"}, {"frames", "frame"}} {
		switch {
		case p.Family == "":
		case only.family != p.Family && m.Stands(only.key):
			r.add(m.KeySpan(only.key), "wrong-family", "leave it out", "%s belongs to the family %s, and this profile is of the family %s", only.key, only.family, p.Family)
		case only.family == p.Family && !m.Stands(only.key):
			r.add(m.ValueSpan("family"), "missing-key", "", "a profile of the family %s needs the key %q", p.Family, only.key)
		}
	}
	switch {
	case p.Family == "frames":
		for _, key := range []string{"identify", "actions", "readings", "limits", "channels", "timeout", "tries"} {
			if m.Stands(key) {
				r.add(m.KeySpan(key), "wrong-family", "readings and channels of a stream stand in frame", "a stream of frames has no %s", key)
			}
		}
		r.frames()
	case p.Family == "lines" && m.Has("lines"):
		p.speech = r.lines()
	case p.Family == "registers" && m.Has("registers"):
		p.speech = r.registers()
	}
	if p.speech != nil {
		r.complete()
	}
}

func (r *reader) roles() {
	m, p := r.m, r.p
	span := m.ValueSpan("roles")
	for i, role := range m.Words("roles") {
		at := span
		if items := m.Node("roles").Items(); len(items) > 0 {
			at = items[i].Span
		}
		switch {
		case !slices.Contains(roles, role):
			r.add(at, "unknown-role", source.DidYouMean(role, roles), "there is no role %q", role)
		case slices.Contains(p.Roles, role):
			r.add(at, "second-role", "", "the role %s stands twice", role)
		default:
			p.Roles = append(p.Roles, role)
		}
	}
	gyro := slices.Contains(p.Roles, "gyro")
	switch {
	case len(p.Roles) == 0:
		if m.Has("roles") && len(m.Words("roles")) == 0 {
			r.add(span, "unknown-role", "roles: "+strings.Join(roles, ", "), "an instrument fills one role at least")
		}
	case gyro && len(p.Roles) > 1:
		r.add(span, "wrong-role", "give it a profile for each", "a gyro only streams and fills no other role")
	case gyro != (p.Family == "frames") && p.Family != "":
		r.add(m.ValueSpan("family"), "wrong-family", "a gyro streams frames, and only a gyro does", "the family %s does not fit the role %s", p.Family, strings.Join(p.Roles, ", "))
	case slices.Contains(p.Roles, "chamber") && slices.Contains(p.Roles, "supply"):
		r.add(span, "wrong-role", "give it a profile for each", "a chamber and a supply both have an action off")
	}
	p.SupplyChannels = m.Int("channels")
	if m.Has("channels") && (p.SupplyChannels < 1 || p.SupplyChannels > channelsMost) {
		r.add(m.ValueSpan("channels"), "wrong-value", "", "channels: 1 to %d were expected", channelsMost)
	}
	if m.Stands("channels") && len(p.Roles) > 0 && !gyro && !slices.Contains(p.Roles, "supply") {
		r.add(m.KeySpan("channels"), "wrong-role", "leave it out", "only a supply has channels")
	}
}

var parities = map[string]link.Parity{"": link.ParityNone, "none": link.ParityNone, "odd": link.ParityOdd, "even": link.ParityEven}

func (r *reader) settings() {
	m, p := r.m, r.p
	p.Timeout = r.duration(m, "timeout", defaultTimeout, timeoutMost)
	p.Tries = defaultTries
	if m.Has("tries") {
		p.Tries = r.between(m, "tries", 1, triesMost)
	}
	s := m.Map("serial")
	p.Serial = link.SerialSettings{Baud: s.Int("baud"), DataBits: 8, Parity: parities[s.Text("parity")], StopBits: 1, Settle: r.duration(s, "settle", 0, settleMost)}
	if s.Has("baud") {
		r.between(s, "baud", 1, 20_000_000)
	}
	if s.Has("data-bits") {
		p.Serial.DataBits = r.between(s, "data-bits", 5, 8)
	}
	if s.Has("stop-bits") {
		p.Serial.StopBits = r.between(s, "stop-bits", 1, 2)
	}
}

// between reads a whole number and holds it to a range.
func (r *reader) between(m document.Map, key string, low, high int) int {
	got := m.Int(key)
	if m.Has(key) && (got < low || got > high) {
		r.add(m.ValueSpan(key), "wrong-value", "", "%s: %d to %d were expected, not %d", key, low, high, got)
	}
	return got
}

// duration reads a time beyond zero, the default if it is not given.
func (r *reader) duration(m document.Map, key string, otherwise, most time.Duration) time.Duration {
	if !m.Has(key) {
		return otherwise
	}
	seconds := m.Quantity(key).SI()
	if !(seconds > 0 && seconds <= most.Seconds()) {
		r.add(m.ValueSpan(key), "wrong-value", "", "%s: a time above zero was expected, and no more than %s", key, most)
		return otherwise
	}
	return time.Duration(seconds * float64(time.Second))
}

// limits reads what the instrument can do.
func (r *reader) limits() {
	m := r.m.Map("limits")
	r.p.Limits = map[string]Range{}
	for _, key := range limitsTable.Keys {
		if !m.Has(key.Name) {
			continue
		}
		if !slices.ContainsFunc(actionsOf(r.p.Roles), func(a *action) bool { return a.value(key.Name) != nil }) && len(r.p.Roles) > 0 {
			r.add(m.KeySpan(key.Name), "unused-limit", "leave it out", "no action of a %s carries the value %s", strings.Join(r.p.Roles, ", "), key.Name)
		}
		list := m.Quantities(key.Name)
		if len(list) != 2 || !(list[0].Number < list[1].Number) {
			r.add(m.ValueSpan(key.Name), "wrong-value", "as in -300 300 deg/s", "%s: the least and the greatest value were expected", key.Name)
			continue
		}
		r.p.Limits[key.Name] = Range{list[0], list[1]}
	}
}

// complete checks that the roles' actions and readings are all there, and sets what the profile can do.
func (r *reader) complete() {
	p := r.p
	span := func(key string) source.Span {
		if r.m.Stands(key) {
			return r.m.KeySpan(key)
		}
		return r.m.ValueSpan("roles")
	}
	for _, a := range actionsOf(p.Roles) {
		if n := r.m.Node("actions"); a.required && !p.speech.can(a.name) && (n == nil || n.Value(a.name) == nil) {
			r.add(span("actions"), "missing-action", "", "a %s needs the action %q", a.role, a.name)
		}
	}
	for _, role := range p.Roles {
		for _, reading := range requiredReadings[role] {
			if n := r.m.Node("readings"); !p.speech.reads(reading) && (n == nil || n.Value(reading) == nil) {
				r.add(span("readings"), "missing-reading", "", "a %s needs the reading %q", role, reading)
			}
		}
	}
	p.CanPosition, p.CanOscillate = p.speech.can("go-to"), p.speech.can("oscillate")
}

// actionOf finds an action of the profile's roles.
func (r *reader) actionOf(key *document.Node) *action {
	var names []string
	for _, a := range actionsOf(r.p.Roles) {
		if a.name == key.Text() {
			return a
		}
		names = append(names, a.name)
	}
	if len(r.p.Roles) > 0 { // else that is said already
		r.add(key.Span, "unknown-action", source.DidYouMean(key.Text(), names), "a %s has no action %q", strings.Join(r.p.Roles, ", "), key.Text())
	}
	return nil
}

// readingOf checks a reading's name and unit and keeps it under its role.
func (r *reader) readingOf(key *document.Node, m document.Map) (unit quantity.Unit, ok bool) {
	name := key.Text()
	if name == "value" && slices.Contains(r.p.Roles, "meter") {
		unit, ok = r.unit(m, key)
		r.p.MeterUnit = unit
		return unit, ok
	}
	role, _, _ := strings.Cut(name, ".")
	kind, known := instruments.ReadingOf(name)
	if !known || kind.Unit == (quantity.Unit{}) && name != "gyro.status" || name == "gyro.rate" || !slices.Contains(r.p.Roles, role) {
		if len(r.p.Roles) > 0 {
			names := r.readingNames()
			r.add(key.Span, "unknown-reading", source.DidYouMean(name, names), "a %s has no reading %q", strings.Join(r.p.Roles, ", "), name)
		}
		return unit, false
	}
	unit, ok = r.unit(m, key)
	if ok && unit.Dimension() != kind.Unit.Dimension() {
		r.add(m.ValueSpan("unit"), "wrong-unit", "units that fit: "+unitsOf(kind.Unit.Dimension()), "%s is a unit of %s, and %s is of %s", unit, unit.Dimension(), name, kind.Unit.Dimension())
		return unit, false
	}
	r.p.Readings[role] = append(r.p.Readings[role], name)
	return unit, ok
}

// readingNames are those that the profile may state. A gyro's rate is not stated: it comes from the channel.
func (r *reader) readingNames() []string {
	var names []string
	for _, kind := range instruments.ReadingKinds {
		if role, _, _ := strings.Cut(kind.Name, "."); slices.Contains(r.p.Roles, role) && kind.Name != "gyro.rate" {
			names = append(names, kind.Name)
		}
	}
	if slices.Contains(r.p.Roles, "meter") {
		names = append(names, "value")
	}
	return names
}

// unit reads the key unit, whose absence is told by its table or at the key of the whole.
func (r *reader) unit(m document.Map, of *document.Node) (quantity.Unit, bool) {
	if !m.Has("unit") {
		return quantity.Unit{}, false
	}
	unit, err := quantity.ParseUnit(m.Text("unit"))
	if err != nil {
		r.add(m.ValueSpan("unit"), "wrong-unit", "", "unit of %s: %v", of.Text(), err)
	}
	return unit, err == nil
}

func unitsOf(d quantity.Dimension) string {
	var names []string
	for _, u := range d.Units() {
		names = append(names, u.String())
	}
	return strings.Join(names, ", ")
}

// scaling reads scale and offset.
func (r *reader) scaling(m document.Map) scaling {
	scale := 1.0
	if m.Has("scale") {
		scale = m.Number("scale")
	}
	if scale == 0 {
		r.add(m.ValueSpan("scale"), "wrong-value", "", "scale: zero makes every number the same")
		scale = 1
	}
	return newScaling(scale, m.Number("offset"))
}

// entries are those of a map behind a key that the tables leave to the reader.
func (r *reader) entries(m document.Map, key string) []document.Entry {
	n := m.Node(key)
	if n == nil {
		return nil
	}
	if n.Form != document.Mapping {
		r.add(n.Span, "wrong-form", "", "%s: a map of names was expected, this is %s", key, n.Form)
		return nil
	}
	return n.Entries()
}

// form reads one and refuses captures that nothing uses.
func (r *reader) form(n *document.Node, known []string) form {
	if n.Form != document.Scalar {
		r.add(n.Span, "wrong-form", "", "the text of a line was expected, this is %s", n.Form)
		return nil
	}
	f, wrong := parseForm(n.Text())
	if wrong != nil {
		r.add(r.within(n, wrong.from, wrong.to), "wrong-text", "", "%s", wrong.message)
		return nil
	}
	if len(f) == 0 {
		r.add(n.Span, "wrong-text", "", "a line is not empty")
	}
	seen := map[string]bool{}
	for _, p := range f {
		if p.name != "" {
			r.capture(r.within(n, p.from, p.to), p.name, known, seen)
		}
	}
	return f
}

// capture holds one against those that are used.
func (r *reader) capture(at source.Span, name string, known []string, seen map[string]bool) {
	switch {
	case !slices.Contains(known, name):
		help := source.DidYouMean(name, known)
		if len(known) == 0 {
			help = "nothing is filled in or captured here"
		}
		r.add(at, "unused-capture", help, "nothing uses {%s}", name)
	case seen[name] && name != "any":
		r.add(at, "second-capture", "{any} passes over a text", "{%s} stands twice", name)
	}
	seen[name] = true
}

// reply reads the keys reply and pattern, of which a map has one, or neither where it may have none.
func (r *reader) reply(m document.Map, at source.Span, of string, required bool, known []string) *reply {
	got := &reply{}
	switch n := m.Node("reply"); {
	case m.Stands("reply") && m.Stands("pattern"):
		r.add(m.KeySpan("pattern"), "second-reply", "leave one of them out", "%s has both reply and pattern", of)
	case m.Has("pattern"):
		r.pattern(got, m.Node("pattern"), known)
	case m.Has("reply"):
		got.form = r.form(n, append(slices.Clip(known), "any"))
		for _, p := range got.form {
			if p.hasUnit || p.format != 0 {
				r.add(r.within(n, p.from, p.to), "wrong-text", "write {"+p.name+"}", "an answer's capture has no format")
			}
			if p.name != "" {
				got.names = append(got.names, p.name)
			}
		}
	case required && !m.Stands("reply") && !m.Stands("pattern"):
		r.add(at, "missing-key", "the form of the answer, or a regular expression", "%s needs the key \"reply\" or \"pattern\"", of)
	}
	return got
}

func (r *reader) pattern(into *reply, n *document.Node, known []string) {
	if _, err := regexp.Compile(n.Text()); err != nil {
		r.add(n.Span, "wrong-pattern", "", "this is no regular expression: %v", err)
		return
	}
	pattern := regexp.MustCompile("^(?:" + n.Text() + ")$")
	into.pattern = pattern
	seen := map[string]bool{}
	for _, name := range pattern.SubexpNames() {
		if name == "" {
			continue
		}
		at := n.Span
		if from := strings.Index(n.Text(), "<"+name+">"); from >= 0 {
			at = r.within(n, from+1, from+1+len(name))
		}
		r.capture(at, name, known, seen)
		into.names = append(into.names, name)
	}
}

// captures checks that a reply has a capture.
func (r *reader) captures(m document.Map, got *reply, name string) {
	if got.stated() && got.index(name) < 0 {
		key := "reply"
		if got.pattern != nil {
			key = "pattern"
		}
		r.add(m.ValueSpan(key), "missing-capture", "", "%s captures no {%s}", key, name)
	}
}
