package solve

import (
	"math"

	"unsheard/pipeline/optics"
	"unsheard/pipeline/solve/row"
)

// core holds the two arms' data and duals, and what both loops, over voxels
// and over coefficients, do with them.
type core struct {
	m             *optics.Model
	t, h, w, step int
	pad, cols     int
	own, col      []float32 // 1/τ of a voxel = C·col + own, on the window and the padded plane
	s, r          arm
	view          optics.View
	castS         []float32 // B_sᵀ y_s on the padded plane
	backR         []float32 // (a·B_r V)ᵀ y_r on the window
	sum           []float32 // Σ_k of the extrapolated cube, on the window
	zero          []float32
	workers       int
	light         float64   // Σx²/Σx, the typical light of a lit voxel, 0 while unknown
	workspace     workspace // of the sieves
	lanes         row.Lanes
}

// engine is the primal-dual loop over voxels. Its bands are worked in
// parallel; everything a result depends on is fixed by the shape, so the
// number of workers changes no bit.
//
// An iteration has two parts, with barriers between and inside:
//
//  1. every band sweeps its planes: primal step of plane k, dual step of
//     plane k−1, streak and reference sums;
//  2. the dual rows between bands; the data dual of each arm, in chunks of
//     rows (see dataStep).
//
// Part 1 reads duals of the row above its band; those are written in part 2
// only, from copies of the extrapolated rows on both sides of the edge.
type engine struct {
	*core
	bands []*band
	alpha float32
	ball  row.Ball
}

// band is a range of rows y0 ≤ y < y1 of the cube, stored plane after plane.
type band struct {
	y0, y1        int
	x, p, q, r    []float32 // t·rows·w
	ring          [2][]float32
	streak        []float32 // (rows + (t−1)·step)·w
	sum           []float32 // rows·w
	scratch       []float32 // two rows
	top, bottom   []float32 // extrapolated first and last rows, t·w
	dx            float64   // see plane
	total, square float64
}

// arm is one arm's data and dual, in data units: photoelectrons for the
// planes and their inverse for the dual.
type arm struct {
	data, vari []float32 // vari ≤ 0: masked, and data is 0
	edge       []float32 // part of the variance, see setEdge
	dual       []float32
	sigma, inv []float32 // dual step and 1/(1 + σ·vari); both 0 where masked
	rowSum     []float32
	bar, now   []float32 // model at the extrapolated and the current cube
	tmp, plane []float32
	cast       []float32     // transposed blur along rows of the dual
	spread     optics.Spread // blur and its transpose
	spreadT    optics.Spread
	scale      float32   // of the model after the blur and of its adjoint
	chunks     []float64 // χ² by chunks of rows
	used       int
	chi2       float64 // at the last iteration with count
}

// bandRows is the height of a band: small enough for a few cores at 64 rows,
// large enough that the work at the edges does not show. It depends on the
// shape alone, since streak sums are grouped by it.
func bandRows(h int) int {
	if h <= 128 {
		return 16
	}
	return 32
}

func newCore(m *optics.Model, workers int) *core {
	g := m.Geometry()
	rows, cols := m.StreakShape()
	rr, rc := m.ReferenceShape()
	e := &core{m: m, t: g.T, h: g.H, w: g.W, step: g.Step, pad: g.StreakPad, cols: cols, workers: workers, lanes: g.Lanes()}
	e.view = g.View
	e.own, e.col = make([]float32, e.h*e.w), make([]float32, rows*cols)
	e.castS = make([]float32, rows*cols)
	e.backR = make([]float32, e.h*e.w)
	e.zero = make([]float32, e.w)
	e.s, e.r = newArm(rows*cols), newArm(rr*rc)
	e.sum = make([]float32, e.h*e.w)
	e.s.spread, e.s.spreadT, e.r.spread = m.Spreads()
	e.r.spreadT = e.r.spread
	e.s.scale, e.r.scale = 1, float32(g.Ratio)
	for _, a := range []*arm{&e.s, &e.r} {
		a.chunks = make([]float64, chunks(a.spread.Rows))
	}
	m.RowSums(e.s.rowSum, e.r.rowSum)
	return e
}

func newEngine(m *optics.Model, workers int) *engine { return newCore(m, workers).voxels() }

