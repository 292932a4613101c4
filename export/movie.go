package export

import (
	"bufio"
	"image"
	"image/color"
	"io"
	"math"
)

const (
	movieFrames = 150 // at most
	movieSide   = 480 // pixels of the picture, about
	movieMilli  = 80  // per frame
	// movieGreys is the number of greys in the palette, for text; the other
	// colours are the colour map's.
	movieGreys  = 32
	movieLights = 256 - movieGreys
)

// stage draws the movie: all that stands still once, then each frame's
// picture, time and place on the time line.
type stage struct {
	cv      *canvas
	c       *Result
	f       fit
	m       *colours
	palette color.Palette
	still   *image.Paletted
	box     image.Rectangle // the picture
	stamp   image.Rectangle // the time
	line    image.Rectangle // the time line
}

// movie draws the frames in which there is light as an animated PNG; the
// brightest stands for them where nothing moves.
func movie(w io.Writer, r *Result) error {
	frames, _ := choose(r.Cube, movieFrames)
	st := newStage(r, frames)
	b := bufio.NewWriterSize(w, 1<<16)
	a := newAnimation(b, len(frames), movieMilli)
	best := frames[0]
	for _, k := range frames {
		if r.Cube.Sum(k) > r.Cube.Sum(best) {
			best = k
		}
	}
	for _, k := range append([]int{best}, frames...) {
		if err := a.add(st.draw(k)); err != nil {
			return err
		}
	}
	return b.Flush()
}

func newStage(r *Result, frames []int) *stage {
	c := r.Cube
	hi, clipped := ceiling(c, frames)
	s := &stage{c: r, m: brightness(hi), f: fitting(c.W, c.H, movieSide)}
	size := s.f.size(c.W, c.H)
	const head, foot = 56, 74
	body := image.Pt(max(size.X, 300), max(size.Y, 200))
	s.cv = newCanvas(margin+body.X+26+barSpace+margin/2, head+body.Y+foot)
	cv := s.cv
	cv.text(margin, 36, -sizeLabel, left, ink, cv.cut(-sizeLabel, title(r), cv.Rect.Dx()-2*margin))
	s.box = image.Rectangle{Min: image.Pt(margin, head), Max: image.Pt(margin, head).Add(size)}
	cv.frame(s.box, faint)
	x := margin + body.X + 14
	cv.bar(image.Rect(x, head+14, x+20, head+body.Y-4), s.m, countLabel, false, clipped)
	y := head + body.Y
	s.stamp = image.Rect(margin, y+10, margin+280, y+14+sizeTitle+4)
	s.line = image.Rect(margin, y+52, margin+body.X, y+58)
	s.fix()
	return s
}

// fix turns what is drawn so far into palette form.
func (s *stage) fix() {
	for i := range movieLights {
		s.palette = append(s.palette, s.m.table[i*255/(movieLights-1)])
	}
	for i := range movieGreys {
		g := uint8(i * 255 / (movieGreys - 1))
		s.palette = append(s.palette, color.RGBA{g, g, g, 255})
	}
	s.still = image.NewPaletted(s.cv.Rect, s.palette)
	s.convert(s.still, s.cv.Rect)
}

// convert brings a part of the canvas to the palette.
func (s *stage) convert(dst *image.Paletted, r image.Rectangle) {
	known := map[color.RGBA]uint8{}
	for y := r.Min.Y; y < r.Max.Y; y++ {
		for x := r.Min.X; x < r.Max.X; x++ {
			col := s.cv.RGBAAt(x, y)
			i, ok := known[col]
			if !ok {
				i = uint8(s.palette.Index(col))
				known[col] = i
			}
			dst.Pix[dst.PixOffset(x, y)] = i
		}
	}
}

// draw returns frame k; the image is used again by the next call.
func (s *stage) draw(k int) *image.Paletted {
	c := s.c.Cube
	q := plane{c.W, c.H, c.Frame(k)}.shrink(s.f.down)
	for y := range q.h {
		for x := range q.w {
			i := uint8(int(s.m.index(float64(q.v[y*q.w+x]))) * (movieLights - 1) / 255)
			for dy := range s.f.up {
				o := s.still.PixOffset(s.box.Min.X+x*s.f.up, s.box.Min.Y+y*s.f.up+dy)
				for dx := range s.f.up {
					s.still.Pix[o+dx] = i
				}
			}
		}
	}
	s.cv.fill(s.stamp, paper)
	s.cv.text(s.stamp.Min.X, s.stamp.Max.Y-8, -sizeTitle, left, ink, timeText(c, k)+" ps")
	s.convert(s.still, s.stamp)
	// The time line: what has passed is dark.
	s.cv.fill(s.line, nothing)
	part := (c.Time[k] - c.Edges[0]) / (c.Edges[c.T] - c.Edges[0])
	done := s.line
	done.Max.X = done.Min.X + int(math.Round(part*float64(done.Dx())))
	s.cv.fill(done, faint)
	s.convert(s.still, s.line)
	return s.still
}
