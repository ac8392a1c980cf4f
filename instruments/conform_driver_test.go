package instruments_test

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"regexp"
	"slices"
	"strconv"
	"testing"
	"time"

	. "proofrate/instruments"
	"proofrate/instruments/instrumentstest"
	"proofrate/instruments/link"
	"proofrate/limits/quantity"
)

// lineDriver is the least sound driver of a text protocol: "V?" is answered by a signed number and a line's end.
// Each of its faults is one that a driver may well have.
type lineDriver struct {
	link link.Link

	keepsOld   bool          // does not throw away what is unread before it asks
	oneLook    bool          // reads what has arrived first and no more
	patience   time.Duration // for an answer
	guesses    bool          // gives the last value for a missing answer
	takesParts bool          // takes half a line for a line at the end of its patience
	skipsNoise bool          // leaves out what is no digit
	deafToStop bool          // waits on when it is cancelled
	misnames   bool          // calls a lost link a missing answer
	kindless   bool          // its errors have no kind

	last float64
}

func (d *lineDriver) Readings() []string { return []string{"supply.voltage"} }

func (d *lineDriver) Ask(ctx context.Context, name string) (Pending, error) {
	if !d.keepsOld {
		d.link.Discard(len(d.link.Peek()))
	}
	if err := d.link.Send([]byte("V?\n")); err != nil {
		return nil, &Error{Op: "read", Kind: Gone, Err: err}
	}
	return taken(func(ctx context.Context) (Reading, error) {
		value, err := d.take(ctx)
		if err != nil && d.kindless {
			err = errors.New(err.Error())
		}
		return Reading{name, quantity.Of(value, volt), d.link.Clock().Now()}, err
	}), nil
}

var number = regexp.MustCompile(`^[+-][0-9]+\.[0-9]{2}$`)

func (d *lineDriver) take(ctx context.Context) (float64, error) {
	if d.deafToStop {
		ctx = context.WithoutCancel(ctx)
	}
	clock := d.link.Clock()
	until := clock.Now().Add(d.patience)
	for {
		line, rest, whole := bytes.Cut(d.link.Peek(), []byte("\n"))
		late := !clock.Now().Before(until)
		if whole || d.takesParts && late && len(line) > 0 || d.oneLook && len(line) > 0 {
			text := bytes.Clone(line)
			d.link.Discard(len(line))
			if whole {
				d.link.Discard(1)
			}
			_ = rest
			return d.parse(text)
		}
		if late {
			if d.guesses {
				return d.last, nil
			}
			return 0, &Error{Op: "read", Kind: Timeout}
		}
		err := d.link.Await(ctx, until)
		if gone, ok := errors.AsType[*link.GoneError](err); ok {
			kind := Gone
			if d.misnames {
				kind = Timeout
			}
			return 0, &Error{Op: "read", Kind: kind, Err: gone}
		}
		if err != nil {
			return 0, err
		}
	}
}

func (d *lineDriver) parse(line []byte) (float64, error) {
	if d.skipsNoise {
		line = bytes.Map(func(r rune) rune {
			if r >= '0' && r <= '9' || r == '.' || r == '+' || r == '-' {
				return r
			}
			return -1
		}, line)
	} else if !d.takesParts && !number.Match(line) {
		return 0, &Error{Op: "read", Kind: Garbled, Err: fmt.Errorf("%q is no number", line)}
	}
	value, err := strconv.ParseFloat(string(line), 64)
	if err != nil {
		return 0, &Error{Op: "read", Kind: Garbled, Err: err}
	}
	d.last = value
	return value, nil
}

func lineRig(change func(*lineDriver)) Rig {
	return Rig{
		Reading:  "supply.voltage",
		Patience: time.Second,
		Answer: func(request []byte, value float64) []byte {
			if string(request) != "V?\n" {
				return nil
			}
			return fmt.Appendf(nil, "%+.2f\n", value)
		},
		Open: instrumentstest.OverMemory(func(l link.Link) (Reader, error) {
			d := &lineDriver{link: l, patience: time.Second}
			change(d)
			return d, nil
		}),
	}
}

func TestSoundDriver(t *testing.T) {
	instrumentstest.TestDriver(t, lineRig(func(*lineDriver) {}))
}

func TestWrongDriversAreCaught(t *testing.T) {
	cases := map[string]struct {
		change func(*lineDriver)
		rules  []string // that must be among those found
	}{
		"keeps what is unread":  {func(d *lineDriver) { d.keepsOld = true }, []string{"doubled", "late", "cut", "noise after", "cancelled"}},
		"looks once":            {func(d *lineDriver) { d.oneLook = true }, []string{"split"}},
		"waits for ever":        {func(d *lineDriver) { d.patience = time.Minute }, []string{"late", "silent", "cut"}},
		"guesses":               {func(d *lineDriver) { d.guesses = true }, []string{"late", "silent", "cut"}},
		"takes parts":           {func(d *lineDriver) { d.takesParts = true }, []string{"cut"}},
		"skips noise":           {func(d *lineDriver) { d.skipsNoise = true }, []string{"garbled"}},
		"is deaf to cancelling": {func(d *lineDriver) { d.deafToStop = true }, []string{"cancelled"}},
		"misnames a lost link":  {func(d *lineDriver) { d.misnames = true }, []string{"closed"}},
		"gives no kind":         {func(d *lineDriver) { d.kindless = true }, []string{"silent", "cut", "closed"}},
	}
	caught := map[string]bool{}
	for name, c := range cases {
		t.Run(name, func(t *testing.T) {
			var found []string
			for _, f := range CheckDriver(t.Context(), lineRig(c.change)) {
				found = append(found, f.Rule)
				caught[f.Rule] = true
			}
			for _, rule := range c.rules {
				if !slices.Contains(found, rule) {
					t.Errorf("%q was not found; found %v", rule, found)
				}
			}
		})
	}
	// A peer that answers wrongly is the same as a driver that reads wrongly.
	rig := lineRig(func(*lineDriver) {})
	sound := rig.Answer
	rig.Answer = func(request []byte, value float64) []byte { return sound(request, value+0.01) }
	for _, f := range CheckDriver(t.Context(), rig) {
		caught[f.Rule] = true
	}
	for _, rule := range []string{"plain", "split", "doubled", "late", "silent", "cut", "noise before", "noise after", "garbled", "cancelled", "closed"} {
		if !caught[rule] {
			t.Errorf("no driver that is wrong on purpose was caught by %q", rule)
		}
	}
}
