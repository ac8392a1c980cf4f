package virtual

import (
	"math"
	"math/rand/v2"
	"slices"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/link"
)

const (
	frameRate     = 100 // Hz, of every gyro
	framePeriod   = 1 / float64(frameRate)
	framePeriodNs = int64(time.Second) / frameRate
	// frameOnLine is how long a frame's bytes take: ten bits each at 460800 baud.
	frameOnLine   = int64(frameSize) * 10 * int64(time.Second) / 460800
	referenceTemp = 23.0 // degC
	secondNs      = int64(time.Second)
)

// mechanism is what differs between the families. Times are bench time in ns.
type mechanism interface {
	// climate is the family's part of scale factor and bias, off by dT from the reference temperature.
	climate(dT float64) (scale, bias float64)
	// power notes that the supply has been switched.
	power(on bool, at int64)
	// validFrom is when the output may be used.
	validFrom() int64
	// sense turns the mean inputs of successive frames, the first of which ends at the given time, into what the
	// output follows, in place; what the mechanism keeps from its past it adds to kept. All in rad/s.
	sense(end int64, in, kept []float64)
}

// gyro is one gyro in its slot: always there thermally, and streaming frames while it is powered.
type gyro struct {
	slot  instruments.SlotID
	p     Parameters
	mech  mechanism
	servo *servo
	mount mounting
	angle bool    // output is angle increments, else rate
	count float64 // rad/s or rad
	sigma float64 // of a sample's white noise, rad/s
	cubic polynomial

	body   body
	slow   *slowNoise
	white  *white
	turnOn *rand.Rand

	second      int64   // the bench second that has begun
	scale, bias float64 // in this second
	sin, cos    float64 // of the table's angle at its beginning
	temperature int16   // as the frames say it

	on        bool
	onAt      int64   // ns
	onBias    float64 // rad/s, of this turn-on
	frames    uint64  // sent since power-on
	phi       float64 // the table's angle at the end of the last frame
	remainder float64 // of the angle output, counts

	device   *link.Device
	out      []byte
	in, kept [frameRate]float64
	y        [frameRate]float64
	trace    *trace
}

// polynomial is the common nonlinearity: nl(w) = w (odd3 (w/R)^2 + odd5 (w/R)^4 +- asymmetry/2).
type polynomial struct{ perRange, odd3, odd5, half float64 }

// The largest deviation of x^3 and of x^5 from the straight line through equally weighted points at 0, 0.2, 0.5 and 1,
// both signs, is at 0.5: the line's slope, sum x^4 / sum x^2 or sum x^6 / sum x^2, times 0.5, less 0.5^3 or 0.5^5.
const (
	cubicDeviation = 0.5*(0.0016+0.0625+1)/(0.04+0.25+1) - 0.125
	fifthDeviation = 0.5*(0.000064+0.015625+1)/(0.04+0.25+1) - 0.03125
)

// warmUpHolds is when in a bench second the warm-up transient has the value that it keeps through it, s.
const warmUpHolds = 0.5

func newPolynomial(p *Parameters) polynomial {
	return polynomial{perRange: 1 / p.Range, odd3: p.Nonlinearity / cubicDeviation, odd5: p.FifthOrder / fifthDeviation, half: p.Asymmetry / 2}
}

// output is w + nl(w).
func (n *polynomial) output(w float64) float64 {
	x := w * n.perRange
	x *= x
	return w + w*(x*(n.odd3+x*n.odd5)) + math.Abs(w)*n.half
}

// begin starts a bench second: what varies slowly keeps its value through it. Every frame that ended by then is made.
func (g *gyro) begin(second int64) {
	g.second = second
	g.slow.advance()
	g.sin, g.cos = math.Sincos(g.servo.angle(second * secondNs))
	g.condition()
}

// condition works out what holds until the second's end, or until the gyro is switched.
func (g *gyro) condition() {
	at := g.second * secondNs
	dT := g.body.temperature - referenceTemp
	scale, bias := g.mech.climate(dT)
	g.scale = scale * (1 + g.p.ScaleFactorError + g.p.ScaleFactorT*dT)
	sinceOn := math.Max(0, float64(at-g.onAt)*1e-9+warmUpHolds)
	g.bias = bias + g.p.Bias + g.onBias + dT*(g.p.BiasT+dT*g.p.BiasT2) + g.p.BiasRate*g.body.rate +
		g.p.WarmUp*math.Exp(-sinceOn/g.p.WarmUpTime) + g.p.Ramp*float64(g.second)
	g.temperature = int16(math.Round(100 * (g.body.temperature + g.p.TemperatureOffset)))
}

// power switches the gyro at a time up to which all frames are made.
func (g *gyro) power(volts float64, now int64) {
	on := math.Abs(volts-g.p.Voltage) <= g.p.Voltage/10
	if on == g.on {
		return
	}
	g.on = on
	g.mech.power(on, now)
	if !on {
		return
	}
	g.onAt, g.frames, g.remainder = now, 0, 0
	g.onBias = g.p.TurnOn * g.turnOn.NormFloat64()
	g.phi = g.servo.angle(now)
	g.condition()
	if g.trace != nil {
		g.trace.begin(now)
	}
}

// load is the current that the gyro takes, A.
func (g *gyro) load(now int64) float64 {
	if !g.on {
		return 0
	}
	return g.p.Current + g.p.Inrush*math.Exp(-float64(now-g.onAt)*1e-9/g.p.InrushTime)
}

