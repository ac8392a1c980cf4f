package virtual

import (
	"math"
	"testing"
	"time"

	"proofrate/instruments"
)

// TestWindowIsWhatTheFramesSay: over any window the mean of the counts is the truth's output, but for white noise and
// rounding, which are next to nothing here.
func TestWindowIsWhatTheFramesSay(t *testing.T) {
	for population, volts := range map[string]string{"optical": "5", "optical-angle": "5", "vibratory": "5", "spinning-mass": "28"} {
		t.Run(population, func(t *testing.T) {
			d := describe(t, 1)
			d.Table.Creep, d.Table.AxisUncertainty, d.Slots[0].AttitudeUncertainty = q(t, "1e-4 deg/s"), q(t, "1 mrad"), q(t, "2 mrad")
			set := []string{"angle-random-walk", "1e-9 deg/sqrt(h)"}
			if population == "optical" || population == "optical-angle" {
				set = append(set, "dead-band", "0 deg/h")
			}
			b := newBench(t, 1, d, fixed(t, population, set...), volts)
			on := b.Now()
			var all []frame
			for _, step := range []struct {
				line string
				wait time.Duration
			}{{"STOP", 40 * time.Second}, {"RATE 40 ACC 100", 30 * time.Second}, {"RATE -40 ACC 100", 30 * time.Second}, {"SWAY 0.5 1", 20 * time.Second}, {"STOP", 30 * time.Second}} {
				say(t, b.table, step.line)
				all = append(all, b.frames(step.wait)...)
			}
			truth := b.Truth("A")
			per := truth.Count
			if truth.Angle {
				per /= framePeriod
			}
			for _, w := range [][2]int{{0, 10}, {3000, 900}, {3990, 200}, {5000, 1800}, {7001, 333}, {10100, 1800}, {12500, 2400}, {0, 14900}} {
				first, n := w[0], w[1]
				window, err := truth.Window(on.Add(time.Duration(first)*10*time.Millisecond+3*time.Millisecond), uint64(first), n)
				if err != nil {
					t.Fatal(err)
				}
				got, _ := mean(all[first : first+n])
				// Rounding of rates: up to half a count where the input stands, at random elsewhere.
				if math.Abs(got-window.Output()/per) > 0.51 {
					t.Errorf("frames %d to %d: %v counts, truth %v", first, first+n, got, window.Output()/per)
				}
				if math.Abs(window.TrueBias()-window.Slow-window.Bias) > 1e-18 || window.From.Sub(on) != time.Duration(first)*10*time.Millisecond ||
					window.To.Sub(window.From) != time.Duration(n)*10*time.Millisecond {
					t.Errorf("window %+v", window)
				}
			}
			if _, err := truth.Window(on, 14900, 200); err == nil {
				t.Error("a truth of samples that were never made")
			}
		})
	}
}

// TestWindowFindsItsPowerOn: equal counters of several power-ons are told apart by their time.
func TestWindowFindsItsPowerOn(t *testing.T) {
	b := newBench(t, 1, describe(t, 1), quiet(t, "optical", "turn-on", "50 deg/h"), "5")
	for cycle := range 3 {
		on := b.Now()
		got, _ := mean(b.frames(10 * time.Second)[100:200])
		window, err := b.Truth("A").Window(on.Add(time.Second), 100, 100)
		if err != nil {
			t.Fatal(err)
		}
		if want := window.Output() / b.Truth("A").Count; math.Abs(got-want) > 0.6 {
			t.Errorf("power-on %d: %v counts, truth %v", cycle, got, want)
		}
		say(t, b.supply, "OUTP OFF,(@1)")
		b.frames(5 * time.Second)
		say(t, b.supply, "OUTP ON,(@1)")
	}
}

func TestNoTruthWithoutTrace(t *testing.T) {
	w := world(t, Config{Seed: 1, Description: describe(t, 1), Gyros: map[instruments.SlotID]Setup{"A": fixed(t, "optical")}})
	if _, err := w.Truth("A").Window(began, 0, 1); err == nil {
		t.Error("no error")
	}
	w = world(t, Config{Seed: 1, Description: describe(t, 1), Gyros: map[instruments.SlotID]Setup{"A": fixed(t, "optical")}})
	w.KeepTrace()
	if _, err := w.Truth("A").Window(began, 0, 1); err == nil {
		t.Error("no error from a gyro that was never on")
	}
}

