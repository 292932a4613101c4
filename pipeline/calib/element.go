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
	rows      []bool     // rows that lie on the sensor; the others count for nothing
	cols      []bool     // columns likewise
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
	b.rows, b.cols = make([]bool, m.d.h), make([]bool, m.d.w)
	for i, ok := range b.mask {
		if ok {
			b.rows[i/m.d.w], b.cols[i%m.d.w] = true, true
		}
	}
	return b
}

// trim sets the rows to zero that do not count.
func trim(a *mat.Dense, rows []bool) *mat.Dense {
	_, n := a.Dims()
	for i, ok := range rows {
		for j := 0; j < n && !ok; j++ {
			a.Set(i, j, 0)
		}
	}
	return a
}

// matrices returns P and Q for the present grids and blur.
func (b *elements) matrices() (p, q *mat.Dense) {
	return trim(b.gy.seen(b.h, b.pad, b.sigma[1]), b.rows), trim(b.gx.seen(b.w, b.pad, b.sigma[0]), b.cols)
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
	for y := range rows {
		for x := range cols {
			if !b.rows[y] || !b.cols[x] {
				b.d.Set(y, x, 0)
			}
		}
	}
}

// bounded is the estimate of E between 0 and 1: least squares by the
// alternating direction method of multipliers (S. Boyd et al., Found. Trends
// Mach. Learn. 3, 2011, 1–122, sect. 5.1), whose linear step is exact since the
// singular vectors of P and Q diagonalise (3).
func (b *elements) bounded(p, q *mat.Dense) bool {
	var sp, sq mat.SVD
	if !sp.Factorize(p, mat.SVDThin) || !sq.Factorize(q, mat.SVDThin) {
		return false
	}
	var vp, vq, t, db, z, y, r mat.Dense
	sp.VTo(&vp)
	sq.VTo(&vq)
	s1, s2 := sp.Values(nil), sq.Values(nil)
	ny, nx := colsOf(p), colsOf(q)
	t.Mul(p.T(), b.d)
	r.Mul(&t, q)
	into := func(dst, m *mat.Dense) { // Vpᵀ m Vq
		var t mat.Dense
		t.Mul(vp.T(), m)
		dst.Mul(&t, &vq)
	}
	db = *mat.NewDense(ny, nx, nil)
	into(&db, &r)
	z, y = *mat.NewDense(ny, nx, nil), *mat.NewDense(ny, nx, nil)
	z.Apply(func(int, int, float64) float64 { return 0.5 }, &z)
	b.e = mat.NewDense(ny, nx, nil)
	rho := 12 * max(b.noise, 1e-6*b.signal) // 3 times the noise over the variance of open and closed
	diff, c := mat.NewDense(ny, nx, nil), mat.NewDense(ny, nx, nil)
	for range boundedSteps {
		diff.Sub(&z, &y)
		into(c, diff)
		c.Apply(func(i, j int, v float64) float64 {
			s := s1[i] * s2[j]
			return (db.At(i, j) + rho*v) / (s*s + rho)
		}, c)
		t.Reset()
		t.Mul(&vp, c)
		b.e.Mul(&t, vq.T())
		y.Add(&y, b.e)
		z.Apply(func(i, j int, _ float64) float64 { return max(0, min(1, y.At(i, j))) }, &z)
		y.Sub(&y, &z)
	}
	b.e.Copy(&z)
	return true
}

// boundedSteps is enough for the pattern to stand; what is left is turned
// over one by one.
const boundedSteps = 120

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

// binary finds the two-level E: the bounded estimate cut at the middle, then
// single elements and pairs of neighbours turned over as long as that lowers
// the squares (iterated conditional modes: J. Besag, J. R. Stat. Soc. B 48,
// 1986, 259–302; pairs because the blur hardly tells a swap of neighbours
// from none). If that gets stuck and thorough is set, the pattern is annealed.
func (b *elements) binary(p, q *mat.Dense, thorough bool) bool {
	if !b.bounded(p, q) {
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
	b.settle(p, q)
	for _, hot := range hotParts {
		stuck := b.misfit2(p, q)
		if !thorough || stuck < stuckAt*b.noise || stuck > giveUp*b.signal {
			break
		}
		was, lo, hi := mat.DenseCopyOf(b.e), b.lo, b.hi
		b.anneal(p, q, hot)
		b.settle(p, q)
		if b.misfit2(p, q) > stuck {
			b.e, b.lo, b.hi = was, lo, hi
		}
	}
	b.e.Apply(func(_, _ int, v float64) float64 { return b.lo + (b.hi-b.lo)*v }, b.e)
	return true
}

// Annealing is worth while if the misfit is this much more than noise, and
// less than this part of the signal.
const (
	stuckAt = 2
	giveUp  = 0.02
)

// settle turns elements over and fits the levels in turns.
func (b *elements) settle(p, q *mat.Dense) {
	for range 6 {
		b.fitLevels(p, q)
		if b.flip(p, q) == 0 {
			break
		}
	}
	b.fitLevels(p, q)
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

// misfit2 is misfit while e holds a pattern of 0 and 1.
func (b *elements) misfit2(p, q *mat.Dense) float64 {
	was := b.e
	b.e = mat.DenseCopyOf(was)
	b.e.Apply(func(_, _ int, v float64) float64 { return b.lo + (b.hi-b.lo)*v }, b.e)
	m := b.misfit(p, q)
	b.e = was
	return m
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
