package virtual

import (
	"math"
	"testing"
	"time"

	"proofrate/instruments"
)

// calm is a climate without the air's wander.
func calm(ambient float64) *climate {
	c := newClimate(ambient, stream(1, "air"))
	c.wander.kick, c.wander.x = 0, 0
	return c
}

// TestSecondOrderStep compares the exact transition with the equation integrated step by step.
func TestSecondOrderStep(t *testing.T) {
	step := secondOrderStep(servoOmega, servoDamping, 0.1)
	for _, from := range [][2]float64{{1, 0}, {0, 1}, {-2, 30}} {
		e, rate := integrate(from[0], from[1], 0, 0.1, func(float64) float64 { return 0 })
		gotE, gotRate := step[0][0]*from[0]+step[0][1]*from[1], step[1][0]*from[0]+step[1][1]*from[1]
		if math.Abs(gotE-e) > 1e-10 || math.Abs(gotRate-rate) > 1e-9 {
			t.Errorf("from %v: %v, %v; want %v, %v", from, gotE, gotRate, e, rate)
		}
	}
}

// TestBodyLags: thirty minutes after a step of 63 K a body with a lag of 15 min is exp(-2) of it away, 8.5 K.
func TestBodyLags(t *testing.T) {
	b := newBody(23, 900)
	for range 1800 {
		b.advance(-40)
	}
	if got := b.temperature + 40; math.Abs(got-63*math.Exp(-2)) > 1e-9 {
		t.Errorf("%v K away, want 8.526", got)
	}
}

func TestAirRampsOvershootsAndSettles(t *testing.T) {
	c := calm(23)
	c.set(-40, 2.0/60)
	lowest, steepest, reached := 23.0, 0.0, 0
	for s := range 2 * 3600 {
		before := c.air()
		c.advance()
		lowest = math.Min(lowest, c.air())
		steepest = math.Max(steepest, math.Abs(c.air()-before))
		if reached == 0 && c.reached() {
			reached = s
		}
	}
	// The ramp alone takes 63 K / 2 K/min = 1890 s.
	if reached < 1890 || reached > 1890+400 {
		t.Errorf("at the set-point after %d s", reached)
	}
	if over := -40 - lowest; over < 0.05 || over > 0.5 {
		t.Errorf("overshoot %v K", over)
	}
	if steepest > 1.15*2/60 {
		t.Errorf("up to %v K/min", 60*steepest)
	}
	if math.Abs(c.air()+40) > 1e-3 || math.Abs(c.fixture+40) > 0.01 {
		t.Errorf("air %v, fixture %v", c.air(), c.fixture)
	}
	c.off()
	for range 1800 {
		c.advance()
	}
	if want := 23 - 63*math.Exp(-1); math.Abs(c.air()-want) > 0.01 {
		t.Errorf("half an hour after switching off the air is at %v, want %v", c.air(), want)
	}
}

// TestAirWanders: about the set-point by the stated standard deviation, and by much less at a gyro.
func TestAirWanders(t *testing.T) {
	c := newClimate(23, stream(1, "air"))
	c.set(23, 1)
	b := newBody(23, 720)
	var air, gyro float64
	const n = 400000
	for range n {
		c.advance()
		b.advance(c.fixture)
		air += (c.air() - 23) * (c.air() - 23) / n
		gyro += (b.temperature - 23) * (b.temperature - 23) / n
	}
	// n s hold n/(2*120 s) independent values of the air's square, each with a standard deviation of sqrt(2) of the mean.
	if got, within := math.Sqrt(air), 5*airWander/math.Sqrt(2*n/240); math.Abs(got-airWander) > within {
		t.Errorf("the air wanders by %v K, want %v within %v", got, airWander, within)
	}
	if got := math.Sqrt(gyro); got > airWander/2 {
		t.Errorf("a gyro wanders by %v K", got)
	}
}

