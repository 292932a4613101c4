package frame

import (
	"fmt"
	"math"
	"strconv"
	"strings"
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
