package bench

import (
	"errors"
	"io"
	"math"
	"net"
	"os"
	"strings"
	"testing"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/instrumentstest"
	"proofrate/limits/quantity"
)

var (
	degPerS  = quantity.MustUnit("deg/s")
	degPerS2 = quantity.MustUnit("deg/s^2")
	degPerH  = quantity.MustUnit("deg/h")
	volt     = quantity.MustUnit("V")
	ampere   = quantity.MustUnit("A")
)

// opened opens a shipped bench.
func opened(t testing.TB, name string, seed uint64) *Opened {
	t.Helper()
	text, _ := Shipped(name)
	loaded, _, wrong := Load(name, text, os.ReadFile)
	if err := wrong.Err(); err != nil {
		t.Fatal(err)
	}
	o, err := Open(t.Context(), loaded, seed)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := o.Close(); err != nil {
			t.Error(err)
		}
	})
	return o
}

// power feeds a slot at its gyro's voltage and waits for the gyro to start.
func power(t testing.TB, o *Opened, at int, volts float64, start time.Duration) {
	t.Helper()
	slot := o.Slots[at]
	limit := o.Description.Slots[at].MaxCurrent
	if err := slot.Supply.Set(t.Context(), quantity.Of(volts, volt), limit); err != nil {
		t.Fatal(err)
	}
	if err := slot.Supply.On(t.Context()); err != nil {
		t.Fatal(err)
	}
	slot.Gyro.Restart()
	if err := o.Clock.Sleep(t.Context(), start); err != nil {
		t.Fatal(err)
	}
}

// record gives ten seconds of counts.
func record(t testing.TB, o *Opened, at int) instruments.Batch {
	t.Helper()
	var before, batch instruments.Batch
	gyro := o.Slots[at].Gyro
	if err := gyro.Drain(t.Context(), &before); err != nil {
		t.Fatal(err)
	}
	if err := o.Clock.Sleep(t.Context(), 10*time.Second); err != nil {
		t.Fatal(err)
	}
	if err := gyro.Drain(t.Context(), &batch); err != nil {
		t.Fatal(err)
	}
	if batch.Len() != 1000 || len(batch.Gaps) > 0 || batch.Damaged > 0 || batch.First != before.First+uint64(before.Len()) {
		t.Fatalf("%d samples from counter %d after %d from %d, gaps %v, %d damaged; expected 1000 without a gap",
			batch.Len(), batch.First, before.Len(), before.First, batch.Gaps, batch.Damaged)
	}
	return batch
}

// meanRate is the mean of a batch at the nominal scale factor.
func meanRate(o *Opened, at int, batch instruments.Batch, unit quantity.Unit) float64 {
	sum := int64(0)
	for _, count := range batch.Counts[0] {
		sum += count
	}
	return float64(sum) / float64(batch.Len()) * o.Description.Slots[at].Channels[0].Count.As(unit)
}

// TestShippedBenchThroughBytes takes each shipped bench from the opening to a turning table, all through links.
func TestShippedBenchThroughBytes(t *testing.T) {
	// The bounds hold what the populations spread at six standard deviations: bias with warm-up, and scale factor.
	cases := []struct {
		bench     string
		volts     float64
		start     time.Duration
		biasDegPH float64
		scale     float64
	}{
		{"virtual-bench", 5, 10 * time.Second, 4, 600e-6},
		{"virtual-vibratory", 5, 10 * time.Second, 340, 4000e-6},
		{"virtual-spinning", 28, 60 * time.Second, 90, 3000e-6},
	}
	for _, c := range cases {
		t.Run(c.bench, func(t *testing.T) {
			o := opened(t, c.bench, 1)
			if len(o.Identities) != 3 {
				t.Errorf("identified: %v", o.Identities)
			}
			for _, i := range o.Identities {
				if i.Identity.Model == "" || i.Identity.Serial == "" {
					t.Errorf("%s said %+v", i.Name, i.Identity)
				}
			}
			for at := range o.Slots {
				power(t, o, at, c.volts, 0)
			}
			if err := o.Clock.Sleep(t.Context(), c.start); err != nil {
				t.Fatal(err)
			}
			// Axis up at 47.66 deg north: Omega sin(latitude), Omega of WGS 84.
			earth := 15.041067 * math.Sin(47.66*math.Pi/180)
			for at := range o.Slots {
				if got := meanRate(o, at, record(t, o, at), degPerH); math.Abs(got-earth) > c.biasDegPH {
					t.Errorf("slot %s at rest: %.2f deg/h, expected %.2f within %v", o.Slots[at].ID, got, earth, c.biasDegPH)
				}
			}
			if err := o.Table.SetRate(t.Context(), quantity.Of(30, degPerS), quantity.Of(60, degPerS2)); err != nil {
				t.Fatal(err)
			}
			if err := o.Clock.Sleep(t.Context(), 5*time.Second); err != nil {
				t.Fatal(err)
			}
			rate, err := instruments.Read(t.Context(), o.Table, "table.rate")
			if err != nil || math.Abs(rate.Value.As(degPerS)-30) > 0.01 { // ripple and readback noise
				t.Errorf("table.rate %v, %v", rate.Value, err)
			}
			for at := range o.Slots {
				got := meanRate(o, at, record(t, o, at), degPerS)
				if bound := 30*c.scale + c.biasDegPH/3600 + 0.01; math.Abs(got-30-earth/3600) > bound {
					t.Errorf("slot %s at 30 deg/s: %.4f deg/s within %.4f", o.Slots[at].ID, got, bound)
				}
				temperature, err := instruments.Read(t.Context(), o.Slots[at].Gyro, "gyro.temperature")
				if err != nil || math.Abs(temperature.Value.Number-23) > 5 {
					t.Errorf("slot %s: gyro.temperature %v, %v", o.Slots[at].ID, temperature.Value, err)
				}
				current, err := instruments.Read(t.Context(), o.Slots[at].Supply, "supply.current")
				if err != nil || !(current.Value.As(ampere) > 0.01) {
					t.Errorf("slot %s: supply.current %v, %v", o.Slots[at].ID, current.Value, err)
				}
			}
			if err := o.Table.Stop(t.Context()); err != nil {
				t.Error(err)
			}
		})
	}
}

