package engine

import (
	"context"
	"fmt"
	"math"
	"time"

	"proofrate/instruments"
	"proofrate/limits/quantity"
)

// tableState is what the engine last asked of the table; it says what the rounds may expect.
type tableState struct {
	moving bool
	holds  bool
}

// Settling of the table, judged at its own read-back. Common practice; a table's maker states better ones.
const (
	rateTolerance  = 1e-3 // of the rate asked for
	rateFloor      = 5e-3 // deg/s
	angleTolerance = 0.02 // deg
	settledFor     = 2 * time.Second
	settleSlack    = 60 * time.Second // beyond the time that the acceleration explains
)

var (
	degPerS  = quantity.MustUnit("deg/s")
	degPerS2 = quantity.MustUnit("deg/s^2")
	deg      = quantity.MustUnit("deg")
)

// acceleration is what the bench file allows its table.
func (e *Engine) acceleration() quantity.Value {
	return e.bench.Description.Table.MaxAcceleration
}

// needTable refuses a motion on a bench without a table.
func (e *Engine) needTable(op string) error {
	if e.bench.Table == nil {
		return &instruments.Error{Op: op, Kind: instruments.Refused, Err: fmt.Errorf("this bench has no table")}
	}
	return nil
}

// arrival judges that a reading has come to stay within its tolerance.
type arrival struct {
	since time.Time // inside without a break; zero: outside
	limit time.Time // by then at the latest
}

func (a *arrival) judge(now time.Time, inside bool) bool {
	if !inside {
		a.since = time.Time{}
		return false
	}
	if a.since.IsZero() {
		a.since = now
	}
	return now.Sub(a.since) >= settledFor
}

func (a *arrival) late(now time.Time) bool { return now.After(a.limit) }

// turn brings the table to a rate; rate zero is position hold, since a table at rate zero creeps.
type turn struct {
	plain
	e    *Engine
	rate quantity.Value
	arrival
}

func (t *turn) start(ctx context.Context) error {
	if t.rate.Number == 0 {
		return startHold(ctx, t.e, &t.arrival)
	}
	if err := t.e.needTable("turn"); err != nil {
		return err
	}
	t.limit = t.e.clock.Now().Add(t.e.slew(t.rate) + t.e.patient(settleSlack))
	t.e.table = tableState{moving: true}
	return t.e.bench.Table.SetRate(ctx, t.rate, t.e.acceleration())
}

func (t *turn) tick(context.Context) (bool, error) {
	if t.rate.Number == 0 {
		return tickHold(t.e, &t.arrival)
	}
	now, want := t.e.clock.Now(), t.rate.As(degPerS)
	got := t.e.watch.value("table.rate")
	if t.judge(now, math.Abs(got-want) <= math.Max(rateFloor, rateTolerance*math.Abs(want))) {
		return true, nil
	}
	if t.late(now) {
		return false, &instruments.Error{Op: "turn", Where: instruments.Where{Instrument: t.e.bench.Description.Table.Instrument}, Kind: instruments.Timeout,
			Err: fmt.Errorf("expected %s to settle, the table reads %.4f deg/s; look for a stalled drive or a load that is too heavy", t.rate, got)}
	}
	return false, nil
}

// slew is the time that the allowed acceleration needs to reach rate from what the table does now.
func (e *Engine) slew(rate quantity.Value) time.Duration {
	now := e.watch.value("table.rate")
	if math.IsNaN(now) {
		now = 0
	}
	return time.Duration(math.Abs(rate.As(degPerS)-now) / e.acceleration().As(degPerS2) * float64(time.Second))
}

// hold brings the table to rest at a held position.
type hold struct {
	plain
	e *Engine
	arrival
}

func (h *hold) start(ctx context.Context) error    { return startHold(ctx, h.e, &h.arrival) }
func (h *hold) tick(context.Context) (bool, error) { return tickHold(h.e, &h.arrival) }

// startHold and tickHold are shared by hold and by a turn at rate zero. A bench without a table is at rest.
func startHold(ctx context.Context, e *Engine, a *arrival) error {
	if e.bench.Table == nil {
		return nil
	}
	a.limit = e.clock.Now().Add(e.slew(quantity.Of(0, degPerS)) + e.patient(settleSlack))
	e.table = tableState{holds: true}
	return e.bench.Table.Stop(ctx)
}

func tickHold(e *Engine, a *arrival) (bool, error) {
	if e.bench.Table == nil {
		return true, nil
	}
	now, got := e.clock.Now(), e.watch.value("table.rate")
	if a.judge(now, math.Abs(got) <= rateFloor) {
		return true, nil
	}
	if a.late(now) {
		return false, &instruments.Error{Op: "hold", Where: instruments.Where{Instrument: e.bench.Description.Table.Instrument}, Kind: instruments.Timeout,
			Err: fmt.Errorf("expected the table at rest, it reads %.4f deg/s; look at its brake and drive before you go near it", got)}
	}
	return false, nil
}

// position brings the table to an angle and holds it there.
type position struct {
	plain
	e     *Engine
	angle quantity.Value
	arrival
}

func (p *position) start(ctx context.Context) error {
	if err := p.e.needTable("position"); err != nil {
		return err
	}
	travel := math.Abs(p.angle.As(deg) - p.e.watch.value("table.position"))
	if math.IsNaN(travel) {
		travel = 360
	}
	// The profile states the travelling rate; a tenth of the table's own is slower than any of them.
	slow := p.e.bench.Description.Table.MaxRate.As(degPerS) / 10
	p.limit = p.e.clock.Now().Add(time.Duration(travel/slow*float64(time.Second)) + p.e.patient(settleSlack))
	p.e.table = tableState{moving: true}
	return instruments.GoTo(ctx, p.e.bench.Table, p.angle)
}

func (p *position) tick(context.Context) (bool, error) {
	now, got := p.e.clock.Now(), p.e.watch.value("table.position")
	still := math.Abs(p.e.watch.value("table.rate")) <= rateFloor
	if p.judge(now, still && math.Abs(got-p.angle.As(deg)) <= angleTolerance) {
		p.e.table = tableState{holds: true}
		return true, nil
	}
	if p.late(now) {
		return false, &instruments.Error{Op: "position", Where: instruments.Where{Instrument: p.e.bench.Description.Table.Instrument}, Kind: instruments.Timeout,
			Err: fmt.Errorf("expected the table at %s, it reads %.4f deg; look for a stalled drive", p.angle, got)}
	}
	return false, nil
}
