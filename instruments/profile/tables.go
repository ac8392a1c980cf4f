package profile

import (
	"slices"

	"proofrate/limits/document"
	"proofrate/limits/quantity"
)

// families and roles are what a profile may name.
var (
	families = []string{"lines", "registers", "frames"}
	roles    = []string{"table", "chamber", "supply", "gyro", "meter"}
)

// action is what a role can be told to do, with the values that it carries.
type action struct {
	role, name string
	required   bool
	values     []carried
}

// carried is a value of an action. One that is optional need not be sent: the instrument keeps its own then.
type carried struct {
	name      string
	dimension quantity.Dimension
	optional  bool
}

var actions = []action{
	{"table", "set-rate", true, []carried{{"rate", quantity.AngularRate, false}, {"acceleration", quantity.AngularAcceleration, true}}},
	{"table", "stop", true, nil},
	{"table", "go-to", false, []carried{{"position", quantity.Angle, false}}},
	{"table", "oscillate", false, []carried{{"amplitude", quantity.Angle, false}, {"frequency", quantity.Frequency, false}}},
	{"chamber", "set-temperature", true, []carried{{"temperature", quantity.Temperature, false}, {"ramp", quantity.TemperatureRate, true}}},
	{"chamber", "off", true, nil},
	{"supply", "set", true, []carried{{"voltage", quantity.Voltage, false}, {"current", quantity.Current, false}}},
	{"supply", "on", true, nil},
	{"supply", "off", true, nil},
}

// value finds one that the action carries.
func (a *action) value(name string) *carried {
	for i := range a.values {
		if a.values[i].name == name {
			return &a.values[i]
		}
	}
	return nil
}

func (a *action) valueNames() []string {
	var names []string
	for _, v := range a.values {
		names = append(names, v.name)
	}
	return names
}

// requiredReadings are those without which a role cannot be filled.
var requiredReadings = map[string][]string{
	"table": {"table.rate", "table.position"}, "chamber": {"chamber.temperature"}, "supply": {"supply.voltage", "supply.current"},
	"meter": {"value"},
}

// identityFields are what an instrument says of itself.
var identityFields = []string{"maker", "model", "serial", "firmware"}

// Tables are the tables of keys of a profile, the one of the whole document first.
var Tables = []*document.Table{&profileTable, &commandTable, &questionTable, &identityTable, &accessTable, &fieldTable}

var profileTable = document.Table{
	Name: "profile", Doc: "how one instrument model is spoken to",
	Keys: []document.Key{
		{Name: "profile", Kind: document.Name, Required: true, Doc: "the profile's name"},
		{Name: "title", Kind: document.Text, Required: true, Doc: "the instrument, in a line"},
		{Name: "family", Kind: document.Choice, Choices: families, Required: true, Doc: "text lines, Modbus registers, or a stream of frames"},
		{Name: "roles", Kind: document.Words, Required: true, Doc: "what it can serve as: table, chamber, supply, gyro, meter"},
		{Name: "serial", Kind: document.MapOf, Of: &serialTable, Doc: "how a serial port is set"},
		{Name: "timeout", Kind: document.Quantity, Dimension: document.Dim(quantity.Time), Doc: "how long an answer may take; 1 s if not given"},
		{Name: "tries", Kind: document.Integer, Doc: "how often a request is sent before it counts as unanswered, 1 to 10; 2 if not given"},
		{Name: "channels", Kind: document.Integer, Doc: "how many outputs a supply has, if it has several"},
		{Name: "limits", Kind: document.MapOf, Of: &limitsTable, Doc: "what the instrument can do; a value beyond is refused before anything is sent"},
		{Name: "lines", Kind: document.MapOf, Of: &linesTable, Doc: "of family lines: how lines end and errors are told"},
		{Name: "registers", Kind: document.MapOf, Of: &registersTable, Doc: "of family registers: the device"},
		{Name: "frame", Kind: document.MapOf, Of: &frameTable, Doc: "of family frames: the frame"},
		{Name: "identify", Kind: document.Any, Doc: "who the instrument is: of lines a question for an identity; of registers model, serial and firmware, each an access. If not given, the title stands for the model"},
		{Name: "actions", Kind: document.Any, Doc: "by name (set-rate, stop, go-to, oscillate; set-temperature, off; set, on, off): of lines a command, of registers a list of accesses"},
		{Name: "readings", Kind: document.Any, Doc: "by name (table.rate, table.position, chamber.temperature, supply.voltage, supply.current; of a meter value): of lines a question, of registers an access"},
	},
}

var serialTable = document.Table{
	Name: "serial", Doc: "settings of a serial port",
	Keys: []document.Key{
		{Name: "baud", Kind: document.Integer, Required: true, Doc: "bits a second"},
		{Name: "data-bits", Kind: document.Integer, Doc: "5 to 8; 8 if not given"},
		{Name: "parity", Kind: document.Choice, Choices: []string{"none", "odd", "even"}, Doc: "none if not given"},
		{Name: "stop-bits", Kind: document.Integer, Doc: "1 or 2; 1 if not given"},
		{Name: "settle", Kind: document.Quantity, Dimension: document.Dim(quantity.Time), Doc: "waited for after the opening, which resets some instruments; nothing if not given"},
	},
}

