package nexus

import (
	"encoding/binary"
	"fmt"
	"math"
)

// attrValue decodes an attribute.
func (f *File) attrValue(a rawAttr) (any, error) {
	n := int(elements(a.shape))
	c := &cursor{b: a.data}
	switch {
	case a.typ.kind == 'i':
		return scalar(a.shape, n, func() (int, error) { return int(c.u64()), nil })
	case a.typ == rawType{'f', 8}:
		return scalar(a.shape, n, func() (float64, error) { return math.Float64frombits(c.u64()), nil })
	case a.typ.kind == 'v':
		return scalar(a.shape, n, func() (string, error) {
			return f.heapText(int64(c.u32()), c.u64(), int(c.u32()))
		})
	}
	return nil, ErrUnsupported
}

// scalar returns one value, or a slice of n if there is a shape.
func scalar[T any](shape []int, n int, next func() (T, error)) (any, error) {
	if len(shape) == 0 {
		return next()
	}
	v := make([]T, 0, n)
	for range n {
		x, err := next()
		if err != nil {
			return nil, err
		}
		v = append(v, x)
	}
	return v, nil
}

// heapText fetches object number of the global heap collection at addr.
func (f *File) heapText(length int64, addr uint64, number int) (string, error) {
	if length == 0 {
		return "", nil
	}
	b, err := f.bytes(addr, 16)
	if err != nil {
		return "", err
	}
	if string(b[:5]) != "GCOL\x01" {
		return "", fmt.Errorf("%w: no heap at %d", ErrDamaged, addr)
	}
	end := addr + binary.LittleEndian.Uint64(b[8:])
	for at := addr + 16; at < end; {
		if b, err = f.bytes(at, 16); err != nil {
			return "", err
		}
		size := binary.LittleEndian.Uint64(b[8:])
		id := int(binary.LittleEndian.Uint16(b))
		switch {
		case id == 0 || size > uint64(f.size):
			return "", fmt.Errorf("%w: heap object %d", ErrDamaged, number)
		case id == number && int64(size) == length:
			b, err = f.bytes(at+16, length)
			return string(b), err
		}
		at += 16 + (size+7)&^7
	}
	return "", fmt.Errorf("%w: heap object %d not found", ErrDamaged, number)
}
