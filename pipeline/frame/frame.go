package frame

import (
	"bytes"
	"fmt"
	"io"
	"math"
	"os"
	"time"
)

// Frame is one decoded picture.
type Frame struct {
	// W and H are the sides in pixels.
	W, H int

	// Pix holds the W·H values in ADU, row-major, row 0 first in the file.
	Pix []float32

	// NonFinite counts the values of Pix that are NaN or infinite.
	NonFinite int

	// FullScale is the largest value an integer format can hold, in ADU; 0
	// for a float format. A camera with fewer bits than its file format
	// saturates below it.
	FullScale float64

	// Format names the file format and the kind of its samples.
	Format string

	// Taken is the time stored in the file, and TakenFrom the field it came
	// from. A time without a zone is taken as UTC; a Stamper knows better.
	// Both are zero when the file stores no time that can be read.
	Taken     time.Time
	TakenFrom string
}

// Limits bounds what is read.
type Limits struct {
	// MaxPixels is the largest picture, in pixels. 0 means 64 Mpx, that is
	// 256 MiB of float32. For ReadNPY it counts values.
	MaxPixels int64

	// MaxBytes is the largest file, in bytes. 0 means 1 GiB.
	MaxBytes int64
}

func (l Limits) filled() Limits {
	if l.MaxPixels <= 0 {
		l.MaxPixels = 64 << 20
	}
	if l.MaxBytes <= 0 {
		l.MaxBytes = 1 << 30
	}
	l.MaxPixels = min(l.MaxPixels, math.MaxInt/16)
	return l
}

// Read decodes the frame file at path.
func Read(path string, lim Limits) (*Frame, error) {
	f, size, err := open(path)
	if err != nil {
		return nil, fmt.Errorf("read frame %q: %w", path, err)
	}
	defer f.Close()
	return Decode(f, size, path, lim)
}

// Decode decodes a frame of size bytes from r. The name is used in errors
// only.
func Decode(r io.ReaderAt, size int64, name string, lim Limits) (*Frame, error) {
	f, err := decode(newSource(r, size, lim))
	if err != nil {
		return nil, fmt.Errorf("decode frame %q: %w", name, err)
	}
	return f, nil
}

// Shape reads the sides of the frame file at path from its header. It makes
// the same checks as Read, but touches no pixels.
func Shape(path string, lim Limits) (w, h int, err error) {
	f, size, err := open(path)
	if err != nil {
		return 0, 0, fmt.Errorf("read frame %q: %w", path, err)
	}
	defer f.Close()
	p, err := parse(newSource(f, size, lim))
	if err != nil {
		return 0, 0, fmt.Errorf("read header of frame %q: %w", path, err)
	}
	return p.w, p.h, nil
}

// picture is a parsed header, checked, and the way to its pixels and its time.
type picture struct {
	w, h   int
	format string
	full   float64
	pixels func(dst []float32) error
	taken  func(*time.Location) (time.Time, string, error)
}

func decode(s source) (*Frame, error) {
	p, err := parse(s)
	if err != nil {
		return nil, err
	}
	f := &Frame{W: p.w, H: p.h, FullScale: p.full, Format: p.format}
	f.Pix = make([]float32, p.w*p.h)
	if err := p.pixels(f.Pix); err != nil {
		return nil, err
	}
	for _, v := range f.Pix {
		if v-v != 0 { // NaN and ±Inf
			f.NonFinite++
		}
	}
	if t, from, err := p.taken(time.UTC); err == nil {
		f.Taken, f.TakenFrom = t, from
	}
	return f, nil
}

func parse(s source) (*picture, error) {
	kind, err := sniff(s)
	if err != nil {
		return nil, err
	}
	switch kind {
	case "TIFF":
		return parseTIFF(s)
	case "PNG":
		return parsePNG(s)
	case "FITS":
		return parseFITS(s)
	}
	return parseNPY(s)
}

// magic lists the first bytes of every format read here.
var magic = []struct{ format, start string }{
	{"TIFF", "II*\x00"}, {"TIFF", "MM\x00*"}, {"TIFF", "II+\x00"}, {"TIFF", "MM\x00+"},
	{"PNG", "\x89PNG\r\n\x1a\n"}, {"FITS", "SIMPLE  ="}, {"NPY", "\x93NUMPY"},
}

// sniff names the format of a file by its first bytes, and refuses a file
// that is too large to be looked at.
func sniff(s source) (string, error) {
	if s.size <= 0 {
		return "", fault(ErrEmpty, "the file has no bytes")
	}
	if s.size > s.lim.MaxBytes {
		return "", fault(ErrTooLarge, "the file has %d bytes, the limit is %d", s.size, s.lim.MaxBytes)
	}
	head := make([]byte, min(16, s.size))
	if err := s.read(head, 0, "the first bytes"); err != nil {
		return "", err
	}
	for _, m := range magic {
		if bytes.HasPrefix(head, []byte(m.start)) {
			return m.format, nil
		}
		if bytes.HasPrefix([]byte(m.start), head) {
			return "", fault(ErrTruncated, "it ends within the first %d bytes of a %s file", len(m.start), m.format)
		}
	}
	if len(bytes.Trim(head, "\x00")) == 0 {
		return "", fault(ErrTruncated, "it begins with zeros, as a file does whose space is reserved and not yet written")
	}
	return "", fault(ErrFormat, "its first bytes are % x: neither TIFF, PNG, FITS nor NPY", head)
}

// open opens a file. A pipe or device is refused before it is opened, which
// could block for ever. What is merely not regular is let through: so Windows
// shows files that a cloud folder keeps elsewhere.
func open(path string) (*os.File, int64, error) {
	st, err := os.Stat(path)
	if err != nil {
		return nil, 0, err
	}
	if st.IsDir() {
		return nil, 0, fault(ErrFormat, "it is a folder")
	}
	const stuck = os.ModeNamedPipe | os.ModeSocket | os.ModeDevice | os.ModeCharDevice
	if k := st.Mode().Type(); k&stuck != 0 {
		return nil, 0, fault(ErrFormat, "it is no file but a pipe, socket or device (%v)", k)
	}
	f, err := os.Open(path)
	if err != nil {
		return nil, 0, err
	}
	if st, err = f.Stat(); err != nil {
		f.Close()
		return nil, 0, err
	}
	return f, st.Size(), nil
}
