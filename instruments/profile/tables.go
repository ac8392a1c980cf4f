package profile

import (
	"proofrate/instruments/link"
	"proofrate/limits/document"
	"proofrate/limits/quantity"
)

// families and roles are what a profile may name.
var (
	families = []string{"lines", "registers", "frames"}
	roles    = []string{"table", "chamber", "supply", "gyro", "meter"}
)

var profileTable = document.Table{
	Name: "profile", Doc: "how one instrument model is spoken to",
	Keys: []document.Key{
		{Name: "profile", Kind: document.Name, Required: true, Doc: "the profile's name"},
		{Name: "title", Kind: document.Text, Required: true, Doc: "the instrument, in a line"},
		{Name: "family", Kind: document.Choice, Choices: families, Required: true, Doc: "text lines, Modbus registers, or a stream of frames"},
		{Name: "roles", Kind: document.Words, Required: true, Doc: "what it can serve as: table, chamber, supply, gyro, meter"},
		{Name: "serial", Kind: document.MapOf, Of: &serialTable, Doc: "how a serial port is set"},
		{Name: "timeout", Kind: document.Quantity, Dimension: document.Dim(quantity.Time), Doc: "how long an answer may take; 1 s if not given"},
		{Name: "tries", Kind: document.Integer, Doc: "how often a question is asked before it counts as unanswered; 2 if not given"},
		{Name: "channels", Kind: document.Integer, Doc: "of a supply with several: how many"},
		{Name: "lines", Kind: document.MapOf, Of: &linesTable, Doc: "of family lines: how lines end and errors are asked for"},
		{Name: "registers", Kind: document.MapOf, Of: &registersTable, Doc: "of family registers: the device"},
		{Name: "frame", Kind: document.MapOf, Of: &frameTable, Doc: "of family frames: the frame"},
		{Name: "identify", Kind: document.Any, Doc: "how the instrument is asked who it is"},
		{Name: "actions", Kind: document.Any, Doc: "by name: how each action of the role is spoken"},
		{Name: "readings", Kind: document.Any, Doc: "by name: how each reading is asked for"},
	},
}

var serialTable = document.Table{
	Name: "serial", Doc: "settings of a serial port",
	Keys: []document.Key{
		{Name: "baud", Kind: document.Integer, Required: true, Doc: "bits a second"},
		{Name: "data-bits", Kind: document.Integer, Doc: "8 if not given"},
		{Name: "parity", Kind: document.Choice, Choices: []string{"none", "odd", "even"}, Doc: "none if not given"},
		{Name: "stop-bits", Kind: document.Integer, Doc: "1 if not given"},
		{Name: "settle", Kind: document.Quantity, Dimension: document.Dim(quantity.Time), Doc: "waited for after opening, which resets some instruments"},
	},
}

var linesTable = document.Table{
	Name: "lines", Doc: "how lines are spoken",
	Keys: []document.Key{
		{Name: "end", Kind: document.Choice, Choices: []string{"CR LF", "LF", "CR"}, Required: true, Doc: "what ends a line, both ways"},
		{Name: "refusal", Kind: document.Text, Doc: "template of a line that refuses a request: {code} and {text}"},
		{Name: "error-query", Kind: document.MapOf, Of: &errorQueryTable, Doc: "asked after each action that has no reply"},
	},
}

var errorQueryTable = document.Table{
	Name: "error-query", Doc: "how the instrument's error queue is read",
	Keys: []document.Key{
		{Name: "send", Kind: document.Text, Required: true, Doc: "the question"},
		{Name: "reply", Kind: document.Text, Required: true, Doc: "template of the answer: {code} and {text}"},
		{Name: "good", Kind: document.Text, Required: true, Doc: "the code that says no error"},
	},
}

// lineTable is an action or a reading of family lines.
var lineTable = document.Table{
	Name: "line", Doc: "one exchange",
	Keys: []document.Key{
		{Name: "send", Kind: document.Any, Required: true, Doc: "template of the line, or a list of them: {rate +.3f deg/s} sends a value in a unit"},
		{Name: "reply", Kind: document.Text, Doc: "template of the answer: {value} captures a number, {any} passes over a word"},
		{Name: "unit", Kind: document.Text, Doc: "of a reading: unit of the number"},
	},
}

var registersTable = document.Table{
	Name: "registers", Doc: "a Modbus device",
	Keys: []document.Key{
		{Name: "device", Kind: document.Integer, Required: true, Doc: "its address, 1 to 247"},
		{Name: "framing", Kind: document.Choice, Choices: []string{"rtu", "tcp"}, Doc: "RTU frames with a checksum, or TCP frames with a header; rtu if not given"},
		{Name: "word-order", Kind: document.Choice, Choices: []string{"high-first", "low-first"}, Doc: "of 32-bit values; high-first if not given"},
	},
}

