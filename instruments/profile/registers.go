package profile

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"

	"proofrate/instruments"
	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// modbus is a profile of family registers.
type modbus struct {
	device      byte
	tcp         bool
	lowFirst    bool
	identity    []identityPart
	actions     map[string][]register
	readings    map[string]register
	transaction uint16
}

type identityPart struct {
	field string
	register
}

// register is one access.
type register struct {
	function byte // to read with
	address  uint16
	as       numberKind
	value    string // of an action: the value that is written; "" a constant
	constant int64
	scale    float64
	unit     quantity.Unit
}

// numberKind is how a number is held.
type numberKind struct {
	bytes  int
	signed bool
}

var numberKinds = map[string]numberKind{
	"int8": {1, true}, "uint8": {1, false}, "int16": {2, true}, "uint16": {2, false}, "int24": {3, true}, "uint24": {3, false},
	"int32": {4, true}, "uint32": {4, false},
}

// limits of what the kind holds.
func (k numberKind) limits() (low, high float64) {
	if k.signed {
		return -math.Ldexp(1, 8*k.bytes-1), math.Ldexp(1, 8*k.bytes-1) - 1
	}
	return 0, math.Ldexp(1, 8*k.bytes) - 1
}

// registers reads the family's part of a profile.
func (r *reader) registers() speaker {
	m := r.map_.Map("registers")
	b := &modbus{device: byte(m.Int("device")), tcp: m.Text("framing") == "tcp", lowFirst: m.Text("word-order") == "low-first", actions: map[string][]register{}, readings: map[string]register{}}
	if m.Has("device") && (m.Int("device") < 1 || m.Int("device") > 247) {
		r.add(m.ValueSpan("device"), "wrong-value", "", "device: an address from 1 to 247 was expected")
	}
	for _, e := range r.entries("identify") {
		fields := []string{"maker", "model", "serial", "firmware"}
		if !slices.Contains(fields, e.Key.Text()) {
			r.add(e.Key.Span, "unknown-key", source.DidYouMean(e.Key.Text(), fields), "an identity has no %q", e.Key.Text())
			continue
		}
		if reg, ok := r.register(e.Key.Span, document.Decode(e.Value, &registerTable, r.problems), nil); ok {
			b.identity = append(b.identity, identityPart{e.Key.Text(), reg})
		}
	}
	for _, e := range r.entries("actions") {
		a := r.actionOf(e.Key)
		if a == nil {
			continue
		}
		if e.Value.Form != document.Sequence {
			r.add(e.Value.Span, "wrong-form", "", "action %s: a list of register accesses was expected, this is %s", a.name, e.Value.Form)
			continue
		}
		for _, item := range e.Value.Items() {
			if reg, ok := r.register(item.Span, document.Decode(item, &registerTable, r.problems), a); ok {
				b.actions[a.name] = append(b.actions[a.name], reg)
			}
		}
	}
	for _, e := range r.entries("readings") {
		m := document.Decode(e.Value, &registerTable, r.problems)
		unit, ok := r.readingOf(e.Key, m)
		if reg, sound := r.register(e.Key.Span, m, nil); ok && sound {
			reg.unit = unit
			b.readings[e.Key.Text()] = reg
		}
	}
	return b
}

// register reads one access; a is the action it belongs to, nil for what is read.
func (r *reader) register(at source.Span, m document.Map, a *action) (register, bool) {
	reg := register{function: readHolding, as: numberKinds[m.Text("as")], scale: 1, constant: int64(m.Int("constant"))}
	key := "holding"
	if m.Stands("input") {
		key, reg.function = "input", readInput
	}
	switch {
	case m.Stands("holding") == m.Stands("input"):
		r.add(at, "wrong-register", "", "give the address of a holding or of an input register")
		return reg, false
	case m.Has(key) && (m.Int(key) < 0 || m.Int(key) > math.MaxUint16):
		r.add(m.ValueSpan(key), "wrong-value", "", "an address from 0 to 65535 was expected")
		return reg, false
	}
	reg.address = uint16(m.Int(key))
	if m.Has("scale") {
		if reg.scale = m.Number("scale"); reg.scale == 0 {
			r.add(m.ValueSpan("scale"), "wrong-value", "", "scale: zero makes every number zero")
			return reg, false
		}
	}
	if a == nil {
		for _, only := range []string{"value", "constant"} {
			if m.Stands(only) {
				r.add(m.KeySpan(only), "wrong-register", "", "%s belongs to an action", only)
			}
		}
		return reg, m.Has("as") && m.Has(key)
	}
	return reg, r.written(at, m, a, key, &reg)
}

