package nexus

import (
	"encoding/binary"
	"math/bits"
)

// checksum is Jenkins' lookup3 hashlittle with initial value 0, the checksum
// of HDF5 metadata (File Format Specification, "Disk Format: Checksums").
func checksum(k []byte) uint32 {
	a := 0xdeadbeef + uint32(len(k))
	b, c := a, a
	for len(k) > 12 {
		a += binary.LittleEndian.Uint32(k)
		b += binary.LittleEndian.Uint32(k[4:])
		c += binary.LittleEndian.Uint32(k[8:])
		a, b, c = mix(a, b, c)
		k = k[12:]
	}
	if len(k) == 0 {
		return c
	}
	var tail [12]byte
	copy(tail[:], k)
	a += binary.LittleEndian.Uint32(tail[:])
	b += binary.LittleEndian.Uint32(tail[4:])
	c += binary.LittleEndian.Uint32(tail[8:])
	return final(a, b, c)
}

func mix(a, b, c uint32) (uint32, uint32, uint32) {
	r := bits.RotateLeft32
	a = a - c ^ r(c, 4)
	c += b
	b = b - a ^ r(a, 6)
	a += c
	c = c - b ^ r(b, 8)
	b += a
	a = a - c ^ r(c, 16)
	c += b
	b = b - a ^ r(a, 19)
	a += c
	c = c - b ^ r(b, 4)
	b += a
	return a, b, c
}

func final(a, b, c uint32) uint32 {
	r := bits.RotateLeft32
	c = (c ^ b) - r(b, 14)
	a = (a ^ c) - r(c, 11)
	b = (b ^ a) - r(a, 25)
	c = (c ^ b) - r(b, 16)
	a = (a ^ c) - r(c, 4)
	b = (b ^ a) - r(a, 14)
	c = (c ^ b) - r(b, 24)
	return c
}
