package optics

import (
	"errors"
	"fmt"
	"math"

	"unsheard/pipeline/solve/row"
)

// Rect is a rectangle of sensor pixels.
type Rect struct{ X, Y, W, H int }

// View is equation (5): a sparse operator from a window plane to a rectangle
// of the reference sensor. The zero View is the identity on the window.
type View struct {
	Rect Rect // reference pixels that R is stated on

	w, h       int        // window
	refW, refH int        // sensor
	margin     int        // px
	hom        [9]float64 // window pixel to sensor position, row-major
	fwd, adj   sparse
}

// sparse is a matrix by compressed rows.
type sparse struct {
	start []int32
	col   []int32
	val   []float32

	rows  *row.Sparse // the same; see laid
	lanes row.Lanes
}

// NewView makes the view for a homography h (row-major, window pixel centre
// to reference sensor position) of a W×H window on a refW×refH sensor. The
// rectangle is the bounding box of the window on the sensor, widened by
// margin pixels for the reference blur and cut to the sensor.
func NewView(h [9]float64, W, H, refW, refH, margin int) (View, error) {
	v := View{w: W, h: H, refW: refW, refH: refH, margin: margin, hom: h}
	if W <= 0 || H <= 0 || refW <= 0 || refH <= 0 || margin < 0 {
		return View{}, fmt.Errorf("view of a %d×%d window on a %d×%d sensor with margin %d: sides must be positive", W, H, refW, refH, margin)
	}
	inv, err := invert(h)
	if err != nil {
		return View{}, err
	}
	if err := v.place(); err != nil {
		return View{}, err
	}
	v.fill(inv)
	v.adj = v.fwd.transpose(W*H).laid(v.Rect.W*v.Rect.H, row.Best())
	v.fwd = v.fwd.laid(W*H, row.Best())
	return v, nil
}

// Identity returns the view of a reference camera that sees the window
// exactly.
func Identity(W, H int) View {
	v, err := NewView([9]float64{1, 0, 0, 0, 1, 0, 0, 0, 1}, W, H, W, H, 0)
	if err != nil {
		panic(ErrShape)
	}
	return v
}

func invert(h [9]float64) ([9]float64, error) {
	for _, c := range h {
		if math.IsNaN(c) || math.IsInf(c, 0) {
			return h, fmt.Errorf("registration %v is not finite", h)
		}
	}
	// Adjugate; the scale of a homography is free, its sign is not.
	a := [9]float64{
		h[4]*h[8] - h[5]*h[7], h[2]*h[7] - h[1]*h[8], h[1]*h[5] - h[2]*h[4],
		h[5]*h[6] - h[3]*h[8], h[0]*h[8] - h[2]*h[6], h[2]*h[3] - h[0]*h[5],
		h[3]*h[7] - h[4]*h[6], h[1]*h[6] - h[0]*h[7], h[0]*h[4] - h[1]*h[3],
	}
	det := h[0]*a[0] + h[1]*a[3] + h[2]*a[6]
	if det == 0 {
		return h, errors.New("registration is singular: recalibrate the registration")
	}
	for j := range a {
		a[j] /= det
	}
	return a, nil
}

// place sets the rectangle from the window's outline.
func (v *View) place() error {
	lo, hi := [2]float64{math.Inf(1), math.Inf(1)}, [2]float64{math.Inf(-1), math.Inf(-1)}
	var side float64
	for _, c := range [4][2]float64{{-.5, -.5}, {float64(v.w) - .5, -.5}, {-.5, float64(v.h) - .5}, {float64(v.w) - .5, float64(v.h) - .5}} {
		x, y, d := project(v.hom, c[0], c[1])
		if d == 0 || d*side < 0 {
			return errors.New("registration sends part of the window to infinity: recalibrate the registration")
		}
		side = d
		lo[0], hi[0] = min(lo[0], x), max(hi[0], x)
		lo[1], hi[1] = min(lo[1], y), max(hi[1], y)
	}
	// A sensor pixel belongs to it if its area meets the outline.
	limit := func(f, most float64) int { return int(min(max(f, 0), most)) }
	m := float64(v.margin)
	x0 := limit(math.Floor(lo[0]+.5)-m, float64(v.refW))
	x1 := limit(math.Ceil(hi[0]+.5)+m, float64(v.refW))
	y0 := limit(math.Floor(lo[1]+.5)-m, float64(v.refH))
	y1 := limit(math.Ceil(hi[1]+.5)+m, float64(v.refH))
	if x0 >= x1 || y0 >= y1 {
		return fmt.Errorf("registration puts the window at x %.1f to %.1f, y %.1f to %.1f, outside the %d×%d reference sensor: recalibrate the registration", lo[0], hi[0], lo[1], hi[1], v.refW, v.refH)
	}
	v.Rect = Rect{X: x0, Y: y0, W: x1 - x0, H: y1 - y0}
	return nil
}

