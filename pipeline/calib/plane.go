package calib

import (
	"math"
	"slices"
)

// plane is a row-major image in float64, row 0 at the top.
type plane struct {
	w, h int
	v    []float64
}

func newPlane(w, h int) plane { return plane{w, h, make([]float64, w*h)} }

func (p plane) clone() plane { return plane{p.w, p.h, slices.Clone(p.v)} }

func (p plane) at(x, y int) float64 { return p.v[y*p.w+x] }

// crop copies the rectangle r, which must lie inside.
func (p plane) crop(r Window) plane {
	q := newPlane(r.W, r.H)
	for y := range r.H {
		copy(q.v[y*r.W:(y+1)*r.W], p.v[(y+r.Y)*p.w+r.X:])
	}
	return q
}

// mirrored folds an index into 0…n−1 by half-sample symmetry.
func mirrored(i, n int) int {
	for i < 0 || i >= n {
		if i < 0 {
			i = -1 - i
		} else {
			i = 2*n - 1 - i
		}
	}
	return i
}

// normal2 is the second antiderivative of the Gaussian density of standard
// deviation s that vanishes at −∞; its differences are box convolutions.
func normal2(x, s float64) float64 {
	if s < 1e-9 {
		return max(x, 0)
	}
	z := x / s
	return x*math.Erfc(-z/math.Sqrt2)/2 + s*math.Exp(-z*z/2)/math.Sqrt(2*math.Pi)
}

// edgeSpread is the image of a unit step at 0, blurred by σ and averaged over
// the pixel centred at u.
func edgeSpread(u, sigma float64) float64 { return normal2(u+0.5, sigma) - normal2(u-0.5, sigma) }

// pixelKernel is (tri ∗ g_σ)(n) for n = −r…r: a Gaussian point spread between
// a scene constant over pixels and a sensor integrating over pixels. It is
// the kernel of package optics, equation (3), without its cut.
func pixelKernel(sigma float64) []float64 {
	r := int(math.Ceil(4.5*sigma)) + 1
	k := make([]float64, 2*r+1)
	var sum float64
	for i := range k {
		n := float64(i - r)
		k[i] = max(normal2(n+1, sigma)-2*normal2(n, sigma)+normal2(n-1, sigma), 0)
		sum += k[i]
	}
	for i := range k {
		k[i] /= sum
	}
	return k
}

// gaussKernel samples a Gaussian averaged over pixels.
func gaussKernel(sigma float64) []float64 {
	r := int(math.Ceil(4 * sigma))
	k := make([]float64, 2*r+1)
	if sigma < 1e-9 {
		return []float64{1}
	}
	var sum float64
	for i := range k {
		n := float64(i-r) / sigma
		k[i] = math.Exp(-n * n / 2)
		sum += k[i]
	}
	for i := range k {
		k[i] /= sum
	}
	return k
}

// edge says what a convolution finds outside the image.
type edge bool

const (
	zero   edge = false
	mirror edge = true
)

// convolve returns src convolved with the odd-length kernels kx along rows
// and ky along columns.
func convolve(src plane, kx, ky []float64, e edge) plane {
	tmp, dst := newPlane(src.w, src.h), newPlane(src.w, src.h)
	rx, ry := len(kx)/2, len(ky)/2
	for y := range src.h {
		in, out := src.v[y*src.w:(y+1)*src.w], tmp.v[y*src.w:(y+1)*src.w]
		for x := range out {
			var s float64
			for j, k := range kx {
				i := x + rx - j
				if i < 0 || i >= src.w {
					if e == zero {
						continue
					}
					i = mirrored(i, src.w)
				}
				s += k * in[i]
			}
			out[x] = s
		}
	}
	for y := range src.h {
		out := dst.v[y*src.w : (y+1)*src.w]
		for j, k := range ky {
			i := y + ry - j
			if i < 0 || i >= src.h {
				if e == zero {
					continue
				}
				i = mirrored(i, src.h)
			}
			for x, v := range tmp.v[i*src.w : (i+1)*src.w] {
				out[x] += k * v
			}
		}
	}
	return dst
}

// smooth is convolve with a Gaussian in which masked pixels count for
// nothing. Where nothing is near, the result is 0 and its weight too.
func smooth(src plane, ok []bool, sigma float64) (dst, weight plane) {
	num, den := newPlane(src.w, src.h), newPlane(src.w, src.h)
	for i, good := range ok {
		if good {
			num.v[i], den.v[i] = src.v[i], 1
		}
	}
	k := gaussKernel(sigma)
	num, den = convolve(num, k, k, zero), convolve(den, k, k, zero)
	for i, d := range den.v {
		if d > 1e-6 {
			num.v[i] /= d
		} else {
			num.v[i] = 0
		}
	}
	return num, den
}

// median returns the median of v, which it reorders; NaN for none.
func median(v []float64) float64 { return quantile(v, 0.5) }

// quantile returns the q-quantile of v by linear interpolation; it sorts v.
func quantile(v []float64, q float64) float64 {
	if len(v) == 0 {
		return math.NaN()
	}
	slices.Sort(v)
	p := q * float64(len(v)-1)
	i := min(int(p), len(v)-1)
	j := min(i+1, len(v)-1)
	return v[i] + (p-float64(i))*(v[j]-v[i])
}

// madSigma turns a median absolute deviation into the standard deviation of
// a normal distribution: 1/Φ⁻¹(3/4).
const madSigma = 1.482602218505602

// spread returns the median of v and its robust standard deviation.
func spread(v []float64) (centre, sigma float64) {
	c := slices.Clone(v)
	centre = median(c)
	for i := range c {
		c[i] = math.Abs(c[i] - centre)
	}
	return centre, madSigma * median(c)
}

// local returns for every pixel the median over the good pixels of the
// (2r+1)² square around it, itself excluded; NaN where there are none.
func local(p plane, ok []bool, r int) plane {
	out := newPlane(p.w, p.h)
	buf := make([]float64, 0, (2*r+1)*(2*r+1))
	for y := range p.h {
		for x := range p.w {
			buf = buf[:0]
			for j := max(0, y-r); j <= min(p.h-1, y+r); j++ {
				for i := max(0, x-r); i <= min(p.w-1, x+r); i++ {
					if (i != x || j != y) && ok[j*p.w+i] {
						buf = append(buf, p.v[j*p.w+i])
					}
				}
			}
			out.v[y*p.w+x] = median(buf)
		}
	}
	return out
}

// heal replaces the pixels that are not ok by the median of their good
// neighbours, looking further out where there are none near.
func heal(p plane, ok []bool) {
	var buf []float64
	for y := range p.h {
		for x := range p.w {
			if ok[y*p.w+x] {
				continue
			}
			for r := 1; r <= 8; r++ {
				buf = buf[:0]
				for j := max(0, y-r); j <= min(p.h-1, y+r); j++ {
					for i := max(0, x-r); i <= min(p.w-1, x+r); i++ {
						if ok[j*p.w+i] {
							buf = append(buf, p.v[j*p.w+i])
						}
					}
				}
				if len(buf) >= 3 {
					break
				}
			}
			if len(buf) > 0 {
				p.v[y*p.w+x] = median(buf)
			} else {
				p.v[y*p.w+x] = 0
			}
		}
	}
}
