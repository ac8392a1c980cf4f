package virtual

import (
	"math"
	"math/rand/v2"

	"proofrate/instruments"
)

// earthRate is the rotation rate of the Earth, rad/s (WGS 84, NIMA TR8350.2).
const earthRate = 7.292115e-5

// earth is what the site does to a gyro, in east, north, up.
type earth struct {
	rate instruments.Vector // rad/s
	up   instruments.Vector // specific force at rest, m/s^2
}

func newEarth(latitude, gravity float64) earth {
	sin, cos := math.Sincos(latitude)
	return earth{rate: instruments.Vector{0, earthRate * cos, earthRate * sin}, up: instruments.Vector{0, 0, gravity}}
}

// axes is a right-handed frame whose third axis is the table's true axis; the first two span its plane of rotation.
type axes [3]instruments.Vector

// newAxes tilts the nominal axis by a small hidden angle about each of two directions.
func newAxes(nominal instruments.Vector, tilt [2]float64) axes {
	axis := unit(nominal)
	first, second := plane(axis)
	axis = unit(sum(axis, scaled(first, tilt[0]), scaled(second, tilt[1])))
	first, second = plane(axis)
	return axes{first, second, axis}
}

// plane is two directions at right angles to axis and to each other, right-handed with it. The first lies as near to
// east as it can, or to north where the axis itself points east.
func plane(axis instruments.Vector) (first, second instruments.Vector) {
	guide := instruments.Vector{1, 0, 0}
	if math.Abs(axis[0]) > 0.9 {
		guide = instruments.Vector{0, 1, 0}
	}
	first = unit(sum(guide, scaled(axis, -dot(guide, axis))))
	return first, cross(axis, first)
}

// seen is a constant vector of the site as a direction fixed to the turning table sees it:
//
//	constant + cosine cos(phi) + sine sin(phi)
type seen struct{ constant, cosine, sine float64 }

func (s seen) at(sin, cos float64) float64 { return s.constant + s.cosine*cos + s.sine*sin }

// see gives v along a direction (x, y, z) of the table's frame that turns with the table by phi about the third axis.
func (a axes) see(v instruments.Vector, x, y, z float64) seen {
	v1, v2, v3 := dot(v, a[0]), dot(v, a[1]), dot(v, a[2])
	return seen{constant: z * v3, cosine: x*v1 + y*v2, sine: x*v2 - y*v1}
}

// mounting is how one gyro sits on the table and what it is exposed to there.
type mounting struct {
	axial  float64 // component of the input axis along the table's axis, signed
	across float64 // its component along the radius
	radius float64 // m
	earth  seen    // Earth rate along the input axis, rad/s
	// specific force along the input axis, the radius and the tangent, m/s^2, without the centripetal part
	input, radial, tangential seen
}

// newMounting places a gyro whose input axis is off the table's by two small hidden angles, radial and tangential.
func newMounting(e earth, a axes, sense, radius float64, off [2]float64) mounting {
	z := math.Sqrt(1 - off[0]*off[0] - off[1]*off[1])
	return mounting{
		axial: sense * z, across: sense * off[0], radius: radius,
		earth:      a.see(e.rate, sense*off[0], sense*off[1], sense*z),
		input:      a.see(e.up, sense*off[0], sense*off[1], sense*z),
		radial:     a.see(e.up, 1, 0, 0),
		tangential: a.see(e.up, 0, 1, 0),
	}
}

// force is the specific force along input axis, radius and tangent at table angle phi and table rate, m/s^2. The
// centripetal acceleration points to the axis.
func (m *mounting) force(sin, cos, rate float64) (input, radial, tangential float64) {
	centripetal := -rate * rate * m.radius
	return m.input.at(sin, cos) + m.across*centripetal, m.radial.at(sin, cos) + centripetal, m.tangential.at(sin, cos)
}

// small draws two hidden angles of standard uncertainty u, rad.
func small(r *rand.Rand, u float64) [2]float64 {
	return [2]float64{u * r.NormFloat64(), u * r.NormFloat64()}
}

func dot(a, b instruments.Vector) float64 { return a[0]*b[0] + a[1]*b[1] + a[2]*b[2] }

func cross(a, b instruments.Vector) instruments.Vector {
	return instruments.Vector{a[1]*b[2] - a[2]*b[1], a[2]*b[0] - a[0]*b[2], a[0]*b[1] - a[1]*b[0]}
}

func scaled(a instruments.Vector, k float64) instruments.Vector {
	return instruments.Vector{k * a[0], k * a[1], k * a[2]}
}

func sum(vectors ...instruments.Vector) (s instruments.Vector) {
	for _, v := range vectors {
		s[0], s[1], s[2] = s[0]+v[0], s[1]+v[1], s[2]+v[2]
	}
	return s
}

func unit(a instruments.Vector) instruments.Vector { return scaled(a, 1/math.Sqrt(dot(a, a))) }
