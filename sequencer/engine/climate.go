package engine

import (
	"context"
	"fmt"
	"math"
	"strings"
	"time"

	"proofrate/instruments"
	"proofrate/limits/quantity"
	"proofrate/procedures"
)

// driftOver is the span of readings over which a drift is judged: long enough that a resolution of 0.01 K read twice a
// second gives a slope good to about 0.001 K/min, short against every soak.
const driftOver = 2 * time.Minute

var (
	degC      = quantity.MustUnit("degC")
	kelvin    = quantity.MustUnit("K")
	kPerMin   = quantity.MustUnit("K/min")
	noRamp    = quantity.Of(0, kPerMin) // the chamber's own
	parkBand  = quantity.Of(2, kelvin)
	parkLimit = 3 * time.Hour
)

// criterion says when a reading has settled: within band of target, drifting less than drift, for hold.
type criterion struct {
	target, band float64 // in the reading's own unit
	drift        float64 // units a second; +Inf: not judged
	hold         time.Duration
}

// steady follows one reading against a criterion.
type steady struct {
	criterion
	at     []float64 // s since the first
	values []float64
	first  time.Time
	inside time.Time // since when the criterion has held; zero: it does not
}

// add takes a fresh reading and says whether the reading has settled.
func (s *steady) add(now time.Time, value float64) bool {
	if s.first.IsZero() {
		s.first = now
	}
	t := now.Sub(s.first).Seconds()
	s.at, s.values = append(s.at, t), append(s.values, value)
	cut := 0
	for s.at[cut] < t-driftOver.Seconds() {
		cut++
	}
	s.at, s.values = s.at[cut:], s.values[cut:]
	if !(math.Abs(value-s.target) <= s.band) || !s.calm(t) {
		s.inside = time.Time{}
		return false
	}
	if s.inside.IsZero() {
		s.inside = now
	}
	return now.Sub(s.inside) >= s.hold
}

// calm says whether the least-squares slope over the last driftOver is within the drift.
func (s *steady) calm(t float64) bool {
	if math.IsInf(s.drift, 1) {
		return true
	}
	if t < driftOver.Seconds() {
		return false
	}
	return math.Abs(slope(s.at, s.values)) <= s.drift
}

// slope is that of the least-squares line: sum (t-tm)(v-vm) / sum (t-tm)^2.
func slope(at, values []float64) float64 {
	var tm, vm, stt, stv float64
	for i := range at {
		tm, vm = tm+at[i], vm+values[i]
	}
	n := float64(len(at))
	tm, vm = tm/n, vm/n
	for i := range at {
		stt += (at[i] - tm) * (at[i] - tm)
		stv += (at[i] - tm) * (values[i] - vm)
	}
	if stt == 0 {
		return 0
	}
	return stv / stt
}

// settle waits until a reading has settled; over a slot's reading every live slot's must.
type settle struct {
	plain
	e     *Engine
	ask   procedures.Settle
	slots map[instruments.SlotID]*steady
	limit time.Time
}

func (s *settle) start(context.Context) error {
	s.slots = map[instruments.SlotID]*steady{}
	s.limit = s.e.clock.Now().Add(s.ask.AtMost)
	return nil
}

func (s *settle) criterion() criterion {
	unit := readingUnit(s.ask.Reading)
	c := criterion{target: s.ask.Target.As(unit), band: math.Abs(differenceSI(s.ask.Band, unit)), drift: math.Inf(1), hold: s.ask.Hold}
	if s.ask.Drift.Number != 0 {
		c.drift = differenceSI(s.ask.Drift, unit)
	}
	return c
}