// frameEnd is when the frame after n others ends.
func (g *gyro) frameEnd(n uint64) int64 { return g.onAt + int64(n+1)*framePeriodNs }

// produce makes all frames that end by now, within the second that has begun, and puts them on the line.
func (g *gyro) produce(now int64) {
	if !g.on {
		return
	}
	g.out = g.out[:0]
	for end := g.frameEnd(g.frames); end <= now; end = g.frameEnd(g.frames) {
		n := min((now-end)/framePeriodNs+1, frameRate)
		still := g.servo.stillFrom()
		if start := end - framePeriodNs; start < still { // a block does not reach beyond where frames become simpler
			n = min(n, (still-start-1)/framePeriodNs+1)
		}
		g.block(int(n), end, end-framePeriodNs >= still)
	}
	if len(g.out) == 0 || g.device == nil {
		return
	}
	arrived, arrival := g.out, g.frameEnd(g.frames-1)+frameOnLine
	if arrival > now { // the newest is still on the line
		before := len(g.out) - frameSize
		g.device.Deliver(g.out[:before], moment(arrival-framePeriodNs))
		arrived = g.out[before:]
	}
	g.device.Deliver(arrived, moment(arrival))
}

// next is when the next frame will have arrived.
func (g *gyro) next() (time.Time, bool) {
	return moment(g.frameEnd(g.frames) + frameOnLine), g.on
}

// block makes the next n frames, which end within one bench second, each through the whole path: mean input over the
// frame, what the mechanism makes of it, scale factor, nonlinearity and biases, slow noise, dead band, white noise,
// saturation, rounding. still says that the table stands throughout.
func (g *gyro) block(n int, end int64, still bool) {
	in, y, kept := g.in[:n], g.y[:n], g.kept[:n]
	if still {
		g.stand(end, in, y)
	} else {
		g.move(end, in, y)
	}
	if g.trace != nil {
		g.trace.input(in)
	}
	clear(kept)
	g.mech.sense(end, in, kept)
	for i, w := range in {
		bias := y[i] + kept[i]
		y[i] = g.scale*g.cubic.output(w) + bias
		if g.trace != nil {
			g.trace.output(y[i], bias, kept[i])
		}
	}
	g.finish(end, y)
}

// stand gives input and bias of a table that stands but for its creep, the same all second.
func (g *gyro) stand(end int64, in, bias []float64) {
	creep := g.servo.creep()
	w := g.mount.axial*creep + g.mount.earth.at(g.sin, g.cos)
	b := g.bias + g.drift(g.sin, g.cos, creep)
	for i := range in {
		in[i], bias[i] = w, b
	}
	g.phi = g.servo.angle(end + int64(len(in)-1)*framePeriodNs)
}

// move works out input and bias of each frame by itself.
func (g *gyro) move(end int64, in, bias []float64) {
	for i := range in {
		phi := g.servo.angle(end + int64(i)*framePeriodNs)
		sin, cos := math.Sincos((g.phi + phi) / 2)
		rate := (phi - g.phi) / framePeriod
		g.phi = phi
		in[i] = g.mount.axial*rate + g.mount.earth.at(sin, cos)
		bias[i] = g.bias + g.drift(sin, cos, rate)
	}
}

// drift is the bias that acceleration makes, B_g . f.
func (g *gyro) drift(sin, cos, rate float64) float64 {
	input, radial, tangential := g.mount.force(sin, cos, rate)
	return g.p.AccelerationInput*input + g.p.AccelerationRadial*radial + g.p.AccelerationTang*tangential
}

// finish adds the noise to noise-free outputs and encodes.
func (g *gyro) finish(end int64, y []float64) {
	offset := end - g.second*secondNs // of the first frame's end within the second, above 0
	fraction := float64(offset) * 1e-9
	g.white.seek(g.second, int((offset-1)/framePeriodNs))
	g.white.next += len(y)
	starting := g.mech.validFrom() - end // ns
	limit := g.p.Saturation * g.p.Range
	sent := len(g.out)
	g.out = slices.Grow(g.out, len(y)*frameSize)[:sent+len(y)*frameSize]
	for i := range y {
		slow := g.slow.at(fraction + float64(i)*framePeriod)
		if g.trace != nil {
			g.trace.slow(slow)
		}
		v := y[i] + slow
		if math.Abs(v) < g.p.DeadBand {
			v = 0
		}
		v += g.sigma * g.white.normals.NormFloat64()
		status := uint16(statusValid)
		if int64(i)*framePeriodNs < starting {
			status = statusStarting
		}
		if math.Abs(v) >= limit {
			v = math.Copysign(limit, v)
			status |= statusSaturated
		}
		putFrame(g.out[sent+i*frameSize:], uint16(g.frames), g.round(v*g.p.Polarity), g.temperature, status)
		g.frames++
	}
}

// round gives the counts of one frame: a rounded rate, or the whole counts of an angle whose rest is carried.
func (g *gyro) round(v float64) int32 {
	if !g.angle {
		return int32(math.RoundToEven(v / g.count))
	}
	g.remainder += v * framePeriod / g.count
	whole := math.RoundToEven(g.remainder)
	g.remainder -= whole
	return int32(whole)
}

func (g *gyro) attach(d *link.Device) {
	g.device = d
	d.OnLook(func(now time.Time) { g.produce(int64(now.Sub(began))) }, g.next)
}
