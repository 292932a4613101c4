package export

import (
	"fmt"
	"image"
	"io"
	"math"
)

// residualLimit is the end of the residuals' colour scale, in deviations.
const residualLimit = 4

// residuals returns (measured − model)/σ; NaN where masked.
func residuals(f *FramePlane) plane {
	p := plane{f.W, f.H, make([]float32, len(f.Measured))}
	for i := range p.v {
		p.v[i] = float32(math.NaN())
		if f.Model != nil && f.Variance != nil && f.Variance[i] > 0 && !math.IsInf(float64(f.Variance[i]), 0) {
			p.v[i] = (f.Measured[i] - f.Model[i]) / float32(math.Sqrt(float64(f.Variance[i])))
		}
	}
	return p
}

// rms is the root mean square of the values that are there.
func rms(v []float32) float64 {
	sum, n := 0.0, 0
	for _, f := range v {
		if f == f {
			sum += float64(f) * float64(f)
			n++
		}
	}
	return math.Sqrt(sum / float64(n))
}

// residual draws what the cube leaves unexplained in every arm.
func residual(w io.Writer, r *Result) error {
	m := signed(residualLimit)
	const head, gap = 92, 30
	wide, high := 0, 0
	planes := make([]plane, len(r.Frames))
	side := 0
	for i := range r.Frames {
		planes[i] = residuals(&r.Frames[i])
		side = max(side, planes[i].w, planes[i].h)
	}
	f := fitting(side, side, panelSide) // one scale for all
	for _, p := range planes {
		s := f.size(p.w, p.h)
		wide += panelLeft + gap + max(s.X, 210)
		high = max(high, s.Y)
	}
	cv := newCanvas(max(wide+barSpace+margin+gap, 700), head+panelTop+max(high, 200)+panelBottom)
	cv.header(r, "what the cube leaves unexplained; grey: masked pixels")
	x := margin / 2
	under, over := false, false
	for i, p := range planes {
		x += panelLeft
		heading := fmt.Sprintf("%s, rms %.2f", r.Frames[i].Arm, rms(p.v))
		box := cv.panel(image.Pt(x, head+panelTop), p, f, m, axisUnit{"px", 1}, heading)
		x = max(box.Max.X, x+210) + gap
		for _, v := range p.v {
			under, over = under || v < -residualLimit, over || v > residualLimit
		}
	}
	top := head + panelTop
	cv.bar(image.Rect(x, top+14, x+22, top+max(high, 200)-14), m, "(measured − predicted) / σ", under, over)
	return encoder.Encode(w, cv.RGBA)
}
