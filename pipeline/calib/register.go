package calib

import (
	"context"
	"errors"
	"fmt"
	"math"
)

// Limits of the registration.
const (
	rhoLeast     = 0.7  // correlation under which the targets have nothing in common
	rivalPart    = 1.3  // a second place this close in unexplained variance is ambiguous
	rivalPx      = 2.0  // … if it lies further than this from the best, reference px
	keystoneF    = 7.0  // F for two more parameters: P < 0.001 from 100 degrees of freedom up (F tables)
	keystonePx   = 0.02 // … and it must move a corner by this much
	referenceMax = 4.0  // largest blur of the reference arm, px
	rmsPoor      = 0.1  // residual that is warned about, px
)

// pixelVar is the variance of a box one pixel wide.
const pixelVar = 1.0 / 12

// RegisterFit is how the arms were registered.
type RegisterFit struct {
	Kind     string
	H        [9]float64
	Rho      float64    // correlation of the two targets with equal blur
	Residual float64    // px, jackknife over tiles
	Floor    float64    // unexplained part of the target, rms over rms
	Alpha    float64    // streak over reference light per pixel, centre
	Optical  [2]float64 // blur of the reference arm, px, x and y
	Sigma    [2]float64
	Pixels   int
	Rival    float64 // correlation at the second best place

	s, r plane // the two targets with equal blur, on the window
}

// registrar holds the two targets.
type registrar struct {
	s, r    image
	inset   int        // pixels of the window's edge that are not used
	streak  covariance // of the streak arm, pixel included
	ws, wr  *spectrum  // transforms
	noise   [2]float64 // mean variance of the two images
	refBlur [2]float64 // σ of the reference arm, px
}

// register finds how a window pixel maps to the reference sensor, and the
// blur of the reference arm. s is the target in the window, r on the whole
// reference sensor, sigma the blur of the streak arm.
func register(ctx context.Context, s, r image, sigma [2]float64) (*RegisterFit, []string, error) {
	for _, a := range []struct {
		name string
		im   image
	}{{"streak", s}, {"reference", r}} {
		if c := contrast(a.im); c < 6 {
			return nil, nil, fmt.Errorf("the %s target frames show no structure (its contrast is %.1f times the noise): use a target with fine detail, evenly lit, in focus, code open and sweep off", a.name, c)
		}
	}
	g := newRegistrar(s, r, sigma)
	found := search(ctx, g.s, r)
	if err := ctx.Err(); err != nil {
		return nil, nil, err
	}
	best, rival, err := g.climb(found)
	if err != nil {
		return nil, nil, err
	}
	f, warn := g.finish(best)
	f.Rival = rival
	return f, warn, nil
}

// contrast is the spread of the smoothed image over its noise.
func contrast(im image) float64 {
	soft, _ := smooth(im.plane, im.ok, 1)
	var v []float64
	var noise float64
	for i, ok := range im.ok {
		if ok {
			v = append(v, soft.v[i])
			noise += im.vari[i]
		}
	}
	if len(v) == 0 {
		return 0
	}
	lo, hi := quantile(v, 0.05), quantile(v, 0.95)
	// A Gaussian of width 1 lowers the variance of white noise by 4π.
	return (hi - lo) / math.Sqrt(noise/float64(len(v))/(4*math.Pi))
}

func newRegistrar(s, r image, sigma [2]float64) *registrar {
	inset := min(int(math.Ceil(3*max(sigma[0], sigma[1])))+1, s.w/5, s.h/5)
	g := &registrar{inset: inset, r: r}
	g.s = s.crop(Window{inset, inset, s.w - 2*inset, s.h - 2*inset})
	g.streak = covariance{sigma[0]*sigma[0] + pixelVar, 0, sigma[1]*sigma[1] + pixelVar}
	g.refBlur = [2]float64{0.8, 0.8}
	for i, im := range []image{g.s, g.r} {
		n := 0
		for k, ok := range im.ok {
			if ok {
				g.noise[i] += im.vari[k]
				n++
			}
		}
		g.noise[i] /= float64(max(n, 1))
	}
	sp, rp := g.s.plane.clone(), r.plane.clone()
	heal(sp, g.s.ok)
	heal(rp, r.ok)
	pad := max(16, min(min(sp.w, sp.h)/2, 40))
	g.ws, g.wr = newSpectrum(sp, pad), newSpectrum(rp, pad)
	return g
}

// aligner compares the targets after blurring them by bs and br; reach is how
// far a masked pixel spoils its surroundings.
func (g *registrar) aligner(bs, br covariance, stride int) *aligner {
	a := &aligner{s: g.ws.blur(bs), ox: g.inset, oy: g.inset, stride: stride,
		r: newSpline(g.wr.blur(br)), rw: g.r.w, rh: g.r.h, rok: g.r.ok,
		cx: float64(g.s.w-1)/2 + float64(g.inset), cy: float64(g.s.h-1)/2 + float64(g.inset)}
	a.l = max(a.cx, a.cy, 1)
	a.use = make([]bool, len(g.s.ok))
	edge := min(int(math.Ceil(3*math.Sqrt(max(bs.xx, bs.yy)))), g.s.w/5, g.s.h/5)
	for y := edge; y < g.s.h-edge; y++ {
		for x := edge; x < g.s.w-edge; x++ {
			a.use[y*g.s.w+x] = g.s.ok[y*g.s.w+x]
		}
	}
	return a
}

