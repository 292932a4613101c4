package nexus

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"io"
	"math"

	"github.com/klauspost/compress/zlib"
)

// chunkElements is the target chunk size: 32×32×32 values, 128 KiB of
// float32. It reads both a frame and a pixel's trace with little waste.
const chunkElements = 32 * 32 * 32

// deflateLevel 1 of klauspost/compress is the fastest and, on shuffled
// float32, hardly larger than the higher ones.
const deflateLevel = 1

// chunkShape starts from 32 along every side, clipped to the array, and
// doubles the side with the most chunks while the whole stays within
// chunkElements. A cube of ordinary size gets 32×32×32.
func chunkShape(shape []int) []int {
	c := make([]int, len(shape))
	n := 1
	for i, s := range shape {
		side := 32
		for n*side > chunkElements && side > 1 {
			side /= 2
		}
		c[i] = min(side, s)
		n *= c[i]
	}
	for {
		best := -1
		for i, s := range shape {
			grown := n / c[i] * min(2*c[i], s)
			if c[i] < s && grown <= chunkElements &&
				(best < 0 || s/c[i] > shape[best]/c[best]) {
				best = i
			}
		}
		if best < 0 {
			return c
		}
		n /= c[best]
		c[best] = min(2*c[best], shape[best])
		n *= c[best]
	}
}

// grid counts the chunks along every side and in all.
func grid(shape, chunk []int) (sides []int, total int) {
	total = 1
	for i := range shape {
		sides = append(sides, (shape[i]+chunk[i]-1)/chunk[i])
		total *= sides[i]
	}
	return sides, total
}

// origin returns the first element of chunk i in row-major order.
func origin(i int, sides, chunk []int) []int {
	o := make([]int, len(sides))
	for d := len(sides) - 1; d >= 0; d-- {
		o[d] = i % sides[d] * chunk[d]
		i /= sides[d]
	}
	return o
}

// packer turns one chunk of a dataset into filtered bytes. It is used by one
// goroutine at a time and reuses its buffers.
type packer struct {
	d        *Dataset
	chunk    []int
	size     int // bytes per element
	raw      []byte
	shuffled []byte
	part     []float32
	out      bytes.Buffer
	z        *zlib.Writer
}

func newPacker(d *Dataset, chunk []int, size int) (*packer, error) {
	n := size
	for _, c := range chunk {
		n *= c
	}
	z, err := zlib.NewWriterLevel(io.Discard, deflateLevel)
	if err != nil {
		return nil, err
	}
	return &packer{d: d, chunk: chunk, size: size, raw: make([]byte, n),
		shuffled: make([]byte, n), z: z}, nil
}

// pack returns the filtered chunk that begins at start, in a buffer of its
// own.
func (p *packer) pack(start []int) ([]byte, error) {
	count := make([]int, len(start))
	clipped := false
	for i := range start {
		count[i] = min(p.chunk[i], p.d.Shape[i]-start[i])
		clipped = clipped || count[i] < p.chunk[i]
	}
	if clipped {
		clear(p.raw)
	}
	if err := p.fill(start, count); err != nil {
		return nil, err
	}
	shuffle(p.shuffled, p.raw, p.size)
	p.out.Reset()
	p.z.Reset(&p.out)
	if _, err := p.z.Write(p.shuffled); err != nil {
		return nil, fmt.Errorf("deflate: %w", err)
	}
	if err := p.z.Close(); err != nil {
		return nil, fmt.Errorf("deflate: %w", err)
	}
	return bytes.Clone(p.out.Bytes()), nil
}

// fill copies the region into raw, laid out with the chunk's sides.
func (p *packer) fill(start, count []int) error {
	if src, ok := p.d.Value.(Source); ok {
		n := 1
		for _, c := range count {
			n *= c
		}
		if cap(p.part) < n {
			p.part = make([]float32, n)
		}
		p.part = p.part[:n]
		if err := src.Region(p.part, start, count); err != nil {
			return err
		}
		rows(count, make([]int, len(count)), count, p.chunk, func(from, to, n int) {
			putFloat32(p.raw[4*to:], p.part[from:from+n], p.d.Bits)
		})
		return nil
	}
	rows(p.d.Shape, start, count, p.chunk, func(from, to, n int) {
		dst := p.raw[p.size*to:]
		switch v := p.d.Value.(type) {
		case []float32:
			putFloat32(dst, v[from:from+n], p.d.Bits)
		case []float64:
			for i, f := range v[from : from+n] {
				binary.LittleEndian.PutUint64(dst[8*i:], math.Float64bits(f))
			}
		case []int64:
			for i, f := range v[from : from+n] {
				binary.LittleEndian.PutUint64(dst[8*i:], uint64(f))
			}
		}
	})
	return nil
}

// rows calls row for every run of the fastest side in a region of a big array
// (sides shape, corner start) and a small one (sides chunk, corner 0), with
// the run's offset in both and its length.
func rows(shape, start, count, chunk []int, row func(from, to, n int)) {
	last := len(shape) - 1
	at := make([]int, len(shape))
	for {
		from, to := 0, 0
		for d := range shape {
			from = from*shape[d] + start[d] + at[d]
			to = to*chunk[d] + at[d]
		}
		row(from, to, count[last])
		d := last - 1
		for ; d >= 0; d-- {
			if at[d]++; at[d] < count[d] {
				break
			}
			at[d] = 0
		}
		if d < 0 {
			return
		}
	}
}