func TestSameSeedSameBytes(t *testing.T) {
	counts := func(seed uint64) []int64 {
		o := opened(t, Default, seed)
		power(t, o, 0, 5, 10*time.Second)
		return record(t, o, 0).Counts[0]
	}
	one, again, other := counts(1), counts(1), counts(2)
	equal := func(a, b []int64) bool {
		for i := range a {
			if a[i] != b[i] {
				return false
			}
		}
		return true
	}
	if !equal(one, again) {
		t.Error("seed 1 gave two recordings")
	}
	if equal(one, other) {
		t.Error("seeds 1 and 2 gave one recording")
	}
}

func TestShippedInstrumentsConform(t *testing.T) {
	t.Run("table", func(t *testing.T) {
		instrumentstest.TestTable(t, func(t testing.TB) (instruments.Table, instruments.Clock) {
			o := opened(t, Default, 1)
			return o.Table, o.Clock
		})
	})
	t.Run("chamber", func(t *testing.T) {
		instrumentstest.TestChamber(t, func(t testing.TB) (instruments.Chamber, instruments.Clock) {
			o := opened(t, Default, 1)
			return o.Chamber, o.Clock
		})
	})
	t.Run("supply", func(t *testing.T) {
		instrumentstest.TestSupply(t, func(t testing.TB) (instruments.Supply, instruments.Clock) {
			o := opened(t, Default, 1)
			return o.Slots[1].Supply, o.Clock
		})
	})
	for bench, volts := range map[string]float64{"virtual-bench": 5, "virtual-vibratory": 5, "virtual-spinning": 28} {
		t.Run("gyro of "+bench, func(t *testing.T) {
			instrumentstest.TestGyro(t, func(t testing.TB) (instruments.Gyro, instruments.Clock) {
				o := opened(t, bench, 1)
				power(t, o, 2, volts, time.Minute)
				return o.Slots[2].Gyro, o.Clock
			})
		})
	}
}

// TestFailedOpeningClosesWhatIsOpen: of five TCP links the first is taken, the second refused.
func TestFailedOpeningClosesWhatIsOpen(t *testing.T) {
	listener, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer listener.Close()
	closed, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	closed.Close()
	text := base(t)
	text = text[:strings.Index(text, "virtual:\n  ambient")]
	text = strings.Replace(text, "virtual:table", "tcp:"+listener.Addr().String(), 1)
	text = strings.Replace(text, "virtual:chamber", "tcp:"+closed.Addr().String(), 1)
	for _, endpoint := range []string{"supply", "gyro-1", "gyro-2"} {
		text = strings.Replace(text, "virtual:"+endpoint, "serial:/dev/no-such-port-"+endpoint, 1)
	}
	loaded, _, wrong := Load("hardware.yaml", []byte(text), os.ReadFile)
	if err := wrong.Err(); err != nil {
		t.Fatal(err)
	}
	if loaded.Description.Virtual {
		t.Error("a bench on ports is described as virtual")
	}
	o, err := Open(t.Context(), loaded, 1)
	failure, ok := errors.AsType[*instruments.Error](err)
	if o != nil || !ok || failure.Where.Instrument != "C1" || failure.Kind != instruments.Gone {
		t.Errorf("open: %v", err)
	}
	connection, err := listener.Accept()
	if err != nil {
		t.Fatal(err)
	}
	if _, err := io.ReadAll(connection); err != nil {
		t.Errorf("the first link was not closed: %v", err)
	}
}

func TestPaceMakesAVirtualBenchOnPorts(t *testing.T) {
	text := base(t)
	text = strings.ReplaceAll(text[:strings.Index(text, "virtual:\n  ambient")], "link: virtual:", "link: serial:/dev/pts/")
	loaded, _, wrong := Load("ports.yaml", []byte(strings.Replace(text, "station:", "pace: 60\nstation:", 1)), os.ReadFile)
	if err := wrong.Err(); err != nil {
		t.Fatal(err)
	}
	if !loaded.Description.Virtual || loaded.Description.Pace != 60 {
		t.Errorf("virtual %v, pace %v", loaded.Description.Virtual, loaded.Description.Pace)
	}
}
