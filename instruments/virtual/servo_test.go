package virtual

import (
	"math"
	"testing"
)

// integrate carries e” = slack*accel(t) - 2 zeta w e' - w^2 e from rest by Runge and Kutta's method of fourth order.
func integrate(e, rate, from, to float64, accel func(t float64) float64) (float64, float64) {
	const steps = 20000
	h := (to - from) / steps
	f := func(t, e, rate float64) (float64, float64) {
		return rate, servoSlack*accel(t) - 2*servoDamping*servoOmega*rate - servoOmega*servoOmega*e
	}
	for i := range steps {
		t := from + h*float64(i)
		a1, b1 := f(t, e, rate)
		a2, b2 := f(t+h/2, e+h/2*a1, rate+h/2*b1)
		a3, b3 := f(t+h/2, e+h/2*a2, rate+h/2*b2)
		a4, b4 := f(t+h, e+h*a3, rate+h*b3)
		e, rate = e+h/6*(a1+2*a2+2*a3+a4), rate+h/6*(b1+2*b2+2*b3+b4)
	}
	return e, rate
}

// TestServoFollowsItsEquation compares the closed form along a start with the equation integrated step by step.
func TestServoFollowsItsEquation(t *testing.T) {
	s := newServo(nil)
	s.follow(0, s.toRate(0, 1, 2)) // 1 rad/s at 2 rad/s^2: half a second of ramp
	e, rate := 0.0, 0.0
	before := 0.0
	for _, at := range []float64{0.01, 0.1, 0.3, 0.5, 0.6, 0.9, 2} {
		accel := 2.0
		if before >= 0.5 {
			accel = 0
		}
		e, rate = integrate(e, rate, before, at, func(float64) float64 { return accel })
		before = at
		reference, speed := at*at, 2*at
		if at > 0.5 {
			reference, speed = 0.25+(at-0.5), 1
		}
		angle, turning := s.encoder(int64(at * 1e9))
		if math.Abs(angle-(reference-e)) > 1e-10 || math.Abs(turning-(speed-rate)) > 1e-9 {
			t.Errorf("at %v s: %.12f rad, %.12f rad/s; want %.12f, %.12f", at, angle, turning, reference-e, speed-rate)
		}
	}
}

// TestServoMovesWithoutJumps changes its mind in every state and looks that angle and rate stay continuous, that the
// rate is the angle's derivative, and that the acceleration stays near what was asked for.
func TestServoMovesWithoutJumps(t *testing.T) {
	s := newServo(nil)
	const accel = 3.0
	turn := func(rate float64) func(int64) []leg {
		return func(now int64) []leg { return s.toRate(now, rate, accel) }
	}
	rest := func(now int64) []leg {
		legs, angle := s.toRest(now, accel)
		return append(legs, leg{motion: holding, angle: angle, setAngle: true})
	}
	sway := func(now int64) []leg {
		legs, angle := s.toRest(now, accel)
		return append(legs, leg{motion: swaying, angle: angle, setAngle: true, swing: 0.01, omega: 9})
	}
	to := func(angle float64) func(int64) []leg {
		return func(now int64) []leg { return s.toAngle(now, angle, 1, accel, 0) }
	}
	plans := []func(int64) []leg{turn(2), turn(-1), rest, sway, turn(0.5), sway, rest, to(3), to(-4), turn(1), to(0), to(0)}
	now, h := int64(0), int64(1e6)
	for i, plan := range plans {
		angle0, rate0 := s.encoder(now)
		s.follow(now, plan(now))
		angle, rate := s.encoder(now)
		if math.Abs(angle-angle0) > 1e-9 || math.Abs(rate-rate0) > 1e-9 {
			t.Errorf("plan %d jumps by %v rad, %v rad/s", i, angle-angle0, rate-rate0)
		}
		for range 2500 - 300*(i%4) {
			before, _ := s.encoder(now)
			after, _ := s.encoder(now + 2*h)
			_, slow := s.encoder(now)
			_, fast := s.encoder(now + 2*h)
			_, rate := s.encoder(now + h)
			if got := (after - before) / (2e-9 * float64(h)); math.Abs(got-rate) > accel*1e-3/2 { // a ramp's end lies between
				t.Fatalf("plan %d: the angle changes at %v rad/s where the rate is %v", i, got, rate)
			}
			// The servo's transients at the ends of a ramp ring by a part of the slack; a swing begins abruptly.
			if got := math.Abs(fast-slow) / (2e-9 * float64(h)); got > 1.1*accel && s.goal() != swaying {
				t.Fatalf("plan %d accelerates at %v rad/s^2", i, got)
			}
			now += h
		}
	}
}

