package procedures

import (
	"time"

	"proofrate/instruments"
	"proofrate/limits"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
	"proofrate/results/recording"
	"proofrate/results/reduce"
)

// Options say for what a procedure is planned.
type Options struct {
	Part       string            // "" plans for any part, with the parameters as they stand
	Parameters map[string]string // other values, by name
}

// Plan is a procedure for one part, unrolled.
type Plan struct {
	Name, Title, Revision, Specification string
	Digest                               string // "sha256:..." of Text
	Text                                 []byte
	File                                 *source.File
	Part                                 string
	Gyro                                 GyroSpec
	Needs                                Needs
	Parameters                           []Parameter
	Guards                               []Guard
	Steps                                []Step
	Figures                              []Figure
	Limits                               []Limit

	expected []expected             // every recording that the steps make, in order
	places   map[string]source.Span // of the document's own keys
}

// GyroSpec is what the procedure says of the gyro.
type GyroSpec struct {
	Family, Output          string
	Range, SampleRate       quantity.Value
	Polarity                float64 // +1 or -1
	AccelerationSensitivity quantity.Value
}

// Needs is what a bench must be able to do. A value that is not stated is zero, in its own unit.
type Needs struct {
	TableRate, ChamberLow, ChamberHigh, Voltage, Current quantity.Value
	Table, Chamber                                       bool // stated
}

// Parameter is a named value; Overridden tells one that was set for this run.
type Parameter struct {
	Name       string
	Value      quantity.Value
	Overridden bool
}

// Guard is a condition watched throughout the run.
type Guard struct {
	Text     string
	Span     source.Span
	Check    *limits.Guard
	Bench    bool // over readings of the bench, else over a slot's
	Tolerate time.Duration
}

// Step is one action, with its loops' values as labels.
type Step struct {
	Action Action
	Stage  string // "over temperature / sweep"
	Number int    // from 1, in order of the beginning
	Labels recording.Labels
	Leg    string // "up" or "down"
	Text   string // "turn 125 deg/s"
	Span   source.Span
}

// Action is what a step does.
type Action interface{ action() }

// The actions.
type (
	// Soak sets the chamber and waits until Of (the chamber's temperature if "") has settled.
	Soak struct {
		Target       quantity.Value
		Of           string
		Band, Drift  quantity.Value
		Hold, AtMost time.Duration
	}
	// Settle waits until a reading has settled. A zero Drift is not judged.
	Settle struct {
		Reading             string
		Target, Band, Drift quantity.Value
		Hold, AtMost        time.Duration
	}
	// Turn turns the table; rate zero is position hold.
	Turn struct{ Rate quantity.Value }
	// Hold brings the table to rest.
	Hold struct{}
	// Position brings the table to an angle.
	Position struct{ Angle quantity.Value }
	// Power switches all supplies, or one slot's.
	Power struct {
		On   bool
		Slot instruments.SlotID
	}
	// Wait lets time pass.
	Wait struct{ For time.Duration }
	// Record records every live gyro for a time, or while inner steps go on.
	Record struct {
		Name        string
		For         time.Duration // whole turns are worked out already
		FromPowerOn bool
		While       []Step
	}
	// Ask asks the operator.
	Ask struct {
		Prompt, Kind string // confirmation, number, choice, attitude
		Unit         quantity.Unit
		Choices      []string
	}
	// Park brings the bench where it may be left.
	Park struct{ Temperature quantity.Value }
)

func (Soak) action()     {}
func (Settle) action()   {}
func (Turn) action()     {}
func (Hold) action()     {}
func (Position) action() {}
func (Power) action()    {}
func (Wait) action()     {}
func (Record) action()   {}
func (Ask) action()      {}
func (Park) action()     {}

// expected is a recording that the steps will make.
type expected struct {
	name   string
	labels recording.Labels
	leg    string
	rest   time.Duration // of a recording at rest, its length; else 0
	span   source.Span
}

// key tells recordings of a run apart: by name and labels, nominal values and visits.
func (e expected) key() string { return recordingKey(e.name, e.labels) }

func recordingKey(name string, labels recording.Labels) string {
	return name + "|" + elementKey(labels)
}

// Figure is a figure with its elements worked out: of a method, or of a formula.
type Figure struct {
	Name        string
	Method      reduce.Method // with the zero Name where there is a Formula
	Options     reduce.Options
	ScaleFactor string // the figure that it takes the scale factor from; "" for none
	Formula     *limits.Formula
	Unit        quantity.Unit
	Span        source.Span
	Elements    []ElementSpec

	labels []string // that index the series
}

// ElementSpec is one element: its labels, and the recordings it is reduced from.
type ElementSpec struct {
	Labels     recording.Labels
	recordings []int // into the plan's expected recordings
	noise      int   // the one at rest that tells the gyro's noise, or none
}

// none stands for no recording.
const none = -1

// Limit is a requirement with its rule.
type Limit struct {
	Clause, Require string
	Rule            limits.Rule
	EndsTrial       bool
	Span            source.Span

	parts []limitPart
}

// limitPart is a limit over some elements: all, or those with the keys.
type limitPart struct {
	limit *limits.Limit
	only  map[string]bool // nil: all
}
