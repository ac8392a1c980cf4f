package procedures

import (
	"context"
	"encoding/binary"
	"fmt"
	"hash/fnv"
	"math"
	"runtime"
	"slices"
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

// Judgement is what a limit came to for one element. Its Labels are those of the element; none where the limit is
// judged once.
type Judgement struct {
	Clause, Require, Rule string
	EndsTrial             bool
	Labels                recording.Labels
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
	if f.ScaleFactor != "" {
		p.lean(f.ScaleFactor, wanted)
	}
	if f.Formula != nil {
		for _, other := range f.Formula.Figures() {
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
	b := reduce.Bench{Latitude: d.Site.Latitude.SI(), Sense: 1, AxisUp: 1, Slot: string(slot)}
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
	if c, ok := tableRate(d); ok {
		b.TableRate = reduce.Calibration{Correction: c.Correction.SI(), U: math.Hypot(c.U.SI()/c.K, c.Drift.SI())}
	}
	return b
}

// ready says whether all recordings of a figure, and of those it leans on, have been made.
func (e *evaluator) ready(name string) bool {
	wanted := map[string]bool{}
	e.plan.lean(name, wanted)
	for f := range wanted {
		for _, element := range e.plan.figure(f).Elements {
			for _, i := range element.all() {
				if e.at[i] < 0 {
					return false
				}
			}
		}
	}
	return true
}

// all are the recordings that an element leans on, the one for the noise last.
func (s ElementSpec) all() []int {
	if s.noise == none {
		return s.recordings
	}
	return append(slices.Clone(s.recordings), s.noise)
}

// task is one element to evaluate.
type task struct {
	figure *Figure
	spec   ElementSpec
	got    FigureElement
}

// figures evaluates the wanted figures (nil: all), in the order of the plan: first those that lean on nothing, then
// those that name a scale factor, then formulas one after the other. Within a pass each element is a task of its own;
// its result has its own place, so the order in which processors finish does not matter.
func (e *evaluator) figures(ctx context.Context, wanted map[string]bool) ([]FigureElement, error) {
	var tasks []*task
	var plain, leaning []*task
	for i := range e.plan.Figures {
		f := &e.plan.Figures[i]
		if wanted != nil && !wanted[f.Name] {
			continue
		}
		for _, spec := range f.Elements {
			t := &task{figure: f, spec: spec, got: FigureElement{Name: f.Name, Labels: spec.Labels, Method: f.Method.Name}}
			for _, r := range spec.recordings {
				if e.at[r] >= 0 {
					t.got.Recordings = append(t.got.Recordings, e.at[r])
				}
			}
			tasks = append(tasks, t)
			switch {
			case f.Formula != nil:
				t.got.Method = "formula"
			case f.ScaleFactor != "":
				leaning = append(leaning, t)
			default:
				plain = append(plain, t)
			}
		}
	}
	for _, pass := range [][]*task{plain, leaning} {
		done := results(tasks)
		if err := parallel(ctx, pass, func(t *task) { t.got.Measured = e.reduce(ctx, t, done) }); err != nil {
			return nil, err
		}
	}
	for i, t := range tasks {
		if t.figure.Formula == nil || i > 0 && tasks[i-1].figure == t.figure {
			continue // a series' formula is evaluated whole, at its first element
		}
		for _, got := range t.figure.Formula.Evaluate(Values(results(tasks)), t.figure.Unit, e.stream("figure", t.figure.Name, "")) {
			for _, u := range tasks[i:] {
				if u.figure == t.figure && elementKey(u.spec.Labels) == got.Labels {
					u.got.Measured = got.Measured
				}
			}
		}
	}
	return results(tasks), ctx.Err()
}

func results(tasks []*task) []FigureElement {
	list := make([]FigureElement, len(tasks))
	for i, t := range tasks {
		list[i] = t.got
	}
	return list
}

// parallel does the tasks on as many workers as there are processors. A task's panic becomes the caller's: whoever
// holds the bench catches it there and makes the bench safe.
func parallel(ctx context.Context, tasks []*task, do func(*task)) error {
	next := make(chan *task)
	var workers sync.WaitGroup
	var once sync.Once
	var broken any
	guarded := func(t *task) {
		defer func() {
			if fault := recover(); fault != nil {
				once.Do(func() { broken = fault })
			}
		}()
		do(t)
	}
	for range min(runtime.GOMAXPROCS(0), len(tasks)) {
		workers.Go(func() { // ends when next is closed
			for t := range next {
				guarded(t)
			}
		})
	}
	for _, t := range tasks {
		if ctx.Err() != nil {
			break
		}
		next <- t
	}
	close(next)
	workers.Wait()
	if broken != nil {
		panic(broken)
	}
	return ctx.Err()
}

// reduce evaluates one element from its recordings and from figures that are done.
func (e *evaluator) reduce(ctx context.Context, t *task, done []FigureElement) quantity.Measured {
	f, spec := t.figure, t.spec
	in := reduce.Input{Bench: e.bench, Gyro: e.gyro, Options: f.Options, Seed: e.stream("figure", f.Name, elementKey(spec.Labels))}
	for _, r := range spec.all() {
		want := e.plan.expected[r]
		if e.at[r] < 0 {
			return quantity.Voided(f.Unit, fmt.Sprintf("%s was not made", want))
		}
		rec := e.recs[e.at[r]]
		if !rec.Quality.Complete {
			return quantity.Voided(f.Unit, fmt.Sprintf("%s was cut short: %s", want, rec.Quality.Reason))
		}
		in.Recordings = append(in.Recordings, rec)
	}
	if spec.noise != none {
		last := len(in.Recordings) - 1
		in.Recordings, in.Noise = in.Recordings[:last], in.Recordings[last:]
	}
	if f.ScaleFactor != "" {
		sf := leanOn(done, f.ScaleFactor, spec.Labels)
		if sf.Void != "" {
			return quantity.Voided(f.Unit, fmt.Sprintf("it leans on %s, which is void: %s", f.ScaleFactor, sf.Void))
		}
		in.ScaleFactor = &sf
	}
	got, err := f.Method.Reduce(ctx, in).To(f.Unit)
	if err != nil {
		panic(fmt.Sprintf("procedures: method %s answers in another dimension than figure %s is planned in: %v", f.Method.Name, f.Name, err))
	}
	return got
}

func (x expected) String() string {
	if len(x.labels) == 0 {
		return fmt.Sprintf("the recording %q", x.name)
	}
	return fmt.Sprintf("the recording %q at %s", x.name, x.labels)
}

// leanOn finds the scale-factor error for an element, as a plain ratio: the one of equal labels, or the single one.
func leanOn(done []FigureElement, name string, labels recording.Labels) quantity.Measured {
	one := quantity.MustUnit("1")
	for _, f := range done {
		if f.Name == name && (len(f.Labels) == 0 || elementKey(f.Labels) == elementKey(labels)) {
			m, err := f.Measured.To(one)
			if err != nil {
				panic(fmt.Sprintf("procedures: figure %s is no ratio: %v", name, err))
			}
			return m
		}
	}
	panic(fmt.Sprintf("procedures: figure %s was planned for %s and is not among those done", name, labels))
}

// Values gives figures the form that limits take.
func Values(figures []FigureElement) limits.Values {
	v := limits.Values{}
	for _, f := range figures {
		v[f.Name] = append(v[f.Name], limits.Element{Labels: elementKey(f.Labels), Measured: f.Measured})
	}
	return v
}

// judge judges the wanted limits.
func (e *evaluator) judge(figures []FigureElement, wanted func(Limit) bool) []Judgement {
	all := Values(figures)
	labels := map[string]recording.Labels{}
	for _, f := range figures {
		labels[elementKey(f.Labels)] = f.Labels
	}
	var list []Judgement
	for n, l := range e.plan.Limits {
		if !wanted(l) {
			continue
		}
		for i, part := range l.parts {
			for _, j := range part.limit.Judge(part.restrict(all), l.Rule, e.stream("limit", l.Clause, fmt.Sprint(n, i))) {
				list = append(list, Judgement{Clause: l.Clause, Require: l.Require, Rule: l.Rule.Name, EndsTrial: l.EndsTrial, Labels: labels[j.Labels], Judgement: j})
			}
		}
	}
	return list
}

// restrict leaves the part's elements of its figure.
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

// stream is the seed of a propagation: a hash of run seed, slot, kind and name of what it is for, and labels.
func (e *evaluator) stream(kind, name, labels string) uint64 {
	h := fnv.New64a()
	var seed [8]byte
	binary.LittleEndian.PutUint64(seed[:], e.seed)
	h.Write(seed[:])
	fmt.Fprintf(h, "%s\x00%s\x00%s\x00%s", e.slot, kind, name, labels)
	return h.Sum64()
}
