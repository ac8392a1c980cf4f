package virtual

import (
	"math"
	"strings"
	"testing"
	"time"

	"proofrate/instruments"
)

// TestTableSpeaks walks through the table's protocol.
func TestTableSpeaks(t *testing.T) {
	w := world(t, Config{Seed: 1, Description: describe(t, 1), Gyros: map[instruments.SlotID]Setup{"A": fixed(t, "optical")}})
	l := connect(t, w, "table")
	near := func(line string, want, within float64, digits int) {
		t.Helper()
		got := ask(t, l, line)
		if x, ok := decimal(got); !ok || math.Abs(x-want) > within || got[0] != '+' && got[0] != '-' || len(got)-strings.IndexByte(got, '.')-1 != digits {
			t.Errorf("%s: %q, want %v within %v and %d digits", line, got, want, within, digits)
		}
	}
	is := func(line, want string) {
		t.Helper()
		if got := ask(t, l, line); got != want {
			t.Errorf("%s: %q, want %q", line, got, want)
		}
	}
	before := w.Now()
	is("*IDN?", "PROOFRATE,VIRTUAL TABLE,VT-0001,1.0")
	if got := w.Now().Sub(before); got != 2*time.Millisecond {
		t.Errorf("answered after %v", got)
	}
	is("STATE?", "HOLD")
	near("POS?", 0, 1e-4, 5)
	is("RATE +12.50000 ACC 50.000\r", "OK")
	is("STATE?", "MOVING")
	sleep(t, w, 2*time.Second)
	is("STATE?", "AT RATE")
	near("RATE?", 12.5, 2e-4, 6)
	is("STOP", "OK")
	is("STATE?", "MOVING")
	sleep(t, w, 2*time.Second)
	is("STATE?", "HOLD")
	near("RATE?", 0, 2e-4, 6)
	is("GOTO +735.0000 VEL 200.000", "OK")
	sleep(t, w, 20*time.Second)
	is("STATE?", "HOLD")
	near("POS?", 735, 1e-4, 5)
	is("GOTO -10 VEL 300", "OK")
	sleep(t, w, 20*time.Second)
	near("POS?", -10, 1e-4, 5)
	is("SWAY 1.0000 0.5000", "OK")
	sleep(t, w, 10*time.Second)
	is("STATE?", "MOVING")
	low, high := math.Inf(1), math.Inf(-1)
	for range 500 {
		sleep(t, w, 8*time.Millisecond)
		x, _ := decimal(ask(t, l, "POS?"))
		low, high = math.Min(low, x), math.Max(high, x)
	}
	if math.Abs(low+11) > 2e-3 || math.Abs(high+9) > 2e-3 {
		t.Errorf("sways from %v to %v, want -11 to -9", low, high)
	}
	is("STOP", "OK")
	for _, line := range []string{"", "rate?", "RATE 1", "RATE x ACC 1", "RATE 1 ACC NaN", "RATE 1 ACC Inf", "RATE  1 ACC 1", "STOP now", strings.Repeat("x", 5000)} {
		is(line, "ERR 1 SYNTAX")
	}
	for _, line := range []string{"RATE 400.1 ACC 10", "RATE -400.1 ACC 10", "RATE 10 ACC 200.1", "RATE 10 ACC 0", "GOTO 1 VEL 0", "GOTO 1 VEL 401",
		"SWAY 0 1", "SWAY 1 0", "SWAY 100 1", "SWAY 0.1 10"} {
		is(line, "ERR 2 RANGE")
	}
	// Lines that come together are answered one after the other.
	say(t, l, "STATE?\nRATE?\nPOS?")
	sleep(t, w, 7*time.Millisecond)
	if got := strings.Count(string(take(l)), "\r\n"); got != 3 {
		t.Errorf("%d answers to three lines", got)
	}
}

