package nexus

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"io"
	"math"

	"github.com/klauspost/compress/zlib"
)

// maxExpand is the largest expansion of deflate: 1032 to 1.
const maxExpand = 1032

// Frame returns plane k of a float32 dataset of three dimensions, row-major.
func (f *File) Frame(name string, k int) ([]float32, error) {
	o, err := f.dataset(name)
	if err != nil {
		return nil, err
	}
	if len(o.shape) != 3 {
		return nil, fmt.Errorf("dataset %q has %d dimensions, want 3", name, len(o.shape))
	}
	return f.Region(name, []int{k, 0, 0}, []int{1, o.shape[1], o.shape[2]})
}

// All returns every value of a float32 dataset.
func (f *File) All(name string) ([]float32, error) {
	o, err := f.dataset(name)
	if err != nil {
		return nil, err
	}
	return f.Region(name, make([]int, len(o.shape)), o.shape)
}

// Region returns the values of a float32 dataset from start on, with sides
// count, row-major. Only the chunks that it touches are read.
func (f *File) Region(name string, start, count []int) ([]float32, error) {
	b, err := f.region(name, start, count, rawType{'f', 4})
	if err != nil {
		return nil, err
	}
	v := make([]float32, len(b)/4)
	for i := range v {
		v[i] = math.Float32frombits(binary.LittleEndian.Uint32(b[4*i:]))
	}
	return v, nil
}

// Float64 returns every value of a float64 dataset.
func (f *File) Float64(name string) ([]float64, error) {
	o, err := f.dataset(name)
	if err != nil {
		return nil, err
	}
	b, err := f.region(name, make([]int, len(o.shape)), o.shape, rawType{'f', 8})
	if err != nil {
		return nil, err
	}
	v := make([]float64, len(b)/8)
	for i := range v {
		v[i] = math.Float64frombits(binary.LittleEndian.Uint64(b[8*i:]))
	}
	return v, nil
}

// Text returns a string dataset.
func (f *File) Text(name string) (string, error) {
	o, err := f.dataset(name)
	if err != nil {
		return "", err
	}
	if o.typ.kind != 's' || len(o.shape) > 0 || o.layout.chunk != nil {
		return "", fmt.Errorf("dataset %q: not one string", name)
	}
	b, err := f.bytes(o.layout.addr, int64(o.layout.bytes))
	if err != nil {
		return "", fmt.Errorf("dataset %q: %w", name, err)
	}
	return string(bytes.TrimRight(b, "\x00")), nil
}

func (f *File) region(name string, start, count []int, want rawType) ([]byte, error) {
	o, err := f.dataset(name)
	if err != nil {
		return nil, err
	}
	if o.typ != want {
		return nil, fmt.Errorf("dataset %q: not of the type asked for", name)
	}
	if len(start) != len(o.shape) || len(count) != len(o.shape) {
		return nil, fmt.Errorf("dataset %q: region of %d dimensions, want %d", name, len(start), len(o.shape))
	}
	for i := range start {
		if start[i] < 0 || count[i] <= 0 || start[i] >= o.shape[i] || count[i] > o.shape[i]-start[i] {
			return nil, fmt.Errorf("dataset %q: region %v+%v outside %v", name, start, count, o.shape)
		}
	}
	n := elements(count) * int64(o.typ.size)
	if o.layout.chunk == nil {
		b, err := f.bytes(o.layout.addr, int64(o.layout.bytes))
		if err != nil || len(o.shape) == 0 {
			return b, err
		}
		dst := make([]byte, n)
		copyRegion(dst, b, o, o.shape, make([]int, len(start)), start, count)
		return dst, nil
	}
	list, err := f.list(o, start, count)
	if err != nil {
		return nil, fmt.Errorf("dataset %q: %w", name, err)
	}
	dst := make([]byte, n)
	if err := f.chunks(dst, o, list, start, count); err != nil {
		return nil, fmt.Errorf("dataset %q: %w", name, err)
	}
	return dst, nil
}

// copyRegion copies to dst, whose sides are count and corner start, what it
// shares with src, whose sides are sides and corner at.
func copyRegion(dst, src []byte, o *object, sides, at, start, count []int) {
	from, to, n := make([]int, len(at)), make([]int, len(at)), make([]int, len(at))
	for i := range at {
		lo := max(at[i], start[i])
		hi := min(at[i]+sides[i], start[i]+count[i], o.shape[i])
		if hi <= lo {
			return
		}
		from[i], to[i], n[i] = lo-at[i], lo-start[i], hi-lo
	}
	base := 0 // of the corner in dst
	for i := range to {
		base = base*count[i] + to[i]
	}
	size := o.typ.size
	rows(sides, from, n, count, func(f, t, run int) {
		copy(dst[(base+t)*size:(base+t+run)*size], src[f*size:(f+run)*size])
	})
}

// unpacker undoes deflate and shuffle, reusing its buffers.
type unpacker struct {
	size     int
	z        io.ReadCloser
	in       bytes.Reader
	raw, out []byte
}

func (u *unpacker) unpack(b []byte, n int) ([]byte, error) {
	u.in.Reset(b)
	var err error
	if u.z == nil {
		u.z, err = zlib.NewReader(&u.in)
	} else {
		err = u.z.(zlib.Resetter).Reset(&u.in, nil)
	}
	if err != nil {
		return nil, fmt.Errorf("%w: inflate: %w", ErrDamaged, err)
	}
	if u.raw == nil {
		u.raw, u.out = make([]byte, n), make([]byte, n)
	}
	if _, err := io.ReadFull(u.z, u.raw); err != nil {
		return nil, fmt.Errorf("%w: inflate: %w", ErrDamaged, err)
	}
	// One byte more must be the end, which also checks the Adler-32 sum.
	if _, err := u.z.Read(make([]byte, 1)); err != io.EOF {
		return nil, fmt.Errorf("%w: inflate: no clean end (%v)", ErrDamaged, err)
	}
	unshuffle(u.out, u.raw, u.size)
	return u.out, nil
}
