package profile

import (
	"hash/crc32"
	"maps"
	"math/bits"
	"slices"
)

// checksum computes one over a run of bytes; width is its own length in bytes.
type checksum struct {
	width int
	of    func(p []byte) uint32
}

// checksums are known by name. Of the CRCs, polynomial, initial value and reflection are those of the CRC catalogue
// (CCITT-FALSE is IBM-3740 there), and none has a final exclusive-or but the 32-bit one.
var checksums = map[string]checksum{
	"CRC-8/SMBUS":        {1, crc8(0x07)},
	"CRC-16/MODBUS":      {2, crc16Reflected(0x8005, 0xffff)},
	"CRC-16/CCITT-FALSE": {2, crc16(0x1021, 0xffff)},
	"CRC-16/XMODEM":      {2, crc16(0x1021, 0)},
	"CRC-32/ISO-HDLC":    {4, crc32.ChecksumIEEE},
	"sum8":               {1, sum8},
	"xor8":               {1, xor8},
	"Fletcher-16":        {2, fletcher16},
}

func checksumNames() []string { return slices.Sorted(maps.Keys(checksums)) }

func crc8(polynomial uint8) func([]byte) uint32 {
	var table [256]uint8
	for i := range table {
		r := uint8(i)
		for range 8 {
			r = r<<1 ^ polynomial*(r>>7)
		}
		table[i] = r
	}
	return func(p []byte) uint32 {
		var r uint8
		for _, b := range p {
			r = table[r^b]
		}
		return uint32(r)
	}
}

func crc16(polynomial, initial uint16) func([]byte) uint32 {
	var table [256]uint16
	for i := range table {
		r := uint16(i) << 8
		for range 8 {
			r = r<<1 ^ polynomial*(r>>15)
		}
		table[i] = r
	}
	return func(p []byte) uint32 {
		r := initial
		for _, b := range p {
			r = r<<8 ^ table[byte(r>>8)^b]
		}
		return uint32(r)
	}
}

// crc16Reflected works from the lowest bit.
func crc16Reflected(polynomial, initial uint16) func([]byte) uint32 {
	mirrored := bits.Reverse16(polynomial)
	var table [256]uint16
	for i := range table {
		r := uint16(i)
		for range 8 {
			r = r>>1 ^ mirrored*(r&1)
		}
		table[i] = r
	}
	return func(p []byte) uint32 {
		r := initial
		for _, b := range p {
			r = r>>8 ^ table[byte(r)^b]
		}
		return uint32(r)
	}
}

func sum8(p []byte) uint32 {
	var s uint8
	for _, b := range p {
		s += b
	}
	return uint32(s)
}

func xor8(p []byte) uint32 {
	var s uint8
	for _, b := range p {
		s ^= b
	}
	return uint32(s)
}

// fletcher16 is two running sums modulo 255, the second in the high byte. The remainder is taken once: over the longest
// frame the second sum stays below 2^27. Source: J. G. Fletcher, IEEE Trans. Commun. 30 (1982).
func fletcher16(p []byte) uint32 {
	var a, b uint32
	for _, c := range p {
		a += uint32(c)
		b += a
	}
	return b%255<<8 | a%255
}
