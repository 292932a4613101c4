package row

import (
	"encoding/binary"
	"math"
	"testing"
)

// FuzzFir takes shape and bits from the fuzzer.
func FuzzFir(f *testing.F) {
	f.Add(uint8(65), uint8(6), int8(-7), []byte{0, 0, 0x80, 0x7f, 1, 0, 0, 0, 0, 0, 0xc0, 0x7f, 0, 0, 0, 0x80})
	f.Add(uint8(7), uint8(4), int8(1), []byte{1, 2, 3, 4})
	f.Fuzz(func(t *testing.T, width, count uint8, step int8, bits []byte) {
		l := wide(t)
		n, taps, stride := int(width), int(count)%24, int(step)
		next := 0
		row := func(n int) []float32 {
			s := make([]float32, n)
			for j := range s {
				var b [4]byte
				for i := range b {
					if len(bits) > 0 {
						b[i] = bits[next%len(bits)]
					}
					next++
				}
				next++ // so that a short input does not repeat in step
				s[j] = math.Float32frombits(binary.LittleEndian.Uint32(b[:]))
			}
			return s
		}
		at := max(0, -stride*(taps-1))
		src := row(at + max(0, stride*(taps-1)) + n)
		compareFir(t, "fuzzed", l, row(n), row(taps), src, at, stride, row(n))
	})
}
