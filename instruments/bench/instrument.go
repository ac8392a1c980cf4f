package bench

import (
	"fmt"
	"net"
	"slices"
	"strings"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/profile"
	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// instrument is one instrument of the file, as far as it could be made out.
type instrument struct {
	name     string
	span     source.Span      // of the name
	profile  *profile.Profile // nil if it is not sound
	able     abilities
	link     address
	linkSpan source.Span
	used     bool
}

// address is where a link leads: "tcp" and "10.0.4.7:5025".
type address struct{ scheme, place string }

func (a address) String() string { return a.scheme + ":" + a.place }

func (l *loader) instrument(named document.Named) {
	m := named.Map
	i := &instrument{name: named.Name, span: named.Span, linkSpan: m.ValueSpan("link")}
	d := instruments.InstrumentDescription{Name: named.Name, Profile: m.Text("profile"), Link: m.Text("link")}
	if m.Has("profile") {
		i.profile = l.profile(m)
	}
	if i.profile != nil {
		i.able = abilitiesOf(i.profile)
		d.ProfileText, d.ProfileDigest, d.Roles = i.profile.Text, i.profile.Digest, i.able.roles
	}
	if m.Has("link") {
		i.link = l.link(m)
	}
	if i.link.scheme == "serial" && i.profile != nil && i.profile.Serial.Baud == 0 {
		l.wrong.Addf(i.linkSpan, "no-serial-settings", "add serial: to the profile, or link the instrument by TCP",
			"profile %s does not say how a serial port is set", i.profile.Name)
	}
	seen := map[string]source.Span{}
	for _, entry := range m.List("calibrations") {
		d.Calibrations = append(d.Calibrations, l.calibration(entry, i, seen))
	}
	l.instruments = append(l.instruments, i)
	l.description.Instruments = append(l.description.Instruments, d)
}

// profile loads the profile behind the key: a shipped one by its name, else a file.
func (l *loader) profile(m document.Map) *profile.Profile {
	name, span := m.Text("profile"), m.ValueSpan("profile")
	text, found := profile.Shipped(name)
	if !found {
		if !strings.ContainsAny(name, "./") {
			l.wrong.Addf(span, "unknown-profile", source.DidYouMean(name, profile.ShippedNames()), "there is no shipped profile %q", name)
			return nil
		}
		var err error
		if text, err = l.read(name); err != nil {
			l.wrong.Addf(span, "unreadable-profile", "give the path from the bench file's folder", "profile %s: %v", name, err)
			return nil
		}
	}
	p, file, wrong := profile.Load(name, text)
	if len(wrong) > 0 {
		wrong.Sort()
		line, column := file.Position(wrong[0].Span.Start)
		l.wrong.Addf(span, "broken-profile", "proofrate check "+name+" shows all", "profile %s is not sound (%d found), first at %d:%d: %s",
			name, len(wrong), line, column, wrong[0].Message)
		return nil
	}
	return p
}

// link reads where an instrument is connected. No two instruments share a link.
func (l *loader) link(m document.Map) address {
	text, span := m.Text("link"), m.ValueSpan("link")
	scheme, place, _ := strings.Cut(text, ":")
	a := address{scheme, place}
	bad := func(code, help, format string, args ...any) address {
		l.wrong.Addf(span, code, help, format, args...)
		return address{}
	}
	schemes := []string{"serial", "tcp", "virtual"}
	if !slices.Contains(schemes, scheme) {
		return bad("wrong-link", source.DidYouMean(scheme, schemes), "a link is serial:PATH, tcp:HOST:PORT or virtual:ENDPOINT, not %q", text)
	}
	if place == "" {
		return bad("wrong-link", "", "link %q does not say where to", text)
	}
	if _, port, err := net.SplitHostPort(place); scheme == "tcp" && (err != nil || port == "") {
		return bad("wrong-link", "", "a TCP link is tcp:HOST:PORT, not %q", text)
	}
	for _, other := range l.instruments {
		if other.link == a {
			l.wrong.Add(source.Diagnostic{Span: span, Code: "shared-link", Message: fmt.Sprintf("%s is the link of %s already", text, other.name),
				Help: "one instrument a link", Related: []source.Note{{Span: other.linkSpan, Message: "first here"}}})
		}
	}
	return a
}

// dateForm is how a certificate's dates are written (ISO 8601).
const dateForm = "2006-01-02"

func (l *loader) calibration(m document.Map, i *instrument, seen map[string]source.Span) instruments.Calibration {
	c := instruments.Calibration{
		Reading: m.Text("of"), Certificate: m.Text("certificate"), Laboratory: m.Text("laboratory"), Date: m.Text("date"), Due: m.Text("due"),
		Correction: m.Quantity("correction"), U: m.Quantity("U"), K: m.Number("k"), Drift: m.Quantity("drift"),
	}
	l.positive(m, "k", c.K)
	l.notNegative(m, "U")
	l.notNegative(m, "drift")
	l.dates(m)
	if !m.Has("of") || i.profile == nil {
		return c
	}
	known := i.able.all(i.name)
	if !slices.Contains(known, c.Reading) {
		l.wrong.Addf(m.ValueSpan("of"), "unknown-reading", source.DidYouMean(c.Reading, known), "%s does not read %q", i.name, c.Reading)
		return c
	}
	if first, twice := seen[c.Reading]; twice {
		l.wrong.Add(source.Diagnostic{Span: m.ValueSpan("of"), Code: "second-calibration", Message: fmt.Sprintf("%s of %s is calibrated twice", c.Reading, i.name),
			Help: "keep the valid certificate", Related: []source.Note{{Span: first, Message: "first here"}}})
	}
	seen[c.Reading] = m.ValueSpan("of")
	for _, key := range []string{"correction", "U", "drift"} {
		if v := m.Quantity(key); m.Has(key) {
			if fits, want := ratioOrOwn(v.Dimension(), c.Reading); !fits {
				l.wrong.Addf(m.ValueSpan(key), "wrong-unit", "expected: "+want, "%s of %s cannot be %v, which is a %v", key, c.Reading, v, v.Dimension())
			}
		}
	}
	return c
}

// ratioOrOwn says whether a calibration's value is relative or in the reading's own dimension. Of an absolute
// temperature a relative value has no meaning, and its own is a difference; a meter may read anything.
func ratioOrOwn(d quantity.Dimension, reading string) (fits bool, want string) {
	kind, _ := instruments.ReadingOf(reading)
	own := kind.Unit.Dimension()
	switch {
	case kind.Unit == quantity.Unit{} && strings.HasSuffix(reading, ".value"):
		return true, ""
	case own == quantity.Temperature:
		return d == quantity.TemperatureDifference, quantity.TemperatureDifference.String()
	}
	return d == quantity.Ratio || d == own, "ratio or " + own.String()
}

func (l *loader) dates(m document.Map) {
	var dates [2]time.Time
	for at, key := range []string{"date", "due"} {
		var err error
		if dates[at], err = time.Parse(dateForm, m.Text(key)); m.Has(key) && err != nil {
			l.wrong.Addf(m.ValueSpan(key), "wrong-date", "", "%s is a date like 2026-03-01, not %q", key, m.Text(key))
		}
	}
	if !dates[0].IsZero() && !dates[1].IsZero() && !dates[1].After(dates[0]) {
		l.wrong.Addf(m.ValueSpan("due"), "wrong-date", "", "the next calibration is due before this one's date")
	}
}
