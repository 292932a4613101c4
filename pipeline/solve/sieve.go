package solve

import (
	"math"

	"unsheard/pipeline/solve/row"
)

// step is the relaxed step of the rows' loops.
var step = row.Step{Rho: relax, Tiny: tiny}

// sieve is the primal-dual loop over spline coefficients z, x = B·z with
// B = Bt⊗By⊗Bx. The cube itself is never stored: with the fine plane of a
// coarse time, P_j = By·z_j·Bxᵀ, and C∘P_j kept for all j,
//
//	E[m] = Σ_j Σ_k Bt[k][j]·(C∘P_j)[m − k·step]
//	Σ_k x = By·(Σ_j (Σ_k Bt[k][j])·z_j)·Bxᵀ
//
// and the adjoint takes the code out of the sum over k the same way. An
// iteration goes in phases with barriers between them:
//
//  1. per coarse time j: cast the duals back, primal step, C∘P_j (plane)
//  2. streak: gather E, blur along rows; the reference's sum; duals of the
//     differences (inward)
//  3. reference: view, blur along rows; streak: blur along columns, dual
//     step, transposed blur along rows
//  4. reference: the same; streak: transposed blur along columns
//  5. reference: transposed blur along columns
//  6. reference: transposed view
//  7. reference: Byᵀ·back·Bx
//
// Work is shared by coarse times and by chunks of rows, sums run in a fixed
// order within one of them: the number of workers changes no bit.
type sieve struct {
	*core
	spacing    [3]float64
	bt, by, bx basis
	z          []float32 // mt·my·mx
	*workspace
	volume float64 // voxels per coefficient
	alpha  float32
	sigma  float32
	lambda float32
	stats  [][3]float64
	phase  [6]func(int)
	count  bool // of iterate
}

// workspace is what a sieve works on and need not keep. One serves all sieves of a
// core; it is the sieve's that was begun last.
type workspace struct {
	bar, tau   []float32 // mt·my·mx
	px, py, pt []float32 // duals of the differences, likewise
	lit        []float32 // C∘P_j, mt·H·W
	work       []float32 // per j: my rows of W
	grad       []float32 // the streak's gradient, mt·my·mx
	turn       []float32 // per j: scratch of row.Lanes.Down
	total      []float32 // Σ_j of the extrapolated coefficients, my·mx
	back       []float32 // the reference's gradient, likewise
	fine       []float32 // my rows of W for the reference
	none       []float32 // mx zeros
}

// fit gives every slice its length for s.
func (b *workspace) fit(s *sieve) {
	n := s.by.m * s.bx.m
	for _, v := range []struct {
		p *[]float32
		n int
	}{{&b.bar, s.bt.m * n}, {&b.tau, s.bt.m * n}, {&b.px, s.bt.m * n}, {&b.py, s.bt.m * n}, {&b.pt, s.bt.m * n},
		{&b.lit, s.bt.m * s.h * s.w}, {&b.work, s.bt.m * s.by.m * s.w}, {&b.grad, s.bt.m * n}, {&b.turn, s.bt.m * s.bx.line.DownWork()},
		{&b.total, n}, {&b.back, n}, {&b.fine, s.by.m * s.w}, {&b.none, s.bx.m}} {
		if cap(*v.p) < v.n {
			*v.p = make([]float32, v.n)
		}
		*v.p = (*v.p)[:v.n]
	}
	clear(b.px)
	clear(b.py)
	clear(b.pt)
	clear(b.none)
}

func (c *core) sieve(spacing [3]float64) *sieve {
	s := &sieve{core: c, workspace: &c.workspace, spacing: spacing, bt: newBasis(c.t, spacing[0]), by: newBasis(c.h, spacing[1]), bx: newBasis(c.w, spacing[2])}
	s.z = make([]float32, s.bt.m*s.by.m*s.bx.m)
	s.volume = 1
	for _, h := range spacing {
		s.volume *= max(1, h)
	}
	s.stats = make([][3]float64, s.bt.m)
	s.setPhases()
	return s
}

