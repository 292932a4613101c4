package nexus

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"io"
	"math"

	"github.com/klauspost/compress/zlib"
)

// maxExpand is the largest expansion of deflate: 1032 to 1.
const maxExpand = 1032

// Frame returns plane k of a float32 dataset of three dimensions, row-major.
func (f *File) Frame(name string, k int) ([]float32, error) {
	o, err := f.dataset(name)
	if err != nil {
		return nil, err
	}
	if len(o.shape) != 3 {
		return nil, fmt.Errorf("dataset %q has %d dimensions, want 3", name, len(o.shape))
	}
	return f.Region(name, []int{k, 0, 0}, []int{1, o.shape[1], o.shape[2]})
}

// All returns every value of a float32 dataset.
func (f *File) All(name string) ([]float32, error) {
	o, err := f.dataset(name)
	if err != nil {
		return nil, err
	}
	return f.Region(name, make([]int, len(o.shape)), o.shape)
}

// Region returns the values of a float32 dataset from start on, with sides
// count, row-major. Only the chunks that it touches are read.
func (f *File) Region(name string, start, count []int) ([]float32, error) {
	b, err := f.region(name, start, count, rawType{'f', 4})
	if err != nil {
		return nil, err
	}
	v := make([]float32, len(b)/4)
	for i := range v {
		v[i] = math.Float32frombits(binary.LittleEndian.Uint32(b[4*i:]))
	}
	return v, nil
}

// Float64 returns every value of a float64 dataset.
func (f *File) Float64(name string) ([]float64, error) {
	o, err := f.dataset(name)
	if err != nil {
		return nil, err
	}
	b, err := f.region(name, make([]int, len(o.shape)), o.shape, rawType{'f', 8})
	if err != nil {
		return nil, err
	}
	v := make([]float64, len(b)/8)
	for i := range v {
		v[i] = math.Float64frombits(binary.LittleEndian.Uint64(b[8*i:]))
	}
	return v, nil
}

// Text returns a string dataset.
func (f *File) Text(name string) (string, error) {
	o, err := f.dataset(name)
	if err != nil {
		return "", err
	}
	if o.typ.kind != 's' || len(o.shape) > 0 || o.layout.chunk != nil {
		return "", fmt.Errorf("dataset %q: not one string", name)
	}
	b, err := f.bytes(o.layout.addr, int64(o.layout.bytes))
	if err != nil {
		return "", fmt.Errorf("dataset %q: %w", name, err)
	}
	return string(bytes.TrimRight(b, "\x00")), nil
}

func (f *File) region(name string, start, count []int, want rawType) ([]byte, error) {
	o, err := f.dataset(name)
	if err != nil {
		return nil, err
	}
	if o.typ != want {
		return nil, fmt.Errorf("dataset %q: not of the type asked for", name)
	}
	if len(start) != len(o.shape) || len(count) != len(o.shape) {
		return nil, fmt.Errorf("dataset %q: region of %d dimensions, want %d", name, len(start), len(o.shape))
	}
	for i := range start {
		if start[i] < 0 || count[i] <= 0 || start[i] >= o.shape[i] || count[i] > o.shape[i]-start[i] {
			return nil, fmt.Errorf("dataset %q: region %v+%v outside %v", name, start, count, o.shape)
		}
	}
	n := elements(count) * int64(o.typ.size)
	if o.layout.chunk == nil {
		b, err := f.bytes(o.layout.addr, int64(o.layout.bytes))
		if err != nil || len(o.shape) == 0 {
			return b, err
		}
		dst := make([]byte, n)
		copyRegion(dst, b, o, o.shape, make([]int, len(start)), start, count)
		return dst, nil
	}
	list, err := f.list(o, start, count)
	if err != nil {
		return nil, fmt.Errorf("dataset %q: %w", name, err)
	}
	dst := make([]byte, n)
	if err := f.chunks(dst, o, list, start, count); err != nil {
		return nil, fmt.Errorf("dataset %q: %w", name, err)
	}
	return dst, nil
}

// copyRegion copies to dst, whose sides are count and corner start, what it
// shares with src, whose sides are sides and corner at.
func copyRegion(dst, src []byte, o *object, sides, at, start, count []int) {
	from, to, n := make([]int, len(at)), make([]int, len(at)), make([]int, len(at))
	for i := range at {
		lo := max(at[i], start[i])
		hi := min(at[i]+sides[i], start[i]+count[i], o.shape[i])
		if hi <= lo {
			return
		}
		from[i], to[i], n[i] = lo-at[i], lo-start[i], hi-lo
	}
	base := 0 // of the corner in dst
	for i := range to {
		base = base*count[i] + to[i]
	}
	size := o.typ.size
	rows(sides, from, n, count, func(f, t, run int) {
		copy(dst[(base+t)*size:(base+t+run)*size], src[f*size:(f+run)*size])
	})
}

