package frame

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"
)

// block is the size of a FITS record; a header is a number of them, each of
// 36 cards of 80 bytes.
const block, card = 2880, 80

// maxBlocks bounds one header, maxUnits the headers walked.
const maxBlocks, maxUnits = 1000, 1000

// unit is one FITS header and data unit.
type unit struct {
	src  source
	keys map[string]string // value of each keyword, texts without quotes
	off  int64             // start of the data
}

// readUnit reads the header at off.
func readUnit(s source, off int64) (*unit, error) {
	u := &unit{src: s, keys: map[string]string{}}
	b := make([]byte, block)
	for n := range int64(maxBlocks) {
		if err := s.read(b, off+n*block, "the FITS header"); err != nil {
			return nil, err
		}
		for c := b; len(c) > 0; c = c[card:] {
			name := strings.TrimRight(string(c[:8]), " ")
			if name == "END" {
				u.off = off + (n+1)*block
				return u, nil
			}
			if _, twice := u.keys[name]; !twice && string(c[8:10]) == "= " {
				u.keys[name] = cardValue(string(c[10:card]))
			}
		}
	}
	return nil, fault(ErrFormat, "its FITS header does not end")
}

// cardValue reads a fixed or free format value (FITS 4.0, section 4.2).
func cardValue(s string) string {
	s = strings.TrimLeft(s, " ")
	if text, ok := strings.CutPrefix(s, "'"); ok {
		var out strings.Builder
		for {
			part, rest, _ := strings.Cut(text, "'")
			out.WriteString(part)
			if !strings.HasPrefix(rest, "'") {
				return strings.TrimRight(out.String(), " ")
			}
			out.WriteByte('\'')
			text = rest[1:]
		}
	}
	s, _, _ = strings.Cut(s, "/")
	return strings.TrimRight(s, " ")
}

func (u *unit) int(key string, def int64) (int64, error) {
	s, ok := u.keys[key]
	if !ok {
		return def, nil
	}
	v, err := strconv.ParseInt(s, 10, 64)
	if err != nil {
		return 0, fault(ErrFormat, "FITS keyword %s is %q, want a whole number", key, s)
	}
	return v, nil
}

func (u *unit) float(key string, def float64) (float64, error) {
	s, ok := u.keys[key]
	if !ok {
		return def, nil
	}
	v, err := strconv.ParseFloat(strings.NewReplacer("D", "E", "d", "e").Replace(s), 64)
	if err != nil || math.IsNaN(v) || math.IsInf(v, 0) {
		return 0, fault(ErrFormat, "FITS keyword %s is %q, want a number", key, s)
	}
	return v, nil
}

// axes reads NAXIS1, NAXIS2 and so on.
func (u *unit) axes() ([]int64, error) {
	n, err := u.int("NAXIS", -1)
	if err != nil {
		return nil, err
	}
	if n < 0 || n > 999 {
		return nil, fault(ErrFormat, "FITS keyword NAXIS is missing or out of range")
	}
	axis := make([]int64, n)
	for i := range axis {
		key := fmt.Sprintf("NAXIS%d", i+1)
		if axis[i], err = u.int(key, -1); err != nil {
			return nil, err
		}
		if axis[i] < 0 {
			return nil, fault(ErrFormat, "FITS keyword %s is missing or negative", key)
		}
	}
	return axis, nil
}

// next is where the next header starts (FITS 4.0, equation 2).
func (u *unit) next(axis []int64) (int64, error) {
	var bits, pcount, gcount int64
	var err error
	for key, v := range map[string]*int64{"BITPIX": &bits, "PCOUNT": &pcount, "GCOUNT": &gcount} {
		def := int64(0)
		if key == "GCOUNT" {
			def = 1
		}
		if *v, err = u.int(key, def); err != nil {
			return 0, err
		}
	}
	n := 0.0
	if len(axis) > 0 {
		n = 1
		for _, k := range axis {
			n *= float64(k)
		}
	}
	n = math.Abs(float64(bits)) / 8 * float64(gcount) * (float64(pcount) + n)
	if !(n >= 0) || n > float64(u.src.size) {
		return 0, fault(ErrTruncated, "a FITS extension should have %.0f bytes, but the file has %d", n, u.src.size)
	}
	return u.off + (int64(n)+block-1)/block*block, nil
}

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
