package procedures

import (
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"proofrate/limits/quantity"
)

// plan makes a plan that must be sound.
func plan(t *testing.T, text string, o Options) *Plan {
	t.Helper()
	p, file, problems := Load("procedure.yaml", []byte(text))
	var made *Plan
	if len(problems) == 0 {
		made, problems = p.Plan(o)
	}
	if len(problems) > 0 {
		var b strings.Builder
		problems.Render(&b, file)
		t.Fatal(b.String())
	}
	return made
}

// head is a procedure up to its steps, tail what follows them.
const (
	head = `procedure: test
title: Test
revision: A
applies-to: [OG-*]
rule: guarded
gyro: {family: optical, output: rate, range: 250 deg/s, sample-rate: 100 Hz, polarity: +}
needs: {table: 250 deg/s, chamber: -40 71 degC, supply: 5 V, current: 1.5 A}
`
	tail = `figures:
  bias: {is: bias, of: rest, pick: first, unit: deg/h}
limits:
  - {clause: 1, figure: bias, at-most: 1 deg/h}
`
)

func list(p *Plan) []string {
	var lines []string
	for _, s := range p.Steps {
		line := fmt.Sprintf("%d %s: %s", s.Number, s.Stage, s.Text)
		if len(s.Labels) > 0 {
			line += " [" + elementKey(s.Labels) + "]"
		}
		if s.Leg != "" {
			line += " " + s.Leg
		}
		lines = append(lines, line)
	}
	return lines
}

func TestUnroll(t *testing.T) {
	p := plan(t, head+`steps:
  - power: on
  - stage: over temperature
    each: {temperature: 23 -40 23 degC}
    steps:
      - record: rest
        for: 1 min
      - stage: sweep
        each: {rate: 0 50 0 0 -50 deg/s}
        steps:
          - turn: rate
  - stage: starts
    repeat: 2
    as: cycle
    steps:
      - wait: 30 s
`+tail, Options{})
	want := []string{
		"1 : power on",
		"2 over temperature: record rest for 1 min [temperature 23 degC (visit 1)] down",
		"3 over temperature / sweep: turn 0 deg/s [temperature 23 degC (visit 1), rate 0 deg/s (visit 1)] up",
		"4 over temperature / sweep: turn 50 deg/s [temperature 23 degC (visit 1), rate 50 deg/s (visit 1)] up",
		"5 over temperature / sweep: turn 0 deg/s [temperature 23 degC (visit 1), rate 0 deg/s (visit 2)] down",
		"6 over temperature / sweep: turn 0 deg/s [temperature 23 degC (visit 1), rate 0 deg/s (visit 3)] down",
		"7 over temperature / sweep: turn -50 deg/s [temperature 23 degC (visit 1), rate -50 deg/s (visit 1)] down",
		"8 over temperature: record rest for 1 min [temperature -40 degC (visit 1)] down",
		"9 over temperature / sweep: turn 0 deg/s [temperature -40 degC (visit 1), rate 0 deg/s (visit 1)] up",
		"10 over temperature / sweep: turn 50 deg/s [temperature -40 degC (visit 1), rate 50 deg/s (visit 1)] up",
		"11 over temperature / sweep: turn 0 deg/s [temperature -40 degC (visit 1), rate 0 deg/s (visit 2)] down",
		"12 over temperature / sweep: turn 0 deg/s [temperature -40 degC (visit 1), rate 0 deg/s (visit 3)] down",
		"13 over temperature / sweep: turn -50 deg/s [temperature -40 degC (visit 1), rate -50 deg/s (visit 1)] down",
		"14 over temperature: record rest for 1 min [temperature 23 degC (visit 2)] up",
		"15 over temperature / sweep: turn 0 deg/s [temperature 23 degC (visit 2), rate 0 deg/s (visit 1)] up",
		"16 over temperature / sweep: turn 50 deg/s [temperature 23 degC (visit 2), rate 50 deg/s (visit 1)] up",
		"17 over temperature / sweep: turn 0 deg/s [temperature 23 degC (visit 2), rate 0 deg/s (visit 2)] down",
		"18 over temperature / sweep: turn 0 deg/s [temperature 23 degC (visit 2), rate 0 deg/s (visit 3)] down",
		"19 over temperature / sweep: turn -50 deg/s [temperature 23 degC (visit 2), rate -50 deg/s (visit 1)] down",
		"20 starts: wait 30 s [cycle 1 (visit 1)]",
		"21 starts: wait 30 s [cycle 2 (visit 1)]",
	}
	if diff := cmp.Diff(list(p), want); diff != "" {
		t.Errorf("steps (-got +want):\n%s", diff)
	}
}

