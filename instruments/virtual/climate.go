package virtual

import (
	"math"
	"math/rand/v2"
)

const (
	airOmega     = 1.0 / 60 // rad/s: the air's control loop
	airDamping   = 0.6      // overshoots by about a tenth of what is left at a ramp's end
	airWander    = 0.05     // K, standard deviation of the air about what the loop makes of it
	airWanderFor = 120.0    // s, its correlation time
	airLeak      = 1800.0   // s, towards the ambient temperature while the chamber is off
	fixtureLag   = 120.0    // s, the fixture behind the air
)

// climate is the chamber's air and the fixture in it, stepped exactly once a bench second. Temperatures in degC.
type climate struct {
	ambient float64
	on      bool
	target  float64
	ramp    float64 // K/s
	// reference is where the ramp is; air follows it with the loop's second order.
	reference, loop, loopRate float64
	wander                    markov
	fixture                   float64
	noise                     *rand.Rand
	step                      [2][2]float64 // of the loop's error and its rate, over a second
	fixtureDecay              float64
}

func newClimate(ambient float64, noise *rand.Rand) *climate {
	return &climate{ambient: ambient, target: ambient, reference: ambient, loop: ambient, fixture: ambient, noise: noise,
		wander: newMarkov(airWander*airWander, airWanderFor, 1),
		step:   secondOrderStep(airOmega, airDamping, 1), fixtureDecay: math.Exp(-1 / fixtureLag)}
}

// secondOrderStep is the exact transition of x” = -w^2 x - 2 zeta w x' over dt, for zeta < 1.
func secondOrderStep(omega, damping, dt float64) [2][2]float64 {
	decay := damping * omega
	damped := omega * math.Sqrt(1-damping*damping)
	sin, cos := math.Sincos(damped * dt)
	fade := math.Exp(-decay * dt)
	return [2][2]float64{
		{fade * (cos + decay/damped*sin), fade * sin / damped},
		{-fade * omega * omega * sin / damped, fade * (cos - decay/damped*sin)},
	}
}

// set goes to a temperature at a ramp, from where the air is.
func (c *climate) set(target, ramp float64) {
	if !c.on {
		c.reference = c.loop
	}
	c.on, c.target, c.ramp = true, target, ramp
}

func (c *climate) off() { c.on = false }

func (c *climate) air() float64 { return c.loop + c.wander.x }

// reached says that ramp and air have arrived.
func (c *climate) reached() bool {
	return c.on && c.reference == c.target && math.Abs(c.loop-c.target) < 0.5
}

// advance carries the climate over one second, through which the ramp's end value holds for the loop, and the air's
// value at the beginning for the fixture.
func (c *climate) advance() {
	air := c.air()
	c.fixture = air + (c.fixture-air)*c.fixtureDecay
	c.wander.step(c.noise)
	if !c.on {
		c.loop = c.ambient + (c.loop-c.ambient)*math.Exp(-1/airLeak)
		c.loopRate = 0
		return
	}
	c.reference += math.Max(-c.ramp, math.Min(c.ramp, c.target-c.reference))
	e := c.loop - c.reference
	c.loop = c.reference + c.step[0][0]*e + c.step[0][1]*c.loopRate
	c.loopRate = c.step[1][0]*e + c.step[1][1]*c.loopRate
}

// body is a mass behind the fixture by one lag: a gyro.
type body struct {
	temperature float64
	decay       float64 // a second
	rate        float64 // K/s, over the last second
}

func newBody(temperature, lag float64) body {
	return body{temperature: temperature, decay: math.Exp(-1 / lag)}
}

func (b *body) advance(fixture float64) {
	before := b.temperature
	b.temperature = fixture + (before-fixture)*b.decay
	b.rate = b.temperature - before
}
