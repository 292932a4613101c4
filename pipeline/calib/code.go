package calib

import (
	"math"
)

// codeModel compares coded frames with
//
//	D = K ∗ (C · L)                                                     (1)
//
// on the window and a border that catches the light the blur carries out. C
// is the code, L the even light without blur, K = tri ∗ g_σ per axis.
type codeModel struct {
	w, h, pad int   // window and border
	d         plane // measured, bordered
	weight    []float64
	light     plane // L, window
	points    int
}

// modelDoubt is the relative error allowed for the light and the flat in
// addition to the noise.
const modelDoubt = 0.003

func newCodeModel(coded image, w Window, light plane, pad int) *codeModel {
	m := &codeModel{w: w.W, h: w.H, pad: pad, d: newPlane(w.W+2*pad, w.H+2*pad), light: light}
	m.weight = make([]float64, len(m.d.v))
	for y := range m.d.h {
		for x := range m.d.w {
			sx, sy := w.X+x-pad, w.Y+y-pad
			if sx < 0 || sy < 0 || sx >= coded.w || sy >= coded.h || !coded.ok[sy*coded.w+sx] {
				continue
			}
			i, k := y*m.d.w+x, sy*coded.w+sx
			m.d.v[i] = coded.v[k]
			e := modelDoubt * coded.v[k]
			m.weight[i] = 1 / (coded.vari[k] + e*e)
			m.points++
		}
	}
	return m
}

// image is K ∗ (c · L), bordered.
func (m *codeModel) image(c []float64, kx, ky []float64) plane {
	p := newPlane(m.d.w, m.d.h)
	for y := range m.h {
		for x := range m.w {
			p.v[(y+m.pad)*p.w+x+m.pad] = c[y*m.w+x] * m.light.v[y*m.w+x]
		}
	}
	return convolve(p, kx, ky, zero)
}

// back is L · Kᵀ r on the window; K is symmetric.
func (m *codeModel) back(r plane, kx, ky []float64) []float64 {
	q := convolve(r, kx, ky, zero)
	g := make([]float64, m.w*m.h)
	for y := range m.h {
		for x := range m.w {
			g[y*m.w+x] = q.v[(y+m.pad)*q.w+x+m.pad] * m.light.v[y*m.w+x]
		}
	}
	return g
}

// residual is weight·(model − D) and χ².
func (m *codeModel) residual(c []float64, kx, ky []float64) (wr plane, chi2 float64) {
	wr = m.image(c, kx, ky)
	for i := range wr.v {
		e := wr.v[i] - m.d.v[i]
		wr.v[i] = m.weight[i] * e
		chi2 += wr.v[i] * e
	}
	return wr, chi2
}

// restore minimises
//
//	½‖K∗(C·L) − D‖²_w + ½ μ ‖C − prior‖²,   0 ≤ C ≤ 1
//
// by accelerated projected gradients (A. Beck, M. Teboulle, SIAM J. Imaging
// Sci. 2, 2009, 183–202).
func (m *codeModel) restore(prior []float64, mu float64, kx, ky []float64, steps int) []float64 {
	var lmax, wmax float64
	for _, l := range m.light.v {
		lmax = max(lmax, l)
	}
	for _, w := range m.weight {
		wmax = max(wmax, w)
	}
	step := 1 / (wmax*lmax*lmax + mu)
	c := append([]float64(nil), prior...)
	y, t := append([]float64(nil), c...), 1.0
	for range steps {
		wr, _ := m.residual(y, kx, ky)
		g := m.back(wr, kx, ky)
		next := (1 + math.Sqrt(1+4*t*t)) / 2
		var move float64
		for i := range c {
			v := max(0, min(1, y[i]-step*(g[i]+mu*(y[i]-prior[i]))))
			y[i] = v + (t-1)/next*(v-c[i])
			move = max(move, math.Abs(v-c[i]))
			c[i] = v
		}
		if t = next; move < 1e-6 {
			break
		}
	}
	return c
}

// levels splits values into two groups (S. P. Lloyd, IEEE Trans. Inf. Theory
// 28, 1982, 129–137, for two classes) and returns their means.
func levels(c []float64) (lo, hi float64) {
	v := append([]float64(nil), c...)
	lo, hi = quantile(v, 0.1), quantile(v, 0.9)
	for range 50 {
		mid := (lo + hi) / 2
		var s [2]float64
		var n [2]float64
		for _, x := range c {
			k := 0
			if x > mid {
				k = 1
			}
			s[k] += x
			n[k]++
		}
		if n[0] == 0 || n[1] == 0 {
			return lo, hi
		}
		a, b := s[0]/n[0], s[1]/n[1]
		if a == lo && b == hi {
			break
		}
		lo, hi = a, b
	}
	return lo, hi
}

