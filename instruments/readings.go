package instruments

import (
	"strings"

	"proofrate/limits/quantity"
)

// ReadingKind is one row of the table of readings that guards, steps and recordings may name.
type ReadingKind struct {
	Name  string
	Unit  quantity.Unit // in which expressions and recordings give it
	Bench bool          // of the bench as a whole, else of a slot
	Doc   string
}

// ReadingKinds is the table. A meter's reading is "<name>.value", of a slot, in the unit of its profile.
var ReadingKinds = []ReadingKind{
	{"table.rate", quantity.MustUnit("deg/s"), true, "measured rate of the table"},
	{"table.position", quantity.MustUnit("deg"), true, "measured angle of the table, whole turns counted"},
	{"chamber.temperature", quantity.MustUnit("degC"), true, "temperature of the chamber's air"},
	{"supply.voltage", quantity.MustUnit("V"), false, "voltage at the slot's supply"},
	{"supply.current", quantity.MustUnit("A"), false, "current into the slot"},
	{"gyro.rate", quantity.MustUnit("deg/s"), false, "newest rate that the gyro sent, at its nominal scale factor"},
	{"gyro.temperature", quantity.MustUnit("degC"), false, "temperature that the gyro sent"},
	{"gyro.status", quantity.MustUnit("1"), false, "status word that the gyro sent"},
}

// ReadingOf finds a reading's row. A meter's reading is not in the table: its kind has a zero unit.
func ReadingOf(name string) (ReadingKind, bool) {
	for _, kind := range ReadingKinds {
		if kind.Name == name {
			return kind, true
		}
	}
	if meter, ok := strings.CutSuffix(name, ".value"); ok && meter != "" {
		return ReadingKind{Name: name, Doc: "value of meter " + meter}, true
	}
	return ReadingKind{}, false
}
