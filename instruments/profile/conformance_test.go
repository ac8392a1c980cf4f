package profile

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"math"
	"strings"
	"testing"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/instrumentstest"
	"proofrate/instruments/link"
	"proofrate/instruments/virtual"
	"proofrate/limits/quantity"
)

// load makes a profile of a document that is sound.
func load(t testing.TB, name string, text []byte) *Profile {
	t.Helper()
	p, file, problems := Load(name, text)
	if len(problems) > 0 {
		var b strings.Builder
		problems.Render(&b, file)
		t.Fatalf("%s is not sound:\n%s", name, b.String())
	}
	return p
}

func loadShipped(t testing.TB, name string) *Profile {
	t.Helper()
	text, found := Shipped(name)
	if !found {
		t.Fatalf("profile %s is not shipped", name)
	}
	return load(t, name, text)
}

// TestShipped: every shipped profile is sound, under its own name.
func TestShipped(t *testing.T) {
	names := ShippedNames()
	if len(names) < 7 {
		t.Errorf("only %v are shipped", names)
	}
	for _, name := range names {
		if p := loadShipped(t, name); p.Name != name {
			t.Errorf("profile %s is in the file of %s", p.Name, name)
		}
	}
}

// world is a virtual bench of one slot.
func world(t testing.TB, population string) *virtual.World {
	t.Helper()
	value := func(text string) quantity.Value {
		v, err := quantity.Parse(text)
		if err != nil {
			t.Fatal(err)
		}
		return v
	}
	w, err := virtual.New(virtual.Config{
		Seed: 1,
		Description: &instruments.Description{
			Site: instruments.Site{Latitude: value("47.66 deg"), Gravity: value("9.8077 m/s^2")},
			Table: &instruments.TableDescription{Instrument: "T1", Axis: instruments.Vector{0, 0, 1}, AxisUncertainty: value("0.2 mrad"),
				MaxRate: value("300 deg/s"), MaxAcceleration: value("100 deg/s^2"), Creep: value("0.00001 deg/s"), CanPosition: true, CanOscillate: true},
			Chamber:     &instruments.ChamberDescription{Instrument: "C1", Low: value("-55 degC"), High: value("125 degC"), Ramp: value("5 K/min")},
			Slots:       []instruments.SlotDescription{{ID: "A", Sense: 1, Radius: value("80 mm"), AttitudeUncertainty: value("0.5 mrad"), Gyro: "G1", Supply: "P1", SupplyChannel: 1}},
			Instruments: []instruments.InstrumentDescription{{Name: "T1"}, {Name: "C1"}, {Name: "P1"}, {Name: "G1"}},
		},
		Gyros: map[instruments.SlotID]virtual.Setup{"A": {Population: population}},
	})
	if err != nil {
		t.Fatal(err)
	}
	return w
}

func worldLink(t testing.TB, w *virtual.World, endpoint string) link.Link {
	t.Helper()
	l, err := w.Link(endpoint)
	if err != nil {
		t.Fatal(err)
	}
	return l
}

// The shipped profiles drive the virtual instruments, which are written from the protocols and not from the profiles.

func TestVirtualTable(t *testing.T) {
	instrumentstest.TestTable(t, func(testing.TB) (instruments.Table, instruments.Clock) {
		w := world(t, "optical")
		table, err := loadShipped(t, "turntable-text").Table(worldLink(t, w, "table"), "T1")
		if err != nil {
			t.Fatal(err)
		}
		return table, w
	})
}

func TestVirtualChamber(t *testing.T) {
	instrumentstest.TestChamber(t, func(testing.TB) (instruments.Chamber, instruments.Clock) {
		w := world(t, "optical")
		chamber, err := loadShipped(t, "chamber-registers").Chamber(worldLink(t, w, "chamber"), "C1")
		if err != nil {
			t.Fatal(err)
		}
		return chamber, w
	})
}

func TestVirtualSupply(t *testing.T) {
	instrumentstest.TestSupply(t, func(testing.TB) (instruments.Supply, instruments.Clock) {
		w := world(t, "optical")
		supply, err := loadShipped(t, "supply-scpi").Supply(worldLink(t, w, "supply"), "P1", 2)
		if err != nil {
			t.Fatal(err)
		}
		return supply, w
	})
}

