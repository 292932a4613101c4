package nexus

import (
	"encoding/binary"
	"fmt"
	"math"
)

// rawType is a datatype we write.
type rawType struct {
	kind byte // f float, i int64, s fixed string, v variable string
	size int
}

type rawAttr struct {
	name  string
	typ   rawType
	shape []int
	data  []byte
}

type layout struct {
	addr  uint64
	bytes uint64
	chunk []int // nil: contiguous
}

// cursor takes little-endian fields off a byte slice; after an overrun bad is
// set and zeros come.
type cursor struct {
	b   []byte
	bad bool
}

func (c *cursor) take(n int) []byte {
	if n < 0 || n > len(c.b) {
		c.bad, c.b = true, nil
		return make([]byte, min(max(n, 0), 8))
	}
	b := c.b[:n]
	c.b = c.b[n:]
	return b
}

func (c *cursor) u8() int     { return int(c.take(1)[0]) }
func (c *cursor) u16() int    { return int(binary.LittleEndian.Uint16(c.take(2))) }
func (c *cursor) u32() uint32 { return binary.LittleEndian.Uint32(c.take(4)) }
func (c *cursor) u64() uint64 { return binary.LittleEndian.Uint64(c.take(8)) }

// object reads the object header at addr.
func (f *File) object(addr uint64) (*object, error) {
	b, err := f.bytes(addr, 10)
	if err != nil {
		return nil, err
	}
	if string(b[:4]) != "OHDR" {
		return nil, fmt.Errorf("%w: no object header at %d", ErrDamaged, addr)
	}
	if b[4] != 2 || b[5] != 2 {
		return nil, fmt.Errorf("%w: object header version %d, flags %d", ErrUnsupported, b[4], b[5])
	}
	n := int64(binary.LittleEndian.Uint32(b[6:]))
	if f.headers += n; f.headers > f.size {
		return nil, fmt.Errorf("%w: object headers overlap", ErrDamaged)
	}
	if b, err = f.bytes(addr, 10+n+4); err != nil {
		return nil, err
	}
	if binary.LittleEndian.Uint32(b[10+n:]) != checksum(b[:10+n]) {
		return nil, fmt.Errorf("%w: object header checksum at %d", ErrDamaged, addr)
	}
	o := &object{}
	c := &cursor{b: b[10 : 10+n]}
	for len(c.b) > 0 {
		typ, size, _ := c.u8(), c.u16(), c.u8()
		m := &cursor{b: c.take(size)}
		if c.bad {
			return nil, fmt.Errorf("%w: message runs over its header", ErrDamaged)
		}
		if err := o.message(typ, m); err != nil {
			return nil, err
		}
		if m.bad {
			return nil, fmt.Errorf("%w: message type %d is too short", ErrDamaged, typ)
		}
	}
	return o, o.check()
}

func (o *object) message(typ int, m *cursor) (err error) {
	switch typ {
	case msgDataspace:
		o.data = true
		o.shape, err = parseShape(m)
	case msgDatatype:
		o.typ, err = parseType(m)
	case msgLayout:
		o.layout, err = parseLayout(m)
	case msgFilter:
		o.filter = true
		err = parseFilter(m)
	case msgLink:
		var l link
		l, err = parseLink(m)
		o.links = append(o.links, l)
	case msgAttribute:
		var a rawAttr
		a, err = parseAttr(m)
		o.attrs = append(o.attrs, a)
	case msgFill, msgLinkInfo, msgGroupInfo, msgAttrInfo:
	default:
		err = fmt.Errorf("%w: message type %d", ErrUnsupported, typ)
	}
	return err
}

// check refuses a dataset whose shape, type and layout do not go together.
func (o *object) check() error {
	if !o.data {
		return nil
	}
	l := o.layout
	switch {
	case len(o.links) > 0, o.typ.size == 0, o.typ.kind == 'v':
		return fmt.Errorf("%w: dataset with links or without a type we write", ErrUnsupported)
	case l.chunk == nil && (l.bytes > math.MaxInt64 || int64(l.bytes) != elements(o.shape)*int64(o.typ.size)):
		return fmt.Errorf("%w: %d bytes for shape %v", ErrDamaged, l.bytes, o.shape)
	case l.chunk != nil && (len(l.chunk) != len(o.shape)+1 || l.chunk[len(o.shape)] != o.typ.size || !o.filter):
		return fmt.Errorf("%w: chunk %v for shape %v", ErrDamaged, l.chunk, o.shape)
	}
	if l.chunk != nil && elements(l.chunk) > maxChunk {
		return fmt.Errorf("%w: chunk of %v bytes", ErrUnsupported, l.chunk)
	}
	return nil
}

// maxChunk bounds the bytes of a chunk; ours have 128 to 256 KiB.
const maxChunk = 1 << 24

