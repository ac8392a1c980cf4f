package virtual

import (
	"math"
	"strings"
	"testing"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/link"
	"proofrate/limits/quantity"
)

// quiet overrides leave a gyro with next to no noise and none of the optional effects, so that a test can set one.
func quiet(t testing.TB, population string, set ...string) Setup {
	base := []string{"scale-factor-error", "0 ppm", "bias", "0 deg/h", "angle-random-walk", "1e-9 deg/sqrt(h)", "bias-instability", "1e-9 deg/h"}
	p := load(t, population)
	for _, row := range parameters {
		if row.of(p.Family) && row.optional {
			base = append(base, row.name, "0 "+row.unit.String())
		}
	}
	return fixed(t, population, append(base, set...)...)
}

// bench is a world with one gyro, on since its beginning, and its links.
type bench struct {
	*World
	t                   testing.TB
	gyro, table, supply link.Link
}

func newBench(t testing.TB, seed uint64, d *instruments.Description, s Setup, volts string) *bench {
	w := world(t, Config{Seed: seed, Description: d, Gyros: map[instruments.SlotID]Setup{"A": s}})
	w.KeepTrace()
	b := &bench{w, t, connect(t, w, "gyro-1"), connect(t, w, "table"), connect(t, w, "supply")}
	for _, line := range []string{"VOLT " + volts + ",(@1)", "CURR 5,(@1)", "OUTP ON,(@1)"} {
		say(t, b.supply, line)
	}
	return b
}

// frames lets time pass and gives what came meanwhile.
func (b *bench) frames(d time.Duration) []frame {
	b.t.Helper()
	sleep(b.t, b.World, d)
	return decode(b.t, take(b.gyro))
}

// mean is the mean count of frames, and their sample standard deviation.
func mean(frames []frame) (m, sd float64) {
	for _, f := range frames {
		m += float64(f.count) / float64(len(frames))
	}
	for _, f := range frames {
		sd += (float64(f.count) - m) * (float64(f.count) - m) / float64(len(frames)-1)
	}
	return m, math.Sqrt(sd)
}

const earthHere = 15.04106688 * 0.744764 // deg/h on an upright axis at 48.1374 degrees: times its sine

