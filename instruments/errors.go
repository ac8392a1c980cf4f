package instruments

import "strings"

// Kind is the sort of a failure; callers branch on it and people read the rest.
type Kind uint8

const (
	KindUnset Kind = iota
	Timeout        // no answer in time
	Gone           // the link or the instrument is away
	Garbled        // an answer that cannot be read
	Refused        // the instrument or the driver says no
	Unsafe         // a guard or interlock is broken
	Internal       // a fault of ours
)

func (k Kind) String() string {
	return [...]string{"unset", "no answer", "gone", "garbled", "refused", "unsafe", "internal fault"}[k]
}

// Where is the place of a failure, as far as it is known.
type Where struct {
	Step       string // "step 7 (soak -40 degC)"
	Slot       SlotID
	Instrument string // "T1"
}

func (w Where) String() string {
	var parts []string
	if w.Step != "" {
		parts = append(parts, w.Step)
	}
	if w.Slot != "" {
		parts = append(parts, "slot "+string(w.Slot))
	}
	if w.Instrument != "" {
		parts = append(parts, w.Instrument)
	}
	return strings.Join(parts, ", ")
}

// Error is a failure at the bench.
type Error struct {
	Op    string // "set rate"
	Where Where
	Kind  Kind
	Err   error // what was expected, what was found, what to do
}

func (e *Error) Error() string {
	var b strings.Builder
	if where := e.Where.String(); where != "" {
		b.WriteString(where + ": ")
	}
	b.WriteString(e.Op + ": " + e.Kind.String())
	if e.Err != nil {
		b.WriteString(": " + e.Err.Error())
	}
	return b.String()
}

func (e *Error) Unwrap() error { return e.Err }
