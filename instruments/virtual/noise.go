package virtual

import "math"

// slowTicks is the grid of the slow noise within a bench second.
const slowTicks = 100

// normals is a source of standard normal deviates: *rand.Rand, or a test's.
type normals interface{ NormFloat64() float64 }

// markov is one first-order Markov process, stepped exactly on a fixed grid.
type markov struct {
	variance float64 // of the process, (rad/s)^2
	time     float64 // correlation time, s
	steps    int     // a bench second
	decay    float64 // exp(-dt/time)
	kick     float64 // sqrt(variance (1 - decay^2))
	x        float64
}

func newMarkov(variance, time float64, steps int) markov {
	dt := 1 / float64(steps)
	// Expm1 keeps the kick exact where the decay is almost 1.
	return markov{variance: variance, time: time, steps: steps, decay: math.Exp(-dt / time),
		kick: math.Sqrt(-variance * math.Expm1(-2*dt/time))}
}

func (m *markov) step(g normals) { m.x = m.decay*m.x + m.kick*g.NormFloat64() }

// flickerStages is the synthesis of flicker noise as a sum of first-order Markov processes, one a decade of
// correlation time, each of variance B^2 ln(10)/pi. Averaging times from a second to ten hours matter on a bench; the
// stages reach a decade and more beyond on each side. Steps are T/10 of the shortest, where white noise hides what
// interpolation loses, and T/25 or less of all others.
var flickerStages = []struct {
	time  float64 // s
	steps int     // a second
}{{0.1, 100}, {1, 25}, {10, 5}, {100, 1}, {1e3, 1}, {1e4, 1}, {1e5, 1}, {1e6, 1}}

// slowNoise is flicker noise and rate random walk of one gyro on fixed ticks, in rad/s. It knows nothing of power: it
// is advanced every bench second.
type slowNoise struct {
	g      normals
	stages []markov
	walk   float64 // rad/s
	stride float64 // K sqrt(1 s), rad/s
	level  [slowTicks + 1]float64
}

// newSlowNoise starts flicker noise B (rad/s) in its steady state and rate random walk K (rad/s/sqrt(s)) at zero.
//
//	S(f) = B^2 / (2 pi f) + (K / (2 pi f))^2, two-sided; IEEE Std 952 annex C
func newSlowNoise(b, k float64, g normals) *slowNoise {
	n := &slowNoise{g: g, stride: k}
	for _, stage := range flickerStages {
		m := newMarkov(b*b*math.Ln10/math.Pi, stage.time, stage.steps)
		m.x = math.Sqrt(m.variance) * g.NormFloat64()
		n.stages = append(n.stages, m)
	}
	return n
}

// advance makes the levels of the next bench second: level[i] is the noise i/slowTicks s after its beginning, straight
// between a stage's steps.
func (n *slowNoise) advance() {
	from, to := n.walk, n.walk+n.stride*n.g.NormFloat64()
	n.walk = to
	for i := range n.stages {
		if m := &n.stages[i]; m.steps == 1 {
			from += m.x
			m.step(n.g)
			to += m.x
		}
	}
	clear(n.level[:])
	n.add(0, slowTicks, from, to)
	n.level[slowTicks] = to
	for i := range n.stages {
		m := &n.stages[i]
		if m.steps == 1 {
			continue
		}
		width := slowTicks / m.steps
		for k := 0; k < slowTicks; k += width {
			before := m.x
			m.step(n.g)
			n.add(k, width, before, m.x)
		}
		n.level[slowTicks] += m.x
	}
}

// add puts a straight line on width levels, of which it reaches the end at the one after.
func (n *slowNoise) add(first, width int, from, to float64) {
	level, slope := n.level[first:first+width], (to-from)/float64(width)
	for i := range level {
		level[i] += from + slope*float64(i)
	}
}

// at is the noise a fraction of the second after its beginning.
func (n *slowNoise) at(fraction float64) float64 {
	x := fraction * slowTicks
	i := min(int(x), slowTicks-1)
	u := x - float64(i)
	return n.level[i] + (n.level[i+1]-n.level[i])*u
}
