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
	long.name, long.resting = "optical, an hour", 3600
	walking := kinds[0]
	walking.name, walking.k, walking.resting = "optical, walking", 0.3*walkPerHour, 1200
	for _, k := range []kind{kinds[0], kinds[2], kinds[3], long, walking} {
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
				for _, tau := range StabilityTaus(r.Len(), tau0) {
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
