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

func squares(k []float64) []float64 {
	s := make([]float64, len(k))
	for i, v := range k {
		s[i] = v * v
	}
	return s
}
