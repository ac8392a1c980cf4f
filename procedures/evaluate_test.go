package procedures

import (
	"context"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"runtime"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"proofrate/instruments"
	"proofrate/limits"
	"proofrate/limits/quantity"
	"proofrate/results/recording"
)

const forEvaluate = head + `steps:
  - power: on
  - stage: polarity
    each: {rate: 20 -20 deg/s}
    steps:
      - turn: rate
      - record: polarity
        for: 5 s
  - stage: over temperature
    each: {temperature: 23 -40 degC}
    steps:
      - hold: position
      - record: rest
        for: 60 s
      - stage: sweep
        each: {rate: 0 125 250 125 0 -125 -250 -125 0 125 250 deg/s}
        steps:
          - turn: rate
          - record: sweep
            for: 10 s
figures:
  shift:    {formula: max(bias) - min(bias), unit: deg/h}
  half:     {formula: bias / 2, unit: deg/h}
  bias:     {is: bias, of: rest, per: temperature visit, scale-factor: sf_error, unit: deg/h}
  raw_bias: {is: bias, of: rest, per: temperature visit, unit: deg/h}
  sf_error: {is: scale-factor-error, of: sweep, per: temperature visit, unit: ppm}
  polarity: {is: polarity, of: polarity}
limits:
  - {clause: 1.1, require: polarity == 1, rule: simple, otherwise: ends-trial}
  - {clause: 2.1, figure: bias, between: -2 2 deg/h}
  - {clause: 2.2, figure: shift, at-most: 2.5 deg/h}
  - {clause: 2.3, figure: bias, at: {temperature: -40 degC}, at-least: 0 deg/h}
  - {clause: 3.1, require: abs(sf_error) <= 20000}
`

// truth of the gyro whose recordings the tests make: bias in deg/h by temperature, and scale factor.
var truth = struct {
	bias map[float64]float64
	sf   float64
}{map[float64]float64{23: 1, -40: -0.5}, 1.01}

const (
	degreeRad = math.Pi / 180
	earth     = 7.292115e-5 // rad/s, WGS 84
)

// made are the recordings that a gyro of slot A makes: y = S (x + Omega sin(lat)) + b, and white noise of
// 0.002 deg/sqrt(h), in counts of 0.05 deg/h at 100 Hz.
func made(p *Plan, seed uint64) []*recording.Recording {
	random := rand.New(rand.NewPCG(seed, 1))
	count := of("0.05 deg/h")
	latitude := 47.66 * degreeRad
	var list []*recording.Recording
	start := 10.0
	p.walk(p.Steps, func(s Step) {
		r, ok := s.Action.(Record)
		if !ok {
			return
		}
		rate, bias := 0.0, 0.0
		if l, ok := s.Labels.Find("rate"); ok {
			rate = l.Value.SI()
		}
		if l, ok := s.Labels.Find("temperature"); ok {
			bias = truth.bias[l.Value.SI()]
		}
		rec := &recording.Recording{Section: recording.Section{Name: r.Name, Step: s.Text, Labels: s.Labels, Leg: s.Leg, Start: start,
			Channels: []recording.Channel{{Name: "rate", Count: count}}, SampleInterval: 0.01}, Quality: recording.Quality{Complete: true}}
		counts := make([]int64, int(r.For.Seconds()*100))
		mean := truth.sf*(rate+earth*math.Sin(latitude))/count.SI() + bias/0.05
		white := 0.002 * 60 / math.Sqrt(0.01) / 0.05 // counts
		for i := range counts {
			counts[i] = int64(math.Round(mean + white*random.NormFloat64()))
		}
		rec.Counts = [][]int64{counts}
		at, rates, positions := []float64{}, []float64{}, []float64{}
		for t := start; t <= start+r.For.Seconds(); t += 0.5 {
			at, rates, positions = append(at, t), append(rates, rate/degreeRad), append(positions, rate/degreeRad*(t-start))
		}
		rec.Readings = []recording.Series{{Name: "table.rate", Unit: quantity.MustUnit("deg/s"), At: at, Values: rates},
			{Name: "table.position", Unit: quantity.MustUnit("deg"), At: at, Values: positions}}
		list = append(list, rec)
		start += r.For.Seconds() + 5
	})
	return list
}

func evaluate(t *testing.T, p *Plan, recs []*recording.Recording, seed uint64) *Evaluation {
	t.Helper()
	e, err := p.Evaluate(t.Context(), recs, bench(), "A", seed)
	if err != nil {
		t.Fatal(err)
	}
	return e
}

func element(t *testing.T, e *Evaluation, name, labels string) FigureElement {
	t.Helper()
	for _, f := range e.Figures {
		if f.Name == name && elementKey(f.Labels) == labels {
			return f
		}
	}
	t.Fatalf("no figure %s at %q", name, labels)
	return FigureElement{}
}

