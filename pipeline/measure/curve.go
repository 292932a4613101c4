package measure

import "math"

// fwhmPerSigma is the full width at half maximum of a Gaussian of unit
// deviation, 2√(2 ln 2).
var fwhmPerSigma = 2 * math.Sqrt(2*math.Ln2)

const countingOnly = "; deviation of counting alone"

func (in *Input) curve(r *Report) {
	c := in.Cube
	lc := Curve{Name: "light", TimeUnit: "ps", Unit: "photoelectrons/ps",
		Time: c.Time, Value: make([]float64, c.T), Sigma: make([]float64, c.T)}
	var total float64
	for k := range c.T {
		l, d := c.Sum(k), c.Duration(k)
		total += l
		lc.Value[k] = l / d // (1)
		lc.Sigma[k] = math.Sqrt(l/in.transmission()) / d
	}
	r.Curves["light"] = lc
	if total <= 0 {
		r.note("no light in the cube: no peak, width or speed")
		return
	}
	p := Shape(lc.Time, lc.Value)
	n := total * in.transmission()
	width := p.Width
	if math.IsNaN(width) {
		width = c.Edges[c.T] - c.Edges[0]
	}
	r.set("peak_time", p.Peak, width/fwhmPerSigma/math.Sqrt(n), "ps", "vertex of a parabola through the logarithm"+countingOnly)
	r.set("peak_light", p.Height, unknown, "photoelectrons/ps", "vertex of a parabola through the logarithm")
	r.set("fwhm", p.Width, p.Width/math.Sqrt(2*n), "ps", "half-height crossings, linear interpolation"+countingOnly)
	r.set("rise_10_90", p.Rise, p.Rise/math.Sqrt(2*n), "ps", "10 % to 90 % crossings before the peak"+countingOnly)
	if math.IsNaN(p.Width) {
		r.note("the light curve does not fall below half its peak on both sides within the span: no width")
	}
	if math.IsNaN(p.Rise) {
		r.note("the light curve does not start below a tenth of its peak: no rise time")
	}
}

// Pulse is the shape of a light curve. What cannot be read off is NaN.
type Pulse struct {
	Peak   float64 // time of the maximum
	Height float64 // value there
	Width  float64 // full width at half maximum
	Rise   float64 // 10 % to 90 % before the peak
}

// Shape reads peak, width and rise time off a curve of at least one sample
// with rising times.
func Shape(t, v []float64) Pulse {
	top := 0
	for k := range v {
		if v[k] > v[top] {
			top = k
		}
	}
	p := Pulse{Peak: t[top], Height: v[top], Width: math.NaN(), Rise: math.NaN()}
	if v[top] <= 0 {
		p.Peak = math.NaN()
		return p
	}
	if tp, h, ok := vertex(t, v, top); ok {
		p.Peak, p.Height = tp, h
	}
	before := func(share float64) float64 { return crossing(t, v, top, -1, share*p.Height) }
	p.Width = crossing(t, v, top, +1, p.Height/2) - before(0.5)
	p.Rise = before(0.9) - before(0.1)
	return p
}

// vertex fits a parabola by least squares to the logarithm of the samples
// around top that stay above 70 % of it (at least one neighbour on either side,
// at most five), and returns the time and height of its maximum: exact for a
// Gaussian. ok is false at the border of the curve, where a sample is not
// positive or where the fit has no maximum inside its samples.
func vertex(t, v []float64, top int) (tp, h float64, ok bool) {
	const share, reach = 0.7, 5
	lo, hi := top-1, top+1
	if lo < 0 || hi >= len(v) {
		return 0, 0, false
	}
	for lo > 0 && top-lo < reach && v[lo-1] >= share*v[top] {
		lo--
	}
	for hi < len(v)-1 && hi-top < reach && v[hi+1] >= share*v[top] {
		hi++
	}
	half := min(top-lo, hi-top) // symmetric, so that a tail does not pull the vertex
	lo, hi = top-half, top+half
	ln := make([]float64, hi+1-lo)
	for j := range ln {
		ln[j] = math.Log(v[lo+j]) // -Inf or NaN fails the test below
	}
	a, b, c := parabola(t[lo:hi+1], ln, t[top])
	if !(c < 0) || math.IsInf(c, 0) {
		return 0, 0, false
	}
	d := -b / (2 * c)
	if t[top]+d < t[lo] || t[top]+d > t[hi] {
		return 0, 0, false
	}
	return t[top] + d, math.Exp(a + b*d/2), true
}

// parabola fits v = a + b·(t−t0) + c·(t−t0)² by least squares.
func parabola(t, v []float64, t0 float64) (a, b, c float64) {
	var s [5]float64
	var r [3]float64
	for k := range t {
		u, p := t[k]-t0, 1.0
		for j := range s {
			s[j] += p
			if j < 3 {
				r[j] += p * v[k]
			}
			p *= u
		}
	}
	det := func(m [9]float64) float64 {
		return m[0]*(m[4]*m[8]-m[5]*m[7]) - m[1]*(m[3]*m[8]-m[5]*m[6]) + m[2]*(m[3]*m[7]-m[4]*m[6])
	}
	d := det([9]float64{s[0], s[1], s[2], s[1], s[2], s[3], s[2], s[3], s[4]})
	a = det([9]float64{r[0], s[1], s[2], r[1], s[2], s[3], r[2], s[3], s[4]}) / d
	b = det([9]float64{s[0], r[0], s[2], s[1], r[1], s[3], s[2], r[2], s[4]}) / d
	c = det([9]float64{s[0], s[1], r[0], s[1], s[2], r[1], s[2], s[3], r[2]}) / d
	return a, b, c
}

// crossing walks from sample top in steps of dir to the first sample below
// level and returns the interpolated time at which the curve passes it, or NaN
// if it never does.
func crossing(t, v []float64, top, dir int, level float64) float64 {
	for k := top + dir; k >= 0 && k < len(v); k += dir {
		if v[k] < level {
			a := k - dir
			if v[a] < level { // the vertex can lie above its own sample
				return t[a]
			}
			return t[k] + (t[a]-t[k])*(level-v[k])/(v[a]-v[k])
		}
	}
	return math.NaN()
}
