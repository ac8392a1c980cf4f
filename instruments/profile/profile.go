package profile

import (
	"crypto/sha256"
	"embed"
	"encoding/hex"
	"path"
	"slices"
	"strings"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/link"
	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// Profile is the driver of one instrument model. What stands in its fields is known without any I/O.
type Profile struct {
	Name, Title, Family string
	Roles               []string
	Text                []byte
	Digest              string // "sha256:..." of Text
	Serial              link.SerialSettings
	Timeout             time.Duration
	Tries               int

	Readings                  map[string][]string // by role; a meter's is "value"
	CanPosition, CanOscillate bool
	SupplyChannels            int // 0: one, without a number
	Channels                  []instruments.Channel
	SampleRate                quantity.Value
	FrameCounter              bool

	// Trace is called with every exchange of the drivers made after it is set.
	Trace func(Exchange)

	speech   speaker
	decoding *frame
	shared   map[link.Link]*line // one line a link, however many drivers speak over it
}

// speaker is a family that speaks in requests: lines or registers.
type speaker interface {
	// act gives the jobs of an action, in order.
	act(l *line, name string, v values, channel int) ([]*job, error)
	// ask gives the job of a reading; its value stands in *into when the job is done.
	ask(l *line, reading string, channel int, into *quantity.Value) *job
	identify(l *line, into *instruments.Identity) []*job
	has(action string) bool
	unit(reading string) (quantity.Unit, bool)
}

// Defaults of a profile (common practice).
const (
	defaultTimeout = time.Second
	defaultTries   = 2
	triesMost      = 10
)

// Load reads a profile and reports every mistake with its place.
func Load(name string, text []byte) (*Profile, *source.File, source.List) {
	file, root, problems := document.Read(name, text)
	if root == nil {
		return nil, file, problems
	}
	m := document.Decode(root, &profileTable, &problems)
	sum := sha256.Sum256(text)
	r := &reader{map_: m, problems: &problems, p: &Profile{Name: m.Text("profile"), Title: m.Text("title"), Family: m.Text("family"),
		Text: text, Digest: "sha256:" + hex.EncodeToString(sum[:]), Timeout: defaultTimeout, Tries: defaultTries,
		Readings: map[string][]string{}, SupplyChannels: m.Int("channels"), shared: map[link.Link]*line{}}}
	r.read()
	problems.Sort()
	if len(problems) > 0 {
		return nil, file, problems
	}
	return r.p, file, nil
}

// reader turns a decoded document into a profile.
type reader struct {
	map_     document.Map
	p        *Profile
	problems *source.List
}

func (r *reader) add(span source.Span, code, help, format string, args ...any) {
	r.problems.Addf(span, code, help, format, args...)
}

func (r *reader) read() {
	m, p := r.map_, r.p
	for _, role := range m.Words("roles") {
		if !slices.Contains(roles, role) {
			r.add(m.ValueSpan("roles"), "unknown-role", source.DidYouMean(role, roles), "there is no role %q", role)
			continue
		}
		p.Roles = append(p.Roles, role)
	}
	if slices.Contains(p.Roles, "gyro") != (p.Family == "frames") && m.Has("family") && len(p.Roles) > 0 {
		r.add(m.ValueSpan("family"), "wrong-family", "a gyro streams frames, and only a gyro does", "family %s does not fit the roles %s", p.Family, strings.Join(p.Roles, ", "))
	}
	r.settings()
	for _, only := range []struct{ family, key string }{{"lines", "lines"}, {"registers", "registers"}, {"frames", "frame"}} {
		switch {
		case only.family != p.Family && m.Stands(only.key):
			r.add(m.KeySpan(only.key), "wrong-family", "leave it out", "%s belongs to family %s; this profile is of family %s", only.key, only.family, p.Family)
		case only.family == p.Family && !m.Stands(only.key):
			r.add(m.KeySpan("family"), "missing-key", "", "a profile of family %s needs the key %q", p.Family, only.key)
		}
	}
	switch p.Family {
	case "lines":
		p.speech = r.lines()
	case "registers":
		p.speech = r.registers()
	case "frames":
		r.frames()
		for _, key := range []string{"identify", "actions", "readings"} {
			if m.Stands(key) {
				r.add(m.KeySpan(key), "wrong-family", "readings of frames stand in frame", "a stream has no %s", key)
			}
		}
		return
	}
	if p.speech != nil {
		r.complete()
	}
}

func (r *reader) settings() {
	m, p := r.map_, r.p
	if m.Has("timeout") {
		p.Timeout = time.Duration(m.Quantity("timeout").SI() * float64(time.Second))
		if p.Timeout <= 0 || p.Timeout > time.Minute {
			r.add(m.ValueSpan("timeout"), "wrong-value", "", "timeout: more than nothing and at most a minute was expected")
		}
	}
	if m.Has("tries") {
		if p.Tries = m.Int("tries"); p.Tries < 1 || p.Tries > triesMost {
			r.add(m.ValueSpan("tries"), "wrong-value", "", "tries: 1 to %d were expected", triesMost)
		}
	}
	s := m.Map("serial")
	p.Serial = link.SerialSettings{Baud: s.Int("baud"), DataBits: 8, Parity: parities[s.Text("parity")], StopBits: 1,
		Settle: time.Duration(s.Quantity("settle").SI() * float64(time.Second))}
	if s.Has("data-bits") {
		p.Serial.DataBits = s.Int("data-bits")
	}
	if s.Has("stop-bits") {
		p.Serial.StopBits = s.Int("stop-bits")
	}
	if p.Serial.DataBits < 5 || p.Serial.DataBits > 8 || p.Serial.StopBits < 1 || p.Serial.StopBits > 2 {
		r.add(m.ValueSpan("serial"), "wrong-value", "", "serial: 5 to 8 data bits and 1 or 2 stop bits were expected")
	}
}

// complete checks that the roles' actions and readings are all there, and sets what the profile can do.
func (r *reader) complete() {
	p := r.p
	for _, a := range actionTable {
		if slices.Contains(p.Roles, a.role) && a.required && !p.speech.has(a.name) {
			r.add(r.map_.KeySpan("actions"), "missing-action", "", "a %s needs the action %q", a.role, a.name)
		}
	}
	for _, role := range p.Roles {
		for _, reading := range requiredReadings[role] {
			if _, ok := p.speech.unit(reading); !ok {
				r.add(r.map_.KeySpan("readings"), "missing-reading", "", "a %s needs the reading %q", role, reading)
			}
		}
		if role == "meter" {
			if _, ok := p.speech.unit("value"); !ok {
				r.add(r.map_.KeySpan("readings"), "missing-reading", "", "a meter needs the reading %q", "value")
			}
		}
	}
	p.CanPosition, p.CanOscillate = p.speech.has("go-to"), p.speech.has("oscillate")
}

// actionOf finds an action of the profile's roles.
func (r *reader) actionOf(key *document.Node) *action {
	var names []string
	for i, a := range actionTable {
		if !slices.Contains(r.p.Roles, a.role) {
			continue
		}
		if a.name == key.Text() {
			return &actionTable[i]
		}
		names = append(names, a.name)
	}
	r.add(key.Span, "unknown-action", source.DidYouMean(key.Text(), names), "a %s has no action %q", strings.Join(r.p.Roles, ", "), key.Text())
	return nil
}

// readingOf checks a reading's name and unit and keeps it under its role.
func (r *reader) readingOf(key *document.Node, m document.Map) (quantity.Unit, bool) {
	name := key.Text()
	unit, err := quantity.ParseUnit(m.Text("unit"))
	if err != nil || !m.Has("unit") {
		if m.Has("unit") {
			r.add(m.ValueSpan("unit"), "wrong-value", "", "%v", err)
		} else {
			r.add(key.Span, "missing-key", "state the unit of the number", "reading %s needs the key \"unit\"", name)
		}
		return unit, false
	}
	if name == "value" && slices.Contains(r.p.Roles, "meter") {
		return unit, true
	}
	role, _, _ := strings.Cut(name, ".")
	kind, known := instruments.ReadingOf(name)
	if !known || !slices.Contains(r.p.Roles, role) {
		var names []string
		for _, k := range instruments.ReadingKinds {
			if of, _, _ := strings.Cut(k.Name, "."); slices.Contains(r.p.Roles, of) {
				names = append(names, k.Name)
			}
		}
		r.add(key.Span, "unknown-reading", source.DidYouMean(name, names), "a %s has no reading %q", strings.Join(r.p.Roles, ", "), name)
		return unit, false
	}
	if unit.Dimension() != kind.Unit.Dimension() {
		var fits []string
		for _, u := range kind.Unit.Dimension().Units() {
			fits = append(fits, u.String())
		}
		r.add(m.ValueSpan("unit"), "wrong-dimension", "units that fit: "+strings.Join(fits, ", "), "%s is a unit of %s; %s is in %s", unit, unit.Dimension(), name, kind.Unit.Dimension())
		return unit, false
	}
	r.p.Readings[role] = append(r.p.Readings[role], name)
	return unit, true
}

// entries are those of a map behind a key of the profile.
func (r *reader) entries(key string) []document.Entry {
	n := r.map_.Node(key)
	if n == nil {
		return nil
	}
	if n.Form != document.Mapping {
		r.add(n.Span, "wrong-form", "", "%s: a map of names was expected, this is %s", key, n.Form)
		return nil
	}
	return n.Entries()
}

//go:embed shipped/*.yaml
var shipped embed.FS

// Shipped gives a shipped profile by its name.
func Shipped(name string) ([]byte, bool) {
	text, err := shipped.ReadFile(path.Join("shipped", name+".yaml"))
	return text, err == nil
}

// ShippedNames are the names of the shipped profiles.
func ShippedNames() []string {
	entries, err := shipped.ReadDir("shipped")
	if err != nil {
		panic("profile: the embedded folder is missing: " + err.Error())
	}
	names := make([]string, len(entries))
	for i, e := range entries {
		names[i] = strings.TrimSuffix(e.Name(), ".yaml")
	}
	return names
}