// plane is phase 1 for coarse time j.
func (s *sieve) plane(j int) {
	my, mx := s.by.m, s.bx.m
	n := my * mx
	g := s.castBack(j, s.castS)
	s.lanes.Add(g, s.bt.sum(j), s.back)
	s.stats[j] = [3]float64{}
	for r := range my {
		lo := j*n + r*mx
		if s.lambda > 0 {
			up, before := s.none, s.none
			if r > 0 {
				up = s.py[lo-mx : lo]
			}
			if j > 0 {
				before = s.pt[lo-n : lo-n+mx]
			}
			s.lanes.Diverge(g[r*mx:(r+1)*mx], s.px[lo:lo+mx], s.py[lo:lo+mx], up, s.pt[lo:lo+mx], before, s.alpha)
		}
		z, bar := s.z[lo:lo+mx], s.bar[lo:lo+mx]
		s.lanes.Project(z, bar, g[r*mx:(r+1)*mx], s.tau[lo:lo+mx], step)
		if s.count {
			d, t, t2 := change(bar, z)
			s.stats[j][0] += d
			s.stats[j][1] += t
			s.stats[j][2] += t2
		}
	}
	s.spreadOut(j, s.bar, s.m.Geometry().Code)
}

// castBack returns Byᵀ·(C∘Σ_k Bt[k][j]·cast[· + k·step])·Bx, my rows of mx. It
// uses plane j of lit.
func (s *sieve) castBack(j int, cast []float32) []float32 {
	w, stride, n := s.w, s.step*s.cols, s.by.m*s.bx.m
	rows, q := s.work[j*s.by.m*w:][:s.by.m*w], s.lit[j*s.h*w:][:s.h*w]
	code := s.m.Geometry().Code
	for y := range s.h {
		s.lanes.FirMul(q[y*w:(y+1)*w], s.bt.wt[j], cast, (y+s.pad+s.bt.lo[j]*s.step)*s.cols+s.pad, stride, code[y*w:(y+1)*w])
	}
	s.by.downRows(s.lanes, rows, q, w)
	g, size := s.grad[j*n:(j+1)*n], s.bx.line.DownWork()
	s.lanes.Down(s.bx.line, g, rows, s.turn[j*size:(j+1)*size], s.by.m)
	return g
}

// spreadOut writes P_j of coefficients v to the plane j of lit, times code
// unless that is nil.
func (s *sieve) spreadOut(j int, v, code []float32) {
	my, mx, w := s.by.m, s.bx.m, s.w
	work := s.work[j*my*w:][:my*w]
	for r := range my {
		s.lanes.Up(s.bx.line, work[r*w:(r+1)*w], v[(j*my+r)*mx:][:mx])
	}
	s.by.upRows(s.lanes, s.lit[j*s.h*w:][:s.h*w], work, w, code)
}

// gather writes E of the planes of lit to rows of the streak plane and blurs
// it along rows.
func (s *sieve) gather(chunk int) {
	a := &s.s
	lo, hi := a.limits(chunk)
	clear(a.plane[lo*s.cols : hi*s.cols])
	for r := lo; r < hi; r++ {
		m := r - s.pad
		if m < 0 || m > s.h-1+(s.t-1)*s.step {
			continue
		}
		dst := a.plane[r*s.cols+s.pad:][:s.w]
		k0, k1 := 0, min(s.t-1, m/s.step)
		if over := m - s.h + 1; over > 0 {
			k0 = (over + s.step - 1) / s.step
		}
		for j, wt := range s.bt.wt {
			a0 := max(k0, s.bt.lo[j])
			a1 := min(k1, s.bt.lo[j]+len(wt)-1)
			if a0 <= a1 {
				s.lanes.Fir(dst, wt[a0-s.bt.lo[j]:a1-s.bt.lo[j]+1], s.lit, (j*s.h+m-a0*s.step)*s.w, -s.step*s.w)
			}
		}
	}
	a.spread.Along(a.tmp, a.plane, lo, hi)
}

