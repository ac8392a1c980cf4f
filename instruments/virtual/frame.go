package virtual

import "encoding/binary"

// Bits of a frame's status word.
const (
	statusValid     = 1 << 0 // the output is valid
	statusSaturated = 1 << 1
	statusStarting  = 1 << 2
)

// frameSize is the length of a gyro's frame: A5 5A, counter, count (32 bits), temperature in 0.01 degC, status, and a
// CRC over what stands between sync and CRC; big-endian.
const frameSize = 14

const frameBody = 10 // bytes under the CRC

// crcStep is one byte's step of CRC-16/IBM-3740 (polynomial 1021, most significant bit first, start FFFF).
var crcStep = func() (table [256]uint16) {
	for i := range table {
		crc := uint16(i) << 8
		for range 8 {
			if crc&0x8000 != 0 {
				crc = crc<<1 ^ 0x1021
			} else {
				crc <<= 1
			}
		}
		table[i] = crc
	}
	return table
}()

func crcFrom(crc uint16, p []byte) uint16 {
	for _, b := range p {
		crc = crc<<8 ^ crcStep[byte(crc>>8)^b]
	}
	return crc
}

// crcAt[i][b] is what a byte b at place i of a frame's body adds to its CRC. The CRC of a sum is the sum of the CRCs, so
// a frame's bytes need not wait for each other: this is what makes millions of frames a second possible.
var crcAt = func() (table [frameBody][256]uint16) {
	for place := range table {
		for b := range 256 {
			var body [frameBody]byte
			body[place] = byte(b)
			table[place][b] = crcFrom(0, body[:])
		}
	}
	return table
}()

// crcOfZeros is the CRC of a body of zeros.
var crcOfZeros = crcFrom(0xffff, make([]byte, frameBody))

// putFrame encodes one frame into the first frameSize bytes of f.
func putFrame(f []byte, counter uint16, count int32, temperature int16, status uint16) {
	f = f[:frameSize]
	binary.BigEndian.PutUint64(f, 0xa55a<<48|uint64(counter)<<32|uint64(uint32(count)))
	binary.BigEndian.PutUint32(f[8:], uint32(uint16(temperature))<<16|uint32(status))
	crc := crcOfZeros ^ crcAt[0][f[2]] ^ crcAt[1][f[3]] ^ crcAt[2][f[4]] ^ crcAt[3][f[5]] ^ crcAt[4][f[6]] ^
		crcAt[5][f[7]] ^ crcAt[6][f[8]] ^ crcAt[7][f[9]] ^ crcAt[8][f[10]] ^ crcAt[9][f[11]]
	binary.BigEndian.PutUint16(f[12:], crc)
}
