package row

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
)

const testSeed = 20260301

var plain Lanes

// wide returns the vector version, or ends the test where there is none to
// compare: the plain loops are then all that runs.
func wide(t testing.TB) Lanes {
	t.Helper()
	if !Best().wide {
		t.Skip("this processor has no AVX2: the plain loops are the only version")
	}
	return Best()
}

// maker makes rows that begin anywhere in a cache line.
type maker struct{ *rand.Rand }

func newMaker(a uint64) maker { return maker{rand.New(rand.NewPCG(testSeed, a))} }

// awkward are the values where versions could part: signed zeros, denormals,
// values around the threshold of the steps, overflow, infinities, NaN.
var awkward = []float32{0, float32(math.Copysign(0, -1)), math.SmallestNonzeroFloat32, -math.SmallestNonzeroFloat32, 1e-40, -3e-39,
	0x1p-126, testTiny, -testTiny, testTiny * 0.99999994, math.MaxFloat32, -math.MaxFloat32,
	float32(math.Inf(1)), float32(math.Inf(-1)), float32(math.NaN()), 1, -1, 0x1p-149 * 3}

const testTiny = 0x1p-60

func (m maker) row(n int, wild bool) []float32 {
	off := m.IntN(16)
	s := make([]float32, off+n)[off:]
	for j := range s {
		s[j] = float32(m.NormFloat64() * math.Exp2(float64(m.IntN(12)-6)))
		if wild && m.IntN(4) == 0 {
			s[j] = awkward[m.IntN(len(awkward))]
		}
	}
	return s
}

// same fails unless both have the same bits; a NaN need only be a NaN.
func same(t testing.TB, what string, got, want []float32) {
	t.Helper()
	if len(got) != len(want) {
		t.Fatalf("%s: %d elements, want %d", what, len(got), len(want))
	}
	for j, w := range want {
		if g := got[j]; math.Float32bits(g) != math.Float32bits(w) && !(g != g && w != w) {
			t.Fatalf("%s: element %d of %d is %g (%08x), the plain loop gives %g (%08x)", what, j, len(want), g, math.Float32bits(g), w, math.Float32bits(w))
		}
	}
}

func clone(s []float32) []float32 { return append([]float32(nil), s...) }

// lengths calls f for every row length from 0 to 200, tame and wild.
func lengths(f func(m maker, n int, wild bool, name string)) {
	for n := range 201 {
		for _, wild := range []bool{false, true} {
			f(newMaker(uint64(n)), n, wild, fmt.Sprintf("n=%d wild=%v seed=%d", n, wild, testSeed))
		}
	}
}

func TestFirSameBits(t *testing.T) {
	l := wide(t)
	lengths(func(m maker, n int, wild bool, name string) {
		for range 4 {
			taps := m.IntN(14)
			stride := m.IntN(2*n+5) - n - 2
			at := max(0, -stride*(taps-1))
			src := m.row(at+max(0, stride*(taps-1))+n, wild)
			a, dst, by := m.row(taps, wild), m.row(n, wild), m.row(n, wild)
			name := fmt.Sprintf("%s taps=%d stride=%d", name, taps, stride)
			compareFir(t, name, l, dst, a, src, at, stride, by)
		}
	})
}

func compareFir(t testing.TB, name string, l Lanes, dst, a, src []float32, at, stride int, by []float32) {
	t.Helper()
	got, want := clone(dst), clone(dst)
	l.Fir(got, a, src, at, stride)
	plain.Fir(want, a, src, at, stride)
	same(t, "Fir "+name, got, want)
	l.FirSet(got, a, src, at, stride)
	plain.FirSet(want, a, src, at, stride)
	same(t, "FirSet "+name, got, want)
	l.FirMul(got, a, src, at, stride, by)
	plain.FirMul(want, a, src, at, stride, by)
	same(t, "FirMul "+name, got, want)
	if len(a) > 0 {
		l.Add(got, a[0], by)
		plain.Add(want, a[0], by)
		same(t, "Add "+name, got, want)
	}
}

