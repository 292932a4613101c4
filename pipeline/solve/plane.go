package solve

import "unsheard/pipeline/solve/row"

// tiny is the magnitude under which the cube and the duals are set to 0.
// Relaxation shrinks a dark voxel by a constant factor per iteration, and the
// projection a dual whose neighbours push outwards; without a floor they would
// become denormal, and arithmetic on those costs a hundred cycles each.
const tiny = 0x1p-60

// step is the relaxed step of both loops.
var step = row.Step{Rho: relax, Tiny: tiny}

// plane is one call of the kernel: the primal step of plane k and the dual
// step of plane k−1, for the rows of one band. All slices are rows·w long
// unless said otherwise; rows lie one after the other.
type plane struct {
	rows, w int

	x             []float32 // cube, plane k, read and written
	p, q, r       []float32 // TV duals of plane k, read
	pp, qq, rr    []float32 // TV duals of plane k−1; rr is read for plane k
	up            []float32 // q of the row above the band, plane k (w)
	now, before   []float32 // extrapolated planes k (written) and k−1 (read)
	code, own     []float32 // code of the band; its part of 1/τ
	back          []float32 // back-projection of the reference dual
	cast          []float32 // back-projection of the streak dual, from the band's first row in plane k
	col           []float32 // the streak arm's part of 1/τ, likewise
	castStride    int       // stride of both
	streak        []float32 // streak plane of the band from its first row in plane k, added to
	sum           []float32 // reference plane of the band, added to
	alpha         float32   // weight of ∂t
	ball          row.Ball  // dual step
	grad, curve   []float32 // scratch rows (w)
	lanes         row.Lanes
	first         bool    // k = 0: no plane k−1 to step
	last          bool    // the band's last row is the cube's last row
	dx            float64 // with count: Σ|v − x|, v the primal step
	total, square float64 // with count: Σ v and Σ v²
	count         bool
	zero          []float32 // w zeros
}

// step is, for plane k and every row y and column i of the band,
//
//	g   = C·cast + back − (p−p[i−1]) − (q−q[y−1]) − α(r−r[k−1])
//	v   = max(0, x − g/(C·col + own))
//	now = 2v − x;  x += ρ·(v − x)
//	streak += C·now;  sum += now
//
// and then, for plane k−1 with b = before,
//
//	u = (p,q,r) + σ·(b[i+1]−b, b[y+1]−b, α·(now−b)), projected on |u| ≤ λ
//	(p,q,r) += ρ·(u − (p,q,r))
//
// where a difference that would leave the cube is 0 and ρ is relax. The dual
// row at the lower edge of a band that is not the last is left to edge.
func (a *plane) step() {
	w := a.w
	for y := range a.rows {
		lo, hi := y*w, (y+1)*w
		qUp := a.up
		if y > 0 {
			qUp = a.q[lo-w : lo]
		}
		rBack := a.zero
		if !a.first {
			rBack = a.rr[lo:hi]
		}
		x, now, code := a.x[lo:hi], a.now[lo:hi], a.code[lo:hi]
		a.lanes.Slope(a.grad, a.curve, code, a.cast[y*a.castStride:][:w], a.back[lo:hi], a.col[y*a.castStride:][:w], a.own[lo:hi])
		a.lanes.Diverge(a.grad, a.p[lo:hi], a.q[lo:hi], qUp, a.r[lo:hi], rBack, a.alpha)
		a.lanes.Descend(x, now, a.grad, a.curve, code, a.streak[lo:hi], a.sum[lo:hi], step)
		if a.count {
			d, s, s2 := change(a.now[lo:hi], a.x[lo:hi])
			a.dx += d
			a.total += s
			a.square += s2
		}
		if a.first {
			continue
		}
		a.dualRow(y, a.now[lo:hi])
	}
}

// finish is the dual step of the last plane, k−1 = T−1, where ∂t is 0.
func (a *plane) finish() {
	for y := range a.rows {
		a.dualRow(y, a.before[y*a.w:(y+1)*a.w])
	}
}

func (a *plane) dualRow(y int, next []float32) {
	w := a.w
	lo, hi := y*w, (y+1)*w
	b := a.before[lo:hi]
	down := b
	if y+1 < a.rows {
		down = a.before[hi : hi+w]
	} else if !a.last {
		return
	}
	a.lanes.Dual(a.pp[lo:hi], a.qq[lo:hi], a.rr[lo:hi], b, down, next, a.ball, step)
}

// change returns Σ|v − x_old|, Σ v and Σ v² of a row of unrelaxed values v,
// got back from now = 2v − x_old and x = x_old + ρ(v − x_old).
func change(now, x []float32) (d, s, s2 float64) {
	now = now[:len(x)]
	for i, v := range x {
		m := float64(now[i]-v) / (2 - relax)
		d += max(m, -m)
		u := float64(now[i]) - m
		s += u
		s2 += u * u
	}
	return d, s, s2
}