// twoLevel is a code of closed and open pixels.
type twoLevel struct {
	open   []bool
	lo, hi float64
}

func (b *twoLevel) values() []float64 {
	c := make([]float64, len(b.open))
	for i, o := range b.open {
		if c[i] = b.lo; o {
			c[i] = b.hi
		}
	}
	return c
}

// fitLevels finds lo and hi by least squares for the pattern as it is.
func (m *codeModel) fitLevels(b *twoLevel, kx, ky []float64) {
	on, off := make([]float64, len(b.open)), make([]float64, len(b.open))
	for i, o := range b.open {
		if o {
			on[i] = 1
		} else {
			off[i] = 1
		}
	}
	p, q := m.image(off, kx, ky), m.image(on, kx, ky)
	eq := newNormal(2)
	for i, w := range m.weight {
		if w > 0 {
			eq.add([]float64{p.v[i], q.v[i]}, m.d.v[i], w)
		}
	}
	if c, _, ok := eq.solve(); ok && c[1] > c[0] {
		b.lo, b.hi = max(0, c[0]), min(1, c[1])
	}
}

// flip turns single pixels over as long as that lowers χ² (iterated
// conditional modes: J. Besag, J. R. Stat. Soc. B 48, 1986, 259–302). It
// returns the number of pixels turned.
func (m *codeModel) flip(b *twoLevel, kx, ky []float64) (turned int) {
	wr, _ := m.residual(b.values(), kx, ky)
	kx2, ky2 := squares(kx), squares(ky)
	hess := convolve(plane{m.d.w, m.d.h, m.weight}, kx2, ky2, zero)
	rx, ry := len(kx)/2, len(ky)/2
	for range 20 {
		n := 0
		for y := range m.h {
			for x := range m.w {
				i := y*m.w + x
				delta := b.hi - b.lo
				if b.open[i] {
					delta = -delta
				}
				amp := delta * m.light.v[i]
				var g float64
				cx, cy := x+m.pad, y+m.pad
				for j := -ry; j <= ry; j++ {
					for k := -rx; k <= rx; k++ {
						if yy, xx := cy+j, cx+k; yy >= 0 && yy < m.d.h && xx >= 0 && xx < m.d.w {
							g += ky[ry+j] * kx[rx+k] * wr.v[yy*m.d.w+xx]
						}
					}
				}
				if 2*amp*g+amp*amp*hess.v[cy*m.d.w+cx] >= 0 {
					continue
				}
				b.open[i] = !b.open[i]
				n++
				for j := -ry; j <= ry; j++ {
					for k := -rx; k <= rx; k++ {
						if yy, xx := cy+j, cx+k; yy >= 0 && yy < m.d.h && xx >= 0 && xx < m.d.w {
							q := yy*m.d.w + xx
							wr.v[q] += m.weight[q] * amp * ky[ry+j] * kx[rx+k]
						}
					}
				}
			}
		}
		turned += n
		if n == 0 {
			break
		}
	}
	return turned
}

func squares(k []float64) []float64 {
	s := make([]float64, len(k))
	for i, v := range k {
		s[i] = v * v
	}
	return s
}

// pattern finds the two-level code for a given blur, starting from b if it
// is not nil.
func (m *codeModel) pattern(b *twoLevel, sx, sy float64) *twoLevel {
	kx, ky := pixelKernel(sx), pixelKernel(sy)
	if b == nil {
		grey := make([]float64, m.w*m.h)
		for i := range grey {
			grey[i] = 0.5
		}
		grey = m.restore(grey, 1/(0.5*0.5), kx, ky, 150)
		b = &twoLevel{open: make([]bool, len(grey))}
		b.lo, b.hi = levels(grey)
		for i, v := range grey {
			b.open[i] = v > (b.lo+b.hi)/2
		}
	}
	for range 5 {
		m.fitLevels(b, kx, ky)
		if m.flip(b, kx, ky) == 0 {
			break
		}
	}
	m.fitLevels(b, kx, ky)
	return b
}