// TestFirIsTheSum compares the plain loop with the formula in its comment, so
// that both versions cannot be wrong alike.
func TestFirIsTheSum(t *testing.T) {
	m := newMaker(7)
	for _, taps := range []int{0, 1, 3, 4, 5, 9} {
		const n, stride, at = 37, -41, 41 * 8
		src, a, dst, by := m.row(at+n, false), m.row(taps, false), m.row(n, false), m.row(n, false)
		add, set, mult := clone(dst), clone(dst), clone(dst)
		plain.Fir(add, a, src, at, stride)
		plain.FirSet(set, a, src, at, stride)
		plain.FirMul(mult, a, src, at, stride, by)
		for i := range n {
			v, z := dst[i], float32(0)
			for k, w := range a {
				p := w * src[at+k*stride+i]
				v += p
				z += p
			}
			if add[i] != v || set[i] != z || mult[i] != z*by[i] {
				t.Fatalf("%d taps, element %d: %g %g %g, want %g %g %g", taps, i, add[i], set[i], mult[i], v, z, z*by[i])
			}
		}
	}
}

// TestFirWritesNoFurther looks at what lies around a row.
func TestFirWritesNoFurther(t *testing.T) {
	l := wide(t)
	for n := range 80 {
		buf := make([]float32, n+40)
		for j := range buf {
			buf[j] = 5
		}
		src := make([]float32, n)
		l.FirSet(buf[20:20+n], []float32{1}, src, 0, 0)
		for j, v := range buf {
			if inside := j >= 20 && j < 20+n; inside && v != 0 || !inside && v != 5 {
				t.Fatalf("n=%d: element %d is %g", n, j-20, v)
			}
		}
	}
}

func TestFirChecksItsReach(t *testing.T) {
	for name, f := range map[string]func(Lanes){
		"last tap too far":  func(l Lanes) { l.Fir(make([]float32, 8), make([]float32, 3), make([]float32, 27), 0, 10) },
		"first tap too far": func(l Lanes) { l.FirSet(make([]float32, 8), make([]float32, 3), make([]float32, 27), 20, -10) },
		"before the start":  func(l Lanes) { l.Fir(make([]float32, 8), make([]float32, 3), make([]float32, 60), 10, -10) },
		"factors too few": func(l Lanes) {
			l.FirMul(make([]float32, 8), make([]float32, 1), make([]float32, 8), 0, 0, make([]float32, 7))
		},
		"summand too short":  func(l Lanes) { l.Add(make([]float32, 8), 1, make([]float32, 7)) },
		"step sizes too few": func(l Lanes) { r := make([]float32, 8); l.Project(r, r, r, r[:7:7], testStep) },
		"duals too few":      func(l Lanes) { r := make([]float32, 8); l.Dual(r[:7:7], r, r, r, r, r, Ball{}, testStep) },
		"rows too few":       func(l Lanes) { r := make([]float32, 8); l.Diverge(r, r, r[:7:7], r, r, r, 0) },
	} {
		for _, l := range []Lanes{plain, Best()} {
			func() {
				defer func() {
					if recover() == nil {
						t.Errorf("%s, %s: no panic", name, l)
					}
				}()
				f(l)
			}()
		}
	}
}

var testStep = Step{Rho: 1.8, Tiny: testTiny}

func TestStepsSameBits(t *testing.T) {
	l := wide(t)
	lengths(func(m maker, n int, wild bool, name string) {
		var r [8][]float32
		for j := range r {
			r[j] = m.row(n, wild)
		}
		copies := func() (c [8][]float32) {
			for j := range c {
				c[j] = clone(r[j])
			}
			return c
		}
		got, want := copies(), copies()
		run := func(l Lanes, c [8][]float32) {
			l.Project(c[0], c[1], c[2], c[3], testStep)
			l.Diverge(c[4], c[0], c[1], c[2], c[3], c[5], .15)
			if n > 0 {
				l.Dual(c[1], c[2], c[3], c[0], c[6], c[7], Ball{Sigma: .3, Alpha: .15, Lambda: .7}, testStep)
			}
			l.Slope(c[4], c[5], c[6], c[0], c[1], c[2], c[3])
			l.Descend(c[0], c[1], c[4], c[5], c[6], c[7], c[2], testStep)
			l.Fit(Data{Dual: c[0], Now: c[1], Bar: c[2], Data: c[3], Vari: c[4], Sigma: c[5], Inv: c[6]}, 1.3, testStep)
		}
		run(l, got)
		run(plain, want)
		for j := range got {
			same(t, fmt.Sprintf("row %d %s", j, name), got[j], want[j])
		}
	})
}

