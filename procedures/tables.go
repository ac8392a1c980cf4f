package procedures

import (
	"proofrate/limits"
	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/results/reduce"
)

// The language as tables of keys. Loader, suggestions and the reference in README.md come from them. A value in a step
// is a literal quantity, a loop's variable or a parameter, so the tables leave its kind open and the planner resolves
// it.

var procedureTable = document.Table{
	Name: "procedure", Doc: "the whole document",
	Keys: []document.Key{
		{Name: "procedure", Kind: document.Name, Required: true, Doc: "the procedure's name"},
		{Name: "title", Kind: document.Text, Required: true, Doc: "what it is, in a line"},
		{Name: "revision", Kind: document.Text, Required: true, Doc: "its revision"},
		{Name: "specification", Kind: document.Text, Doc: "the specification and issue whose clauses the limits name"},
		{Name: "applies-to", Kind: document.Words, Required: true, Doc: "part numbers; * stands for any characters"},
		{Name: "rule", Kind: document.Choice, Choices: limits.RuleNames(), Doc: "decision rule of limits that state none"},
		{Name: "gyro", Kind: document.MapOf, Of: &gyroTable, Required: true, Doc: "the gyro it is for"},
		{Name: "needs", Kind: document.MapOf, Of: &needsTable, Required: true, Doc: "what a bench must be able to do"},
		{Name: "parameters", Kind: document.Any, Doc: "names with a quantity each; --set gives another one"},
		{Name: "variants", Kind: document.Any, Doc: "by part number: parameters, and bounds by clause"},
		{Name: "guards", Kind: document.ListOf, Of: &guardTable, Doc: "conditions watched throughout the run"},
		{Name: "steps", Kind: document.Any, Required: true, Doc: "list of steps, carried out in order"},
		{Name: "figures", Kind: document.MapOf, Free: &figureTable, Required: true, Doc: "what is reduced from the recordings"},
		{Name: "limits", Kind: document.ListOf, Of: &limitTable, Required: true, Doc: "what is required of the figures"},
	},
}

var gyroTable = document.Table{
	Name: "gyro", Doc: "the gyro under test",
	Keys: []document.Key{
		{Name: "family", Kind: document.Choice, Choices: []string{"optical", "vibratory", "spinning-mass"}, Required: true, Doc: "how it senses rotation"},
		{Name: "output", Kind: document.Choice, Choices: []string{"rate", "angle"}, Required: true, Doc: "rate, or increments of angle"},
		{Name: "range", Kind: document.Quantity, Dimension: document.Dim(quantity.AngularRate), Required: true, Doc: "full scale, one side"},
		{Name: "sample-rate", Kind: document.Quantity, Dimension: document.Dim(quantity.Frequency), Required: true, Doc: "frames a second"},
		{Name: "polarity", Kind: document.Choice, Choices: []string{"+", "-"}, Required: true, Doc: "sign of the output for a positive rotation about the input axis"},
		{Name: "acceleration-sensitivity", Kind: document.Quantity, Dimension: document.Dim(quantity.RateAcceleration), Doc: "standard uncertainty of its drift by acceleration, each axis; for the budget"},
	},
}

var needsTable = document.Table{
	Name: "needs", Doc: "what a bench must be able to do; no step may ask for more",
	Keys: []document.Key{
		{Name: "table", Kind: document.Quantity, Dimension: document.Dim(quantity.AngularRate), Doc: "greatest rate of the table"},
		{Name: "chamber", Kind: document.Quantities, Dimension: document.Dim(quantity.Temperature), Doc: "lowest and highest temperature of the chamber"},
		{Name: "supply", Kind: document.Quantity, Dimension: document.Dim(quantity.Voltage), Required: true, Doc: "voltage of the gyro's supply"},
		{Name: "current", Kind: document.Quantity, Dimension: document.Dim(quantity.Current), Required: true, Doc: "current limit of the gyro's supply"},
	},
}

var guardTable = document.Table{
	Name: "guard", Doc: "a condition over readings; a slot's reading acts on that slot, the bench's makes the bench safe",
	Keys: []document.Key{
		{Name: "require", Kind: document.Expression, Required: true, Doc: "a condition, as in supply.current < 1.5"},
		{Name: "tolerate", Kind: document.Quantity, Dimension: document.Dim(quantity.Time), Doc: "how long it may be broken"},
	},
}

// action is a kind of step.
type action struct {
	name  string
	table *document.Table
}

