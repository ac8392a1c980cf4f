package profile

import (
	"bytes"
	"context"
	"encoding/binary"
	"errors"
	"math"
	"strconv"
	"strings"
	"testing"
	"time"

	"proofrate/instruments"
	"proofrate/instruments/instrumentstest"
	"proofrate/instruments/link"
	"proofrate/limits/quantity"
)

// requestLike makes the PDU of a published request with our own functions.
func requestLike(t *testing.T, published []byte) []byte {
	t.Helper()
	if len(published) < 5 {
		return nil
	}
	address, second := binary.BigEndian.Uint16(published[1:]), binary.BigEndian.Uint16(published[3:])
	switch function := published[0]; function {
	case readCoils, readDiscretes, readHolding, readInput:
		return readPDU(function, address, int(second))
	case writeCoil, writeSingle:
		return writePDU(function, address, []uint16{second})
	case writeMultiple:
		var words []uint16
		for p := published[6:]; len(p) > 0; p = p[2:] {
			words = append(words, binary.BigEndian.Uint16(p))
		}
		return writePDU(function, address, words)
	}
	return nil
}

// TestPublishedExchanges holds our frames against the examples of the Modbus application protocol, section 6.
func TestPublishedExchanges(t *testing.T) {
	const device = 0x11
	seen := 0
	for _, row := range reference(t, "modbus_pdu_examples.csv") {
		published := octets(t, row["request_pdu"])
		request := requestLike(t, published)
		if request == nil {
			continue // a function that no profile uses
		}
		seen++
		if !bytes.Equal(request, published) {
			t.Errorf("%s: request % X, published % X", row["function"], request, published)
		}
		if got, want := rtuFrame(device, request), octets(t, row["rtu_request"]); !bytes.Equal(got, want) {
			t.Errorf("%s: frame % X, published % X", row["function"], got, want)
		}
		frame, want := octets(t, row["rtu_response"]), octets(t, row["response_pdu"])
		if pdu, used := rtuAnswer(device, request, frame); !bytes.Equal(pdu, want) || used != len(frame) {
			t.Errorf("%s: answer % X of %d bytes, published % X", row["function"], pdu, used, want)
		}
		if pdu, used := rtuAnswer(device, request, frame[:len(frame)-1]); pdu != nil || used != 0 {
			t.Errorf("%s: an answer cut short was taken", row["function"])
		}
		if pdu, used := rtuAnswer(device, request, append([]byte{device, 3, 9, 0xff}, frame...)); !bytes.Equal(pdu, want) || used != 4+len(frame) {
			t.Errorf("%s: an answer behind noise was not found", row["function"])
		}
		if pdu, _ := rtuAnswer(device+1, request, frame); pdu != nil {
			t.Errorf("%s: another device's answer was taken", row["function"])
		}
		if strings.HasPrefix(row["function"], "exception") != (exception(want) != nil) {
			t.Errorf("%s: exception is %v", row["function"], exception(want))
		}
	}
	if seen < 8 {
		t.Errorf("only %d examples", seen)
	}
}

// TestPublishedFrames: CRC, silent interval, TCP header and exception codes of the Modbus specifications.
func TestPublishedFrames(t *testing.T) {
	rows := map[string]string{}
	codes := map[byte]bool{}
	for _, row := range reference(t, "modbus_frames.csv") {
		rows[row["item"]] = row["value"]
		if row["kind"] == "exception" {
			code, err := strconv.ParseUint(row["item"], 16, 8)
			if err != nil {
				continue // a row about the function code, not a code
			}
			codes[byte(code)] = true
		}
	}
	if got := modbusCRC([]byte{2, 7}); got != 0x1241 || !strings.HasPrefix(rows["CRC of 02 07"], "0x1241") {
		t.Errorf("CRC of 02 07 is %#x, published %s", got, rows["CRC of 02 07"])
	}
	for _, body := range []string{"01 03 00 6B 00 03", "01 03 06 02 2B 00 00 00 64", "11 03 00 6B 00 03"} {
		p := octets(t, body)
		if got, want := rtuFrame(p[0], p[1:]), octets(t, body+rows[body]); rows[body] == "" || !bytes.Equal(got, want) {
			t.Errorf("frame % X, published % X", got, want)
		}
	}
	for baud, item := range map[int]string{9600: "t3.5 at 9600 bit/s", 19200: "t3.5 at 19200 bit/s"} {
		published, err := strconv.ParseFloat(strings.TrimSuffix(rows[item], " ms"), 64)
		if err != nil {
			t.Fatal(err)
		}
		if got := (&modbus{}).rest(baud).Seconds() * 1000; math.Abs(got-published) > 5e-5 {
			t.Errorf("silent interval at %d baud is %g ms, published %g", baud, got, published)
		}
	}
	if got := (&modbus{}).rest(115200); got != 1750*time.Microsecond {
		t.Errorf("silent interval at 115200 baud is %v, published 1.75 ms", got)
	}
	want := octets(t, rows["example request"])
	if got := tcpFrame(1, 0x11, readPDU(readHolding, 0x6b, 3)); !bytes.Equal(got, want) || len(want) != 12 {
		t.Errorf("TCP frame % X, published % X", got, want)
	}
	for code := range codes {
		if exceptions[code] == "" {
			t.Errorf("exception %d has no words", code)
		}
	}
	if len(codes) < 7 {
		t.Errorf("only %d exceptions", len(codes))
	}
}