// project applies a homography; d is the denominator.
func project(h [9]float64, x, y float64) (px, py, d float64) {
	d = h[6]*x + h[7]*y + h[8]
	return (h[0]*x + h[1]*y + h[2]) / d, (h[3]*x + h[4]*y + h[5]) / d, d
}

// fill writes the rows of (5).
func (v *View) fill(inv [9]float64) {
	det := inv[0]*(inv[4]*inv[8]-inv[5]*inv[7]) - inv[1]*(inv[3]*inv[8]-inv[5]*inv[6]) + inv[2]*(inv[3]*inv[7]-inv[4]*inv[6])
	r := newGather(v.w, v.h)
	v.fwd.start = append(v.fwd.start, 0)
	for q := range v.Rect.H {
		for p := range v.Rect.W {
			x, y := float64(v.Rect.X+p), float64(v.Rect.Y+q)
			wx, wy, d := project(inv, x, y)
			jac := math.Abs(det / (d * d * d))
			// Columns of the inverse map's derivative: the sensor
			// pixel's sides in window pixels.
			ux, uy := (inv[0]-wx*inv[6])/d, (inv[3]-wy*inv[6])/d
			vx, vy := (inv[1]-wx*inv[7])/d, (inv[4]-wy*inv[7])/d
			us, vs := offsets(math.Hypot(ux, uy)), offsets(math.Hypot(vx, vy))
			share := jac / float64(len(us)*len(vs))
			for _, a := range us {
				for _, b := range vs {
					r.add(wx+a*ux+b*vx, wy+a*uy+b*vy, share)
				}
			}
			r.flush(&v.fwd)
		}
	}
}

// offsets returns the sub-positions, in sensor pixels about the centre, that
// widen a window pixel's box to a side of r window pixels.
func offsets(r float64) []float64 {
	if !(r > 1) || r > 1e6 {
		return []float64{0}
	}
	wide := math.Sqrt(r*r-1) / r
	n := int(math.Ceil(2*math.Sqrt(r*r-1))) + 1
	// n points of equal weight at the centres of n parts: variance
	// wide²(1−1/n²)/12, so the spread is stretched to keep wide²/12.
	wide /= math.Sqrt(1 - 1/float64(n*n))
	o := make([]float64, n)
	for j := range o {
		o[j] = wide * ((float64(j)+.5)/float64(n) - .5)
	}
	return o
}

// gather collects the weights of one row of a view.
type gather struct {
	w, h int
	val  []float64
	seen []int32
	mark []bool
}

func newGather(w, h int) *gather {
	return &gather{w: w, h: h, val: make([]float64, w*h), mark: make([]bool, w*h)}
}

// add adds scale times the interpolation weights at (x, y).
func (g *gather) add(x, y, scale float64) {
	if !(x > -4 && y > -4 && x < float64(g.w)+3 && y < float64(g.h)+3) {
		return
	}
	x0, y0 := int(math.Floor(x)), int(math.Floor(y))
	for b := y0 - 2; b <= y0+3; b++ {
		wy := keys(y - float64(b))
		if b < 0 || b >= g.h || wy == 0 {
			continue
		}
		for a := x0 - 2; a <= x0+3; a++ {
			wx := keys(x - float64(a))
			if a < 0 || a >= g.w || wx == 0 {
				continue
			}
			j := b*g.w + a
			if !g.mark[j] {
				g.mark[j] = true
				g.seen = append(g.seen, int32(j))
			}
			g.val[j] += scale * wx * wy
		}
	}
}

func (g *gather) flush(s *sparse) {
	for _, j := range g.seen {
		s.col = append(s.col, j)
		s.val = append(s.val, float32(g.val[j]))
		g.val[j], g.mark[j] = 0, false
	}
	g.seen = g.seen[:0]
	s.start = append(s.start, int32(len(s.col)))
}

// keys is the six-point cubic convolution kernel of Keys 1981.
func keys(s float64) float64 {
	s = math.Abs(s)
	switch {
	case s < 1:
		return 1 + s*s*(4*s-7)/3
	case s < 2:
		return 2.5 + s*(-59+s*(36-7*s))/12
	case s < 3:
		return -1.5 + s*(21+s*(s-8))/12
	}
	return 0
}
