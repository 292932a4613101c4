package frame

import (
	"bufio"
	"compress/zlib"
	"errors"
	"fmt"
	"io"

	"golang.org/x/image/tiff/lzw"
)

// unpacker opens one compressed segment after the other, keeping its buffers.
type unpacker struct {
	buf  *bufio.Reader
	zlib io.ReadCloser
	runs runReader
}

// decode fills dst with the whole picture.
func (p *page) decode(dst []float32) error {
	u := &unpacker{buf: bufio.NewReaderSize(nil, 1<<16)}
	row := make([]byte, p.rowBytes())
	spare := row
	if p.predictor == 3 {
		spare = make([]byte, len(row))
	}
	for i := range p.offsets {
		if err := p.segment(dst, i, u, row, spare); err != nil {
			return err
		}
	}
	return nil
}

// segment decodes segment i row by row into its place in dst.
func (p *page) segment(dst []float32, i int, u *unpacker, row, spare []byte) error {
	what := fmt.Sprintf("%s %d of %d", p.part(), i+1, len(p.offsets))
	size := int64(p.sizes[i])
	if p.compression == plain {
		size = min(size, p.need(i))
	}
	r, err := u.open(p.compression, io.NewSectionReader(p.src.r, int64(p.offsets[i]), size))
	if err != nil {
		return p.broken(err, what)
	}
	x, y := i%p.across*p.segW, i/p.across*p.segH
	n := min(p.segW, p.w-x)
	for k := range p.rows(i) {
		if _, err := io.ReadFull(r, row); err != nil {
			return p.broken(err, fmt.Sprintf("%s, row %d of %d", what, k+1, p.rows(i)))
		}
		start := (y+k)*p.w + x
		p.restore(dst[start:start+n], row, spare)
	}
	return p.trailer(r, what)
}

// trailer looks one byte past the pixels, which makes zlib compare its
// checksum if the stream ends there. Padding is allowed.
func (p *page) trailer(r io.Reader, what string) error {
	if p.compression != deflated && p.compression != deflateOld {
		return nil
	}
	var one [1]byte
	_, err := io.ReadFull(r, one[:])
	if errors.Is(err, zlib.ErrChecksum) || fromDevice(err) {
		return p.broken(err, what)
	}
	return nil
}

// broken turns the error of a decompressor into one of ours.
func (p *page) broken(err error, what string) error {
	switch {
	case fromDevice(err):
		return fmt.Errorf("read %s: %w", what, err)
	case errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF):
		return fault(ErrTruncated, "%s ends early", what)
	}
	return fault(ErrFormat, "%s is damaged (%v)", what, err)
}

// restore undoes predictor and inversion in row and converts it.
func (p *page) restore(dst []float32, row, spare []byte) {
	s := p.sample
	switch p.predictor {
	case 2:
		sum(row, s.bits/8, s)
	case 3:
		join(spare, row, s.bits/8)
		row, s.big = spare, true
	}
	if p.invert {
		for i := range row { // largest code minus code, bit by bit
			row[i] = ^row[i]
		}
	}
	s.convert(dst, row)
}

// sum undoes horizontal differencing (TIFF 6.0, section 14): every sample is
// stored as its difference from the one to the left, modulo its word.
func sum(row []byte, n int, s sample) {
	o := s.order()
	var last uint64
	for i := 0; i+n <= len(row); i += n {
		last += word(row[i:], n, o)
		put(row[i:], n, o, last)
	}
}

// join undoes the floating point predictor (Technical Note 3): the bytes of a
// row were sorted by significance, highest first, then differenced bytewise.
func join(dst, row []byte, n int) {
	for i := 1; i < len(row); i++ {
		row[i] += row[i-1]
	}
	w := len(row) / n
	for i := range w {
		for b := range n {
			dst[i*n+b] = row[b*w+i]
		}
	}
}

// open returns a reader of the decompressed bytes of r.
func (u *unpacker) open(compression uint64, r io.Reader) (io.Reader, error) {
	u.buf.Reset(r)
	switch compression {
	case lzwCoded:
		return lzw.NewReader(u.buf, lzw.MSB, 8), nil
	case packBits:
		u.runs = runReader{src: u.buf}
		return &u.runs, nil
	case deflated, deflateOld:
		if u.zlib != nil {
			return u.zlib, u.zlib.(zlib.Resetter).Reset(u.buf, nil)
		}
		z, err := zlib.NewReader(u.buf)
		u.zlib = z
		return z, err
	}
	return u.buf, nil
}

// runReader undoes PackBits (TIFF 6.0, section 9).
type runReader struct {
	src  *bufio.Reader
	left int  // bytes left of the present run
	same bool // the run repeats value
	val  byte
}

func (r *runReader) Read(p []byte) (n int, err error) {
	for n < len(p) {
		if r.left == 0 {
			if err = r.next(); err != nil {
				return n, err
			}
			continue
		}
		k := min(r.left, len(p)-n)
		if r.same {
			for i := range k {
				p[n+i] = r.val
			}
		} else if k, err = io.ReadFull(r.src, p[n:n+k]); err != nil {
			return n + k, err
		}
		n, r.left = n+k, r.left-k
	}
	return n, nil
}

// next starts the next run: c < 128 means c+1 bytes as they are, c > 128 one
// byte 257-c times, 128 nothing.
func (r *runReader) next() error {
	c, err := r.src.ReadByte()
	if err != nil || c == 128 {
		return err
	}
	if r.same = c > 128; !r.same {
		r.left = int(c) + 1
		return nil
	}
	if r.val, err = r.src.ReadByte(); err == nil {
		r.left = 257 - int(c)
	}
	return err
}