// TestActions: each step's action, with what it takes from variables and parameters.
func TestActions(t *testing.T) {
	p := plan(t, head+`parameters: {least: 20 s, held: 10 min}
steps:
  - record: start
    from: power-on
    while:
      - power: on
      - wait: 1 h 30 min
  - soak: -40 degC
    of: gyro.temperature
    band: 1 K
    drift: 0.02 K/min
    hold: held
    at-most: 3 h
  - settle: table.rate
    at: 0 deg/s
    band: 0.01 deg/s
    hold: 1 s
    at-most: 1 min
  - position: 90 deg
  - record: rest
    for: {turns: 1, at-least: least}
  - turn: 50 deg/s
  - record: seven-seconds-a-turn
    for: {turns: 1, at-least: least}
  - turn: -7 deg/s
  - record: slow
    for: {turns: 2, at-least: least}
  - hold: position
  - power: {off: B}
  - ask: Level of the fixture?
    for: attitude
  - ask: Pressure?
    for: number
    unit: V
  - ask: Connector?
    for: choice
    choices: [left, right]
  - park: 23 degC
`+tail, Options{})
	q := func(text string) quantity.Value {
		v, err := quantity.Parse(text)
		if err != nil {
			t.Fatal(err)
		}
		return v
	}
	want := []Action{
		Record{Name: "start", FromPowerOn: true, While: []Step{{Action: Power{On: true}}, {Action: Wait{90 * time.Minute}}}},
		Soak{Target: q("-40 degC"), Of: "gyro.temperature", Band: q("1 K"), Drift: q("0.02 K/min"), Hold: 10 * time.Minute, AtMost: 3 * time.Hour},
		Settle{Reading: "table.rate", Target: q("0 deg/s"), Band: q("0.01 deg/s"), Hold: time.Second, AtMost: time.Minute},
		Position{q("90 deg")},
		Record{Name: "rest", For: 20 * time.Second},
		Turn{q("50 deg/s")},
		Record{Name: "seven-seconds-a-turn", For: 21_600 * time.Millisecond}, // three turns of 7.2 s
		Turn{q("-7 deg/s")},
		Record{Name: "slow", For: 102_857_142_857 * time.Nanosecond}, // two turns of 360/7 s
		Hold{},
		Power{Slot: "B"},
		Ask{Prompt: "Level of the fixture?", Kind: "attitude", Unit: quantity.MustUnit("deg")},
		Ask{Prompt: "Pressure?", Kind: "number", Unit: quantity.MustUnit("V")},
		Ask{Prompt: "Connector?", Kind: "choice", Choices: []string{"left", "right"}},
		Park{q("23 degC")},
	}
	var got []Action
	for _, s := range p.Steps {
		if r, ok := s.Action.(Record); ok {
			for i := range r.While {
				r.While[i] = Step{Action: r.While[i].Action}
			}
		}
		got = append(got, s.Action)
	}
	if diff := cmp.Diff(got, want, cmp.Comparer(func(a, b quantity.Value) bool { return a == b }), cmp.Comparer(func(a, b quantity.Unit) bool { return a == b })); diff != "" {
		t.Errorf("actions (-got +want):\n%s", diff)
	}
}

const withVariants = head + `parameters: {dwell: 20 s, most: 2 deg/h}
variants:
  OG-12: {}
  OG-15:
    parameters: {dwell: 40 s, most: 5 deg/h}
    bounds: {1.2: {at-most: 9 deg/h}}
steps:
  - power: on
  - record: rest
    for: dwell
figures:
  bias: {is: bias, of: rest, unit: deg/h}
limits:
  - {clause: 1.1, figure: bias, at-most: most}
  - {clause: 1.2, figure: bias, at-most: 3 deg/h}
`