// collapse writes Σ_k x of coefficients v to the window plane sum.
func (s *sieve) collapse(v []float32) {
	my, mx, w := s.by.m, s.bx.m, s.w
	clear(s.total)
	for j := range s.bt.m {
		s.lanes.Add(s.total, s.bt.sum(j), v[j*my*mx:(j+1)*my*mx])
	}
	for r := range my {
		s.lanes.Up(s.bx.line, s.fine[r*w:(r+1)*w], s.total[r*mx:(r+1)*mx])
	}
	s.by.upRows(s.lanes, s.sum, s.fine, w, nil)
}

// condense writes Byᵀ·src·Bx of a window plane to back.
func (s *sieve) condense(src []float32) {
	s.by.downRows(s.lanes, s.fine, src, s.w)
	s.lanes.Down(s.bx.line, s.back, s.fine, s.turn, s.by.m)
}

// inward is the dual step of the differences of coarse time j.
func (s *sieve) inward(j int) {
	my, mx := s.by.m, s.bx.m
	n := my * mx
	ball := row.Ball{Sigma: s.sigma, Alpha: s.alpha, Lambda: s.lambda}
	for r := range my {
		lo := j*n + r*mx
		b := s.bar[lo : lo+mx]
		down, next := b, b
		if r+1 < my {
			down = s.bar[lo+mx : lo+2*mx]
		}
		if j+1 < s.bt.m {
			next = s.bar[lo+n : lo+n+mx]
		}
		s.lanes.Dual(s.px[lo:lo+mx], s.py[lo:lo+mx], s.pt[lo:lo+mx], b, down, next, ball, step)
	}
}

func (s *sieve) iterate(count bool) (dx, total, square float64) {
	s.count = count
	c := s.core
	ns, nr, planes := len(c.s.chunks), len(c.r.chunks), s.bt.m
	s.each(planes, s.phase[0])
	if s.lambda <= 0 {
		planes = 0
	}
	s.each(1+ns+planes, s.phase[1])
	s.each(nr+ns, s.phase[2])
	s.each(nr+ns, s.phase[3])
	s.each(nr, s.phase[4])
	s.each(chunks(s.h), s.phase[5])
	s.condense(s.backR)
	c.s.total()
	c.r.total()
	for _, v := range s.stats {
		dx += v[0]
		total += v[1]
		square += v[2]
	}
	return dx, total, square
}

// setPhases makes phases 1 to 6 once, so that the loop does not allocate.
func (s *sieve) setPhases() {
	c := s.core
	ns, nr := len(c.s.chunks), len(c.r.chunks)
	s.phase = [6]func(int){
		s.plane,
		func(j int) {
			switch {
			case j == 0:
				s.collapse(s.bar)
			case j <= ns:
				s.gather(j - 1)
			default:
				s.inward(j - 1 - ns)
			}
		},
		func(j int) {
			if j < nr {
				c.referenceIn(j)
			} else {
				c.s.middle(j - nr)
			}
		},
		func(j int) {
			if j < nr {
				c.r.middle(j)
			} else {
				c.s.out(c.castS, j-nr)
			}
		},
		func(j int) { c.r.out(c.r.plane, j) },
		c.viewBack,
	}
}

// steps sets the step sizes as engine.steps does, for the operator composed
// with B; B is not negative and its rows sum to 1. A difference of
// coefficients weighs as much as the voxels of one.
func (s *sieve) steps(gamma, typical, lambda, alpha float64) {
	s.dataSteps(gamma, typical)
	s.condense(s.own)
	n := s.by.m * s.bx.m
	tv := float32(0)
	if lambda > 0 {
		tv = float32(s.volume * (4 + 2*alpha) * stepMargin / gamma)
	}
	s.each(s.bt.m, func(j int) {
		g := s.castBack(j, s.col)
		s.lanes.Add(g, s.bt.sum(j), s.back)
		tau := s.tau[j*n : (j+1)*n]
		for i, v := range g {
			tau[i] = 0
			if v+tv > 0 {
				tau[i] = 1 / (v + tv)
			}
		}
	})
	s.condense(s.backR)
	s.alpha, s.lambda = float32(alpha), float32(lambda*s.volume)
	s.sigma = float32(s.volume / (gamma * stepMargin * 2 * max(1, alpha)))
}

