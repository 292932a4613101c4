package rig

import "math"

// upright maps a pixel (x, y) of the turned window to the window as it lies
// on the raw streak sensor; the reference camera sees the scene that way up.
func (o Options) upright() (m [9]float64, w, h int) {
	a, b := float64(o.W-1), float64(o.H-1)
	switch o.Direction {
	case "up":
		return [9]float64{-1, 0, a, 0, -1, b, 0, 0, 1}, o.W, o.H
	case "right": // raw column = turned row, raw row = W-1 - turned column
		return [9]float64{0, 1, 0, -1, 0, a, 0, 0, 1}, o.H, o.W
	case "left": // raw column = H-1 - turned row, raw row = turned column
		return [9]float64{0, -1, b, 1, 0, 0, 0, 0, 1}, o.H, o.W
	}
	return [9]float64{1, 0, 0, 0, 1, 0, 0, 0, 1}, o.W, o.H
}

// registration builds the map from a window pixel (turned frame) to a
// position on the reference sensor.
func (o Options) registration() [9]float64 {
	up, w, h := o.upright()
	v := o.View
	sin, cos := math.Sincos(v.Turn * math.Pi / 180)
	flip := 1.0
	if v.Mirror {
		flip = -1
	}
	m := mul([9]float64{1, 0, -float64(w-1) / 2, 0, 1, -float64(h-1) / 2, 0, 0, 1}, up)
	m = mul([9]float64{v.Scale * flip, 0, 0, 0, v.Scale, 0, 0, 0, 1}, m)
	m = mul([9]float64{cos, -sin, 0, sin, cos, 0, v.KeyX, v.KeyY, 1}, m)
	m = mul([9]float64{1, 0, float64(v.SensorW-1)/2 + v.X, 0, 1, float64(v.SensorH-1)/2 + v.Y, 0, 0, 1}, m)
	for i := range m {
		m[i] /= m[8]
	}
	return m
}

// mul returns the product of two 3×3 matrices, row-major.
func mul(a, b [9]float64) (c [9]float64) {
	for i := range 3 {
		for j := range 3 {
			for k := range 3 {
				c[3*i+j] += a[3*i+k] * b[3*k+j]
			}
		}
	}
	return c
}

// apply maps a point through a homography.
func apply(m [9]float64, x, y float64) (float64, float64) {
	w := m[6]*x + m[7]*y + m[8]
	return (m[0]*x + m[1]*y + m[2]) / w, (m[3]*x + m[4]*y + m[5]) / w
}

// splat adds the fine plane p to the reference sensor dst: every cell's light
// becomes a Gaussian at its mapped position, integrated over the pixels.
func (s *Station) splat(dst []float64, p plane, ratio, widen float64) {
	c, m := s.o.Reference, s.homography
	w, h := s.o.View.SensorW, s.o.View.SensorH
	cell := s.o.View.Scale * s.o.View.Scale / (sub * sub) / 12 // variance of a cell's own extent, px²
	sx := math.Sqrt(c.SigmaX*c.SigmaX*widen*widen + cell)
	sy := math.Sqrt(c.SigmaY*c.SigmaY*widen*widen + cell)
	var bx, by band
	for r := range p.rows {
		for q := range p.cols {
			v := p.pe[r*p.cols+q]
			if v == 0 {
				continue
			}
			x, y := apply(m, p.x(q), p.y(r))
			bx.fill(x, sx, w)
			by.fill(y, sy, h)
			for j, wy := range by.weight {
				row := dst[(by.first+j)*w+bx.first:]
				for i, wx := range bx.weight {
					row[i] += ratio * v * wy * wx
				}
			}
		}
	}
}

// band holds the parts of a one-dimensional Gaussian that fall on pixels.
type band struct {
	first  int
	weight []float64
}

// tails is how many standard deviations of a blur are kept.
const tails = 6

// fill computes the parts of a Gaussian at c of width sigma on pixels 0..n-1;
// what falls outside the sensor is lost.
func (b *band) fill(c, sigma float64, n int) {
	lo := max(int(math.Floor(c-tails*sigma+0.5)), 0)
	hi := min(int(math.Floor(c+tails*sigma+0.5)), n-1)
	b.first, b.weight = min(lo, n-1), b.weight[:0]
	k := 1 / (sigma * math.Sqrt2)
	left := math.Erf((float64(lo) - 0.5 - c) * k)
	for i := lo; i <= hi; i++ {
		right := math.Erf((float64(i) + 0.5 - c) * k)
		b.weight = append(b.weight, (right-left)/2)
		left = right
	}
}

// Registration maps a window pixel (x, y) of the turned frame to a position
// on the reference sensor: row-major 3×3, last element 1.
func (s *Station) Registration() [9]float64 { return s.homography }
