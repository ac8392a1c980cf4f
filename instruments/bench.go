package instruments

import "proofrate/limits/quantity"

// Bench is a station as opened. Whoever opened it closes it.
type Bench struct {
	Description *Description
	Clock       Clock
	Table       Table   // nil if the bench has none
	Chamber     Chamber // nil if the bench has none
	Slots       []Slot
	Identities  []Identified // every instrument, as identified at the opening
}

// Slot is a place on the fixture with what serves it.
type Slot struct {
	ID     SlotID
	Gyro   Gyro
	Supply Supply
	Meters map[string]Instrument // by name; reading "<name>.value"
}

// Identified is an instrument of the bench and what it said of itself.
type Identified struct {
	Name     string // of the bench file: "T1"
	Identity Identity
}

// Description is a station as its file describes it.
type Description struct {
	Station     string // names the ledger's chain
	Name        string
	File        string
	Text        []byte // the bench file
	Digest      string // "sha256:..." of Text
	Virtual     bool   // no hardware behind it
	Site        Site
	Table       *TableDescription
	Chamber     *ChamberDescription
	Slots       []SlotDescription
	Instruments []InstrumentDescription
	Pace        float64 // bench seconds a wall second; 1 for hardware
}

// Site is where the bench stands. Source of the Earth rate: WGS 84, 15.041067 deg/h.
type Site struct {
	Latitude quantity.Value // north positive
	Gravity  quantity.Value // local, m/s^2
}

// Vector is east, north, up.
type Vector [3]float64

// TableDescription states the table's abilities and how its axis stands.
type TableDescription struct {
	Instrument      string
	Axis            Vector         // direction of the axis; positive rate is right-handed about it
	AxisUncertainty quantity.Value // standard uncertainty of its tilt, an angle, about each of two directions
	MaxRate         quantity.Value
	MaxAcceleration quantity.Value
	Creep           quantity.Value // greatest rate to be expected at position hold
	CanPosition     bool
	CanOscillate    bool
}

// ChamberDescription states the chamber's abilities.
type ChamberDescription struct {
	Instrument string
	Low, High  quantity.Value
	Ramp       quantity.Value // K/min
}

// SlotDescription states how a gyro sits and what feeds and reads it.
type SlotDescription struct {
	ID                  SlotID
	Sense               float64        // +1 or -1: the gyro's input axis along or against the table's
	Radius              quantity.Value // of the gyro from the table's axis
	AttitudeUncertainty quantity.Value // standard uncertainty of the input axis' angle to the table's axis, each of two directions
	Gyro                string         // instrument name
	Supply              string         // instrument name
	SupplyChannel       int            // 0: the instrument has one
	MaxVoltage          quantity.Value
	MaxCurrent          quantity.Value
	Readings            []string // what can be read here: supply.current, gyro.temperature, "<meter>.value"
	Channels            []Channel
	SampleRate          quantity.Value
	FrameCounter        bool
}

// InstrumentDescription is one instrument of the bench file.
type InstrumentDescription struct {
	Name          string
	Profile       string // name or file
	ProfileDigest string
	ProfileText   []byte
	Link          string // "serial:/dev/ttyUSB0", "tcp:host:port", "virtual:table"
	Roles         []string
	Calibrations  []Calibration
}

// Calibration is one entry of an instrument's certificate for one of its readings. The correction is applied, U/k and
// the drift enter the budget. All three are relative (a Ratio) or in the reading's own dimension.
type Calibration struct {
	Reading     string // "table.rate"
	Certificate string
	Laboratory  string
	Date, Due   string // 2026-03-01
	Correction  quantity.Value
	U           quantity.Value
	K           float64
	Drift       quantity.Value // standard uncertainty for the time since the calibration
}
