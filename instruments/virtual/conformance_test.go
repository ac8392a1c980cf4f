package virtual

import (
	"fmt"
	"math"
	"testing"
)

// requirement is what an acceptance asks of one kind of gyro, in the units of the trade.
type requirement struct {
	bias, shift  float64 // deg/h: at every temperature, and between the highest and lowest
	n, b         float64 // deg/sqrt(h), deg/h
	turnOn       float64 // deg/h, standard deviation of six
	scale        float64 // ppm, at every temperature
	nonlinearity float64 // ppm of range
	asymmetry    float64 // ppm
	hysteresis   float64 // ppm of range; 0: none asked for
}

// rates of the sweep, of the range; the first leg conditions.
var sweepOverRange = []float64{0, 0.2, 0.5, 1, 0.5, 0.2, 0, -0.2, -0.5, -1, -0.5, -0.2, 0, 0.2, 0.5, 1}

var requirements = map[string]requirement{
	"optical":       {bias: 2, shift: 1.5, n: 0.005, b: 0.05, turnOn: 0.1, scale: 500, nonlinearity: 100, asymmetry: 100},
	"optical-angle": {bias: 2, shift: 1.5, n: 0.005, b: 0.05, turnOn: 0.1, scale: 500, nonlinearity: 100, asymmetry: 100},
	"vibratory":     {bias: 200, shift: 200, n: 0.3, b: 6, turnOn: 20, scale: 3000, nonlinearity: 300, asymmetry: 400},
	"spinning-mass": {bias: 45, shift: 35, n: 0.03, b: 0.6, turnOn: 4, scale: 2000, nonlinearity: 300, asymmetry: 300, hysteresis: 80},
}

// TestPopulationsConform: of each shipped population about 999 of 1000 gyros meet their acceptance. With 4000 drawn,
// four failures are expected at that rate; more than fourteen would come once in 30,000 times.
func TestPopulationsConform(t *testing.T) {
	for name, r := range requirements {
		t.Run(name, func(t *testing.T) {
			population := load(t, name)
			failures := map[string]int{}
			failed := 0
			for seed := range uint64(4000) {
				p, err := population.draw(seed+1, "A", nil)
				if err != nil {
					t.Fatal(err)
				}
				reasons := r.misses(&p, population.Family, seed+1)
				for _, reason := range reasons {
					failures[reason]++
				}
				failed += btoi(len(reasons) > 0)
			}
			if failed > 14 {
				t.Errorf("%d of 4000 do not conform: %v", failed, failures)
			}
		})
	}
}

// misses lists what a gyro does not meet, from its noise-free response over temperature; of the slow noise a normal
// share of three B stands in each bias.
func (r *requirement) misses(p *Parameters, family Family, seed uint64) (missed []string) {
	check := func(what string, x, limit float64) {
		if limit > 0 && math.Abs(x) > limit {
			missed = append(missed, what)
		}
	}
	noise := stream(seed, "conformance")
	low, high := math.Inf(1), math.Inf(-1)
	for _, temperature := range []float64{23, -40, 71} {
		dT := temperature - referenceTemp
		m := mechanisms[family](p)
		m.power(true, 0)
		scale, bias := m.climate(dT)
		scale *= 1 + p.ScaleFactorError + p.ScaleFactorT*dT
		bias += p.Bias + dT*(p.BiasT+dT*p.BiasT2) + p.AccelerationInput*9.80665 + p.TurnOn*noise.NormFloat64()
		n := newPolynomial(p)
		var points []ScalePoint
		for i, x := range sweepOverRange {
			in, kept := []float64{0}, []float64{0}
			for range 40 { // frames, until a wheel or drive has settled
				in[0], kept[0] = x*p.Range, 0
				m.sense(1000*secondNs, in, kept)
			}
			point := ScalePoint{Nominal: x, Up: i > 0 && x > sweepOverRange[i-1], Window: Window{Input: x * p.Range, Deterministic: scale*n.output(in[0]) + kept[0]}}
			if i >= 3 {
				points = append(points, point)
			}
			if x == 0 {
				measured := (bias + kept[0] + 3*p.B*noise.NormFloat64()) / degPerHour
				check(fmt.Sprintf("bias at %v", temperature), measured, r.bias)
				low, high = math.Min(low, measured), math.Max(high, measured)
			}
		}
		f := ScaleFactorOf(points, p.Range)
		check("scale factor", f.Error*1e6, r.scale)
		check("nonlinearity", f.Nonlinearity*1e6, r.nonlinearity)
		check("asymmetry", f.Asymmetry*1e6, r.asymmetry)
		if r.hysteresis > 0 {
			check("hysteresis", f.Hysteresis*1e6, r.hysteresis)
		}
	}
	check("bias shift", high-low, r.shift)
	check("N", p.N/degPerHour/60, r.n)
	check("B", p.B/degPerHour, r.b)
	s := 0.0 // six turn-ons, flicker's share being 1.22 B
	var starts [6]float64
	mean := 0.0
	for i := range starts {
		starts[i] = math.Hypot(p.TurnOn, 1.22*p.B) / degPerHour * noise.NormFloat64()
		mean += starts[i] / 6
	}
	for _, x := range starts {
		s += (x - mean) * (x - mean) / 5
	}
	check("turn-ons", math.Sqrt(s), r.turnOn)
	return missed
}
