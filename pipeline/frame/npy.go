package frame

import (
	"encoding/binary"
	"fmt"
	"io"
	"slices"
	"time"
)

// maxAxes bounds the axes of an NPY array.
const maxAxes = 4

// maxNPYHeader bounds the header of an NPY file. numpy writes 118 bytes.
const maxNPYHeader = 1 << 16

// array is a parsed NPY header.
type array struct {
	src     source
	sample  sample
	fortran bool
	shape   []int
	off     int64
}

func parseNPY(s source) (*picture, error) {
	a, err := openNPY(s)
	if err != nil {
		return nil, err
	}
	if len(a.shape) != 2 {
		return nil, fault(ErrFormat, "its NPY array has %d axes %v, want 2: rows, columns", len(a.shape), a.shape)
	}
	none := func(*time.Location) (time.Time, string, error) {
		return time.Time{}, "", fault(ErrStamp, "an NPY file stores no time")
	}
	return &picture{w: a.shape[1], h: a.shape[0], format: "NPY " + a.sample.String(), full: a.sample.full(),
		pixels: a.decode, taken: none}, nil
}

// ReadNPY reads an NPY array of up to four axes. The values come in C order,
// rounded to float32. A shape without axes means one value.
func ReadNPY(r io.ReaderAt, size int64, lim Limits) (shape []int, data []float32, err error) {
	s := newSource(r, size, lim)
	kind, err := sniff(s)
	if err == nil && kind != "NPY" {
		err = fault(ErrFormat, "it is a %s file, want NPY", kind)
	}
	if err != nil {
		return nil, nil, fmt.Errorf("read NPY: %w", err)
	}
	a, err := openNPY(s)
	if err != nil {
		return nil, nil, fmt.Errorf("read NPY: %w", err)
	}
	data = make([]float32, a.count())
	if err := a.decode(data); err != nil {
		return nil, nil, fmt.Errorf("read NPY: %w", err)
	}
	return a.shape, data, nil
}

func (a *array) count() int {
	n := 1
	for _, k := range a.shape {
		n *= k
	}
	return n
}

// openNPY reads and checks the header.
func openNPY(s source) (*array, error) {
	lead := make([]byte, 12)
	lead = lead[:min(12, s.size)]
	if err := s.read(lead, 0, "the NPY header"); err != nil {
		return nil, err
	}
	if len(lead) < 12 {
		return nil, fault(ErrTruncated, "it ends within the NPY header")
	}
	var n, start int64
	switch version := lead[6]; version {
	case 1:
		n, start = int64(binary.LittleEndian.Uint16(lead[8:])), 10
	case 2, 3:
		n, start = int64(binary.LittleEndian.Uint32(lead[8:])), 12
	default:
		return nil, fault(ErrFormat, "its NPY version is %d, read are 1 to 3", version)
	}
	if n > maxNPYHeader {
		return nil, fault(ErrFormat, "its NPY header claims %d bytes", n)
	}
	head := make([]byte, n)
	if err := s.read(head, start, "the NPY header"); err != nil {
		return nil, err
	}
	a := &array{src: s, off: start + n}
	if err := a.parse(string(head)); err != nil {
		return nil, err
	}
	return a, a.possible()
}

// possible checks the claimed shape against limits and file.
func (a *array) possible() error {
	n := a.src.lim.MaxPixels
	for _, k := range a.shape {
		if k == 0 {
			return fault(ErrEmpty, "its NPY array has the shape %v", a.shape)
		}
		if n /= int64(k); n == 0 {
			return fault(ErrTooLarge, "its NPY array has the shape %v, the limit is %d values", a.shape, a.src.lim.MaxPixels)
		}
	}
	return a.src.holds(a.off, int64(a.count())*int64(a.sample.bits/8), "the array")
}

// decode fills dst in C order.
func (a *array) decode(dst []float32) error {
	size := a.sample.bits / 8
	var done int
	next := func(b []byte) {
		n := len(b) / size
		a.sample.convert(dst[done:done+n], b)
		done += n
	}
	if a.fortran && len(a.shape) > 1 {
		col := make([]float32, 1<<16)
		walk := newWalk(a.shape)
		next = func(b []byte) {
			c := col[:len(b)/size]
			a.sample.convert(c, b)
			for _, v := range c {
				dst[walk.at] = v
				walk.step()
			}
		}
	}
	return a.src.stream(a.off, int64(len(dst))*int64(size), size, "the array", next)
}

// walk runs through an array of C order with the first axis fastest.
type walk struct {
	shape, stride, index []int
	at                   int
}

func newWalk(shape []int) *walk {
	w := &walk{shape: shape, stride: make([]int, len(shape)), index: make([]int, len(shape))}
	n := 1
	for k, side := range slices.Backward(shape) {
		w.stride[k] = n
		n *= side
	}
	return w
}

func (w *walk) step() {
	for k, side := range w.shape {
		w.index[k]++
		w.at += w.stride[k]
		if w.index[k] < side {
			return
		}
		w.at -= side * w.stride[k]
		w.index[k] = 0
	}
}
