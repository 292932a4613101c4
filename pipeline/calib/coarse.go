package calib

import (
	"context"
	"math"
	"runtime"
	"slices"
	"sync"
)

// The coarse search: how the window may lie on the reference sensor.
const (
	turnMost   = 20.0 // degrees either way of each quarter turn
	turnStep   = 5.0
	scaleLeast = 0.6 // reference px per window px
	scaleMost  = 1.65
	scaleStep  = 1.12
	coarseSide = 56   // mean side of the reduced images, px
	overlap    = 0.55 // part of the window that must lie on the reference sensor
	keep       = 16   // candidates that are refined
)

// candidate is one place of the window on the reference sensor.
type candidate struct {
	h     [9]float64
	score float64 // correlation coefficient

	base, turn, scale int // place in the search grid
}

// shrinkBy averages f×f pixels, weighted by ok.
func shrinkBy(p plane, ok []bool, f int) (plane, []bool) {
	q := newPlane(p.w/f, p.h/f)
	good := make([]bool, len(q.v))
	for y := range q.h {
		for x := range q.w {
			n := 0
			var s float64
			for j := range f {
				for i := range f {
					if k := (y*f+j)*p.w + x*f + i; ok[k] {
						s += p.v[k]
						n++
					}
				}
			}
			if n*2 >= f*f {
				q.v[y*q.w+x], good[y*q.w+x] = s/float64(n), true
			}
		}
	}
	return q, good
}

// search correlates the streak target, turned, scaled and perhaps mirrored,
// with the reference target at every shift: normalised cross-correlation of
// masked images by Fourier transform (D. Padfield, IEEE Trans. Image Process.
// 21, 2012, 2706–2718). It returns the best candidates, best first.
func search(ctx context.Context, s, r image) []candidate {
	f := 1
	for mean := math.Sqrt(float64(max(r.w*r.h, s.w*s.h))); mean/float64(f) > coarseSide; {
		f++
	}
	sp, sok := shrinkBy(s.plane, s.ok, f)
	rp, rok := shrinkBy(r.plane, r.ok, f)
	heal(sp, sok)
	var jobs []candidate
	for base := range 8 {
		for turn := -int(turnMost / turnStep); turn <= int(turnMost/turnStep); turn++ {
			for k, sc := 0, scaleLeast; sc <= scaleMost; k, sc = k+1, sc*scaleStep {
				jobs = append(jobs, candidate{h: linear(base, float64(turn)*turnStep, sc), base: base, turn: turn, scale: k})
			}
		}
	}
	side := math.Hypot(float64(sp.w), float64(sp.h))*scaleMost + 2
	fw, fh := fastLength(rp.w+int(side)), fastLength(rp.h+int(side))
	var wg sync.WaitGroup
	workers := max(1, min(runtime.GOMAXPROCS(0), 8))
	for n := range workers {
		wg.Go(func() {
			c := newCorrelator(rp, rok, fw, fh)
			for i := n; i < len(jobs) && ctx.Err() == nil; i += workers {
				c.place(&jobs[i], sp)
			}
		})
	}
	wg.Wait()
	slices.SortStableFunc(jobs, func(a, b candidate) int {
		switch {
		case a.score > b.score:
			return -1
		case a.score < b.score:
			return 1
		}
		return 0
	})
	var best []candidate
	for _, j := range jobs {
		if j.score > 0 && len(best) < keep && !near(best, j) {
			j.h = enlarge(j.h, f)
			best = append(best, j)
		}
	}
	return best
}

// near reports whether a better candidate is a neighbour in the search grid.
func near(best []candidate, c candidate) bool {
	for _, b := range best {
		if b.base == c.base && abs(b.turn-c.turn) <= 1 && abs(b.scale-c.scale) <= 1 {
			return true
		}
	}
	return false
}

func abs(i int) int { return max(i, -i) }

// linear is the affine map of quarter turn and mirror base, turn in degrees
// (clockwise with y down) and scale, about the origin.
func linear(base int, turn, scale float64) [9]float64 {
	sin, cos := math.Sincos(turn*math.Pi/180 + float64(base%4)*math.Pi/2)
	m := 1.0
	if base >= 4 {
		m = -1 // mirror left-right first
	}
	return [9]float64{scale * cos * m, -scale * sin, 0, scale * sin * m, scale * cos, 0, 0, 0, 1}
}

// enlarge turns a map between images reduced by f into one between the full
// ones. Reduced pixel i covers f·i … f·i+f−1, centred at f·i + (f−1)/2.
func enlarge(h [9]float64, f int) [9]float64 {
	k, c := float64(f), (float64(f)-1)/2
	h[2] = k*h[2] + c - (h[0]+h[1])*c
	h[5] = k*h[5] + c - (h[3]+h[4])*c
	return h
}

// correlator holds the transforms of the reference image.
type correlator struct {
	f          *fft2
	w, h       int
	v, m       []complex128 // transforms of image and mask
	q          []complex128 // of the squared image
	a, b, p, t []complex128
}

func newCorrelator(r plane, ok []bool, fw, fh int) *correlator {
	c := &correlator{f: newFFT2(fw, fh), w: r.w, h: r.h}
	n := fw * fh
	for _, s := range []*[]complex128{&c.v, &c.m, &c.q, &c.a, &c.b, &c.p, &c.t} {
		*s = make([]complex128, n)
	}
	scale := plateauOf(r, ok)
	for y := range r.h {
		for x := range r.w {
			if i := y*r.w + x; ok[i] {
				v := r.v[i] / scale
				c.v[y*fw+x], c.q[y*fw+x], c.m[y*fw+x] = complex(v, 0), complex(v*v, 0), 1
			}
		}
	}
	c.f.forward(c.v)
	c.f.forward(c.q)
	c.f.forward(c.m)
	return c
}