// TestRegisterEncodings: 16- and 32-bit numbers in both word orders.
func TestRegisterEncodings(t *testing.T) {
	seen := 0
	for _, row := range reference(t, "register_encodings.csv") {
		kind, known := numberKinds[row["type"]]
		if !known || kind.bytes < 2 {
			continue
		}
		seen++
		want, err := strconv.ParseFloat(row["value"], 64)
		if err != nil {
			t.Fatal(err)
		}
		for _, order := range []struct {
			column   string
			lowFirst bool
		}{{"big_endian_words", false}, {"word_swapped", true}} {
			b, a := &modbus{lowFirst: order.lowFirst}, &access{as: kind, scaling: newScaling(1, 0)}
			data := octets(t, row[order.column])
			got, err := b.number(a, data)
			if math.IsNaN(want) {
				if err == nil {
					t.Errorf("a register of NaN gave %v", got)
				}
				continue
			}
			if kind.float {
				want = float64(float32(want))
			}
			if err != nil || got != want {
				t.Errorf("%s %s: % X is %v, %v", row["value"], order.column, data, got, err)
			}
			request, ok := b.writeRequest(a, want)
			if !ok || !bytes.HasSuffix(request, data) {
				t.Errorf("%s %s is written as % X, published % X", row["value"], order.column, request, data)
			}
		}
	}
	if seen < 7 {
		t.Errorf("only %d encodings", seen)
	}
}

// TestRegistersHold: what does not fit a register is not written.
func TestRegistersHold(t *testing.T) {
	for _, c := range []struct {
		kind  string
		count float64
		fits  bool
	}{
		{"int16", 32767, true}, {"int16", 32767.4, true}, {"int16", 32768, false}, {"int16", -32768, true}, {"int16", -32769, false},
		{"uint16", -1, false}, {"uint16", 65535, true}, {"uint16", 65536, false}, {"int32", 2147483648, false}, {"uint32", 4294967295, true},
		{"uint32", 4294967296, false}, {"float32", 1e39, false}, {"int16", math.NaN(), false},
	} {
		if _, ok := (&modbus{}).writeRequest(&access{as: numberKinds[c.kind]}, c.count); ok != c.fits {
			t.Errorf("%s of %v: fits is %v", c.kind, c.count, ok)
		}
	}
}

// TestScaling: hundredths are read as they are written, and counts come back.
func TestScaling(t *testing.T) {
	s := newScaling(0.01, 0)
	for count := -4000.0; count <= 12500; count++ {
		want, err := strconv.ParseFloat(strconv.FormatFloat(count/100, 'f', 2, 64), 64)
		if err != nil {
			t.Fatal(err)
		}
		if got := s.number(count); got != want || math.Round(s.count(got)) != count {
			t.Fatalf("%v counts of 0.01 are %v and back %v", count, got, s.count(got))
		}
	}
	if s := newScaling(0.25, -40); s.number(260) != 25 || s.count(25) != 260 {
		t.Errorf("260 counts of 0.25 from -40 are %v", s.number(260))
	}
	if s := newScaling(3, 1); s.number(2) != 7 || s.count(7) != 2 {
		t.Errorf("2 counts of 3 from 1 are %v", s.number(2))
	}
}

const tcpChamber = `
profile: hot-box
title: Chamber with Modbus over TCP
family: registers
roles: [chamber, meter]
timeout: 0.2 s
registers: {device: 7, framing: tcp, word-order: low-first, write: multiple}
actions:
  set-temperature:
    - {holding: 100, as: float32, value: temperature, unit: degC}
    - {holding: 102, as: uint16, value: ramp, unit: K/h, scale: 10}
    - {coil: 3, constant: 1}
  off:
    - {coil: 3, constant: 0}
readings:
  chamber.temperature: {input: 0, as: float32, unit: degC}
  value: {discrete: 9, unit: "1"}
`

// peer is the far end of a memory link that answers each request with what a script says.
func peer(t testing.TB, script func(request []byte) [][]byte) (link.Link, *instrumentstest.Pacer) {
	t.Helper()
	pacer := instrumentstest.NewPacer()
	host, device := link.Memory(pacer, "peer")
	device.OnSend(func() {
		request := bytes.Clone(device.Received())
		device.Discard(len(request))
		for i, answer := range script(request) {
			device.Deliver(answer, pacer.Now().Add(time.Duration(i+1)*time.Millisecond))
		}
	})
	return host, pacer
}

// mbap frames a PDU for TCP as the messaging guide describes it (V1.0b, 3.1.3).
func mbap(transaction []byte, device byte, pdu ...byte) []byte {
	return append([]byte{transaction[0], transaction[1], 0, 0, 0, byte(len(pdu) + 1), device}, pdu...)
}

