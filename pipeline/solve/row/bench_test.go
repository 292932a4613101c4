package row

import (
	"fmt"
	"testing"
)

// BenchmarkRow reports ns per element of the loops on rows in the first-level
// cache; for Fir per element and tap.
func BenchmarkRow(b *testing.B) {
	m := newMaker(5)
	for _, n := range []int{64, 128, 256} {
		const taps = 6
		src, dst, a := m.row(taps*n, false), m.row(n, false), m.row(taps, false)
		var r [7][]float32
		for j := range r {
			r[j] = m.row(n, false)
		}
		s := testSpline(m, n, 2)
		const rows = 8
		c, x, work := m.row(rows*s.m, false), m.row(rows*n, false), make([]float32, s.DownWork())
		v := testSparse(m, n, 2*n, false)
		view, out := m.row(2*n, false), make([]float32, n)
		for _, l := range []Lanes{plain, Best()} {
			for _, f := range []struct {
				name string
				n    int
				run  func()
			}{
				{"fir", n * taps, func() { l.FirMul(dst, a, src, 0, n, r[0]) }},
				{"up", n, func() { l.Up(s, dst, c) }},
				{"down", rows * n, func() { l.Down(s, c, x, work, rows) }},
				{"project", n, func() { l.Project(r[0], r[1], r[2], r[3], testStep) }},
				{"diverge", n, func() { l.Diverge(r[0], r[1], r[2], r[3], r[4], r[5], .15) }},
				{"dual", n, func() { l.Dual(r[0], r[1], r[2], r[3], r[4], r[5], Ball{Sigma: .3, Alpha: .15, Lambda: .7}, testStep) }},
				{"fit", n, func() {
					l.Fit(Data{Dual: r[0], Now: r[1], Bar: r[2], Data: r[3], Vari: r[4], Sigma: r[5], Inv: r[6]}, 1, testStep)
				}},
				{"view", len(v.col), func() { l.Mul(v, out, view, 0, n) }},
			} {
				b.Run(fmt.Sprintf("%s/%s/%d", f.name, l, n), func(b *testing.B) {
					for range b.N {
						f.run()
					}
					b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(f.n), "ns/element")
				})
			}
		}
	}
}
