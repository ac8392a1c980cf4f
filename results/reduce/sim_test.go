package reduce

import (
	"math"
	"math/rand/v2"
	"os"
	"testing"

	"proofrate/limits/quantity"
	"proofrate/results/recording"
)

// world is an independent little simulator of one gyro on a table: white noise, flicker as a sum of Markov processes
// (one a decade, each of variance B^2 ln(10)/pi), random walk, turn-on scatter, a cubic and an even nonlinearity,
// hysteresis of two branches. Time only moves forward; slow noise goes on between recordings.
type world struct {
	kind
	random *rand.Rand
	nowS   float64
	stages []stage
	walk   float64

	bias, onBias, scaleError float64
	earth                    float64 // true, on the input axis
	share                    float64 // of the table's true rate beyond its reading
	carried                  float64 // of the angle output, counts
}

// kind is what the gyros of a family have in common, in SI.
type kind struct {
	name                       string
	n, b, k                    float64 // rad/sqrt(s), rad/s, rad/s/sqrt(s)
	count                      float64 // rad/s, or rad for the angle output
	angle                      bool
	fullScale, turnOn          float64
	cubic, even, hysteresis    float64 // of full scale
	scaleSpread, biasSpread    float64
	shareU, axisU, attitudeU   float64
	tau0                       float64 // s, the sample interval
	resting, dwelling, turning float64 // s: a rest, a point of a sweep, a turn-on
}

const (
	perHour     = degree / 3600      // rad/s in 1 deg/h
	perRootHour = degree / 60        // rad/sqrt(s) in 1 deg/sqrt(h)
	walkPerHour = degree / 3600 / 60 // rad/s/sqrt(s) in 1 deg/h/sqrt(h)
)

// kinds: gyros of navigation, industrial and tactical grade, and one that sends angles.
var kinds = []kind{
	{name: "optical", n: 0.002 * perRootHour, b: 0.02 * perHour, k: 0.002 * walkPerHour, count: 0.05 * perHour, fullScale: 250 * degree, turnOn: 0.03 * perHour,
		cubic: 40e-6, scaleSpread: 80e-6, biasSpread: 0.35 * perHour, shareU: 11e-6, axisU: 0.2e-3, attitudeU: 0.5e-3, tau0: 0.01, resting: 600, dwelling: 10, turning: 60},
	{name: "vibratory", n: 0.2 * perRootHour, b: 3 * perHour, k: 0.5 * walkPerHour, count: 0.001 * degree, fullScale: 400 * degree, turnOn: 6 * perHour,
		cubic: 150e-6, even: 20e-6, scaleSpread: 500e-6, biasSpread: 40 * perHour, shareU: 11e-6, axisU: 0.2e-3, attitudeU: 0.5e-3, tau0: 0.01, resting: 600, dwelling: 10, turning: 60},
	{name: "spinning-mass", n: 0.02 * perRootHour, b: 0.3 * perHour, k: 0.05 * walkPerHour, count: 0.0005 * degree, fullScale: 60 * degree, turnOn: 1.2 * perHour,
		even: 15e-6, hysteresis: 40e-6, scaleSpread: 220e-6, biasSpread: 8 * perHour, shareU: 11e-6, axisU: 0.2e-3, attitudeU: 0.5e-3, tau0: 0.01, resting: 600, dwelling: 10, turning: 60},
	{name: "angle", n: 0.002 * perRootHour, b: 0.02 * perHour, k: 0.002 * walkPerHour, count: 0.02 / 3600 * degree, angle: true, fullScale: 250 * degree, turnOn: 0.03 * perHour,
		cubic: 40e-6, scaleSpread: 80e-6, biasSpread: 0.35 * perHour, shareU: 11e-6, axisU: 0.2e-3, attitudeU: 0.5e-3, tau0: 0.01, resting: 600, dwelling: 10, turning: 60},
}

// stage is one Markov process, stepped exactly every so many samples and straight between.
type stage struct {
	timeS, sigma float64
	every        int
	x, to        float64
}

var simTimesS = []float64{0.03, 0.3, 3, 30, 300, 3e3, 3e4, 3e5}

