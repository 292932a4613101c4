package calib

import (
	"math"

	"gonum.org/v1/gonum/mat"
)

// normal gathers the normal equations of a weighted linear fit.
type normal struct {
	n      int
	a      []float64 // n×n
	b      []float64
	yy     float64
	points int
}

func newNormal(n int) *normal { return &normal{n: n, a: make([]float64, n*n), b: make([]float64, n)} }

func (e *normal) add(row []float64, y, w float64) {
	for i, r := range row {
		wr := w * r
		e.b[i] += wr * y
		for j := range i + 1 {
			e.a[i*e.n+j] += wr * row[j]
		}
	}
	e.yy += w * y * y
	e.points++
}

// merge adds the equations f.
func (e *normal) merge(f *normal, sign float64) {
	for i := range e.a {
		e.a[i] += sign * f.a[i]
	}
	for i := range e.b {
		e.b[i] += sign * f.b[i]
	}
	e.yy += sign * f.yy
	e.points += int(sign) * f.points
}

func (e *normal) matrix() *mat.SymDense {
	m := mat.NewSymDense(e.n, nil)
	for i := range e.n {
		for j := range i + 1 {
			m.SetSym(i, j, e.a[i*e.n+j])
		}
	}
	return m
}

// solve returns the coefficients and the inverse of the matrix.
func (e *normal) solve() (c []float64, inverse *mat.SymDense, ok bool) {
	var chol mat.Cholesky
	if !chol.Factorize(e.matrix()) || chol.Cond() > 1e14 {
		return nil, nil, false
	}
	x := mat.NewVecDense(e.n, nil)
	if err := chol.SolveVecTo(x, mat.NewVecDense(e.n, e.b)); err != nil {
		return nil, nil, false
	}
	inverse = mat.NewSymDense(e.n, nil)
	if err := chol.InverseTo(inverse); err != nil {
		return nil, nil, false
	}
	return x.RawVector().Data, inverse, true
}

// chi2 is the weighted sum of squared residuals at c.
func (e *normal) chi2(c []float64) float64 {
	s := e.yy
	for i := range e.n {
		s -= 2 * c[i] * e.b[i]
		for j := range e.n {
			s += c[i] * c[j] * e.a[max(i, j)*e.n+min(i, j)]
		}
	}
	return max(s, 0)
}

// golden is the golden ratio's fraction of an interval.
var golden = (math.Sqrt(5) - 1) / 2

// minimise is a golden-section search for the minimum of f on [a, b] to
// within tol: J. Kiefer, Proc. Amer. Math. Soc. 4 (1953) 502–506.
func minimise(f func(float64) float64, a, b, tol float64) (x, fx float64) {
	c, d := b-golden*(b-a), a+golden*(b-a)
	fc, fd := f(c), f(d)
	for b-a > tol {
		if fc < fd {
			b, d, fd = d, c, fc
			c = b - golden*(b-a)
			fc = f(c)
		} else {
			a, c, fc = c, d, fd
			d = a + golden*(b-a)
			fd = f(d)
		}
	}
	if fc < fd {
		return c, fc
	}
	return d, fd
}

// curvatureSigma is the standard deviation of a parameter from the curvature
// of χ² about its minimum x: √(2/χ²″).
func curvatureSigma(f func(float64) float64, x, step float64) float64 {
	c := (f(x+step) - 2*f(x) + f(x-step)) / (step * step)
	if !(c > 0) {
		return math.Inf(1)
	}
	return math.Sqrt(2 / c)
}