// TestOutputOfASingleEffect sets one parameter and compares the mean output of a quiet optical gyro with the term of
// the signal model that it stands for. The count is made fine enough not to hide it.
func TestOutputOfASingleEffect(t *testing.T) {
	const count = 0.05 // deg/h
	full := 250 * 3600.0
	for name, c := range map[string]struct {
		set   []string
		turn  string  // command to the table
		input float64 // deg/h, of the table
		want  func(w float64) float64
	}{
		"earth rate":   {nil, "STOP", 0, func(w float64) float64 { return w }},
		"bias":         {[]string{"bias", "3 deg/h"}, "STOP", 0, func(w float64) float64 { return w + 3 }},
		"scale factor": {[]string{"scale-factor-error", "500 ppm"}, "RATE 100 ACC 100", 360000, func(w float64) float64 { return w * 1.0005 }},
		"polarity":     {[]string{"polarity", "-1", "bias", "3 deg/h"}, "RATE 100 ACC 100", 360000, func(w float64) float64 { return -w - 3 }},
		"asymmetry +":  {[]string{"asymmetry", "200 ppm"}, "RATE 100 ACC 100", 360000, func(w float64) float64 { return w * 1.0001 }},
		"asymmetry -":  {[]string{"asymmetry", "200 ppm"}, "RATE -100 ACC 100", -360000, func(w float64) float64 { return w * 0.9999 }},
		"cubic": {[]string{"nonlinearity", "100 ppm"}, "RATE 120 ACC 100", 432000, func(w float64) float64 {
			return w + 100e-6/0.287441860465*math.Pow(w/full, 3)*full
		}},
		"fifth order": {[]string{"fifth-order", "100 ppm"}, "RATE 240 ACC 100", 864000, func(w float64) float64 {
			return w + 100e-6/0.362427907*math.Pow(w/full, 5)*full
		}},
		"gravity": {[]string{"acceleration-input", "2 deg/h/g0"}, "STOP", 0, func(w float64) float64 { return w + 2*9.80805/9.80665 }},
		"centripetal": {[]string{"acceleration-radial", "10 deg/h/g0"}, "RATE 200 ACC 100", 720000, func(w float64) float64 {
			return w - 10*math.Pow(200*math.Pi/180, 2)*0.15/9.80665
		}},
		"dead band within":  {[]string{"dead-band", "12 deg/h"}, "STOP", 0, func(float64) float64 { return 0 }},
		"dead band without": {[]string{"dead-band", "11 deg/h"}, "STOP", 0, func(w float64) float64 { return w }},
		"warm-up": {[]string{"warm-up", "40 deg/h", "warm-up-time", "60 s"}, "STOP", 0, func(w float64) float64 {
			return w + 40*(math.Exp(-5.0/60)-math.Exp(-23.0/60))*60/18
		}},
		"ramp":       {[]string{"rate-ramp", "3600 deg/h/h"}, "STOP", 0, func(w float64) float64 { return w + 13.5 }},
		"saturation": {[]string{"saturation", "1.1", "range", "100 deg/s"}, "RATE 150 ACC 200", 540000, func(float64) float64 { return 396000 }},
	} {
		t.Run(name, func(t *testing.T) {
			b := newBench(t, 1, describe(t, 1), quiet(t, "optical", c.set...), "5")
			say(t, b.table, c.turn)
			b.frames(5 * time.Second)
			got, _ := mean(b.frames(18 * time.Second)) // whole turns, over which the ripple is gone
			want := c.want(c.input + earthHere)
			within := count + math.Abs(c.input)*2e-7
			if math.Abs(got*count-want) > within {
				t.Errorf("%v deg/h, want %v within %v", got*count, want, within)
			}
		})
	}
}

// TestOutputOverTemperature: the chamber is taken to 43 degC and the gyro follows.
func TestOutputOverTemperature(t *testing.T) {
	b := newBench(t, 1, describe(t, 1), quiet(t, "optical", "bias-temperature", "0.5 deg/h/K", "bias-temperature-square", "0.01 deg/h/K^2",
		"temperature-offset", "0.25 K", "thermal-lag", "10 min"), "5")
	b.climate.wander.kick = 0
	b.climate.set(43, 2.0/60)
	sleep(t, b.World, 4*time.Hour)
	b.frames(0)
	frames := b.frames(60 * time.Second)
	got, _ := mean(frames)
	if want := earthHere + 0.5*20 + 0.01*400; math.Abs(got*0.05-want) > 0.03 {
		t.Errorf("%v deg/h, want %v", got*0.05, want)
	}
	if got := frames[0].temperature; got < 4324 || got > 4326 {
		t.Errorf("its thermometer says %v, want 43.25", got)
	}
	// While the temperature changes by a steady 1 K/min, the rate term shows: 600 s of lag behind, then steady.
	b = newBench(t, 1, describe(t, 1), quiet(t, "optical", "bias-temperature-rate", "2 deg/h/(K/min)", "thermal-lag", "10 min"), "5")
	b.climate.wander.kick = 0
	b.climate.set(110, 1.0/60)
	sleep(t, b.World, 80*time.Minute)
	b.frames(0)
	if got, _ := mean(b.frames(60 * time.Second)); math.Abs(got*0.05-earthHere-2) > 0.03 {
		t.Errorf("%v deg/h beyond the Earth's, want 2", got*0.05-earthHere)
	}
}