func newWorld(k kind, seed uint64) *world {
	w := &world{kind: k, random: rand.New(rand.NewPCG(seed, 77))}
	sigma := k.b * math.Sqrt(math.Ln10/math.Pi)
	for _, t := range simTimesS {
		s := stage{timeS: t, sigma: sigma, every: max(1, int(t/50/k.tau0))}
		s.x = sigma * w.random.NormFloat64()
		w.stages = append(w.stages, s)
	}
	w.bias = k.biasSpread * w.random.NormFloat64()
	w.scaleError = k.scaleSpread * w.random.NormFloat64()
	w.share = k.shareU * w.random.NormFloat64()
	along, across := w.bench().earth()
	w.earth = along + across*math.Hypot(k.axisU, k.attitudeU)*w.random.NormFloat64()
	return w
}

func (w *world) bench() Bench {
	return Bench{Latitude: 0.83, AxisUp: 1, AxisU: w.axisU, AttitudeU: w.attitudeU, Sense: 1, Radius: 0.06, Creep: 1e-5 * degree,
		TableRate: Calibration{U: w.shareU}, Instrument: "T1"}
}

func (w *world) gyro() Gyro {
	output := "rate"
	if w.angle {
		output = "angle"
	}
	return Gyro{Output: output, Range: w.fullScale, Polarity: 1}
}

// wait lets the slow noise go on unseen.
func (w *world) wait(seconds float64) {
	for i := range w.stages {
		w.stages[i].step(seconds, w.random)
	}
	w.walk += w.k * math.Sqrt(seconds) * w.random.NormFloat64()
	w.nowS += seconds
}

func (s *stage) step(seconds float64, r *rand.Rand) {
	a := math.Exp(-seconds / s.timeS)
	s.x = a*s.x + s.sigma*math.Sqrt(-math.Expm1(-2*seconds/s.timeS))*r.NormFloat64()
}

func (w *world) powerOn() { w.onBias = w.turnOn * w.random.NormFloat64() }

// window is the truth of a recording: the mean over it of everything but white noise and quantisation.
type truth struct{ input, response, bias float64 }

// response is the noise-free output to an input rate, on the branch that was come to from below (up > 0) or above.
func (w *world) response(rate, up float64) float64 {
	x := rate / w.fullScale
	return (1+w.scaleError)*rate + w.fullScale*(w.cubic*cubicShape*x*x*x+w.even*x*x-w.hysteresis/2*up)
}

// cubicShape makes the largest deviation of x^3 from the line through equally weighted 0, 0.2, 0.5, 1 of both signs 1.
var cubicShape = 1 / (0.5*(0.0016+0.0625+1)/(0.04+0.25+1) - 0.125)

// record makes a recording at a table rate (by its own reading).
func (w *world) record(name string, seconds, rate, up float64, labels ...recording.Label) (*recording.Recording, truth) {
	samples := int(math.Round(seconds / w.tau0))
	unit, channel := quantity.MustUnit("rad/s"), "rate"
	if w.angle {
		unit, channel = quantity.MustUnit("rad"), "angle"
	}
	r := &recording.Recording{Section: recording.Section{Name: name, Labels: labels, Start: w.nowS, SampleInterval: w.tau0,
		Channels: []recording.Channel{{Name: channel, Count: quantity.Of(w.count, unit)}}}, Quality: recording.Quality{Complete: true}}
	trueRate := rate * (1 + w.share)
	r.Readings = []recording.Series{{Name: "table.rate", Unit: quantity.MustUnit("deg/s")}, {Name: "table.position", Unit: quantity.MustUnit("deg")}}
	for t := 0.0; t <= seconds; t += 0.5 {
		said := (rate + 2e-5*degree*w.random.NormFloat64()) / degree
		r.Readings[0].At, r.Readings[0].Values = append(r.Readings[0].At, w.nowS+t), append(r.Readings[0].Values, math.Round(said*1e6)/1e6)
		position := rate*t/degree + 1e-5*w.random.NormFloat64()
		r.Readings[1].At, r.Readings[1].Values = append(r.Readings[1].At, w.nowS+t), append(r.Readings[1].Values, math.Round(position*1e5)/1e5)
	}
	fixed := w.response(trueRate+w.earth, up) + w.bias + w.onBias
	counts := make([]int64, samples)
	white := w.n / math.Sqrt(w.tau0)
	sum := 0.0
	for i := range w.stages {
		w.stages[i].to = w.stages[i].x
	}
	level, slope := make([]float64, len(w.stages)), make([]float64, len(w.stages))
	for i := range counts {
		for j := range w.stages {
			s := &w.stages[j]
			if i%s.every == 0 {
				level[j] = s.x
				s.step(float64(s.every)*w.tau0, w.random)
				slope[j] = (s.x - level[j]) / float64(s.every)
			}
		}
		slow := w.walk
		for j := range level {
			slow += level[j]
			level[j] += slope[j]
		}
		w.walk += w.k * math.Sqrt(w.tau0) * w.random.NormFloat64()
		sum += slow
		v := fixed + slow + white*w.random.NormFloat64()
		if w.angle {
			w.carried += v * w.tau0 / w.count
			whole := math.RoundToEven(w.carried)
			w.carried -= whole
			counts[i] = int64(whole)
		} else {
			counts[i] = int64(math.RoundToEven(v / w.count))
		}
	}
	r.Counts = [][]int64{counts}
	w.nowS += seconds
	mean := sum / float64(samples)
	return r, truth{trueRate + w.earth, w.response(trueRate+w.earth, up), w.bias + w.onBias + mean + fixedHysteresis(w, up)}
}

