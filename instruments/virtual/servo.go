package virtual

import (
	"math"
	"time"
)

// The servo's closed loop: 3 Hz, damped at 0.7, with a twentieth of the acceleration not fed forward. It settles to
// a thousandth in about half a second, as direct-drive tables do.
const (
	servoOmega   = 2 * math.Pi * 3 // rad/s
	servoDamping = 0.7
	servoSlack   = 0.05
	servoDecay   = servoDamping * servoOmega // 1/s
	// settledAfter and stillAfter are when a transient is down to exp(-8) and to exp(-40), which is nothing.
	settledAfter = 8 / servoDecay // s
	stillAfter   = 3100 * time.Millisecond
	// stillBelow is a rate at which a table may be said to stand for a second, rad/s: 2 urad of turn.
	stillBelow = 2e-6
)

var servoOmegaDamped = servoOmega * math.Sqrt(1-servoDamping*servoDamping)

// motion is what a segment of the table's path is for.
type motion uint8

const (
	motionUnset motion = iota
	ramping
	turning
	holding
	swaying
)

// segment is a stretch of the path in closed form. The servo follows the reference with an error e:
//
//	reference = angle + rate t + accel t^2/2 + swing sin(omega t)
//	e'' + 2 zeta w e' + w^2 e = slack * accel
//
// so that e decays to slack*accel/w^2. Angles in rad, t in s from the segment's beginning.
type segment struct {
	from               int64 // ns
	motion             motion
	angle, rate, accel float64
	swing, omega       float64
	a, b, steady       float64 // e = steady + exp(-zeta w t) (a cos + b sin)
}

func (s *segment) since(t int64) float64 { return float64(t-s.from) * 1e-9 }

func (s *segment) reference(t float64) (angle, rate float64) {
	angle = s.angle + t*(s.rate+t*s.accel/2)
	rate = s.rate + t*s.accel
	if s.swing != 0 {
		sin, cos := math.Sincos(s.omega * t)
		angle += s.swing * sin
		rate += s.swing * s.omega * cos
	}
	return angle, rate
}

// actual is where the table is and how fast it turns, by its encoder.
func (s *segment) actual(t float64) (angle, rate float64) {
	angle, rate = s.reference(t)
	angle -= s.steady
	if servoDecay*t < 40 {
		sin, cos := math.Sincos(servoOmegaDamped * t)
		fade := math.Exp(-servoDecay * t)
		e := fade * (s.a*cos + s.b*sin)
		angle -= e
		rate -= fade*servoOmegaDamped*(s.b*cos-s.a*sin) - servoDecay*e
	}
	return angle, rate
}

// catch makes the servo's error such that the table goes on from the given angle and rate without a jump.
func (s *segment) catch(angle, rate float64) {
	toAngle, toRate := s.reference(0)
	s.steady = servoSlack * s.accel / (servoOmega * servoOmega)
	s.a = toAngle - angle - s.steady
	s.b = (toRate - rate + servoDecay*s.a) / servoOmegaDamped
}

// ripple is a deviation of the true rate from the encoder's, n times a turn: rate = encoder rate (1 + size cos(n psi + phase)).
type ripple struct{ n, size, phase float64 }

// servo is the table's motion. Its encoder is true over whole turns; the ripples are what it misses within one.
type servo struct {
	path    []segment
	ripples []ripple
}

func newServo(ripples []ripple) *servo {
	return &servo{path: []segment{{motion: holding}}, ripples: ripples}
}

func (s *servo) segment(t int64) *segment {
	i := len(s.path) - 1
	for i > 0 && t < s.path[i].from {
		i--
	}
	return &s.path[i]
}

// encoder is angle and rate as the encoder has them.
func (s *servo) encoder(t int64) (angle, rate float64) {
	seg := s.segment(t)
	return seg.actual(seg.since(t))
}

// angle is the true angle.
func (s *servo) angle(t int64) float64 {
	psi, _ := s.encoder(t)
	phi := psi
	for _, r := range s.ripples {
		phi += r.size / r.n * math.Sin(r.n*psi+r.phase)
	}
	return phi
}

// stillFrom is from when on the table stands, but for a creep; never, if it is to turn.
func (s *servo) stillFrom() int64 {
	last := &s.path[len(s.path)-1]
	if last.accel != 0 || last.swing != 0 || math.Abs(last.rate) >= stillBelow {
		return math.MaxInt64
	}
	return last.from + int64(stillAfter)
}

// creep is the rate at which the path ends.
func (s *servo) creep() float64 { return s.path[len(s.path)-1].rate }

// settled says that the motion asked for last has been reached.
func (s *servo) settled(t int64) bool {
	seg := s.segment(t)
	return seg == &s.path[len(s.path)-1] && seg.since(t) >= settledAfter
}

// goal is what the path leads to.
func (s *servo) goal() motion { return s.path[len(s.path)-1].motion }

// leg is a part of a new path: for how long, at what acceleration. A leg that turns or holds has its rate and may have
// its angle set, so that rounding does not add up.
type leg struct {
	motion       motion
	lasts        float64 // s; the last leg has no end
	accel        float64
	rate, angle  float64
	setAngle     bool
	swing, omega float64
}

// follow replaces the path from now on.
func (s *servo) follow(now int64, legs []leg) {
	before := s.segment(now)
	angle, rate := before.reference(before.since(now))
	actualAngle, actualRate := before.actual(before.since(now))
	path := make([]segment, 0, len(legs))
	for _, l := range legs {
		seg := segment{from: now, motion: l.motion, angle: angle, rate: rate, accel: l.accel, swing: l.swing, omega: l.omega}
		if l.motion != ramping {
			seg.rate = l.rate
		}
		if l.setAngle {
			seg.angle = l.angle
		}
		seg.catch(actualAngle, actualRate)
		path = append(path, seg)
		now += int64(math.Round(l.lasts * 1e9))
		lasted := seg.since(now)
		angle, rate = seg.reference(lasted)
		actualAngle, actualRate = seg.actual(lasted)
	}
	s.path = path
}

// toRate is the path to a rate that is then kept.
func (s *servo) toRate(now int64, rate, accel float64) []leg {
	before := s.segment(now)
	_, from := before.reference(before.since(now))
	change := rate - from
	return []leg{
		{motion: ramping, accel: math.Copysign(accel, change), lasts: math.Abs(change) / accel},
		{motion: turning, rate: rate},
	}
}

// toRest is the path to a standstill, and where that will be.
func (s *servo) toRest(now int64, accel float64) (legs []leg, angle float64) {
	before := s.segment(now)
	angle, rate := before.reference(before.since(now))
	angle += rate * math.Abs(rate) / (2 * accel)
	return []leg{{motion: ramping, accel: -math.Copysign(accel, rate), lasts: math.Abs(rate) / accel}}, angle
}

// toAngle is the path to an angle, by way of a standstill, at the given greatest rate.
func (s *servo) toAngle(now int64, angle, rate, accel, creep float64) []leg {
	legs, from := s.toRest(now, accel)
	distance := math.Abs(angle - from)
	sign := math.Copysign(1, angle-from)
	peak := math.Min(rate, math.Sqrt(distance*accel))
	if peak > 0 {
		legs = append(legs,
			leg{motion: ramping, accel: sign * accel, lasts: peak / accel},
			leg{motion: turning, rate: sign * peak, lasts: distance/peak - peak/accel},
			leg{motion: ramping, accel: -sign * accel, lasts: peak / accel})
	}
	return append(legs, leg{motion: holding, rate: creep, angle: angle, setAngle: true})
}