func plateauOf(p plane, ok []bool) float64 {
	var s float64
	n := 0
	for i, v := range p.v {
		if ok[i] {
			s += math.Abs(v)
			n++
		}
	}
	if s == 0 {
		return 1
	}
	return s / float64(n)
}

// place finds the shift of the candidate at which s, brought to the reference
// grid, correlates best.
func (c *correlator) place(j *candidate, s plane) {
	ox, oy, tw, th := extent(j.h, s.w, s.h)
	if tw > c.f.w-c.w || th > c.f.h-c.h {
		return
	}
	clear(c.a) // template + i·mask
	clear(c.b) // squared template
	inv := inverse3(j.h)
	scale := 1 / max(plateauOf(s, all(len(s.v))), 1e-300)
	total := 0.0
	for y := range th {
		for x := range tw {
			u, v := apply(inv, float64(x+ox), float64(y+oy))
			if u < 0 || v < 0 || u > float64(s.w-1) || v > float64(s.h-1) {
				continue
			}
			t := bilinear(s, u, v) * scale
			c.a[y*c.f.w+x] = complex(t, 1)
			c.b[y*c.f.w+x] = complex(t*t, 0)
			total++
		}
	}
	c.f.forward(c.a)
	c.f.forward(c.b)
	c.combine()
	best, at := 0.0, 0
	for i := range c.p {
		n, st := real(c.p[i]), imag(c.p[i])
		if n < overlap*total || n < 16 {
			continue
		}
		stt, sr := real(c.t[i]), imag(c.t[i])
		srr, str := real(c.a[i]), imag(c.a[i])
		vt, vr := stt-st*st/n, srr-sr*sr/n
		if vt <= 1e-6*stt || vr <= 1e-6*srr {
			continue
		}
		if r := (str - st*sr/n) / math.Sqrt(vt*vr); r > best {
			best, at = r, i
		}
	}
	j.score = best
	x, y := at%c.f.w, at/c.f.w
	if x >= c.w {
		x -= c.f.w
	}
	if y >= c.h {
		y -= c.f.h
	}
	j.h[2], j.h[5] = float64(x-ox), float64(y-oy)
}

// combine turns the template's transforms into the six correlations, two real
// ones in each complex plane: p = n + i·Σt, t = Σt² + i·Σr, a = Σr² + i·Σtr.
func (c *correlator) combine() {
	w, h := c.f.w, c.f.h
	for y := range h {
		for x := range w {
			i, k := y*w+x, (h-y)%h*w+(w-x)%w
			if k < i {
				continue
			}
			pair := [2]int{i, k}
			a0, a1 := c.a[i], c.a[k]
			// Transforms of two real images from that of a complex one.
			tpl := [2]complex128{(a0 + conj(a1)) / 2, (a1 + conj(a0)) / 2}
			msk := [2]complex128{(a0 - conj(a1)) / 2i, (a1 - conj(a0)) / 2i}
			sq := [2]complex128{c.b[i], c.b[k]}
			for n, q := range pair {
				ct, cm, cs := conj(tpl[n]), conj(msk[n]), conj(sq[n])
				c.p[q] = cm*c.m[q] + 1i*ct*c.m[q]
				c.t[q] = cs*c.m[q] + 1i*cm*c.v[q]
				c.a[q] = cm*c.q[q] + 1i*ct*c.v[q]
			}
		}
	}
	c.f.inverse(c.p)
	c.f.inverse(c.t)
	c.f.inverse(c.a)
}

func conj(z complex128) complex128 { return complex(real(z), -imag(z)) }

func all(n int) []bool {
	b := make([]bool, n)
	for i := range b {
		b[i] = true
	}
	return b
}

// extent is the box that holds the image of a w×h picture.
func extent(h [9]float64, w, ht int) (x0, y0, nw, nh int) {
	lx, ly, hx, hy := math.Inf(1), math.Inf(1), math.Inf(-1), math.Inf(-1)
	for _, p := range [][2]float64{{0, 0}, {float64(w - 1), 0}, {0, float64(ht - 1)}, {float64(w - 1), float64(ht - 1)}} {
		u, v := apply(h, p[0], p[1])
		lx, ly, hx, hy = min(lx, u), min(ly, v), max(hx, u), max(hy, v)
	}
	x0, y0 = int(math.Floor(lx)), int(math.Floor(ly))
	return x0, y0, int(math.Ceil(hx)) - x0 + 1, int(math.Ceil(hy)) - y0 + 1
}

func bilinear(p plane, x, y float64) float64 {
	ix, iy := min(int(x), p.w-2), min(int(y), p.h-2)
	ix, iy = max(ix, 0), max(iy, 0)
	fx, fy := x-float64(ix), y-float64(iy)
	jx, jy := min(ix+1, p.w-1), min(iy+1, p.h-1)
	return (1-fy)*((1-fx)*p.at(ix, iy)+fx*p.at(jx, iy)) + fy*((1-fx)*p.at(ix, jy)+fx*p.at(jx, jy))
}

// inverse3 inverts a 3 × 3 map by its adjugate.
func inverse3(h [9]float64) (g [9]float64) {
	a, b, c, d, e, f, x, y, z := h[0], h[1], h[2], h[3], h[4], h[5], h[6], h[7], h[8]
	g = [9]float64{e*z - f*y, c*y - b*z, b*f - c*e, f*x - d*z, a*z - c*x, c*d - a*f, d*y - e*x, b*x - a*y, a*e - b*d}
	det := a*g[0] + b*g[3] + c*g[6]
	for i := range g {
		g[i] /= det
	}
	return g
}
