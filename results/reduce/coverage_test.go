package reduce

import (
	"context"
	"math"
	"testing"

	"proofrate/limits/quantity"
	"proofrate/results/recording"
)

func reduced(t *testing.T, name string, in Input) quantity.Measured {
	t.Helper()
	m, ok := Find(name)
	if !ok {
		t.Fatalf("no method %s", name)
	}
	return m.Reduce(context.Background(), in)
}

// TestCoverageAtRest: what one recording at rest gives, ten minutes long and in the last case an hour.
func TestCoverageAtRest(t *testing.T) {
	long := kinds[0]
	long.name, long.resting, long.tau0 = "optical, an hour", 3600, 0.1
	walking := kinds[0]
	walking.name, walking.k, walking.resting, walking.tau0 = "optical, walking", 0.3*walkPerHour, 1200, 0.05
	for _, k := range []kind{kinds[2], kinds[3], long, walking} {
		t.Run(k.name, func(t *testing.T) {
			t.Parallel()
			figures := map[string]*coverage{}
			for _, name := range []string{"bias", "bias-instability", "angle-random-walk", "rate-random-walk", "allan-deviation", "quantisation-noise"} {
				figures[name] = &coverage{name: name}
			}
			for seed := range gyros() {
				w := newWorld(k, seed+1)
				w.powerOn()
				r, is := w.record("rest", k.resting, 0, 0)
				in := Input{Bench: w.bench(), Gyro: w.gyro(), Recordings: []*recording.Recording{r}, Seed: seed + 1, Options: Options{Measurand: "population", Tau: 10},
					ScaleFactor: &quantity.Measured{Value: w.scaleError}}
				figures["bias"].add(reduced(t, "bias", in), is.bias)
				figures["angle-random-walk"].add(reduced(t, "angle-random-walk", in), math.Sqrt(k.white2()))
				figures["rate-random-walk"].add(reduced(t, "rate-random-walk", in), k.k)
				figures["allan-deviation"].add(reduced(t, "allan-deviation", in), math.Sqrt(k.allan(10)))
				lowest := math.Inf(1)
				for _, tau := range StabilityTaus(r.Len(), k.tau0) {
					lowest = math.Min(lowest, k.allan(tau))
				}
				figures["bias-instability"].add(reduced(t, "bias-instability", in), math.Sqrt(lowest)/0.66428247026796)
				if k.angle {
					figures["quantisation-noise"].add(reduced(t, "quantisation-noise", in), k.count/math.Sqrt(12))
				}
			}
			for name, c := range figures {
				scale := perHour
				switch name {
				case "angle-random-walk":
					scale = perRootHour
				case "rate-random-walk":
					scale = walkPerHour
				case "quantisation-noise":
					scale = degree / 3600
					if !k.angle {
						continue
					}
				}
				c.check(t, scale)
			}
		})
	}
}

// TestCoverageOfSweeps: a full traverse of each kind, five minutes of rest before it.
func TestCoverageOfSweeps(t *testing.T) {
	fractions := []float64{0, 0.2, 0.5, 1, 0.5, 0.2, 0, -0.2, -0.5, -1, -0.5, -0.2, 0, 0.2, 0.5, 1}
	perSecond := quantity.MustUnit("rad/s")
	for _, k := range kinds[:3] {
		t.Run(k.name, func(t *testing.T) {
			t.Parallel()
			names := []string{"scale-factor", "scale-factor-error", "scale-factor-nonlinearity", "scale-factor-asymmetry", "scale-factor-hysteresis"}
			figures := make([]coverage, len(names))
			ofReading := coverage{name: "nonlinearity of reading"}
			for seed := range gyros() {
				w := newWorld(k, 1000+seed+1)
				w.powerOn()
				rest, _ := w.record("rest", k.resting/2, 0, 0)
				in := Input{Bench: w.bench(), Gyro: w.gyro(), Noise: []*recording.Recording{rest}, Seed: seed + 1}
				var is Sweep
				up := 1.0
				for i, f := range fractions {
					if i > 0 && f != fractions[i-1] {
						up = math.Copysign(1, f-fractions[i-1])
					}
					w.wait(3)
					rate := f * k.fullScale
					r, truth := w.record("sweep", k.dwelling, rate, up, recording.Label{Name: "rate", Value: quantity.Of(rate, perSecond)})
					in.Recordings = append(in.Recordings, r)
					is = append(is, SweepPoint{rate, truth.input, truth.response})
				}
				for i, want := range []float64{is.Line().Slope, is.Error(), is.Nonlinearity(k.fullScale, false, 0), is.Asymmetry(), is.Hysteresis(k.fullScale)} {
					figures[i].name = names[i]
					figures[i].add(reduced(t, names[i], in), want)
				}
				in.Options = Options{Relative: "reading", Least: 0.4 * k.fullScale}
				ofReading.add(reduced(t, "scale-factor-nonlinearity", in), is.Nonlinearity(k.fullScale, true, 0.4*k.fullScale))
			}
			for _, c := range append(figures, ofReading) {
				c.check(t, 1e-6)
			}
		})
	}
}

// TestCoverageOfTurnOns: six turn-ons, of gyros that scatter much, as much as their noise, and less.
func TestCoverageOfTurnOns(t *testing.T) {
	noisy, quiet := kinds[0], kinds[0]
	noisy.name, noisy.turnOn = "as much as noise", 0.016*perHour
	quiet.name, quiet.turnOn = "all but none", 0.0005*perHour
	for _, k := range []kind{kinds[0], kinds[1], kinds[3], noisy, quiet} {
		t.Run(k.name, func(t *testing.T) {
			t.Parallel()
			sample, population := coverage{name: "repeatability, sample"}, coverage{name: "repeatability, population"}
			spacing := 90.0
			// Expected sample variance of the windows' slow noise, from its own covariance (see TestSlowWindows).
			var windows []window
			for i := range 6 {
				windows = append(windows, window{float64(i) * (spacing + k.turning), k.turning})
			}
			cov := coefficients{termB: k.b * k.b, termK: k.k * k.k}.windows(windows)
			own, all := 0.0, 0.0
			for i := range cov {
				for j := range cov {
					all += cov[i][j]
				}
				own += cov[i][i]
			}
			spread := math.Sqrt(k.turnOn*k.turnOn + (own-all/6)/5)
			for seed := range gyros() {
				w := newWorld(k, 2000+seed+1)
				in := Input{Bench: w.bench(), Gyro: w.gyro(), Seed: seed + 1}
				var biases []float64
				for range 6 {
					w.wait(spacing)
					w.powerOn()
					r, is := w.record("start", k.turning, 0, 0)
					in.Recordings = append(in.Recordings, r)
					biases = append(biases, is.bias)
				}
				_, scatter := meanAndScatter(biases)
				in.Options.Measurand = "sample"
				sample.add(reduced(t, "repeatability", in), scatter)
				in.Options.Measurand = "population"
				population.add(reduced(t, "repeatability", in), spread)
			}
			sample.check(t, perHour)
			population.check(t, perHour)
		})
	}
}
