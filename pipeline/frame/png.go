package frame

import (
	"encoding/binary"
	"errors"
	"fmt"
	"image"
	"image/png"
	"io"
	"strings"
	"time"
)

// maxChunks bounds the chunks of a PNG file that are walked.
const maxChunks = 1 << 20

// pngFile is what the chunks of a PNG file say.
type pngFile struct {
	src    source
	w, h   int
	depth  int
	idat   int64 // compressed bytes of pixels
	create string
	change []byte // tIME
	exif   source // eXIf, a TIFF file in itself
}

func parsePNG(s source) (*picture, error) {
	p := &pngFile{src: s}
	if err := p.header(); err != nil {
		return nil, err
	}
	if err := p.chunks(); err != nil {
		return nil, err
	}
	need := int64(p.h) * (1 + int64(p.w)*int64(p.depth)/8)
	if float64(need) > expansion[deflated]*float64(p.idat) {
		return nil, fault(ErrTruncated, "its %d bytes of pixel data are too few for %d×%d pixels", p.idat, p.w, p.h)
	}
	k := sample{'u', p.depth, true}
	return &picture{w: p.w, h: p.h, format: "PNG " + k.String(), full: k.full(), pixels: p.decode, taken: p.taken}, nil
}

// header reads IHDR, which must come first.
func (p *pngFile) header() error {
	b := make([]byte, 25)
	if err := p.src.read(b, 8, "the PNG header"); err != nil {
		return err
	}
	if binary.BigEndian.Uint32(b) != 13 || string(b[4:8]) != "IHDR" {
		return fault(ErrFormat, "its PNG header is damaged")
	}
	b = b[8:]
	if kind := b[9]; kind != 0 {
		name := map[byte]string{2: "colour", 3: "a palette", 4: "grey with transparency", 6: "colour with transparency"}[kind]
		if name == "" {
			name = "unknown"
		}
		return fault(ErrFormat, "it is a PNG of colour type %d (%s), want grey", kind, name)
	}
	if p.depth = int(b[8]); p.depth != 8 && p.depth != 16 {
		return fault(ErrFormat, "it is a PNG of %d bits, want 8 or 16", p.depth)
	}
	var err error
	p.w, p.h, err = p.src.sides(uint64(binary.BigEndian.Uint32(b)), uint64(binary.BigEndian.Uint32(b[4:])))
	return err
}

// chunks walks all chunks to the end mark.
func (p *pngFile) chunks() error {
	off := int64(8)
	var b [8]byte
	for range maxChunks {
		if err := p.src.read(b[:], off, "the next PNG chunk"); err != nil {
			return err
		}
		n, name := int64(binary.BigEndian.Uint32(b[:])), string(b[4:])
		if err := p.src.holds(off, n+12, "PNG chunk "+strings.ToValidUTF8(name, "?")); err != nil {
			return err
		}
		if name == "IEND" {
			return nil
		}
		if err := p.chunk(name, off+8, n); err != nil {
			return err
		}
		off += n + 12
	}
	return fault(ErrFormat, "it has more than %d PNG chunks", maxChunks)
}

// chunk keeps what matters of a chunk of n bytes at off.
func (p *pngFile) chunk(name string, off, n int64) error {
	switch {
	case name == "IDAT":
		p.idat += n
	case name == "tIME" && n == 7:
		p.change = make([]byte, 7)
		return p.src.read(p.change, off, "PNG chunk tIME")
	case name == "tEXt" && n < 256:
		b := make([]byte, n)
		if err := p.src.read(b, off, "PNG chunk tEXt"); err != nil {
			return err
		}
		if key, text, ok := strings.Cut(string(b), "\x00"); ok && key == "Creation Time" {
			p.create = strings.TrimSpace(text)
		}
	case name == "eXIf":
		p.exif = source{io.NewSectionReader(p.src.r, off, n), n, p.src.lim}
	}
	return nil
}

// decode fills dst. The sides were checked, so the standard decoder takes no
// more memory than the picture.
func (p *pngFile) decode(dst []float32) error {
	img, err := png.Decode(io.NewSectionReader(p.src.r, 0, p.src.size))
	if err != nil {
		return pngFault(err)
	}
	b := img.Bounds()
	if b.Dx() != p.w || b.Dy() != p.h {
		return fault(ErrFormat, "it has two PNG headers that differ")
	}
	for y := range p.h {
		if !pngRow(dst[y*p.w:(y+1)*p.w], img, y) {
			return fault(ErrFormat, "its PNG pixels are not grey")
		}
	}
	return nil
}

// pngRow copies row y. A grey picture with one code marked as transparent
// comes as colour, the codes unchanged.
func pngRow(dst []float32, img image.Image, y int) bool {
	switch m := img.(type) {
	case *image.Gray:
		sample{'u', 8, true}.convert(dst, m.Pix[y*m.Stride:])
	case *image.Gray16:
		sample{'u', 16, true}.convert(dst, m.Pix[y*m.Stride:])
	case *image.NRGBA:
		for x := range dst {
			dst[x] = float32(m.Pix[y*m.Stride+4*x])
		}
	case *image.NRGBA64:
		for x := range dst {
			dst[x] = float32(binary.BigEndian.Uint16(m.Pix[y*m.Stride+8*x:]))
		}
	default:
		return false
	}
	return true
}

func pngFault(err error) error {
	var format png.FormatError
	var unsupported png.UnsupportedError
	switch {
	case fromDevice(err):
		return fmt.Errorf("read PNG pixel data: %w", err)
	case errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF):
		return fault(ErrTruncated, "its PNG pixel data end early")
	case errors.As(err, &format) || errors.As(err, &unsupported):
		return fault(ErrFormat, "%v", err)
	}
	return fault(ErrFormat, "its PNG pixel data are damaged (%v)", err)
}

// taken returns the creation time if it is stored, else the time of the last
// change, which PNG stores in UTC to the second.
func (p *pngFile) taken(loc *time.Location) (time.Time, string, error) {
	if p.exif.size > 0 {
		if d, err := openTIFF(p.exif); err == nil {
			if t, from, err := d.taken(loc); err == nil {
				return t, from, nil
			}
		}
	}
	if p.create != "" {
		t, err := clock(p.create, loc)
		if err != nil {
			return time.Time{}, "", fault(ErrStamp, "its PNG creation time reads %q, which is no time", p.create)
		}
		return t, "PNG Creation Time", nil
	}
	if c := p.change; c != nil {
		y := int(binary.BigEndian.Uint16(c))
		t, ok := date(y, int(c[2]), int(c[3]), int(c[4]), int(c[5]), int(c[6]), 0, time.UTC)
		if ok {
			return t, "PNG tIME", nil
		}
	}
	return time.Time{}, "", fault(ErrStamp, "the PNG file stores no time")
}
