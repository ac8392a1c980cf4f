package limits

import (
	"math"

	"proofrate/limits/quantity"
)

// op is what a node does.
type op uint8

const (
	opUnset op = iota
	opNumber
	opFigure
	opNegate
	opAdd
	opSubtract
	opMultiply
	opDivide
	opLess
	opLessEqual
	opGreater
	opGreaterEqual
	opEqual
	opUnequal
	opAnd
	opOr
	opNot
	opAbs
	opMin
	opMax
	opMean
	opSpread
)

// binaries, unaries and functions are the tables of what the language has.
var binaries = map[string]op{
	"+": opAdd, "-": opSubtract, "*": opMultiply, "/": opDivide, "<": opLess, "<=": opLessEqual, ">": opGreater,
	">=": opGreaterEqual, "==": opEqual, "!=": opUnequal, "and": opAnd, "&&": opAnd, "or": opOr, "||": opOr,
}

var unaries = map[string]op{"-": opNegate, "not": opNot, "!": opNot}

var functions = map[string]op{"abs": opAbs, "min": opMin, "max": opMax, "mean": opMean, "spread": opSpread}

func (o op) comparison() bool { return o >= opLess && o <= opUnequal }
func (o op) logical() bool    { return o >= opAnd && o <= opNot }

// aggregate functions make one number of a series, or of several numbers.
func (o op) aggregate() bool { return o >= opMin && o <= opSpread }

// node is a compiled expression. Its labels say over what it is a series; none for a single value.
type node struct {
	op     op
	args   []*node
	number float64
	figure string
	labels string // joined label names; "" single
	truth  bool   // it is true or false, else a number
	unit   quantity.Unit
	from   int // runes of the expression's text
	to     int
}

// lookup gives the number of a figure's element.
type lookup func(figure, element string) float64

// each calls fn for every element of the series under a node: those of the first figure that is a series.
func (n *node) elements(values Values) []string {
	if n.op == opFigure {
		keys := make([]string, 0, len(values[n.figure]))
		for _, e := range values[n.figure] {
			keys = append(keys, e.Labels)
		}
		return keys
	}
	for _, a := range n.args {
		if a.labels != "" {
			return a.elements(values)
		}
	}
	return nil
}

// value computes a number.
func (n *node) value(values Values, element string, look lookup) float64 {
	switch n.op {
	case opNumber:
		return n.number
	case opFigure:
		if n.labels == "" {
			return look(n.figure, "")
		}
		return look(n.figure, element)
	case opNegate:
		return -n.args[0].value(values, element, look)
	case opAbs:
		return math.Abs(n.args[0].value(values, element, look))
	}
	if n.op.aggregate() {
		return aggregate(n.op, n.terms(values, element, look))
	}
	a, b := n.args[0].value(values, element, look), n.args[1].value(values, element, look)
	switch n.op {
	case opAdd:
		return a + b
	case opSubtract:
		return a - b
	case opMultiply:
		return a * b
	}
	return a / b
}

// terms are the numbers that an aggregate works on: all elements of each series, and single values as they are.
func (n *node) terms(values Values, element string, look lookup) []float64 {
	var terms []float64
	for _, a := range n.args {
		if a.labels == "" {
			terms = append(terms, a.value(values, element, look))
			continue
		}
		for _, e := range a.elements(values) {
			terms = append(terms, a.value(values, e, look))
		}
	}
	return terms
}

func aggregate(o op, terms []float64) float64 {
	low, high, sum := math.Inf(1), math.Inf(-1), 0.0
	for _, t := range terms {
		low, high, sum = math.Min(low, t), math.Max(high, t), sum+t
	}
	switch o {
	case opMin:
		return low
	case opMax:
		return high
	case opSpread:
		return high - low
	}
	return sum / float64(len(terms))
}

// holds computes a truth.
func (n *node) holds(values Values, element string, look lookup) bool {
	switch n.op {
	case opAnd:
		return n.args[0].holds(values, element, look) && n.args[1].holds(values, element, look)
	case opOr:
		return n.args[0].holds(values, element, look) || n.args[1].holds(values, element, look)
	case opNot:
		return !n.args[0].holds(values, element, look)
	}
	a, b := n.args[0].value(values, element, look), n.args[1].value(values, element, look)
	switch n.op {
	case opLess:
		return a < b
	case opLessEqual:
		return a <= b
	case opGreater:
		return a > b
	case opGreaterEqual:
		return a >= b
	case opEqual:
		return a == b
	}
	return a != b
}

// margin is the distance from the nearest bound, positive when met: of a comparison the difference of its sides, of
// `and` the smallest, of `or` the largest, of `not` the negative. The second result is the comparison it came from.
func (n *node) margin(values Values, element string, look lookup) (float64, *node) {
	switch n.op {
	case opNot:
		m, of := n.args[0].margin(values, element, look)
		return -m, of
	case opAnd, opOr:
		a, ofA := n.args[0].margin(values, element, look)
		b, ofB := n.args[1].margin(values, element, look)
		if (a <= b) == (n.op == opAnd) {
			return a, ofA
		}
		return b, ofB
	}
	a, b := n.args[0].value(values, element, look), n.args[1].value(values, element, look)
	switch n.op {
	case opLess, opLessEqual:
		return b - a, n
	case opGreater, opGreaterEqual:
		return a - b, n
	case opEqual:
		return -math.Abs(a - b), n
	}
	return math.Abs(a - b), n
}

// figures adds the names under a node, each once, in order.
func (n *node) figures(names []string) []string {
	if n.op == opFigure {
		for _, known := range names {
			if known == n.figure {
				return names
			}
		}
		return append(names, n.figure)
	}
	for _, a := range n.args {
		names = a.figures(names)
	}
	return names
}

// use is one element of one figure that an expression leans on.
type use struct{ figure, element string }

// uses adds the elements that a node leans on for one element of its series.
func (n *node) uses(values Values, element string, list []use) []use {
	add := func(u use) []use {
		for _, known := range list {
			if known == u {
				return list
			}
		}
		return append(list, u)
	}
	if n.op == opFigure {
		if n.labels == "" {
			return add(use{n.figure, ""})
		}
		return add(use{n.figure, element})
	}
	for _, a := range n.args {
		if !n.op.aggregate() || a.labels == "" {
			list = a.uses(values, element, list)
			continue
		}
		for _, e := range a.elements(values) {
			list = a.uses(values, e, list)
		}
	}
	return list
}
