package profile

import "math"

// numberKind is how a number is held in bytes.
type numberKind struct {
	bytes  int
	signed bool
	float  bool // IEEE 754
}

var numberKinds = map[string]numberKind{
	"int8": {1, true, false}, "uint8": {1, false, false}, "int16": {2, true, false}, "uint16": {2, false, false},
	"int24": {3, true, false}, "uint24": {3, false, false}, "int32": {4, true, false}, "uint32": {4, false, false},
	"float32": {4, true, true},
}

// holds are the least and the greatest number that the kind holds.
func (k numberKind) holds() (low, high float64) {
	switch {
	case k.float:
		return -math.MaxFloat32, math.MaxFloat32
	case k.signed:
		return -math.Ldexp(1, 8*k.bytes-1), math.Ldexp(1, 8*k.bytes-1) - 1
	}
	return 0, math.Ldexp(1, 8*k.bytes) - 1
}

// integer puts bytes together to a whole number.
func integer(p []byte, signed, big bool) int64 {
	var x uint64
	if big {
		for _, b := range p {
			x = x<<8 | uint64(b)
		}
	} else {
		for i := len(p) - 1; i >= 0; i-- {
			x = x<<8 | uint64(p[i])
		}
	}
	if signed {
		shift := 64 - 8*uint(len(p))
		return int64(x<<shift) >> shift
	}
	return int64(x)
}

// scaling turns counts into a number and back.
//
//	number = count * scale + offset
type scaling struct {
	scale, offset float64
	inverse       float64 // 1/scale where that is a whole number, so that 2341 counts of 0.01 are 23.41 exactly; else 0
}

func newScaling(scale, offset float64) scaling {
	s := scaling{scale: scale, offset: offset}
	if inverse := 1 / scale; inverse == math.Trunc(inverse) {
		s.inverse = inverse
	}
	return s
}

func (s scaling) number(count float64) float64 {
	if s.inverse != 0 {
		return count/s.inverse + s.offset
	}
	return float64(count*s.scale) + s.offset
}

func (s scaling) count(number float64) float64 {
	if s.inverse != 0 {
		return (number - s.offset) * s.inverse
	}
	return (number - s.offset) / s.scale
}
