package procedures

import (
	"strings"
	"testing"
	"time"

	"proofrate/instruments"
	"proofrate/limits/quantity"
)

func of(text string) quantity.Value {
	v, err := quantity.Parse(text)
	if err != nil {
		panic(err)
	}
	return v
}

// bench is a station with two slots that can do all that the tests ask for.
func bench() *instruments.Description {
	slot := func(id instruments.SlotID, sense float64) instruments.SlotDescription {
		return instruments.SlotDescription{ID: id, Sense: sense, Radius: of("60 mm"), AttitudeUncertainty: of("0.5 mrad"), Gyro: "G", Supply: "P1",
			MaxVoltage: of("6 V"), MaxCurrent: of("2 A"), Readings: []string{"supply.voltage", "supply.current", "gyro.rate", "gyro.temperature"},
			Channels: []instruments.Channel{{Name: "rate", Count: of("0.05 deg/h")}}, SampleRate: of("100 Hz"), FrameCounter: true}
	}
	return &instruments.Description{
		Name: "test", Site: instruments.Site{Latitude: of("47.66 deg"), Gravity: of("9.8 m/s^2")},
		Table: &instruments.TableDescription{Instrument: "T1", Axis: instruments.Vector{0, 0, 1}, AxisUncertainty: of("0.2 mrad"), MaxRate: of("400 deg/s"),
			MaxAcceleration: of("200 deg/s^2"), Creep: of("0.00001 deg/s"), CanPosition: true},
		Chamber: &instruments.ChamberDescription{Instrument: "C1", Low: of("-55 degC"), High: of("100 degC"), Ramp: of("5 K/min")},
		Slots:   []instruments.SlotDescription{slot("A", 1), slot("B", -1)},
		Instruments: []instruments.InstrumentDescription{{Name: "T1", Roles: []string{"table"}, Calibrations: []instruments.Calibration{
			{Reading: "table.rate", Correction: of("0 ppm"), U: of("20 ppm"), K: 2, Drift: of("5 ppm")}}}},
	}
}

// TestCheckCalibration: a sweep leans on the certificate of the table's rate.
func TestCheckCalibration(t *testing.T) {
	p := plan(t, forEvaluate, Options{})
	for name, c := range map[string]struct {
		change func(*instruments.Description)
		want   string
	}{
		"there":    {func(*instruments.Description) {}, ""},
		"none":     {func(d *instruments.Description) { d.Instruments[0].Calibrations = nil }, "bench test has no calibration of table.rate; figure sf_error needs its uncertainty"},
		"as rates": {func(d *instruments.Description) { d.Instruments[0].Calibrations[0].U = of("0.001 deg/s") }, "bench test states the calibration of table.rate as a rate; figure sf_error needs it relative, such as 20 ppm"},
	} {
		t.Run(name, func(t *testing.T) {
			d := bench()
			c.change(d)
			problems := p.CheckBench(d)
			if c.want == "" && len(problems) > 0 || c.want != "" && (len(problems) != 1 || problems[0].Message != c.want) {
				t.Errorf("got %v, want %s", problems, c.want)
			}
		})
	}
}

const forBench = head + `guards:
  - {require: supply.current < 1.5}
  - {require: abs(table.rate) < 260}
steps:
  - power: on
  - soak: 23 degC
    of: gyro.temperature
    band: 1 K
    hold: 1 min
    at-most: 1 h
  - settle: level.value
    at: 0 V
    band: 1 V
    hold: 1 s
    at-most: 1 min
  - position: 90 deg
  - record: rest
    for: 1 min
  - power: {off: B}
` + tail

