package nexus

import (
	"encoding/binary"
	"fmt"
	"math"
)

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
