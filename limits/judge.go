package limits

import (
	"fmt"
	"math"
	"strings"

	"proofrate/limits/quantity"
)

// Judge judges the requirement for every element of its series, or once.
//
// Under `simple` the values decide. Otherwise the probability that the requirement holds does: in closed form where it
// bounds one element of one figure, else by propagation of distributions with draws from seed (JCGM 101). A void
// figure makes the verdict void, whatever the rest of the requirement says.
func (l *Limit) Judge(values Values, rule Rule, seed uint64) []Judgement {
	if l.root.labels == "" {
		return []Judgement{l.judge(values, "", rule, seed)}
	}
	var list []Judgement
	for i, element := range l.root.elements(values) {
		list = append(list, l.judge(values, element, rule, seed+uint64(i)))
	}
	return list
}

func (l *Limit) judge(values Values, element string, rule Rule, seed uint64) Judgement {
	j := Judgement{Labels: element, Margin: math.NaN(), UMargin: math.NaN(), Probability: math.NaN()}
	uses := l.root.uses(values, element, nil)
	if reason := missing(values, uses); reason != "" {
		j.Verdict, j.Reason = Void, reason
		return j
	}
	look := measuredAt(values)
	var from *node
	j.Margin, from = l.root.margin(values, element, look)
	j.Unit = from.unit
	j.UMargin = marginU(values, uses, func(look lookup) float64 {
		m, _ := from.margin(values, element, look) // that of the comparison which is nearest: the smallest of two has a kink
		return m
	})
	j.Reason = with(values, uses)
	if !finite(j.Margin) || !finite(j.UMargin) {
		j.Verdict, j.Reason = Void, "the requirement gives no finite number; "+j.Reason
		j.Margin, j.UMargin = math.NaN(), math.NaN()
		return j
	}
	if rule.accept == 0 {
		j.Verdict, j.Probability = Reject, 0
		if l.root.holds(values, element, look) {
			j.Verdict, j.Probability = Accept, 1
		}
		return j
	}
	if at, ok := l.root.range1(); ok {
		j.Probability = at.probability(values, element)
	} else {
		j.Probability, j.Draws = l.propagate(values, element, uses, rule, seed)
	}
	j.Verdict = rule.decide(j.Probability)
	if j.Draws >= drawsMax && j.Verdict != Undecided && near(j.Probability, j.Draws, rule) {
		j.Verdict = Undecided
	}
	if j.Verdict == Reject && bounded(values, uses) {
		j.Verdict = Undecided
		j.Reason += "; a figure is an upper bound only, which can accept but never reject"
	}
	return j
}

// missing says why some used element is not there.
func missing(values Values, uses []use) string {
	for _, u := range uses {
		m, ok := find(values, u)
		switch {
		case !ok && u.element == "":
			return u.figure + " was not measured"
		case !ok:
			return u.figure + " was not measured at " + u.element
		case m.Void != "":
			return strings.TrimSpace(u.figure+" "+at(u.element)) + " is void: " + m.Void
		case !finite(m.Value) || !finite(m.U):
			return u.figure + " is not finite"
		}
	}
	return ""
}

func at(element string) string {
	if element == "" {
		return ""
	}
	return "at " + element
}

func finite(x float64) bool { return !math.IsNaN(x) && !math.IsInf(x, 0) }

func find(values Values, u use) (quantity.Measured, bool) {
	for _, e := range values[u.figure] {
		if e.Labels == u.element {
			return e.Measured, true
		}
	}
	return quantity.Measured{}, false
}

// measuredAt looks up measured values.
func measuredAt(values Values) lookup {
	return func(figure, element string) float64 {
		m, _ := find(values, use{figure, element})
		return m.Value
	}
}

func bounded(values Values, uses []use) bool {
	for _, u := range uses {
		if m, _ := find(values, u); m.Family == quantity.Bound {
			return true
		}
	}
	return false
}

// usesShown is how many figures a reason lists.
const usesShown = 4

// with lists the figures used: "with sf_linearity = 178 ppm, u 3 ppm".
func with(values Values, uses []use) string {
	parts := make([]string, 0, usesShown)
	for i, u := range uses {
		if i == usesShown {
			parts = append(parts, fmt.Sprintf("and %d more", len(uses)-usesShown))
			break
		}
		m, _ := find(values, u)
		name := u.figure
		if u.element != "" && len(uses) > 1 {
			name += " at " + u.element
		}
		parts = append(parts, name+" = "+m.String())
	}
	return "with " + strings.Join(parts, "; ")
}

