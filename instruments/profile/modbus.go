package profile

import (
	"encoding/binary"
	"errors"
	"fmt"
)

// Function codes of the Modbus application protocol, V1.1b3, section 6.
const (
	readCoils     = 0x01
	readDiscretes = 0x02
	readHolding   = 0x03
	readInput     = 0x04
	writeCoil     = 0x05
	writeSingle   = 0x06
	writeMultiple = 0x10
	exceptionFlag = 0x80
)

// exceptions are those of section 7.
var exceptions = map[byte]string{
	1: "it does not know the function", 2: "it has no such address", 3: "it does not take the value", 4: "it has failed",
	5: "it is still at work on the request", 6: "it is busy", 8: "its memory has failed", 10: "the gateway has no path to it", 11: "it does not answer the gateway",
}

const (
	rtuHead, rtuTail = 1, 2 // device; CRC
	tcpHead          = 7    // transaction, protocol, length, device
	tcpLengthMost    = 254  // of device and PDU
	coilOn           = 0xff00
)

var modbusCRC = checksums["CRC-16/MODBUS"].of

// readPDU makes a request for so many registers or bits.
func readPDU(function byte, address uint16, count int) []byte {
	p := binary.BigEndian.AppendUint16([]byte{function}, address)
	return binary.BigEndian.AppendUint16(p, uint16(count))
}

// writePDU makes a request that writes one register or coil, or several registers.
func writePDU(function byte, address uint16, words []uint16) []byte {
	p := binary.BigEndian.AppendUint16([]byte{function}, address)
	if function == writeMultiple {
		p = binary.BigEndian.AppendUint16(p, uint16(len(words)))
		p = append(p, byte(2*len(words)))
	}
	for _, w := range words {
		p = binary.BigEndian.AppendUint16(p, w)
	}
	return p
}

// rtuFrame wraps a PDU for a serial line: device, PDU, CRC with its low byte first.
func rtuFrame(device byte, pdu []byte) []byte {
	f := append(make([]byte, 0, rtuHead+len(pdu)+rtuTail), device)
	f = append(f, pdu...)
	return binary.LittleEndian.AppendUint16(f, uint16(modbusCRC(f)))
}

// tcpFrame wraps a PDU for TCP: transaction, protocol 0, length, device, PDU.
func tcpFrame(transaction uint16, device byte, pdu []byte) []byte {
	f := binary.BigEndian.AppendUint16(make([]byte, 0, tcpHead+len(pdu)), transaction)
	f = binary.BigEndian.AppendUint16(f, 0)
	f = binary.BigEndian.AppendUint16(f, uint16(1+len(pdu)))
	return append(append(f, device), pdu...)
}

// answerLength is how long the PDU of the answer to a request is.
func answerLength(request []byte) int {
	switch count := int(binary.BigEndian.Uint16(request[3:])); request[0] {
	case readCoils, readDiscretes:
		return 2 + (count+7)/8
	case readHolding, readInput:
		return 2 + 2*count
	}
	return 5 // function and address, and the value or the count
}

// answers says whether a PDU can be the answer to a request: an exception of its function, the number of bytes that was
// asked for, or what was written.
func answers(request, pdu []byte) bool {
	if len(pdu) == 2 && pdu[0] == request[0]|exceptionFlag {
		return true
	}
	if len(pdu) != answerLength(request) || pdu[0] != request[0] {
		return false
	}
	if request[0] <= readInput {
		return int(pdu[1]) == len(pdu)-2
	}
	return string(pdu) == string(request[:5])
}

// rtuAnswer finds the answer to a request in what has arrived; used is 0 if it is not there yet. Noise before it costs
// nothing: with device, function, length and CRC an answer is told from anything else.
func rtuAnswer(device byte, request, received []byte) (pdu []byte, used int) {
	for at := range received {
		rest := received[at:]
		if rest[0] != device {
			continue
		}
		for _, length := range [...]int{answerLength(request), 2} {
			end := rtuHead + length
			if len(rest) < end+rtuTail || uint16(modbusCRC(rest[:end])) != binary.LittleEndian.Uint16(rest[end:]) {
				continue
			}
			if pdu := rest[rtuHead:end]; answers(request, pdu) {
				return pdu, at + end + rtuTail
			}
		}
	}
	return nil, 0
}

var errNoModbus = errors.New("what came is no Modbus frame; is the port another service's?")

// tcpAnswer takes one frame off what has arrived; used is 0 if it is not whole yet. A frame of another transaction is
// used up and gives no PDU.
func tcpAnswer(transaction uint16, device byte, request, received []byte) (pdu []byte, used int, err error) {
	if len(received) < tcpHead {
		return nil, 0, nil
	}
	length := int(binary.BigEndian.Uint16(received[4:]))
	if binary.BigEndian.Uint16(received[2:]) != 0 || length < 3 || length > tcpLengthMost {
		return nil, len(received), errNoModbus
	}
	end := tcpHead - 1 + length
	if len(received) < end {
		return nil, 0, nil
	}
	if binary.BigEndian.Uint16(received) != transaction || received[tcpHead-1] != device {
		return nil, end, nil
	}
	if pdu = received[tcpHead:end]; !answers(request, pdu) {
		return nil, end, fmt.Errorf("% X is no answer to % X", pdu, request)
	}
	return pdu, end, nil
}

// exception says why a device refuses, nil if it does not.
func exception(pdu []byte) error {
	if pdu[0]&exceptionFlag == 0 {
		return nil
	}
	what := exceptions[pdu[1]]
	if what == "" {
		what = "its maker's manual says why"
	}
	return fmt.Errorf("the device refuses with exception %d: %s", pdu[1], what)
}
