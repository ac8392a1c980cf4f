package bench

import (
	"proofrate/limits/document"
	"proofrate/limits/quantity"
)

// The tables of keys of a bench file: the loader, its suggestions and the reference page come from them.

var siteTable = &document.Table{
	Name: "site",
	Doc:  "where the bench stands, for the Earth rate on the input axes",
	Keys: []document.Key{
		{Name: "latitude", Kind: document.Quantity, Dimension: &quantity.Angle, Required: true, Doc: "geographic latitude, north positive"},
		{Name: "gravity", Kind: document.Quantity, Dimension: &quantity.Acceleration, Required: true, Doc: "local acceleration of gravity"},
	},
}

var calibrationTable = &document.Table{
	Name: "calibration",
	Doc:  "one reading's line of an instrument's certificate; correction, U and drift are relative or in the reading's own dimension",
	Keys: []document.Key{
		{Name: "of", Kind: document.Text, Required: true, Doc: "the reading: table.rate"},
		{Name: "certificate", Kind: document.Text, Required: true, Doc: "its number"},
		{Name: "laboratory", Kind: document.Text, Required: true, Doc: "who calibrated"},
		{Name: "date", Kind: document.Text, Required: true, Doc: "of the calibration: 2026-03-01"},
		{Name: "due", Kind: document.Text, Required: true, Doc: "when the next is due: 2027-03-01"},
		{Name: "correction", Kind: document.Quantity, Required: true, Doc: "applied to what is read"},
		{Name: "U", Kind: document.Quantity, Required: true, Doc: "expanded uncertainty of the correction"},
		{Name: "k", Kind: document.Number, Required: true, Doc: "coverage factor of U"},
		{Name: "drift", Kind: document.Quantity, Required: true, Doc: "standard uncertainty for the time since the calibration"},
	},
}

var instrumentTable = &document.Table{
	Name: "instrument",
	Doc:  "one instrument, under a name of the author's choice",
	Keys: []document.Key{
		{Name: "profile", Kind: document.Text, Required: true, Doc: "a shipped profile's name, or a file, from the bench file's folder"},
		{Name: "link", Kind: document.Text, Required: true, Doc: "serial:PATH, tcp:HOST:PORT or virtual:ENDPOINT"},
		{Name: "calibrations", Kind: document.ListOf, Of: calibrationTable, Doc: "its certificate, reading by reading"},
	},
}

var tableTable = &document.Table{
	Name: "table",
	Doc:  "the rate table as it stands",
	Keys: []document.Key{
		{Name: "instrument", Kind: document.Text, Required: true, Doc: "which instrument turns it"},
		{Name: "axis", Kind: document.Any, Required: true, Doc: "direction of its axis, about which a positive rate is right-handed: up, down, north, south, east, west, or three numbers east, north, up"},
		{Name: "axis-uncertainty", Kind: document.Quantity, Dimension: &quantity.Angle, Required: true, Doc: "standard uncertainty of the axis' tilt, about each of two directions"},
		{Name: "max-rate", Kind: document.Quantity, Dimension: &quantity.AngularRate, Required: true, Doc: "greatest rate allowed on this bench"},
		{Name: "max-acceleration", Kind: document.Quantity, Dimension: &quantity.AngularAcceleration, Required: true, Doc: "greatest acceleration allowed on this bench, and the one used"},
		{Name: "creep", Kind: document.Quantity, Dimension: &quantity.AngularRate, Required: true, Doc: "greatest rate to be expected at position hold"},
	},
}

var chamberTable = &document.Table{
	Name: "chamber",
	Doc:  "the thermal chamber",
	Keys: []document.Key{
		{Name: "instrument", Kind: document.Text, Required: true, Doc: "which instrument heats and cools it"},
		{Name: "range", Kind: document.Quantities, Dimension: &quantity.Temperature, Required: true, Doc: "lowest and highest temperature allowed on this bench: -40 85 degC"},
		{Name: "ramp", Kind: document.Quantity, Dimension: &quantity.TemperatureRate, Required: true, Doc: "the ramp it keeps, for estimates of duration"},
	},
}

