package profile

import (
	"hash/crc32"
	"math/bits"
	"sort"
)

// checksum computes one over a run of bytes; width is its length in bytes.
type checksum struct {
	width int
	of    func(p []byte) uint32
}

// checksums is the table. CRC parameters (polynomial, initial value, reflection, final exclusive-or) are those of the
// CRC catalogue; each is tested against its check value there.
var checksums = map[string]checksum{
	"CRC-8/SMBUS":        {1, crc(8, 0x07, 0, false, 0)},
	"CRC-16/MODBUS":      {2, crc(16, 0x8005, 0xffff, true, 0)},
	"CRC-16/CCITT-FALSE": {2, crc(16, 0x1021, 0xffff, false, 0)},
	"CRC-16/XMODEM":      {2, crc(16, 0x1021, 0, false, 0)},
	"CRC-32/ISO-HDLC":    {4, crc32.ChecksumIEEE},
	"sum8":               {1, sum8},
	"xor8":               {1, xor8},
	"Fletcher-16":        {2, fletcher16},
}

func checksumNames() []string {
	names := make([]string, 0, len(checksums))
	for name := range checksums {
		names = append(names, name)
	}
	sort.Strings(names)
	return names
}

// crc makes a table-driven cyclic redundancy check of 8 or 16 bits; a reflected one works from the lowest bit.
func crc(width int, polynomial, initial uint32, reflected bool, final uint32) func([]byte) uint32 {
	var table [256]uint16
	shift := uint(width - 8)
	for i := range table {
		r := uint32(i) << shift
		if reflected {
			r = uint32(bits.Reverse8(uint8(i))) << shift
		}
		for range 8 {
			if r>>(width-1)&1 == 1 {
				r = r<<1 ^ polynomial
			} else {
				r <<= 1
			}
		}
		r &= 1<<width - 1
		if reflected {
			r = uint32(bits.Reverse16(uint16(r)) >> (16 - width))
		}
		table[i] = uint16(r)
	}
	mask := uint32(1)<<width - 1
	switch {
	case reflected:
		return func(p []byte) uint32 {
			r := uint16(initial)
			for _, b := range p {
				r = r>>8 ^ table[byte(r)^b]
			}
			return (uint32(r) ^ final) & mask
		}
	case width == 8:
		return func(p []byte) uint32 {
			r := uint8(initial)
			for _, b := range p {
				r = uint8(table[r^b])
			}
			return (uint32(r) ^ final) & mask
		}
	}
	return func(p []byte) uint32 {
		r := uint16(initial)
		for _, b := range p {
			r = r<<8 ^ table[byte(r>>8)^b]
		}
		return (uint32(r) ^ final) & mask
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

// fletcher16 is two running sums modulo 255, the second in the high byte. Source: Fletcher, IEEE Trans. Commun. 30
// (1982).
func fletcher16(p []byte) uint32 {
	var a, b uint32
	for _, c := range p {
		a = (a + uint32(c)) % 255
		b = (b + a) % 255
	}
	return b<<8 | a
}