// voxels returns the loop over voxels, starting in the dark.
func (c *core) voxels() *engine {
	e := &engine{core: c}
	size := bandRows(e.h)
	for y := 0; y < e.h; y += size {
		e.bands = append(e.bands, e.newBand(y, min(y+size, e.h)))
	}
	return e
}

func newArm(n int) arm {
	f := func() []float32 { return make([]float32, n) }
	return arm{data: f(), vari: f(), edge: f(), dual: f(), sigma: f(), inv: f(), rowSum: f(), bar: f(), now: f(), tmp: f(), plane: f(), cast: f()}
}

func (e *engine) newBand(y0, y1 int) *band {
	n := (y1 - y0) * e.w
	b := &band{y0: y0, y1: y1, streak: make([]float32, (y1-y0+(e.t-1)*e.step)*e.w), sum: make([]float32, n)}
	for _, v := range []*[]float32{&b.x, &b.p, &b.q, &b.r} {
		*v = make([]float32, e.t*n)
	}
	b.ring = [2][]float32{make([]float32, n), make([]float32, n)}
	b.scratch = make([]float32, 2*e.w)
	b.top, b.bottom = make([]float32, e.t*e.w), make([]float32, e.t*e.w)
	return b
}

// load sets the cube; nil is 0. Negative and non-finite values become 0.
func (e *engine) load(x []float32) {
	for _, b := range e.bands {
		n := (b.y1 - b.y0) * e.w
		for k := range e.t {
			dst := b.x[k*n : (k+1)*n]
			if x == nil {
				clear(dst)
				continue
			}
			copy(dst, x[(k*e.h+b.y0)*e.w:])
			for j, v := range dst {
				if !(v > tiny) || v > math.MaxFloat32 {
					dst[j] = 0
				}
			}
		}
	}
	e.refresh()
}

// store copies the cube out. Relaxation may leave it a little under 0.
func (e *engine) store(x []float32) {
	for _, b := range e.bands {
		n := (b.y1 - b.y0) * e.w
		for k := range e.t {
			dst := x[(k*e.h+b.y0)*e.w:][:n]
			for j, v := range b.x[k*n : (k+1)*n] {
				dst[j] = max(v, 0)
			}
		}
	}
}

// refresh sets the model's answer to the current cube.
func (e *engine) refresh() {
	x := make([]float32, e.t*e.h*e.w)
	e.store(x)
	e.m.Forward(e.s.now, e.r.now, x)
}

// set writes an arm's data and variance.
func (a *arm) set(data, vari []float32) {
	a.used = 0
	for j := range a.data {
		d, v := float64(data[j]), float64(vari[j])
		a.data[j], a.vari[j] = 0, -1
		if v > 0 && v <= math.MaxFloat32 && !math.IsNaN(d) && !math.IsInf(d, 0) {
			a.data[j], a.vari[j] = data[j], vari[j]
			a.used++
		} else {
			a.dual[j] = 0
		}
	}
}

// steps sets the step sizes of Pock & Chambolle 2011, lemma 2 with α = 1, for
// the operator in data units with its rows scaled by d_i: τ_j = γ/Σ_i d_i|K_ij|
// and σ_i = d_i/(γ·Σ_j|K_ij|). d is dataRows for the data and 1 for the
// differences. In those units the columns of the streak arm sum to at most C
// whatever the weights are, so that τ needs one value per window pixel. γ
// turns dual units (1/photoelectron) into primal ones.
func (e *engine) steps(gamma, typical, lambda, alpha float64) {
	e.dataSteps(gamma, typical)
	for j := range e.own {
		e.own[j] += float32((4 + 2*alpha) * stepMargin / gamma)
	}
	e.alpha = float32(alpha)
	e.ball = row.Ball{Sigma: float32(1 / (gamma * stepMargin * 2 * max(1, alpha))), Alpha: e.alpha, Lambda: float32(lambda)}
}