func fixedHysteresis(w *world, up float64) float64 { return -w.fullScale * w.hysteresis / 2 * up }

// allan is the theoretical Allan variance of the simulated noise. Source: IEEE Std 952-1997, annex C.
func (k kind) allan(tau float64) float64 {
	v := k.white2()/tau + k.k*k.k*tau/3
	if k.angle {
		v += 3 * k.count * k.count / 12 / (tau * tau)
	}
	for _, t := range simTimesS {
		x := tau / t
		if x < 1e-3 {
			v += k.b * k.b * math.Ln10 / math.Pi * x * (2.0/3 - x/2)
			continue
		}
		v += k.b * k.b * math.Ln10 / math.Pi * 2 / x * (1 - (3-4*math.Exp(-x)+math.Exp(-2*x))/(2*x))
	}
	return v
}

// white2 is N^2 with the white noise of rounding.
func (k kind) white2() float64 {
	if k.angle {
		return k.n * k.n
	}
	return k.n*k.n + k.count*k.count*k.tau0/12
}

// coverage counts how a figure's claims stand up. The claims are those of the whole project: of 40 stated 95 %
// intervals at least 32 hold the truth, no error is beyond its own 1 - 1e-6 interval, mean u is 0.7 to 1.4 of the
// spread of the errors.
type coverage struct {
	name            string
	errors, us      []float64
	held, beyond    int
	bounds, voids   int
	firstVoidReason string
}

func (c *coverage) add(m quantity.Measured, truth float64) {
	if m.Void != "" {
		c.voids++
		c.firstVoidReason = m.Void
		return
	}
	c.errors, c.us = append(c.errors, m.Value-truth), append(c.us, m.U)
	slack := 1e-12 * math.Abs(truth)
	if truth >= m.Low-slack && truth <= m.High+slack {
		c.held++
	}
	if low, high := m.Interval(1 - 1e-6); truth < low-slack || truth > high+slack {
		c.beyond++
	}
	if m.Family == quantity.Bound {
		c.bounds++
	}
}

func (c *coverage) check(t *testing.T, scale float64) {
	t.Helper()
	n := len(c.errors)
	if c.voids > 0 || n == 0 {
		t.Errorf("%s: void %d times: %s", c.name, c.voids, c.firstVoidReason)
		return
	}
	meanU := 0.0
	for _, u := range c.us {
		meanU += u / float64(n)
	}
	mean, scatter := meanAndScatter(c.errors)
	t.Logf("%-28s held %3d of %3d, beyond %d, bounds %3d, u/sd %.2f, mean error %.3g, sd %.3g, mean u %.3g", c.name, c.held, n, c.beyond, c.bounds, meanU/scatter, mean/scale, scatter/scale, meanU/scale)
	if c.held*40 < 32*n {
		t.Errorf("%s: %d of %d intervals hold the truth", c.name, c.held, n)
	}
	if c.beyond > 0 {
		t.Errorf("%s: %d errors are beyond their own 1 - 1e-6 interval", c.name, c.beyond)
	}
	if ratio := meanU / scatter; c.bounds == 0 && !(ratio >= 0.7 && ratio <= 1.4) {
		t.Errorf("%s: mean u is %.2f of the spread of the errors", c.name, ratio)
	}
}

// gyros is how many virtual gyros a coverage test takes: seeds 1 to 40; ten times as many under PROOFRATE_SOAK=1.
func gyros() uint64 {
	if os.Getenv("PROOFRATE_SOAK") == "1" {
		return 400
	}
	return 40
}
