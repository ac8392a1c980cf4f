package virtual

import (
	"proofrate/limits/quantity"
)

// Family is how a gyro senses rotation; "" is unset.
type Family string

const (
	Optical      Family = "optical"       // Sagnac phase in a fibre coil
	Vibratory    Family = "vibratory"     // Coriolis force on a driven mass
	SpinningMass Family = "spinning-mass" // angular momentum against torsion bars
)

// Parameters are the coefficients of one gyro, in SI (rad, s, K, m, kg, V, A). The reference temperature is 23 degC.
//
//	y = S(T) [ w + nl(w) ] + b,  b = Bias + b_on + BiasT dT + BiasT2 dT^2 + BiasRate dT/dt + WarmUp exp(-t/WarmUpTime) + B_g . f
//
// with the family's own parts of S and b; see optical.go, vibratory.go and spinning.go. Source of the terms: IEEE Std 528.
type Parameters struct {
	Polarity   float64 // of the output: +1 or -1
	Range      float64 // rad/s
	Saturation float64 // of the range
	StartUp    float64 // s

	ScaleFactorError float64 // S/S_nom - 1 at the reference temperature
	ScaleFactorT     float64 // 1/K
	Nonlinearity     float64 // cubic: largest deviation, of the range, from the line through points at 0, 0.2, 0.5 and 1 of the range, both signs
	FifthOrder       float64 // likewise, of the fifth power
	Asymmetry        float64 // (S+ - S-)/S

	Bias, TurnOn, WarmUp, WarmUpTime                        float64 // rad/s; TurnOn a standard deviation; s
	BiasT, BiasT2, BiasRate                                 float64 // rad/s/K, rad/s/K^2, rad/s/(K/s)
	AccelerationInput, AccelerationRadial, AccelerationTang float64 // rad/s/(m/s^2)
	N, B, K, Ramp                                           float64 // rad/sqrt(s), rad/s, rad/s/sqrt(s), rad/s/s
	Lag, TemperatureOffset                                  float64 // s; K, of the gyro's own thermometer
	Voltage, Current, Inrush, InrushTime                    float64 // V nominal; A running; A more at power-on, and its decay in s

	FibreLength, CoilDiameter, Wavelength    float64 // m
	WavelengthT, CoilExpansion               float64 // 1/K
	DeadBand                                 float64 // rad/s, half-width
	DriveFrequency, DriveAmplitude           float64 // Hz, m
	DriveQuality                             float64
	DriveFrequencyT, DriveAmplitudeT         float64 // 1/K
	Quadrature                               float64 // rad/s
	DemodulationPhase, DemodulationPhaseT    float64 // rad, rad/K
	WheelInertia, GimbalInertia              float64 // kg m^2
	WheelFrequency, GimbalFrequency, Damping float64 // Hz, Hz, of critical
	TorsionT                                 float64 // 1/K, of the bars' stiffness
	RunDown                                  float64 // s
	Hysteresis                               float64 // of the range
}

// parameter is one row of the table of parameters, which populations, overrides and the documentation are read from.
type parameter struct {
	name     string
	unit     quantity.Unit // gives the dimension, and the documentation an example
	families []Family      // nil: all
	positive bool          // must be above zero
	optional bool          // zero unless given
	doc      string
	at       func(*Parameters) *float64
}

var (
	perRange   = quantity.MustUnit("ppm")
	perKelvin  = quantity.MustUnit("ppm/K")
	rateUnit   = quantity.MustUnit("deg/h")
	secondUnit = quantity.MustUnit("s")
	forceUnit  = quantity.MustUnit("deg/h/g0")
	plain      = quantity.MustUnit("1")
	inertia    = quantity.MustUnit("kg*m^2")

	optical   = []Family{Optical}
	vibratory = []Family{Vibratory}
	spinning  = []Family{SpinningMass}
)

