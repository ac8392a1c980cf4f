package virtual

import (
	"math"
	"regexp"
	"strings"
	"testing"
)

// TestSagnacPublished compares the phase of fibre coils with published and computed examples.
func TestSagnacPublished(t *testing.T) {
	inputs := regexp.MustCompile(`L ([\d.]+) m; D ([\d.]+) m; lambda ([\d.]+) nm; (.+)`)
	n := 0
	for _, row := range readReference(t, "physics/sagnac.csv") {
		found := inputs.FindStringSubmatch(row["inputs"])
		if found == nil {
			continue
		}
		n++
		length, diameter, wavelength := number(t, found[1]), number(t, found[2]), number(t, found[3])*1e-9
		computed := number(t, row["computed"])
		rate, want := 0.0, computed
		switch {
		case strings.HasPrefix(found[4], "Omega = 1 deg/h"):
			rate = degPerHour
		case strings.HasPrefix(found[4], "Earth rate"):
			rate = 7.292115e-5
		case strings.HasPrefix(found[4], "rate for pi phase"):
			rate, want = computed*math.Pi/180, math.Pi
		default:
			t.Fatalf("%q is not understood", found[4])
		}
		if got := sagnacPhase(length, diameter, wavelength, rate); math.Abs(got/want-1) > 5e-9 {
			t.Errorf("%s: %.10g rad, want %.10g", row["inputs"], got, want)
		}
	}
	if n != 15 {
		t.Errorf("%d coils compared, want 15", n)
	}
}

func TestCoriolisPublished(t *testing.T) {
	for _, row := range readReference(t, "physics/coriolis.csv") {
		want := number(t, row["coriolis_m_s2"])
		if got := coriolis(number(t, row["omega_deg_s"])*math.Pi/180, number(t, row["v_m_s"])); math.Abs(got/want-1) > 1e-9 {
			t.Errorf("%v: %.10g, want %.10g", row, got, want)
		}
	}
}

// TestScaleFactorOverTemperature: each family's physics, off by 20 K, to first order in the coefficients.
func TestScaleFactorOverTemperature(t *testing.T) {
	p := Parameters{Range: 1, FibreLength: 1000, CoilDiameter: 0.1, Wavelength: 1.55e-6, WavelengthT: 8e-6, CoilExpansion: 3e-6,
		DriveFrequency: 1e4, DriveAmplitude: 5e-6, DriveQuality: 2e4, DriveFrequencyT: -30e-6, DriveAmplitudeT: 10e-6,
		Quadrature: 0.2, DemodulationPhase: 1e-3, DemodulationPhaseT: 5e-5,
		WheelInertia: 4e-6, WheelFrequency: 400, GimbalInertia: 3e-6, GimbalFrequency: 50, Damping: 0.7, TorsionT: -20e-6}
	for family, want := range map[Family]struct{ scale, bias float64 }{
		Optical:      {1 + 20*(2*3e-6-8e-6), 0}, // both length and diameter grow
		Vibratory:    {1 + 20*(-30e-6+10e-6), 0.2 * 2e-3},
		SpinningMass: {1 + 20*20e-6, 0},
	} {
		scale, bias := mechanisms[family](&p).climate(20)
		if math.Abs(scale-want.scale) > 2e-6*0.5 || math.Abs(bias-want.bias) > 1e-9 {
			t.Errorf("%s: scale factor %.8f, bias %v; want %.8f, %v", family, scale, bias, want.scale, want.bias)
		}
		if scale, bias := mechanisms[family](&p).climate(0); scale != 1 || math.Abs(bias-want.bias/2) > 1e-9 {
			t.Errorf("%s at the reference temperature: %v, %v", family, scale, bias)
		}
	}
}

// TestDriveBuildsUp: the amplitude follows 1 - exp(-t pi f/Q), and is used from five time constants on.
func TestDriveBuildsUp(t *testing.T) {
	p := Parameters{DriveFrequency: 1e4, DriveAmplitude: 5e-6, DriveQuality: 2e4, StartUp: 0.5}
	m := newDrivenMass(&p)
	m.power(true, 1e9)
	build := 2e4 / (math.Pi * 1e4)
	if got, want := float64(m.validFrom()-1e9)*1e-9, 5*build; math.Abs(got-want) > 1e-8 {
		t.Errorf("valid after %v s, want %v", got, want)
	}
	for _, frames := range []int64{1, 50, 200, 5000} {
		in := []float64{2}
		m.sense(1e9+frames*framePeriodNs, in, nil)
		if want := 2 * (1 - math.Exp(-float64(frames)*framePeriod/build)); math.Abs(in[0]-want) > 1e-12 {
			t.Errorf("after %d frames %v, want %v", frames, in[0], want)
		}
	}
}