// climb refines the candidates from coarse to fine and returns the best.
func (g *registrar) climb(found []candidate) (pose, float64, error) {
	if len(found) == 0 {
		return pose{}, 0, errors.New("the targets of the two arms overlap nowhere: check that both arms look at the same scene")
	}
	scale := 1.0
	for mean := math.Sqrt(float64(max(g.r.w*g.r.h, g.s.w*g.s.h))); mean/scale > coarseSide; {
		scale++
	}
	fits := make([]fit, len(found))
	first := true
	for blur := scale; ; blur /= 2 {
		blur = max(blur, 0.8)
		b := covariance{blur * blur, 0, blur * blur}
		a := g.aligner(b, b, max(1, int(blur/2)))
		for i := range fits {
			p := fits[i].p
			if first {
				// The coarse map was found on the inner part of the window.
				h := mul3(found[i].h, [9]float64{1, 0, -float64(g.inset), 0, 1, -float64(g.inset), 0, 0, 1})
				p = a.pose(h)
			}
			if fits[i] = a.align(p, 6, 30); !finite(fits[i].p[:]...) || fits[i].n < a.least() {
				fits[i].rho = -1
			}
		}
		first = false
		if blur <= 0.8 {
			break
		}
	}
	best, rival := 0, 0.0
	for i := range fits {
		if fits[i].rho > fits[best].rho {
			best = i
		}
	}
	top := fits[best]
	for _, f := range fits {
		if distance(f.p, top.p) > rivalPx {
			rival = max(rival, f.rho)
		}
	}
	if top.rho < rhoLeast {
		return pose{}, 0, fmt.Errorf("the targets of the two arms do not match (best correlation %.2f): check that [target] streak and reference show the same target at the same time, code open, sweep off, and that the reference arm sees the whole window turned by less than %.0f° and at 0.65 to 1.5 times its scale", top.rho, turnMost)
	}
	if 1-rival < rivalPart*(1-top.rho) {
		return pose{}, 0, fmt.Errorf("the targets match equally well in two places (correlation %.4f and %.4f): use a target that does not repeat itself", top.rho, rival)
	}
	return top.p, rival, nil
}

// least is the number of pixels a match must rest on.
func (a *aligner) least() int {
	n := 0
	a.each(func(int, int) { n++ })
	return max(16, n/2)
}

func (a *aligner) each(f func(x, y int)) {
	for y := 0; y < a.s.h; y += a.stride {
		for x := 0; x < a.s.w; x += a.stride {
			if a.use[y*a.s.w+x] {
				f(x, y)
			}
		}
	}
}

// distance is the largest distance of two maps at the corners, reference px.
func distance(p, q pose) (d float64) {
	for _, c := range [][2]float64{{-1, -1}, {1, -1}, {-1, 1}, {1, 1}, {0, 0}} {
		u0, v0 := p.at(c[0], c[1])
		u1, v1 := q.at(c[0], c[1])
		d = max(d, math.Hypot(u1-u0, v1-v0))
	}
	return d
}

// equal returns the aligner for which both targets are equally blurred: each
// by the blur of the other arm, brought to its own pixels by the linear part
// j of the map.
func (g *registrar) equal(j [4]float64) (*aligner, covariance, covariance) {
	ref := covariance{g.refBlur[0]*g.refBlur[0] + pixelVar, 0, g.refBlur[1]*g.refBlur[1] + pixelVar}
	bs, br := ref.through(inverse2(j)), g.streak.through(j)
	return g.aligner(bs, br, 1), bs, br
}

func inverse2(j [4]float64) [4]float64 {
	d := j[0]*j[3] - j[1]*j[2]
	return [4]float64{j[3] / d, -j[1] / d, -j[2] / d, j[0] / d}
}

// linearPart is the derivative of the map at the window's centre, reference
// px per window px.
func (a *aligner) linearPart(p pose) [4]float64 {
	u, v := p[0], p[3]
	return [4]float64{(p[1] - u*p[6]) / a.l, (p[2] - u*p[7]) / a.l, (p[4] - v*p[6]) / a.l, (p[5] - v*p[7]) / a.l}
}