// span is a window of slow noise alone.
func span(from, to float64) Window {
	return Window{From: moment(int64(from * 1e9)), To: moment(int64(to * 1e9))}
}

// TestScatterOfTurnOns: six windows of two minutes, 23 minutes apart, scatter by 1.22 B through flicker noise.
func TestScatterOfTurnOns(t *testing.T) {
	truth := &Truth{Gyro: Parameters{TurnOn: 3}, slow: newSlowNoise(2, 0, &impulse{at: -1}).stages}
	var windows []Window
	for i := range 6 {
		from := 3600 + 23*60*float64(i)
		windows = append(windows, span(from, from+120))
	}
	got := truth.SlowScatter(windows) / 2
	if math.Abs(got-1.22) > 0.01 {
		t.Errorf("%v B, want 1.22", got)
	}
	if all := truth.RepeatabilityPopulation(windows); math.Abs(all-math.Hypot(3, 2*got)) > 1e-12 {
		t.Errorf("with turn-ons %v", all)
	}
}

// TestCovarianceOfSlowNoise compares the closed form with the construction: the scatter that the deviates make is
// summed one by one.
func TestCovarianceOfSlowNoise(t *testing.T) {
	windows := []Window{span(0, 7), span(10, 12), span(12, 20), span(35, 60)}
	truth := &Truth{Gyro: Parameters{K: 0.3}, slow: newSlowNoise(1, 0.3, &impulse{at: -1}).stages}
	deviates := &impulse{at: -1}
	n := newSlowNoise(1, 0.3, deviates)
	for range 60 {
		n.advance()
	}
	variance := 0.0
	for at := range deviates.asked {
		g := &impulse{at: at}
		n := newSlowNoise(1, 0.3, g)
		sums := make([]float64, len(windows))
		for s := range 60 {
			n.advance()
			for i, w := range windows {
				if from, to := seconds(w.From), seconds(w.To); float64(s) >= from && float64(s) < to {
					for k := 1; k <= slowTicks; k++ {
						sums[i] += n.at(float64(k)/slowTicks) / slowTicks / (to - from)
					}
				}
			}
		}
		mean := (sums[0] + sums[1] + sums[2] + sums[3]) / 4
		for _, x := range sums {
			variance += (x - mean) * (x - mean) / 3
		}
	}
	if got, want := truth.SlowScatter(windows), math.Sqrt(variance); math.Abs(got/want-1) > 0.005 {
		t.Errorf("scatter %v, by construction %v", got, want)
	}
}

// TestBiasInstabilityTruth: with little white noise the minimum over 0.664 is B; with much of it, the grid ends first.
func TestBiasInstabilityTruth(t *testing.T) {
	var grid []float64
	for tau := 0.01; tau <= 720; tau *= 1.3 {
		grid = append(grid, tau)
	}
	b := 0.02 * degPerHour
	truth := &Truth{Angle: true, Gyro: Parameters{B: b}, slow: newSlowNoise(b, 0, &impulse{at: -1}).stages}
	if got, atEnd := truth.BiasInstability(grid[20:]); math.Abs(got/b-1) > 0.03 || atEnd {
		t.Errorf("%v B, at the end %v", got/b, atEnd)
	}
	truth.Gyro.N = 0.2 * math.Pi / 180 / 60 // deg/sqrt(h)
	got, atEnd := truth.BiasInstability(grid)
	want := truth.Deviation(grid[len(grid)-1]) / 0.66428247026796
	if !atEnd || math.Abs(got/want-1) > 1e-9 {
		t.Errorf("%v, want the last value %v; at the end %v", got, want, atEnd)
	}
}

// TestRepeatabilitySample is by hand.
func TestRepeatabilitySample(t *testing.T) {
	windows := []Window{{Bias: 1, Slow: 1}, {Bias: 4}, {Bias: 3, Slow: 3}}
	if got := RepeatabilitySample(windows); math.Abs(got-2) > 1e-15 { // of 2, 4, 6
		t.Errorf("%v, want 2", got)
	}
}

// respond is the noise-free response of a set of parameters to a rate.
func respond(p *Parameters, scale, bias, w float64) Window {
	n := newPolynomial(p)
	return Window{Input: w, Deterministic: scale*n.output(w) + bias}
}