// wheel is a spinning-mass mechanism in full operation.
func wheel(hysteresis float64) *torsionGyro {
	m := newTorsionGyro(&Parameters{Range: 1, WheelInertia: 4e-6, WheelFrequency: 400, GimbalInertia: 3e-6, GimbalFrequency: 50,
		Damping: 0.7, StartUp: 20, RunDown: 60, Hysteresis: hysteresis})
	m.power(true, 0)
	return m
}

// TestGimbalFollowsItsEquation: the angle frame by frame against the equation of motion integrated step by step, its
// nonlinear torque included. A frame's rate is constant, but the torque follows the angle within it; at some degrees
// this is worth parts in a thousand while the gimbal moves, and nothing once it rests.
func TestGimbalFollowsItsEquation(t *testing.T) {
	m := wheel(0)
	const momentum, inertia = 4e-6 * 2 * math.Pi * 400, 3e-6
	omega := 2 * math.Pi * 50.0
	theta, speed := 0.0, 0.0
	for frame, w := range []float64{1, 1, 1, 1, 1, 1, 1, 1, 1, 1, -0.5, -0.5, -0.5, -0.5, -0.5, -0.5, -0.5, -0.5, -0.5, -0.5} {
		const steps = 2000
		h := framePeriod / steps
		for range steps { // midpoint rule
			force := func(theta, speed float64) float64 {
				return momentum*w*math.Cos(theta)/inertia - 2*0.7*omega*speed - omega*omega*theta
			}
			a, s := force(theta, speed), speed
			middle, half := theta+h/2*s, speed+h/2*a
			theta, speed = theta+h*half, speed+h*force(middle, half)
		}
		got := m.deflect(w) * m.perRate
		within := 3e-3 * math.Abs(theta)
		if frame%10 == 9 {
			within = 1e-7 * math.Abs(theta)
		}
		if math.Abs(got-theta) > within+1e-9 {
			t.Errorf("frame %d: theta %v, want %v", frame, got, theta)
		}
	}
	if theta > -0.01 {
		t.Errorf("the gimbal has hardly moved: %v rad", theta)
	}
}

// TestHysteresisOfAFullTraverse: beyond the turning points' reach the falling branch reads higher than the rising one
// by the parameter, and the branches close where the traverse turns.
func TestHysteresisOfAFullTraverse(t *testing.T) {
	const h = 80e-6
	m := wheel(h)
	traverse := []float64{0, 0.5, 1, 0.5, 0, -0.5, -1, -0.5, 0, 0.5, 1}
	kept := make([]float64, len(traverse))
	for i, w := range traverse {
		kept[i] = m.hysteresis(w)
	}
	want := []float64{0, -h / 2, -h / 2, h / 2, h / 2, h / 2, h / 2, -h / 2, -h / 2, -h / 2, -h / 2}
	for i := range want {
		if math.Abs(kept[i]-want[i]) > 1e-12 {
			t.Errorf("point %d (%v): %v, want %v", i, traverse[i], kept[i], want[i])
		}
	}
	// Small swings about a point are within the play and keep what was left.
	before := m.hysteresis(1)
	m.hysteresis(0.999)
	if got := m.hysteresis(1); math.Abs(got-before) > 1e-15 {
		t.Errorf("a small swing moved the branch from %v to %v", before, got)
	}
}

// TestWheelSpinsUpAndRunsDown: a straight rise, and from what is left of the speed after a pause.
func TestWheelSpinsUpAndRunsDown(t *testing.T) {
	m := wheel(0)
	second := int64(1e9)
	for at, want := range map[int64]float64{0: 0, 5: 0.25, 20: 1, 100: 1} {
		if got := m.wheelAt(at * second); math.Abs(got-want) > 1e-12 {
			t.Errorf("after %d s: %v, want %v", at, got, want)
		}
	}
	if got := m.validFrom(); got != 20*second {
		t.Errorf("valid from %v", got)
	}
	m.power(false, 100*second)
	if got := m.wheelAt(160 * second); math.Abs(got-math.Exp(-1)) > 1e-12 {
		t.Errorf("a minute after power-off: %v", got)
	}
	m.power(true, 160*second)
	if got, want := float64(m.validFrom()-160*second)*1e-9, 20*(1-math.Exp(-1)); math.Abs(got-want) > 1e-8 {
		t.Errorf("valid again after %v s, want %v", got, want)
	}
	in := []float64{0.1}
	m.sense(165*second, in, make([]float64, 1))
	if m.theta == 0 || in[0] > 0.1 {
		t.Errorf("a slow wheel turns %v into %v", 0.1, in[0])
	}
}