// finish alternates between map and blur, then decides on keystone.
func (g *registrar) finish(p pose) (*RegisterFit, []string) {
	var warn []string
	a, _, _ := g.equal([4]float64{1, 0, 0, 1})
	out := &RegisterFit{Kind: "affine"}
	free := 6
	var f fit
	for round := range 6 {
		j := a.linearPart(p)
		a, _, _ = g.equal(j)
		f = a.align(p, free, 40)
		p = f.p
		if round == 1 {
			if h, better := g.keystone(a, f); better {
				f, p, free = h, h.p, 8
				out.Kind = "homography"
			}
		}
		was := g.refBlur
		g.blur(a, f, out)
		if round > 1 && math.Hypot(was[0]-g.refBlur[0], was[1]-g.refBlur[1]) < 2e-3 {
			break
		}
	}
	a, bs, br := g.equal(a.linearPart(p))
	f = a.align(p, free, 40)
	out.H, out.Rho, out.Pixels, out.Alpha = a.homography(f.p), f.rho, f.n, f.alpha
	out.Residual = a.uncertainty(f, free)
	out.Optical = g.refBlur
	noise := g.noise[0]*g.ws.noiseGain(bs) + f.alpha*f.alpha*g.noise[1]*g.wr.noiseGain(br)
	out.Floor = math.Sqrt(max(f.sse-noise*float64(f.n), 0) / f.ss)
	out.s, out.r = a.pictures(f)
	if !(out.Residual < rmsPoor) {
		warn = append(warn, fmt.Sprintf("the registration is uncertain by %.2f px rms: use a target with more detail all over the window, or more frames", out.Residual))
	}
	return out, warn
}

// keystone fits a homography and reports whether it explains significantly
// more (F test) and matters.
func (g *registrar) keystone(a *aligner, f fit) (fit, bool) {
	h := a.align(f.p, 8, 60)
	if h.n < f.n*9/10 || !(h.sse > 0) {
		return f, false
	}
	_, bs, _ := g.equal(a.linearPart(f.p))
	// Neighbouring pixels share their noise over the area of the blur.
	free := float64(h.n) / max(1, 4*math.Pi*math.Sqrt(max(bs.xx*bs.yy-bs.xy*bs.xy, 0)))
	F := (f.sse/float64(f.n) - h.sse/float64(h.n)) / 2 / (h.sse / float64(h.n) / max(free-10, 1))
	return h, F > keystoneF && distance(f.p, h.p) > keystonePx
}

// blur finds the blur of the reference arm that makes the two targets
// correlate best. The energy that the noise adds to each image is taken off,
// since more blur would otherwise always look better.
func (g *registrar) blur(a *aligner, f fit, out *RegisterFit) {
	j := a.linearPart(f.p)
	br := g.streak.through(j)
	nr := g.noise[1] * g.wr.noiseGain(br)
	// Neighbouring pixels share their noise over the area of the blur.
	_, now, _ := g.equal(j)
	free := a.sums(f.p).n / max(1, 4*math.Pi*math.Sqrt(max(now.xx*now.yy-now.xy*now.xy, 0)))
	cost := func(sx, sy float64) float64 {
		ref := covariance{sx*sx + pixelVar, 0, sy*sy + pixelVar}
		bs := ref.through(inverse2(j))
		b := *a
		b.s = g.ws.blur(bs)
		m := b.sums(f.p)
		css := m.ss - m.s*m.s/m.n - m.n*g.noise[0]*g.ws.noiseGain(bs)
		crr := m.rr - m.r*m.r/m.n - m.n*nr
		csr := m.sr - m.s*m.r/m.n
		if !(css > 0 && crr > 0) {
			return math.Inf(1)
		}
		return free * math.Log(max(1-csr*csr/(css*crr), 0)+1e-7)
	}
	s := g.refBlur
	for range 3 {
		s[0], _ = minimise(func(x float64) float64 { return cost(x, s[1]) }, max(0, s[0]-0.8), min(referenceMax, s[0]+0.8), 1e-3)
		s[1], _ = minimise(func(y float64) float64 { return cost(s[0], y) }, max(0, s[1]-0.8), min(referenceMax, s[1]+0.8), 1e-3)
	}
	out.Sigma[0] = curvatureSigma(func(x float64) float64 { return cost(x, s[1]) }, s[0], 0.05)
	out.Sigma[1] = curvatureSigma(func(y float64) float64 { return cost(s[0], y) }, s[1], 0.05)
	g.refBlur = s
}

// moments are the sums over the pixels that count.
type moments struct{ n, s, r, ss, sr, rr float64 }

func (a *aligner) sums(p pose) (m moments) {
	a.visit(p, func(t *sample) {
		m.n++
		m.s += t.s
		m.r += t.r
		m.ss += t.s * t.s
		m.sr += t.s * t.r
		m.rr += t.r * t.r
	})
	return m
}

// pictures returns the streak target and the reference target brought to the
// window, for the report.
func (a *aligner) pictures(f fit) (s, r plane) {
	s, r = a.s, newPlane(a.s.w, a.s.h)
	for y := range a.s.h {
		for x := range a.s.w {
			u, v := f.p.at((float64(x+a.ox)-a.cx)/a.l, (float64(y+a.oy)-a.cy)/a.l)
			if u >= 0 && v >= 0 && u <= float64(a.rw-1) && v <= float64(a.rh-1) {
				q, _, _ := a.r.at(u, v)
				r.v[y*r.w+x] = f.alpha*q + f.beta
			}
		}
	}
	return s, r
}
