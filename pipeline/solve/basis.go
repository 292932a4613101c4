package solve

import (
	"math"

	"unsheard/pipeline/solve/row"
)

// basis is one axis of B: n samples at 0, 1, … n−1 as sums of m cubic B-splines
// on knots h apart, centred on the samples. At least the sample range is
// covered by four splines everywhere, so that they add up to 1. An axis of one
// sample has one spline, the constant.
type basis struct {
	n, m  int
	h     float64
	off   float64     // centre of spline 0, in samples
	taps  int         // splines per sample: 4, or 1
	first []int       // first spline of a sample
	w     []float32   // taps weights per sample
	lo    []int       // first sample of a spline
	wt    [][]float32 // weights of a spline's samples
	line  *row.Spline // the same for the loops along rows
}

// cubic is the centred cardinal cubic B-spline (de Boor, A Practical Guide to
// Splines, chapter IX) at u knots from its centre.
func cubic(u float64) float64 {
	switch u = math.Abs(u); {
	case u < 1:
		return 2./3 - u*u + u*u*u/2
	case u < 2:
		return (2 - u) * (2 - u) * (2 - u) / 6
	}
	return 0
}

func newBasis(n int, h float64) basis {
	if n == 1 {
		b := basis{n: 1, m: 1, h: h, taps: 1, first: []int{0}, w: []float32{1}, lo: []int{0}, wt: [][]float32{{1}}}
		b.line = row.NewSpline(b.taps, b.first, b.w, b.lo, b.wt)
		return b
	}
	b := basis{n: n, m: int(math.Ceil(float64(n-1)/h)) + 3, h: h, taps: 4}
	b.off = (float64(n-1) - float64(b.m-1)*h) / 2
	b.first, b.w = make([]int, n), make([]float32, 4*n)
	b.lo, b.wt = make([]int, b.m), make([][]float32, b.m)
	for i := range n {
		at := (float64(i) - b.off) / h
		f := min(max(int(math.Floor(at))-1, 0), b.m-4)
		b.first[i] = f
		for a := range 4 {
			w := float32(cubic(at - float64(f+a)))
			b.w[4*i+a] = w
			if w == 0 {
				continue
			}
			if len(b.wt[f+a]) == 0 {
				b.lo[f+a] = i
			}
			b.wt[f+a] = append(b.wt[f+a], w)
		}
	}
	b.line = row.NewSpline(b.taps, b.first, b.w, b.lo, b.wt)
	return b
}

// sum returns Σ_i B[i][j].
func (b *basis) sum(j int) (s float32) {
	for _, w := range b.wt[j] {
		s += w
	}
	return s
}

// weights returns the splines of sample i: the first and their weights.
func (b *basis) weights(i int) (first int, w []float32) {
	return b.first[i], b.w[b.taps*i : b.taps*(i+1)]
}

// upRows writes B·src, where B works down the columns: dst has n rows of w, src
// m.
func (b *basis) upRows(l row.Lanes, dst, src []float32, w int) {
	for y := range b.n {
		f, wt := b.weights(y)
		l.FirSet(dst[y*w:(y+1)*w], wt, src, f*w, w)
	}
}

// refit writes coefficients on b for the spline that src is on a: its values
// at the new knots (Schoenberg's approximation; de Boor, chapter XI).
func (b *basis) refit(a *basis) [][]float64 {
	out := make([][]float64, b.m)
	for j := range out {
		out[j] = make([]float64, a.m)
		if a.taps == 1 {
			out[j][0] = 1
			continue
		}
		at := (b.off + float64(j)*b.h - a.off) / a.h
		at = min(max(at, 1), float64(a.m-2))
		for i := range a.m {
			out[j][i] = cubic(at - float64(i))
		}
	}
	return out
}