// TestChamberThroughItsRegisters works the chamber by frames written out by hand from the protocol's definition.
func TestChamberThroughItsRegisters(t *testing.T) {
	w := world(t, Config{Seed: 1, Description: describe(t, 1), Gyros: map[instruments.SlotID]Setup{"A": fixed(t, "optical")}})
	w.climate.wander.kick = 0
	l := connect(t, w, "chamber")
	exchange := func(name, request, want string) {
		t.Helper()
		frame := octets(t, request)
		crc := slowCRC(frame)
		if err := l.Send(append(frame, byte(crc), byte(crc>>8))); err != nil {
			t.Fatal(err)
		}
		sent := w.Now()
		until := sent.Add(100 * time.Millisecond)
		if err := l.Await(t.Context(), until); err != nil {
			t.Fatal(err)
		}
		got := take(l)
		if want == "" {
			if len(got) > 0 {
				t.Errorf("%s: answered % x", name, got)
			}
			return
		}
		if n := len(got) - 2; n < 0 || string(got[:n]) != string(octets(t, want)) || slowCRC(got) != 0 {
			t.Errorf("%s: % x, want %s and its CRC", name, got, want)
		}
		if delay := l.LastArrival().Sub(sent); delay != 20*time.Millisecond {
			t.Errorf("%s: answered after %v", name, delay)
		}
	}
	exchange("model", "01 04 00 10 00 01", "01 04 02 04 B1")
	exchange("serial and firmware", "01 04 00 11 00 03", "01 04 06 00 0B BF D1 00 68")
	exchange("air", "01 04 00 00 00 02", "01 04 04 08 FC 00 00") // 23.00 degC, off
	exchange("set-point", "01 06 00 00 FE 70", "01 06 00 00 FE 70")
	exchange("ramp and run", "01 10 00 01 00 02 04 00 1E 00 01", "01 10 00 01 00 02")
	exchange("read back", "01 03 00 00 00 03", "01 03 06 FE 70 00 1E 00 01")
	exchange("ramping", "01 04 00 01 00 01", "01 04 02 00 01")
	exchange("too cold", "01 06 00 00 FD A7", "01 86 03") // -60.1 degC
	exchange("no such register", "01 03 00 03 00 01", "01 83 02")
	exchange("beyond the last", "01 04 00 13 00 02", "01 84 02")
	exchange("no such function", "01 05 00 00 FF 00", "01 85 01")
	exchange("nothing asked for", "01 03 00 00 00 00", "01 83 03")
	exchange("run is 0 or 1", "01 06 00 02 00 02", "01 86 03")
	exchange("another server", "02 03 00 00 00 01", "")
	exchange("broadcast", "00 06 00 01 00 14", "")
	exchange("carried out", "01 03 00 01 00 01", "01 03 02 00 14")
	sleep(t, w, 3*time.Hour)
	exchange("arrived", "01 04 00 00 00 02", "01 04 04 F0 60 00 02") // -40.00 degC, at set-point
	exchange("off", "01 06 00 02 00 00", "01 06 00 02 00 00")
	exchange("is off", "01 04 00 01 00 01", "01 04 02 00 00")

	// Noise before a request, a request in two pieces, and the rest of an older one after a silence.
	whole := octets(t, "01 04 00 10 00 01")
	crc := slowCRC(whole)
	whole = append(whole, byte(crc), byte(crc>>8))
	for name, pieces := range map[string][][]byte{
		"noise":  {append([]byte{0xff, 0x01, 0x03}, whole...)},
		"pieces": {whole[:3], whole[3:]},
	} {
		for _, p := range pieces {
			if err := l.Send(p); err != nil {
				t.Fatal(err)
			}
			sleep(t, w, 50*time.Millisecond)
		}
		if got := take(l); len(got) != 7 {
			t.Errorf("%s: % x", name, got)
		}
	}
	if err := l.Send(whole[:5]); err != nil {
		t.Fatal(err)
	}
	sleep(t, w, 3*time.Second)
	if err := l.Send(whole); err != nil {
		t.Fatal(err)
	}
	sleep(t, w, 50*time.Millisecond)
	if got := take(l); len(got) != 7 {
		t.Errorf("after the rest of an older request: % x", got)
	}
}

// slowCRC is CRC-16/MODBUS as the serial line guide describes it, most significant bit first over reflected bytes.
func slowCRC(p []byte) uint16 {
	reflect := func(x uint32, bits int) (r uint32) {
		for i := range bits {
			r |= x >> i & 1 << (bits - 1 - i)
		}
		return r
	}
	crc := uint32(0xffff)
	for _, b := range p {
		crc ^= reflect(uint32(b), 8) << 8
		for range 8 {
			crc <<= 1
			if crc&0x10000 != 0 {
				crc ^= 0x18005
			}
		}
	}
	return uint16(reflect(crc, 16))
}