var parameters = []parameter{
	{"polarity", plain, nil, false, false, "sign of the output for a positive rate about the input axis: 1 or -1", func(p *Parameters) *float64 { return &p.Polarity }},
	{"range", quantity.MustUnit("deg/s"), nil, true, false, "rate up to which the gyro is specified", func(p *Parameters) *float64 { return &p.Range }},
	{"saturation", plain, nil, true, false, "rate at which the output stops growing, of the range; at least 1.1", func(p *Parameters) *float64 { return &p.Saturation }},
	{"start-up", secondUnit, nil, true, false, "time from power-on until the output is valid; of a spinning mass, from standstill", func(p *Parameters) *float64 { return &p.StartUp }},
	{"scale-factor-error", perRange, nil, false, false, "S/S_nom - 1 at 23 degC", func(p *Parameters) *float64 { return &p.ScaleFactorError }},
	{"scale-factor-temperature", perKelvin, nil, false, true, "change of the scale factor over temperature, beside what the family's physics makes", func(p *Parameters) *float64 { return &p.ScaleFactorT }},
	{"nonlinearity", perRange, nil, false, true, "cubic: largest deviation, of the range, from the straight line through equally weighted points at 0, 0.2, 0.5 and 1 of the range, both signs", func(p *Parameters) *float64 { return &p.Nonlinearity }},
	{"fifth-order", perRange, nil, false, true, "the same, of a fifth power", func(p *Parameters) *float64 { return &p.FifthOrder }},
	{"asymmetry", perRange, nil, false, true, "(S+ - S-)/S", func(p *Parameters) *float64 { return &p.Asymmetry }},
	{"bias", rateUnit, nil, false, false, "output at no rate, 23 degC", func(p *Parameters) *float64 { return &p.Bias }},
	{"turn-on", rateUnit, nil, false, true, "standard deviation of the bias from one turn-on to the next", func(p *Parameters) *float64 { return &p.TurnOn }},
	{"warm-up", rateUnit, nil, false, true, "bias at power-on that dies away", func(p *Parameters) *float64 { return &p.WarmUp }},
	{"warm-up-time", secondUnit, nil, true, false, "its time constant", func(p *Parameters) *float64 { return &p.WarmUpTime }},
	{"bias-temperature", quantity.MustUnit("deg/h/K"), nil, false, true, "bias over temperature", func(p *Parameters) *float64 { return &p.BiasT }},
	{"bias-temperature-square", quantity.MustUnit("deg/h/K^2"), nil, false, true, "bias over temperature, quadratic", func(p *Parameters) *float64 { return &p.BiasT2 }},
	{"bias-temperature-rate", quantity.MustUnit("deg/h/(K/min)"), nil, false, true, "bias while the temperature changes", func(p *Parameters) *float64 { return &p.BiasRate }},
	{"acceleration-input", forceUnit, nil, false, true, "drift for acceleration along the input axis", func(p *Parameters) *float64 { return &p.AccelerationInput }},
	{"acceleration-radial", forceUnit, nil, false, true, "drift for acceleration along the table's radius", func(p *Parameters) *float64 { return &p.AccelerationRadial }},
	{"acceleration-tangential", forceUnit, nil, false, true, "drift for acceleration across both", func(p *Parameters) *float64 { return &p.AccelerationTang }},
	{"angle-random-walk", quantity.MustUnit("deg/sqrt(h)"), nil, true, false, "coefficient N", func(p *Parameters) *float64 { return &p.N }},
	{"bias-instability", rateUnit, nil, true, false, "coefficient B of flicker noise", func(p *Parameters) *float64 { return &p.B }},
	{"rate-random-walk", quantity.MustUnit("deg/h/sqrt(h)"), nil, false, true, "coefficient K", func(p *Parameters) *float64 { return &p.K }},
	{"rate-ramp", quantity.MustUnit("deg/h/h"), nil, false, true, "steady change of the bias", func(p *Parameters) *float64 { return &p.Ramp }},
	{"thermal-lag", secondUnit, nil, true, false, "time constant of the gyro behind the fixture", func(p *Parameters) *float64 { return &p.Lag }},
	{"temperature-offset", quantity.MustUnit("K"), nil, false, true, "error of the gyro's own thermometer", func(p *Parameters) *float64 { return &p.TemperatureOffset }},
	{"supply-voltage", quantity.MustUnit("V"), nil, true, false, "nominal; the gyro works within a tenth of it", func(p *Parameters) *float64 { return &p.Voltage }},
	{"supply-current", quantity.MustUnit("A"), nil, true, false, "current in operation", func(p *Parameters) *float64 { return &p.Current }},
	{"inrush", quantity.MustUnit("A"), nil, false, true, "current beyond that at power-on", func(p *Parameters) *float64 { return &p.Inrush }},
	{"inrush-time", secondUnit, nil, true, false, "its time constant", func(p *Parameters) *float64 { return &p.InrushTime }},

	{"fibre-length", quantity.MustUnit("m"), optical, true, false, "length of fibre on the coil", func(p *Parameters) *float64 { return &p.FibreLength }},
	{"coil-diameter", quantity.MustUnit("m"), optical, true, false, "mean diameter of the coil", func(p *Parameters) *float64 { return &p.CoilDiameter }},
	{"wavelength", quantity.MustUnit("nm"), optical, true, false, "of the source, in vacuum", func(p *Parameters) *float64 { return &p.Wavelength }},
	{"wavelength-temperature", perKelvin, optical, false, true, "drift of the wavelength over temperature", func(p *Parameters) *float64 { return &p.WavelengthT }},
	{"coil-expansion", perKelvin, optical, false, true, "linear expansion of coil and fibre", func(p *Parameters) *float64 { return &p.CoilExpansion }},
	{"dead-band", rateUnit, optical, false, true, "half-width of the rates that read as none", func(p *Parameters) *float64 { return &p.DeadBand }},

	{"drive-frequency", quantity.MustUnit("kHz"), vibratory, true, false, "of the driven mass", func(p *Parameters) *float64 { return &p.DriveFrequency }},
	{"drive-amplitude", quantity.MustUnit("um"), vibratory, true, false, "of the driven mass", func(p *Parameters) *float64 { return &p.DriveAmplitude }},
	{"drive-quality", plain, vibratory, true, false, "quality factor of the drive, which sets how long it builds up", func(p *Parameters) *float64 { return &p.DriveQuality }},
	{"drive-frequency-temperature", perKelvin, vibratory, false, true, "frequency over temperature", func(p *Parameters) *float64 { return &p.DriveFrequencyT }},
	{"drive-amplitude-temperature", perKelvin, vibratory, false, true, "amplitude over temperature", func(p *Parameters) *float64 { return &p.DriveAmplitudeT }},
	{"quadrature", quantity.MustUnit("deg/s"), vibratory, false, true, "motion of the drive that leaks into the sense axis, as a rate", func(p *Parameters) *float64 { return &p.Quadrature }},
	{"demodulation-phase", quantity.MustUnit("mrad"), vibratory, false, true, "phase error that lets quadrature through, 23 degC", func(p *Parameters) *float64 { return &p.DemodulationPhase }},
	{"demodulation-phase-temperature", quantity.MustUnit("urad/K"), vibratory, false, true, "phase error over temperature", func(p *Parameters) *float64 { return &p.DemodulationPhaseT }},

	{"wheel-inertia", inertia, spinning, true, false, "of the wheel about its axis", func(p *Parameters) *float64 { return &p.WheelInertia }},
	{"wheel-frequency", quantity.MustUnit("Hz"), spinning, true, false, "turns of the wheel a second", func(p *Parameters) *float64 { return &p.WheelFrequency }},
	{"gimbal-inertia", inertia, spinning, true, false, "of the gimbal about the output axis", func(p *Parameters) *float64 { return &p.GimbalInertia }},
	{"gimbal-frequency", quantity.MustUnit("Hz"), spinning, true, false, "natural frequency of the gimbal on its torsion bars, which gives their stiffness", func(p *Parameters) *float64 { return &p.GimbalFrequency }},
	{"damping", plain, spinning, true, false, "of the gimbal, of critical; below 1", func(p *Parameters) *float64 { return &p.Damping }},
	{"torsion-temperature", perKelvin, spinning, false, true, "stiffness of the torsion bars over temperature", func(p *Parameters) *float64 { return &p.TorsionT }},
	{"run-down", secondUnit, spinning, true, false, "time constant of the wheel running down", func(p *Parameters) *float64 { return &p.RunDown }},
	{"hysteresis", perRange, spinning, false, true, "distance of the two branches of a full traverse, of the range", func(p *Parameters) *float64 { return &p.Hysteresis }},
}

// of says whether the parameter belongs to a family.
func (p *parameter) of(f Family) bool {
	for _, own := range p.families {
		if own == f {
			return true
		}
	}
	return p.families == nil
}
