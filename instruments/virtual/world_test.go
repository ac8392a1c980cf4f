package virtual

import (
	"bytes"
	"context"
	"encoding/binary"
	"errors"
	"fmt"
	"testing"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/link"
	"proofrate/limits/quantity"
)

func q(t testing.TB, text string) quantity.Value {
	t.Helper()
	v, err := quantity.Parse(text)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// describe is a bench with n slots, vertical table, no hidden errors unless a test adds some.
func describe(t testing.TB, n int) *instruments.Description {
	d := &instruments.Description{
		Site: instruments.Site{Latitude: q(t, "48.1374 deg"), Gravity: q(t, "9.80805 m/s^2")},
		Table: &instruments.TableDescription{Instrument: "T1", Axis: instruments.Vector{0, 0, 1}, AxisUncertainty: q(t, "0 mrad"),
			MaxRate: q(t, "400 deg/s"), MaxAcceleration: q(t, "200 deg/s^2"), Creep: q(t, "0 deg/s")},
		Chamber: &instruments.ChamberDescription{Instrument: "C1", Low: q(t, "-60 degC"), High: q(t, "120 degC"), Ramp: q(t, "2 K/min")},
	}
	for i := range n {
		d.Slots = append(d.Slots, instruments.SlotDescription{ID: instruments.SlotID(string(rune('A' + i))), Sense: 1,
			Radius: q(t, "0.15 m"), AttitudeUncertainty: q(t, "0 mrad")})
	}
	return d
}

// fixed is a setup of a shipped population with some parameters set.
func fixed(t testing.TB, population string, set ...string) Setup {
	s := Setup{Population: population, Overrides: map[string]quantity.Value{}}
	for i := 0; i < len(set); i += 2 {
		s.Overrides[set[i]] = q(t, set[i+1])
	}
	return s
}

func world(t testing.TB, c Config) *World {
	t.Helper()
	w, err := New(c)
	if err != nil {
		t.Fatal(err)
	}
	return w
}

func connect(t testing.TB, w *World, endpoint string) link.Link {
	t.Helper()
	l, err := w.Link(endpoint)
	if err != nil {
		t.Fatal(err)
	}
	return l
}

// say sends a line; ask sends one and gives the answer.
func say(t testing.TB, l link.Link, line string) {
	t.Helper()
	if err := l.Send([]byte(line + "\n")); err != nil {
		t.Fatal(err)
	}
}

func ask(t testing.TB, l link.Link, line string) string {
	t.Helper()
	say(t, l, line)
	until := l.Clock().Now().Add(time.Second)
	for {
		got := l.Peek()
		if n := bytes.IndexByte(got, '\n'); n >= 0 {
			answer := string(bytes.TrimRight(got[:n], "\r"))
			l.Discard(n + 1)
			return answer
		}
		if !l.Clock().Now().Before(until) {
			t.Fatalf("no answer to %q", line)
		}
		if err := l.Await(context.Background(), until); err != nil {
			t.Fatal(err)
		}
	}
}

func sleep(t testing.TB, w *World, d time.Duration) {
	t.Helper()
	if err := w.Sleep(context.Background(), d); err != nil {
		t.Fatal(err)
	}
}

// powered switches all supplied slots on.
func powered(t testing.TB, w *World, volts string, n int) {
	l := connect(t, w, "supply")
	for i := range n {
		for _, line := range []string{"VOLT " + volts + ",(@%d)", "CURR 3.5,(@%d)", "OUTP ON,(@%d)"} {
			say(t, l, fmt.Sprintf(line, i+1))
		}
	}
}

// frame is a decoded one. The checksum is checked bit by bit, apart from the encoder's tables.
type frame struct {
	counter     uint16
	count       int32
	temperature int16
	status      uint16
}

func decode(t testing.TB, p []byte) []frame {
	t.Helper()
	if len(p)%frameSize != 0 {
		t.Fatalf("%d bytes are no whole frames", len(p))
	}
	var frames []frame
	for ; len(p) > 0; p = p[frameSize:] {
		if p[0] != 0xa5 || p[1] != 0x5a {
			t.Fatalf("no sync in % x", p[:frameSize])
		}
		if got, want := binary.BigEndian.Uint16(p[12:]), bitwiseCRC(p[2:12]); got != want {
			t.Fatalf("CRC %04x, want %04x, of % x", got, want, p[:frameSize])
		}
		frames = append(frames, frame{binary.BigEndian.Uint16(p[2:]), int32(binary.BigEndian.Uint32(p[4:])),
			int16(binary.BigEndian.Uint16(p[8:])), binary.BigEndian.Uint16(p[10:])})
	}
	return frames
}

// bitwiseCRC is CRC-16/IBM-3740 as its catalogue entry defines it.
func bitwiseCRC(p []byte) uint16 {
	crc := uint16(0xffff)
	for _, b := range p {
		for bit := 7; bit >= 0; bit-- {
			top := crc >> 15
			crc <<= 1
			if top != uint16(b>>bit)&1 {
				crc ^= 0x1021
			}
		}
	}
	return crc
}

// take empties a link.
func take(l link.Link) []byte {
	got := append([]byte(nil), l.Peek()...)
	l.Discard(len(got))
	return got
}

// TestBytesDoNotDependOnSlices plays one scene with waits in slices of many lengths and links looked at often or never.
func TestBytesDoNotDependOnSlices(t *testing.T) {
	scene := func(t *testing.T, population, volts string, slice time.Duration, look bool) (gyro, answers []byte) {
		d := describe(t, 2)
		d.Table.Creep, d.Table.AxisUncertainty = q(t, "1e-4 deg/s"), q(t, "0.3 mrad")
		d.Slots[1].AttitudeUncertainty, d.Slots[1].Sense = q(t, "0.5 mrad"), -1
		w := world(t, Config{Seed: 1, Description: d, Gyros: map[instruments.SlotID]Setup{"A": fixed(t, population), "B": fixed(t, population)}})
		table, supply, g := connect(t, w, "table"), connect(t, w, "supply"), connect(t, w, "gyro-2")
		wait := func(whole time.Duration) {
			end := w.Now().Add(whole)
			for w.Now().Before(end) {
				sleep(t, w, min(slice, end.Sub(w.Now())))
				if look {
					gyro = append(gyro, take(g)...)
				}
			}
		}
		for _, do := range []struct {
			l    link.Link
			line string
			wait time.Duration
		}{
			{supply, "VOLT " + volts + ",(@2)", 123456789}, {supply, "CURR 3.5,(@2)", 0}, {supply, "OUTP ON,(@2)", 61 * time.Second},
			{table, "RATE +50.0 ACC 100.0", 7*time.Second + 3333333}, {table, "RATE?", 4 * time.Second}, {table, "STOP", 9 * time.Second},
			{table, "SWAY 1.0 0.5", 5 * time.Second}, {table, "GOTO -30.0 VEL 20.0", 11 * time.Second}, {table, "POS?", time.Second},
			{supply, "MEAS:CURR? (@2)", time.Second}, {supply, "OUTP OFF,(@2)", 300 * time.Millisecond}, {supply, "OUTP ON,(@2)", 90 * time.Second},
		} {
			say(t, do.l, do.line)
			wait(do.wait)
		}
		return append(gyro, take(g)...), append(take(table), take(supply)...)
	}
	for population, volts := range map[string]string{"optical": "5", "optical-angle": "5", "vibratory": "5", "spinning-mass": "28"} {
		t.Run(population, func(t *testing.T) {
			gyro, answers := scene(t, population, volts, time.Second, false)
			if n := len(decode(t, gyro)); n < 18000 || n > 19500 {
				t.Fatalf("%d frames", n)
			}
			for _, slice := range []time.Duration{time.Hour, 10 * time.Millisecond, 3*time.Millisecond + 7, 700 * time.Millisecond} {
				gyro2, answers2 := scene(t, population, volts, slice, true)
				if !bytes.Equal(gyro, gyro2) || !bytes.Equal(answers, answers2) {
					t.Errorf("other bytes in slices of %v: %q, want %q", slice, answers2, answers)
				}
			}
		})
	}
}

// TestSeedsAndNeighbours: a seed gives its own bytes, again and again, whoever sits in the other slots.
func TestSeedsAndNeighbours(t *testing.T) {
	run := func(seed uint64, slots int, late bool) []byte {
		w := world(t, Config{Seed: seed, Description: describe(t, slots), Gyros: map[instruments.SlotID]Setup{
			"A": fixed(t, "optical"), "B": fixed(t, "vibratory"), "C": fixed(t, "optical-angle")}})
		g := connect(t, w, "gyro-1")
		powered(t, w, "5", slots)
		sleep(t, w, 5*time.Second)
		if late {
			g = connect(t, w, "gyro-1")
		}
		return take(g)
	}
	if got := run(1, 1, true); len(got) != 0 {
		t.Errorf("%d bytes from before the link was there", len(got))
	}
	one := func(seed uint64, slots int) []byte { return run(seed, slots, false) }
	first := one(1, 1)
	if len(decode(t, first)) != 499 {
		t.Fatalf("%d bytes", len(first))
	}
	if !bytes.Equal(first, one(1, 1)) || !bytes.Equal(first, one(1, 3)) {
		t.Error("one seed, other bytes")
	}
	if bytes.Equal(first, one(2, 1)) {
		t.Error("two seeds, the same bytes")
	}
}

func TestSleepEndsWithItsContext(t *testing.T) {
	w := world(t, Config{Seed: 1, Description: describe(t, 1), Gyros: map[instruments.SlotID]Setup{"A": fixed(t, "optical")}})
	stopped := errors.New("operator")
	ctx, cancel := context.WithCancelCause(t.Context())
	w.after(90*time.Second, func() { cancel(stopped) })
	if err := w.Sleep(ctx, time.Hour); !errors.Is(err, stopped) || w.now != 90*secondNs {
		t.Errorf("%v at %v", err, time.Duration(w.now))
	}
}

// BenchmarkFrames is the full path of a gyro at rest, through the memory link.
func BenchmarkFrames(b *testing.B) {
	for _, c := range []struct{ population, volts, table string }{
		{"optical", "5", "STOP"}, {"optical", "5", "RATE 50.0 ACC 100.0"},
		{"vibratory", "5", "STOP"}, {"spinning-mass", "28", "STOP"}, {"optical-angle", "5", "STOP"},
	} {
		b.Run(c.population+" "+c.table[:4], func(b *testing.B) {
			w := world(b, Config{Seed: 1, Description: describe(b, 1), Gyros: map[instruments.SlotID]Setup{"A": fixed(b, c.population)}})
			powered(b, w, c.volts, 1)
			say(b, connect(b, w, "table"), c.table)
			g := connect(b, w, "gyro-1")
			b.ReportAllocs()
			frames := 0
			for b.Loop() {
				sleep(b, w, time.Second)
				n := len(g.Peek())
				g.Discard(n)
				frames += n / frameSize
			}
			b.ReportMetric(float64(frames)/b.Elapsed().Seconds(), "frames/s")
		})
	}
}

// BenchmarkDay is a day of bench time with four gyros at rest, their links emptied every second: the virtual bench's
// share of a long acceptance.
func BenchmarkDay(b *testing.B) {
	for b.Loop() {
		gyros := map[instruments.SlotID]Setup{}
		for _, slot := range []instruments.SlotID{"A", "B", "C", "D"} {
			gyros[slot] = fixed(b, "optical")
		}
		w := world(b, Config{Seed: 1, Description: describe(b, 4), Gyros: gyros})
		powered(b, w, "5", 4)
		var links []link.Link
		for i := range 4 {
			links = append(links, connect(b, w, fmt.Sprintf("gyro-%d", i+1)))
		}
		for range 24 * 3600 {
			sleep(b, w, time.Second)
			for _, l := range links {
				l.Discard(len(l.Peek()))
			}
		}
	}
	b.ReportMetric(float64(b.N)*24*3600*100*4/b.Elapsed().Seconds(), "frames/s")
}
