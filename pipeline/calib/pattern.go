package calib

import (
	"fmt"
	"math"
)

// CodeFit is how the code was found.
type CodeFit struct {
	Low, High      float64 // transmission of closed and open elements
	PitchX, PitchY float64 // px, from the correlation of neighbours
	TwoLevel       bool    // the pattern of two levels explains the frames
	Excess         float64 // what it leaves, rms over rms signal, noise taken off
	Chi2           float64 // per pixel
	Edge, Inner    [2]Quantity

	code         plane
	sigma, error [2]float64 // x, y
	method       [2]string
	measured     plane // coded over open, window
	floor        float64
}

// twoLevelLimit is the excess up to which the two-level pattern is believed:
// half of the 3 % by which one wrong pixel in a thousand would show.
const twoLevelLimit = 0.015

// blurAgree is how far two estimates of the blur may differ before it is
// warned about: standard deviations, and relative.
const (
	blurAgree     = 5
	blurAgreePart = 0.1
)

// fitCode finds the blur of the streak arm and the code before blur.
func fitCode(coded, open image, w Window) (*CodeFit, []string, error) {
	f := &CodeFit{}
	ex, ey := fitEdges(open, w, true), fitEdges(open, w, false)
	start := [2]float64{0.7, 0.7}
	for i, e := range []edgeFit{ex, ey} {
		if e.ok {
			start[i] = e.sigma
			f.Edge[i] = Quantity{Value: e.sigma, Sigma: e.err, Unit: "px", Method: "spread of the window's sides in the open frames"}
		}
	}
	cut := open.crop(w)
	light := illumination(cut, int(math.Ceil(3*max(start[0], start[1])))+1)
	for i, l := range light.v {
		if !(l > 0) {
			return nil, nil, fmt.Errorf("the light in the open frames falls to nothing at (%d, %d) inside the window: use even light", w.X+i%w.W, w.Y+i/w.W)
		}
	}
	f.measured = ratio(coded.crop(w), light)
	if err := f.judge(); err != nil {
		return nil, nil, err
	}
	pad := int(math.Ceil(4*max(start[0], start[1]))) + 2
	m := newCodeModel(coded, w, light, pad)
	b, inner := m.search(start, f)
	warn := f.choose(ex, ey, inner)
	f.finish(m, b)
	return f, warn, nil
}

func (im image) crop(w Window) image {
	out := image{im.plane.crop(w), make([]bool, w.W*w.H), make([]float64, w.W*w.H), im.n}
	for y := range w.H {
		a := (y+w.Y)*im.w + w.X
		copy(out.ok[y*w.W:(y+1)*w.W], im.ok[a:])
		copy(out.vari[y*w.W:(y+1)*w.W], im.vari[a:])
	}
	return out
}

// ratio is coded over light; NaN where masked.
func ratio(coded image, light plane) plane {
	r := newPlane(coded.w, coded.h)
	for i := range r.v {
		if r.v[i] = math.NaN(); coded.ok[i] {
			r.v[i] = coded.v[i] / light.v[i]
		}
	}
	return r
}

// judge refuses coded frames that cannot be a code.
func (f *CodeFit) judge() error {
	var v []float64
	for _, r := range f.measured.v {
		if finite(r) {
			v = append(v, r)
		}
	}
	var mean float64
	for _, r := range v {
		mean += r / float64(len(v))
	}
	lo, hi := quantile(v, 0.05), quantile(v, 0.95)
	switch {
	case mean > 1.1:
		return fmt.Errorf("the coded frames are %.2g times as bright as the open frames: [code] coded and open are swapped, or their light differs", mean)
	case mean > 0.97:
		return fmt.Errorf("the coded frames are as bright as the open frames (%.0f %%): the code was not in place", 100*mean)
	case mean < 0.02:
		return fmt.Errorf("the coded frames are dark (%.2g %% of the open frames): the code lets nothing through, or the light was off", 100*mean)
	case hi-lo < 0.05:
		return fmt.Errorf("the coded frames show no pattern (5 %% to 95 %% of the pixels differ by %.2g of the open frames): the code was not in place or is out of focus", hi-lo)
	}
	return nil
}

// search alternates between the pattern and the blur that fit best.
func (m *codeModel) search(start [2]float64, f *CodeFit) (*twoLevel, edgeFit2) {
	s := start
	var b *twoLevel
	cost := func(sx, sy float64) float64 {
		_, c := m.residual(b.values(), pixelKernel(sx), pixelKernel(sy))
		return c
	}
	for round := range 6 {
		b = m.pattern(b, s[0], s[1])
		was := s
		for range 2 {
			s[0], _ = minimise(func(x float64) float64 { return cost(x, s[1]) }, max(0.02, s[0]-0.4), s[0]+0.4, 1e-4)
			s[1], _ = minimise(func(y float64) float64 { return cost(s[0], y) }, max(0.02, s[1]-0.4), s[1]+0.4, 1e-4)
		}
		if round > 0 && math.Hypot(s[0]-was[0], s[1]-was[1]) < 1e-3 {
			break
		}
	}
	b = m.pattern(b, s[0], s[1])
	chi2 := cost(s[0], s[1])
	f.Chi2 = chi2 / float64(max(m.points, 1))
	f.Excess = m.excess(b.values(), pixelKernel(s[0]), pixelKernel(s[1]))
	f.TwoLevel = f.Excess < twoLevelLimit
	wide := math.Sqrt(max(1, f.Chi2))
	return b, edgeFit2{s, [2]float64{
		wide * curvatureSigma(func(x float64) float64 { return cost(x, s[1]) }, s[0], 0.02),
		wide * curvatureSigma(func(y float64) float64 { return cost(s[0], y) }, s[1], 0.02)}}
}

