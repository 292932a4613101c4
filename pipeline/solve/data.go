package solve

import "unsheard/pipeline/solve/row"

// chunkRows is the height of the chunks in which planes are worked.
const chunkRows = 16

func chunks(rows int) int { return (rows + chunkRows - 1) / chunkRows }

// dataStep is the data dual of both arms and the dual rows between bands. A
// blur needs the whole plane of the pass before it, so it goes in phases, each
// shared out by chunks of rows:
//
//  1. streak: gather the bands, blur along rows; reference: view, blur along
//     rows; duals between bands
//  2. both: blur along columns, dual step, transposed blur along rows
//  3. both: transposed blur along columns
//  4. reference: transposed view
func (e *engine) dataStep(count bool) {
	for _, b := range e.bands {
		copy(e.sum[b.y0*e.w:], b.sum)
	}
	ns, nr, edges := len(e.s.chunks), len(e.r.chunks), len(e.bands)-1
	e.each(ns+nr+edges, func(j int) {
		switch {
		case j < nr:
			e.referenceIn(j)
		case j < nr+ns:
			e.streakIn(j - nr)
		default:
			e.edge(j - nr - ns)
		}
	})
	e.each(ns+nr, func(j int) {
		if j < nr {
			e.r.middle(j, e.lanes, count)
		} else {
			e.s.middle(j-nr, e.lanes, count)
		}
	})
	e.each(ns+nr, func(j int) {
		if j < nr {
			e.r.out(e.r.plane, j)
		} else {
			e.s.out(e.castS, j-nr)
		}
	})
	e.backView()
	e.s.total()
	e.r.total()
}

// backView is the transposed view of the reference dual.
func (e *core) backView() { e.each(chunks(e.h), e.viewBack) }

func (e *core) viewBack(j int) {
	lo, hi := j*chunkRows*e.w, min((j+1)*chunkRows, e.h)*e.w
	e.view.AdjointRange(e.backR, e.r.plane, lo, hi)
	for i := lo; i < hi; i++ {
		e.backR[i] *= e.r.scale
	}
}

// limits returns the rows of chunk j.
func (a *arm) limits(j int) (lo, hi int) {
	return j * chunkRows, min((j+1)*chunkRows, a.spread.Rows)
}

// streakIn adds up the bands' streak planes, in the bands' order.
func (e *engine) streakIn(j int) {
	a := &e.s
	lo, hi := a.limits(j)
	clear(a.plane[lo*e.cols : hi*e.cols])
	for _, b := range e.bands {
		top := b.y0 + e.pad // the plane's row of the band's first
		for r := max(lo, top); r < min(hi, top+len(b.streak)/e.w); r++ {
			dst := a.plane[r*e.cols+e.pad:][:e.w]
			for i, v := range b.streak[(r-top)*e.w : (r-top+1)*e.w] {
				dst[i] += v
			}
		}
	}
	a.spread.Along(a.tmp, a.plane, lo, hi)
}

func (e *core) referenceIn(j int) {
	a := &e.r
	lo, hi := a.limits(j)
	e.view.ApplyRange(a.plane, e.sum, lo*a.spread.Cols, hi*a.spread.Cols)
	a.spread.Along(a.tmp, a.plane, lo, hi)
}

// middle ends the blur, steps the dual and begins the transposed blur; with
// count it also takes χ².
func (a *arm) middle(j int, lanes row.Lanes, count bool) {
	lo, hi := a.limits(j)
	a.spread.Across(a.bar, a.tmp, lo, hi)
	if count {
		a.chunks[j] = a.ahead(lo*a.spread.Cols, hi*a.spread.Cols)
	}
	a.step(lo*a.spread.Cols, hi*a.spread.Cols, lanes)
	a.spreadT.Along(a.cast, a.dual, lo, hi)
}

func (a *arm) out(dst []float32, j int) {
	lo, hi := a.limits(j)
	a.spreadT.Across(dst, a.cast, lo, hi)
}

func (a *arm) total() {
	a.chi2 = 0
	for _, c := range a.chunks {
		a.chi2 += c
	}
}

// step is the relaxed proximal step of the convex conjugate of
// ½Σ(·−data)²/vari for pixels lo ≤ j < hi. The operator is linear, so the model
// at the primal step v is the mean of those at 2v − x and at x, and the model
// of the relaxed cube follows by the same relaxation; rounding errors die out
// by |1−ρ/2| per step.
func (a *arm) step(lo, hi int, lanes row.Lanes) {
	cut := func(v []float32) []float32 { return v[lo:hi] }
	lanes.Fit(row.Data{Dual: cut(a.dual), Now: cut(a.now), Bar: cut(a.bar), Data: cut(a.data), Vari: cut(a.vari), Sigma: cut(a.sigma), Inv: cut(a.inv)}, a.scale, step)
}

// ahead is χ² at the primal step v of the pixels that step is about to take.
func (a *arm) ahead(lo, hi int) (chi float64) {
	for j := lo; j < hi; j++ {
		if v := a.vari[j]; v > 0 {
			d := float64((float32(a.bar[j]*a.scale)+a.now[j])/2 - a.data[j])
			chi += float64(d*d) / float64(v)
		}
	}
	return chi
}
