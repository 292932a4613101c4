package calib

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"
)

// CodeFit is how the code was found.
type CodeFit struct {
	Low, High      float64 // transmission of closed and open elements
	PitchX, PitchY float64 // px, side of an element
	TwoLevel       bool    // the pattern of two levels explains the frames
	Excess         float64 // what it leaves, rms over rms signal, noise taken off
	Chi2           float64 // per pixel
	Edge, Inner    [2]Quantity

	code         plane
	sigma, error [2]float64 // x, y, of the optics
	model        [2]float64 // for the forward model
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
	var best *elements
	var inner edgeFit2
	m := newCodeModel(coded, w, light, int(math.Ceil(4*max(start[0], start[1])))+2)
	for _, s := range starts(ex, ey) {
		b := newElements(m)
		b.fillPlain()
		var trial CodeFit
		in := b.search(s, [2]edgeFit{ex, ey}, &trial)
		if best == nil || trial.Excess < f.Excess {
			best, inner = b, in
			f.Chi2, f.Excess, f.TwoLevel = trial.Chi2, trial.Excess, trial.TwoLevel
		}
		if f.TwoLevel {
			break
		}
	}
	warn := f.choose(ex, ey, inner)
	f.finish(m, best)
	return f, warn, nil
}

// starts lists the blurs from which the pattern is searched: what the sides
// of the window say; where they say nothing, what those of the other axis do,
// then a few guesses.
func starts(ex, ey edgeFit) (s [][2]float64) {
	pick := func(e edgeFit, other float64) float64 {
		if e.ok {
			return e.sigma
		}
		return other
	}
	if ex.ok || ey.ok {
		s = append(s, [2]float64{pick(ex, ey.sigma), pick(ey, ex.sigma)})
	}
	if ex.ok && ey.ok {
		return s
	}
	for _, g := range []float64{0.7, 1, 0.45, 1.4} {
		s = append(s, [2]float64{pick(ex, g), pick(ey, g)})
	}
	return s
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

// search finds the grid of elements, the two-level pattern on it, and the
// blur and grid that fit best, in turns.
func (b *elements) search(start [2]float64, edges [2]edgeFit, f *CodeFit) edgeFit2 {
	b.sigma = start
	b.chooseGrids(b.findGrids(true, start[0], edges[0].place(b.w)), b.findGrids(false, start[1], edges[1].place(b.h)))
	cost := func() float64 { return b.misfit(b.matrices()) }
	for round := range 6 {
		p, q := b.matrices()
		if !b.binary(p, q, round > 0) {
			break
		}
		b.fill(p, q)
		was := b.sigma
		for range 2 {
			b.tune(&b.sigma[0], max(0.02, b.sigma[0]-0.4), b.sigma[0]+0.4, cost)
			b.tune(&b.sigma[1], max(0.02, b.sigma[1]-0.4), b.sigma[1]+0.4, cost)
			for _, g := range []*grid{&b.gx, &b.gy} {
				if g.pitch != math.Round(g.pitch) || g.from != math.Round(g.from) {
					b.tune(&g.from, g.from-0.2, g.from+0.2, cost)
				}
			}
		}
		if round > 0 && math.Hypot(b.sigma[0]-was[0], b.sigma[1]-was[1]) < 1e-3 {
			break
		}
	}
	p, q := b.matrices()
	b.binary(p, q, true)
	c := cost()
	f.Chi2 = c / b.noise
	f.Excess = b.excess()
	f.TwoLevel = f.Excess < twoLevelLimit
	out := edgeFit2{sigma: b.sigma}
	unit := max(b.noise, c) / b.points // one unit of χ²
	for i := range 2 {
		at := b.sigma[i]
		out.err[i] = curvatureSigma(func(s float64) float64 {
			b.sigma[i] = s
			v := cost() / unit
			b.sigma[i] = at
			return v
		}, at, 0.02)
	}
	return out
}

// tune moves one parameter to the minimum of cost.
func (b *elements) tune(p *float64, lo, hi float64, cost func() float64) {
	*p, _ = minimise(func(v float64) float64 { *p = v; return cost() }, lo, hi, 1e-4)
}

// sideSlack is how far a side may lie from a whole pixel and still be taken
// to lie on it, px.
const sideSlack = 0.02

// place gives the window's two sides in pixels from its first edge.
func (e edgeFit) place(n int) [2]float64 {
	s := [2]float64{0, float64(n)}
	if !e.ok {
		return s
	}
	for i, d := range e.side {
		if math.Abs(d) > sideSlack && math.Abs(d) < 1 {
			s[i] += d * float64(1-2*i) // positive d is inwards
		}
	}
	return s
}

// edgeFit2 is a blur found for both axes at once.
type edgeFit2 struct{ sigma, err [2]float64 }

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
//
// Equation (1) takes the code as constant over pixels. Where its elements do
// not end on pixel sides, the average over pixels already blurs it, by up to
// two pixel boxes, so that K needs a smaller σ: the model's blur is the one
// that explains the frames best with the averaged code. On whole pixels it is
// the blur of the optics.
func (f *CodeFit) finish(m *codeModel, b *elements) {
	b.sigma = f.sigma
	p, q := b.matrices()
	b.binary(p, q, true)
	f.Low, f.High = b.lo, b.hi
	f.PitchX, f.PitchY = b.gx.pitch, b.gy.pitch
	f.model = f.sigma
	values := b.values()
	if !b.gx.whole() || !b.gy.whole() {
		m.tune(values, &f.model)
	}
	f.code, f.floor = m.complete(values, f.model, m.spread(values, f.model))
	if f.TwoLevel {
		return
	}
	var soft [2]float64
	for i, s := range f.sigma {
		soft[i] = math.Sqrt(max(s*s-2*pixelVar, 0))
	}
	values = clamped(f.measured)
	if c, floor := m.complete(values, soft, 0.3); floor < f.floor {
		f.code, f.floor, f.model = c, floor, soft
		f.Low, f.High = levels(values)
		f.PitchX, f.PitchY = 0, 0
	}
}

// complete restores the code about a prior of the given spread and says what
// it leaves unexplained.
func (m *codeModel) complete(prior []float64, sigma [2]float64, spread float64) (plane, float64) {
	kx, ky := pixelKernel(sigma[0]), pixelKernel(sigma[1])
	c := m.restore(prior, 1/(spread*spread), kx, ky, 300)
	return plane{m.w, m.h, c}, m.excess(c, kx, ky)
}

// whole reports whether all elements end on pixel sides.
func (g grid) whole() bool {
	return g.pitch == math.Round(g.pitch) && g.from == math.Round(g.from) &&
		g.side[0] == math.Round(g.side[0]) && g.side[1] == math.Round(g.side[1])
}

// tune finds the blur for a given code.
func (m *codeModel) tune(c []float64, s *[2]float64) {
	cost := func() float64 {
		_, chi2 := m.residual(c, pixelKernel(s[0]), pixelKernel(s[1]))
		return chi2
	}
	for range 3 {
		for i := range s {
			s[i], _ = minimise(func(v float64) float64 { s[i] = v; return cost() }, 0, s[i]+0.3, 1e-4)
		}
	}
}

// spread is the standard deviation about c that the code needs to explain the
// frames.
func (m *codeModel) spread(c []float64, sigma [2]float64) float64 {
	kx, ky := pixelKernel(sigma[0]), pixelKernel(sigma[1])
	var signal, light, gain float64
	for _, v := range m.d.v {
		signal += v * v
	}
	for _, l := range m.light.v {
		light += l * l
	}
	for _, a := range squares(kx) { // variance of the image of one pixel of unit spread
		for _, b := range squares(ky) {
			gain += a * b
		}
	}
	return max(1e-3, min(0.5, m.excess(c, kx, ky)*math.Sqrt(signal/(light*gain))))
}

func clamped(p plane) []float64 {
	v := make([]float64, len(p.v))
	for i, x := range p.v {
		if v[i] = max(0, min(1, x)); math.IsNaN(x) {
			v[i] = 0.5
		}
	}
	return v
}

// values is the code averaged over the window's pixels.
func (b *elements) values() []float64 {
	var t, c mat.Dense
	t.Mul(b.gy.cover(b.h, 0), b.e)
	c.Mul(&t, b.gx.cover(b.w, 0).T())
	v := c.RawMatrix().Data
	for i := range v {
		v[i] = max(0, min(1, v[i]))
	}
	return v
}

// excess is the rms residual of (1) beyond the noise over the rms signal.
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
