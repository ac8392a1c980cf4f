package limits

import (
	"fmt"

	"proofrate/limits/quantity"
)

// Verdict is what a limit or a trial comes to. The zero Verdict is none.
type Verdict uint8

const (
	Unset     Verdict = iota
	Accept            // the requirement is met
	Undecided         // the measurement cannot tell: inside the guard band
	Void              // not measured
	Reject            // the requirement is missed
)

var verdictNames = [...]string{"unset", "accept", "undecided", "void", "reject"}

func (v Verdict) String() string { return verdictNames[v] }

// ParseVerdict reads a verdict's name.
func ParseVerdict(text string) (Verdict, error) {
	for v, name := range verdictNames {
		if name == text && v != 0 {
			return Verdict(v), nil
		}
	}
	return Unset, fmt.Errorf("%q is no verdict; verdicts are accept, undecided, void and reject", text)
}

// Combine gives the verdict of a trial: reject if any is, else void, else undecided, else accept. None is Unset.
func Combine(verdicts []Verdict) Verdict {
	worst := Unset
	for _, v := range verdicts {
		worst = max(worst, v)
	}
	return worst
}

// Rule is a decision rule: how a probability of conformity, or plain values, become a verdict.
type Rule struct {
	Name           string
	accept, reject float64 // thresholds of the probability of conformity; 0: plain values decide
}

// The decision rules.
var (
	// Simple compares values and takes no account of uncertainty. Source: ILAC-G8:09/2019, 4.2.1 (simple acceptance).
	Simple = Rule{Name: "simple"}
	// Guarded accepts when the requirement holds with a probability of 97.5 % or more, rejects at 2.5 % or less, and is
	// undecided between. Source: JCGM 106:2012, 7 and 8.3 (probability of conformity, guarded acceptance and rejection).
	Guarded = Rule{Name: "guarded", accept: 0.975, reject: 0.025}
)

// Rules is the table of them.
var Rules = []Rule{Simple, Guarded}

// RuleNames are the names of the rules.
func RuleNames() []string {
	names := make([]string, len(Rules))
	for i, r := range Rules {
		names[i] = r.Name
	}
	return names
}

// ParseRule reads a rule's name.
func ParseRule(text string) (Rule, error) {
	for _, r := range Rules {
		if r.Name == text {
			return r, nil
		}
	}
	return Rule{}, fmt.Errorf("%q is no decision rule; rules are simple and guarded", text)
}

// decide gives the verdict of a probability.
func (r Rule) decide(p float64) Verdict {
	switch {
	case p >= r.accept:
		return Accept
	case p <= r.reject:
		return Reject
	}
	return Undecided
}

// Element is one measured value of a figure.
type Element struct {
	Labels   string // key of the labels; "" for a single figure
	Measured quantity.Measured
}

// Values are the measured figures by name.
type Values map[string][]Element

// Judgement is what a limit came to for one element.
type Judgement struct {
	Labels      string // the element's key; "" where the limit is judged once
	Verdict     Verdict
	Margin      float64 // distance from the nearest bound, positive when met; for people, the probability decides. NaN when void
	UMargin     float64
	Unit        quantity.Unit // of the margin
	Probability float64       // of conformity; NaN when void
	Draws       int           // of the propagation; 0: closed form, or plain values
	Reason      string        // the figures used, or why it is void
}
