package calib

import "math"

// spline is the cubic B-spline interpolant of an image: M. Unser, Splines: a
// perfect fit for signal and image processing, IEEE Signal Process. Mag. 16
// (1999) 22–38, boxes 1 and 2; mirror boundary about the outer pixels.
type spline struct {
	w, h int
	c    []float64
}

// splinePole is the pole of the direct cubic B-spline filter.
var splinePole = math.Sqrt(3) - 2

func newSpline(p plane) spline {
	s := spline{p.w, p.h, append([]float64(nil), p.v...)}
	line := make([]float64, max(p.w, p.h))
	for y := range p.h {
		prefilter(s.c[y*p.w : (y+1)*p.w])
	}
	for x := range p.w {
		for y := range p.h {
			line[y] = s.c[y*p.w+x]
		}
		prefilter(line[:p.h])
		for y := range p.h {
			s.c[y*p.w+x] = line[y]
		}
	}
	return s
}

// prefilter turns samples into B-spline coefficients in place.
func prefilter(c []float64) {
	n := len(c)
	if n < 2 {
		return
	}
	z := splinePole
	for i := range c {
		c[i] *= 6
	}
	// The mirrored line has period 2n − 2.
	zk, sum := z, c[0]
	for k := 1; k < min(2*n-2, 60); k++ { // |z|^60 < 1e-34
		sum += zk * c[fold(k, n)]
		zk *= z
	}
	if 2*n-2 < 60 {
		sum /= 1 - math.Pow(z, float64(2*n-2))
	}
	c[0] = sum
	for k := 1; k < n; k++ {
		c[k] += z * c[k-1]
	}
	c[n-1] = z / (z*z - 1) * (c[n-1] + z*c[n-2])
	for k := n - 2; k >= 0; k-- {
		c[k] = z * (c[k+1] - c[k])
	}
}

// bspline fills the four cubic B-spline weights and slopes at fraction f.
func bspline(f float64) (w, d [4]float64) {
	g := 1 - f
	w = [4]float64{g * g * g / 6, (4 - 6*f*f + 3*f*f*f) / 6, (4 - 6*g*g + 3*g*g*g) / 6, f * f * f / 6}
	d = [4]float64{-g * g / 2, (3*f*f - 4*f) / 2, (4*g - 3*g*g) / 2, f * f / 2}
	return w, d
}

// at returns the value and gradient at (x, y).
func (s *spline) at(x, y float64) (v, gx, gy float64) {
	ix, iy := int(math.Floor(x)), int(math.Floor(y))
	wx, dx := bspline(x - float64(ix))
	wy, dy := bspline(y - float64(iy))
	for j := range 4 {
		row := fold(iy-1+j, s.h) * s.w
		var a, b float64
		for i := range 4 {
			c := s.c[row+fold(ix-1+i, s.w)]
			a += wx[i] * c
			b += dx[i] * c
		}
		v += wy[j] * a
		gx += wy[j] * b
		gy += dy[j] * a
	}
	return v, gx, gy
}

// fold mirrors an index about the outer samples of 0…n−1.
func fold(i, n int) int {
	if n == 1 {
		return 0
	}
	for i < 0 || i >= n {
		if i < 0 {
			i = -i
		} else {
			i = 2*n - 2 - i
		}
	}
	return i
}
