package nexus

import (
	"encoding/binary"
	"math"
)

func putFloat32(dst []byte, src []float32, bits int) {
	if bits == 0 || bits == 23 {
		for i, f := range src {
			binary.LittleEndian.PutUint32(dst[4*i:], math.Float32bits(f))
		}
		return
	}
	for i, f := range src {
		binary.LittleEndian.PutUint32(dst[4*i:], roundBits(math.Float32bits(f), bits))
	}
}

// roundBits keeps the given number of mantissa bits, rounding half to even.
// Infinities and NaN pass; a value may round up to the next power of two but
// never to infinity.
func roundBits(u uint32, bits int) uint32 {
	const exponent = 0x7f800000
	if u&exponent == exponent {
		return u
	}
	drop := 23 - bits
	mask := uint32(1)<<drop - 1
	r := (u + mask>>1 + u>>drop&1) &^ mask
	if r&exponent == exponent {
		return u &^ mask
	}
	return r
}

// shuffle gathers the bytes of equal significance (HDF5 filter 2): byte j of
// element i goes to place j·n+i. len(src) must be a multiple of size.
func shuffle(dst, src []byte, size int) {
	n := len(src) / size
	for j := range size {
		plane := dst[j*n : (j+1)*n]
		for i := range plane {
			plane[i] = src[i*size+j]
		}
	}
}

// unshuffle undoes shuffle.
func unshuffle(dst, src []byte, size int) {
	n := len(src) / size
	for j := range size {
		for i, b := range src[j*n : (j+1)*n] {
			dst[i*size+j] = b
		}
	}
}
