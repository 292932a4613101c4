package frame

import (
	"bufio"
	"encoding/binary"
	"fmt"
	"io"
	"math"
	"strings"
	"time"
)

// WriteTIFF writes a grey picture of 16 bits, little-endian, not compressed,
// in one strip.
func WriteTIFF(w io.Writer, width, height int, pix []uint16) error {
	return WriteTIFFAt(w, width, height, pix, time.Time{})
}

// WriteTIFFAt is WriteTIFF with the time the picture was taken, as it reads in
// its own location, in DateTime and (nine digits) SubSecTime. The zero time
// writes neither.
func WriteTIFFAt(w io.Writer, width, height int, pix []uint16, at time.Time) error {
	if width <= 0 || height <= 0 || len(pix) != width*height {
		return fmt.Errorf("write TIFF: %d values for %d×%d pixels", len(pix), width, height)
	}
	if int64(len(pix)) > (1<<32-512)/2 {
		return fmt.Errorf("write TIFF: %d×%d pixels exceed the 4 GiB of a classic TIFF", width, height)
	}
	b := bufio.NewWriterSize(w, 1<<16)
	b.Write(tiffHead(width, height, at))
	for _, v := range pix {
		b.Write([]byte{byte(v), byte(v >> 8)})
	}
	if err := b.Flush(); err != nil {
		return fmt.Errorf("write TIFF: %w", err)
	}
	return nil
}

// tiffHead is everything before the pixels: header, directory, texts.
func tiffHead(width, height int, at time.Time) []byte {
	type field struct {
		tag, kind uint16
		value     uint32
		text      string
	}
	list := []field{
		{tagWidth, 4, uint32(width), ""}, {tagHeight, 4, uint32(height), ""},
		{tagBits, 3, 16, ""}, {tagCompression, 3, plain, ""}, {tagPhotometric, 3, 1, ""},
		{tagStripOffsets, 4, 0, ""}, {tagSamples, 3, 1, ""}, {tagRowsPerStrip, 4, uint32(height), ""},
		{tagStripCounts, 4, uint32(2 * width * height), ""}, {tagSampleFormat, 3, 1, ""}}
	if !at.IsZero() {
		list = append(list[:9:9], field{tagDateTime, 2, 0, at.Format("2006:01:02 15:04:05") + "\x00"},
			list[9], field{tagSubSec, 2, 0, fmt.Sprintf("%09d\x00", at.Nanosecond())})
	}
	le := binary.LittleEndian
	b := append([]byte("II*\x00"), 8, 0, 0, 0)
	b = le.AppendUint16(b, uint16(len(list)))
	size := len(b) + 12*len(list) + 4
	var texts []byte
	for _, f := range list {
		b = le.AppendUint16(le.AppendUint16(b, f.tag), f.kind)
		if f.text != "" {
			b = le.AppendUint32(le.AppendUint32(b, uint32(len(f.text))), uint32(size+len(texts)))
			texts = append(texts, f.text...)
			if len(texts)%2 == 1 { // values start on a word
				texts = append(texts, 0)
			}
			continue
		}
		b = le.AppendUint32(b, 1)
		if f.tag == tagStripOffsets {
			f.value = uint32(size)
			if !at.IsZero() {
				f.value += 20 + 10 // the two texts
			}
		}
		b = le.AppendUint32(b, f.value)
	}
	return append(le.AppendUint32(b, 0), texts...)
}

// WriteNPY writes an array of float32, C order, in NPY version 1.
func WriteNPY(w io.Writer, shape []int, data []float32) error {
	n := 1
	for _, k := range shape {
		if k <= 0 || n > math.MaxInt/k {
			return fmt.Errorf("write NPY: shape %v", shape)
		}
		n *= k
	}
	if n != len(data) {
		return fmt.Errorf("write NPY: %d values for shape %v", len(data), shape)
	}
	list := strings.Trim(strings.ReplaceAll(fmt.Sprint(shape), " ", ", "), "[]")
	if len(shape) == 1 {
		list += ","
	}
	head := fmt.Sprintf("{'descr': '<f4', 'fortran_order': False, 'shape': (%s), }", list)
	const lead = 10 // magic, version, length
	head += strings.Repeat(" ", 63-(lead+len(head))%64) + "\n"
	if len(head) > math.MaxUint16 {
		return fmt.Errorf("write NPY: %d axes are too many", len(shape))
	}
	b := bufio.NewWriterSize(w, 1<<16)
	b.WriteString("\x93NUMPY\x01\x00")
	b.Write(binary.LittleEndian.AppendUint16(nil, uint16(len(head))))
	b.WriteString(head)
	for _, v := range data {
		b.Write(binary.LittleEndian.AppendUint32(b.AvailableBuffer(), math.Float32bits(v)))
	}
	if err := b.Flush(); err != nil {
		return fmt.Errorf("write NPY: %w", err)
	}
	return nil
}
