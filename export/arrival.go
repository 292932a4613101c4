package export

import (
	"image"
	"io"
	"math"
	"sort"

	"unsheard/pipeline/cube"
)

// arrivalShare is the least light of a pixel, against the brightest, for its
// arrival time to be shown.
const arrivalShare = 0.05

// arrivals returns the mean time of each pixel's light, ps; NaN where there
// is too little.
func arrivals(c *cube.Cube) plane {
	n := c.H * c.W
	sum, moment := make([]float64, n), make([]float64, n)
	for k := range c.T {
		for i, v := range c.Frame(k) {
			if v > 0 {
				sum[i] += float64(v)
				moment[i] += float64(v) * c.Time[k]
			}
		}
	}
	peak := 0.0
	for _, s := range sum {
		peak = max(peak, s)
	}
	p := plane{c.W, c.H, make([]float32, n)}
	for i := range p.v {
		p.v[i] = float32(math.NaN())
		if sum[i] > arrivalShare*peak {
			p.v[i] = float32(moment[i] / sum[i])
		}
	}
	return p
}

// span returns the range that holds the middle 98 % of the values.
func span(v []float32) (lo, hi float64, ok bool) {
	var s []float64
	for _, f := range v {
		if f == f {
			s = append(s, float64(f))
		}
	}
	if len(s) == 0 {
		return 0, 1, false
	}
	sort.Float64s(s)
	cut := len(s) / 100
	return s[cut], s[len(s)-1-cut], true
}

const panelSide = 560

// arrival draws when the light of each pixel arrives.
func arrival(w io.Writer, r *Result) error {
	c := r.Cube
	p := arrivals(c)
	lo, hi, ok := span(p.v)
	if pad := c.Duration(c.T/2) / 2; hi-lo < 2*pad { // a flash: show a frame's length
		lo, hi = lo-pad, hi+pad
	}
	m := timing(lo, hi)
	f := fitting(c.W, c.H, panelSide)
	size := f.size(c.W, c.H)
	const head = 92
	body := image.Pt(max(size.X, 420), max(size.Y, 200))
	cv := newCanvas(panelLeft+body.X+30+barSpace+margin, head+panelTop+body.Y+panelBottom)
	what := "mean time of each pixel's light; grey: below 5 % of the brightest pixel"
	if !ok {
		what = "no light"
	}
	cv.header(r, what)
	box := cv.panel(image.Pt(panelLeft+margin/2, head+panelTop), p, f, m, sceneUnit(c.Scale), "arrival")
	x := box.Max.X + 26
	under, over := false, false
	for _, v := range p.v {
		under, over = under || float64(v) < lo, over || float64(v) > hi
	}
	cv.bar(image.Rect(x, box.Min.Y+12, x+22, max(box.Max.Y-12, box.Min.Y+180)), m, "time (ps)", under, over)
	return encoder.Encode(w, cv.RGBA)
}
