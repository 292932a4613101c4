package frame

import (
	"math"
	"time"
)

func parseFITS(s source) (*picture, error) {
	first, err := readUnit(s, 0)
	if err != nil {
		return nil, err
	}
	u, axis, err := first.image()
	if err != nil {
		return nil, err
	}
	p := &array2{unit: u}
	if err := p.sides(axis); err != nil {
		return nil, err
	}
	if err := p.scaling(); err != nil {
		return nil, err
	}
	n := int64(p.w) * int64(p.h) * int64(p.sample.bits/8)
	if err := s.holds(u.off, n, "the FITS array"); err != nil {
		return nil, err
	}
	return &picture{w: p.w, h: p.h, format: "FITS " + p.sample.String(), full: p.full(), pixels: p.decode,
		taken: func(loc *time.Location) (time.Time, string, error) { return fitsTaken(u, first) }}, nil
}

// image finds the first unit with an image array: u itself, or an extension
// if the primary array is empty.
func (u *unit) image() (*unit, []int64, error) {
	compressed := false
	for range maxUnits {
		axis, err := u.axes()
		if err != nil {
			return nil, nil, err
		}
		ext, isExt := u.keys["XTENSION"]
		if (!isExt || ext == "IMAGE") && len(axis) > 0 {
			return u, axis, nil
		}
		compressed = compressed || u.keys["ZIMAGE"] == "T"
		off, err := u.next(axis)
		if err != nil {
			return nil, nil, err
		}
		if off >= u.src.size {
			break
		}
		if u, err = readUnit(u.src, off); err != nil {
			return nil, nil, err
		}
	}
	if compressed {
		return nil, nil, fault(ErrFormat, "its FITS image is tile-compressed; undo that, for instance with funpack")
	}
	return nil, nil, fault(ErrEmpty, "the FITS file has no image array")
}

// array2 is a FITS image.
type array2 struct {
	*unit
	w, h        int
	sample      sample
	scale, zero float64
	blank       int64
	hasBlank    bool
}

func (p *array2) sides(axis []int64) (err error) {
	if axis[0] == 0 && len(axis) > 1 && p.keys["GROUPS"] == "T" {
		return fault(ErrFormat, "it holds FITS random groups, want an image")
	}
	if len(axis) < 2 {
		return fault(ErrFormat, "its FITS array has one axis, want 2")
	}
	for _, n := range axis[2:] {
		if n != 1 {
			return fault(ErrFormat, "its FITS array has the axes %v: more than one picture", axis)
		}
	}
	if p.w, p.h, err = p.src.sides(uint64(axis[0]), uint64(axis[1])); err != nil {
		return err
	}
	bits, err := p.int("BITPIX", 0)
	if err != nil {
		return err
	}
	k, ok := map[int64]sample{8: {'u', 8, true}, 16: {'i', 16, true}, 32: {'i', 32, true},
		64: {'i', 64, true}, -32: {'f', 32, true}, -64: {'f', 64, true}}[bits]
	if !ok {
		return fault(ErrFormat, "FITS keyword BITPIX is %d, want 8, 16, 32, 64, -32 or -64", bits)
	}
	p.sample = k
	return nil
}

// scaling reads BSCALE, BZERO and BLANK.
func (p *array2) scaling() (err error) {
	if p.scale, err = p.float("BSCALE", 1); err != nil {
		return err
	}
	if p.zero, err = p.float("BZERO", 0); err != nil {
		return err
	}
	if p.scale == 0 {
		return fault(ErrFormat, "FITS keyword BSCALE is 0")
	}
	if _, p.hasBlank = p.keys["BLANK"]; p.hasBlank && p.sample.kind != 'f' {
		p.blank, err = p.int("BLANK", 0)
	}
	p.hasBlank = p.hasBlank && p.sample.kind != 'f'
	return err
}

// full is the largest value the integers can stand for.
func (p *array2) full() float64 {
	if p.sample.kind == 'f' {
		return 0
	}
	low := 0.0
	if p.sample.kind == 'i' {
		low = -p.sample.full() - 1
	}
	return p.zero + max(p.scale*low, p.scale*p.sample.full())
}

// decode fills dst with zero + scale × code, NaN where the code is blank
// (FITS 4.0, equation 3).
func (p *array2) decode(dst []float32) error {
	size := p.sample.bits / 8
	raw := p.scale == 1 && p.zero == 0 && !p.hasBlank
	n := int64(len(dst)) * int64(size)
	return p.src.stream(p.off, n, size, "the FITS array", func(b []byte) {
		k := len(b) / size
		if raw {
			p.sample.convert(dst[:k], b)
		} else {
			p.scaled(dst[:k], b)
		}
		dst = dst[k:]
	})
}

func (p *array2) scaled(dst []float32, b []byte) {
	blank := float64(p.blank)
	for i := range dst {
		v := p.sample.value(b, i)
		if p.hasBlank && v == blank {
			dst[i] = float32(math.NaN())
			continue
		}
		dst[i] = float32(p.zero + float64(p.scale*v)) // no fused multiply-add: same bits on every machine
	}
}