var limitsTable = document.Table{
	Name: "limits", Doc: "the least and the greatest of each value that the instrument takes: rate: -300 300 deg/s",
	Keys: limitKeys(),
}

func limitKeys() []document.Key {
	var keys []document.Key
	for _, a := range actions {
		for _, v := range a.values {
			keys = append(keys, document.Key{Name: v.name, Kind: document.Quantities, Dimension: document.Dim(v.dimension), Doc: "of a " + a.role + ", of action " + a.name})
		}
	}
	return keys
}

var linesTable = document.Table{
	Name: "lines", Doc: "how lines are spoken",
	Keys: []document.Key{
		{Name: "end", Kind: document.Choice, Choices: lineEndNames, Required: true, Doc: "what ends a line"},
		{Name: "answer-end", Kind: document.Choice, Choices: lineEndNames, Doc: "what ends an answer, if something else does"},
		{Name: "refusal", Kind: document.Text, Doc: "form of a line that refuses a request, with {code}, {text} and {any}"},
		{Name: "error-query", Kind: document.MapOf, Of: &errorQueryTable, Doc: "asked after each command that has no answer, until the queue of errors is empty"},
	},
}

var errorQueryTable = document.Table{
	Name: "error query", Doc: "how the instrument's queue of errors is read",
	Keys: []document.Key{
		{Name: "send", Kind: document.Text, Required: true, Doc: "the question"},
		{Name: "reply", Kind: document.Text, Doc: "form of the answer, with {code}, {text} and {any}"},
		{Name: "pattern", Kind: document.Text, Doc: "in place of reply: a regular expression with (?P<code>...)"},
		{Name: "good", Kind: document.Text, Required: true, Doc: "the code that says no error"},
	},
}

var commandTable = document.Table{
	Name: "command", Doc: "an action of family lines",
	Keys: []document.Key{
		{Name: "send", Kind: document.Any, Required: true, Doc: "form of the line, or a list of them; {rate +.3f deg/s} sends a value with three digits in that unit, {channel} the output's number"},
		{Name: "reply", Kind: document.Text, Doc: "form of the answer to each line; if neither it nor pattern is given, nothing answers"},
		{Name: "pattern", Kind: document.Text, Doc: "in place of reply: a regular expression, of the whole line"},
		{Name: "until", Kind: document.MapOf, Of: &untilTable, Doc: "a question that has to be answered so before the command counts as done"},
	},
}

var untilTable = document.Table{
	Name: "settling condition", Doc: "for what is over in a moment (a relay, an operation complete): the bench waits meanwhile",
	Keys: []document.Key{
		{Name: "send", Kind: document.Text, Required: true, Doc: "form of the question"},
		{Name: "reply", Kind: document.Text, Doc: "form of the answer that says done"},
		{Name: "pattern", Kind: document.Text, Doc: "in place of reply: a regular expression"},
		{Name: "every", Kind: document.Quantity, Dimension: document.Dim(quantity.Time), Doc: "between two questions; 100 ms if not given"},
		{Name: "at-most", Kind: document.Quantity, Dimension: document.Dim(quantity.Time), Required: true, Doc: "then the command has failed; 10 s at most"},
	},
}

var questionTable = document.Table{
	Name: "question", Doc: "a reading of family lines",
	Keys: []document.Key{
		{Name: "send", Kind: document.Text, Required: true, Doc: "form of the line; {channel} is the output's number"},
		{Name: "reply", Kind: document.Text, Doc: "form of the answer: {value} is the number, {any} is passed over"},
		{Name: "pattern", Kind: document.Text, Doc: "in place of reply: a regular expression with (?P<value>...), of the whole line"},
		{Name: "unit", Kind: document.Text, Required: true, Doc: "of the number"},
	},
}

var identityTable = document.Table{
	Name: "question for an identity", Doc: "of family lines",
	Keys: []document.Key{
		{Name: "send", Kind: document.Text, Required: true, Doc: "the question"},
		{Name: "reply", Kind: document.Text, Doc: "form of the answer, with {maker}, {model}, {serial}, {firmware} and {any}"},
		{Name: "pattern", Kind: document.Text, Doc: "in place of reply: a regular expression with captures of these names"},
	},
}

var registersTable = document.Table{
	Name: "registers", Doc: "a Modbus device",
	Keys: []document.Key{
		{Name: "device", Kind: document.Integer, Required: true, Doc: "its address, 1 to 247"},
		{Name: "framing", Kind: document.Choice, Choices: []string{"rtu", "tcp"}, Doc: "RTU frames with a checksum, or TCP frames with a header; rtu if not given"},
		{Name: "word-order", Kind: document.Choice, Choices: []string{"high-first", "low-first"}, Doc: "of 32-bit numbers; high-first if not given"},
		{Name: "write", Kind: document.Choice, Choices: []string{"single", "multiple"}, Doc: "whether one register is written with function 06 or 16; single if not given"},
	},
}