// spline makes the tables of a cubic on knots h apart, as the solver does but
// with any weights; that they are B-splines does not matter here.
func testSpline(m maker, n int, h float64) *Spline {
	count := int(math.Ceil(float64(n-1)/h)) + 3
	first, w := make([]int, n), m.row(4*n, false)
	lo, wt := make([]int, count), make([][]float32, count)
	for i := range n {
		first[i] = min(int(float64(i)/h), count-4)
		for a := range 4 {
			j := first[i] + a
			if len(wt[j]) == 0 {
				lo[j] = i
			}
			wt[j] = append(wt[j], w[4*i+a])
		}
	}
	return NewSpline(4, first, w, lo, wt)
}

func TestSplineSameBits(t *testing.T) {
	l := wide(t)
	lengths(func(m maker, n int, wild bool, name string) {
		if n < 2 {
			return
		}
		for _, h := range []float64{0.5, 1, 1.5, 2, 3, 4.5} {
			s := testSpline(m, n, h)
			rows := 1 + m.IntN(20)
			name := fmt.Sprintf("%s h=%g rows=%d", name, h, rows)
			c, x := m.row(s.m, wild), m.row(rows*n, wild)
			got, want := make([]float32, n), make([]float32, n)
			l.Up(s, got, c)
			plain.Up(s, want, c)
			same(t, "Up "+name, got, want)
			got, want = make([]float32, rows*s.m), make([]float32, rows*s.m)
			work := make([]float32, s.DownWork())
			l.Down(s, got, x, work, rows)
			plain.Down(s, want, x, work, rows)
			same(t, "Down "+name, got, want)
		}
	})
}

// TestSplineIsTransposed compares ⟨B·c, x⟩ with ⟨c, Bᵀ·x⟩.
func TestSplineIsTransposed(t *testing.T) {
	m := newMaker(3)
	for _, l := range []Lanes{plain, Best()} {
		for _, n := range []int{2, 9, 64, 100} {
			s := testSpline(m, n, 1.5)
			const rows = 9
			x, down := m.row(rows*n, false), make([]float32, rows*s.m)
			l.Down(s, down, x, make([]float32, s.DownWork()), rows)
			for r := range rows {
				c, up := m.row(s.m, false), make([]float32, n)
				l.Up(s, up, c)
				var a, b, size float64
				for i, v := range up {
					a += float64(v) * float64(x[r*n+i])
					size += math.Abs(float64(v) * float64(x[r*n+i]))
				}
				for j, v := range c {
					b += float64(v) * float64(down[r*s.m+j])
				}
				// A dozen roundings of 2⁻²⁴ each in either product.
				if d := math.Abs(a - b); d > 24*0x1p-24*size {
					t.Errorf("%s n=%d row %d: %g and %g differ by %g", l, n, r, a, b, d)
				}
			}
		}
	}
}

// testSparse makes a matrix as an image turned, stretched and cut at its edges
// would, or any.
func testSparse(m maker, rows, cols int, any bool) *Sparse {
	start, col := []int32{0}, []int32(nil)
	for r := range rows {
		for t := range m.IntN(7) {
			c := r*cols/rows + t + r%13/9*20
			if any {
				c = m.IntN(cols)
			}
			if c < cols {
				col = append(col, int32(c))
			}
		}
		start = append(start, int32(len(col)))
	}
	return NewSparse(start, col, m.row(len(col), false), cols)
}

func TestSparseSameBits(t *testing.T) {
	l := wide(t)
	lengths(func(m maker, n int, any bool, name string) {
		if n == 0 {
			return
		}
		cols := 1 + m.IntN(2*n)
		s := testSparse(m, n, cols, any)
		src := m.row(cols, false)
		lo := m.IntN(n + 1)
		hi := lo + m.IntN(n-lo+1)
		got, want := m.row(n, false), make([]float32, n)
		copy(want, got)
		l.Mul(s, got, src, lo, hi)
		plain.Mul(s, want, src, lo, hi)
		same(t, fmt.Sprintf("Mul %s cols=%d rows %d to %d", name, cols, lo, hi), got, want)
		l.Mul(s, got, src, 0, n)
		plain.Mul(s, want, src, 0, n)
		same(t, "Mul whole "+name, got, want)
	})
}

// TestSparseIsTheSum compares the plain loop with a dense matrix.
func TestSparseIsTheSum(t *testing.T) {
	m := newMaker(11)
	s := testSparse(m, 30, 40, true)
	src, got := m.row(40, false), make([]float32, 30)
	plain.Mul(s, got, src, 0, 30)
	for r := range got {
		var want float32
		for j := s.start[r]; j < s.start[r+1]; j++ {
			want += s.val[j] * src[s.col[j]]
		}
		if got[r] != want {
			t.Errorf("row %d: %g, want %g", r, got[r], want)
		}
	}
}