var slotTable = &document.Table{
	Name: "slot",
	Doc:  "a place on the fixture for one gyro, under a name of the author's choice",
	Keys: []document.Key{
		{Name: "gyro", Kind: document.Text, Required: true, Doc: "which instrument reads the gyro"},
		{Name: "sense", Kind: document.Choice, Choices: []string{"+", "-"}, Required: true, Doc: "the gyro's input axis along (+) or against (-) the table's axis"},
		{Name: "radius", Kind: document.Quantity, Dimension: &quantity.Length, Required: true, Doc: "of the gyro from the table's axis"},
		{Name: "attitude-uncertainty", Kind: document.Quantity, Dimension: &quantity.Angle, Required: true, Doc: "standard uncertainty of the input axis' angle to the table's axis, in each of two directions"},
		{Name: "supply", Kind: document.Text, Required: true, Doc: "which instrument feeds it"},
		{Name: "channel", Kind: document.Integer, Doc: "which of the supply's channels, if it has several"},
		{Name: "max-voltage", Kind: document.Quantity, Dimension: &quantity.Voltage, Required: true, Doc: "greatest voltage allowed at this slot"},
		{Name: "max-current", Kind: document.Quantity, Dimension: &quantity.Current, Required: true, Doc: "greatest current allowed at this slot"},
		{Name: "meters", Kind: document.Words, Doc: "instruments that read something of this slot, each as <name>.value"},
	},
}

var virtualGyroTable = &document.Table{
	Name: "virtual gyro",
	Doc:  "the virtual gyro in one slot",
	Keys: []document.Key{
		{Name: "part", Kind: document.Text, Required: true, Doc: "its part number"},
		{Name: "serial", Kind: document.Text, Required: true, Doc: "its serial number"},
		{Name: "population", Kind: document.Text, Required: true, Doc: "from which it is drawn"},
		{Name: "overrides", Kind: document.MapOf, Of: overridesTable, Doc: "parameters that are set and not drawn: {nonlinearity: 180 ppm}"},
	},
}

var virtualTable = &document.Table{
	Name: "virtual",
	Doc:  "the world behind a bench with no hardware",
	Keys: []document.Key{
		{Name: "ambient", Kind: document.Quantity, Dimension: &quantity.Temperature, Required: true, Doc: "temperature of the hall"},
		{Name: "gyros", Kind: document.MapOf, Free: virtualGyroTable, Required: true, Doc: "by slot"},
	},
}

// Table is the table of keys of a bench file.
var Table = &document.Table{
	Name: "bench",
	Doc:  "one station: its site, instruments, table, chamber and slots",
	Keys: []document.Key{
		{Name: "bench", Kind: document.Name, Required: true, Doc: "the bench's name"},
		{Name: "station", Kind: document.Name, Required: true, Doc: "names the chain of the station's ledger"},
		{Name: "site", Kind: document.MapOf, Of: siteTable, Required: true, Doc: siteTable.Doc},
		{Name: "pace", Kind: document.Number, Doc: "of a virtual bench that is offered on ports: its seconds in a second of the wall"},
		{Name: "instruments", Kind: document.MapOf, Free: instrumentTable, Required: true, Doc: "by name: T1"},
		{Name: "table", Kind: document.MapOf, Of: tableTable, Doc: tableTable.Doc},
		{Name: "chamber", Kind: document.MapOf, Of: chamberTable, Doc: chamberTable.Doc},
		{Name: "slots", Kind: document.MapOf, Free: slotTable, Required: true, Doc: "by name: 1"},
		{Name: "virtual", Kind: document.MapOf, Of: virtualTable, Doc: virtualTable.Doc},
	},
}