const (
	warm = "temperature 23 degC (visit 1)"
	cold = "temperature -40 degC (visit 1)"
)

// TestEvaluate: the figures are the truth within 5 standard uncertainties, and formulas are those of the elements.
func TestEvaluate(t *testing.T) {
	p := plan(t, forEvaluate, Options{})
	e := evaluate(t, p, made(p, 1), 1)
	earthUp := earth * math.Sin(47.66*degreeRad) / degreeRad * 3600 // deg/h on the input axis
	for _, c := range []struct {
		name, labels string
		want         float64
	}{
		{"polarity", "", 1},
		{"bias", warm, 1}, {"bias", cold, -0.5},
		{"raw_bias", warm, 1 + 0.01*earthUp}, // without the scale factor its error shows on the Earth's rate
		{"sf_error", warm, 10_000}, {"sf_error", cold, 10_000},
		{"half", warm, 0.5}, {"half", cold, -0.25}, {"shift", "", 1.5},
	} {
		f := element(t, e, c.name, c.labels)
		if m := f.Measured; m.Void != "" || math.Abs(m.Value-c.want) > 5*m.U {
			t.Errorf("%s %s: got %s, want %g", c.name, c.labels, m, c.want)
		}
	}
	var got []string
	for _, j := range e.Judgements {
		got = append(got, fmt.Sprintf("%s [%s] %s: %s, ends %v, by %s", j.Clause, j.Labels, j.Require, j.Verdict, j.EndsTrial, j.Rule))
	}
	want := []string{
		"1.1 [] polarity == 1: accept, ends true, by simple",
		"2.1 [temperature 23 degC] bias between -2 and 2 deg/h: accept, ends false, by guarded",
		"2.1 [temperature -40 degC] bias between -2 and 2 deg/h: accept, ends false, by guarded",
		"2.2 [] shift at most 2.5 deg/h: accept, ends false, by guarded",
		"2.3 [temperature -40 degC] bias at least 0 deg/h at temperature -40 degC: reject, ends false, by guarded",
		"3.1 [temperature 23 degC] abs(sf_error) <= 20000: accept, ends false, by guarded",
		"3.1 [temperature -40 degC] abs(sf_error) <= 20000: accept, ends false, by guarded",
	}
	if diff := cmp.Diff(got, want); diff != "" {
		t.Errorf("judgements (-got +want):\n%s", diff)
	}
	if e.Verdict != limits.Reject {
		t.Errorf("verdict: got %s, want reject", e.Verdict)
	}
	f := element(t, e, "bias", cold)
	if diff := cmp.Diff(f.Recordings, []int{14}); diff != "" || f.Method != "bias" { // 2 of polarity, 1 rest and 11 of the sweep before it
		t.Errorf("bias at -40 degC is from recordings %v by %s", f.Recordings, f.Method)
	}
}

// TestEvaluateIsDeterministic: the result depends on the arguments alone.
func TestEvaluateIsDeterministic(t *testing.T) {
	p := plan(t, forEvaluate, Options{})
	recs := made(p, 1)
	said := func(seed uint64, slot instruments.SlotID) string {
		e, err := p.Evaluate(t.Context(), recs, bench(), slot, seed)
		if err != nil {
			t.Fatal(err)
		}
		return fmt.Sprintf("%+v", *e)
	}
	first := said(1, "A")
	before := runtime.GOMAXPROCS(0)
	defer runtime.GOMAXPROCS(before)
	for _, n := range []int{1, 2, 7} {
		runtime.GOMAXPROCS(n)
		if said(1, "A") != first {
			t.Errorf("with %d processors the result differs", n)
		}
	}
	if said(2, "A") == first {
		t.Error("another seed gives the same draws")
	}
	e := evaluator{seed: 1, slot: "A"}
	streams := map[uint64]string{}
	for _, s := range [][4]string{{"A", "figure", "bias", ""}, {"A", "limit", "bias", ""}, {"B", "figure", "bias", ""}, {"A", "figure", "bias", "1"}, {"A", "figure", "bias1", ""}, {"Af", "igure", "bias", ""}} {
		e.slot = instruments.SlotID(s[0])
		key := e.stream(s[1], s[2], s[3])
		if other, taken := streams[key]; taken {
			t.Errorf("%v and %s share a stream", s, other)
		}
		streams[key] = fmt.Sprint(s)
	}
}

