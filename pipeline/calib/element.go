package calib

import (
	"math"

	"gonum.org/v1/gonum/mat"
)

// grid is how the code's elements lie along one axis, in pixels from the
// window's first edge: element e covers from + e·pitch to from + (e+1)·pitch,
// cut off where the window's sides are.
type grid struct {
	pitch, from float64
	side        [2]float64 // where the light begins and ends
	first, n    int        // the elements that reach into the light
}

func newGrid(pitch, from float64, side [2]float64) grid {
	g := grid{pitch: pitch, from: from, side: side}
	g.first = int(math.Floor((side[0]-from)/pitch + 1e-9))
	last := int(math.Ceil((side[1]-from)/pitch-1e-9)) - 1
	g.n = max(last-g.first+1, 1)
	return g
}

// cover is the part of every pixel that every element covers: pixels −pad to
// n+pad−1 in rows.
func (g grid) cover(n, pad int) *mat.Dense {
	a := mat.NewDense(n+2*pad, g.n, nil)
	for e := range g.n {
		lo := max(g.from+float64(g.first+e)*g.pitch, g.side[0])
		hi := min(g.from+float64(g.first+e+1)*g.pitch, g.side[1])
		for i := max(0, int(math.Floor(lo))+pad); i < n+2*pad && float64(i-pad) < hi; i++ {
			p := float64(i - pad)
			if w := min(hi, p+1) - max(lo, p); w > 0 {
				a.Set(i, e, w)
			}
		}
	}
	return a
}

// seen is cover behind a blur of σ and the pixel: what each element looks
// like. Exact for elements of any width: differences of edgeSpread.
func (g grid) seen(n, pad int, sigma float64) *mat.Dense {
	a := mat.NewDense(n+2*pad, g.n, nil)
	for e := range g.n {
		lo := max(g.from+float64(g.first+e)*g.pitch, g.side[0])
		hi := min(g.from+float64(g.first+e+1)*g.pitch, g.side[1])
		if hi <= lo {
			continue
		}
		r := 5*sigma + 1
		for i := max(0, int(math.Floor(lo-r))+pad); i < n+2*pad && float64(i-pad) < hi+r; i++ {
			c := float64(i-pad) + 0.5
			a.Set(i, e, edgeSpread(c-lo, sigma)-edgeSpread(c-hi, sigma))
		}
	}
	return a
}

// elements is the code on a grid of elements e: the frames relative to the
// light are
//
//	D/L = P E Qᵀ,   P, Q = seen along y and x                          (3)
//
// L being even, so that it may be taken out of the blur.
type elements struct {
	w, h, pad int
	d         *mat.Dense // D/L, bordered
	mask      []bool     // pixels that were measured
	noise     float64    // mean variance of D/L
	signal    float64    // mean square of D/L
	points    float64
	gx, gy    grid
	sigma     [2]float64
	e         *mat.Dense
	lo, hi    float64
}

// newElements divides the coded frames by the light, which is continued
// outside the window as it is at its sides.
func newElements(m *codeModel) *elements {
	b := &elements{w: m.w, h: m.h, pad: m.pad, d: mat.NewDense(m.d.h, m.d.w, nil), mask: make([]bool, len(m.d.v))}
	for y := range m.d.h {
		for x := range m.d.w {
			i := y*m.d.w + x
			l := m.light.at(max(0, min(m.w-1, x-m.pad)), max(0, min(m.h-1, y-m.pad)))
			if b.mask[i] = m.weight[i] > 0; b.mask[i] {
				v := m.d.v[i] / l
				b.d.Set(y, x, v)
				doubt := modelDoubt * m.d.v[i]
				b.noise += (1/m.weight[i] - doubt*doubt) / (l * l)
				b.signal += v * v
				b.points++
			}
		}
	}
	b.noise /= b.points
	b.signal /= b.points
	return b
}

// matrices returns P and Q for the present grids and blur.
func (b *elements) matrices() (p, q *mat.Dense) {
	return b.gy.seen(b.h, b.pad, b.sigma[1]), b.gx.seen(b.w, b.pad, b.sigma[0])
}

