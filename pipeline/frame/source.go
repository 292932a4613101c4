package frame

import (
	"errors"
	"fmt"
	"io"
)

// source is a file being read, its size and what may be taken from it.
type source struct {
	r    io.ReaderAt
	size int64
	lim  Limits
}

func newSource(r io.ReaderAt, size int64, lim Limits) source {
	return source{device{r}, size, lim.filled()}
}

// device marks the errors of the reader below, so that a decompressor that
// passes one on is not taken to complain about the file.
type device struct{ r io.ReaderAt }

func (d device) ReadAt(p []byte, off int64) (int, error) {
	n, err := d.r.ReadAt(p, off)
	if err != nil && err != io.EOF {
		err = &deviceError{err}
	}
	return n, err
}

type deviceError struct{ error }

func (e *deviceError) Unwrap() error { return e.error }

func fromDevice(err error) bool { var d *deviceError; return errors.As(err, &d) }

// read fills p from offset off. What is named in the error.
func (s source) read(p []byte, off int64, what string) error {
	if err := s.holds(off, int64(len(p)), what); err != nil {
		return err
	}
	if n, err := s.r.ReadAt(p, off); n < len(p) {
		return s.short(err, what)
	}
	return nil
}

// holds reports whether n bytes from off lie within the file.
func (s source) holds(off, n int64, what string) error {
	if off < 0 || n < 0 || off > s.size || n > s.size-off {
		return fault(ErrTruncated, "%s should lie at byte %d, %d bytes long, but the file has %d bytes", what, off, n, s.size)
	}
	return nil
}

// short turns the error of a read that gave too little into one of ours.
func (s source) short(err error, what string) error {
	if fromDevice(err) {
		return fmt.Errorf("read %s: %w", what, err)
	}
	return fault(ErrTruncated, "the file ends within %s", what)
}

// sides checks the sides a header claims against the limits.
func (s source) sides(w, h uint64) (int, int, error) {
	if w == 0 || h == 0 {
		return 0, 0, fault(ErrEmpty, "the header says %d×%d pixels", w, h)
	}
	if m := uint64(s.lim.MaxPixels); w > m || h > m/w {
		return 0, 0, fault(ErrTooLarge, "the header says %d×%d pixels, the limit is %d pixels", w, h, m)
	}
	return int(w), int(h), nil
}

// stream calls f with the n bytes from off in order, in blocks that are a
// multiple of unit bytes (but for the last).
func (s source) stream(off, n int64, unit int, what string, f func([]byte)) error {
	if err := s.holds(off, n, what); err != nil {
		return err
	}
	const target = 1 << 16
	buf := make([]byte, min(int64(max(target/unit, 1)*unit), n))
	for n > 0 {
		buf = buf[:min(int64(len(buf)), n)]
		if err := s.read(buf, off, what); err != nil {
			return err
		}
		f(buf)
		off, n = off+int64(len(buf)), n-int64(len(buf))
	}
	return nil
}
