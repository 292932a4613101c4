package calib

import (
	"math"

	"gonum.org/v1/gonum/mat"
)

// The search for the pitch of the code.
const (
	pitchMost = 12.0 // px
	pitchSpan = 96   // most pixels used to find a pitch that is no whole number, px
	pitchGain = 0.25 // an excess may grow by this to win a coarser grid
	pitchFree = 0.004
	// pitchSlack lets grids through whose elements are not quite sharp; which
	// one holds is decided on two levels.
	pitchSlack = 0.03
)

// unseen is the rms of what elements of a grid cannot explain along one axis,
// relative to the signal and with the noise taken off: data minus their
// projection on the columns of seen.
func unseen(gram *mat.SymDense, total, noise float64, a *mat.Dense) float64 {
	rows, cols := a.Dims()
	if cols >= rows {
		return 0
	}
	var g, t mat.Dense
	g.Mul(a.T(), a)
	sym := mat.NewSymDense(cols, nil)
	for i := range cols {
		for j := i; j < cols; j++ {
			sym.SetSym(i, j, g.At(i, j))
		}
		sym.SetSym(i, i, sym.At(i, i)+1e-9)
	}
	var chol mat.Cholesky
	if !chol.Factorize(sym) {
		return 1
	}
	t.Mul(gram, a)
	var m, x mat.Dense
	m.Mul(a.T(), &t)
	if chol.SolveTo(&x, &m) != nil {
		return 1
	}
	left := total - mat.Trace(&x) - noise*float64(rows-cols)/float64(rows)
	return math.Sqrt(max(left, 0) / total)
}

// findGrids lists the grids that may explain the data along one axis
// (alongX: columns), best guess first: the coarsest whole-pixel grid that does
// as well as single pixels, the best grid of any pitch and phase, and single
// pixels.
func (b *elements) findGrids(alongX bool, sigma float64, side [2]float64) (found []grid) {
	n, on := b.w, b.cols
	d := mat.Matrix(b.d)
	if alongX {
		d = b.d.T()
	} else {
		n, on = b.h, b.rows
	}
	total, noise := b.signal*b.points, b.noise*b.points
	a := axis{n, b.pad, sigma, on}
	gram := mat.NewSymDense(n+2*b.pad, nil)
	var g mat.Dense
	g.Mul(d, d.T())
	for i := range n + 2*b.pad {
		for j := i; j < n+2*b.pad; j++ {
			gram.SetSym(i, j, g.At(i, j))
		}
	}
	single := newGrid(1, 0, side)
	best := single
	limit := unseen(gram, total, noise, a.seen(single))*(1+pitchGain) + pitchFree
	for p := 2; p <= min(int(pitchMost), n/4); p++ {
		for from := range p {
			c := newGrid(float64(p), -float64(from), side)
			if unseen(gram, total, noise, a.seen(c)) <= limit {
				best = c
			}
		}
	}
	if best.pitch > 1 {
		return []grid{best, single}
	}
	found = a.anyPitch(gram, side)
	keep := found[:0]
	for _, c := range found {
		if unseen(gram, total, noise, a.seen(c)) <= limit+pitchSlack {
			keep = append(keep, c)
		}
	}
	return append(keep, single)
}

// chooseGrids takes the pair of grids on which a two-level pattern explains
// most.
func (b *elements) chooseGrids(gx, gy []grid) {
	best := math.Inf(1)
	var x, y grid
	for _, y0 := range gy {
		for _, x0 := range gx {
			b.gx, b.gy = x0, y0
			p, q := b.matrices()
			if !b.binary(p, q, false) {
				continue
			}
			// An element more costs what it could gain by chance.
			k := float64(x0.n * y0.n)
			if c := max(b.misfit(p, q), b.noise) * (1 + 2*k/b.points); c < best {
				best, x, y = c, x0, y0
			}
			if b.excess() < twoLevelLimit && x0.pitch > 1 && y0.pitch > 1 {
				return
			}
		}
	}
	b.gx, b.gy = x, y
}

// axis is one direction of the bordered frames.
type axis struct {
	n, pad int
	sigma  float64
	on     []bool // lines that count
}

func (x axis) seen(g grid) *mat.Dense { return trim(g.seen(x.n, x.pad, x.sigma), x.on) }

// octaves are the ranges of pitch from each of which the best is kept.
var octaves = []float64{1.4, 1.75, 2.3, 3.2, 4.6, 7, pitchMost}

// anyPitch searches pitches and phases that are no whole numbers on the
// middle of the axis and refines the best of each octave on all of it,
// coarsest first.
func (x axis) anyPitch(gram *mat.SymDense, side [2]float64) (found []grid) {
	n := x.n
	span := min(n, pitchSpan)
	at := (n - span) / 2
	if span < 24 {
		return nil
	}
	sub := mat.NewSymDense(span, nil)
	for i := range span {
		for j := i; j < span; j++ {
			sub.SetSym(i, j, gram.At(i+at+x.pad, j+at+x.pad))
		}
	}
	inner, whole := mat.Trace(sub), mat.Trace(gram)
	for o := len(octaves) - 2; o >= 0; o-- {
		if octaves[o+1] > float64(span)/6 {
			continue
		}
		best, least := grid{}, math.Inf(1)
		for p := octaves[o]; p < octaves[o+1]; p *= 1 + 0.25*p/float64(span) {
			steps := max(6, int(p*5))
			for i := range steps {
				from := p * float64(i) / float64(steps)
				c := perRow(sub, inner, newGrid(p, from, [2]float64{0, float64(span)}).seen(span, 0, x.sigma))
				if c < least {
					least, best = c, newGrid(p, from+float64(at), side)
				}
			}
		}
		cost := func(p, from float64) float64 {
			return perRow(gram, whole, x.seen(newGrid(p, from, side)))
		}
		found = append(found, best.refine(n, cost))
	}
	return found
}

// perRow is what elements leave unexplained per free row: free elements
// explain part of anything.
func perRow(gram *mat.SymDense, total float64, a *mat.Dense) float64 {
	rows, k := a.Dims()
	e := unseen(gram, total, 0, a)
	return e * e * float64(rows) / float64(max(rows-k, 1))
}

// refine tunes pitch and phase in turns; while the pitch changes, the phase
// is kept at the middle.
func (g grid) refine(n int, cost func(p, from float64) float64) grid {
	mid := float64(n) / 2
	for range 4 {
		k := math.Round((mid - g.from) / g.pitch)
		anchor := g.from + k*g.pitch
		dp := 0.5 * g.pitch / float64(n)
		p, _ := minimise(func(p float64) float64 { return cost(p, anchor-k*p) }, g.pitch-dp, g.pitch+dp, 1e-5)
		from, _ := minimise(func(s float64) float64 { return cost(p, s) }, anchor-k*p-0.15*p, anchor-k*p+0.15*p, 1e-4)
		g = newGrid(p, from, g.side)
	}
	return g
}