func TestVariantsAndParameters(t *testing.T) {
	for _, c := range []struct {
		name, part string
		set        map[string]string
		want       string
	}{
		{"no part", "", nil, "dwell 20 s, most 2 deg/h; rest 20s; bias at most 2 deg/h; bias at most 3 deg/h"},
		{"as it stands", "OG-12", nil, "dwell 20 s, most 2 deg/h; rest 20s; bias at most 2 deg/h; bias at most 3 deg/h"},
		{"variant", "OG-15", nil, "dwell 40 s, most 5 deg/h; rest 40s; bias at most 5 deg/h; bias at most 9 deg/h"},
		{"set", "OG-15", map[string]string{"dwell": "1 min"}, "dwell 1 min (set), most 5 deg/h; rest 1m0s; bias at most 5 deg/h; bias at most 9 deg/h"},
		{"set without a space", "OG-12", map[string]string{"dwell": "30s"}, "dwell 30 s (set), most 2 deg/h; rest 30s; bias at most 2 deg/h; bias at most 3 deg/h"},
	} {
		t.Run(c.name, func(t *testing.T) {
			p := plan(t, withVariants, Options{Part: c.part, Parameters: c.set})
			var parameters []string
			for _, q := range p.Parameters {
				text := q.Name + " " + q.Value.String()
				if q.Overridden {
					text += " (set)"
				}
				parameters = append(parameters, text)
			}
			got := strings.Join(parameters, ", ") + "; rest " + p.Steps[1].Action.(Record).For.String()
			for _, l := range p.Limits {
				got += "; " + l.Require
			}
			if got != c.want {
				t.Errorf("got  %s\nwant %s", got, c.want)
			}
		})
	}
}

func TestAppliesTo(t *testing.T) {
	for _, c := range []struct {
		pattern, part string
		want          bool
	}{
		{"OG-*", "OG-12", true}, {"OG-*", "OG-", true}, {"OG-*", "XOG-12", false}, {"OG-*", "og-12", false},
		{"*", "anything", true}, {"OG-*-B", "OG-12-B", true}, {"OG-*-B", "OG-12-C", false}, {"OG.1", "OG-1", false}, {"OG-12", "OG-123", false},
	} {
		if got := matches(c.pattern, c.part); got != c.want {
			t.Errorf("%s for %s: got %v, want %v", c.pattern, c.part, got, c.want)
		}
	}
}

// TestGuardScope: a guard is the bench's or a slot's by the readings that it names.
func TestGuardScope(t *testing.T) {
	p := plan(t, head+`guards:
  - require: supply.current < 1.5 and gyro.temperature < 90
    tolerate: 2 s
  - require: abs(table.rate) < 260 and chamber.temperature < 85
  - require: level.value < 2
steps:
  - power: on
  - record: rest
    for: 1 min
`+tail, Options{})
	var got []string
	for _, g := range p.Guards {
		got = append(got, fmt.Sprint(g.Bench, g.Tolerate, g.Check.Readings()))
	}
	want := []string{"false 2s [gyro.temperature supply.current]", "true 0s [chamber.temperature table.rate]", "false 0s [level.value]"}
	if diff := cmp.Diff(got, want); diff != "" {
		t.Errorf("guards (-got +want):\n%s", diff)
	}
}