var accessTable = document.Table{
	Name: "access", Doc: "of family registers: a reading, a part of the identity, or a write of an action",
	Keys: []document.Key{
		{Name: "holding", Kind: document.Integer, Doc: "address of a holding register, from 0"},
		{Name: "input", Kind: document.Integer, Doc: "address of an input register, from 0"},
		{Name: "coil", Kind: document.Integer, Doc: "address of a coil, from 0"},
		{Name: "discrete", Kind: document.Integer, Doc: "address of a discrete input, from 0"},
		{Name: "as", Kind: document.Choice, Choices: []string{"int16", "uint16", "int32", "uint32", "float32"}, Doc: "how a register holds the number"},
		{Name: "value", Kind: document.Name, Doc: "of an action: which of its values is written"},
		{Name: "constant", Kind: document.Integer, Doc: "of an action: counts to write; of a coil 0 or 1"},
		{Name: "scale", Kind: document.Number, Doc: "what a count is worth, in the unit; 1 if not given"},
		{Name: "offset", Kind: document.Number, Doc: "what no count is worth, in the unit; 0 if not given"},
		{Name: "unit", Kind: document.Text, Doc: "of the number"},
	},
}

var frameTable = document.Table{
	Name: "frame", Doc: "a frame of a stream",
	Keys: []document.Key{
		{Name: "length", Kind: document.Integer, Required: true, Doc: "bytes, sync and checksum included; 3 to 1024"},
		{Name: "sync", Kind: document.Words, Required: true, Doc: "first bytes, in hexadecimal: A5 5A"},
		{Name: "byte-order", Kind: document.Choice, Choices: byteOrders, Required: true, Doc: "of all numbers that state no other"},
		{Name: "rate", Kind: document.Quantity, Dimension: document.Dim(quantity.Frequency), Required: true, Doc: "frames a second"},
		{Name: "checksum", Kind: document.MapOf, Of: &checksumTable, Required: true, Doc: "how damage is found"},
		{Name: "counter", Kind: document.MapOf, Of: &fieldTable, Doc: "the frame counter; lost frames are found by it"},
		{Name: "valid", Kind: document.MapOf, Of: &fieldTable, Doc: "a bit that is 1 while the output is valid; a frame without it is no sample"},
		{Name: "channels", Kind: document.Any, Required: true, Doc: "by name, each a field with count: rate or angle (increments); rate.x, rate.y, rate.z of several axes"},
		{Name: "readings", Kind: document.Any, Doc: "by name, each a field with unit: gyro.temperature, gyro.status"},
	},
}

var byteOrders = []string{"big", "little"}

var checksumTable = document.Table{
	Name: "checksum", Doc: "by name",
	Keys: []document.Key{
		{Name: "is", Kind: document.Choice, Choices: checksumNames(), Required: true, Doc: "its name"},
		{Name: "over", Kind: document.Words, Required: true, Doc: "the first and the last byte that it covers, from 0: 2 11"},
		{Name: "at", Kind: document.Integer, Required: true, Doc: "its first byte, from 0"},
		{Name: "byte-order", Kind: document.Choice, Choices: byteOrders, Doc: "if other than the frame's"},
	},
}

var fieldTable = document.Table{
	Name: "field", Doc: "a number in a frame",
	Keys: []document.Key{
		{Name: "at", Kind: document.Integer, Required: true, Doc: "its first byte, from 0"},
		{Name: "as", Kind: document.Choice, Choices: []string{"int8", "uint8", "int16", "uint16", "int24", "uint24", "int32", "uint32"}, Required: true, Doc: "how it is held"},
		{Name: "bits", Kind: document.Words, Doc: "some bits of it, the lowest and the highest, from 0: 4 7; or one: 0"},
		{Name: "byte-order", Kind: document.Choice, Choices: byteOrders, Doc: "if other than the frame's"},
		{Name: "count", Kind: document.Quantity, Doc: "of a channel: what one count is worth at the nominal scale factor"},
		{Name: "scale", Kind: document.Number, Doc: "of a reading: what a count is worth, in the unit; 1 if not given"},
		{Name: "offset", Kind: document.Number, Doc: "of a reading: what no count is worth, in the unit; 0 if not given"},
		{Name: "unit", Kind: document.Text, Doc: "of a reading"},
	},
}

// lineEnds are by name.
var (
	lineEnds     = map[string]string{"CR LF": "\r\n", "LF": "\n", "CR": "\r"}
	lineEndNames = []string{"CR LF", "LF", "CR"}
)

// actionsOf are those of some roles.
func actionsOf(roles []string) []*action {
	var of []*action
	for i := range actions {
		if slices.Contains(roles, actions[i].role) {
			of = append(of, &actions[i])
		}
	}
	return of
}
