package solve

import "math"

// weigh sets an arm's variances from the light it should count. Masked pixels
// stay masked; a pixel whose variance does not come out positive and finite
// becomes masked.
func (a *arm) weigh(n *Noise, light []float32) {
	if n == nil {
		return
	}
	for j, v := range a.vari {
		if v <= 0 {
			continue
		}
		l := max(float64(light[j]), 0)
		gain := 1.
		if n.Gain != nil {
			gain = float64(n.Gain[j])
		}
		s := float64(n.Read[j]) + gain*l + n.Floor*n.Floor*l*l
		if !(s > 0 && s <= math.MaxFloat32) {
			a.vari[j], a.data[j], a.dual[j] = -1, 0, 0
			a.used--
			continue
		}
		a.vari[j] = float32(s)
	}
}

// smoothReach is the half width of the box that smooths a frame before its
// variance is taken: 25 pixels average the noise to a fifth.
const smoothReach = 2

// smooth writes the mean of the usable pixels in a box about every pixel, and
// to weight their number.
func smooth(dst, weight, src, vari []float32, rows, cols int) {
	sum := make([]float64, (rows+1)*(cols+1))
	num := make([]float64, len(sum))
	for r := range rows {
		var s, n float64
		for c := range cols {
			if j := r*cols + c; vari[j] > 0 {
				s += float64(src[j])
				n++
			}
			at := (r+1)*(cols+1) + c + 1
			sum[at], num[at] = sum[at-cols-1]+s, num[at-cols-1]+n
		}
	}
	for r := range rows {
		for c := range cols {
			r0, r1 := max(r-smoothReach, 0), min(r+smoothReach+1, rows)
			c0, c1 := max(c-smoothReach, 0), min(c+smoothReach+1, cols)
			box := func(t []float64) float64 {
				w := cols + 1
				return t[r1*w+c1] - t[r0*w+c1] - t[r1*w+c0] + t[r0*w+c0]
			}
			j := r*cols + c
			dst[j], weight[j] = 0, float32(box(num))
			if n := box(num); n > 0 {
				dst[j] = float32(box(sum) / n)
			}
		}
	}
}

// darkLimit is how many standard deviations a box of pixels may stand above
// dark without counting as light: one in 5·10⁷ for Gaussian noise, and a
// large frame has 10⁶ boxes, a twentieth of them independent.
const darkLimit = 5.5

// lit reports whether any box of pixels, or the whole frame, stands out of the
// noise that the frame would have in the dark.
func (a *arm) lit(n *Noise, mean, weight []float32) bool {
	var sum, vari float64
	for j, v := range a.vari {
		if v <= 0 {
			continue
		}
		dark := float64(v)
		if n != nil {
			dark = float64(n.Read[j])
		}
		sum += float64(a.data[j])
		vari += dark
		if d := float64(mean[j]); d > 0 && d*d*float64(weight[j]) > darkLimit*darkLimit*dark {
			return true
		}
	}
	return sum > 0 && sum*sum > darkLimit*darkLimit*vari
}
