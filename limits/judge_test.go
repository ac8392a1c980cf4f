package limits

import (
	"bufio"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"github.com/expr-lang/expr"

	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

var unit = quantity.MustUnit("deg/h")

// normal is a measured value with u and no budget but one line.
func normal(value, u float64, instrument string) quantity.Measured {
	return quantity.T(value, unit, []quantity.Line{{Name: "all", Instrument: instrument, U: u, Sensitivity: 1, Contribution: u, DoF: math.Inf(1)}})
}

func compiled(t testing.TB, text string, types map[string]FigureType) *Limit {
	t.Helper()
	l, problems := Compile(place(text), types)
	if len(problems) > 0 {
		t.Fatalf("%s: %v", text, problems)
	}
	return l
}

func place(text string) Place {
	return Place{Span: source.Span{File: "x", Start: 0, End: len(text)}, Text: text}
}

// TestScripts runs the scripts in testdata: lines of `figures`, `limit` and `expect`, which say what they mean.
//
//	figures  bias = 2.9 deg/h, u = 0.1 deg/h; noise = 0.02 deg/h, u = 0.001 deg/h
//	limit    abs(bias) <= 3                rule guarded
//	expect   undecided, margin 0.1, u 0.1, p 0.841
func TestScripts(t *testing.T) {
	files, err := filepath.Glob("testdata/*.test")
	if err != nil || len(files) == 0 {
		t.Fatalf("%d scripts, %v", len(files), err)
	}
	for _, name := range files {
		file, err := os.Open(name)
		if err != nil {
			t.Fatal(err)
		}
		defer file.Close()
		s := script{t: t, name: name}
		for lines := bufio.NewScanner(file); lines.Scan(); {
			s.n++
			s.line(lines.Text())
		}
		if s.expectations < 10 {
			t.Errorf("%s: %d expectations", name, s.expectations)
		}
	}
}

type script struct {
	t            *testing.T
	name         string
	n            int
	types        map[string]FigureType
	values       Values
	limit        *Limit
	rule         Rule
	expectations int
}

func (s *script) fail(format string, args ...any) {
	s.t.Errorf("%s:%d: %s", s.name, s.n, fmt.Sprintf(format, args...))
}

func (s *script) line(text string) {
	word, rest, _ := strings.Cut(strings.TrimSpace(text), " ")
	rest = strings.TrimSpace(rest)
	switch word {
	case "", "#":
	case "figures":
		s.figures(rest)
	case "limit":
		text, rule, _ := strings.Cut(rest, " rule ")
		var err error
		if s.rule, err = ParseRule(strings.TrimSpace(rule)); err != nil {
			s.fail("%v", err)
		}
		s.limit = compiled(s.t, strings.TrimSpace(text), s.types)
	case "expect":
		s.expect(rest)
	default:
		s.fail("%q is no line of a script", word)
	}
}

func (s *script) figures(text string) {
	s.types, s.values = map[string]FigureType{}, Values{}
	for _, one := range strings.Split(text, ";") {
		name, rest, _ := strings.Cut(strings.TrimSpace(one), " = ")
		if reason, void := strings.CutPrefix(rest, "void: "); void {
			s.types[name] = FigureType{Unit: unit}
			s.values[name] = []Element{{"", quantity.Voided(unit, reason)}}
			continue
		}
		value, u, _ := strings.Cut(rest, ", u = ")
		v, errV := quantity.Parse(value)
		w, errU := quantity.Parse(u)
		if errV != nil || errU != nil {
			s.fail("%v %v", errV, errU)
			return
		}
		m := quantity.T(v.Number, v.Unit, []quantity.Line{{U: w.Number, Sensitivity: 1, Contribution: w.Number, DoF: math.Inf(1)}})
		s.types[name] = FigureType{Unit: v.Unit}
		s.values[name] = []Element{{"", m}}
	}
}

func (s *script) expect(text string) {
	s.expectations++
	got := s.limit.Judge(s.values, s.rule, 1)[0]
	for i, part := range strings.Split(text, ",") {
		word, number, _ := strings.Cut(strings.TrimSpace(part), " ")
		if i == 0 {
			if got.Verdict.String() != word {
				s.fail("verdict %s, expected %s (%+v)", got.Verdict, word, got)
			}
			continue
		}
		want, err := strconv.ParseFloat(number, 64)
		if err != nil {
			s.fail("%v", err)
		}
		have := map[string]float64{"margin": got.Margin, "u": got.UMargin, "p": got.Probability}[word]
		tolerance := 1e-9
		if word == "p" {
			tolerance = 0.0006 // three digits in the script
			if got.Draws > 0 {
				tolerance = 4 * math.Sqrt(want*(1-want)/float64(got.Draws))
			}
		}
		if math.Abs(have-want) > tolerance {
			s.fail("%s %.6g, expected %g", word, have, want)
		}
	}
}

// TestProbabilityOfConformity: the examples of JCGM 106:2012, clause 7, recomputed values.
func TestProbabilityOfConformity(t *testing.T) {
	types := map[string]FigureType{"x": {Unit: unit}}
	for _, c := range []struct {
		limit    string
		value, u float64
		want     float64
	}{
		// P(x <= T) = Phi((T - y)/u) for a normal distribution, JCGM 106, 7.3.
		{"x <= 3", 2, 1, 0.841344746},
		{"x <= 3", 3, 1, 0.5},
		{"3 >= x", 2, 1, 0.841344746},
		{"x >= 3", 2, 1, 0.158655254},
		{"abs(x) <= 2", 0, 1, 0.954499736},
		{"x >= -2 and x <= 2", 0, 1, 0.954499736},
		{"x < 2 and x > -2", 1, 1, 0.841344746 - 0.001349898},
	} {
		got := compiled(t, c.limit, types).Judge(Values{"x": {{"", normal(c.value, c.u, "")}}}, Guarded, 1)[0]
		if math.Abs(got.Probability-c.want) > 1e-8 || got.Draws != 0 {
			t.Errorf("%s for %g, u %g: %.9f by %d draws, expected %.9f in closed form", c.limit, c.value, c.u, got.Probability, got.Draws, c.want)
		}
	}
}

// TestSharedInstrumentCancels: two figures that share an instrument entirely differ without its uncertainty.
func TestSharedInstrumentCancels(t *testing.T) {
	types := map[string]FigureType{"a": {Unit: unit}, "b": {Unit: unit}}
	l := compiled(t, "a - b <= 0.5", types)
	shared := l.Judge(Values{"a": {{"", normal(1, 1, "T1")}}, "b": {{"", normal(1, 1, "T1")}}}, Guarded, 1)[0]
	if shared.UMargin > 1e-9 || shared.Probability != 1 || shared.Verdict != Accept {
		t.Errorf("shared: %+v", shared)
	}
	apart := l.Judge(Values{"a": {{"", normal(1, 1, "T1")}}, "b": {{"", normal(1, 1, "T2")}}}, Guarded, 1)[0]
	if math.Abs(apart.UMargin-math.Sqrt2) > 1e-6 || apart.Verdict != Undecided {
		t.Errorf("apart: %+v", apart)
	}
	// P(N(0, 2) <= 0.5) = 0.6382.
	if math.Abs(apart.Probability-0.6382) > 4*math.Sqrt(0.25/float64(apart.Draws)) {
		t.Errorf("apart: p = %.4f", apart.Probability)
	}
}

// TestSeriesElementByElement: a series is judged element by element, an aggregate once, and a void element voids both
// its own judgement and the aggregate.
func TestSeriesElementByElement(t *testing.T) {
	types := map[string]FigureType{"bias": {Unit: unit, Labels: []string{"temperature"}}, "other": {Unit: unit, Labels: []string{"cycle"}}}
	values := Values{"bias": {{"cold", normal(1, 0.01, "")}, {"hot", quantity.Voided(unit, "cut off")}, {"warm", normal(5, 0.01, "")}}}
	got := compiled(t, "bias <= 2", types).Judge(values, Guarded, 1)
	if len(got) != 3 || got[0].Verdict != Accept || got[1].Verdict != Void || got[2].Verdict != Reject {
		t.Errorf("%+v", got)
	}
	if !strings.Contains(got[1].Reason, "cut off") {
		t.Errorf("reason %q", got[1].Reason)
	}
	for _, text := range []string{"max(bias) <= 2", "max(bias) - min(bias) <= 2", "bias <= 2 or max(bias) <= 9"} {
		for _, j := range compiled(t, text, types).Judge(values, Guarded, 1) {
			if j.Verdict != Void {
				t.Errorf("%s over a void element: %s", text, j.Verdict)
			}
		}
	}
	if _, problems := Compile(place("bias + other <= 2"), types); len(problems) != 1 || problems[0].Code != "unequal-labels" {
		t.Errorf("two series of unequal labels: %v", problems)
	}
}

// TestUpperBoundNeverRejects.
func TestUpperBoundNeverRejects(t *testing.T) {
	types := map[string]FigureType{"k": {Unit: unit}}
	bound := quantity.Measured{Value: 1, U: 1, DoF: math.Inf(1), High: 1.96, Unit: unit, Family: quantity.Bound, Upper: true}
	for limit, want := range map[string]Verdict{"k <= 3": Accept, "k <= 1": Undecided, "k <= 0.001": Undecided} {
		if got := compiled(t, limit, types).Judge(Values{"k": {{"", bound}}}, Guarded, 1)[0]; got.Verdict != want {
			t.Errorf("%s: %s (p = %g), expected %s", limit, got.Verdict, got.Probability, want)
		}
	}
}

// TestFormula: a difference of extremes has its value from the values and its u from the parts that do not cancel.
func TestFormula(t *testing.T) {
	types := map[string]FigureType{"bias": {Unit: unit, Labels: []string{"temperature"}}}
	f, problems := CompileFormula(place("max(bias) - min(bias)"), types)
	if len(problems) > 0 {
		t.Fatal(problems)
	}
	got := f.Evaluate(Values{"bias": {{"a", normal(1, 0.01, "")}, {"b", normal(3, 0.01, "")}, {"c", normal(2, 0.01, "")}}}, unit, 1)
	m := got[0].Measured
	if len(got) != 1 || math.Abs(m.Value-2) > 1e-12 || math.Abs(m.U-0.01*math.Sqrt2) > 0.0007 || m.Low > 2-0.02 || m.High < 2+0.02 {
		t.Errorf("%+v", m)
	}
	if void := f.Evaluate(Values{"bias": {{"a", normal(1, 0.01, "")}, {"b", quantity.Voided(unit, "gone")}}}, unit, 1); void[0].Measured.Void == "" {
		t.Error("a void figure gave a formula a number")
	}
}

// TestRefusals: what is wrong, by its code, at its place.
func TestRefusals(t *testing.T) {
	types := map[string]FigureType{"bias": {Unit: unit}, "sf_error": {Unit: quantity.MustUnit("ppm")}}
	for _, c := range []struct{ text, code, at, help string }{
		{"abs(bais) <= 3", "unknown-figure", "bais", `did you mean "bias"?`},
		{"bias <= ", "expression", "", ""},
		{"bias <= 2 or 3", "expression", "or", "compare each side, as in bias <= 2 or bias >= 3"},
		{"bias + 1", "no-requirement", "bias + 1", "compare it, as in bias + 1 <= 1"},
		{"now() > 3", "unknown-function", "now", ""},
		{"let x = 1; bias < x", "not-in-limits", "", ""},
		{"bias > 1 ? true : false", "not-in-limits", "", ""},
		{"bias in [1, 2]", "not-in-limits", "", ""},
		{"'a' == 'a'", "not-in-limits", "", ""},
		{"not bias", "expression", "not", ""},
		{"µbias <= 1 and bais > 2", "unknown-figure", "µbias", `did you mean "bias"?`},
		{strings.Repeat("(", 100) + "bias" + strings.Repeat(")", 100) + " < 1", "too-deep", "", ""},
		{"bias < 1" + strings.Repeat(" ", 5000), "too-large", "", ""},
		{"bias <= 1e999", "expression", "", ""},
	} {
		_, problems := Compile(place(c.text), types)
		if len(problems) == 0 {
			t.Errorf("%s: nothing was found", c.text)
			continue
		}
		p := problems[0]
		if p.Code != c.code {
			t.Errorf("%s: %s (%s), expected %s", c.text, p.Code, p.Message, c.code)
		}
		if c.at != "" && c.text[p.Span.Start:p.Span.End] != c.at {
			t.Errorf("%s: the mark is under %q, expected %q", c.text, c.text[p.Span.Start:p.Span.End], c.at)
		}
		if c.help != "" && p.Help != c.help {
			t.Errorf("%s: help %q, expected %q", c.text, p.Help, c.help)
		}
	}
}

// TestAllUnknownNamesInOnePass.
func TestAllUnknownNamesInOnePass(t *testing.T) {
	_, problems := Compile(place("a <= 1 and b >= 2 or c < d"), map[string]FigureType{})
	if len(problems) != 4 {
		t.Errorf("%d found: %v", len(problems), problems)
	}
}

// TestGuard: NaN breaks a guard whatever its condition says; expr alone would let not (NaN > 1) hold.
func TestGuard(t *testing.T) {
	known := []string{"supply.current", "table.rate"}
	for _, c := range []struct {
		text  string
		value float64
		want  bool
	}{
		{"supply.current < 1.5", 1, true}, {"supply.current < 1.5", 2, false}, {"supply.current < 1.5", math.NaN(), false},
		{"not (supply.current > 1.5)", math.NaN(), false}, {"not (supply.current > 1.5)", 1, true},
		{"abs(supply.current) <= 2", -2, true}, {"0 < supply.current and supply.current < 2", 1, true}, {"supply.current < 3", math.Inf(-1), false},
	} {
		g, problems := CompileGuard(place(c.text), known)
		if len(problems) > 0 {
			t.Errorf("%s: %v", c.text, problems)
			continue
		}
		if got, err := g.Holds(map[string]float64{"supply.current": c.value}); err != nil || got != c.want {
			t.Errorf("%s at %g: %v, %v", c.text, c.value, got, err)
		}
	}
	g, _ := CompileGuard(place("supply.current < 1.5"), known)
	if got, _ := g.Holds(nil); got {
		t.Error("an absent reading let a guard hold")
	}
	for text, code := range map[string]string{"suply.current < 1": "unknown-reading", "supply.current": "expression", "filter([1], # > 0)": "not-in-guards", "now() > 1": "not-in-guards"} {
		if _, problems := CompileGuard(place(text), known); len(problems) == 0 || problems[0].Code != code {
			t.Errorf("%s: %v, expected %s", text, problems, code)
		}
	}
}

// FuzzAgainstExpr: wherever all figures are finite, our answer is expr's.
func FuzzAgainstExpr(f *testing.F) {
	for _, text := range []string{"a <= 1", "abs(a) < b", "a + b * 2 > 3 and not (a == b)", "max(a, b) >= min(1, a) or a != b", "0 < a and a < 1", "-a - -b <= 1 / 2", "a / b > 1"} {
		f.Add(text, 1.5, -0.25)
	}
	types := map[string]FigureType{"a": {}, "b": {}}
	f.Fuzz(func(t *testing.T, text string, a, b float64) {
		if len(text) > 200 || math.IsNaN(a) || math.IsNaN(b) || math.IsInf(a, 0) || math.IsInf(b, 0) || strings.Contains(text, "mean") || strings.Contains(text, "spread") {
			return
		}
		l, problems := Compile(place(text), types)
		if len(problems) > 0 {
			for _, p := range problems {
				if p.Span.Start < 0 || p.Span.End > max(len(text), 1) || p.Span.Start > p.Span.End {
					t.Fatalf("%q: span %+v", text, p.Span)
				}
			}
			return
		}
		plain := func(x float64) []Element {
			return []Element{{"", quantity.Measured{Value: x, Family: quantity.StudentT, DoF: math.Inf(1)}}}
		}
		got := l.Judge(Values{"a": plain(a), "b": plain(b)}, Simple, 1)[0]
		if got.Verdict == Void {
			return // a number that is not finite came about
		}
		want, err := expr.Eval(text, map[string]any{"a": a, "b": b})
		if err != nil {
			return // expr's own limits: integers that overflow and such
		}
		if (got.Verdict == Accept) != want.(bool) {
			t.Fatalf("%q with a = %g, b = %g: %s, expr says %v", text, a, b, got.Verdict, want)
		}
	})
}

func BenchmarkGuard(b *testing.B) {
	g, _ := CompileGuard(place("supply.current < 1.5"), []string{"supply.current"})
	readings := map[string]float64{"supply.current": 0.8}
	for b.Loop() {
		if ok, err := g.Holds(readings); !ok || err != nil {
			b.Fatal(ok, err)
		}
	}
}
