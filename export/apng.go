package export

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"
	"image"
	"image/png"
	"io"
)

// animation splices still images into an animated PNG (PNG Specification,
// Third Edition, W3C 2025: chunks acTL, fcTL and fdAT). The first image added
// is no frame: its chunks stay as they are, and viewers without animation show
// it. Those of the frames become fdAT chunks. All images must have one size
// and one palette. It streams: one encoded image is held at a time.
type animation struct {
	w      io.Writer
	frames int
	milli  int // per frame
	seq    uint32
	added  int // images, the still one among them
	begun  int // frames whose fcTL is written
	err    error
	enc    png.Encoder
}

func newAnimation(w io.Writer, frames, milli int) *animation {
	return &animation{w: w, frames: frames, milli: milli, enc: png.Encoder{CompressionLevel: png.BestSpeed, BufferPool: &scratch{}}}
}

// scratch hands the encoder of the last image to the next.
type scratch struct{ b *png.EncoderBuffer }

func (s *scratch) Get() *png.EncoderBuffer  { return s.b }
func (s *scratch) Put(b *png.EncoderBuffer) { s.b = b }

var errPNG = errors.New("unexpected PNG chunk")

// add appends an image: first the still one, then every frame.
func (a *animation) add(img *image.Paletted) error {
	var b bytes.Buffer
	if err := a.enc.Encode(&b, img); err != nil {
		return err
	}
	p := b.Bytes()
	if a.added == 0 {
		a.write(p[:8]) // signature
	}
	for p = p[8:]; len(p) >= 12 && a.err == nil; {
		n := int(binary.BigEndian.Uint32(p))
		if len(p) < 12+n {
			return errPNG
		}
		a.splice(string(p[4:8]), p[8:8+n], img.Rect)
		p = p[12+n:]
	}
	if a.added++; a.added == a.frames+1 {
		a.chunk("IEND", nil)
	}
	return a.err
}

// splice passes one chunk of a still image on, or turns it into its animated
// counterpart.
func (a *animation) splice(kind string, data []byte, r image.Rectangle) {
	switch kind {
	case "IHDR", "PLTE", "tRNS":
		if a.added > 0 {
			return
		}
		a.chunk(kind, data)
		if kind == "IHDR" {
			ac := binary.BigEndian.AppendUint32(nil, uint32(a.frames))
			a.chunk("acTL", binary.BigEndian.AppendUint32(ac, 0)) // plays for ever
		}
	case "IDAT":
		if a.added == 0 {
			a.chunk("IDAT", data)
			return
		}
		if a.begun < a.added {
			a.begun++
			a.control(r)
		}
		a.chunk("fdAT", append(binary.BigEndian.AppendUint32(nil, a.next()), data...))
	case "IEND":
	default:
		a.err = fmt.Errorf("%w %q", errPNG, kind)
	}
}

// control writes the fcTL chunk: whole image, no blending, shown for milli.
func (a *animation) control(r image.Rectangle) {
	be := binary.BigEndian
	b := be.AppendUint32(nil, a.next())
	b = be.AppendUint32(be.AppendUint32(b, uint32(r.Dx())), uint32(r.Dy()))
	b = append(b, 0, 0, 0, 0, 0, 0, 0, 0) // offsets
	b = be.AppendUint16(be.AppendUint16(b, uint16(a.milli)), 1000)
	a.chunk("fcTL", append(b, 0, 0)) // dispose none, blend source
}

// next returns the sequence number of the next fcTL or fdAT chunk.
func (a *animation) next() uint32 {
	a.seq++
	return a.seq - 1
}

func (a *animation) chunk(kind string, data []byte) {
	b := binary.BigEndian.AppendUint32(nil, uint32(len(data)))
	b = append(append(b, kind...), data...)
	a.write(binary.BigEndian.AppendUint32(b, crc32.ChecksumIEEE(b[4:])))
}

func (a *animation) write(b []byte) {
	if a.err == nil {
		_, a.err = a.w.Write(b)
	}
}