// TestElements: how recordings become elements of figures.
func TestElements(t *testing.T) {
	p := plan(t, head+`steps:
  - power: on
  - record: rest
    for: 90 min
  - stage: over temperature
    each: {temperature: 23 -40 23 degC}
    steps:
      - hold: position
      - record: cold-rest
        for: 10 min
      - stage: sweep
        each: {rate: 0 50 0 -50 deg/s}
        steps:
          - turn: rate
          - record: sweep
            for: 10 s
figures:
  each_visit:  {is: bias, of: cold-rest, per: temperature visit, unit: deg/h}
  first_warm:  {is: bias, of: cold-rest, at: {temperature: 23 degC, visit: 1}, unit: deg/h}
  last_warm:   {is: bias, of: cold-rest, at: {temperature: 23 degC}, pick: last, unit: deg/h}
  per_value:   {is: bias, of: cold-rest, per: temperature, pick: first, unit: deg/h}
  sf_cold:     {is: scale-factor-error, of: sweep, at: {temperature: -40 degC}, unit: ppm}
  sf_last:     {is: scale-factor-error, of: sweep, pick: last, noise: rest, unit: ppm}
  at_rate:     {is: bias, of: sweep, per: temperature visit rate, at: {rate: 0 deg/s, visit: 2}, unit: deg/h}
  change:      {formula: each_visit - first_warm, unit: deg/h}
  worst:       {formula: max(change), unit: deg/h}
limits:
  - {clause: 1, figure: worst, at-most: 1 deg/h}
  - {clause: 2, figure: each_visit, at: {temperature: 23 degC}, at-most: 1 deg/h}
`, Options{})
	var got []string
	for _, f := range p.Figures {
		for _, e := range f.Elements {
			line := f.Name + " [" + elementKey(e.Labels) + "]"
			for _, r := range e.recordings {
				line += fmt.Sprint(" ", r)
			}
			if e.noise != none {
				line += fmt.Sprint(" noise ", e.noise)
			}
			got = append(got, line)
		}
	}
	// 0 rest; 1 cold-rest, 2-5 sweep at 23 degC; 6, 7-10 at -40; 11, 12-15 at 23 again
	want := []string{
		"each_visit [temperature 23 degC (visit 1)] 1", "each_visit [temperature -40 degC (visit 1)] 6", "each_visit [temperature 23 degC (visit 2)] 11",
		"first_warm [] 1", "last_warm [] 11",
		"per_value [temperature 23 degC] 1", "per_value [temperature -40 degC] 6",
		"sf_cold [] 7 8 9 10 noise 0", "sf_last [] 12 13 14 15 noise 0",
		"at_rate [temperature 23 degC (visit 1), rate 0 deg/s] 4", "at_rate [temperature -40 degC (visit 1), rate 0 deg/s] 9", "at_rate [temperature 23 degC (visit 2), rate 0 deg/s] 14",
		"change [temperature 23 degC (visit 1)]", "change [temperature -40 degC (visit 1)]", "change [temperature 23 degC (visit 2)]",
		"worst []",
	}
	if diff := cmp.Diff(got, want); diff != "" {
		t.Errorf("elements (-got +want):\n%s", diff)
	}
	if got := p.Limits[1].parts[0].only; len(got) != 2 || !got["temperature 23 degC (visit 2)"] {
		t.Errorf("limit of clause 2 is over %v", got)
	}
}

// TestShipped: every document that is shipped or that tests elsewhere use is sound, and small of its kind.
func TestShipped(t *testing.T) {
	files, err := filepath.Glob("../testdata/procedures/*.yaml")
	if err != nil || len(files) < 4 {
		t.Fatalf("%d procedures for tests, error %v", len(files), err)
	}
	texts := map[string][]byte{}
	for _, file := range files {
		text, err := os.ReadFile(file)
		if err != nil {
			t.Fatal(err)
		}
		texts[strings.TrimSuffix(filepath.Base(file), ".yaml")] = text
	}
	for _, name := range ShippedNames() {
		texts[name], _ = Shipped(name)
	}
	for name, text := range texts {
		t.Run(name, func(t *testing.T) {
			p := plan(t, string(text), Options{})
			if p.Name != name {
				t.Errorf("it calls itself %s", p.Name)
			}
			if !strings.Contains(string(text), "emergency stop") {
				t.Error("its head says nothing of the emergency stop")
			}
			whole := time.Duration(0)
			for _, d := range p.Estimate(bench()) {
				whole += d
			}
			long := strings.HasPrefix(name, "fibre-optic-rate")
			if long && whole < 8*time.Hour || !long && whole > time.Hour {
				t.Errorf("it takes about %s", whole)
			}
			if problems := p.CheckBench(bench()); len(problems) > 0 && p.Gyro.Output == "rate" && p.Needs.Voltage.Number == 5 {
				t.Error(problems)
			}
		})
	}
	if _, ok := Shipped("no-such-procedure"); ok {
		t.Error("a procedure that is not shipped was found")
	}
}
