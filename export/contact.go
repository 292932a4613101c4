package export

import (
	"fmt"
	"image"
	"image/png"
	"io"
	"math"
	"strings"

	"unsheard/pipeline/cube"
)

const (
	contactTiles = 24  // at most
	contactSide  = 200 // pixels of a tile, about
	margin       = 28
)

// encoder trades a little size for time: pictures are made for every shot.
var encoder = png.Encoder{CompressionLevel: png.DefaultCompression}

// contact draws frames of the cube side by side on one scale.
func contact(w io.Writer, r *Result) error {
	c := r.Cube
	frames, every := choose(c, contactTiles)
	hi, clipped := ceiling(c, frames)
	m := brightness(hi)
	f := fitting(c.W, c.H, contactSide)
	tile := f.size(c.W, c.H)
	cell := image.Pt(max(tile.X, 90)+12, tile.Y+sizeSmall+18)
	cols := columns(len(frames), cell)
	rows := (len(frames) + cols - 1) / cols
	const head = 92
	body := image.Pt(max(cols*cell.X, 520), max(rows*cell.Y, 260))
	cv := newCanvas(margin+body.X+24+barSpace+margin, head+body.Y+margin/2)
	cv.header(r, fmt.Sprintf("%s of %d frames, %s to %s ps%s; verdict: %s", every, c.T,
		timeText(c, frames[0]), timeText(c, frames[len(frames)-1]), scaleText(c), r.Report.Verdict.Grade))
	for i, k := range frames {
		p := image.Pt(margin+i%cols*cell.X, head+i/cols*cell.Y)
		box := cv.heat(p, plane{c.W, c.H, c.Frame(k)}, f, m)
		cv.frame(box, faint)
		cv.text(p.X+tile.X/2, box.Max.Y+sizeSmall+5, sizeSmall, middle, ink, timeText(c, k)+" ps")
	}
	x := margin + body.X + 10
	bottom := head + max(rows*cell.Y-sizeSmall-18, 240)
	cv.bar(image.Rect(x, head+12, x+22, min(bottom, head+12+420)), m, countLabel, false, clipped)
	return encoder.Encode(w, cv.RGBA)
}

// countLabel names the unit of a cube's values.
const countLabel = "photoelectrons per pixel and frame"

// header writes shot, station, pass and verdict, and a line of what is shown.
func (c *canvas) header(r *Result, what string) {
	x, wide := margin, c.Rect.Dx()-2*margin
	c.text(x, 40, -sizeTitle, left, ink, c.cut(-sizeTitle, title(r), wide))
	c.text(x, 66, sizeLabel, left, faint, c.cut(sizeLabel, what, wide))
}

func title(r *Result) string {
	parts := []string{r.Shot}
	if r.Station != "" {
		parts = append(parts, r.Station)
	}
	return strings.Join(append(parts, passText(r.Pass)), " · ")
}

func passText(pass string) string {
	if pass == quick {
		return "quick look"
	}
	return pass
}

func scaleText(c *cube.Cube) string {
	if c.Scale <= 0 {
		return ""
	}
	return fmt.Sprintf("; one pixel is %.3g µm", c.Scale)
}

// choose returns at most n frames, evenly spaced over the time in which there
// is light, and how they were chosen.
func choose(c *cube.Cube, n int) (frames []int, every string) {
	from, to := lit(c)
	step := max(1, (to-from+n-1)/n)
	for k := from; k < to; k += step {
		frames = append(frames, k)
	}
	every = fmt.Sprintf("%d", len(frames))
	if step > 1 {
		every = fmt.Sprintf("every %d%s", step, ordinal(step))
	}
	return frames, every
}

func ordinal(n int) string {
	if n%100 >= 11 && n%100 <= 13 {
		return "th"
	}
	switch n % 10 {
	case 1:
		return "st"
	case 2:
		return "nd"
	case 3:
		return "rd"
	}
	return "th"
}

// litShare is the least light of a frame, against the brightest, that counts
// as light.
const litShare = 0.02

// lit returns the range of frames with light, one dark frame around it if
// there is one; all frames if there is no light.
func lit(c *cube.Cube) (from, to int) {
	sums := make([]float64, c.T)
	peak := 0.0
	for k := range sums {
		sums[k] = c.Sum(k)
		peak = max(peak, sums[k])
	}
	from, to = c.T, 0
	for k, s := range sums {
		if s > litShare*peak {
			from, to = min(from, k), k+1
		}
	}
	if to <= from {
		return 0, c.T
	}
	return max(0, from-1), min(c.T, to+1)
}

// ceilingShare of the lit values lie below the top of the colour scale, so
// that a single hot value does not darken everything.
const ceilingShare = 0.9995

// ceiling returns the top of the scale for the frames, and whether values lie
// above it.
func ceiling(c *cube.Cube, frames []int) (hi float64, clipped bool) {
	// The bits of positive floats rise with their values: 2^16 bins of equal
	// high bits are less than 1 % wide.
	bins := make([]int, 1<<16)
	n, peak := 0, float32(0)
	for _, k := range frames {
		for _, f := range c.Frame(k) {
			if f > 0 {
				bins[math.Float32bits(f)>>16]++
				n++
				peak = max(peak, f)
			}
		}
	}
	if n == 0 {
		return 1, false
	}
	below, i := 0, 0
	for want := int(math.Ceil(ceilingShare * float64(n))); below < want; i++ {
		below += bins[i]
	}
	edge := math.Float32frombits(uint32(i) << 16)
	return float64(min(edge, peak)), edge < peak
}

// timeText is a frame's time with as many decimals as tell frames apart.
func timeText(c *cube.Cube, k int) string {
	least := math.Inf(1)
	for j := range c.T {
		least = min(least, c.Duration(j))
	}
	return format(c.Time[k], min(6, max(0, int(math.Ceil(1-math.Log10(least))))))
}

// columns makes the sheet about as wide as a page: 16 to 10.
func columns(n int, cell image.Point) int {
	best, off := 1, math.Inf(1)
	for cols := 1; cols <= n; cols++ {
		rows := (n + cols - 1) / cols
		empty := float64(rows*cols-n) / float64(n)
		shape := math.Abs(math.Log(float64(cols*cell.X) / float64(rows*cell.Y) / 1.6))
		if shape+empty < off {
			best, off = cols, shape+empty
		}
	}
	return best
}
