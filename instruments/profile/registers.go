package profile

import (
	"context"
	"encoding/binary"
	"fmt"
	"math"
	"strconv"
	"time"

	"proofrate/instruments"
	"proofrate/limits/quantity"
)

// modbus is what a profile of the family registers says.
type modbus struct {
	device   byte
	tcp      bool
	lowFirst bool
	multiple bool // one register is written with function 16
	identity []identityAccess
	writes   map[string][]write
	accesses map[string]access
}

// access is where a number is and how it is held.
type access struct {
	function byte // to read with
	address  uint16
	as       numberKind // no bytes: one bit
	scaling
	unit quantity.Unit
}

type identityAccess struct {
	field string
	access
}

// write is one access of an action.
type write struct {
	access
	value    string // which of the action's values; "" the constant
	constant float64
}

func (b *modbus) can(action string) bool    { return b.writes[action] != nil }
func (b *modbus) reads(reading string) bool { _, ok := b.accesses[reading]; return ok }

func (b *modbus) sends(action, value string) bool {
	for _, w := range b.writes[action] {
		if w.value == value {
			return true
		}
	}
	return false
}

// rest is the silence between the frames of a serial line: 3.5 characters of 11 bits, and 1.75 ms above 19200 baud.
// Source: Modbus over serial line V1.02, 2.5.1.1.
func (b *modbus) rest(baud int) time.Duration {
	switch {
	case b.tcp:
		return 0
	case baud <= 0 || baud > 19200:
		return 1750 * time.Microsecond
	}
	return time.Duration(math.Round(3.5 * 11 / float64(baud) * float64(time.Second)))
}

// job makes one of a request; got takes the answer's data.
func (b *modbus) job(l *line, op string, request []byte, got func(data []byte) error) *job {
	j := &job{op: op, numbered: b.tcp}
	l.number++
	transaction := l.number
	if b.tcp {
		j.request = tcpFrame(transaction, b.device, request)
	} else {
		j.request = rtuFrame(b.device, request)
	}
	j.parse = func(received []byte) (used int, answered bool, err error) {
		var pdu []byte
		if b.tcp {
			pdu, used, err = tcpAnswer(transaction, b.device, request, received)
		} else {
			pdu, used = rtuAnswer(b.device, request, received)
		}
		if err != nil {
			return used, true, l.failure(op, instruments.Garbled, err)
		}
		if pdu == nil {
			return used, false, nil
		}
		if refused := exception(pdu); refused != nil {
			return used, true, l.failure(op, instruments.Refused, fmt.Errorf("%w (to % X)", refused, request))
		}
		if got != nil {
			if err := got(pdu[2:]); err != nil {
				return used, true, l.failure(op, instruments.Garbled, err)
			}
		}
		return used, true, nil
	}
	return j
}

// act writes the registers of an action in order, once all the numbers are known to fit.
func (b *modbus) act(ctx context.Context, l *line, action string, v values, _ int) error {
	var requests [][]byte
	for _, w := range b.writes[action] {
		count := w.constant
		if w.value != "" {
			count = w.count(v[w.value].As(w.unit))
		}
		request, ok := b.writeRequest(&w.access, count)
		if !ok {
			return l.failure(action, instruments.Refused, fmt.Errorf("%s %s is beyond what its register holds; nothing was written", w.value, v[w.value]))
		}
		requests = append(requests, request)
	}
	for _, request := range requests {
		if err := l.do(ctx, b.job(l, action, request, nil)); err != nil {
			return err
		}
	}
	return nil
}

// writeRequest makes the request that writes a number of counts; not ok if they do not fit.
func (b *modbus) writeRequest(a *access, count float64) (request []byte, ok bool) {
	if a.as.bytes == 0 {
		return writePDU(writeCoil, a.address, []uint16{coilOn * uint16(count)}), true
	}
	if !a.as.float {
		count = math.Round(count)
	}
	if low, high := a.as.holds(); !(count >= low && count <= high) {
		return nil, false
	}
	bits := uint32(int64(count))
	if a.as.float {
		bits = math.Float32bits(float32(count))
	}
	words := []uint16{uint16(bits)}
	if a.as.bytes == 4 {
		words = []uint16{uint16(bits >> 16), uint16(bits)}
		if b.lowFirst {
			words[0], words[1] = words[1], words[0]
		}
	}
	function := byte(writeSingle)
	if b.multiple || len(words) > 1 {
		function = writeMultiple
	}
	return writePDU(function, a.address, words), true
}

func (b *modbus) readRequest(a *access) []byte {
	return readPDU(a.function, a.address, max(1, a.as.bytes/2))
}

// number takes a number out of an answer's data.
func (b *modbus) number(a *access, data []byte) (float64, error) {
	if a.as.bytes == 0 {
		return a.scaling.number(float64(data[0] & 1)), nil
	}
	var swapped [4]byte
	if a.as.bytes == 4 && b.lowFirst {
		swapped = [4]byte{data[2], data[3], data[0], data[1]}
		data = swapped[:]
	}
	if !a.as.float {
		return a.scaling.number(float64(integer(data[:a.as.bytes], a.as.signed, true))), nil
	}
	x := float64(math.Float32frombits(binary.BigEndian.Uint32(data)))
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return 0, fmt.Errorf("the register holds %v, which is no value", x)
	}
	return a.scaling.number(x), nil
}

func (b *modbus) ask(l *line, reading string, _ int, into *quantity.Value) *job {
	a := b.accesses[reading]
	j := b.job(l, "read "+reading, b.readRequest(&a), func(data []byte) error {
		x, err := b.number(&a, data)
		*into = quantity.Of(x, a.unit)
		return err
	})
	j.value = func() string { return into.String() }
	return j
}

func (b *modbus) identify(ctx context.Context, l *line) (id instruments.Identity, err error) {
	fields := map[string]*string{"maker": &id.Maker, "model": &id.Model, "serial": &id.Serial, "firmware": &id.Firmware}
	for i := range b.identity {
		part := &b.identity[i]
		j := b.job(l, "identify", b.readRequest(&part.access), func(data []byte) error {
			x, err := b.number(&part.access, data)
			*fields[part.field] = strconv.FormatFloat(x, 'f', -1, 64)
			return err
		})
		if err := l.do(ctx, j); err != nil {
			return id, err
		}
	}
	return id, nil
}
