package virtual

import "math"

// torsionGyro is the spinning-mass mechanism: a wheel in a gimbal that torsion bars hold. A rate w about the input axis
// turns the gimbal by theta, which is picked off:
//
//	J theta” + C theta' + K theta = H w cos(theta),   H = I 2 pi f,   K = J (2 pi f_g)^2
//
// At rest of the gimbal theta = (H w / K) cos(theta). The gain is trimmed for small rates at the reference temperature
// and full speed. Hysteresis of the bars and the flex leads is a sum of three play elements.
type torsionGyro struct {
	p       *Parameters
	step    [2][2]float64 // of the gimbal's distance from its equilibrium and its rate, over a frame
	perRate float64       // H/K at the reference temperature and full speed, s
	theta   float64       // rad
	speed   float64       // d theta / dt
	play    [len(plays)]float64

	on       bool
	switched int64
	wheel    float64 // speed of the wheel when last switched, of full
}

// plays are the half-widths of the play elements, of the range: each is wholly turned over by twice that, so that a
// traverse in steps of half the range shows the whole hysteresis at each point within.
var plays = [...]float64{0.05, 0.1, 0.2}

func newTorsionGyro(p *Parameters) *torsionGyro {
	momentum := p.WheelInertia * 2 * math.Pi * p.WheelFrequency
	omega := 2 * math.Pi * p.GimbalFrequency
	return &torsionGyro{p: p, step: secondOrderStep(omega, p.Damping, framePeriod), perRate: momentum / (p.GimbalInertia * omega * omega)}
}

func (t *torsionGyro) climate(dT float64) (scale, bias float64) { return 1 / (1 + t.p.TorsionT*dT), 0 }

// wheelAt is the speed of the wheel, of full: a straight rise to full speed in StartUp, a run-down by a time constant.
func (t *torsionGyro) wheelAt(at int64) float64 {
	since := float64(at-t.switched) * 1e-9
	if t.on {
		return math.Min(1, t.wheel+since/t.p.StartUp)
	}
	return t.wheel * math.Exp(-since/t.p.RunDown)
}

func (t *torsionGyro) power(on bool, at int64) {
	t.wheel = t.wheelAt(at)
	t.on, t.switched = on, at
}

func (t *torsionGyro) validFrom() int64 {
	return t.switched + int64(math.Ceil((1-t.wheel)*t.p.StartUp*1e9))
}

func (t *torsionGyro) sense(end int64, in, kept []float64) {
	full := t.validFrom()
	for i, w := range in {
		if at := end + int64(i)*framePeriodNs; at < full {
			w *= t.wheelAt(at)
		}
		w = t.deflect(w)
		kept[i] += t.hysteresis(w)
		in[i] = w
	}
}

// deflect carries the gimbal over one frame of constant rate and returns the rate that its angle then stands for.
func (t *torsionGyro) deflect(w float64) float64 {
	x := w * t.perRate
	// theta = x cos(theta), by series; what is left out is below 1e-9 for x of 3 deg.
	x2 := x * x
	rest := x * (1 - x2*(0.5-x2*(13.0/24)))
	e := t.theta - rest
	t.theta, t.speed = rest+t.step[0][0]*e+t.step[0][1]*t.speed, t.step[1][0]*e+t.step[1][1]*t.speed
	return t.theta / t.perRate
}

// hysteresis is how far the output lags behind: on a rising branch it reads lower by half the parameter, on a falling
// one higher.
func (t *torsionGyro) hysteresis(w float64) float64 {
	behind := 0.0
	for i, width := range plays {
		r := width * t.p.Range
		t.play[i] = math.Max(w-r, math.Min(w+r, t.play[i]))
		behind += (t.play[i] - w) / width
	}
	return t.p.Hysteresis / 2 * behind / float64(len(plays))
}
