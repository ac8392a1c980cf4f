package virtual

import (
	"fmt"
	"math"
	"sort"
	"time"

	"proofrate/instruments"
)

// Truth is what the world alone knows of one gyro and the bench around it. It is for rehearsal and tests: to hold
// figures against what they ought to be. Units are SI; rates are about the gyro's input axis, before its polarity.
type Truth struct {
	Gyro  Parameters
	Angle bool    // counts are increments of angle
	Count float64 // rad/s or rad

	// The table's true rate is (1 + TableShare) times what it says, plus TableOffset in rad/s.
	TableShare, TableOffset float64
	Axial                   float64 // of the table's true rate, along the input axis
	Earth                   float64 // rate of the Earth along the input axis, mean over a turn, rad/s

	world *World
	slow  []markov
	trace *trace
}

// KeepTrace makes the world keep what Truth.Window needs, some bytes a frame. It is for rehearsal and tests, before any
// gyro is switched on.
func (w *World) KeepTrace() {
	for _, g := range w.gyros {
		if g.on {
			panic(fmt.Sprintf("virtual: a trace of slot %s is asked for while its gyro is on", g.slot))
		}
		g.trace = &trace{}
	}
}

// Truth of the gyro in a slot; nil where there is none.
func (w *World) Truth(slot instruments.SlotID) *Truth {
	for _, g := range w.gyros {
		if g.slot != slot {
			continue
		}
		t := &Truth{Gyro: g.p, Angle: g.angle, Count: g.count, Axial: g.mount.axial, Earth: g.mount.earth.constant,
			world: w, slow: g.slow.stages, trace: g.trace}
		if w.table != nil {
			t.TableShare, t.TableOffset = w.table.hidden.share, w.table.hidden.offset
		}
		return t
	}
	return nil
}

// Window is what a stretch of samples was without white noise, rounding, dead band and saturation: means in rad/s.
type Window struct {
	From, To      time.Time
	Input         float64 // true rate about the input axis, the Earth's included
	Deterministic float64 // noise-free output: S (w + nl(w)) and the biases
	Bias          float64 // of that, what does not come from the input
	Kept          float64 // of Bias, what is left of earlier inputs: hysteresis
	Slow          float64 // flicker and random walk, beside Deterministic
}

// Output is the mean of everything but white noise and quantisation.
func (w Window) Output() float64 { return w.Deterministic + w.Slow }

// Response is what comes from the input, now and before: the scale factor's part of the output.
func (w Window) Response() float64 { return w.Deterministic - w.Bias + w.Kept }

// TrueBias is the output at no input.
func (w Window) TrueBias() float64 { return w.Bias + w.Slow }

// NoTraceError says that a window cannot be told.
type NoTraceError struct{ Reason string }

func (e *NoTraceError) Error() string { return "no truth of these samples: " + e.Reason }

// Window gives the truth of n samples, of which the first has the counter first since power-on and its interval began
// at start, to within half the shortest time between two power-ons.
func (t *Truth) Window(start time.Time, first uint64, n int) (Window, error) {
	if t.trace == nil {
		return Window{}, &NoTraceError{"World.KeepTrace was not called"}
	}
	t.world.catchUp()
	on := int64(start.Sub(began)) - int64(first)*framePeriodNs
	var s *session
	for _, one := range t.trace.sessions {
		if s == nil || distance(one.start, on) < distance(s.start, on) {
			s = one
		}
	}
	if s == nil {
		return Window{}, &NoTraceError{"the gyro was never on"}
	}
	if n < 1 || first+uint64(n) > uint64(len(s.slowSum)) {
		return Window{}, &NoTraceError{fmt.Sprintf("samples %d to %d of a power-on that sent %d", first, first+uint64(n), len(s.slowSum))}
	}
	from := int(first)
	begin := s.start + int64(first)*framePeriodNs
	return Window{From: moment(begin), To: moment(begin + int64(n)*framePeriodNs), Input: s.inputs.mean(from, n),
		Deterministic: s.outputs.mean(from, n), Bias: s.bias.mean(from, n), Kept: s.kept.mean(from, n), Slow: meanOfSums(s.slowSum, from, n)}, nil
}

func distance(a, b int64) int64 { return max(a-b, b-a) }

// sum is of the first n values.
func (r *runs) sum(n int) float64 {
	i := sort.Search(len(r.parts), func(i int) bool { return r.parts[i].first >= n }) - 1
	if i < 0 {
		return 0
	}
	return r.parts[i].before + float64(n-r.parts[i].first)*r.parts[i].value
}

// mean is of n values from the given one on.
func (r *runs) mean(from, n int) float64 { return (r.sum(from+n) - r.sum(from)) / float64(n) }

func meanOfSums(sums []float64, from, n int) float64 {
	total := sums[from+n-1]
	if from > 0 {
		total -= sums[from-1]
	}
	return total / float64(n)
}

// flickerFloor is the Allan deviation of flicker noise over its coefficient: sqrt(2 ln 2 / pi), 0.664.
var flickerFloor = math.Sqrt(2 * math.Ln2 / math.Pi)

