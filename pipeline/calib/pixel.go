package calib

import (
	"math"
)

// Rules by which a pixel is called bad.
const (
	hotSigma   = 8   // dark level above its surroundings, robust standard deviations of the dark image …
	hotRead    = 5   // … and read noises of a single frame
	noisyFor   = 4   // dark frames needed to judge the noise of a pixel
	noisyTail  = 6.0 // standard normal quantile: one pixel in 10⁹ by chance …
	noisyTimes = 4.0 // … and times the usual variance
	oddSigma   = 8   // response off its surroundings, robust standard deviations …
	oddLeast   = 0.1 // … and relative
	unlitBelow = 0.2 // flat, relative to its bright part, below which an area is unlit
)

// Defects counts the bad pixels by cause.
type Defects struct{ Hot, Noisy, Odd, Unlit int }

// darkVariance is the temporal variance of the good pixels, ADU², with its
// uncertainty. Outliers (telegraph noise) are cut at 30 times the usual: a
// χ² of one degree of freedom passes that once in 2·10⁷.
func darkVariance(s *stack, ok []bool) (v, sigma float64) {
	nu := float64(s.n - 1)
	all := make([]float64, 0, len(s.vari))
	for i, x := range s.vari {
		if ok[i] && finite(x) {
			all = append(all, x)
		}
	}
	if len(all) == 0 {
		return 0, 0
	}
	c := 1 - 2/(9*nu)
	usual := median(all) / (c * c * c) // median of χ²/ν: Wilson & Hilferty 1931
	var sum float64
	n := 0
	for _, x := range all {
		if usual == 0 || x < 30*usual {
			sum += x
			n++
		}
	}
	v = sum / float64(n)
	return v, v * math.Sqrt(2/(nu*float64(n)))
}

// spatialVariance is the stand-in for a single dark frame: half the robust
// variance of the differences of neighbours along rows.
func spatialVariance(p plane) float64 {
	d := make([]float64, 0, len(p.v))
	for y := range p.h {
		for x := 1; x < p.w; x++ {
			d = append(d, p.at(x, y)-p.at(x-1, y))
		}
	}
	_, s := spread(d)
	return s * s / 2
}

// hotPixels marks pixels whose dark level or temporal noise stands out.
func hotPixels(s *stack, darkVar float64, bad []bool, d *Defects) {
	ok := make([]bool, len(bad))
	for i := range ok {
		ok[i] = finite(s.mean.v[i])
		if !ok[i] {
			bad[i] = true
			d.Hot++
		}
	}
	around := local(s.mean, ok, 2)
	diff := make([]float64, len(bad))
	for i := range diff {
		diff[i] = s.mean.v[i] - around.v[i]
		if !finite(diff[i]) {
			diff[i] = 0
		}
	}
	_, sig := spread(diff)
	limit := max(hotSigma*sig, hotRead*math.Sqrt(darkVar))
	nu := float64(s.n - 1)
	c := 2 / (9 * nu)
	tail := 1 - c + noisyTail*math.Sqrt(c)
	noisy := max(tail*tail*tail, noisyTimes) * darkVar
	for i := range bad {
		switch {
		case bad[i]:
		case math.Abs(diff[i]) > limit && limit > 0:
			bad[i] = true
			d.Hot++
		case s.n >= noisyFor && darkVar > 0 && s.vari[i] > noisy:
			bad[i] = true
			d.Noisy++
		}
	}
}

// flatField combines sums of dark-subtracted flats into the relative
// response, 1 on average over the lit good pixels, and marks odd pixels. sum
// holds the light of n frames, gain the photoelectrons per ADU. It returns
// the relative noise left in the flat.
func flatField(sum plane, bad []bool, n int, gain float64, d *Defects) (flat []float32, noise float64) {
	ok := make([]bool, len(bad))
	bright := make([]float64, 0, len(bad))
	for i := range ok {
		if ok[i] = !bad[i] && finite(sum.v[i]); ok[i] {
			bright = append(bright, sum.v[i])
		}
	}
	level := quantile(bright, 0.95)
	around := local(sum, ok, 2)
	lit := make([]bool, len(ok))
	var ratio []float64
	var at []int
	for i := range ok {
		if lit[i] = around.v[i] > unlitBelow*level; !lit[i] {
			d.Unlit++
		} else if ok[i] {
			ratio = append(ratio, sum.v[i]/around.v[i]-1)
			at = append(at, i)
		}
	}
	_, sig := spread(ratio)
	for k, i := range at {
		if math.Abs(ratio[k]) > max(oddSigma*sig, oddLeast) {
			bad[i], ok[i] = true, false
			d.Odd++
		}
	}
	p := newPlane(sum.w, sum.h)
	var total float64
	count := 0
	for i := range ok {
		if ok[i] && lit[i] {
			p.v[i] = sum.v[i]
			total += sum.v[i]
			count++
		}
		ok[i] = ok[i] && lit[i]
	}
	mean := total / float64(max(count, 1))
	for i := range p.v {
		p.v[i] /= mean
	}
	noise = 1 / math.Sqrt(gain*mean)
	noise = shrink(p, ok, noise)
	flat = make([]float32, len(p.v))
	for i := range flat {
		if flat[i] = 1; ok[i] {
			flat[i] = float32(p.v[i])
		}
	}
	return flat, noise
}

// shrinkWidth is the width of the smooth part of a flat, px.
const shrinkWidth = 3

// shrink pulls the pixel-to-pixel part of a flat towards the smooth part by
// the share of its variance that the photon noise of the flats explains
// (W. James, C. Stein, Estimation with quadratic loss, 4th Berkeley Symp. 1,
// 1961, 361–379). It returns the noise that remains.
func shrink(p plane, ok []bool, noise float64) float64 {
	soft, _ := smooth(p, ok, shrinkWidth)
	var detail []float64
	for i := range ok {
		if ok[i] {
			detail = append(detail, p.v[i]/soft.v[i]-1)
		}
	}
	if len(detail) < 64 {
		return noise
	}
	_, s := spread(detail)
	keep := max(0, 1-noise*noise/(s*s))
	if !finite(keep) {
		return noise
	}
	for i := range ok {
		if ok[i] {
			p.v[i] = soft.v[i] * (1 + keep*(p.v[i]/soft.v[i]-1))
		}
	}
	return noise * math.Sqrt(keep)
}