// TestTableHidesItsRateError: what the table says is what was commanded; its angle and the gyros know better.
func TestTableHidesItsRateError(t *testing.T) {
	for seed := range uint64(3) {
		d := describe(t, 1)
		d.Instruments = []instruments.InstrumentDescription{{Name: "T1", Calibrations: []instruments.Calibration{
			{Reading: "table.rate", Correction: q(t, "40 ppm"), U: q(t, "20 ppm"), K: 2, Drift: q(t, "0 ppm")}}}}
		w := world(t, Config{Seed: seed + 1, Description: d, Gyros: map[instruments.SlotID]Setup{"A": fixed(t, "optical")}})
		w.KeepTrace()
		truth := w.Truth("A")
		if off := truth.TableShare - 40e-6; math.Abs(off) > 5*10e-6 || off == 0 {
			t.Errorf("hidden error %v, want one within 50 ppm of the correction", truth.TableShare)
		}
		powered(t, w, "5", 1)
		l := connect(t, w, "table")
		ask(t, l, "RATE 100.0 ACC 100.0")
		sleep(t, w, 5*time.Second)
		from, a := w.Now(), 0.0
		a, _ = decimal(ask(t, l, "POS?"))
		sleep(t, w, 36*time.Second) // ten turns
		b, _ := decimal(ask(t, l, "POS?"))
		elapsed := w.Now().Sub(from).Seconds() - 0.002 // angles are read when the line comes
		rate := (b - a) / elapsed
		if got := rate/100 - 1; math.Abs(got-truth.TableShare) > 1e-7 {
			t.Errorf("seed %d: the angle shows an error of %v, truth %v", seed+1, got, truth.TableShare)
		}
		said, _ := decimal(ask(t, l, "RATE?"))
		if math.Abs(said-100) > 2e-4 {
			t.Errorf("the table says %v", said)
		}
		on := began                                                   // the supply was switched on at once
		window, err := truth.Window(on.Add(6*time.Second), 600, 3240) // nine turns
		if err != nil {
			t.Fatal(err)
		}
		want := 100*math.Pi/180*(1+truth.TableShare) + 7.292115e-5*math.Sin(48.1374*math.Pi/180)
		if math.Abs(window.Input/want-1) > 2e-8 {
			t.Errorf("seed %d: input %v, want %v", seed+1, window.Input, want)
		}
	}
}

// TestTableCreepsAtHold: by no more than it is said to, another way each time, and its angle shows it.
func TestTableCreepsAtHold(t *testing.T) {
	d := describe(t, 1)
	d.Table.Creep = q(t, "1e-4 deg/s")
	w := world(t, Config{Seed: 1, Description: d, Gyros: map[instruments.SlotID]Setup{"A": fixed(t, "optical")}})
	w.KeepTrace()
	powered(t, w, "5", 1)
	l := connect(t, w, "table")
	seen := map[float64]bool{}
	for range 6 {
		ask(t, l, "STOP")
		sleep(t, w, 5*time.Second)
		start := w.Now()
		a, _ := decimal(ask(t, l, "POS?"))
		sleep(t, w, 1000*time.Second)
		b, _ := decimal(ask(t, l, "POS?"))
		creep := (b - a) / 1000.002
		if math.Abs(creep) > 1e-4 || math.Abs(creep) < 1e-8 {
			t.Errorf("creep of %v deg/s", creep)
		}
		seen[math.Round(creep*1e7)] = true
		window, err := w.Truth("A").Window(start, uint64(start.Sub(began)/(10*time.Millisecond)), 100000)
		if err != nil {
			t.Fatal(err)
		}
		earth := 7.292115e-5 * math.Sin(48.1374*math.Pi/180)
		if got := (window.Input - earth) * 180 / math.Pi; math.Abs(got-creep) > 1e-7 {
			t.Errorf("the gyro feels a creep of %v deg/s, the angle shows %v", got, creep)
		}
	}
	if len(seen) < 5 {
		t.Errorf("creeps %v", seen)
	}
}