// dataSteps sets the data's dual steps and its part of the primal ones.
func (e *core) dataSteps(gamma, typical float64) {
	var d [2][]float32
	for n, a := range []*arm{&e.s, &e.r} {
		d[n] = make([]float32, len(a.vari))
		for j, v := range a.vari {
			a.sigma[j], a.inv[j] = 0, 0
			if v > 0 {
				row := dataRows * typical / math.Sqrt(float64(v))
				d[n][j] = float32(row * stepMargin / gamma)
				s := row / (gamma * stepMargin * max(float64(a.rowSum[j]), leastRow))
				a.sigma[j], a.inv[j] = float32(s), float32(1/(1+s*float64(v)))
			}
		}
	}
	e.m.BlurStreakAdjoint(e.col, e.s.tmp, d[0])
	e.m.UnprojectAbs(e.own, d[1])
}

const (
	// relax is the over-relaxation ρ of Condat 2013 (J. Optim. Theory
	// Appl. 158, theorem 3.3: any ρ < 2 converges). Measured on the scenes
	// of the tests, 1.8 needs half the iterations of 1.
	relax = 1.8
	// dataRows is the row scale of the data against the differences.
	// Measured: 1 to 10 differ little, 3 was best or near it on all scenes.
	dataRows = 3
	// stepMargin keeps τσ‖K‖² under 1 although sums and steps are rounded.
	stepMargin = 1 + 1e-5
	// leastRow bounds the dual step of a pixel that sees almost nothing of
	// the cube. It is far under the sum of any pixel inside.
	leastRow = 1e-2
)

// iterate is one iteration; with count it also returns Σ|v − x|, Σ v and Σ v²
// of the primal step v.
func (e *engine) iterate(count bool) (dx, total, square float64) {
	e.each(len(e.bands), func(j int) { e.sweep(j, count) })
	e.dataStep(count)
	for _, b := range e.bands {
		dx += b.dx
		total += b.total
		square += b.square
	}
	return dx, total, square
}

// sweep is part 1 for one band.
func (e *engine) sweep(j int, count bool) {
	b := e.bands[j]
	rows := b.y1 - b.y0
	n := rows * e.w
	clear(b.streak)
	clear(b.sum)
	code := e.m.Geometry().Code
	a := plane{rows: rows, w: e.w, own: e.own[b.y0*e.w:][:n], code: code[b.y0*e.w:][:n], back: e.backR[b.y0*e.w:][:n],
		castStride: e.cols, sum: b.sum, alpha: e.alpha, ball: e.ball, lanes: e.lanes, grad: b.scratch[:e.w], curve: b.scratch[e.w:],
		last: b.y1 == e.h, count: count, zero: e.zero, first: true}
	for k := range e.t {
		cut := func(v []float32) []float32 { return v[k*n : (k+1)*n] }
		a.x, a.p, a.q, a.r = cut(b.x), cut(b.p), cut(b.q), cut(b.r)
		a.up = e.zero
		if j > 0 {
			above := e.bands[j-1]
			m := (above.y1 - above.y0) * e.w
			a.up = above.q[(k+1)*m-e.w : (k+1)*m]
		}
		a.now, a.before = b.ring[k&1], b.ring[1-k&1]
		at := (b.y0+k*e.step+e.pad)*e.cols + e.pad
		a.cast, a.col = e.castS[at:], e.col[at:]
		a.streak = b.streak[k*e.step*e.w:][:n]
		a.step()
		copy(b.top[k*e.w:(k+1)*e.w], a.now[:e.w])
		copy(b.bottom[k*e.w:(k+1)*e.w], a.now[n-e.w:])
		a.pp, a.qq, a.rr, a.first = a.p, a.q, a.r, false
	}
	a.before = a.now
	a.finish()
	b.dx, b.total, b.square = a.dx, a.total, a.square
}

// edge steps the duals of the last row of band j, which is not the last band.
func (e *engine) edge(j int) {
	b, below := e.bands[j], e.bands[j+1]
	n := (b.y1 - b.y0) * e.w
	for k := range e.t {
		lo, hi := (k+1)*n-e.w, (k+1)*n
		cut := func(v []float32, k int) []float32 { return v[k*e.w : (k+1)*e.w] }
		e.lanes.Dual(b.p[lo:hi], b.q[lo:hi], b.r[lo:hi], cut(b.bottom, k), cut(below.top, k), cut(b.bottom, min(k+1, e.t-1)), e.ball, step)
	}
}