func TestModbusTCP(t *testing.T) {
	var sent []string
	l, _ := peer(t, func(request []byte) [][]byte {
		pdu := request[tcpHead:]
		sent = append(sent, string(pdu))
		stale := mbap([]byte{0xee, 0xee}, 7, 4, 4, 0, 0, 0, 0) // the answer to a transaction of long ago
		switch pdu[0] {
		case 4: // 23.5 = 41BC 0000, low word first
			return [][]byte{stale, mbap(request, 7, 4, 4, 0, 0, 0x41, 0xbc)}
		case 2:
			return [][]byte{mbap(request, 7, 2, 1, 1)}
		case 16:
			return [][]byte{mbap(request, 7, pdu[:5]...)}
		}
		return [][]byte{mbap(request, 7, pdu...)}
	})
	p := load(t, "hot-box", []byte(tcpChamber))
	chamber, err := p.Chamber(l, "C1")
	if err != nil {
		t.Fatal(err)
	}
	ctx := t.Context()
	err = chamber.SetTemperature(ctx, quantity.Of(-40, quantity.MustUnit("degC")), quantity.Of(2, quantity.MustUnit("K/min")))
	if err != nil {
		t.Fatal(err)
	}
	want := []string{
		"\x10\x00\x64\x00\x02\x04\x00\x00\xc2\x20", // -40 is C220 0000
		"\x10\x00\x66\x00\x01\x02\x00\x0c",         // 120 K/h in tens
		"\x05\x00\x03\xff\x00",
	}
	if strings.Join(sent, "|") != strings.Join(want, "|") {
		t.Errorf("sent %q, want %q", sent, want)
	}
	reading, err := instruments.Read(ctx, chamber, "chamber.temperature")
	if err != nil || reading.Value != quantity.Of(23.5, quantity.MustUnit("degC")) {
		t.Errorf("read %v, %v", reading.Value, err)
	}
	door, err := p.Meter(l, "door")
	if err != nil {
		t.Fatal(err)
	}
	if reading, err = instruments.Read(ctx, door, "door.value"); err != nil || reading.Value.Number != 1 {
		t.Errorf("read %v, %v", reading.Value, err)
	}
	if id, err := chamber.Identify(ctx); err != nil || id.Model != "Chamber with Modbus over TCP" {
		t.Errorf("identity %+v, %v; the title stands for what the instrument is not asked", id, err)
	}
	if id := p.MeterUnit; id.Dimension() != quantity.Ratio {
		t.Errorf("the meter's unit is %v", id)
	}
}

// TestModbusRefusals: an exception is a refusal with its words, at once and not repeated.
func TestModbusRefusals(t *testing.T) {
	for code, words := range map[byte]string{2: "no such address", 6: "busy", 77: "manual"} {
		requests := 0
		l, _ := peer(t, func(request []byte) [][]byte {
			requests++
			return [][]byte{mbap(request, 7, request[tcpHead]|0x80, code)}
		})
		chamber, err := load(t, "hot-box", []byte(tcpChamber)).Chamber(l, "C1")
		if err != nil {
			t.Fatal(err)
		}
		err = chamber.Off(t.Context())
		if kindOf(err) != instruments.Refused || !strings.Contains(err.Error(), words) || requests != 1 {
			t.Errorf("exception %d gave %v after %d requests", code, err, requests)
		}
	}
}

// TestModbusSilence: on a serial line a request keeps the silent interval after what came before.
func TestModbusSilence(t *testing.T) {
	var at []time.Time
	var pacer *instrumentstest.Pacer
	l, pacer := peer(t, func(request []byte) [][]byte {
		at = append(at, pacer.Now())
		return [][]byte{rtuAnswerOf(request, 21)}
	})
	chamber, err := loadShipped(t, "chamber-registers").Chamber(l, "C1")
	if err != nil {
		t.Fatal(err)
	}
	var pending []instruments.Pending
	for range 3 {
		p, err := chamber.Ask(t.Context(), "chamber.temperature")
		if err != nil {
			t.Fatal(err)
		}
		pending = append(pending, p)
	}
	for _, p := range pending {
		if _, err := p.Take(t.Context()); err != nil {
			t.Fatal(err)
		}
	}
	for i := 1; i < len(at); i++ {
		// One millisecond to the answer, then 3.5 characters of 11 bits at 19200 baud.
		if got := at[i].Sub(at[i-1]); got < time.Millisecond+2005*time.Microsecond || got > 4*time.Millisecond {
			t.Errorf("request %d came %v after the one before", i, got)
		}
	}
	if len(at) != 3 {
		t.Errorf("%d requests", len(at))
	}
}

// TestModbusNotFromHere: an answer of another service on the port is an error of its own.
func TestModbusNotFromHere(t *testing.T) {
	l, _ := peer(t, func([]byte) [][]byte { return [][]byte{[]byte("HTTP/1.1 400 Bad Request\r\n")} })
	chamber, err := load(t, "hot-box", []byte(tcpChamber)).Chamber(l, "C1")
	if err != nil {
		t.Fatal(err)
	}
	if err := chamber.Off(context.Background()); kindOf(err) != instruments.Garbled || !errors.Is(err, errNoModbus) {
		t.Errorf("got %v", err)
	}
}
