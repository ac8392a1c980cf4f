package recording

import (
	"fmt"
	"strings"

	"proofrate/limits/quantity"
)

// Label is the value that a loop of the procedure had while a recording was made.
type Label struct {
	Name  string         // the loop's variable: "temperature", "rate", "cycle"
	Value quantity.Value // the nominal value
	Visit int            // which time, from 1, this loop gave this value
}

// Labels are the labels of a recording, outermost loop first.
type Labels []Label

// Find gives the label of a name.
func (l Labels) Find(name string) (Label, bool) {
	for _, label := range l {
		if label.Name == name {
			return label, true
		}
	}
	return Label{}, false
}

func (l Labels) String() string {
	parts := make([]string, len(l))
	for i, label := range l {
		parts[i] = label.String()
	}
	return strings.Join(parts, ", ")
}

// String tells a first visit only by its value.
func (l Label) String() string {
	if l.Visit > 1 {
		return fmt.Sprintf("%s %s (visit %d)", l.Name, l.Value, l.Visit)
	}
	return fmt.Sprintf("%s %s", l.Name, l.Value)
}

// Channel is one stream of counts.
type Channel struct {
	Name  string         // "rate" or "angle"; "rate.x" and so on for several axes
	Count quantity.Value // what one count is worth at the nominal scale factor
}

// Section is the head of one recording.
type Section struct {
	Name           string // "rest"
	Step           string // the step that made it
	Labels         Labels
	Leg            string  // "up" or "down": the innermost loop's value against the one before it; "" without a loop
	SincePowerOn   float64 // s, at the start
	Start          float64 // bench s: start of the first sample's interval
	Channels       []Channel
	SampleInterval float64 // s
	First          uint64  // counter of the first sample, since power-on
}

// Gap is a run of lost frames.
type Gap struct {
	Before int    // index of the first sample after it
	Lost   uint64 // frames missing
}

// Series are readings of the bench taken during a recording.
type Series struct {
	Name   string // "table.rate"
	Unit   quantity.Unit
	At     []float64 // bench s
	Values []float64
}

// Quality says how a recording went.
type Quality struct {
	Lost, Damaged uint64
	Complete      bool
	Reason        string // why it is not complete
}

// Recording is the samples of one trial during one record step.
type Recording struct {
	Section
	Counts   [][]int64 // channel by sample
	Gaps     []Gap
	Readings []Series
	Quality  Quality
	Digest   string // SHA-256 of the section's bytes; "" in memory
}

// Len is the number of samples.
func (r *Recording) Len() int {
	if len(r.Counts) == 0 {
		return 0
	}
	return len(r.Counts[0])
}

// Duration in s of the samples at hand.
func (r *Recording) Duration() float64 { return float64(r.Len()) * r.SampleInterval }

// Series finds the readings of a name.
func (r *Recording) Series(name string) (Series, bool) {
	for _, s := range r.Readings {
		if s.Name == name {
			return s, true
		}
	}
	return Series{}, false
}