// written checks what an action writes.
func (r *reader) written(at source.Span, m document.Map, a *action, key string, reg *register) bool {
	if key == "input" {
		r.add(m.KeySpan("input"), "wrong-register", "", "an input register cannot be written")
		return false
	}
	if m.Stands("value") == m.Stands("constant") {
		r.add(at, "wrong-register", "", "an action writes one of its values or a constant")
		return false
	}
	reg.value = m.Text("value")
	if reg.value == "" {
		return m.Has("as") && m.Has("constant")
	}
	var names []string
	for _, v := range a.values {
		names = append(names, v.name)
		if v.name != reg.value {
			continue
		}
		unit, err := quantity.ParseUnit(m.Text("unit"))
		if err != nil || unit.Dimension() != v.dimension {
			r.add(m.KeySpan("value"), "wrong-dimension", "state a unit such as "+unitOf(v.dimension), "%s is written in a unit of %s", v.name, v.dimension)
			return false
		}
		reg.unit = unit
		return m.Has("as")
	}
	r.add(m.ValueSpan("value"), "unknown-value", source.DidYouMean(reg.value, names), "action %s carries no %q", a.name, reg.value)
	return false
}

func (b *modbus) has(action string) bool { return len(b.actions[action]) > 0 }

func (b *modbus) unit(reading string) (quantity.Unit, bool) {
	reg, ok := b.readings[reading]
	return reg.unit, ok
}

// job makes the job of a PDU; got takes the answer's data.
func (b *modbus) job(l *line, op string, pdu []byte, got func(data []byte)) *job {
	j := &job{op: op}
	b.transaction++
	transaction := b.transaction
	if !b.tcp {
		j.request = rtuFrame(b.device, pdu)
	} else {
		j.request = tcpFrame(transaction, b.device, pdu)
	}
	j.parse = func(received []byte) (int, bool, error) {
		var (
			used   int
			done   bool
			answer []byte
			kind   instruments.Kind
			err    error
		)
		if !b.tcp {
			used, done, answer, kind, err = parseRTU(b.device, pdu, received)
		} else {
			used, done, answer, kind, err = parseTCP(transaction, b.device, pdu, received)
		}
		if done && err != nil {
			err = l.failure(j, kind, err)
		} else if done && got != nil {
			got(answer[2:])
		}
		return used, done, err
	}
	return j
}

func (b *modbus) act(l *line, name string, v values, _ int) ([]*job, error) {
	var jobs []*job
	for _, reg := range b.actions[name] {
		number := float64(reg.constant)
		if reg.value != "" {
			number = math.Round(v[reg.value].As(reg.unit) / reg.scale)
		}
		if low, high := reg.as.limits(); number < low || number > high {
			return nil, fmt.Errorf("%s of %s is beyond what its register holds; nothing was sent", reg.value, v[reg.value])
		}
		jobs = append(jobs, b.job(l, name, writePDU(reg.address, b.words(reg.as, int64(number))), nil))
	}
	if len(jobs) == 0 {
		return nil, errors.New("the profile has no such action")
	}
	return jobs, nil
}

// words puts a number into registers.
func (b *modbus) words(as numberKind, x int64) []uint16 {
	if as.bytes == 2 {
		return []uint16{uint16(x)}
	}
	high, low := uint16(uint32(x)>>16), uint16(x)
	if b.lowFirst {
		high, low = low, high
	}
	return []uint16{high, low}
}

// number takes a number out of registers.
func (b *modbus) number(as numberKind, data []byte) int64 {
	if as.bytes == 4 && b.lowFirst {
		data = []byte{data[2], data[3], data[0], data[1]}
	}
	return getNumber(data[:as.bytes], as.signed, true)
}

func (b *modbus) ask(l *line, reading string, _ int, into *quantity.Value) *job {
	reg := b.readings[reading]
	return b.job(l, "read "+reading, readPDU(reg.function, reg.address, (reg.as.bytes+1)/2), func(data []byte) {
		*into = quantity.Of(float64(b.number(reg.as, data))*reg.scale, reg.unit)
	})
}

func (b *modbus) identify(l *line, into *instruments.Identity) []*job {
	fields := map[string]*string{"maker": &into.Maker, "model": &into.Model, "serial": &into.Serial, "firmware": &into.Firmware}
	var jobs []*job
	for _, part := range b.identity {
		jobs = append(jobs, b.job(l, "identify", readPDU(part.function, part.address, (part.as.bytes+1)/2), func(data []byte) {
			x := float64(b.number(part.as, data)) * part.scale
			*fields[part.field] = strings.TrimSuffix(strconv.FormatFloat(x, 'f', -1, 64), ".")
		}))
	}
	return jobs
}

// silentInterval is what an RTU line needs between frames: 3.5 characters of 11 bits, and 1.75 ms from 19200 baud up.
// Source: Modbus over serial line V1.02, 2.5.1.1.
func silentInterval(baud int) time.Duration {
	if baud <= 0 || baud > 19200 {
		return 1750 * time.Microsecond
	}
	return time.Duration(3.5 * 11 / float64(baud) * float64(time.Second))
}
