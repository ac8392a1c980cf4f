package reduce

import (
	"context"

	"proofrate/limits/quantity"
	"proofrate/results/recording"
)

// Bench is what the bench file says, as one gyro needs it.
type Bench struct {
	Latitude   float64 // rad
	AxisUp     float64 // component of the gyro's input axis on local up, sense included
	AxisNorth  float64
	AxisEast   float64
	EarthRate  float64 // rad/s on the input axis, where it is given instead of an attitude
	AxisU      float64 // rad: standard uncertainty of the table axis' direction, each of two directions
	AttitudeU  float64 // rad: of the gyro's input axis to the table's
	Sense      float64 // +1 or -1: the input axis along or against the table's
	Radius     float64 // m from the table's axis
	Creep      float64 // rad/s: half-width of possible creep at position hold
	TableRate  Calibration
	Instrument string // the table's name, which its lines in a budget share
	Slot       string // the gyro's place, whose attitude its figures share
}

// Calibration is a certificate's entry as the budget uses it; relative numbers.
type Calibration struct {
	Correction float64 // to be added to a reading, relative to it
	U          float64 // standard, drift included
}

// Gyro is what the procedure says of the gyro.
type Gyro struct {
	Family, Output          string
	Range                   float64 // rad/s
	Polarity                float64 // +1 or -1
	AccelerationSensitivity float64 // rad/s per m/s^2: standard uncertainty, each axis
}

// Options are what a figure may state.
type Options struct {
	Measurand string  // sample or population
	Tau       float64 // s
	Relative  string  // range or reading
	Least     float64 // rad/s
	Unscaled  bool    // the raw minimum of the Allan curve
}

// Input is what a method reduces.
type Input struct {
	Bench       Bench
	Gyro        Gyro
	Recordings  []*recording.Recording // in bench time order
	Noise       []*recording.Recording // at rest: what the slow noise is fitted from, where the method asks for it
	Options     Options
	ScaleFactor *quantity.Measured // relative scale-factor error, where the figure names one
	Seed        uint64
}

// Method is one entry of the catalogue.
type Method struct {
	Name      string
	Doc       string
	Source    string        // published
	Unit      quantity.Unit // in which Reduce answers
	Options   []string      // keys that a figure may state beside those of all figures
	Needs     []string      // labels that must differ between the recordings of an element
	Several   bool          // takes several recordings
	Measurand bool          // must be told sample or population
	Output    string        // "angle": only for such gyros; "" for all
	Reduce    func(ctx context.Context, in Input) quantity.Measured
}

var (
	radPerS  = quantity.MustUnit("rad/s")
	ratio    = quantity.MustUnit("1")
	walk     = quantity.MustUnit("rad/s/sqrt(Hz)") // rad/sqrt(s)
	rateWalk = quantity.MustUnit("rad/s/sqrt(s)")
	radian   = quantity.MustUnit("rad")
)

// Catalogue is the table of figures.
func Catalogue() []Method { return catalogue }

// Find gives a method by name.
func Find(name string) (Method, bool) {
	for _, m := range catalogue {
		if m.Name == name {
			return m, true
		}
	}
	return Method{}, false
}

// Names are the names of the catalogue.
func Names() []string {
	names := make([]string, len(catalogue))
	for i, m := range catalogue {
		names[i] = m.Name
	}
	return names
}
