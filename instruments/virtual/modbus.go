package virtual

import "encoding/binary"

// Modbus RTU, server side: MODBUS Application Protocol V1.1b3 section 6, over serial line V1.02 section 2.5.

// Function codes that the chamber knows.
const (
	readHolding    = 3
	readInput      = 4
	writeRegister  = 6
	writeRegisters = 16
)

// Exceptions.
const (
	illegalFunction = 1
	illegalAddress  = 2
	illegalValue    = 3
)

// registersMax of one request to read, and to write.
const (
	readMax  = 125
	writeMax = 123
)

// crcModbus is CRC-16/MODBUS: polynomial 8005 reflected, start FFFF; sent low byte first.
func crcModbus(p []byte) uint16 {
	crc := uint16(0xffff)
	for _, b := range p {
		crc ^= uint16(b)
		for range 8 {
			if crc&1 != 0 {
				crc = crc>>1 ^ 0xa001
			} else {
				crc >>= 1
			}
		}
	}
	return crc
}

// rtuFrame puts a server's address before a PDU and the CRC behind.
func rtuFrame(address byte, pdu []byte) []byte {
	frame := append([]byte{address}, pdu...)
	return binary.LittleEndian.AppendUint16(frame, crcModbus(frame))
}

// rtuRequest takes the first whole request off p: its address and PDU, and how many bytes it and the noise before it
// took. A nil PDU with n of 0 says that more bytes are needed; bytes that cannot begin a request are skipped one by one.
func rtuRequest(p []byte) (address byte, pdu []byte, n int) {
	for ; n < len(p); n++ {
		rest := p[n:]
		if len(rest) < 8 {
			return 0, nil, n
		}
		size := 8
		if rest[1] == writeRegisters {
			size = 9 + int(rest[6])
		}
		if size > len(rest) {
			if size <= 256 && int(rest[6]) <= 2*writeMax {
				return 0, nil, n
			}
			continue
		}
		if crcModbus(rest[:size-2]) == binary.LittleEndian.Uint16(rest[size-2:size]) {
			return rest[0], rest[1 : size-2], n + size
		}
	}
	return 0, nil, n
}

// registers is what a server lets its client see.
type registers interface {
	holding(address uint16) (uint16, bool)
	input(address uint16) (uint16, bool)
	// set writes one holding register; it answers an exception, or 0.
	set(address, value uint16) (exception byte)
}

// serveModbus carries out one request and gives the response's PDU.
func serveModbus(r registers, pdu []byte) []byte {
	function := pdu[0]
	refuse := func(exception byte) []byte { return []byte{function | 0x80, exception} }
	switch function {
	case readHolding, readInput:
		read := r.holding
		if function == readInput {
			read = r.input
		}
		first, count := binary.BigEndian.Uint16(pdu[1:]), binary.BigEndian.Uint16(pdu[3:])
		if count < 1 || count > readMax {
			return refuse(illegalValue)
		}
		answer := []byte{function, byte(2 * count)}
		for i := range count {
			value, ok := read(first + i)
			if !ok {
				return refuse(illegalAddress)
			}
			answer = binary.BigEndian.AppendUint16(answer, value)
		}
		return answer
	case writeRegister:
		if exception := r.set(binary.BigEndian.Uint16(pdu[1:]), binary.BigEndian.Uint16(pdu[3:])); exception != 0 {
			return refuse(exception)
		}
		return pdu
	case writeRegisters:
		first, count := binary.BigEndian.Uint16(pdu[1:]), binary.BigEndian.Uint16(pdu[3:])
		if count < 1 || count > writeMax || len(pdu) != 6+2*int(count) || int(pdu[5]) != 2*int(count) {
			return refuse(illegalValue)
		}
		for i := range count {
			if exception := r.set(first+i, binary.BigEndian.Uint16(pdu[6+2*i:])); exception != 0 {
				return refuse(exception)
			}
		}
		return pdu[:5]
	}
	return refuse(illegalFunction)
}