func (s *settle) tick(ctx context.Context) (bool, error) {
	now := s.e.clock.Now()
	var waiting []*slot
	var said []string
	judged := 0
	for _, at := range s.watched() {
		key, name := at.id, "slot "+string(at.id)
		if benchReading(s.ask.Reading) { // followed through whichever slots are live
			key, name = "", s.ask.Reading
		}
		if s.slots[key] == nil {
			s.slots[key] = &steady{criterion: s.criterion()}
		}
		judged++
		value := s.e.watch.of(at, s.ask.Reading)
		if !s.slots[key].add(now, value) {
			waiting = append(waiting, at)
			said = append(said, fmt.Sprintf("%s %.2f", name, value))
		}
	}
	switch {
	case judged == 0:
		return false, &instruments.Error{Op: "settle", Kind: instruments.Refused,
			Err: fmt.Errorf("no live gyro gives %s: expected powered gyros that send it; power them first or settle on chamber.temperature", s.ask.Reading)}
	case len(waiting) == 0:
		return true, nil
	case now.Before(s.limit):
		return false, nil
	case benchReading(s.ask.Reading) || len(waiting) == judged:
		return false, &instruments.Error{Op: "settle", Kind: instruments.Timeout,
			Err: fmt.Errorf("%s did not come to stay within %s of %s in %s (%s); look at chamber, door and lag, or allow more with at-most",
				s.ask.Reading, s.ask.Band, s.ask.Target, spoken(s.ask.AtMost), strings.Join(said, ", "))}
	}
	for _, late := range waiting {
		s.e.endTrial(ctx, late, fmt.Sprintf("%s did not settle at %s in %s", s.ask.Reading, s.ask.Target, spoken(s.ask.AtMost)))
	}
	return true, nil
}

// watched are the slots whose reading counts; a bench reading is followed once, under the first slot.
func (s *settle) watched() []*slot {
	var list []*slot
	for _, at := range s.e.slots {
		if at.ended != "" || !benchReading(s.ask.Reading) && !at.powered {
			continue
		}
		list = append(list, at)
		if benchReading(s.ask.Reading) {
			break
		}
	}
	return list
}

// soak sets the chamber and settles.
type soak struct {
	settle
	e    *Engine
	soak procedures.Soak
}

func (s *soak) start(ctx context.Context) error {
	if err := s.e.setChamber(ctx, s.soak.Target); err != nil {
		return err
	}
	of := s.soak.Of
	if of == "" {
		of = "chamber.temperature"
	}
	s.settle = settle{e: s.e, ask: procedures.Settle{Reading: of, Target: s.soak.Target, Band: s.soak.Band,
		Drift: s.soak.Drift, Hold: s.soak.Hold, AtMost: s.soak.AtMost}}
	return s.settle.start(ctx)
}

// park brings the bench to where it may be left: table held, supplies off, chamber at a temperature that may be opened.
type park struct {
	plain
	e      *Engine
	target quantity.Value
	limit  time.Time
}

func (p *park) start(ctx context.Context) error {
	if p.e.bench.Table != nil {
		if err := p.e.bench.Table.Stop(ctx); err != nil {
			return err
		}
		p.e.table = tableState{holds: true}
	}
	for _, s := range p.e.slots {
		if err := p.e.switchOff(ctx, s); err != nil {
			return err
		}
	}
	p.limit = p.e.clock.Now().Add(parkLimit)
	return p.e.setChamber(ctx, p.target)
}

func (p *park) tick(context.Context) (bool, error) {
	got, want := p.e.watch.value("chamber.temperature"), p.target.As(degC)
	if math.Abs(got-want) <= parkBand.Number {
		return true, nil
	}
	if p.e.clock.Now().After(p.limit) {
		return false, &instruments.Error{Op: "park", Kind: instruments.Timeout,
			Err: fmt.Errorf("expected the chamber within %s of %s in %s, it reads %.2f degC; do not open it", parkBand, p.target, spoken(parkLimit), got)}
	}
	return false, nil
}

func (e *Engine) setChamber(ctx context.Context, target quantity.Value) error {
	if e.bench.Chamber == nil {
		return &instruments.Error{Op: "set temperature", Kind: instruments.Refused, Err: fmt.Errorf("this bench has no chamber")}
	}
	e.note("chamber", "", "set to "+target.String())
	return e.bench.Chamber.SetTemperature(ctx, target, noRamp)
}
