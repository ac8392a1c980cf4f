package virtual

import (
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"time"

	"proofrate/limits/quantity"
)

const (
	tableDelay        = 2 * time.Millisecond
	tableRateNoise    = 2e-5 // deg/s, standard deviation of a rate reading
	tableAngleNoise   = 1e-5 // deg
	tableFinestRipple = 36   // times a turn
	tableRippleOnce   = 1e-4 // of the rate, once a turn
	tableRippleOften  = 5e-5 // of the rate, tableFinestRipple times a turn
)

// table is the rate table behind its text protocol. Its time base is off by a hidden share, so that the true rate is
// not what it says; the angle encoder is true over whole turns.
//
//	true rate = said rate (1 + share) + offset
type table struct {
	lines
	servo             *servo
	hidden            deviation // of its rate
	maxRate, maxAccel float64   // deg/s, deg/s^2
	creep             float64   // rad/s, greatest
	accel             float64   // rad/s^2, of the last command
	noise, drawn      *rand.Rand
}

const radPerDeg = math.Pi / 180

func newTable(w *World, seed uint64, maxRate, maxAccel, creep float64, hidden deviation) *table {
	phases := stream(seed, "table ripple")
	t := &table{hidden: hidden, maxRate: maxRate, maxAccel: maxAccel, creep: creep, accel: maxAccel / 2 * radPerDeg,
		noise: stream(seed, "table readings"), drawn: stream(seed, "table creep")}
	t.servo = newServo([]ripple{
		{1, tableRippleOnce, 2 * math.Pi * phases.Float64()},
		{tableFinestRipple, tableRippleOften, 2 * math.Pi * phases.Float64()},
	})
	t.servo.follow(-int64(stillAfter), []leg{{motion: holding, rate: t.someCreep()}})
	t.lines = lines{w: w, end: "\r\n", delay: tableDelay, do: t.command}
	return t
}

// someCreep is the creep of one hold, or of one rate loop closed anew.
func (t *table) someCreep() float64 { return t.creep * (2*t.drawn.Float64() - 1) }

const (
	tableOK     = "OK"
	tableSyntax = "ERR 1 SYNTAX"
	tableRange  = "ERR 2 RANGE"
)

func (t *table) command(line string) (answer string, answers bool) {
	words := strings.Split(line, " ")
	for _, c := range tableCommands {
		numbers, ok := c.match(words)
		if ok {
			return c.do(t, numbers), true
		}
	}
	return tableSyntax, true
}

// tableCommand is a row of the table's language: words, with # for a number.
type tableCommand struct {
	form string
	do   func(t *table, n []float64) string
}

var tableCommands = []tableCommand{
	{"*IDN?", func(*table, []float64) string { return "PROOFRATE,VIRTUAL TABLE,VT-0001,1.0" }},
	{"RATE # ACC #", (*table).turn},
	{"GOTO # VEL #", (*table).goTo},
	{"SWAY # #", (*table).sway},
	{"STOP", (*table).stop},
	{"RATE?", (*table).sayRate},
	{"POS?", (*table).sayAngle},
	{"STATE?", (*table).sayState},
}

func (c *tableCommand) match(words []string) (numbers []float64, ok bool) {
	form := strings.Split(c.form, " ")
	if len(form) != len(words) {
		return nil, false
	}
	for i, want := range form {
		if want != "#" {
			if want != words[i] {
				return nil, false
			}
			continue
		}
		x, ok := decimal(words[i])
		if !ok {
			return nil, false
		}
		numbers = append(numbers, x)
	}
	return numbers, true
}

// move replaces the table's path; the gyros first live through what was before.
func (t *table) move(legs []leg) string {
	t.w.catchUp()
	t.servo.follow(t.w.now, legs)
	return tableOK
}

func (t *table) turn(n []float64) string {
	rate, accel := n[0], n[1]
	if math.Abs(rate) > t.maxRate || accel <= 0 || accel > t.maxAccel {
		return tableRange
	}
	t.accel = accel * radPerDeg
	return t.move(t.servo.toRate(t.w.now, t.hidden.truth(rate*radPerDeg+t.someCreep()), t.accel))
}

func (t *table) goTo(n []float64) string {
	angle, rate := n[0], n[1]
	if rate <= 0 || rate > t.maxRate || math.Abs(angle) > 1e6 {
		return tableRange
	}
	return t.move(t.servo.toAngle(t.w.now, angle*radPerDeg, rate*radPerDeg, t.accel, t.someCreep()))
}

func (t *table) sway(n []float64) string {
	amplitude, omega := n[0], 2*math.Pi*n[1]
	if amplitude <= 0 || omega <= 0 || amplitude*omega > t.maxRate || amplitude*omega*omega > t.maxAccel {
		return tableRange
	}
	legs, angle := t.servo.toRest(t.w.now, t.accel)
	return t.move(append(legs, leg{motion: swaying, angle: angle, setAngle: true, swing: amplitude * radPerDeg, omega: omega}))
}

func (t *table) stop([]float64) string {
	legs, angle := t.servo.toRest(t.w.now, t.accel)
	return t.move(append(legs, leg{motion: holding, rate: t.someCreep(), angle: angle, setAngle: true}))
}

func (t *table) sayRate([]float64) string {
	_, rate := t.servo.encoder(t.w.now)
	return fmt.Sprintf("%+.6f", t.hidden.said(rate)/radPerDeg+tableRateNoise*t.noise.NormFloat64())
}

func (t *table) sayAngle([]float64) string {
	angle, _ := t.servo.encoder(t.w.now)
	return fmt.Sprintf("%+.5f", angle/radPerDeg+tableAngleNoise*t.noise.NormFloat64())
}

func (t *table) sayState([]float64) string {
	if t.servo.settled(t.w.now) {
		switch t.servo.goal() {
		case holding:
			return "HOLD"
		case turning:
			return "AT RATE"
		}
	}
	return "MOVING"
}

// deviation is what an instrument's readings are off by, unseen: truth = said (1 + share) + offset.
type deviation struct{ share, offset float64 }

func (d deviation) truth(said float64) float64 { return said*(1+d.share) + d.offset }
func (d deviation) said(truth float64) float64 { return (truth - d.offset) / (1 + d.share) }

// drawDeviation draws what one calibration entry leaves open: its correction, which is known, and its standard
// uncertainty, root of (U/k)^2 + drift^2, normal. An entry is relative or in the reading's own dimension.
func drawDeviation(correction, u, drift quantity.Value, k float64, r *rand.Rand) deviation {
	if k == 0 {
		k = 2
	}
	x := correction.SI() + math.Hypot(u.SI()/k, drift.SI())*r.NormFloat64()
	for _, v := range []quantity.Value{u, correction, drift} {
		if v.Number != 0 && v.Dimension() != quantity.Ratio {
			return deviation{offset: x}
		}
	}
	return deviation{share: x}
}