// TestFramesAfterPowerOn: the counter, the times of arrival, and the status while the gyro starts and saturates.
func TestFramesAfterPowerOn(t *testing.T) {
	for population, c := range map[string]struct {
		volts string
		valid int // first frame whose end lies at or after the start-up
	}{"optical": {"5", 199}, "vibratory": {"5", 318}, "spinning-mass": {"28", 1999}} {
		t.Run(population, func(t *testing.T) {
			set := []string{"start-up", "2 s"}
			switch population {
			case "vibratory":
				set = []string{"drive-quality", "20000", "drive-frequency", "10 kHz"}
			case "spinning-mass":
				set = []string{"start-up", "20 s"}
			}
			b := newBench(t, 1, describe(t, 1), quiet(t, population, set...), c.volts)
			frames := b.frames(30 * time.Second)
			if len(frames) != 2999 { // the last is still on the line
				t.Errorf("%d frames in 30 s", len(frames))
			}
			for i, f := range frames {
				want := uint16(statusValid)
				if i < c.valid {
					want = statusStarting
				}
				if f.counter != uint16(i) || f.status != want {
					t.Fatalf("frame %d: counter %d, status %b, want %b", i, f.counter, f.status, want)
				}
			}
			say(t, b.supply, "OUTP OFF,(@1)")
			b.frames(time.Second)
			if got := len(b.frames(10 * time.Second)); got != 0 {
				t.Errorf("%d frames without power", got)
			}
			say(t, b.supply, "OUTP ON,(@1)")
			if frames := b.frames(time.Second); len(frames) != 99 || frames[0].counter != 0 {
				t.Errorf("%d frames after power-on, first %+v", len(frames), frames[0])
			}
		})
	}
	b := newBench(t, 1, describe(t, 1), quiet(t, "optical", "range", "50 deg/s"), "5")
	say(t, b.table, "RATE -70 ACC 100")
	b.frames(5 * time.Second)
	for _, f := range b.frames(time.Second) {
		if f.status != statusValid|statusSaturated || f.count != -50*1.2*3600/0.05 {
			t.Fatalf("beyond its range: %+v", f)
		}
	}
	l := connect(t, b.World, "gyro-1")
	now := b.Now()
	if err := l.Await(t.Context(), now.Add(time.Second)); err != nil {
		t.Fatal(err)
	}
	if got := l.LastArrival().Sub(now); got != time.Duration(frameOnLine) && got != 10*time.Millisecond+time.Duration(frameOnLine) {
		t.Errorf("the next frame arrives after %v", got)
	}
}

// TestCounterWraps: after 65536 frames it begins anew.
func TestCounterWraps(t *testing.T) {
	b := newBench(t, 1, describe(t, 1), quiet(t, "optical"), "5")
	b.frames(655 * time.Second)
	frames := b.frames(2 * time.Second)
	for i := 1; i < len(frames); i++ {
		if frames[i].counter != frames[i-1].counter+1 {
			t.Fatalf("after %d comes %d", frames[i-1].counter, frames[i].counter)
		}
	}
	if frames[len(frames)-1].counter > 200 {
		t.Errorf("the counter stands at %d", frames[len(frames)-1].counter)
	}
}

// TestWhiteNoiseOfTheOutput: the scatter of samples is N/sqrt(tau0) with the rounding's share, within five standard
// errors of a standard deviation.
func TestWhiteNoiseOfTheOutput(t *testing.T) {
	for _, c := range []struct {
		population, volts, n string
		count, want          float64 // of N, in counts
	}{
		{"optical", "5", "0.002 deg/sqrt(h)", 0.05, 0.002 * 60 * 10 / 0.05},
		{"optical", "5", "0.0001 deg/sqrt(h)", 0.05, 0.0001 * 60 * 10 / 0.05},
		{"vibratory", "5", "0.2 deg/sqrt(h)", 0.001, 0.2 / 60 * 10 / 0.001},
		{"spinning-mass", "28", "0.02 deg/sqrt(h)", 0.0005, 0.02 / 60 * 10 / 0.0005},
	} {
		b := newBench(t, 1, describe(t, 1), quiet(t, c.population, "angle-random-walk", c.n), c.volts)
		b.frames(60 * time.Second)
		frames := b.frames(400 * time.Second)
		_, sd := mean(frames)
		want := math.Sqrt(c.want*c.want + 1.0/12)
		if z := (sd/want - 1) * math.Sqrt(2*float64(len(frames))); math.Abs(z) > 5 {
			t.Errorf("%s, N %s: %v counts, want %v (%.1f standard errors)", c.population, c.n, sd, want, z)
		}
		if got := b.Truth("A").N() * math.Sqrt(frameRate) / b.Truth("A").Count; math.Abs(got/want-1) > 1e-9 {
			t.Errorf("%s: the truth of N_eff is %v counts, want %v", c.population, got, want)
		}
	}
}

