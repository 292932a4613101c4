package frame

import (
	"encoding/binary"
	"fmt"
	"strings"
)

// Tags of TIFF 6.0 that matter here.
const (
	tagWidth        = 256
	tagHeight       = 257
	tagBits         = 258
	tagCompression  = 259
	tagPhotometric  = 262
	tagFillOrder    = 266
	tagStripOffsets = 273
	tagSamples      = 277
	tagRowsPerStrip = 278
	tagStripCounts  = 279
	tagDateTime     = 306
	tagPredictor    = 317
	tagTileWidth    = 322
	tagTileHeight   = 323
	tagTileOffsets  = 324
	tagTileCounts   = 325
	tagSampleFormat = 339
)

// maxEntries bounds the entries of one directory. The format allows more;
// no camera writes more than a few dozen.
const maxEntries = 4096

// directory is one TIFF image file directory.
type directory struct {
	src   source
	order binary.ByteOrder
	big   bool
	tags  map[uint16]entry
}

// entry locates the values of one tag.
type entry struct {
	kind  uint16
	count uint64
	off   int64
}

// width is the size in bytes of one value of the integer and text types of
// TIFF 6.0 and BigTIFF, or 0.
func (e entry) width() int64 {
	switch e.kind {
	case 1, 2, 7: // BYTE, ASCII, UNDEFINED
		return 1
	case 3: // SHORT
		return 2
	case 4, 13: // LONG, IFD
		return 4
	case 16, 18: // LONG8, IFD8
		return 8
	}
	return 0
}

// openTIFF reads the header and the first directory.
func openTIFF(s source) (*directory, error) {
	head := make([]byte, 16)
	head = head[:min(16, s.size)]
	if err := s.read(head, 0, "the TIFF header"); err != nil {
		return nil, err
	}
	d := &directory{src: s, order: binary.LittleEndian}
	if head[0] == 'M' {
		d.order = binary.BigEndian
	}
	if len(head) < 8 {
		return nil, fault(ErrTruncated, "it ends within the TIFF header")
	}
	d.big = d.order.Uint16(head[2:]) == 43
	if !d.big {
		return d, d.load(int64(d.order.Uint32(head[4:])))
	}
	if len(head) < 16 {
		return nil, fault(ErrTruncated, "it ends within the BigTIFF header")
	}
	if d.order.Uint16(head[4:]) != 8 || d.order.Uint16(head[6:]) != 0 {
		return nil, fault(ErrFormat, "its BigTIFF header is damaged")
	}
	return d, d.load(offset(d.order.Uint64(head[8:])))
}

// offset makes a file offset; what no file reaches becomes negative.
func offset(u uint64) int64 {
	if u > 1<<62 {
		return -1
	}
	return int64(u)
}

// load reads the directory at off.
func (d *directory) load(off int64) error {
	if off == 0 {
		return fault(ErrTruncated, "its first directory is not written yet")
	}
	lead, each := int64(2), int64(12)
	if d.big {
		lead, each = 8, 20
	}
	head := make([]byte, lead)
	if err := d.src.read(head, off, "the TIFF directory"); err != nil {
		return err
	}
	n := word(head, int(lead), d.order)
	if n == 0 || n > maxEntries {
		return fault(ErrFormat, "its TIFF directory has %d entries", n)
	}
	body := make([]byte, int64(n)*each)
	if err := d.src.read(body, off+lead, "the TIFF directory"); err != nil {
		return err
	}
	d.tags = make(map[uint16]entry, n)
	for i := int64(0); i < int64(n); i++ {
		d.add(body[i*each:(i+1)*each], off+lead+i*each)
	}
	return nil
}

// add keeps the entry b, which lies at offset at.
func (d *directory) add(b []byte, at int64) {
	tag := d.order.Uint16(b)
	e := entry{kind: d.order.Uint16(b[2:])}
	room := int64(len(b)-4) / 2 // bytes of the count, and of the value
	e.count = word(b[4:], int(room), d.order)
	if w := e.width(); w > 0 && e.count <= uint64(room/w) {
		e.off = at + 4 + room
	} else {
		e.off = offset(word(b[4+room:], int(room), d.order))
	}
	if _, twice := d.tags[tag]; !twice {
		d.tags[tag] = e
	}
}

// raw reads the first n values of a tag that is there.
func (d *directory) raw(tag uint16, n uint64) ([]byte, error) {
	e, what := d.tags[tag], fmt.Sprintf("TIFF tag %d", tag)
	w := e.width()
	if w == 0 {
		return nil, fault(ErrFormat, "%s has type %d, which it cannot have", what, e.kind)
	}
	if e.count < n {
		return nil, fault(ErrFormat, "%s has %d values, want %d", what, e.count, n)
	}
	if n > uint64(d.src.size) {
		return nil, fault(ErrTruncated, "%s should have %d values, but the file has %d bytes", what, n, d.src.size)
	}
	if err := d.src.holds(e.off, int64(n)*w, what); err != nil {
		return nil, err
	}
	b := make([]byte, int64(n)*w)
	return b, d.src.read(b, e.off, what)
}

// uints reads the first n values of a tag that is there.
func (d *directory) uints(tag uint16, n int) ([]uint64, error) {
	b, err := d.raw(tag, uint64(n))
	if err != nil {
		return nil, err
	}
	w := len(b) / n
	v := make([]uint64, n)
	for i := range v {
		v[i] = word(b[i*w:], w, d.order)
	}
	return v, nil
}

// uint reads the first value of a tag, or the default if it is not there.
func (d *directory) uint(tag uint16, def uint64) (uint64, error) {
	if !d.has(tag) {
		return def, nil
	}
	v, err := d.uints(tag, 1)
	if err != nil {
		return 0, err
	}
	return v[0], nil
}

func (d *directory) has(tag uint16) bool { _, ok := d.tags[tag]; return ok }

// text reads a short text tag without its end mark; "" if it is not there.
func (d *directory) text(tag uint16) (string, error) {
	e, ok := d.tags[tag]
	if !ok || e.count == 0 {
		return "", nil
	}
	b, err := d.raw(tag, min(e.count, 256))
	if err != nil {
		return "", err
	}
	s, _, _ := strings.Cut(string(b), "\x00")
	return strings.TrimSpace(s), nil
}