// TestScaleFactorDefinitions applies the family of figures to responses whose figures are known.
func TestScaleFactorDefinitions(t *testing.T) {
	const full = 4.0
	sweep := func(p Parameters, scale float64) (points []ScalePoint) {
		p.Range = full
		for _, x := range []float64{-1, -0.5, -0.2, 0, 0.2, 0.5, 1} {
			points = append(points, ScalePoint{Nominal: x * full, Window: respond(&p, scale, 1e-5, x*full)})
		}
		return points
	}
	f := ScaleFactorOf(sweep(Parameters{Nonlinearity: 180e-6}, 1.0004), full)
	if math.Abs(f.Nonlinearity-180e-6) > 1e-7 || !math.IsNaN(f.Hysteresis) || math.Abs(f.Intercept-1e-5) > 1e-12 {
		t.Errorf("cubic of 180 ppm: %+v", f)
	}
	// The line follows the cubic by its slope of 0.8249: c = 180 ppm / 0.28744.
	if want := 1.0004*(1+180e-6/0.287441860465*1.0641/1.29) - 1; math.Abs(f.Error-want) > 1e-10 {
		t.Errorf("scale factor error %v, want %v", f.Error, want)
	}
	if f := ScaleFactorOf(sweep(Parameters{FifthOrder: 90e-6}, 1), full); math.Abs(f.Nonlinearity-90e-6) > 1e-7 {
		t.Errorf("fifth order of 90 ppm: %+v", f)
	}
	f = ScaleFactorOf(sweep(Parameters{Asymmetry: 120e-6}, 1), full)
	if math.Abs(f.Asymmetry-120e-6) > 1e-9 || math.Abs(f.Error) > 1e-12 {
		t.Errorf("asymmetry of 120 ppm: %+v", f)
	}
	// At 0.2 of the range the cubic is 0.2 * 0.82488 - 0.008 below the line.
	cubic := 180e-6 / 0.287441860465
	want := cubic * (0.2*1.0641/1.29 - 0.008) / 0.2 / (1 + cubic*1.0641/1.29)
	if got := NonlinearityOfReading(sweep(Parameters{Nonlinearity: 180e-6}, 1), 0.1*full); math.Abs(got-want) > 1e-10 {
		t.Errorf("of reading %v, want %v", got, want)
	}

	m := wheel(80e-6)
	var points []ScalePoint
	last := 0.0
	for i, w := range []float64{0, 0.5, 1, 0.5, 0, -0.5, -1, -0.5, 0, 0.5, 1} {
		kept := m.hysteresis(w)
		if i >= 2 { // the first leg conditions
			points = append(points, ScalePoint{Nominal: w, Up: w > last, Window: Window{Input: w, Deterministic: w + kept}})
		}
		last = w
	}
	// The turning point at full rate was approached from below both times.
	if f := ScaleFactorOf(points, 1); math.Abs(f.Hysteresis-80e-6) > 5e-6 {
		t.Errorf("hysteresis %v, want 80 ppm", f.Hysteresis)
	}
}

// TestFullPathHasItsAllanDeviation: bytes of an hour, against the theoretical curve with all its terms, within five
// standard errors of the non-overlapped estimate.
func TestFullPathHasItsAllanDeviation(t *testing.T) {
	for seed := range uint64(3) {
		b := newBench(t, seed+1, describe(t, 1), quiet(t, "vibratory", "angle-random-walk", "0.02 deg/sqrt(h)", "bias-instability", "3 deg/h",
			"rate-random-walk", "20 deg/h/sqrt(h)"), "5")
		b.frames(60 * time.Second)
		frames := b.frames(2 * time.Hour)
		truth := b.Truth("A")
		for _, m := range []int{1, 10, 100, 1000, 10000} {
			n := len(frames) / m
			v, before := 0.0, 0.0
			for i := range n {
				x, _ := mean(frames[i*m : (i+1)*m])
				if i > 0 {
					v += (x - before) * (x - before) / 2 / float64(n-1)
				}
				before = x
			}
			got, want := math.Sqrt(v)*truth.Count, truth.Deviation(float64(m)*framePeriod)
			if math.Abs(got/want-1) > 5/math.Sqrt(float64(n)) {
				t.Errorf("seed %d, tau %v s: %v deg/h, want %v", seed+1, float64(m)*framePeriod, got/degPerHour, want/degPerHour)
			}
		}
	}
}
