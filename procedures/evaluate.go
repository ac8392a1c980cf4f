package procedures

import (
	"context"
	"encoding/binary"
	"fmt"
	"hash/fnv"
	"math"
	"runtime"
	"sync"

	"proofrate/instruments"
	"proofrate/limits"
	"proofrate/limits/quantity"
	"proofrate/results/recording"
	"proofrate/results/reduce"
)

// Evaluation is what a trial's recordings come to.
type Evaluation struct {
	Verdict    limits.Verdict
	Figures    []FigureElement
	Judgements []Judgement
}

// FigureElement is one element of a figure.
type FigureElement struct {
	Name       string
	Labels     recording.Labels
	Measured   quantity.Measured
	Method     string // of the catalogue, or "formula"
	Recordings []int  // that it was reduced from: indices into those given
}

// Judgement is what a limit came to for one element.
type Judgement struct {
	Clause, Require, Rule string
	EndsTrial             bool
	limits.Judgement
}

// Evaluate reduces a trial's recordings to figures and judges the limits. It is the only way from recordings to
// judgements. A figure whose recordings are missing or incomplete is void and says which. The result depends on the
// arguments alone. The error is ctx's.
func (p *Plan) Evaluate(ctx context.Context, recs []*recording.Recording, d *instruments.Description, slot instruments.SlotID, seed uint64) (*Evaluation, error) {
	e := p.evaluator(recs, d, slot, seed)
	figures, err := e.figures(ctx, nil)
	if err != nil {
		return nil, err
	}
	result := &Evaluation{Figures: figures}
	result.Judgements = e.judge(figures, func(Limit) bool { return true })
	var verdicts []limits.Verdict
	for _, j := range result.Judgements {
		verdicts = append(verdicts, j.Verdict)
	}
	result.Verdict = limits.Combine(verdicts)
	return result, nil
}

// Early judges those limits with `otherwise: ends-trial` whose figures' recordings have all been made.
func (p *Plan) Early(ctx context.Context, recs []*recording.Recording, d *instruments.Description, slot instruments.SlotID, seed uint64) []Judgement {
	e := p.evaluator(recs, d, slot, seed)
	ready := func(l Limit) bool {
		if !l.EndsTrial {
			return false
		}
		for _, part := range l.parts {
			for _, name := range part.limit.Figures() {
				if !e.ready(name) {
					return false
				}
			}
		}
		return true
	}
	wanted := map[string]bool{}
	for _, l := range p.Limits {
		if ready(l) {
			for _, part := range l.parts {
				for _, name := range part.limit.Figures() {
					p.lean(name, wanted)
				}
			}
		}
	}
	if len(wanted) == 0 {
		return nil
	}
	figures, err := e.figures(ctx, wanted)
	if err != nil {
		return nil
	}
	return e.judge(figures, ready)
}

// lean adds a figure and those it leans on.
func (p *Plan) lean(name string, wanted map[string]bool) {
	f := p.figure(name)
	if f == nil || wanted[name] {
		return
	}
	wanted[name] = true
	if f.scaleFactor != "" {
		p.lean(f.scaleFactor, wanted)
	}
	if f.formula != nil {
		for _, other := range f.formula.Figures() {
			p.lean(other, wanted)
		}
	}
}

func (p *Plan) figure(name string) *Figure {
	for i := range p.Figures {
		if p.Figures[i].Name == name {
			return &p.Figures[i]
		}
	}
	return nil
}

// evaluator holds one evaluation's inputs.
type evaluator struct {
	plan  *Plan
	recs  []*recording.Recording
	at    []int // expected recording -> index into recs, or -1
	bench reduce.Bench
	gyro  reduce.Gyro
	slot  instruments.SlotID
	seed  uint64
}

func (p *Plan) evaluator(recs []*recording.Recording, d *instruments.Description, slot instruments.SlotID, seed uint64) *evaluator {
	e := &evaluator{plan: p, recs: recs, slot: slot, seed: seed, bench: benchFor(d, slot), at: make([]int, len(p.expected))}
	e.gyro = reduce.Gyro{Family: p.Gyro.Family, Output: p.Gyro.Output, Range: p.Gyro.Range.SI(), Polarity: p.Gyro.Polarity,
		AccelerationSensitivity: p.Gyro.AccelerationSensitivity.SI()}
	made := map[string]int{}
	for i, r := range recs {
		made[recordingKey(r.Name, r.Labels)] = i
	}
	for i, x := range p.expected {
		e.at[i] = -1
		if at, ok := made[x.key()]; ok {
			e.at[i] = at
		}
	}
	return e
}