// TestMissing: what is not there, or not whole, voids what leans on it, with the reason, and nothing else.
func TestMissing(t *testing.T) {
	p := plan(t, forEvaluate, Options{})
	isRest := func(r *recording.Recording) bool { return r.Name == "rest" && elementKey(r.Labels) == cold }
	for _, c := range []struct {
		name   string
		change func([]*recording.Recording) []*recording.Recording
		void   map[string]string // figure and labels to a part of the reason
	}{
		{"recording not made", func(recs []*recording.Recording) (kept []*recording.Recording) {
			for _, r := range recs {
				if !isRest(r) {
					kept = append(kept, r)
				}
			}
			return kept
		}, map[string]string{
			"bias " + cold: `the recording "rest" at temperature -40 degC was not made`, "raw_bias " + cold: "was not made",
			"sf_error " + cold: `the recording "rest" at temperature -40 degC was not made`, // it tells the noise
			"half " + cold:     "bias at " + cold + " is void", "shift ": "bias at " + cold + " is void",
		}},
		{"recording cut short", func(recs []*recording.Recording) []*recording.Recording {
			for i, r := range recs {
				if r.Name == "sweep" && elementKey(r.Labels) == warm+", rate -250 deg/s (visit 1)" {
					cut := *r
					cut.Quality = recording.Quality{Reason: "link G1 gone"}
					recs[i] = &cut
				}
			}
			return recs
		}, map[string]string{
			"sf_error " + warm: `the recording "sweep" at temperature 23 degC, rate -250 deg/s was cut short: link G1 gone`,
			"bias " + warm:     "it leans on sf_error, which is void: the recording", "half " + warm: "bias at", "shift ": "bias at",
		}},
		{"nothing", func([]*recording.Recording) []*recording.Recording { return nil }, map[string]string{
			"polarity ": "was not made", "bias " + warm: "", "bias " + cold: "", "raw_bias " + warm: "", "raw_bias " + cold: "", "sf_error " + warm: "",
			"sf_error " + cold: "", "half " + warm: "", "half " + cold: "", "shift ": ""}},
	} {
		t.Run(c.name, func(t *testing.T) {
			e := evaluate(t, p, c.change(made(p, 1)), 1)
			for _, f := range e.Figures {
				key := f.Name + " " + elementKey(f.Labels)
				want, void := c.void[key]
				if got := f.Measured.Void; (got != "") != void || !strings.Contains(got, want) {
					t.Errorf("%s: void for %q, want %q", key, got, want)
				}
				if f.Measured.Void != "" && !math.IsNaN(f.Measured.Value) {
					t.Errorf("%s is void and has a value", key)
				}
			}
			for _, j := range e.Judgements {
				if j.Clause == "2.2" && (j.Verdict != limits.Void || j.Reason == "") {
					t.Errorf("clause 2.2 over a void figure: %s, %q", j.Verdict, j.Reason)
				}
			}
			if e.Verdict == limits.Accept {
				t.Error("a gyro with void figures was accepted")
			}
		})
	}
}

// TestEarly: only limits that end a trial, and only when all their recordings have been made.
func TestEarly(t *testing.T) {
	p := plan(t, forEvaluate, Options{})
	recs := made(p, 1)
	if got := p.Early(t.Context(), recs[:1], bench(), "A", 1); len(got) != 0 {
		t.Errorf("half of the polarity test gives %v", got)
	}
	got := p.Early(t.Context(), recs[:2], bench(), "A", 1)
	if len(got) != 1 || got[0].Clause != "1.1" || got[0].Verdict != limits.Accept {
		t.Errorf("got %v, want clause 1.1 accepted", got)
	}
	for _, r := range recs[:2] {
		for i := range r.Counts[0] {
			r.Counts[0][i] = -r.Counts[0][i]
		}
	}
	if got := p.Early(t.Context(), recs[:2], bench(), "A", 1); len(got) != 1 || got[0].Verdict != limits.Reject {
		t.Errorf("a reversed gyro gives %v", got)
	}
	if got, want := p.Early(t.Context(), recs, bench(), "A", 1)[0], evaluate(t, p, recs, 1).Judgements[0]; got.Probability != want.Probability || got.Verdict != want.Verdict {
		t.Errorf("early %v, at the end %v", got, want)
	}
}

func TestEvaluateIsCancelled(t *testing.T) {
	p := plan(t, forEvaluate, Options{})
	ctx, cancel := context.WithCancelCause(t.Context())
	cancel(errors.New("operator"))
	if e, err := p.Evaluate(ctx, made(p, 1), bench(), "A", 1); err == nil || e != nil {
		t.Errorf("got %v, %v", e, err)
	}
}