// actions are the steps: the first key of a step says which it is.
var actions = []action{
	{"soak", &soakTable}, {"settle", &settleTable}, {"turn", &turnTable}, {"hold", &holdTable}, {"position", &positionTable},
	{"power", &powerTable}, {"wait", &waitTable}, {"record", &recordTable}, {"stage", &stageTable}, {"ask", &askTable}, {"park", &parkTable},
}

var (
	bandKey  = document.Key{Name: "band", Kind: document.Any, Required: true, Doc: "how far from the target it may be"}
	driftKey = document.Key{Name: "drift", Kind: document.Any, Doc: "how fast it may still change, by the straight line through its last two minutes"}
	holdKey  = document.Key{Name: "hold", Kind: document.Any, Required: true, Doc: "how long band and drift must be kept without a break"}
	mostKey  = document.Key{Name: "at-most", Kind: document.Any, Required: true, Doc: "how long the step may take; a wait has an end"}

	soakTable = document.Table{Name: "soak", Doc: "set the chamber and wait until the temperature has settled", Keys: []document.Key{
		{Name: "soak", Kind: document.Any, Required: true, Doc: "temperature"},
		{Name: "of", Kind: document.Choice, Choices: []string{"chamber.temperature", "gyro.temperature"}, Doc: "reading that must settle; the chamber's if not given"},
		bandKey, driftKey, holdKey, mostKey}}
	settleTable = document.Table{Name: "settle", Doc: "wait until a reading has settled", Keys: []document.Key{
		{Name: "settle", Kind: document.Text, Required: true, Doc: "the reading"},
		{Name: "at", Kind: document.Any, Required: true, Doc: "the target"}, bandKey, driftKey, holdKey, mostKey}}
	turnTable = document.Table{Name: "turn", Doc: "turn the table at a rate and wait until it is steady; rate 0 holds the position", Keys: []document.Key{
		{Name: "turn", Kind: document.Any, Required: true, Doc: "rate"}}}
	holdTable = document.Table{Name: "hold", Doc: "bring the table to rest and hold its position", Keys: []document.Key{
		{Name: "hold", Kind: document.Choice, Choices: []string{"position"}, Required: true, Doc: "what is held"}}}
	positionTable = document.Table{Name: "position", Doc: "bring the table to an angle and hold it", Keys: []document.Key{
		{Name: "position", Kind: document.Any, Required: true, Doc: "angle"}}}
	powerTable = document.Table{Name: "power", Doc: "switch the gyros' supplies", Keys: []document.Key{
		{Name: "power", Kind: document.Any, Required: true, Doc: "on, off, or {on: SLOT} or {off: SLOT}"}}}
	waitTable = document.Table{Name: "wait", Doc: "let time pass", Keys: []document.Key{
		{Name: "wait", Kind: document.Any, Required: true, Doc: "how long"}}}
	recordTable = document.Table{Name: "record", Doc: "record every gyro", Keys: []document.Key{
		{Name: "record", Kind: document.Name, Required: true, Doc: "name of the recording"},
		{Name: "for", Kind: document.Any, Doc: "how long: a time, or {turns: N, at-least: TIME} for whole turns of the table"},
		{Name: "from", Kind: document.Choice, Choices: []string{"power-on"}, Doc: "record from the moment of power-on; with while"},
		{Name: "while", Kind: document.Any, Doc: "steps during which it records"}}}
	turnsTable = document.Table{Name: "time in turns", Doc: "a recording over whole turns of the table, so that what repeats every turn averages out", Keys: []document.Key{
		{Name: "turns", Kind: document.Any, Required: true, Doc: "the recording is a multiple of so many turns"},
		{Name: "at-least", Kind: document.Any, Required: true, Doc: "and lasts at least so long; at rest just so long"}}}
	stageTable = document.Table{Name: "stage", Doc: "a named group of steps, once or in a loop", Keys: []document.Key{
		{Name: "stage", Kind: document.Text, Required: true, Doc: "its name"},
		{Name: "each", Kind: document.Any, Doc: "{NAME: VALUES}: once for each value, which becomes a label"},
		{Name: "repeat", Kind: document.Any, Doc: "how many times"},
		{Name: "as", Kind: document.Name, Doc: "label that counts the repeats"},
		{Name: "steps", Kind: document.Any, Required: true, Doc: "the steps"}}}
	askTable = document.Table{Name: "ask", Doc: "ask the operator; the answer is evidence", Keys: []document.Key{
		{Name: "ask", Kind: document.Text, Required: true, Doc: "the question"},
		{Name: "for", Kind: document.Choice, Choices: []string{"confirmation", "number", "choice", "attitude"}, Required: true, Doc: "what is asked for"},
		{Name: "unit", Kind: document.Text, Doc: "unit of a number"},
		{Name: "choices", Kind: document.Words, Doc: "of a choice"}}}
	parkTable = document.Table{Name: "park", Doc: "hold the table, cut the supplies and bring the chamber where it may be opened", Keys: []document.Key{
		{Name: "park", Kind: document.Any, Required: true, Doc: "temperature, above the dew point"}}}
)

