package virtual

import (
	"fmt"
	"math/rand/v2"
	"regexp"
	"strings"
	"time"
)

const (
	supplyDelay    = 3 * time.Millisecond
	supplyChannels = 4
	supplyMaxVolts = 60.0
	supplyMaxAmps  = 5.0
	supplyRipple   = 2e-3 // V, standard deviation of a voltage reading
	supplyNoise    = 5e-4 // A, of a current reading
	tripAfter      = 20 * time.Millisecond
	errorsKept     = 20
)

// supply is a supply of four channels behind SCPI commands.
type supply struct {
	lines
	channels [supplyChannels]channel
	errors   []string
	noise    *rand.Rand
}

// channel feeds one gyro, or nothing.
type channel struct {
	volts, limit float64
	on           bool
	gyro         *gyro
	change       uint64 // counts what may start or end an overload
}

func newSupply(w *World, seed uint64) *supply {
	s := &supply{noise: stream(seed, "supply readings")}
	s.lines = lines{w: w, end: "\n", delay: supplyDelay, do: s.command}
	s.reset()
	return s
}

func (s *supply) reset() {
	for i := range s.channels {
		c := &s.channels[i]
		c.volts, c.limit = 0, 1
		s.turn(c, false)
	}
}

// Errors of SCPI-99 volume 2, chapter 21.8.
const (
	scpiNone        = `0,"No error"`
	scpiSyntax      = `-102,"Syntax error"`
	scpiType        = `-104,"Data type error"`
	scpiMissing     = `-109,"Missing parameter"`
	scpiHeader      = `-113,"Undefined header"`
	scpiRange       = `-222,"Data out of range"`
	scpiParameter   = `-224,"Illegal parameter value"`
	scpiOverflow    = `-350,"Queue overflow"`
	scpiTooMany     = `-108,"Parameter not allowed"`
	supplyIdentity  = "PROOFRATE,VIRTUAL SUPPLY,VS-0001,1.0"
	responseNumbers = "%+.5E" // NR3 of IEEE Std 488.2
)

func (s *supply) fail(message string) {
	switch n := len(s.errors); {
	case n < errorsKept-1:
		s.errors = append(s.errors, message)
	case n == errorsKept-1:
		s.errors = append(s.errors, scpiOverflow)
	}
}

// scpiForm splits a command into header, value and channel: "VOLT 5.0,(@1)", "VOLT? (@1)", "*RST".
var scpiForm = regexp.MustCompile(`^([*A-Za-z:]+\??)(?: +([^,(@]+?))?(?: *(?:,| ) *\(@([0-9]+)\))?$`)

// scpiCommand is a row of the supply's language. Its header is written long, the capitals being the short form.
type scpiCommand struct {
	header         string
	value, channel bool // what it takes
	do             func(s *supply, c *channel, value string) string
}

var scpiCommands = []scpiCommand{
	{"*IDN?", false, false, func(*supply, *channel, string) string { return supplyIdentity }},
	{"*RST", false, false, func(s *supply, _ *channel, _ string) string { s.reset(); return "" }},
	{"*CLS", false, false, func(s *supply, _ *channel, _ string) string { s.errors = nil; return "" }},
	{"*OPC?", false, false, func(*supply, *channel, string) string { return "1" }},
	{"SYSTem:ERRor?", false, false, (*supply).nextError},
	{"VOLTage", true, true, (*supply).setVolts},
	{"CURRent", true, true, (*supply).setLimit},
	{"OUTPut", true, true, (*supply).output},
	{"VOLTage?", false, true, func(_ *supply, c *channel, _ string) string { return fmt.Sprintf(responseNumbers, c.volts) }},
	{"CURRent?", false, true, func(_ *supply, c *channel, _ string) string { return fmt.Sprintf(responseNumbers, c.limit) }},
	{"OUTPut?", false, true, func(_ *supply, c *channel, _ string) string { return fmt.Sprint(btoi(c.on)) }},
	{"MEASure:VOLTage?", false, true, (*supply).measureVolts},
	{"MEASure:CURRent?", false, true, (*supply).measureAmps},
}

