package profile

import (
	"encoding/binary"
	"errors"
	"fmt"

	"proofrate/instruments"
)

// Function codes and exceptions of the Modbus application protocol, V1.1b3.
const (
	readHolding   = 0x03
	readInput     = 0x04
	writeSingle   = 0x06
	writeMultiple = 0x10
	exceptionFlag = 0x80
)

var exceptions = map[byte]string{
	1: "illegal function", 2: "illegal data address", 3: "illegal data value", 4: "server device failure", 5: "acknowledge, still at it",
	6: "server device busy", 8: "memory parity error", 10: "gateway path unavailable", 11: "gateway target does not respond",
}

var modbusCRC = checksums["CRC-16/MODBUS"].of

// modbusPDU makes a request: of so many registers, or with their contents.
func readPDU(function byte, address uint16, count int) []byte {
	p := []byte{function}
	p = binary.BigEndian.AppendUint16(p, address)
	return binary.BigEndian.AppendUint16(p, uint16(count))
}

func writePDU(address uint16, words []uint16) []byte {
	if len(words) == 1 {
		p := binary.BigEndian.AppendUint16([]byte{writeSingle}, address)
		return binary.BigEndian.AppendUint16(p, words[0])
	}
	p := binary.BigEndian.AppendUint16([]byte{writeMultiple}, address)
	p = binary.BigEndian.AppendUint16(p, uint16(len(words)))
	p = append(p, byte(2*len(words)))
	for _, w := range words {
		p = binary.BigEndian.AppendUint16(p, w)
	}
	return p
}

// rtuFrame wraps a PDU for a serial line: address, PDU, CRC with its low byte first.
func rtuFrame(device byte, pdu []byte) []byte {
	f := append([]byte{device}, pdu...)
	return binary.LittleEndian.AppendUint16(f, uint16(modbusCRC(f)))
}

// tcpFrame wraps a PDU for TCP: transaction, protocol 0, length, device.
func tcpFrame(transaction uint16, device byte, pdu []byte) []byte {
	f := binary.BigEndian.AppendUint16(nil, transaction)
	f = binary.BigEndian.AppendUint16(f, 0)
	f = binary.BigEndian.AppendUint16(f, uint16(len(pdu)+1))
	return append(append(f, device), pdu...)
}

// answerLength is how long the PDU of a sound answer to a request is.
func answerLength(request []byte) int {
	switch request[0] {
	case readHolding, readInput:
		return 2 + 2*int(binary.BigEndian.Uint16(request[3:]))
	}
	return 5 // an echo of function, address and value or count
}

// checkAnswer holds an answer's PDU against its request.
func checkAnswer(request, answer []byte) (instruments.Kind, error) {
	switch {
	case answer[0] == request[0]|exceptionFlag && len(answer) >= 2:
		what := exceptions[answer[1]]
		if what == "" {
			what = "unknown"
		}
		return instruments.Refused, fmt.Errorf("the device answers with exception %d: %s", answer[1], what)
	case answer[0] != request[0]:
		return instruments.Garbled, fmt.Errorf("an answer to function %d, function %d was asked for", answer[0], request[0])
	case len(answer) != answerLength(request):
		return instruments.Garbled, fmt.Errorf("an answer of %d bytes, %d were expected", len(answer), answerLength(request))
	case request[0] == readHolding || request[0] == readInput:
		if int(answer[1]) != len(answer)-2 {
			return instruments.Garbled, fmt.Errorf("the answer counts %d bytes and has %d", answer[1], len(answer)-2)
		}
	case string(answer[:5]) != string(request[:5]):
		return instruments.Garbled, errors.New("the answer does not repeat what was written")
	}
	return 0, nil
}

// parseRTU takes an answer off a serial line's bytes.
func parseRTU(device byte, request, received []byte) (used int, done bool, pdu []byte, kind instruments.Kind, err error) {
	if len(received) < 5 {
		return 0, false, nil, 0, nil
	}
	length := 1 + answerLength(request) + 2
	if received[1] == request[0]|exceptionFlag {
		length = 5
	}
	if len(received) < length {
		return 0, false, nil, 0, nil
	}
	frame := received[:length]
	if uint16(modbusCRC(frame[:length-2])) != binary.LittleEndian.Uint16(frame[length-2:]) {
		return len(received), true, nil, instruments.Garbled, errors.New("the answer's checksum is wrong")
	}
	if frame[0] != device {
		return len(received), true, nil, instruments.Garbled, fmt.Errorf("an answer of device %d, device %d was asked", frame[0], device)
	}
	pdu = frame[1 : length-2]
	kind, err = checkAnswer(request, pdu)
	return length, true, pdu, kind, err
}

// parseTCP takes an answer off a TCP link's bytes; answers to other transactions are passed over.
func parseTCP(transaction uint16, device byte, request, received []byte) (used int, done bool, pdu []byte, kind instruments.Kind, err error) {
	for {
		if len(received)-used < 8 {
			return 0, false, nil, 0, nil
		}
		head := received[used:]
		length := int(binary.BigEndian.Uint16(head[4:]))
		if binary.BigEndian.Uint16(head[2:]) != 0 || length < 3 || length > 254 {
			return len(received), true, nil, instruments.Garbled, errors.New("what came is no Modbus frame")
		}
		if len(head) < 6+length {
			return 0, false, nil, 0, nil
		}
		used += 6 + length
		if binary.BigEndian.Uint16(head) != transaction || head[6] != device {
			continue
		}
		pdu = head[7 : 6+length]
		kind, err = checkAnswer(request, pdu)
		return used, true, pdu, kind, err
	}
}
