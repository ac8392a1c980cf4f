package virtual

import (
	"embed"
	"fmt"
	"math"
	"slices"
	"strings"

	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// Population is how the parameters of a kind of gyro are spread.
type Population struct {
	Name, Title string
	Family      Family
	Angle       bool           // frames carry increments of angle, else rates
	Count       quantity.Value // what one count is worth
	spreads     map[string]spread
}

// spread is the distribution of one parameter: a fixed value; normal, redrawn beyond within of the mean; or uniform
// between -max and max. Numbers in SI.
type spread struct {
	kind             string // "fixed", "mean", "max"
	value            float64
	sd, within       float64
	positive, cutOff bool
}

//go:embed populations/shipped/*.yaml
var shipped embed.FS

// Populations are the names of the shipped populations.
func Populations() []string {
	entries, err := shipped.ReadDir("populations/shipped")
	if err != nil {
		panic("virtual: " + err.Error())
	}
	var names []string
	for _, e := range entries {
		names = append(names, strings.TrimSuffix(e.Name(), ".yaml"))
	}
	slices.Sort(names)
	return names
}

// Shipped is the text of a shipped population.
func Shipped(name string) ([]byte, bool) {
	text, err := shipped.ReadFile("populations/shipped/" + name + ".yaml")
	return text, err == nil
}

// spreadTable is what may stand behind one parameter.
func spreadTable(p *parameter) *document.Table {
	dimension := p.unit.Dimension()
	key := func(name, doc string) document.Key {
		return document.Key{Name: name, Kind: document.Quantity, Dimension: &dimension, Doc: doc}
	}
	return &document.Table{Name: "spread of " + p.name, Doc: p.doc, Keys: []document.Key{
		key("fixed", "the value of every gyro"),
		key("mean", "mean of a normal distribution"),
		key("sd", "its standard deviation"),
		key("within", "greatest distance from the mean; beyond, it is drawn anew"),
		key("max", "uniform from -max to max"),
	}}
}

var spreadsTable = func() *document.Table {
	t := &document.Table{Name: "parameters", Doc: "what is drawn for each gyro; " +
		"each parameter has fixed, or mean and sd, or max; needed are those of the family that have no default of zero"}
	for i := range parameters {
		t.Keys = append(t.Keys, document.Key{Name: parameters[i].name, Kind: document.MapOf, Of: spreadTable(&parameters[i]), Doc: parameters[i].doc})
	}
	return t
}()

// PopulationTable is the table of keys of a population's document.
var PopulationTable = &document.Table{Name: "population", Doc: "a kind of gyro for the virtual bench", Keys: []document.Key{
	{Name: "population", Kind: document.Name, Required: true, Doc: "its name"},
	{Name: "title", Kind: document.Text, Required: true, Doc: "what kind of gyro this is"},
	{Name: "origin", Kind: document.Text, Required: true, Doc: "where the numbers come from"},
	{Name: "family", Kind: document.Choice, Required: true, Choices: []string{string(Optical), string(Vibratory), string(SpinningMass)}, Doc: "how it senses rotation"},
	{Name: "output", Kind: document.Choice, Required: true, Choices: []string{"rate", "angle"}, Doc: "what a frame carries: a rate, or the increment of angle since the frame before"},
	{Name: "count", Kind: document.Quantity, Required: true, Doc: "what one count of the output is worth: an angular rate, or an angle"},
	{Name: "parameters", Kind: document.MapOf, Of: spreadsTable, Required: true, Doc: "how each parameter is spread"},
}}

// LoadPopulation reads a population's document.
func LoadPopulation(name string, text []byte) (*Population, *source.File, source.List) {
	file, root, problems := document.Read(name, text)
	m := document.Decode(root, PopulationTable, &problems)
	p := &Population{Name: m.Text("population"), Title: m.Text("title"), Family: Family(m.Text("family")),
		Angle: m.Text("output") == "angle", Count: m.Quantity("count"), spreads: map[string]spread{}}
	if m.Has("count") && m.Has("output") {
		p.checkCount(m.ValueSpan("count"), &problems)
	}
	if m.Has("parameters") && m.Has("family") {
		p.read(m.Map("parameters"), &problems)
	}
	problems.Sort()
	if len(problems) > 0 {
		return nil, file, problems
	}
	return p, file, nil
}

func (p *Population) checkCount(span source.Span, problems *source.List) {
	want := quantity.AngularRate
	if p.Angle {
		want = quantity.Angle
	}
	switch {
	case p.Count.Dimension() != want:
		problems.Addf(span, "wrong-value", "one count of the output", "%v",
			&quantity.UnitError{Text: p.Count.String(), Got: p.Count.Unit, Want: want, Fits: want.Units()})
	case p.Count.Number <= 0:
		problems.Addf(span, "wrong-value", "a positive quantity", "a count of %s is worth nothing", p.Count)
	}
}

func (p *Population) read(m document.Map, problems *source.List) {
	for i := range parameters {
		row := &parameters[i]
		switch {
		case !m.Stands(row.name):
			if row.of(p.Family) && !row.optional {
				problems.Addf(m.Span, "missing-key", row.doc, "a population of %s gyros needs the parameter %q", p.Family, row.name)
			}
		case !row.of(p.Family):
			problems.Addf(m.KeySpan(row.name), "unknown-key", "it belongs to "+string(row.families[0])+" gyros", "%s gyros have no parameter %q", p.Family, row.name)
		case m.Has(row.name):
			p.spreads[row.name] = row.spread(m.Map(row.name), problems)
		}
	}
}

// spread reads one parameter's distribution.
func (p *parameter) spread(m document.Map, problems *source.List) spread {
	var kinds []string
	for _, kind := range []string{"fixed", "mean", "max"} {
		if m.Stands(kind) {
			kinds = append(kinds, kind)
		}
	}
	if len(kinds) != 1 || (kinds[0] == "mean") != m.Stands("sd") || m.Stands("within") && kinds[0] != "mean" {
		problems.Addf(m.Span, "wrong-spread", "fixed; or mean and sd, with or without within; or max", "%s: this is no spread", p.name)
		return spread{}
	}
	s := spread{kind: kinds[0], value: m.Quantity(kinds[0]).SI(), sd: m.Quantity("sd").SI(), within: m.Quantity("within").SI(),
		cutOff: m.Stands("within"), positive: p.positive}
	reach := 3 * s.sd
	if s.cutOff {
		reach = math.Min(reach, s.within)
	}
	switch {
	case s.sd < 0 || s.kind == "max" && s.value < 0 || s.cutOff && s.within < s.sd:
		problems.Addf(m.Span, "wrong-spread", "sd and max are at least 0, within at least sd", "%s: this is no spread", p.name)
	case p.positive && (s.kind == "max" || s.value-reach <= 0):
		problems.Addf(m.Span, "wrong-spread", p.doc, "%s: it is always above zero; mean - 3 sd, or mean - within, must be too", p.name)
	}
	return s
}

// drawsMax bounds how often a value is drawn anew; at one standard deviation a third are.
const drawsMax = 1000

func (s spread) draw(seed uint64, part string) float64 {
	r := stream(seed, part)
	switch s.kind {
	case "fixed":
		return s.value
	case "max":
		return s.value * (2*r.Float64() - 1)
	}
	for range drawsMax {
		x := s.value + s.sd*r.NormFloat64()
		if (!s.positive || x > 0) && (!s.cutOff || math.Abs(x-s.value) <= s.within) {
			return x
		}
	}
	return s.value
}

// draw makes the gyro of one slot. Each parameter has a stream of its own.
func (p *Population) draw(seed uint64, slot string, overrides map[string]quantity.Value) (Parameters, error) {
	var drawn Parameters
	for i := range parameters {
		row := &parameters[i]
		if s, ok := p.spreads[row.name]; ok {
			*row.at(&drawn) = s.draw(seed, "gyro "+slot+" "+row.name)
		}
	}
	for _, name := range sorted(overrides) {
		if err := p.override(&drawn, name, overrides[name]); err != nil {
			return drawn, err
		}
	}
	return drawn, p.check(&drawn)
}

func (p *Population) override(drawn *Parameters, name string, value quantity.Value) error {
	i := slices.IndexFunc(parameters, func(row parameter) bool { return row.name == name && row.of(p.Family) })
	if i < 0 {
		var known []string
		for _, row := range parameters {
			if row.of(p.Family) {
				known = append(known, row.name)
			}
		}
		return &UnknownError{What: "parameter of " + string(p.Family) + " gyros", Name: name, Known: known}
	}
	row := &parameters[i]
	if want := row.unit.Dimension(); value.Dimension() != want {
		return fmt.Errorf("%s: %w", name, &quantity.UnitError{Text: value.String(), Got: value.Unit, Want: want, Fits: want.Units()})
	}
	x := value.SI()
	if math.IsNaN(x) || math.IsInf(x, 0) || row.positive && x <= 0 {
		return fmt.Errorf("%s: %s cannot be; it is %s", name, value, row.doc)
	}
	*row.at(drawn) = x
	return nil
}

// check finds what no gyro can be.
func (p *Population) check(drawn *Parameters) error {
	full := drawn.Range * drawn.Saturation / p.Count.SI()
	if p.Angle {
		full *= framePeriod
	}
	switch {
	case math.Abs(drawn.Polarity) != 1:
		return fmt.Errorf("polarity %v: it is 1 or -1", drawn.Polarity)
	case drawn.Saturation < 1.1:
		return fmt.Errorf("saturation at %v of the range: it is at least 1.1", drawn.Saturation)
	case full > math.MaxInt32:
		return fmt.Errorf("count %s: the output at saturation does not fit into 32 bits; make a count worth more", p.Count)
	case p.Family == SpinningMass && drawn.Damping >= 1:
		return fmt.Errorf("damping %v: it is below 1", drawn.Damping)
	}
	return nil
}

// UnknownError says that a name is not among those that are known.
type UnknownError struct {
	What, Name string
	Known      []string
}

func (e *UnknownError) Error() string {
	help := source.DidYouMean(e.Name, e.Known)
	if help == "" {
		help = "known are " + strings.Join(e.Known, ", ")
	}
	return fmt.Sprintf("%q is no %s; %s", e.Name, e.What, help)
}

func sorted[V any](m map[string]V) []string {
	names := make([]string, 0, len(m))
	for name := range m {
		names = append(names, name)
	}
	slices.Sort(names)
	return names
}
