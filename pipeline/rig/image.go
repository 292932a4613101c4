package rig

import (
	"encoding/binary"
	"fmt"
	"io"
	"os"
	"time"
)

// Image is a frame as a camera delivers it: 16-bit codes, row-major, row 0
// on top, in the raw orientation of its sensor.
type Image struct {
	W, H  int
	Pix   []uint16
	Taken time.Time // written as DateTime and SubSecTime when not zero
}

// raw turns a frame from the turned frame, in which later light lands further
// down, back to the raw sensor.
func (im Image) raw(direction string) Image {
	w, h := im.W, im.H
	out := Image{W: w, H: h, Pix: make([]uint16, len(im.Pix)), Taken: im.Taken}
	var from func(x, y int) int
	switch direction {
	case "up":
		from = func(x, y int) int { return (h-1-y)*w + w - 1 - x }
	case "right":
		out.W, out.H = h, w
		from = func(x, y int) int { return x*w + w - 1 - y }
	case "left":
		out.W, out.H = h, w
		from = func(x, y int) int { return (h-1-x)*w + y }
	default:
		return im
	}
	for y := range out.H {
		for x := range out.W {
			out.Pix[y*out.W+x] = im.Pix[from(x, y)]
		}
	}
	return out
}

// Save writes a frame as an uncompressed 16-bit gray TIFF file.
func (s *Station) Save(im Image, path string) error { return Save(im, path) }

// Save writes a frame as an uncompressed 16-bit gray TIFF file.
func Save(im Image, path string) error {
	if err := os.WriteFile(path, im.tiff(), 0o644); err != nil {
		return fmt.Errorf("save simulated frame: %w", err)
	}
	return nil
}

// Encode writes a frame as an uncompressed 16-bit gray TIFF stream.
func Encode(w io.Writer, im Image) error {
	_, err := w.Write(im.tiff())
	return err
}

// Baseline TIFF 6.0 field types and sizes.
const (
	tiffASCII = 2
	tiffShort = 3
	tiffLong  = 4
)

// tiff builds a baseline TIFF 6.0 file, little endian, one strip:
// header, pixels, strings, directory.
func (im Image) tiff() []byte {
	le := binary.LittleEndian
	b := append(make([]byte, 0, 8+2*len(im.Pix)+256), 'I', 'I', 42, 0, 0, 0, 0, 0)
	for _, v := range im.Pix {
		b = le.AppendUint16(b, v)
	}
	type field struct {
		tag, kind    uint16
		count, value uint32
	}
	fields := []field{
		{256, tiffLong, 1, uint32(im.W)},            // ImageWidth
		{257, tiffLong, 1, uint32(im.H)},            // ImageLength
		{258, tiffShort, 1, 16},                     // BitsPerSample
		{259, tiffShort, 1, 1},                      // Compression: none
		{262, tiffShort, 1, 1},                      // PhotometricInterpretation: black is zero
		{273, tiffLong, 1, 8},                       // StripOffsets
		{277, tiffShort, 1, 1},                      // SamplesPerPixel
		{278, tiffLong, 1, uint32(im.H)},            // RowsPerStrip
		{279, tiffLong, 1, uint32(2 * len(im.Pix))}, // StripByteCounts
	}
	if !im.Taken.IsZero() {
		at := uint32(len(b))
		b = append(b, im.Taken.Format("2006:01:02 15:04:05\x00")...)
		fields = append(fields, field{306, tiffASCII, 20, at}) // DateTime
		at = uint32(len(b))
		b = append(b, im.Taken.Format(".000000")[1:]+"\x00"...)
		fields = append(fields, field{37520, tiffASCII, 7, at}) // SubSecTime (Exif)
	}
	if len(b)%2 == 1 {
		b = append(b, 0)
	}
	le.PutUint32(b[4:], uint32(len(b)))
	b = le.AppendUint16(b, uint16(len(fields)))
	for _, f := range fields {
		b = le.AppendUint16(b, f.tag)
		b = le.AppendUint16(b, f.kind)
		b = le.AppendUint32(b, f.count)
		b = le.AppendUint32(b, f.value)
	}
	return le.AppendUint32(b, 0)
}