// registerTable is one register access: a reading, a part of the identity, or one write of an action.
var registerTable = document.Table{
	Name: "register", Doc: "one access",
	Keys: []document.Key{
		{Name: "holding", Kind: document.Integer, Doc: "address of a holding register"},
		{Name: "input", Kind: document.Integer, Doc: "address of an input register"},
		{Name: "as", Kind: document.Choice, Choices: []string{"int16", "uint16", "int32", "uint32"}, Required: true, Doc: "how the number is held"},
		{Name: "value", Kind: document.Name, Doc: "of an action: which of its values is written"},
		{Name: "constant", Kind: document.Integer, Doc: "of an action: a number to write"},
		{Name: "scale", Kind: document.Number, Doc: "what one count is worth, in the unit; 1 if not given"},
		{Name: "unit", Kind: document.Text, Doc: "unit of the number"},
	},
}

var frameTable = document.Table{
	Name: "frame", Doc: "a frame of a stream",
	Keys: []document.Key{
		{Name: "length", Kind: document.Integer, Required: true, Doc: "bytes, sync and checksum included"},
		{Name: "sync", Kind: document.Words, Required: true, Doc: "first bytes, in hexadecimal"},
		{Name: "byte-order", Kind: document.Choice, Choices: []string{"big", "little"}, Required: true, Doc: "of all numbers"},
		{Name: "rate", Kind: document.Quantity, Dimension: document.Dim(quantity.Frequency), Required: true, Doc: "frames a second"},
		{Name: "checksum", Kind: document.MapOf, Of: &checksumTable, Required: true, Doc: "how damage is found"},
		{Name: "counter", Kind: document.MapOf, Of: &fieldTable, Doc: "frame counter"},
		{Name: "valid", Kind: document.MapOf, Of: &fieldTable, Doc: "bit that marks a valid output"},
		{Name: "channels", Kind: document.Any, Required: true, Doc: "rate or angle (rate.x and so on for several axes)"},
		{Name: "readings", Kind: document.Any, Doc: "gyro.temperature, gyro.status"},
	},
}

var checksumTable = document.Table{
	Name: "checksum", Doc: "a named checksum",
	Keys: []document.Key{
		{Name: "is", Kind: document.Choice, Choices: checksumNames(), Required: true, Doc: "its name in the CRC catalogue, or a sum"},
		{Name: "over", Kind: document.Text, Required: true, Doc: "first and last byte that it covers, from 0"},
		{Name: "at", Kind: document.Integer, Required: true, Doc: "where it stands"},
	},
}

var fieldTable = document.Table{
	Name: "field", Doc: "a number in a frame",
	Keys: []document.Key{
		{Name: "at", Kind: document.Integer, Required: true, Doc: "its first byte, from 0"},
		{Name: "as", Kind: document.Choice, Choices: []string{"int8", "uint8", "int16", "uint16", "int24", "uint24", "int32", "uint32"}, Required: true, Doc: "how it is held"},
		{Name: "bit", Kind: document.Integer, Doc: "one bit of it, 0 the lowest"},
		{Name: "count", Kind: document.Quantity, Doc: "what one count is worth"},
		{Name: "scale", Kind: document.Number, Doc: "of a reading: what one count is worth, in the unit; 1 if not given"},
		{Name: "unit", Kind: document.Text, Doc: "of a reading: its unit"},
	},
}

// action is what a role can be told to do, with the values that it carries.
type action struct {
	role, name string
	required   bool
	values     []carried
}

type carried struct {
	name      string
	dimension quantity.Dimension
}

// actionTable is the table of them.
var actionTable = []action{
	{"table", "set-rate", true, []carried{{"rate", quantity.AngularRate}, {"acceleration", quantity.AngularAcceleration}}},
	{"table", "stop", true, nil},
	{"table", "go-to", false, []carried{{"position", quantity.Angle}}},
	{"table", "oscillate", false, []carried{{"amplitude", quantity.Angle}, {"frequency", quantity.Frequency}}},
	{"chamber", "set-temperature", true, []carried{{"temperature", quantity.Temperature}, {"ramp", quantity.TemperatureRate}}},
	{"chamber", "off", true, nil},
	{"supply", "set", true, []carried{{"voltage", quantity.Voltage}, {"current", quantity.Current}}},
	{"supply", "on", true, nil},
	{"supply", "off", true, nil},
}

// requiredReadings are those without which a role cannot be filled.
var requiredReadings = map[string][]string{
	"table": {"table.rate"}, "chamber": {"chamber.temperature"}, "supply": {"supply.voltage", "supply.current"},
}

var parities = map[string]link.Parity{"": link.ParityNone, "none": link.ParityNone, "odd": link.ParityOdd, "even": link.ParityEven}
