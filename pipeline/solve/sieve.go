package solve

import (
	"math"

	"unsheard/pipeline/solve/row"
)

// sieve is the primal-dual loop over spline coefficients z, x = B·z with
// B = Bt⊗By⊗Bx. The cube itself is never stored, and of the fine planes of the
// coarse times, P_j = By·z_j·Bxᵀ, each worker holds one:
//
//	E[m] = Σ_j Σ_k Bt[k][j]·(C∘P_j)[m − k·step]
//	Σ_k x = By·(Σ_j (Σ_k Bt[k][j])·z_j)·Bxᵀ
//
// and the adjoint takes the code out of the sum over k the same way. An
// iteration goes in phases with barriers between them:
//
//  1. per group of coarse times, one after the other: cast the duals back,
//     primal step, C∘P_j and what it adds to E and to Σ_j; dual step of the
//     differences of the coarse time before (group.go)
//  2. streak: add up the groups' E, blur along rows; the reference's sum;
//     duals of the differences of each group's last coarse time, which look
//     into the next group
//  3. reference: view, blur along rows; streak: blur along columns, dual
//     step, transposed blur along rows
//  4. reference: the same; streak: transposed blur along columns
//  5. reference: transposed blur along columns
//  6. reference: transposed view
//  7. reference: Byᵀ·back·Bx, by chunks of coefficient rows
//
// Groups and chunks depend on the shape alone and sums run in a fixed order
// within one and over them: the number of workers changes no bit.
type sieve struct {
	*core
	spacing    [3]float64
	bt, by, bx basis
	z          []float32 // mt·my·mx
	groups     []group
	*workspace
	volume float64 // voxels per coefficient
	alpha  float32
	sigma  float32
	lambda float32
	stats  [][3]float64
	phase  [7]func(worker, j int)
	count  bool // of iterate
}

// workspace is what a sieve works on and need not keep. One serves all sieves of a
// core; it is the sieve's that was begun last.
type workspace struct {
	bar, tau   []float32 // mt·my·mx
	px, py, pt []float32 // duals of the differences, likewise
	streak     []float32 // the groups' parts of E, see group
	totals     []float32 // and of Σ_j of the extrapolated coefficients, my·mx each
	total      []float32 // their sum, my·mx
	back       []float32 // the reference's gradient, likewise
	fine       []float32 // my rows of W for the reference
	none       []float32 // mx zeros
	plane      []float32 // per worker, see desk
	rows       []float32
	grad       []float32
	turned     []float32
}

// fit gives every slice its length for s.
func (b *workspace) fit(s *sieve) {
	n, workers := s.by.m*s.bx.m, max(1, s.workers)
	last := s.groups[len(s.groups)-1]
	for _, v := range []struct {
		p *[]float32
		n int
	}{{&b.bar, s.bt.m * n}, {&b.tau, s.bt.m * n}, {&b.px, s.bt.m * n}, {&b.py, s.bt.m * n}, {&b.pt, s.bt.m * n},
		{&b.streak, last.at + last.rows*s.w}, {&b.totals, len(s.groups) * n},
		{&b.total, n}, {&b.back, n}, {&b.fine, s.by.m * s.w}, {&b.none, s.bx.m},
		{&b.plane, workers * s.h * s.w}, {&b.rows, workers * s.by.m * s.w}, {&b.grad, workers * n}, {&b.turned, workers * s.bx.line.DownWork()}} {
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
	s.groups = s.share()
	s.setPhases()
	return s
}

// collapse writes Σ_k x to the window plane sum, from the groups' totals.
func (s *sieve) collapse() {
	w, mx, n := s.w, s.bx.m, len(s.total)
	clear(s.total)
	for g := range s.groups {
		s.lanes.Add(s.total, 1, s.totals[g*n:(g+1)*n])
	}
	for r := range s.by.m {
		s.lanes.Up(s.bx.line, s.fine[r*w:(r+1)*w], s.total[r*mx:(r+1)*mx])
	}
	s.by.upRows(s.lanes, s.sum, s.fine, w)
}

// condense writes Byᵀ·src·Bx of a window plane to back.
func (s *sieve) condense(src []float32) {
	s.eachBy(chunks(s.by.m), func(worker, j int) { s.condenseRows(s.desk(worker), src, j) })
}

// condenseRows is condense for chunk j of back's rows.
func (s *sieve) condenseRows(d desk, src []float32, j int) {
	w, mx := s.w, s.bx.m
	lo, hi := j*chunkRows, min((j+1)*chunkRows, s.by.m)
	for r := lo; r < hi; r++ {
		s.lanes.FirSet(s.fine[r*w:(r+1)*w], s.by.wt[r], src, s.by.lo[r]*w, w)
	}
	s.lanes.Down(s.bx.line, s.back[lo*mx:hi*mx], s.fine[lo*w:hi*w], d.turned, hi-lo)
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
	ns, nr, edges := len(c.s.chunks), len(c.r.chunks), len(s.groups)
	s.eachBy(edges, s.phase[0])
	if s.lambda <= 0 {
		edges = 0
	}
	s.eachBy(1+ns+edges, s.phase[1])
	s.eachBy(nr+ns, s.phase[2])
	s.eachBy(nr+ns, s.phase[3])
	s.eachBy(nr, s.phase[4])
	s.eachBy(chunks(s.h), s.phase[5])
	s.eachBy(chunks(s.by.m), s.phase[6])
	c.s.total()
	c.r.total()
	for _, v := range s.stats {
		dx += v[0]
		total += v[1]
		square += v[2]
	}
	return dx, total, square
}

// setPhases makes the phases once, so that the loop does not allocate.
func (s *sieve) setPhases() {
	c := s.core
	ns, nr := len(c.s.chunks), len(c.r.chunks)
	s.phase = [7]func(worker, j int){
		func(worker, g int) { s.sweep(g, s.desk(worker)) },
		func(_, j int) {
			switch {
			case j == 0:
				s.collapse()
			case j <= ns:
				s.gather(j - 1)
			default:
				s.inward(s.groups[j-1-ns].hi - 1)
			}
		},
		func(_, j int) {
			if j < nr {
				c.referenceIn(j)
			} else {
				c.s.middle(j-nr, c.lanes, s.count)
			}
		},
		func(_, j int) {
			if j < nr {
				c.r.middle(j, c.lanes, s.count)
			} else {
				c.s.out(c.castS, j-nr)
			}
		},
		func(_, j int) { c.r.out(c.r.plane, j) },
		func(_, j int) { c.viewBack(j) },
		func(worker, j int) { s.condenseRows(s.desk(worker), c.backR, j) },
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
	s.eachBy(s.bt.m, func(worker, j int) {
		g := s.castBack(j, s.desk(worker), s.col)
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
	d := s.desk(0)
	for j := range s.bt.m {
		s.upColumns(j, d)
		s.by.upRows(s.lanes, d.plane, d.rows, s.w)
		for k, w := range s.bt.wt[j] {
			s.lanes.Add(x[(s.bt.lo[j]+k)*n:][:n], w, d.plane)
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
	s.eachBy(len(s.groups), func(worker, g int) { s.show(g, s.desk(worker)) })
	s.collapse()
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