// edgeFit2 is a blur found for both axes at once.
type edgeFit2 struct{ sigma, err [2]float64 }

// excess is the rms residual beyond the noise over the rms signal.
func (m *codeModel) excess(c []float64, kx, ky []float64) float64 {
	p := m.image(c, kx, ky)
	var res, noise, signal float64
	for i, w := range m.weight {
		if w > 0 {
			e := p.v[i] - m.d.v[i]
			doubt := modelDoubt * m.d.v[i]
			res += e * e
			noise += 1/w - doubt*doubt
			signal += m.d.v[i] * m.d.v[i]
		}
	}
	return math.Sqrt(max(res-noise, 0) / signal)
}

// choose combines the two estimates of the blur by their uncertainties, if
// the pattern is believed, and says what was done.
func (f *CodeFit) choose(ex, ey edgeFit, inner edgeFit2) (warn []string) {
	for i, e := range []edgeFit{ex, ey} {
		axis := "xy"[i : i+1]
		in, err := inner.sigma[i], inner.err[i]
		if f.TwoLevel {
			f.Inner[i] = Quantity{Value: in, Sigma: err, Unit: "px", Method: "sharpness of the two-level code"}
		}
		switch {
		case f.TwoLevel && e.ok:
			d := math.Abs(in - e.sigma)
			if d > blurAgree*math.Hypot(err, e.err) && d > blurAgreePart*in {
				warn = append(warn, fmt.Sprintf("the blur along %s is %.3f px by the code but %.3f px by the sides of the window: the window may be out of focus; the code is believed", axis, in, e.sigma))
				f.sigma[i], f.error[i], f.method[i] = in, max(err, d/2), "sharpness of the two-level code in the coded frames"
				continue
			}
			p, q := 1/(err*err), 1/(e.err*e.err)
			f.sigma[i] = (p*in + q*e.sigma) / (p + q)
			f.error[i] = max(1/math.Sqrt(p+q), d*math.Sqrt(p*q)/(p+q))
			f.method[i] = "sharpness of the two-level code and spread of the window's sides, by their uncertainties"
		case f.TwoLevel:
			f.sigma[i], f.error[i], f.method[i] = in, err, "sharpness of the two-level code in the coded frames"
		case e.ok:
			f.sigma[i], f.error[i], f.method[i] = e.sigma, e.err, "spread of the window's sides in the open frames"
			warn = append(warn, fmt.Sprintf("the code is no pattern of two levels on the pixel grid (%.1f %% rms unexplained): the blur along %s comes from the sides of the window alone", 100*f.Excess, axis))
		default:
			f.sigma[i], f.error[i], f.method[i] = in, max(err, 0.2), "sharpness of the code, which two levels explain poorly"
			warn = append(warn, fmt.Sprintf("the blur along %s could not be found well: neither do the sides of the window lie on the sensor nor has the code two levels", axis))
		}
	}
	return warn
}

// finish finds the code for the chosen blur: the measured pixels with the
// two-level pattern as prior, whose spread is what the pattern left
// unexplained.
func (f *CodeFit) finish(m *codeModel, b *twoLevel) {
	kx, ky := pixelKernel(f.sigma[0]), pixelKernel(f.sigma[1])
	b = m.pattern(b, f.sigma[0], f.sigma[1])
	f.Low, f.High = b.lo, b.hi
	values := b.values()
	var signal, light float64
	for _, v := range m.d.v {
		signal += v * v
	}
	for _, l := range m.light.v {
		light += l * l
	}
	gain := 0.0 // variance of the image of one pixel of unit spread
	for _, a := range squares(kx) {
		for _, c := range squares(ky) {
			gain += a * c
		}
	}
	excess := m.excess(values, kx, ky)
	spread := max(excess*math.Sqrt(signal/(light*gain)), 1e-3)
	spread = min(spread, 0.5)
	c := m.restore(values, 1/(spread*spread), kx, ky, 300)
	f.floor = m.excess(c, kx, ky)
	f.code = plane{m.w, m.h, c}
	f.PitchX, f.PitchY = pitch(f.code)
}

// pitch is the element size for a random pattern: neighbours at distance 1
// correlate by 1 − 1/p.
func pitch(c plane) (px, py float64) {
	var mean, vari, cx, cy, nx, ny float64
	for _, v := range c.v {
		mean += v / float64(len(c.v))
	}
	for y := range c.h {
		for x := range c.w {
			v := c.at(x, y) - mean
			vari += v * v
			if x > 0 {
				cx += v * (c.at(x-1, y) - mean)
				nx++
			}
			if y > 0 {
				cy += v * (c.at(x, y-1) - mean)
				ny++
			}
		}
	}
	vari /= float64(len(c.v))
	p := func(r float64) float64 { return 1 / max(1-r, 1e-3) }
	return p(cx / nx / vari), p(cy / ny / vari)
}
