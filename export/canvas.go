package export

import (
	"image"
	"image/color"
	"image/draw"
	"math"
	"sync"

	"golang.org/x/image/font"
	"golang.org/x/image/font/gofont/gobold"
	"golang.org/x/image/font/gofont/goregular"
	"golang.org/x/image/font/opentype"
	"golang.org/x/image/math/fixed"
)

// The type sizes of the pictures, in pixels.
const (
	sizeTitle = 24
	sizeLabel = 18
	sizeSmall = 15
)

var (
	ink   = color.RGBA{0x20, 0x20, 0x20, 0xff}
	faint = color.RGBA{0x70, 0x70, 0x70, 0xff}
	paper = color.RGBA{0xff, 0xff, 0xff, 0xff}
	// nothing marks pixels that have no value.
	nothing = color.RGBA{0xd0, 0xd0, 0xd0, 0xff}
)

// fonts are the Go fonts (Bigelow & Holmes), parsed once.
var fonts = sync.OnceValue(func() [2]*opentype.Font {
	var out [2]*opentype.Font
	for i, b := range [][]byte{goregular.TTF, gobold.TTF} {
		f, err := opentype.Parse(b)
		if err != nil {
			panic("export: built-in font: " + err.Error())
		}
		out[i] = f
	}
	return out
})

// canvas is a picture being drawn. Its faces are its own: they are not safe
// for concurrent use.
type canvas struct {
	*image.RGBA
	faces map[int]font.Face // by size; negative: bold
}

func newCanvas(w, h int) *canvas {
	c := &canvas{image.NewRGBA(image.Rect(0, 0, w, h)), map[int]font.Face{}}
	c.fill(c.Rect, paper)
	return c
}

func (c *canvas) fill(r image.Rectangle, col color.Color) {
	draw.Draw(c, r, image.NewUniform(col), image.Point{}, draw.Src)
}

// face returns the font of a size in pixels; bold if negative.
func (c *canvas) face(size int) font.Face {
	if f := c.faces[size]; f != nil {
		return f
	}
	which, px := fonts()[0], size
	if size < 0 {
		which, px = fonts()[1], -size
	}
	f, err := opentype.NewFace(which, &opentype.FaceOptions{Size: float64(px), DPI: 72, Hinting: font.HintingFull})
	if err != nil {
		panic("export: built-in font: " + err.Error())
	}
	c.faces[size] = f
	return f
}

// align says which end of a text stands at the given x.
type align int

const (
	left align = iota
	middle
	right
)

// width returns the length of a text in pixels.
func (c *canvas) width(size int, s string) int {
	return font.MeasureString(c.face(size), s).Ceil()
}

// text writes s with its baseline at y.
func (c *canvas) text(x, y, size int, a align, col color.Color, s string) {
	switch a {
	case middle:
		x -= c.width(size, s) / 2
	case right:
		x -= c.width(size, s)
	}
	d := font.Drawer{Dst: c, Src: image.NewUniform(col), Face: c.face(size), Dot: fixed.P(x, y)}
	d.DrawString(s)
}

// cut shortens s until it is at most w pixels long.
func (c *canvas) cut(size int, s string, w int) string {
	if c.width(size, s) <= w {
		return s
	}
	r := []rune(s)
	for len(r) > 0 && c.width(size, string(r)+"…") > w {
		r = r[:len(r)-1]
	}
	return string(r) + "…"
}

// upright writes s turned a quarter to the left, centred at (x, y).
func (c *canvas) upright(x, y, size int, col color.Color, s string) {
	w, h := c.width(size, s), size*3/2
	t := &canvas{image.NewRGBA(image.Rect(0, 0, w, h)), c.faces}
	t.text(0, size, size, left, col, s)
	turned := image.NewRGBA(image.Rect(0, 0, h, w))
	for i := range h {
		for j := range w {
			turned.SetRGBA(i, w-1-j, t.RGBAAt(j, i))
		}
	}
	at := image.Pt(x-h/2, y-w/2)
	draw.Draw(c, turned.Rect.Add(at), turned, image.Point{}, draw.Over)
}

// frame draws a one-pixel line around r, outside it.
func (c *canvas) frame(r image.Rectangle, col color.Color) {
	o := r.Inset(-1)
	c.fill(image.Rect(o.Min.X, o.Min.Y, o.Max.X, o.Min.Y+1), col)
	c.fill(image.Rect(o.Min.X, o.Max.Y-1, o.Max.X, o.Max.Y), col)
	c.fill(image.Rect(o.Min.X, o.Min.Y, o.Min.X+1, o.Max.Y), col)
	c.fill(image.Rect(o.Max.X-1, o.Min.Y, o.Max.X, o.Max.Y), col)
}

// plane is a row-major array to show; NaN is nothing.
type plane struct {
	w, h int
	v    []float32
}

// fit is how a plane of w×h is brought to about side×side pixels: each value
// up times, or down values averaged to one.
type fit struct{ up, down int }

func fitting(w, h, side int) fit {
	n := max(w, h)
	if n <= side {
		return fit{max(1, side/n), 1}
	}
	return fit{1, (n + side - 1) / side}
}

// size returns the sides of a fitted plane.
func (f fit) size(w, h int) image.Point {
	return image.Pt((w+f.down-1)/f.down*f.up, (h+f.down-1)/f.down*f.up)
}

// shrink averages blocks of down×down values, leaving NaN out.
func (p plane) shrink(down int) plane {
	if down == 1 {
		return p
	}
	q := plane{w: (p.w + down - 1) / down, h: (p.h + down - 1) / down}
	q.v = make([]float32, q.w*q.h)
	for y := range q.h {
		for x := range q.w {
			sum, n := 0.0, 0
			for j := y * down; j < min(p.h, (y+1)*down); j++ {
				for _, v := range p.v[j*p.w+x*down : j*p.w+min(p.w, (x+1)*down)] {
					if v == v {
						sum += float64(v)
						n++
					}
				}
			}
			q.v[y*q.w+x] = float32(sum / float64(n)) // NaN if n is 0
		}
	}
	return q
}

// heat draws a plane with its corner at p and returns the rectangle it fills.
func (c *canvas) heat(p image.Point, pl plane, f fit, m *colours) image.Rectangle {
	q := pl.shrink(f.down)
	for y := range q.h {
		for x := range q.w {
			col := nothing
			if v := float64(q.v[y*q.w+x]); !math.IsNaN(v) {
				col = m.at(v)
			}
			for j := range f.up {
				o := c.PixOffset(p.X+x*f.up, p.Y+y*f.up+j)
				for i := 0; i < f.up; i++ {
					c.Pix[o+4*i], c.Pix[o+4*i+1], c.Pix[o+4*i+2] = col.R, col.G, col.B
				}
			}
		}
	}
	return image.Rectangle{Min: p, Max: p.Add(f.size(pl.w, pl.h))}
}