// maxElements bounds the elements of a dataset so that byte counts fit int64.
const maxElements = 1 << 48

func elements(shape []int) int64 {
	n := int64(1)
	for _, s := range shape {
		n *= int64(s)
	}
	return n
}

// side appends a side, keeping the product within limits.
func side(shape []int, v uint64) ([]int, error) {
	if v == 0 || v > math.MaxUint32 || elements(shape) > maxElements/int64(v) {
		return nil, fmt.Errorf("%w: side %d", ErrUnsupported, v)
	}
	return append(shape, int(v)), nil
}

func parseShape(m *cursor) (shape []int, err error) {
	v, rank, flags, typ := m.u8(), m.u8(), m.u8(), m.u8()
	if v != 2 || rank > maxRank || flags != 0 || typ > 1 {
		return nil, fmt.Errorf("%w: dataspace version %d, rank %d, type %d", ErrUnsupported, v, rank, typ)
	}
	for range rank {
		if shape, err = side(shape, m.u64()); err != nil {
			return nil, err
		}
	}
	return shape, nil
}

func parseType(m *cursor) (rawType, error) {
	b := m.b
	switch {
	case string(b) == string(typeFloat32):
		return rawType{'f', 4}, nil
	case string(b) == string(typeFloat64):
		return rawType{'f', 8}, nil
	case string(b) == string(typeInt64):
		return rawType{'i', 8}, nil
	case string(b) == string(typeText):
		return rawType{'v', 16}, nil
	case len(b) == 8 && b[0] == 0x13:
		n := binary.LittleEndian.Uint32(b[4:])
		if n == 0 || n > math.MaxInt32 {
			return rawType{}, fmt.Errorf("%w: string of %d bytes", ErrUnsupported, n)
		}
		return rawType{'s', int(n)}, nil
	}
	return rawType{}, fmt.Errorf("%w: datatype % x", ErrUnsupported, b[:min(len(b), 24)])
}

func parseLayout(m *cursor) (l layout, err error) {
	v, class := m.u8(), m.u8()
	if v != 3 || class != 1 && class != 2 {
		return l, fmt.Errorf("%w: layout version %d, class %d", ErrUnsupported, v, class)
	}
	if class == 1 {
		return layout{addr: m.u64(), bytes: m.u64()}, nil
	}
	rank := m.u8()
	l.addr = m.u64()
	if rank < 2 || rank > maxRank+1 {
		return l, fmt.Errorf("%w: chunk of %d sides", ErrUnsupported, rank)
	}
	for range rank {
		if l.chunk, err = side(l.chunk, uint64(m.u32())); err != nil {
			return l, err
		}
	}
	return l, nil
}

// parseFilter accepts shuffle followed by deflate only.
func parseFilter(m *cursor) error {
	want := pipeline(0)
	b := append([]byte(nil), m.b...)
	if len(b) == len(want) {
		clear(b[8:12]) // element size
		b[18] = want[18]
	}
	if string(b) != string(want) {
		return fmt.Errorf("%w: filters % x", ErrUnsupported, b[:min(len(b), 24)])
	}
	return nil
}

func parseLink(m *cursor) (link, error) {
	v, flags, _ := m.u8(), m.u8(), m.u8()
	if v != 1 || flags != 0x11 {
		return link{}, fmt.Errorf("%w: link version %d, flags %#x", ErrUnsupported, v, flags)
	}
	l := link{name: string(m.take(m.u16())), addr: m.u64()}
	if err := checkName("link", l.name); err != nil {
		return link{}, fmt.Errorf("%w: %v", ErrDamaged, err)
	}
	return l, nil
}

func parseAttr(m *cursor) (a rawAttr, err error) {
	if v, flags := m.u8(), m.u8(); v != 3 || flags != 0 {
		return a, fmt.Errorf("%w: attribute version %d, flags %d", ErrUnsupported, v, flags)
	}
	name, typ, space := m.u16(), m.u16(), m.u16()
	m.u8()
	if b := m.take(name); len(b) == name && name > 0 {
		a.name = string(b[:name-1])
	}
	t, s := &cursor{b: m.take(typ)}, &cursor{b: m.take(space)}
	if m.bad {
		return a, nil // reported by the caller
	}
	if a.typ, err = parseType(t); err != nil {
		return a, fmt.Errorf("attribute %q: %w", a.name, err)
	}
	if a.shape, err = parseShape(s); err != nil {
		return a, fmt.Errorf("attribute %q: %w", a.name, err)
	}
	m.bad = m.bad || s.bad
	n := elements(a.shape) * int64(a.typ.size)
	if n != int64(len(m.b)) {
		return a, fmt.Errorf("%w: attribute %q has %d bytes, want %d", ErrDamaged, a.name, len(m.b), n)
	}
	a.data = m.b
	return a, nil
}