// TestCheckBench: each ability that a bench may lack is missed, at the place that asks for it.
func TestCheckBench(t *testing.T) {
	p := plan(t, forBench, Options{})
	for _, c := range []struct {
		name   string
		change func(*instruments.Description)
		want   string // place and message; "" for none
	}{
		{"all there", func(*instruments.Description) {}, ""},
		{"slow table", func(d *instruments.Description) { d.Table.MaxRate = of("100 deg/s") }, "7:1: bench test turns at 100 deg/s at most; the procedure needs 250 deg/s"},
		{"no table", func(d *instruments.Description) { d.Table = nil }, "7:1: bench test has no table; the procedure needs one of 250 deg/s"},
		{"no table for a guard", func(d *instruments.Description) { d.Table = nil }, "10:15: bench test has no table.rate"},
		{"no position", func(d *instruments.Description) { d.Table.CanPosition = false }, "23:5: bench test has no table that can go to a position"},
		{"no chamber", func(d *instruments.Description) { d.Chamber = nil }, "7:1: bench test has no chamber; the procedure needs one from -40 degC to 71 degC"},
		{"mild chamber", func(d *instruments.Description) { d.Chamber.Low = of("-20 degC") }, "7:1: bench test has a chamber from -20 degC to 100 degC; the procedure needs -40 degC to 71 degC"},
		{"low voltage", func(d *instruments.Description) { d.Slots[1].MaxVoltage = of("3.3 V") }, "7:1: bench test gives slot B 3.3 V at most; the procedure needs 5 V"},
		{"low current", func(d *instruments.Description) { d.Slots[0].MaxCurrent = of("1 A") }, "7:1: bench test gives slot A 1 A at most; the procedure needs 1.5 A"},
		{"no supply", func(d *instruments.Description) { d.Slots[0].Supply = "" }, "7:1: bench test gives slot A no supply"},
		{"other rate", func(d *instruments.Description) { d.Slots[0].SampleRate = of("200 Hz") }, "6:1: bench test reads slot A at 200 Hz; the procedure expects 100 Hz"},
		{"other output", func(d *instruments.Description) { d.Slots[0].Channels[0].Name = "angle" }, `6:1: bench test reads "angle" in slot A; the procedure expects rate`},
		{"no thermometer", func(d *instruments.Description) { d.Slots[1].Readings = []string{"supply.current", "level.value"} }, "13:5: bench test cannot read gyro.temperature in slot B; it reads supply.current, level.value there"},
		{"no such slot", func(d *instruments.Description) { d.Slots[1].ID = "C" }, `26:5: bench test has no slot "B"`},
		{"no slot", func(d *instruments.Description) { d.Slots = nil }, "7:1: bench test has no slot"},
		{"no meter", func(d *instruments.Description) { d.Slots[0].Readings = d.Slots[0].Readings[:4] }, "18:5: bench test cannot read level.value in slot A; it reads supply.voltage, supply.current, gyro.rate, gyro.temperature there"},
	} {
		t.Run(c.name, func(t *testing.T) {
			d := bench()
			for i := range d.Slots {
				d.Slots[i].Readings = append(d.Slots[i].Readings, "level.value")
			}
			c.change(d)
			problems := p.CheckBench(d)
			within(t, p.File, problems)
			var b strings.Builder
			problems.Render(&b, p.File)
			if got := b.String(); (got == "") != (c.want == "") || !strings.Contains(got, "procedure.yaml:"+c.want) && c.want != "" {
				t.Errorf("got  %s\nwant %s", got, c.want)
			}
		})
	}
}

// TestEstimate against times worked out by hand.
func TestEstimate(t *testing.T) {
	p := plan(t, head+`steps:
  - power: on
  - soak: 70 degC
    band: 1 K
    hold: 5 min
    at-most: 1 h
  - turn: 100 deg/s
  - turn: -100 deg/s
  - record: turning
    while:
      - wait: 10 min
      - hold: position
  - record: rest
    for: 1 min
  - soak: 23 degC
    band: 1 K
    hold: 5 min
    at-most: 6 min
  - ask: Go on?
    for: confirmation
  - park: 23 degC
`+tail, Options{})
	want := []time.Duration{
		powerSettles,
		9*time.Minute + 24*time.Second + 5*time.Minute, // 47 K at 5 K/min
		500*time.Millisecond + tableSettles,
		time.Second + tableSettles,
		10*time.Minute + 500*time.Millisecond + tableSettles,
		time.Minute,
		6 * time.Minute, // at most
		0,
		tableSettles,
	}
	for i, got := range p.Estimate(bench()) {
		if got.Round(time.Millisecond) != want[i] {
			t.Errorf("%s: got %s, want %s", p.Steps[i].Text, got, want[i])
		}
	}
}