// benchFor gives the part of a bench's description that one slot's figures depend on.
func benchFor(d *instruments.Description, slot instruments.SlotID) reduce.Bench {
	b := reduce.Bench{Latitude: d.Site.Latitude.SI(), Sense: 1, AxisUp: 1}
	for _, s := range d.Slots {
		if s.ID == slot {
			b.Sense, b.Radius = s.Sense, s.Radius.SI()
			b.AttitudeU = s.AttitudeUncertainty.SI()
		}
	}
	if d.Table == nil {
		b.AxisUp = b.Sense
		return b
	}
	axis := d.Table.Axis
	b.AxisEast, b.AxisNorth, b.AxisUp = b.Sense*axis[0], b.Sense*axis[1], b.Sense*axis[2]
	b.AxisU = d.Table.AxisUncertainty.SI()
	b.Creep, b.Instrument = d.Table.Creep.SI(), d.Table.Instrument
	for _, i := range d.Instruments {
		if i.Name != d.Table.Instrument {
			continue
		}
		for _, c := range i.Calibrations {
			if c.Reading == "table.rate" {
				b.TableRate = reduce.Calibration{Correction: c.Correction.SI(), U: math.Hypot(c.U.SI()/c.K, c.Drift.SI())}
			}
		}
	}
	return b
}

// ready says whether all recordings of a figure, and of those it leans on, have been made.
func (e *evaluator) ready(name string) bool {
	wanted := map[string]bool{}
	e.plan.lean(name, wanted)
	for f := range wanted {
		for _, element := range e.plan.figure(f).Elements {
			for _, i := range element.recordings {
				if e.at[i] < 0 {
					return false
				}
			}
		}
	}
	return true
}

// figures evaluates the wanted figures (nil: all): first those that lean on nothing, then those that name a scale
// factor, then formulas in the order of the document. Within a pass each element is a task of its own; its result has
// its own place, so the order in which processors finish does not matter.
func (e *evaluator) figures(ctx context.Context, wanted map[string]bool) ([]FigureElement, error) {
	var list []FigureElement
	var owner []*Figure
	for i := range e.plan.Figures {
		f := &e.plan.Figures[i]
		if wanted != nil && !wanted[f.Name] {
			continue
		}
		for _, element := range f.Elements {
			one := FigureElement{Name: f.Name, Labels: element.Labels, Method: f.Method.Name}
			if f.formula != nil {
				one.Method = "formula"
			}
			for _, r := range element.recordings {
				if e.at[r] >= 0 {
					one.Recordings = append(one.Recordings, e.at[r])
				}
			}
			list, owner = append(list, one), append(owner, f)
		}
	}
	var plain, leaning []int
	for i, f := range owner {
		switch {
		case f.formula != nil:
		case f.scaleFactor != "":
			leaning = append(leaning, i)
		default:
			plain = append(plain, i)
		}
	}
	specs := make([]ElementSpec, 0, len(list))
	for _, f := range unique(owner) {
		specs = append(specs, f.Elements...)
	}
	for _, pass := range [][]int{plain, leaning} {
		if err := parallel(ctx, pass, func(i int) { list[i].Measured = e.reduce(ctx, owner[i], specs[i], list) }); err != nil {
			return nil, err
		}
	}
	for _, f := range unique(owner) {
		if f.formula == nil {
			continue
		}
		for _, got := range f.formula.Evaluate(values(list), f.Unit, e.stream(f.Name, "")) {
			for i := range list {
				if list[i].Name == f.Name && (len(f.labels) == 0 || elementKey(list[i].Labels, true) == got.Labels) {
					list[i].Measured = got.Measured
				}
			}
		}
	}
	return list, ctx.Err()
}

func unique(owner []*Figure) []*Figure {
	var list []*Figure
	for i, f := range owner {
		if i == 0 || owner[i-1] != f {
			list = append(list, f)
		}
	}
	return list
}

// parallel does the tasks on as many workers as there are processors.
func parallel(ctx context.Context, tasks []int, do func(int)) error {
	next := make(chan int)
	var workers sync.WaitGroup
	for range min(runtime.GOMAXPROCS(0), len(tasks)) {
		workers.Go(func() {
			for i := range next {
				do(i)
			}
		})
	}
	for _, i := range tasks {
		if ctx.Err() != nil {
			break
		}
		next <- i
	}
	close(next)
	workers.Wait()
	return ctx.Err()
}