// store writes the cube.
func (s *sieve) store(x []float32) {
	n := s.h * s.w
	s.fit(s)
	for j, v := range s.z {
		s.bar[j] = max(v, 0)
	}
	clear(x)
	for j := range s.bt.m {
		s.spreadOut(j, s.bar, nil)
		for k, w := range s.bt.wt[j] {
			s.lanes.Add(x[(s.bt.lo[j]+k)*n:][:n], w, s.lit[j*n:(j+1)*n])
		}
	}
}

// begin sets the coefficients to those of old, or to 0 if it is nil, and the
// model's answer to them. The data's duals stay.
func (s *sieve) begin(old *sieve) {
	switch {
	case old == nil:
		clear(s.z)
	case old != s:
		clear(s.z)
		s.refit(old)
	}
	s.fit(s)
	copy(s.bar, s.z)
	code := s.m.Geometry().Code
	s.each(s.bt.m, func(j int) { s.spreadOut(j, s.bar, code) })
	s.collapse(s.bar)
	a, b := &s.core.s, &s.core.r
	s.each(len(a.chunks), s.gather)
	s.each(len(a.chunks), func(j int) {
		lo, hi := a.limits(j)
		a.spread.Across(a.now, a.tmp, lo, hi)
	})
	s.each(len(b.chunks), s.referenceIn)
	s.each(len(b.chunks), func(j int) {
		lo, hi := b.limits(j)
		b.spread.Across(b.now, b.tmp, lo, hi)
		for i := lo * b.spread.Cols; i < hi*b.spread.Cols; i++ {
			b.now[i] *= b.scale
		}
	})
	// The duals may have changed since the last iteration.
	s.each(len(a.chunks), func(j int) {
		lo, hi := a.limits(j)
		a.spreadT.Along(a.cast, a.dual, lo, hi)
	})
	s.each(len(a.chunks), func(j int) { a.out(s.castS, j) })
	s.each(len(b.chunks), func(j int) {
		lo, hi := b.limits(j)
		b.spreadT.Along(b.cast, b.dual, lo, hi)
	})
	s.each(len(b.chunks), func(j int) { b.out(b.plane, j) })
	s.backView()
	s.condense(s.backR)
}

// refit sets z to the spline of old on the knots of s, axis by axis.
func (s *sieve) refit(old *sieve) {
	rt, ry, rx := s.bt.refit(&old.bt), s.by.refit(&old.by), s.bx.refit(&old.bx)
	nt, ny, nx := old.bt.m, old.by.m, old.bx.m
	a := make([]float64, nt*ny*s.bx.m)
	for l := range nt * ny {
		for i, w := range rx {
			var v float64
			for q, c := range w {
				if c != 0 {
					v += c * math.Max(float64(old.z[l*nx+q]), 0)
				}
			}
			a[l*s.bx.m+i] = v
		}
	}
	mx, my := s.bx.m, s.by.m
	b := make([]float64, nt*my*mx)
	mix(b, a, ry, nt, ny, mx)
	c := make([]float64, s.bt.m*my*mx)
	mix(c, b, rt, 1, nt, my*mx)
	for j, v := range c {
		if v > tiny {
			s.z[j] = float32(v)
		}
	}
}

// mix writes dst[o][j][i] = Σ_q m[j][q]·src[o][q][i], with q < n and i < w.
func mix(dst, src []float64, m [][]float64, outer, n, w int) {
	for o := range outer {
		for j, wt := range m {
			out := dst[(o*len(m)+j)*w:][:w]
			for q, c := range wt {
				if c == 0 {
					continue
				}
				for i, v := range src[(o*n+q)*w:][:w] {
					out[i] += c * v
				}
			}
		}
	}
}
