package frame

import (
	"encoding/binary"
	"fmt"
	"math"
)

// sample is the kind of number a file stores.
type sample struct {
	kind byte // 'u' unsigned, 'i' two's complement, 'f' IEEE 754
	bits int  // 8, 16, 32, 64; for 'u' also 10, 12, 14: packed, high bit first
	big  bool // most significant byte first
}

func (s sample) String() string {
	name := map[byte]string{'u': "uint", 'i': "int", 'f': "float"}[s.kind]
	return fmt.Sprintf("%s%d", name, s.bits)
}

func (s sample) packed() bool { return s.bits%8 != 0 }

// full returns the largest code, or 0 for floats.
func (s sample) full() float64 {
	switch s.kind {
	case 'u':
		return math.Ldexp(1, s.bits) - 1
	case 'i':
		return math.Ldexp(1, s.bits-1) - 1
	}
	return 0
}

func (s sample) order() binary.ByteOrder {
	if s.big {
		return binary.BigEndian
	}
	return binary.LittleEndian
}

// convert fills dst with the first len(dst) samples of src.
func (s sample) convert(dst []float32, src []byte) {
	switch {
	case s.packed():
		s.unpack(dst, src)
	case s.bits == 16 && s.kind == 'u' && s.big:
		for i := range dst {
			dst[i] = float32(binary.BigEndian.Uint16(src[2*i:]))
		}
	case s.bits == 16 && s.kind == 'u':
		for i := range dst {
			dst[i] = float32(binary.LittleEndian.Uint16(src[2*i:]))
		}
	default:
		s.words(dst, src)
	}
}

// words converts whole-byte samples. Integers go to float32 in one rounding.
func (s sample) words(dst []float32, src []byte) {
	n, o := s.bits/8, s.order()
	for i := range dst {
		u := word(src[i*n:], n, o)
		switch s.kind {
		case 'u':
			dst[i] = float32(u)
		case 'i':
			dst[i] = float32(signed(u, s.bits))
		default:
			dst[i] = narrow(u, s.bits)
		}
	}
}

// value returns sample i of src in float64, exact up to 53 bits.
func (s sample) value(src []byte, i int) float64 {
	n := s.bits / 8
	u := word(src[i*n:], n, s.order())
	switch {
	case s.kind == 'u':
		return float64(u)
	case s.kind == 'i':
		return float64(signed(u, s.bits))
	case s.bits == 32:
		return float64(math.Float32frombits(uint32(u)))
	}
	return math.Float64frombits(u)
}

// unpack reads samples of s.bits bits, most significant bit first (TIFF 6.0,
// FillOrder 1).
func (s sample) unpack(dst []float32, src []byte) {
	var acc uint32
	var have, next int
	mask := uint32(1)<<s.bits - 1
	for i := range dst {
		for have < s.bits {
			acc, have, next = acc<<8|uint32(src[next]), have+8, next+1
		}
		have -= s.bits
		dst[i] = float32(acc >> have & mask)
	}
}

// word reads the n bytes at the start of b.
func word(b []byte, n int, o binary.ByteOrder) uint64 {
	switch n {
	case 1:
		return uint64(b[0])
	case 2:
		return uint64(o.Uint16(b))
	case 4:
		return uint64(o.Uint32(b))
	}
	return o.Uint64(b)
}

// put writes the low n bytes of v to the start of b.
func put(b []byte, n int, o binary.ByteOrder, v uint64) {
	switch n {
	case 1:
		b[0] = byte(v)
	case 2:
		o.PutUint16(b, uint16(v))
	case 4:
		o.PutUint32(b, uint32(v))
	default:
		o.PutUint64(b, v)
	}
}

func signed(u uint64, bits int) int64 { return int64(u<<(64-bits)) >> (64 - bits) }

func narrow(u uint64, bits int) float32 {
	if bits == 32 {
		return math.Float32frombits(uint32(u))
	}
	return float32(math.Float64frombits(u))
}
