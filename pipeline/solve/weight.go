package solve

import "math"

// setEdge adds, to the variance of reference pixels that see beyond the window,
// the square of the light that may come from there: as much as their smoothed
// frame shows, times the share of their view that lies outside. Where the
// frame is dark at the window's edge nothing changes.
func (a *arm) setEdge(coverage, mean []float32) {
	for j, c := range coverage {
		if out := 1 - c; out > edgeLeast || out < -edgeLeast {
			f := out * max(mean[j], 0)
			a.edge[j] = f * f
		}
	}
}

// edgeLeast is the rounding of a coverage.
const edgeLeast = 1e-4

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
		s := float64(n.Read[j]) + float64(a.edge[j]) + float64(gain*l) + float64(n.Floor*n.Floor*l*l)
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

const (
	// spikeSigmas is how far, in standard deviations, a pixel must stand
	// out to be a spike: never by chance in a frame of millions.
	spikeSigmas = 8
	// spikeMargin allows for a blur that is really narrower than
	// calibrated: half as much again in contrast between neighbours.
	spikeMargin = 1.5
)

// spikes masks usable pixels that exceed the sum of their neighbours, along x
// and also along y, by more than sharp (see optics.Model.Sharpness) allows,
// and pixels that lie as far under 0. It returns their number. Along an axis
// without blur, or beside a masked pixel or the edge, nothing can be said.
func (a *arm) spikes(cols int, sharp [2]float64) int {
	var found []int
	for j, v := range a.vari {
		if v <= 0 {
			continue
		}
		d := float64(a.data[j])
		if d < 0 && d*d > spikeSigmas*spikeSigmas*float64(v) {
			found = append(found, j)
			continue
		}
		c := j % cols
		if c > 0 && c+1 < cols && j >= cols && j+cols < len(a.vari) &&
			a.spike(j, 1, sharp[0]*spikeMargin) && a.spike(j, cols, sharp[1]*spikeMargin) {
			found = append(found, j)
		}
	}
	for _, j := range found {
		a.vari[j], a.data[j], a.dual[j] = -1, 0, 0
		a.used--
	}
	return len(found)
}

func (a *arm) spike(j, step int, sharp float64) bool {
	v0, v1 := float64(a.vari[j-step]), float64(a.vari[j+step])
	if v0 <= 0 || v1 <= 0 || math.IsInf(sharp, 1) {
		return false
	}
	over := float64(a.data[j]) - sharp*(max(float64(a.data[j-step]), 0)+max(float64(a.data[j+step]), 0))
	return over > 0 && over*over > spikeSigmas*spikeSigmas*(float64(a.vari[j])+sharp*sharp*(v0+v1))
}