// fill puts the model where pixels are masked.
func (b *elements) fill(p, q *mat.Dense) {
	var t, m mat.Dense
	t.Mul(p, b.e)
	m.Mul(&t, q.T())
	_, cols := b.d.Dims()
	for i, ok := range b.mask {
		if !ok {
			b.d.Set(i/cols, i%cols, m.At(i/cols, i%cols))
		}
	}
}

// fillPlain puts the mean of the neighbours where pixels are masked.
func (b *elements) fillPlain() {
	rows, cols := b.d.Dims()
	p := plane{cols, rows, b.d.RawMatrix().Data}
	heal(p, b.mask)
}

// wiener is the linear estimate of E for elements of mean c and variance v
// and the noise of the data: singular vectors of P and Q diagonalise (3).
func (b *elements) wiener(p, q *mat.Dense, c, v float64) bool {
	var sp, sq mat.SVD
	if !sp.Factorize(p, mat.SVDThin) || !sq.Factorize(q, mat.SVDThin) {
		return false
	}
	var up, vp, uq, vq mat.Dense
	sp.UTo(&up)
	sp.VTo(&vp)
	sq.UTo(&uq)
	sq.VTo(&vq)
	ny, nx := colsOf(p), colsOf(q)
	ones := mat.NewDense(ny, nx, nil)
	for i := range ny {
		for j := range nx {
			ones.Set(i, j, c)
		}
	}
	var base, t, r, z mat.Dense
	t.Mul(p, ones)
	base.Mul(&t, q.T())
	r.Sub(b.d, &base)
	t.Reset()
	t.Mul(up.T(), &r)
	z.Mul(&t, &uq)
	s1, s2 := sp.Values(nil), sq.Values(nil)
	n := max(b.noise, 1e-8*b.signal) / v
	z.Apply(func(i, j int, x float64) float64 {
		s := s1[i] * s2[j]
		return x * s / (s*s + n)
	}, &z)
	t.Reset()
	t.Mul(&vp, &z)
	b.e = mat.NewDense(ny, nx, nil)
	b.e.Mul(&t, vq.T())
	b.e.Add(b.e, ones)
	return true
}

func colsOf(m *mat.Dense) int { _, c := m.Dims(); return c }