// TestBenchFor: a slot's share in the description: axis by sense, uncertainties, calibration.
func TestBenchFor(t *testing.T) {
	d := bench()
	d.Table.Axis = instruments.Vector{0, 0.6, 0.8}
	d.Instruments[0].Calibrations[0].Correction = of("-12 ppm")
	b := benchFor(d, "B")
	got := []float64{b.Latitude, b.AxisEast, b.AxisNorth, b.AxisUp, b.Sense, b.Radius, b.AxisU, b.AttitudeU, b.Creep, b.TableRate.Correction, b.TableRate.U}
	want := []float64{47.66 * degreeRad, 0, -0.6, -0.8, -1, 0.06, 0.0002, 0.0005, 1e-5 * degreeRad, -12e-6, math.Hypot(10e-6, 5e-6)}
	for i := range got {
		if math.Abs(got[i]-want[i]) > 1e-12*math.Max(1, math.Abs(want[i])) {
			t.Errorf("part %d: got %g, want %g", i, got[i], want[i])
		}
	}
	if b.Instrument != "T1" {
		t.Errorf("table %q", b.Instrument)
	}
}

// TestEvaluateFromFile: recordings read back from their file give the same figures and judgements, bit for bit.
func TestEvaluateFromFile(t *testing.T) {
	p := plan(t, strings.Replace(forEvaluate, "figures:\n", `  - hold: position
  - stage: starts
    repeat: 3
    as: cycle
    steps:
      - record: start
        for: 2 s
figures:
  turn_on: {is: repeatability, of: start, over: cycle, measurand: sample, unit: deg/h}
  start_bias: {is: bias, of: start, per: cycle, unit: deg/h}
`, 1), Options{})
	recs := made(p, 1)
	path := t.TempDir() + "/trial"
	w, err := recording.Create(path, recording.FileHead{Slot: "A", Part: "OG-12", Serial: "7"})
	if err != nil {
		t.Fatal(err)
	}
	for _, r := range recs {
		id, err := w.Begin(r.Section)
		if err == nil {
			err = w.Append(id, r.Counts, nil)
		}
		for _, s := range r.Readings {
			for i := range s.At {
				err = errors.Join(err, w.Reading(id, s.Name, s.Unit, s.At[i], s.Values[i]))
			}
		}
		if err = errors.Join(err, w.End(id, r.Quality)); err != nil {
			t.Fatal(err)
		}
	}
	if _, err := w.Close(); err != nil {
		t.Fatal(err)
	}
	file, err := recording.Open(path)
	if err != nil {
		t.Fatal(err)
	}
	got, want := fmt.Sprintf("%+v", *evaluate(t, p, file.Recordings, 1)), fmt.Sprintf("%+v", *evaluate(t, p, recs, 1))
	if got != want {
		t.Errorf("from the file\n%s\nfrom memory\n%s", got, want)
	}
	if strings.Contains(got, "was not made") {
		t.Error("a recording was lost on the way through the file")
	}
}

// TestParallelPanics: a fault in a task reaches the caller, and the other tasks are done.
func TestParallelPanics(t *testing.T) {
	tasks := make([]*task, 20)
	for i := range tasks {
		tasks[i] = &task{}
	}
	defer func() {
		if fault := recover(); fault != "broken invariant" {
			t.Errorf("recovered %v", fault)
		}
		for i, task := range tasks[1:] {
			if task.got.Name != "done" {
				t.Errorf("task %d was not done", i+1)
			}
		}
	}()
	err := parallel(t.Context(), tasks, func(one *task) {
		if one == tasks[0] {
			panic("broken invariant")
		}
		one.got.Name = "done"
	})
	t.Errorf("no panic, error %v", err)
}

// TestBoundsPerLabel: bounds that differ by a label's value judge each element by its own.
func TestBoundsPerLabel(t *testing.T) {
	before, _, _ := strings.Cut(forEvaluate, "limits:")
	p := plan(t, before+`limits:
  - clause: 4.1
    figure: bias
    per: temperature
    between:
      23 degC: 0.5 1.5 deg/h
      -40 degC: -0.3 0.3 deg/h
  - clause: 4.2
    figure: raw_bias
    at: {temperature: 23 degC}
    at-least: 1.2 deg/h
`, Options{})
	var got []string
	for _, j := range evaluate(t, p, made(p, 1), 1).Judgements {
		got = append(got, fmt.Sprintf("%s [%s] %s: %s", j.Clause, j.Labels, j.Require, j.Verdict))
	}
	want := []string{
		"4.1 [temperature 23 degC] bias between 0.5 and 1.5 deg/h at 23 degC, -0.3 and 0.3 deg/h at -40 degC: accept",
		"4.1 [temperature -40 degC] bias between 0.5 and 1.5 deg/h at 23 degC, -0.3 and 0.3 deg/h at -40 degC: reject",
		"4.2 [temperature 23 degC] raw_bias at least 1.2 deg/h at temperature 23 degC: reject",
	}
	if diff := cmp.Diff(got, want); diff != "" {
		t.Errorf("judgements (-got +want):\n%s", diff)
	}
}