// N is the angle random walk that the samples show, rad/sqrt(s): that of the gyro and, where rates are rounded, of the
// rounding.
//
//	N_eff^2 = N^2 + count^2 tau0 / 12
func (t *Truth) N() float64 {
	if t.Angle {
		return t.Gyro.N
	}
	return math.Sqrt(t.Gyro.N*t.Gyro.N + t.Count*t.Count*framePeriod/12)
}

// Q is the quantisation noise, rad: count/sqrt(12) for increments of angle, none for rates.
func (t *Truth) Q() float64 {
	if t.Angle {
		return t.Count / math.Sqrt(12)
	}
	return 0
}

// Deviation is the theoretical Allan deviation at an averaging time, rad/s, the flicker noise being the sum of Markov
// processes of which it is made.
//
//	sigma^2(tau) = 3 Q^2/tau^2 + N^2/tau + flicker + K^2 tau/3 + R^2 tau^2/2
//
// Source: IEEE Std 952 annex C.
func (t *Truth) Deviation(tauS float64) float64 {
	q, n, k, r := t.Q(), t.N(), t.Gyro.K, t.Gyro.Ramp
	v := 3*q*q/(tauS*tauS) + n*n/tauS + k*k*tauS/3 + r*r*tauS*tauS/2
	for _, m := range t.slow {
		v += m.allanVariance(tauS)
	}
	return math.Sqrt(v)
}

// allanVariance of a first-order Markov process of variance v and correlation time T at x = tau/T:
//
//	(2 v / x) (1 - (3 - 4 e^-x + e^-2x) / (2 x))
//
// Source: IEEE Std 952 annex C.
func (m *markov) allanVariance(tauS float64) float64 {
	x := tauS / m.time
	if x < 1e-3 { // the form above cancels; its series is v (2x/3 - x^2/2 + 7x^3/30)
		return m.variance * x * (2.0/3 - x*(0.5-x*(7.0/30)))
	}
	return 2 * m.variance / x * (1 + (4*math.Expm1(-x)-math.Expm1(-2*x))/(2*x))
}

// BiasInstability is the lowest theoretical Allan deviation over a grid of averaging times, over 0.664, rad/s; atEnd
// says that it lies at the last one, so that the floor was not reached.
func (t *Truth) BiasInstability(tausS []float64) (value float64, atEnd bool) {
	lowest := math.Inf(1)
	for i, tau := range tausS {
		if d := t.Deviation(tau); d < lowest {
			lowest, atEnd = d, i == len(tausS)-1
		}
	}
	return lowest / flickerFloor, atEnd
}

// RepeatabilitySample is the standard deviation of the true biases of the given windows, rad/s.
func RepeatabilitySample(windows []Window) float64 {
	mean, square := 0.0, 0.0
	for _, w := range windows {
		mean += w.TrueBias() / float64(len(windows))
	}
	for _, w := range windows {
		square += (w.TrueBias() - mean) * (w.TrueBias() - mean)
	}
	return math.Sqrt(square / float64(len(windows)-1))
}

// RepeatabilityPopulation is what such windows scatter by in the mean, rad/s: the scatter of turn-ons and that of slow
// noise's averages at their spacing.
//
//	sigma_on^2 + E[s^2 of the averages]
func (t *Truth) RepeatabilityPopulation(windows []Window) float64 {
	return math.Hypot(t.Gyro.TurnOn, t.SlowScatter(windows))
}

// SlowScatter is the root of the expected sample variance of slow noise's averages over the windows, rad/s.
func (t *Truth) SlowScatter(windows []Window) float64 {
	own, all := 0.0, 0.0
	for i, a := range windows {
		for j, b := range windows {
			c := t.slowCovariance(seconds(a.From), seconds(a.To), seconds(b.From), seconds(b.To))
			all += c
			if i == j {
				own += c
			}
		}
	}
	n := float64(len(windows))
	return math.Sqrt(math.Max(0, (own-all/n)/(n-1)))
}

func seconds(t time.Time) float64 { return t.Sub(began).Seconds() }

// slowCovariance is the covariance of slow noise's averages from a to b and from c to d, (rad/s)^2. A covariance that
// depends on distance alone, C(x), gives with G” = C
//
//	(G(b-c) - G(b-d) - G(a-c) + G(a-d)) / ((b-a) (d-c))
func (t *Truth) slowCovariance(a, b, c, d float64) float64 {
	area := (b - a) * (d - c)
	double := func(g func(x float64) float64) float64 { return (g(b-c) - g(b-d) - g(a-c) + g(a-d)) / area }
	total := 0.0
	for _, m := range t.slow {
		total += m.variance * m.time * m.time * double(func(x float64) float64 {
			x = math.Abs(x) / m.time
			return x + math.Expm1(-x)
		})
	}
	// A random walk from 0 on has the covariance min(s, u) = (s + u - |s - u|) / 2.
	apart := double(func(x float64) float64 { return math.Abs(x*x*x) / 6 })
	return total + t.Gyro.K*t.Gyro.K*((a+b+c+d)/2-apart)/2
}
