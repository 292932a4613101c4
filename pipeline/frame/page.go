package frame

import (
	"fmt"
	"math"
	"time"
)

// The compressions of TIFF that are read.
const (
	plain      = 1
	lzwCoded   = 5
	deflated   = 8
	deflateOld = 32946
	packBits   = 32773
)

// expansion is the most bytes one compressed byte can become.
//
//   - Deflate: 258 bytes from one bit of length code and one of distance code.
//   - LZW: a string of n bytes has a code above 257+n, so the longest, of 3837
//     bytes, needs 12 bits.
//   - PackBits: 128 bytes from two.
var expansion = map[uint64]float64{plain: 1, lzwCoded: 3837 / 1.5, deflated: 1032, deflateOld: 1032, packBits: 64}

var compressionName = map[uint64]string{
	plain: "", lzwCoded: " LZW", deflated: " Deflate", deflateOld: " Deflate", packBits: " PackBits"}

// refused names compressions that files do come with.
var refused = map[uint64]string{2: "CCITT", 3: "CCITT fax 3", 4: "CCITT fax 4", 6: "old JPEG", 7: "JPEG",
	34712: "JPEG 2000", 34887: "LERC", 34925: "LZMA", 50000: "Zstandard", 50001: "WebP"}

// maxSegments bounds the strips or tiles of a page: 64 Mpx in tiles of 8×8.
const maxSegments = 1 << 20

// page is the picture a directory describes, checked and ready to decode. It
// is cut into across × down segments of segW × segH pixels: strips, or tiles.
type page struct {
	src            source
	w, h           int
	segW, segH     int
	across, down   int
	tiled          bool
	offsets, sizes []uint64
	compression    uint64
	predictor      uint64
	sample         sample
	invert         bool
}

func parseTIFF(s source) (*picture, error) {
	d, err := openTIFF(s)
	if err != nil {
		return nil, err
	}
	p, err := d.page()
	if err != nil {
		return nil, err
	}
	name := "TIFF"
	if d.big {
		name = "BigTIFF"
	}
	return &picture{w: p.w, h: p.h, full: p.sample.full(), pixels: p.decode,
		format: fmt.Sprintf("%s %v%s", name, p.sample, compressionName[p.compression]),
		taken:  func(loc *time.Location) (time.Time, string, error) { return d.taken(loc) }}, nil
}

// page reads and checks everything but the pixels.
func (d *directory) page() (*page, error) {
	if !d.has(tagWidth) || !d.has(tagHeight) {
		return nil, fault(ErrFormat, "its first TIFF directory has no width or height")
	}
	w, err := d.uint(tagWidth, 0)
	if err != nil {
		return nil, err
	}
	h, err := d.uint(tagHeight, 0)
	if err != nil {
		return nil, err
	}
	p := &page{src: d.src}
	if p.w, p.h, err = d.src.sides(w, h); err != nil {
		return nil, err
	}
	for _, step := range []func(*page) error{d.grey, d.sampleKind, d.coding, d.cut, d.locate} {
		if err := step(p); err != nil {
			return nil, err
		}
	}
	return p, p.possible()
}

// grey refuses everything that is not one channel of light.
func (d *directory) grey(p *page) error {
	photo, err := d.uint(tagPhotometric, 1)
	if err != nil {
		return err
	}
	n, err := d.uint(tagSamples, 1)
	if err != nil {
		return err
	}
	switch {
	case photo == 3:
		return fault(ErrFormat, "it is a palette picture, whose codes are no light levels")
	case photo > 1:
		return fault(ErrFormat, "it is a colour picture or no picture of light (PhotometricInterpretation %d)", photo)
	case n != 1:
		return fault(ErrFormat, "it has %d channels, want 1", n)
	}
	p.invert = photo == 0
	return nil
}

// sampleKind finds the kind of number stored.
func (d *directory) sampleKind(p *page) error {
	bits, err := d.uint(tagBits, 1)
	if err != nil {
		return err
	}
	format, err := d.uint(tagSampleFormat, 1)
	if err != nil {
		return err
	}
	kind := map[uint64]byte{1: 'u', 2: 'i', 3: 'f', 4: 'u'}[format]
	known := map[byte][]uint64{'u': {8, 10, 12, 14, 16, 32}, 'i': {8, 16, 32}, 'f': {32, 64}}[kind]
	for _, b := range known {
		if b == bits {
			p.sample = sample{kind, int(bits), d.order.Uint16([]byte{0, 1}) == 1}
		}
	}
	if p.sample.bits == 0 {
		return fault(ErrFormat, "its pixels have %d bits in TIFF sample format %d; read are 8, 10, 12, 14, 16 and 32 bits unsigned (format 1), 8, 16 and 32 signed (2), 32 and 64 float (3)", bits, format)
	}
	if p.invert && kind != 'u' {
		return fault(ErrFormat, "it says 0 is white (PhotometricInterpretation 0) of %v pixels, which has no meaning", p.sample)
	}
	return nil
}