// levels splits values into two groups (S. P. Lloyd, IEEE Trans. Inf. Theory
// 28, 1982, 129–137, for two classes) and returns their means.
func levels(c []float64) (lo, hi float64) {
	v := append([]float64(nil), c...)
	lo, hi = quantile(v, 0.1), quantile(v, 0.9)
	for range 50 {
		mid := (lo + hi) / 2
		var s, n [2]float64
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

// binary finds the two-level E: the Wiener estimate cut at the middle, then
// single elements and pairs of neighbours turned over as long as that lowers
// the squares (iterated conditional modes: J. Besag, J. R. Stat. Soc. B 48,
// 1986, 259–302; pairs because the blur hardly tells a swap of neighbours
// from none).
func (b *elements) binary(p, q *mat.Dense) bool {
	if !b.wiener(p, q, 0.5, 0.25) {
		return false
	}
	b.lo, b.hi = levels(b.e.RawMatrix().Data)
	mid := (b.lo + b.hi) / 2
	b.e.Apply(func(_, _ int, v float64) float64 {
		if v > mid {
			return 1
		}
		return 0
	}, b.e)
	for range 6 {
		b.fitLevels(p, q)
		if b.flip(p, q) == 0 {
			break
		}
	}
	b.fitLevels(p, q)
	b.e.Apply(func(_, _ int, v float64) float64 { return b.lo + (b.hi-b.lo)*v }, b.e)
	return true
}

// fitLevels finds lo and hi by least squares for a pattern of 0 and 1 in e.
func (b *elements) fitLevels(p, q *mat.Dense) {
	ny, nx := b.e.Dims()
	ones := mat.NewDense(ny, nx, nil)
	ones.Apply(func(int, int, float64) float64 { return 1 }, ones)
	var t, on, whole mat.Dense
	t.Mul(p, b.e)
	on.Mul(&t, q.T())
	t.Mul(p, ones)
	whole.Mul(&t, q.T())
	eq := newNormal(2)
	a, w, d := on.RawMatrix().Data, whole.RawMatrix().Data, b.d.RawMatrix().Data
	for i, ok := range b.mask {
		if ok {
			eq.add([]float64{w[i] - a[i], a[i]}, d[i], 1)
		}
	}
	if c, _, ok := eq.solve(); ok && c[1] > c[0] {
		b.lo, b.hi = max(0, c[0]), min(1.05, c[1])
	}
}

// flip works on J = tr(G E F Eᵀ) − 2 tr(Eᵀ B), G = PᵀP, F = QᵀQ, B = PᵀDQ,
// whose gradient is kept up to date. It returns the number of changes.
func (b *elements) flip(p, q *mat.Dense) (turned int) {
	var g, f, pd, bb, t, grad mat.Dense
	g.Mul(p.T(), p)
	f.Mul(q.T(), q)
	pd.Mul(p.T(), b.d)
	bb.Mul(&pd, q)
	full := mat.DenseCopyOf(b.e)
	full.Apply(func(_, _ int, v float64) float64 { return b.lo + (b.hi-b.lo)*v }, full)
	t.Mul(&g, full)
	grad.Mul(&t, &f)
	grad.Sub(&grad, &bb)
	ny, nx := b.e.Dims()
	ry, rx := bandwidth(&g), bandwidth(&f)
	step := func(i, j int) float64 {
		if b.e.At(i, j) > 0.5 {
			return b.lo - b.hi
		}
		return b.hi - b.lo
	}
	turn := func(i, j int) {
		d := step(i, j)
		b.e.Set(i, j, 1-b.e.At(i, j))
		for k := max(0, i-ry); k <= min(ny-1, i+ry); k++ {
			for l := max(0, j-rx); l <= min(nx-1, j+rx); l++ {
				grad.Set(k, l, grad.At(k, l)+d*g.At(k, i)*f.At(j, l))
			}
		}
		turned++
	}
	pairs := [][2]int{{0, 1}, {1, 0}, {1, 1}, {1, -1}, {0, 2}, {2, 0}}
	for range 30 {
		was := turned
		for i := range ny {
			for j := range nx {
				d := step(i, j)
				one := 2*d*grad.At(i, j) + d*d*g.At(i, i)*f.At(j, j)
				if one < 0 {
					turn(i, j)
					continue
				}
				for _, o := range pairs {
					k, l := i+o[0], j+o[1]
					if k >= ny || l < 0 || l >= nx {
						continue
					}
					e := step(k, l)
					two := one + 2*e*grad.At(k, l) + e*e*g.At(k, k)*f.At(l, l) + 2*d*e*g.At(i, k)*f.At(j, l)
					if two < -1e-12 {
						turn(i, j)
						turn(k, l)
						break
					}
				}
			}
		}
		if turned == was {
			break
		}
	}
	return turned
}

// bandwidth is how far from the diagonal a symmetric matrix matters.
func bandwidth(m *mat.Dense) int {
	n, _ := m.Dims()
	top := 0.0
	for i := range n {
		top = max(top, m.At(i, i))
	}
	r := 0
	for i := range n {
		for j := i + r + 1; j < n; j++ {
			if math.Abs(m.At(i, j)) > 1e-6*top {
				r = j - i
			}
		}
	}
	return r
}

// misfit is the mean squared residual of (3) over the measured pixels.
func (b *elements) misfit(p, q *mat.Dense) float64 {
	var t, m mat.Dense
	t.Mul(p, b.e)
	m.Mul(&t, q.T())
	a, d := m.RawMatrix().Data, b.d.RawMatrix().Data
	var s float64
	for i, ok := range b.mask {
		if ok {
			s += (a[i] - d[i]) * (a[i] - d[i])
		}
	}
	return s / b.points
}

// excess is the rms residual beyond the noise over the rms signal.
func (b *elements) excess() float64 {
	return math.Sqrt(max(b.misfit(b.matrices())-b.noise, 0) / b.signal)
}