func TestVirtualGyros(t *testing.T) {
	for _, g := range []struct {
		profile, population, voltage string
		start                        time.Duration
	}{
		{"gyro-frame-optical", "optical", "5 V", 10 * time.Second},
		{"gyro-frame-angle", "optical-angle", "5 V", 10 * time.Second},
		{"gyro-frame-vibratory", "vibratory", "5 V", 10 * time.Second},
		{"gyro-frame-spinning", "spinning-mass", "28 V", 3 * time.Minute},
	} {
		t.Run(g.population, func(t *testing.T) {
			w := world(t, g.population)
			supply, err := loadShipped(t, "supply-scpi").Supply(worldLink(t, w, "supply"), "P1", 1)
			if err != nil {
				t.Fatal(err)
			}
			gyro, err := loadShipped(t, g.profile).Gyro(worldLink(t, w, "gyro-1"), "G1")
			if err != nil {
				t.Fatal(err)
			}
			voltage, err := quantity.Parse(g.voltage)
			if err != nil {
				t.Fatal(err)
			}
			ctx := t.Context()
			if err := supply.Set(ctx, voltage, quantity.Of(3, quantity.MustUnit("A"))); err != nil {
				t.Fatal(err)
			}
			if err := supply.On(ctx); err != nil {
				t.Fatal(err)
			}
			gyro.Restart()
			if err := w.Sleep(ctx, g.start); err != nil {
				t.Fatal(err)
			}
			instrumentstest.TestGyro(t, func(testing.TB) (instruments.Gyro, instruments.Clock) { return gyro, w })
			if err := w.Sleep(ctx, time.Second); err != nil {
				t.Fatal(err)
			}
			var batch instruments.Batch
			rate, err := instruments.Read(ctx, gyro, "gyro.rate")
			if err != nil {
				t.Fatal(err)
			}
			if err := gyro.Drain(ctx, &batch); err != nil {
				t.Fatal(err)
			}
			channel := gyro.Channels()[0]
			want := channel.Count.SI() * float64(batch.Counts[0][batch.Len()-1])
			if channel.Name == "angle" {
				want *= 100 // frames a second
			}
			if got := rate.Value.SI(); math.Abs(got-want) > 1e-12 {
				t.Errorf("gyro.rate is %g rad/s, the newest sample %g", got, want)
			}
		})
	}
}

// A peer's answers for CheckDriver, made from the protocols by other code than the driver's.

func textAnswer(request []byte, value float64) []byte {
	switch string(request) {
	case "RATE?\r\n":
		return fmt.Appendf(nil, "%+.6f\r\n", value)
	case "MEAS:VOLT? (@2)\n":
		return fmt.Appendf(nil, "%+.5E\n", value)
	}
	return nil
}

func rtuAnswerOf(request []byte, value float64) []byte {
	if !bytes.HasPrefix(request, []byte{1, 4, 0, 0, 0, 1}) {
		return nil
	}
	answer := binary.BigEndian.AppendUint16([]byte{1, 4, 2}, uint16(int16(value*100)))
	crc := uint16(0xffff) // bit by bit, as the serial line specification describes it (6.2.2)
	for _, b := range answer {
		crc ^= uint16(b)
		for range 8 {
			carry := crc & 1
			if crc >>= 1; carry == 1 {
				crc ^= 0xa001
			}
		}
	}
	return append(answer, byte(crc), byte(crc>>8))
}

func TestDrivers(t *testing.T) {
	for _, d := range []struct {
		profile, reading string
		answer           func([]byte, float64) []byte
		open             func(p *Profile, l link.Link) (instruments.Reader, error)
	}{
		{"turntable-text", "table.rate", textAnswer, func(p *Profile, l link.Link) (instruments.Reader, error) { return p.Table(l, "T1") }},
		{"supply-scpi", "supply.voltage", textAnswer, func(p *Profile, l link.Link) (instruments.Reader, error) { return p.Supply(l, "P1", 2) }},
		{"chamber-registers", "chamber.temperature", rtuAnswerOf, func(p *Profile, l link.Link) (instruments.Reader, error) { return p.Chamber(l, "C1") }},
	} {
		t.Run(d.profile, func(t *testing.T) {
			p := loadShipped(t, d.profile)
			instrumentstest.TestDriver(t, instruments.Rig{
				Reading: d.reading, Answer: d.answer,
				Patience: time.Duration(p.Tries+1) * p.Timeout, // each try, and the wait for answers that are owed
				Open:     instrumentstest.OverMemory(func(l link.Link) (instruments.Reader, error) { return d.open(p, l) }),
			})
		})
	}
}