var figureTable = document.Table{
	Name: "figure", Doc: "a number, or a series over labels, reduced from recordings (`is`) or computed from figures (`formula`)",
	Keys: []document.Key{
		{Name: "is", Kind: document.Choice, Choices: reduce.Names(), Doc: "method of the catalogue"},
		{Name: "of", Kind: document.Name, Doc: "name of the recordings"},
		{Name: "per", Kind: document.Words, Doc: "labels that make it a series; visit after a label tells its visits apart"},
		{Name: "over", Kind: document.Words, Doc: "labels that the method works over"},
		{Name: "at", Kind: document.Any, Doc: "{LABEL: VALUE, visit: N}: only these recordings"},
		{Name: "pick", Kind: document.Choice, Choices: []string{"first", "last"}, Doc: "of several recordings that fit"},
		{Name: "unit", Kind: document.Text, Doc: "unit of measure; of a ratio, ppm or %"},
		{Name: "measurand", Kind: document.Choice, Choices: []string{"sample", "population"}, Doc: "the statistic of these samples, or the gyro's parameter behind them"},
		{Name: "scale-factor", Kind: document.Name, Doc: "figure with the measured scale-factor error, for the part of Earth rate"},
		{Name: "noise", Kind: document.Name, Doc: "name of the recordings at rest that tell the gyro's noise, for the uncertainty; if not given, the recording at rest with most labels of the figure's, then the longest"},
		{Name: "tau", Kind: document.Quantity, Dimension: document.Dim(quantity.Time), Doc: "averaging time"},
		{Name: "relative-to", Kind: document.Choice, Choices: []string{"range", "reading"}, Doc: "what a nonlinearity is a part of"},
		{Name: "least", Kind: document.Quantity, Dimension: document.Dim(quantity.AngularRate), Doc: "rates below it are left out of a nonlinearity relative to reading"},
		{Name: "scale", Kind: document.Choice, Choices: []string{"none"}, Doc: "none: the minimum of the curve itself, not divided by 0.664"},
		{Name: "formula", Kind: document.Expression, Doc: "expression over figures"},
	},
}

var limitTable = document.Table{
	Name: "limit", Doc: "a requirement: a figure with bounds, or an expression",
	Keys: []document.Key{
		{Name: "clause", Kind: document.Text, Required: true, Doc: "clause of the specification"},
		{Name: "figure", Kind: document.Name, Doc: "the figure that is bounded"},
		{Name: "at-most", Kind: document.Any, Doc: "upper bound; with per, a map of label value to bound"},
		{Name: "at-least", Kind: document.Any, Doc: "lower bound; with per, a map of label value to bound"},
		{Name: "between", Kind: document.Any, Doc: "lower and upper bound; with per, a map of label value to bounds"},
		{Name: "at", Kind: document.Any, Doc: "{LABEL: VALUE, visit: N}: only these elements of the figure"},
		{Name: "per", Kind: document.Name, Doc: "label by whose value the bounds differ"},
		{Name: "require", Kind: document.Expression, Doc: "expression over figures, plain numbers in the figures' units"},
		{Name: "rule", Kind: document.Choice, Choices: limits.RuleNames(), Doc: "decision rule; the procedure's if not given"},
		{Name: "otherwise", Kind: document.Choice, Choices: []string{"ends-trial"}, Doc: "what a rejection does at once"},
	},
}

var variantTable = document.Table{
	Name: "variant", Doc: "what differs for one part number",
	Keys: []document.Key{
		{Name: "parameters", Kind: document.Any, Doc: "names of the procedure's parameters, each with another value"},
		{Name: "bounds", Kind: document.Any, Doc: "by clause: other bounds for the figure of that limit"},
	},
}

var boundTable = document.Table{
	Name: "bound", Doc: "the bound of one clause for one part number, of the same kind as the limit's own",
	Keys: []document.Key{
		{Name: "at-most", Kind: document.Any, Doc: "upper bound"},
		{Name: "at-least", Kind: document.Any, Doc: "lower bound"},
		{Name: "between", Kind: document.Any, Doc: "lower and upper bound"},
	},
}
