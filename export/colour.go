package export

import (
	"image"
	"image/color"
	"math"
	"strconv"

	"gonum.org/v1/plot/palette"
	"gonum.org/v1/plot/palette/moreland"
)

// colours maps values to colours on a table whose lightness rises steadily
// (or, for signed data, away from its middle): K. Moreland, "Why We Use Bad
// Color Maps and What You Can Do About It", Human Vision and Electronic
// Imaging 2016.
type colours struct {
	min, max float64
	table    [256]color.RGBA
}

func newColours(m palette.ColorMap, lo, hi float64) *colours {
	if !(hi > lo) {
		hi = lo + 1
	}
	c := &colours{min: lo, max: hi}
	m.SetMin(0)
	m.SetMax(1)
	for i := range c.table {
		col, err := m.At(float64(i) / 255)
		if err != nil {
			panic("export: colour map: " + err.Error()) // 0 to 1 is always within it
		}
		c.table[i] = color.RGBAModel.Convert(col).(color.RGBA)
		c.table[i].A = 255
	}
	return c
}

// brightness is for light, timing for times, signed for residuals.
func brightness(hi float64) *colours { return newColours(moreland.ExtendedBlackBody(), 0, hi) }
func timing(lo, hi float64) *colours { return newColours(moreland.Kindlmann(), lo, hi) }
func signed(limit float64) *colours  { return newColours(moreland.SmoothBlueRed(), -limit, limit) }

// index returns the table place of a value; values beyond the ends take the
// end's.
func (c *colours) index(v float64) uint8 {
	f := (v - c.min) / (c.max - c.min)
	return uint8(math.Round(255 * min(1, max(0, f))))
}

func (c *colours) at(v float64) color.RGBA { return c.table[c.index(v)] }

// ticks returns three to eight round values between lo and hi and how to
// write them.
func ticks(lo, hi float64) (at []float64, label []string) {
	step, digits := roundStep((hi - lo) / 5)
	for i := math.Ceil(lo/step - 1e-9); i*step <= hi+1e-9*step; i++ {
		v := i * step
		at = append(at, v)
		label = append(label, format(v, digits))
	}
	return at, label
}

// roundStep returns the 1, 2 or 5 times a power of ten nearest above about
// two thirds of s, and the decimals that tell its multiples apart.
func roundStep(s float64) (step float64, digits int) {
	e := math.Floor(math.Log10(s))
	p := math.Pow(10, e)
	digits = max(0, int(-e))
	switch f := s / p; {
	case f < 1.5:
		return p, digits
	case f < 3.5:
		return 2 * p, digits
	case f < 7.5:
		return 5 * p, digits
	}
	return 10 * p, max(0, digits-1)
}

// large returns by what to divide values up to hi so that their labels stay
// short, and the word for it that goes before the unit.
func large(hi float64) (div float64, word string) {
	switch {
	case hi >= 1e8:
		return 1e6, "million "
	case hi >= 1e5:
		return 1e3, "thousand "
	}
	return 1, ""
}

// format writes a number with a true minus sign, and large or tiny ones in
// powers of ten.
func format(v float64, digits int) string {
	if v == 0 {
		v = 0 // no minus zero
	}
	s := strconv.FormatFloat(math.Abs(v), 'f', digits, 64)
	if a := math.Abs(v); a >= 1e5 || digits > 4 && a > 0 {
		s = strconv.FormatFloat(a, 'g', 3, 64)
	}
	if v < 0 {
		return "−" + s
	}
	return s
}

// barSpace is the width a bar needs beside its rectangle for ticks and label.
const barSpace = 100

// bar draws a colour bar upright with its ticks to the right and its label,
// unit included, turned beside them. over and under say that values go beyond
// its ends.
func (c *canvas) bar(r image.Rectangle, m *colours, label string, under, over bool) {
	for y := r.Min.Y; y < r.Max.Y; y++ {
		f := float64(r.Max.Y-1-y) / float64(max(1, r.Dy()-1))
		c.fill(image.Rect(r.Min.X, y, r.Max.X, y+1), m.table[int(math.Round(255*f))])
	}
	c.frame(r, faint)
	div, word := large(m.max)
	at, text := ticks(m.min/div, m.max/div)
	wide := 0
	for i, v := range at {
		v *= div
		y := r.Max.Y - 1 - int(math.Round((v-m.min)/(m.max-m.min)*float64(r.Dy()-1)))
		c.fill(image.Rect(r.Max.X, y, r.Max.X+6, y+1), ink)
		c.text(r.Max.X+10, y+sizeSmall/3, sizeSmall, left, ink, text[i])
		wide = max(wide, c.width(sizeSmall, text[i]))
	}
	if over {
		c.tip(r.Min.X, r.Dx(), r.Min.Y-2, -1, m.table[255])
	}
	if under {
		c.tip(r.Min.X, r.Dx(), r.Max.Y+1, 1, m.table[0])
	}
	size := sizeLabel
	label = word + label
	if c.width(size, label) > r.Dy()+20 {
		size = sizeSmall
	}
	c.upright(r.Max.X+10+wide+16, (r.Min.Y+r.Max.Y)/2, size, ink, label)
}

// tip draws a triangle that says "and beyond" from row y on, toward dy.
func (c *canvas) tip(x, w, y, dy int, col color.Color) {
	for i := 0; 2*i < w; i++ {
		c.fill(image.Rect(x+i, y+dy*i, x+w-i, y+dy*i+1), col)
	}
}