// TestAngleOutput: increments carry their remainder, so that the angle is right however long it adds up, and the
// quantisation shows as 3 Q^2/tau^2 beside the white noise.
func TestAngleOutput(t *testing.T) {
	const count = 0.02 // arcsec
	b := newBench(t, 1, describe(t, 1), quiet(t, "optical-angle", "bias", "0.123 deg/h", "angle-random-walk", "0.002 deg/sqrt(h)"), "5")
	b.frames(60 * time.Second)
	frames := b.frames(1000 * time.Second)
	sum := 0.0
	for _, f := range frames {
		sum += float64(f.count) * count
	}
	// 1 deg/h is 1 arcsec/s; the angle walks by 0.12 arcsec/sqrt(s).
	if got, want := sum, (earthHere+0.123)*float64(len(frames))*framePeriod; math.Abs(got-want) > 5*0.12*math.Sqrt(1000) {
		t.Errorf("an angle of %v arcsec, want %v", got, want)
	}
	truth := b.Truth("A")
	if got, want := truth.Q()/degPerHour, count/math.Sqrt(12); math.Abs(got/want-1) > 1e-9 {
		t.Errorf("Q %v arcsec, want %v", got, want)
	}
	if got, want := truth.N()/degPerHour, 0.12; math.Abs(got/want-1) > 1e-9 {
		t.Errorf("N %v arcsec/sqrt(s), want %v: increments do not round the rate", got, want)
	}
	for _, m := range []int{1, 2, 5, 10} {
		rate := func(i int) (s float64) {
			for _, f := range frames[i : i+m] {
				s += float64(f.count) * count / (float64(m) * framePeriod)
			}
			return s
		}
		v, n := 0.0, 0.0
		for i := 0; i+2*m <= len(frames); i += 2 * m {
			d := rate(i+m) - rate(i)
			v, n = v+d*d/2, n+1
		}
		tau := float64(m) * framePeriod
		got, want := math.Sqrt(v/n), math.Sqrt(3*count*count/12/(tau*tau)+0.12*0.12/tau)
		if math.Abs(got/want-1) > 5/math.Sqrt(2*n) {
			t.Errorf("m = %d: sigma %v deg/h, want %v", m, got, want)
		}
		if told := truth.Deviation(tau) / degPerHour; math.Abs(told/want-1) > 1e-6 {
			t.Errorf("m = %d: the truth says %v deg/h, want %v", m, told, want)
		}
	}
}

// TestNoiseGoesOnThroughPowerOff: a gyro that was off for a while has the same noise afterwards as one that was not.
func TestNoiseGoesOnThroughPowerOff(t *testing.T) {
	run := func(off bool) []frame {
		b := newBench(t, 1, describe(t, 1), fixed(t, "optical", "turn-on", "0 deg/h", "warm-up", "0 deg/h"), "5")
		b.frames(20 * time.Second)
		if off {
			say(t, b.supply, "OUTP OFF,(@1)")
		}
		b.frames(600 * time.Second)
		if off {
			say(t, b.supply, "OUTP ON,(@1)")
		}
		b.frames(10 * time.Second)
		return b.frames(10 * time.Second)
	}
	with, without := run(true), run(false)
	for i := range without {
		if with[i].count != without[i].count {
			t.Fatalf("frame %d: %d, without the pause %d", i, with[i].count, without[i].count)
		}
	}
}