// coding finds compression and predictor.
func (d *directory) coding(p *page) (err error) {
	if p.compression, err = d.uint(tagCompression, plain); err != nil {
		return err
	}
	if expansion[p.compression] == 0 {
		name := refused[p.compression]
		if name == "" {
			name = "unknown"
		}
		return fault(ErrFormat, "its compression is number %d (%s); read are none, LZW, Deflate and PackBits", p.compression, name)
	}
	fill, err := d.uint(tagFillOrder, 1)
	if err != nil {
		return err
	}
	if fill != 1 {
		return fault(ErrFormat, "its bits run backwards (FillOrder %d)", fill)
	}
	p.predictor = 1
	if p.compression == lzwCoded || p.compression == deflated || p.compression == deflateOld {
		if p.predictor, err = d.uint(tagPredictor, 1); err != nil {
			return err
		}
	}
	switch {
	case p.predictor == 1:
	case p.predictor == 2 && !p.sample.packed():
	case p.predictor == 3 && p.sample.kind == 'f':
	default:
		return fault(ErrFormat, "predictor %d does not go with %v pixels", p.predictor, p.sample)
	}
	return nil
}

// cut finds the sides of the segments.
func (d *directory) cut(p *page) error {
	p.tiled = d.has(tagTileWidth) || d.has(tagTileOffsets)
	w, h := uint64(p.w), uint64(0)
	var err error
	if p.tiled {
		if w, err = d.uint(tagTileWidth, 0); err != nil {
			return err
		}
		h, err = d.uint(tagTileHeight, 0)
	} else if h, err = d.uint(tagRowsPerStrip, math.MaxUint32); err == nil {
		h = min(h, uint64(p.h))
	}
	if err != nil {
		return err
	}
	if w == 0 || h == 0 {
		return fault(ErrFormat, "its %ss are %d×%d pixels", p.part(), w, h)
	}
	if m := uint64(d.src.lim.MaxPixels); w > m || h > m {
		return fault(ErrTooLarge, "its %ss are %d×%d pixels, the limit is %d pixels", p.part(), w, h, m)
	}
	p.segW, p.segH = int(w), int(h)
	p.across, p.down = (p.w+p.segW-1)/p.segW, (p.h+p.segH-1)/p.segH
	if p.across > maxSegments/p.down {
		return fault(ErrFormat, "it is cut into %d×%d %ss, more than the %d that are read", p.across, p.down, p.part(), maxSegments)
	}
	return nil
}

func (p *page) part() string {
	if p.tiled {
		return "tile"
	}
	return "strip"
}

// locate reads where the segments are. Old writers of plain strips leave the
// sizes out.
func (d *directory) locate(p *page) (err error) {
	offsets, sizes := uint16(tagStripOffsets), uint16(tagStripCounts)
	if p.tiled && d.has(tagTileOffsets) { // some old writers put tiles under the strip tags
		offsets, sizes = tagTileOffsets, tagTileCounts
	}
	n := p.across * p.down
	if !d.has(offsets) {
		return fault(ErrFormat, "it has no %s offsets", p.part())
	}
	if p.offsets, err = d.uints(offsets, n); err != nil {
		return err
	}
	if d.has(sizes) {
		p.sizes, err = d.uints(sizes, n)
		return err
	}
	if p.compression != plain {
		return fault(ErrFormat, "it has no %s byte counts", p.part())
	}
	p.sizes = make([]uint64, n)
	for i := range p.sizes {
		p.sizes[i] = uint64(p.need(i))
	}
	return nil
}

// rowBytes is the size of one row of a segment, which ends on a byte.
func (p *page) rowBytes() int64 { return (int64(p.segW)*int64(p.sample.bits) + 7) / 8 }

// rows is the number of rows of segment i that lie in the picture.
func (p *page) rows(i int) int { return min(p.segH, p.h-i/p.across*p.segH) }

// need is the number of decompressed bytes wanted of segment i.
func (p *page) need(i int) int64 { return int64(p.rows(i)) * p.rowBytes() }

// possible refuses a page whose segments lie outside the file or cannot hold
// the pixels even at the best compression.
func (p *page) possible() error {
	var total float64
	ratio := expansion[p.compression]
	for i, off := range p.offsets {
		size, need := p.sizes[i], float64(p.need(i))
		what := fmt.Sprintf("%s %d of %d", p.part(), i+1, len(p.offsets))
		if off == 0 || size == 0 {
			return fault(ErrTruncated, "%s is not written", what)
		}
		if need > ratio*float64(size) {
			return fault(ErrTruncated, "%s has %d bytes, too few for %.0f bytes of pixels", what, size, need)
		}
		if err := p.src.holds(offset(off), offset(size), what); err != nil {
			return err
		}
		total += need
	}
	if total > ratio*float64(p.src.size) {
		return fault(ErrTruncated, "%d×%d pixels cannot fit into %d bytes", p.w, p.h, p.src.size)
	}
	return nil
}
