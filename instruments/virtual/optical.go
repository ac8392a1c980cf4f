package virtual

import "math"

// lightSpeed in vacuum, m/s, exact (SI).
const lightSpeed = 299792458.0

// sagnacPhase is the phase difference between the two waves of a coil, rad, at a rate in rad/s.
//
//	2 pi L D w / (lambda c), L the fibre's length, D the coil's diameter, lambda the wavelength in vacuum
//
// Source: E. J. Post, Rev. Mod. Phys. 39 (1967) 475.
func sagnacPhase(lengthM, diameterM, wavelengthM, rate float64) float64 {
	return 2 * math.Pi * lengthM * diameterM * rate / (wavelengthM * lightSpeed)
}

// fibreCoil is the optical mechanism. The gain from phase to output is trimmed at the reference temperature; what
// changes the phase over temperature changes the scale factor.
type fibreCoil struct {
	p    *Parameters
	from int64
}

func (c *fibreCoil) climate(dT float64) (scale, bias float64) {
	p := c.p
	stretch := 1 + p.CoilExpansion*dT
	hot := sagnacPhase(p.FibreLength*stretch, p.CoilDiameter*stretch, p.Wavelength*(1+p.WavelengthT*dT), 1)
	return hot / sagnacPhase(p.FibreLength, p.CoilDiameter, p.Wavelength, 1), 0
}

func (c *fibreCoil) power(on bool, at int64) {
	if on {
		c.from = at + int64(c.p.StartUp*1e9)
	}
}

func (c *fibreCoil) validFrom() int64 { return c.from }

func (c *fibreCoil) sense(int64, []float64, []float64) {}