// list returns the chunks that the region touches. All must be there and
// long enough to hold their values: a missing chunk is damage, as the writer
// stores every one. So the region's size is known to be true before memory is
// taken for it.
func (f *File) list(o *object, start, count []int) ([]entry, error) {
	chunk := o.layout.chunk[:len(o.shape)]
	want := int64(1)
	for i := range start {
		want *= int64((start[i]+count[i]-1)/chunk[i] - start[i]/chunk[i] + 1)
		if want > f.size { // every chunk takes more than a byte
			return nil, fmt.Errorf("%w: %d chunks in %d bytes", ErrDamaged, want, f.size)
		}
	}
	var list []entry
	var sum int64
	x := &index{f: f, o: o, start: start, count: count, seen: map[uint64]bool{}}
	err := x.walk(o.layout.addr, -1, func(e entry) error {
		for i, c := range chunk {
			if e.origin[i]%c != 0 || e.origin[i] >= o.shape[i] {
				return fmt.Errorf("%w: chunk at %v", ErrDamaged, e.origin)
			}
			if e.origin[i]+c <= start[i] || e.origin[i] >= start[i]+count[i] {
				return nil
			}
		}
		list = append(list, e)
		sum += int64(e.bytes)
		if x.seen[e.addr] || sum > f.size || (int64(e.bytes)+1)*maxExpand < elements(o.layout.chunk) {
			return fmt.Errorf("%w: chunk at %v of %d bytes", ErrDamaged, e.origin, e.bytes)
		}
		x.seen[e.addr] = true
		return nil
	})
	if err == nil && int64(len(list)) != want {
		err = fmt.Errorf("%w: %d of %d chunks", ErrDamaged, len(list), want)
	}
	return list, err
}

// chunks reads the listed chunks into dst.
func (f *File) chunks(dst []byte, o *object, list []entry, start, count []int) error {
	u := &unpacker{size: o.typ.size}
	for _, e := range list {
		b, err := f.bytes(e.addr, int64(e.bytes))
		if err != nil {
			return err
		}
		raw, err := u.unpack(b, int(elements(o.layout.chunk)))
		if err != nil {
			return fmt.Errorf("chunk at %v: %w", e.origin, err)
		}
		copyRegion(dst, raw, o, o.layout.chunk[:len(o.shape)], e.origin, start, count)
	}
	return nil
}

// index is one walk over a dataset's B-tree.
type index struct {
	f            *File
	o            *object
	start, count []int
	seen         map[uint64]bool // addresses of nodes and chunks met
}

// walk visits every chunk below the node at addr that may touch the region.
// level is what the node above demands; -1 at the root.
func (x *index) walk(addr uint64, level int, visit func(entry) error) error {
	rank := len(x.o.shape)
	b, err := x.f.bytes(addr, int64(nodeSize(rank)))
	if err != nil {
		return err
	}
	lvl, n := int(b[5]), int(binary.LittleEndian.Uint16(b[6:]))
	if string(b[:4]) != "TREE" || b[4] != 1 || n > fanout || level >= 0 && lvl != level || x.seen[addr] {
		return fmt.Errorf("%w: chunk index node at %d", ErrDamaged, addr)
	}
	x.seen[addr] = true
	c := &cursor{b: b[24:]}
	e, ok := readKey(c, rank)
	for range n {
		e.addr = c.u64()
		next, more := readKey(c, rank)
		if !ok || !more || c.bad {
			return fmt.Errorf("%w: chunk index key in node at %d", ErrDamaged, addr)
		}
		// Keys rise in row-major order, so only the slowest side can rule
		// a subtree out.
		if e.origin[0] < x.start[0]+x.count[0] && next.origin[0] >= x.start[0]-x.o.layout.chunk[0] {
			if lvl == 0 {
				err = visit(e)
			} else {
				err = x.walk(e.addr, lvl-1, visit)
			}
			if err != nil {
				return err
			}
		}
		e, ok = next, more
	}
	return nil
}

// readKey reads a key of the chunk index and says whether it is plausible.
func readKey(c *cursor, rank int) (e entry, ok bool) {
	e.bytes = c.u32()
	ok = c.u32() == 0 // no filter skipped
	for range rank {
		v := c.u64()
		ok = ok && v <= 2*math.MaxUint32
		e.origin = append(e.origin, int(v))
	}
	c.u64()
	return e, ok
}

// unpacker undoes deflate and shuffle, reusing its buffers.
type unpacker struct {
	size     int
	z        io.ReadCloser
	in       bytes.Reader
	raw, out []byte
}

func (u *unpacker) unpack(b []byte, n int) ([]byte, error) {
	u.in.Reset(b)
	var err error
	if u.z == nil {
		u.z, err = zlib.NewReader(&u.in)
	} else {
		err = u.z.(zlib.Resetter).Reset(&u.in, nil)
	}
	if err != nil {
		return nil, fmt.Errorf("%w: inflate: %w", ErrDamaged, err)
	}
	if u.raw == nil {
		u.raw, u.out = make([]byte, n), make([]byte, n)
	}
	if _, err := io.ReadFull(u.z, u.raw); err != nil {
		return nil, fmt.Errorf("%w: inflate: %w", ErrDamaged, err)
	}
	// One byte more must be the end, which also checks the Adler-32 sum.
	if _, err := u.z.Read(make([]byte, 1)); err != io.EOF {
		return nil, fmt.Errorf("%w: inflate: no clean end (%v)", ErrDamaged, err)
	}
	unshuffle(u.out, u.raw, u.size)
	return u.out, nil
}

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