func TestServoArrives(t *testing.T) {
	for _, c := range []struct{ from, to, rate, accel float64 }{{0, 1, 0.5, 1}, {0, -7, 0.5, 1}, {2, 2.001, 0.5, 1}, {5, 5, 1, 1}, {0, 400, 6, 0.3}} {
		s := newServo(nil)
		s.path = []segment{{motion: holding, angle: c.from}}
		legs := s.toAngle(0, c.to, c.rate, c.accel, 0)
		s.follow(0, legs)
		lasts, fastest := 0.0, 0.0
		for _, l := range legs {
			lasts += l.lasts
		}
		for i := range 1000 {
			_, rate := s.encoder(int64(lasts * 1e6 * float64(i)))
			fastest = math.Max(fastest, math.Abs(rate))
		}
		// Time-optimal: d/v + v/a, or twice the root of d/a where the greatest rate is not reached.
		d := math.Abs(c.to - c.from)
		want := 2 * math.Sqrt(d/c.accel)
		if d > c.rate*c.rate/c.accel {
			want = d/c.rate + c.rate/c.accel
		}
		if math.Abs(lasts-want) > 1e-9*want || fastest > 1.06*c.rate {
			t.Errorf("%+v takes %v s at up to %v rad/s, want %v s", c, lasts, fastest, want)
		}
		at := int64(lasts*1e9) + int64(stillAfter) + 10 // each leg is rounded to a nanosecond
		if angle, rate := s.encoder(at); math.Abs(angle-c.to) > 1e-12*math.Abs(c.to)+1e-15 || math.Abs(rate) > 1e-14 || s.stillFrom() > at {
			t.Errorf("%+v ends at %v rad, %v rad/s", c, angle, rate)
		}
	}
}

// TestRippleIsGoneOverATurn: the true angle runs ahead of the encoder's and back, once and 36 times a turn, and gains
// nothing over a whole one; over a part of one it does.
func TestRippleIsGoneOverATurn(t *testing.T) {
	s := newServo([]ripple{{1, 1e-4, 0.3}, {36, 5e-5, 1}})
	s.follow(0, []leg{{motion: turning, rate: math.Pi / 10}}) // a turn in 20 s
	start := int64(stillAfter)
	gain := func(d int64) float64 {
		a, _ := s.encoder(start)
		b, _ := s.encoder(start + d)
		return (s.angle(start+d) - s.angle(start)) - (b - a)
	}
	if got := gain(20e9); math.Abs(got) > 1e-12 {
		t.Errorf("a whole turn gains %v rad", got)
	}
	worst := 0.0
	for d := range int64(20) {
		worst = math.Max(worst, math.Abs(gain(d*1e9)))
	}
	if worst < 1e-4 || worst > 2.1e-4 {
		t.Errorf("parts of a turn gain up to %v rad, want between one and two times 1e-4", worst)
	}
	// The rate is the encoder's times 1 + size cos(n psi + phase).
	psi, rate := s.encoder(start)
	h := int64(1e5)
	got := (s.angle(start+h) - s.angle(start-h)) / (2e-9 * float64(h))
	want := rate * (1 + 1e-4*math.Cos(psi+0.3) + 5e-5*math.Cos(36*psi+1))
	if math.Abs(got-want) > 1e-8 {
		t.Errorf("true rate %v, want %v", got, want)
	}
}
