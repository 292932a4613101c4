package nexus

import (
	"bufio"
	"context"
	"encoding/binary"
	"fmt"
	"io"
	"math"
	"os"
	"runtime"
	"sync"
)

// Options say how to write.
type Options struct {
	// Workers is the number of goroutines that compress chunks. 0: one per
	// core that Go may use.
	Workers int
}

// superblockSize is the size of a version 2 superblock.
const superblockSize = 48

// signature begins every HDF5 file.
const signature = "\x89HDF\r\n\x1a\n"

// WriteFile writes the tree to a new file and syncs it to the disk. An
// existing file is refused; after an error the part written is removed.
func WriteFile(ctx context.Context, path string, root Group, o Options) error {
	f, err := os.OpenFile(path, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o666)
	if err != nil {
		return err
	}
	err = Write(ctx, f, root, o)
	if err == nil {
		err = f.Sync()
	}
	if e := f.Close(); err == nil {
		err = e
	}
	if err != nil {
		os.Remove(path)
		return fmt.Errorf("write %s: %w", path, err)
	}
	return nil
}

// Write writes the tree as one HDF5 file from w's beginning. Data come first,
// then chunk indexes, attribute strings and headers; the superblock is
// written last, so that an interrupted file is no HDF5 file at all.
func Write(ctx context.Context, w io.WriteSeeker, root Group, o Options) error {
	if err := root.check("/", 0); err != nil {
		return err
	}
	if o.Workers <= 0 {
		o.Workers = runtime.GOMAXPROCS(0)
	}
	if _, err := w.Seek(0, io.SeekStart); err != nil {
		return err
	}
	s := &sink{w: bufio.NewWriterSize(w, 1<<18)}
	s.write(make([]byte, superblockSize))
	h := &heap{index: map[string]int{}}
	t := &tree{ctx: ctx, s: s, heap: h, workers: o.Workers, place: map[*Dataset]placed{}}
	if err := t.data(&root, "/"); err != nil {
		return err
	}
	if err := t.collect(&root); err != nil {
		return err
	}
	h.place(s)
	top, err := t.group(&root)
	if err != nil {
		return err
	}
	end := s.align()
	if s.err == nil {
		s.err = s.w.Flush()
	}
	if s.err != nil {
		return s.err
	}
	if _, err := w.Seek(0, io.SeekStart); err != nil {
		return err
	}
	if _, err := w.Write(superblock(end, top)); err != nil {
		return err
	}
	_, err = w.Seek(0, io.SeekEnd)
	return err
}

func superblock(end, root uint64) []byte {
	le := binary.LittleEndian
	b := append([]byte(signature), 2, 8, 8, 0) // version, size of offsets and of lengths, flags
	b = le.AppendUint64(b, 0)                  // base address
	b = le.AppendUint64(b, undefined)          // no extension
	b = le.AppendUint64(le.AppendUint64(b, end), root)
	return le.AppendUint32(b, checksum(b))
}

// sink appends to the file and remembers the first error.
type sink struct {
	w   *bufio.Writer
	off uint64
	err error
}

func (s *sink) write(b []byte) {
	if s.err == nil {
		_, s.err = s.w.Write(b)
	}
	s.off += uint64(len(b))
}

// align pads to a multiple of 8 bytes and returns the offset.
func (s *sink) align() uint64 {
	if n := -s.off & 7; n > 0 {
		s.write(make([]byte, n))
	}
	return s.off
}

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

// packed is a chunk on its way: its bytes or an error arrive once.
type packed struct {
	bytes []byte
	err   error
}

// chunks compresses the dataset in workers and appends the chunks in order.
//
// A feeder hands every chunk number, with a channel for its bytes, first to
// the appender's queue and then to the workers. The appender takes the queue
// in order, so the file is the same for any number of workers; the queue's
// length bounds the finished chunks that wait. On an error the context ends,
// the feeder stops, and the workers run out.
func (t *tree) chunks(d *Dataset, size int) error {
	chunk := chunkShape(d.Shape)
	sides, total := grid(d.Shape, chunk)
	ctx, cancel := context.WithCancel(t.ctx)
	type job struct {
		i    int
		done chan packed
	}
	jobs, queue := make(chan job), make(chan job, 2*t.workers)
	var wg sync.WaitGroup
	defer wg.Wait()
	defer cancel()
	for range t.workers {
		p, err := newPacker(d, chunk, size)
		if err != nil {
			return err
		}
		wg.Go(func() {
			for j := range jobs {
				b, err := p.pack(origin(j.i, sides, chunk))
				j.done <- packed{b, err} // buffered: never blocks
			}
		})
	}
	wg.Go(func() {
		defer close(jobs)
		defer close(queue)
		for i := range total {
			j := job{i, make(chan packed, 1)}
			select {
			case queue <- j:
			case <-ctx.Done():
				return
			}
			select {
			case jobs <- j:
			case <-ctx.Done():
				j.done <- packed{nil, ctx.Err()}
				return
			}
		}
	})
	entries := make([]entry, 0, total)
	for j := range queue {
		p := <-j.done
		if p.err != nil {
			return p.err
		}
		entries = append(entries, entry{t.s.off, uint32(len(p.bytes)), origin(j.i, sides, chunk)})
		if t.s.write(p.bytes); t.s.err != nil {
			return t.s.err
		}
	}
	if len(entries) < total {
		return ctx.Err()
	}
	t.place[d] = placed{addr: writeIndex(t.s, entries, chunk, size), chunk: chunk}
	return t.s.err
}