// reduce evaluates one element.
func (e *evaluator) reduce(ctx context.Context, f *Figure, element ElementSpec, figures []FigureElement) quantity.Measured {
	in := reduce.Input{Bench: e.bench, Gyro: e.gyro, Options: f.options, Seed: e.stream(f.Name, elementKey(element.Labels, true))}
	for _, r := range element.recordings {
		want := e.plan.expected[r]
		if e.at[r] < 0 {
			return quantity.Voided(f.Unit, missingReason(want))
		}
		rec := e.recs[e.at[r]]
		if !rec.Quality.Complete {
			return quantity.Voided(f.Unit, fmt.Sprintf("%s was cut short: %s", describe(want), rec.Quality.Reason))
		}
		in.Recordings = append(in.Recordings, rec)
	}
	in.Noise = e.noise(f.noise, element.Labels)
	if f.scaleFactor != "" {
		sf := leanOn(figures, f.scaleFactor, element.Labels)
		if sf == nil || sf.Void != "" {
			reason := "was not measured"
			if sf != nil {
				reason = "is void: " + sf.Void
			}
			return quantity.Voided(f.Unit, fmt.Sprintf("it leans on %s, which %s", f.scaleFactor, reason))
		}
		in.ScaleFactor = sf
	}
	got, err := f.Method.Reduce(ctx, in).To(f.Unit)
	if err != nil {
		panic(fmt.Sprintf("procedures: method %s answers in %v, figure %s is planned in %s", f.Method.Name, err, f.Name, f.Unit))
	}
	return got
}

// noise finds the recordings from which an element's noise is taken: those made at the element's own labels first, then
// any other, complete ones only.
func (e *evaluator) noise(name string, labels recording.Labels) []*recording.Recording {
	var own, others []*recording.Recording
	for _, r := range e.recs {
		if name == "" || r.Name != name || !r.Quality.Complete {
			continue
		}
		fits := true
		for _, l := range r.Labels {
			want, ok := labels.Find(l.Name)
			fits = fits && (!ok || want.Value.Same(l.Value) && (want.Visit == 0 || want.Visit == l.Visit))
		}
		if fits {
			own = append(own, r)
		} else {
			others = append(others, r)
		}
	}
	return append(own, others...)
}

func missingReason(x expected) string { return describe(x) + " was not made" }

func describe(x expected) string {
	if len(x.labels) == 0 {
		return fmt.Sprintf("the recording %q", x.name)
	}
	return fmt.Sprintf("the recording %q at %s", x.name, x.labels)
}

// leanOn finds the scale-factor figure for an element: the one of equal labels, or the single one.
func leanOn(figures []FigureElement, name string, labels recording.Labels) *quantity.Measured {
	for i := range figures {
		if figures[i].Name == name && (len(figures[i].Labels) == 0 || elementKey(figures[i].Labels, true) == elementKey(labels, true)) {
			m, err := figures[i].Measured.To(quantity.MustUnit("1"))
			if err != nil {
				return nil
			}
			return &m
		}
	}
	return nil
}

// values gives figures the form that limits take.
func values(figures []FigureElement) limits.Values {
	v := limits.Values{}
	for _, f := range figures {
		v[f.Name] = append(v[f.Name], limits.Element{Labels: elementKey(f.Labels, true), Measured: f.Measured})
	}
	return v
}

// judge judges the wanted limits.
func (e *evaluator) judge(figures []FigureElement, wanted func(Limit) bool) []Judgement {
	all := values(figures)
	var list []Judgement
	for _, l := range e.plan.Limits {
		if !wanted(l) {
			continue
		}
		for i, part := range l.parts {
			v := part.restrict(all)
			for _, j := range part.limit.Judge(v, l.Rule, e.stream(l.Clause, fmt.Sprint(i))) {
				list = append(list, Judgement{Clause: l.Clause, Require: l.Require, Rule: l.Rule.Name, EndsTrial: l.EndsTrial, Judgement: j})
			}
		}
	}
	return list
}

func (p limitPart) restrict(all limits.Values) limits.Values {
	if p.only == nil {
		return all
	}
	v := limits.Values{}
	for _, name := range p.limit.Figures() {
		for _, e := range all[name] {
			if p.only[e.Labels] {
				v[name] = append(v[name], e)
			}
		}
	}
	return v
}

// stream is the seed of a propagation: a hash of run seed, slot, figure or clause, and labels.
func (e *evaluator) stream(name, labels string) uint64 {
	h := fnv.New64a()
	var seed [8]byte
	binary.LittleEndian.PutUint64(seed[:], e.seed)
	h.Write(seed[:])
	fmt.Fprintf(h, "%s\x00%s\x00%s", e.slot, name, labels)
	return h.Sum64()
}