// named says whether a header as sent means the one of the table: each part short or long, in any case.
func (c *scpiCommand) named(header string) bool {
	sent, parts := strings.Split(strings.TrimPrefix(header, ":"), ":"), strings.Split(c.header, ":")
	if len(sent) != len(parts) {
		return false
	}
	for i, long := range parts {
		short := strings.Map(func(r rune) rune {
			if r >= 'a' && r <= 'z' {
				return -1
			}
			return r
		}, long)
		if !strings.EqualFold(sent[i], long) && !strings.EqualFold(sent[i], short) {
			return false
		}
	}
	return true
}

func (s *supply) command(line string) (answer string, answers bool) {
	found := scpiForm.FindStringSubmatch(strings.TrimSpace(line))
	if found == nil {
		s.fail(scpiSyntax)
		return "", false
	}
	header, value, number := found[1], found[2], found[3]
	for _, c := range scpiCommands {
		if !c.named(header) {
			continue
		}
		var to *channel
		switch {
		case c.value != (value != ""), c.channel != (number != ""):
			s.fail(map[bool]string{true: scpiMissing, false: scpiTooMany}[c.value && value == "" || c.channel && number == ""])
			return "", false
		case c.channel:
			if len(number) != 1 || number < "1" || number > fmt.Sprint(supplyChannels) {
				s.fail(scpiRange)
				return "", false
			}
			to = &s.channels[number[0]-'1']
		}
		answer = c.do(s, to, value)
		return answer, answer != ""
	}
	s.fail(scpiHeader)
	return "", false
}

func (s *supply) nextError(*channel, string) string {
	if len(s.errors) == 0 {
		return scpiNone
	}
	first := s.errors[0]
	s.errors = s.errors[1:]
	return first
}

// setting reads a number from 0 to a greatest one.
func (s *supply) setting(value string, most float64, to *float64) bool {
	x, ok := decimal(value)
	switch {
	case !ok:
		s.fail(scpiType)
	case x < 0 || x > most:
		s.fail(scpiRange)
	default:
		*to = x
		return true
	}
	return false
}

func (s *supply) setVolts(c *channel, value string) string {
	if s.setting(value, supplyMaxVolts, &c.volts) {
		s.turn(c, c.on)
	}
	return ""
}

func (s *supply) setLimit(c *channel, value string) string {
	if s.setting(value, supplyMaxAmps, &c.limit) {
		s.turn(c, c.on)
	}
	return ""
}

func (s *supply) output(c *channel, value string) string {
	switch strings.ToUpper(value) {
	case "ON", "1":
		s.turn(c, true)
	case "OFF", "0":
		s.turn(c, false)
	default:
		s.fail(scpiParameter)
	}
	return ""
}

// turn switches a channel, or lets a new setting take effect. A current beyond the limit for tripAfter switches it off;
// as a gyro's current only falls after power-on, it is enough to look once, at the end of that time.
func (s *supply) turn(c *channel, on bool) {
	c.on = on
	c.change++
	s.w.feed(c)
	if !on {
		return
	}
	change := c.change
	s.w.after(tripAfter, func() {
		if c.on && c.change == change && s.amps(c) > c.limit {
			s.turn(c, false)
		}
	})
}

func (s *supply) amps(c *channel) float64 {
	if !c.on || c.gyro == nil {
		return 0
	}
	return c.gyro.load(s.w.now)
}

func (s *supply) measureVolts(c *channel, _ string) string {
	volts := 0.0
	if c.on {
		volts = c.volts
	}
	return fmt.Sprintf(responseNumbers, volts+supplyRipple*s.noise.NormFloat64())
}

func (s *supply) measureAmps(c *channel, _ string) string {
	return fmt.Sprintf(responseNumbers, s.amps(c)+supplyNoise*s.noise.NormFloat64())
}

// feed gives a gyro the voltage of its channel, after it has lived through what was before.
func (w *World) feed(c *channel) {
	if c.gyro == nil {
		return
	}
	w.catchUp()
	volts := 0.0
	if c.on {
		volts = c.volts
	}
	c.gyro.power(volts, w.now)
}
