package virtual

import "math"

// coriolis is the acceleration of a mass that moves at a velocity across the axis of rotation, m/s^2: 2 w v.
func coriolis(rate, velocityMPerS float64) float64 { return 2 * rate * velocityMPerS }

// drivenMass is the vibratory mechanism. The output follows the Coriolis acceleration of the driven mass, demodulated
// in phase with its velocity; its gain is trimmed at the reference temperature. Motion that leaks from the drive into
// the sense axis stands at right angles to that (quadrature), and passes as bias by the sine of the phase error.
type drivenMass struct {
	p     *Parameters
	onAt  int64
	build float64 // time constant of the drive's amplitude, s: Q / (pi f)
}

// builtAfter is how many time constants the drive needs before its amplitude may be used: exp(-5) is 0.7 %.
const builtAfter = 5

func newDrivenMass(p *Parameters) *drivenMass {
	return &drivenMass{p: p, build: p.DriveQuality / (math.Pi * p.DriveFrequency)}
}

// velocity of the driven mass at its middle, m/s.
func (m *drivenMass) velocity(dT float64) float64 {
	return 2 * math.Pi * m.p.DriveFrequency * (1 + m.p.DriveFrequencyT*dT) * m.p.DriveAmplitude * (1 + m.p.DriveAmplitudeT*dT)
}

func (m *drivenMass) climate(dT float64) (scale, bias float64) {
	scale = coriolis(1, m.velocity(dT)) / coriolis(1, m.velocity(0))
	return scale, m.p.Quadrature * math.Sin(m.p.DemodulationPhase+m.p.DemodulationPhaseT*dT)
}

func (m *drivenMass) power(on bool, at int64) {
	if on {
		m.onAt = at
	}
}

func (m *drivenMass) validFrom() int64 {
	return m.onAt + int64(math.Max(m.p.StartUp, builtAfter*m.build)*1e9)
}

func (m *drivenMass) sense(end int64, in, _ []float64) {
	for i := range in {
		t := float64(end+int64(i)*framePeriodNs-m.onAt) * 1e-9
		if t > 40*m.build {
			return // built up to the last digit
		}
		in[i] *= -math.Expm1(-t / m.build)
	}
}
