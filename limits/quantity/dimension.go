package quantity

import (
	"fmt"
	"strings"
)

// Dimension is what kind of thing a quantity is. It compares with ==.
type Dimension struct {
	angle, length, mass, time, current, temperature int8 // exponents in halves
	absolute                                        bool // an absolute temperature
}

// The dimensions that procedures and benches speak of.
var (
	Ratio                 = Dimension{}
	Angle                 = Dimension{angle: 2}
	Time                  = Dimension{time: 2}
	Frequency             = Dimension{time: -2}
	AngularRate           = Dimension{angle: 2, time: -2}
	AngularAcceleration   = Dimension{angle: 2, time: -4}
	AngleRandomWalk       = Dimension{angle: 2, time: -1}
	RateRandomWalk        = Dimension{angle: 2, time: -3}
	Length                = Dimension{length: 2}
	Acceleration          = Dimension{length: 2, time: -4}
	Temperature           = Dimension{temperature: 2, absolute: true}
	TemperatureDifference = Dimension{temperature: 2}
	TemperatureRate       = Dimension{temperature: 2, time: -2}
	Voltage               = Dimension{length: 4, mass: 2, time: -6, current: -2}
	Current               = Dimension{current: 2}
	Resistance            = Dimension{length: 4, mass: 2, time: -6, current: -4}
	VoltageScaleFactor    = Dimension{length: 4, mass: 2, time: -4, current: -2, angle: -2}
	RateTemperature       = Dimension{angle: 2, time: -2, temperature: -2}
	RateAcceleration      = Dimension{angle: 2, time: 2, length: -2}
	RatioTemperature      = Dimension{temperature: -2}
)

// named is the one table of names and of the units that messages offer.
var named = []struct {
	dimension Dimension
	name      string
	units     []string
}{
	{Ratio, "ratio", []string{"ppm", "%", "1"}},
	{Angle, "angle", []string{"deg", "mrad", "rad", "arcsec", "arcmin", "turn"}},
	{Time, "time", []string{"s", "min", "h", "ms"}},
	{Frequency, "frequency", []string{"Hz", "kHz"}},
	{AngularRate, "angular rate", []string{"deg/s", "deg/h", "rad/s"}},
	{AngularAcceleration, "angular acceleration", []string{"deg/s^2", "rad/s^2"}},
	{AngleRandomWalk, "angle random walk", []string{"deg/sqrt(h)", "deg/h/sqrt(Hz)"}},
	{RateRandomWalk, "rate random walk", []string{"deg/h/sqrt(h)"}},
	{Length, "length", []string{"m", "mm", "cm"}},
	{Acceleration, "acceleration", []string{"m/s^2", "g0"}},
	{Temperature, "temperature", []string{"degC"}},
	{TemperatureDifference, "temperature difference", []string{"K", "mK"}},
	{TemperatureRate, "temperature rate", []string{"K/min", "K/s", "K/h"}},
	{Voltage, "voltage", []string{"V", "mV"}},
	{Current, "current", []string{"A", "mA"}},
	{Resistance, "resistance", []string{"ohm", "kohm", "Mohm"}},
	{VoltageScaleFactor, "voltage scale factor", []string{"mV/(deg/s)"}},
	{RateTemperature, "rate per temperature difference", []string{"deg/h/K"}},
	{RateAcceleration, "rate per acceleration", []string{"deg/h/g0"}},
	{RatioTemperature, "ratio per temperature difference", []string{"ppm/K"}},
}

// String is the trade's name of the dimension, or its powers where it has none.
func (d Dimension) String() string {
	for _, row := range named {
		if row.dimension == d {
			return row.name
		}
	}
	var parts []string
	for _, base := range []struct {
		name   string
		halves int8
	}{{"angle", d.angle}, {"length", d.length}, {"mass", d.mass}, {"time", d.time}, {"current", d.current}, {"temperature difference", d.temperature}} {
		switch {
		case base.halves == 0:
		case base.halves == 2:
			parts = append(parts, base.name)
		case base.halves%2 == 0:
			parts = append(parts, fmt.Sprintf("%s^%d", base.name, base.halves/2))
		default:
			parts = append(parts, fmt.Sprintf("%s^(%d/2)", base.name, base.halves))
		}
	}
	return strings.Join(parts, " ")
}

// Units are the units that messages offer for the dimension; none for one without a name.
func (d Dimension) Units() []Unit {
	for _, row := range named {
		if row.dimension == d {
			units := make([]Unit, len(row.units))
			for i, text := range row.units {
				units[i] = MustUnit(text)
			}
			return units
		}
	}
	return nil
}

// power multiplies the exponents by n/2.
func (d Dimension) power(halves int) Dimension {
	scale := func(e int8) int8 { return int8(int(e) * halves / 2) }
	return Dimension{scale(d.angle), scale(d.length), scale(d.mass), scale(d.time), scale(d.current), scale(d.temperature), d.absolute}
}

func (d Dimension) times(o Dimension) Dimension {
	return Dimension{d.angle + o.angle, d.length + o.length, d.mass + o.mass, d.time + o.time, d.current + o.current,
		d.temperature + o.temperature, d.absolute || o.absolute}
}