// marginU is the standard uncertainty of a quantity computed from measured ones, to first order:
//
//	u^2 = sum over independent parts (df/dx_i u_i)^2 + sum over instruments (sum_i df/dx_i c_i)^2
//
// with c_i the signed contribution of a shared instrument to figure i. Source: JCGM 100:2008, 5.1 and 5.2.
func marginU(values Values, uses []use, f func(lookup) float64) float64 {
	own := 0.0
	shared := map[string]float64{}
	var order []string
	for _, u := range uses {
		m, _ := find(values, u)
		if m.U == 0 {
			continue
		}
		slope := derivative(values, u, m.U, f)
		rest := m.U * m.U
		for _, l := range m.Budget {
			if l.Instrument == "" {
				continue
			}
			rest -= l.Contribution * l.Contribution
			if _, known := shared[l.Instrument]; !known {
				order = append(order, l.Instrument)
			}
			shared[l.Instrument] += slope * math.Copysign(l.Contribution, l.Sensitivity)
		}
		own += slope * slope * math.Max(rest, 0)
	}
	for _, name := range order {
		own += shared[name] * shared[name]
	}
	return math.Sqrt(own)
}

// derivative is the central difference over a small part of u: a limit's functions have kinks, so the step is small.
func derivative(values Values, u use, uncertainty float64, f func(lookup) float64) float64 {
	plain := measuredAt(values)
	step := 1e-4 * uncertainty
	shifted := func(by float64) float64 {
		return f(func(figure, element string) float64 {
			x := plain(figure, element)
			if figure == u.figure && element == u.element {
				x += by
			}
			return x
		})
	}
	return (shifted(step) - shifted(-step)) / (2 * step)
}

// range1 is a requirement that bounds one figure, or its magnitude: low <= x <= high.
type range1 struct {
	figure    *node
	low, high float64
}

// range1 recognises such a requirement: comparisons of one figure, or abs of it, with numbers, joined by and.
func (n *node) range1() (range1, bool) {
	if n.op == opAnd {
		a, okA := n.args[0].range1()
		b, okB := n.args[1].range1()
		if !okA || !okB || a.figure.figure != b.figure.figure {
			return range1{}, false
		}
		return range1{a.figure, math.Max(a.low, b.low), math.Min(a.high, b.high)}, true
	}
	if !n.op.comparison() {
		return range1{}, false
	}
	x, bound, o := n.args[0], n.args[1], n.op
	if x.op == opNumber {
		x, bound, o = bound, x, mirrored[o]
	}
	if bound.op != opNumber {
		return range1{}, false
	}
	upper := o == opLess || o == opLessEqual
	switch {
	case x.op == opFigure && upper:
		return range1{x, math.Inf(-1), bound.number}, true
	case x.op == opFigure && (o == opGreater || o == opGreaterEqual):
		return range1{x, bound.number, math.Inf(1)}, true
	case x.op == opAbs && x.args[0].op == opFigure && upper:
		return range1{x.args[0], -bound.number, bound.number}, true
	}
	return range1{}, false
}

var mirrored = map[op]op{opLess: opGreater, opLessEqual: opGreaterEqual, opGreater: opLess, opGreaterEqual: opLessEqual, opEqual: opEqual, opUnequal: opUnequal}

// probability is P(low <= x <= high) from the figure's own distribution. Source: JCGM 106:2012, 7.4.
func (r range1) probability(values Values, element string) float64 {
	if r.figure.labels == "" {
		element = ""
	}
	m, _ := find(values, use{r.figure.figure, element})
	if r.high < r.low {
		return 0
	}
	p := 1.0
	if !math.IsInf(r.high, 1) {
		p = m.CDF(r.high)
	}
	if !math.IsInf(r.low, -1) {
		below := m.CDF(r.low)
		if m.U == 0 && m.Value == r.low { // without uncertainty the bound itself belongs to the range
			below = 0
		}
		p -= below
	}
	return math.Min(1, math.Max(0, p))
}
