package nexus

import (
	"context"
	"encoding/binary"
	"fmt"
	"math"
)

// placed is where a dataset's values lie.
type placed struct {
	addr  uint64 // of the values, or of the chunk index
	bytes uint64
	chunk []int // nil: contiguous
}

// tree is one Write under way.
type tree struct {
	ctx     context.Context
	s       *sink
	heap    *heap
	workers int
	place   map[*Dataset]placed
}

// data writes the values of every dataset below g.
func (t *tree) data(g *Group, path string) error {
	for i := range g.Data {
		if err := t.dataset(&g.Data[i]); err != nil {
			return fmt.Errorf("dataset %s%s: %w", path, g.Data[i].Name, err)
		}
	}
	for i := range g.Groups {
		c := &g.Groups[i]
		if err := t.data(c, path+c.Name+"/"); err != nil {
			return err
		}
	}
	return nil
}

// collect runs every attribute of the tree through the heap.
func (t *tree) collect(g *Group) error {
	all := [][]Attr{g.attrs()}
	for i := range g.Data {
		all = append(all, g.Data[i].Attrs)
	}
	for _, attrs := range all {
		for _, a := range attrs {
			if _, err := attrMessage(a, t.heap); err != nil {
				return err
			}
		}
	}
	for i := range g.Groups {
		if err := t.collect(&g.Groups[i]); err != nil {
			return err
		}
	}
	return nil
}

// group writes the headers of everything below g, then g's own, and returns
// its address.
func (t *tree) group(g *Group) (uint64, error) {
	var h header
	le := binary.LittleEndian
	info := le.AppendUint64(le.AppendUint64([]byte{0, 0}, undefined), undefined)
	h.add(msgLinkInfo, 0, info)
	h.add(msgGroupInfo, 0, []byte{0, 0})
	for i := range g.Groups {
		addr, err := t.group(&g.Groups[i])
		if err != nil {
			return 0, err
		}
		h.add(msgLink, 0, linkMessage(g.Groups[i].Name, addr))
	}
	for i := range g.Data {
		addr, err := t.header(&g.Data[i])
		if err != nil {
			return 0, fmt.Errorf("dataset %q: %w", g.Data[i].Name, err)
		}
		h.add(msgLink, 0, linkMessage(g.Data[i].Name, addr))
	}
	if err := h.addAttrs(g.attrs(), t.heap); err != nil {
		return 0, fmt.Errorf("group %q: %w", g.Name, err)
	}
	addr := t.s.align()
	t.s.write(h.bytes())
	return addr, t.s.err
}

// header writes a dataset's object header and returns its address.
func (t *tree) header(d *Dataset) (uint64, error) {
	p := t.place[d]
	le := binary.LittleEndian
	typ := datatype(d)
	size := le.Uint32(typ[4:])
	var h header
	h.add(msgDataspace, 0, dataspace(d.Shape))
	h.add(msgDatatype, 1, typ)
	if p.chunk == nil {
		h.add(msgFill, 1, []byte{3, 0x0a}) // allocated late, default fill value
		m := le.AppendUint64([]byte{3, 1}, p.addr)
		h.add(msgLayout, 0, le.AppendUint64(m, p.bytes))
	} else {
		h.add(msgFill, 1, []byte{3, 0x0b}) // allocated incrementally
		m := le.AppendUint64([]byte{3, 2, byte(len(p.chunk) + 1)}, p.addr)
		for _, c := range p.chunk {
			m = le.AppendUint32(m, uint32(c))
		}
		h.add(msgLayout, 0, le.AppendUint32(m, size))
		h.add(msgFilter, 0, pipeline(size))
	}
	if err := h.addAttrs(d.Attrs, t.heap); err != nil {
		return 0, err
	}
	addr := t.s.align()
	t.s.write(h.bytes())
	return addr, t.s.err
}

// pipeline is the filter pipeline message, version 2: shuffle (2), deflate (1).
func pipeline(size uint32) []byte {
	b := []byte{2, 2, 2, 0, 0, 0, 1, 0}
	b = binary.LittleEndian.AppendUint32(b, size)
	return append(b, 1, 0, 0, 0, 1, 0, deflateLevel, 0, 0, 0)
}

func datatype(d *Dataset) []byte {
	switch v := d.Value.(type) {
	case string:
		return typeString(v)
	case float64, []float64:
		return typeFloat64
	case int, []int64:
		return typeInt64
	}
	return typeFloat32
}

// dataset writes the values: contiguous for scalars and one dimension held in
// memory, chunked otherwise.
func (t *tree) dataset(d *Dataset) error {
	size := int(binary.LittleEndian.Uint32(datatype(d)[4:]))
	_, stream := d.Value.(Source)
	if len(d.Shape) > 1 || stream {
		return t.chunks(d, size)
	}
	addr := t.s.align()
	var b []byte
	le := binary.LittleEndian
	switch v := d.Value.(type) {
	case string:
		b = make([]byte, max(1, len(v)))
		copy(b, v)
	case float64:
		b = le.AppendUint64(b, math.Float64bits(v))
	case int:
		b = le.AppendUint64(b, uint64(v))
	default:
		p := &packer{d: d, chunk: d.Shape, size: size, raw: make([]byte, size*d.Shape[0])}
		if err := p.fill([]int{0}, d.Shape); err != nil {
			return err
		}
		b = p.raw
	}
	t.s.write(b)
	t.place[d] = placed{addr: addr, bytes: uint64(len(b))}
	return t.s.err
}