// TestTurnOnsScatter: by the stated standard deviation, within five standard errors.
func TestTurnOnsScatter(t *testing.T) {
	const cycles = 300
	b := newBench(t, 1, describe(t, 1), quiet(t, "optical", "turn-on", "50 deg/h"), "5")
	var biases []float64
	for range cycles {
		say(t, b.supply, "OUTP OFF,(@1)")
		b.frames(time.Second)
		say(t, b.supply, "OUTP ON,(@1)")
		m, _ := mean(b.frames(2 * time.Second))
		biases = append(biases, m*0.05-earthHere)
	}
	m, v := 0.0, 0.0
	for _, x := range biases {
		m += x / cycles
	}
	for _, x := range biases {
		v += (x - m) * (x - m) / (cycles - 1)
	}
	if sd := math.Sqrt(v); math.Abs(sd/50-1) > 5/math.Sqrt(2*cycles) || math.Abs(m) > 5*50/math.Sqrt(cycles) {
		t.Errorf("turn-ons scatter by %v about %v, want 50 about 0", sd, m)
	}
}

// TestWorldsAreRefused: what cannot be set up is said, with its slot.
func TestWorldsAreRefused(t *testing.T) {
	for name, c := range map[string]struct {
		change func(c *Config)
		want   string
	}{
		"table in degrees":  {func(c *Config) { c.Description.Table.MaxRate = q(t, "400 deg") }, "greatest rate"},
		"no ramp":           {func(c *Config) { c.Description.Chamber.Ramp = quantity.Value{} }, "the chamber's ramp is 0"},
		"no description":    {func(c *Config) { c.Description = nil }, "needs a description"},
		"no gyro":           {func(c *Config) { delete(c.Gyros, "B") }, "slot B: the virtual bench has no gyro"},
		"population":        {func(c *Config) { c.Gyros["A"] = Setup{Population: "opticl"} }, `slot A: "opticl" is no population; did you mean "optical"?`},
		"parameter":         {func(c *Config) { c.Gyros["A"] = fixed(t, "optical", "biass", "1 deg/h") }, `did you mean "bias"?`},
		"channel":           {func(c *Config) { c.Description.Slots[1].SupplyChannel = 5 }, "channels 1 to 4"},
		"channel taken":     {func(c *Config) { c.Description.Slots[1].SupplyChannel = 1 }, "feeds slot A already"},
		"sense":             {func(c *Config) { c.Description.Slots[0].Sense = 0 }, "sense 0"},
		"no axis":           {func(c *Config) { c.Description.Table.Axis = instruments.Vector{} }, "axis has no direction"},
		"ambient in kelvin": {func(c *Config) { c.Ambient = q(t, "300 K") }, "ambient"},
	} {
		t.Run(name, func(t *testing.T) {
			config := Config{Seed: 1, Description: describe(t, 2), Gyros: map[instruments.SlotID]Setup{"A": fixed(t, "optical"), "B": fixed(t, "optical")}}
			c.change(&config)
			_, err := New(config)
			if err == nil || !strings.Contains(err.Error(), c.want) {
				t.Errorf("%v, want %q", err, c.want)
			}
		})
	}
	w := world(t, Config{Seed: 1, Description: describe(t, 1), Gyros: map[instruments.SlotID]Setup{"A": fixed(t, "optical")}})
	if _, err := w.Link("gyro-2"); err == nil || !strings.Contains(err.Error(), "gyro-1") {
		t.Errorf("%v", err)
	}
	if w.Truth("B") != nil {
		t.Error("a truth of no gyro")
	}
}
