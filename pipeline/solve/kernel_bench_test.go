package solve

import (
	"fmt"
	"math"
	"sync"
	"testing"
	"time"

	"unsheard/pipeline/solve/row"
)

// BenchmarkSieve reports ns per voxel and iteration of the loop over spline
// coefficients, in one run with what the machine does at best with 32 bytes
// per voxel: copying 16, and updating 16 in place, on as many cores. Times are
// the shortest of the run, since other work on the machine only ever adds;
// ratio is that of the iteration to the update.
func BenchmarkSieve(b *testing.B) {
	for _, shape := range [][3]int{{32, 64, 64}, {64, 128, 128}, {128, 256, 256}} {
		for _, spacing := range [][3]float64{{1.5, 2, 2}, {2, 3, 3}} {
			p := benchProblem(b, shape[0], shape[1], shape[2])
			for _, workers := range []int{1, 2} {
				b.Run(fmt.Sprintf("%dx%dx%d/%v/workers=%d", shape[1], shape[2], shape[0], spacing, workers), func(b *testing.B) {
					benchSieve(b, p, spacing, workers)
				})
			}
		}
	}
}

func benchSieve(b *testing.B, p Problem, spacing [3]float64, workers int) {
	c := newCore(p.Model, workers)
	c.s.set(p.Streak, p.StreakVar)
	c.r.set(p.Reference, p.ReferenceVar)
	s := c.sieve(spacing)
	s.begin(nil)
	sigma := typicalSigma(&c.s, &c.r)
	s.steps(c.gamma(sigma), sigma, .1/sigma, .15)
	n := c.t * c.h * c.w
	data, other := make([]float32, 4*n), make([]float32, 4*n)
	best := [3]float64{math.Inf(1), math.Inf(1), math.Inf(1)}
	for range 3 {
		s.iterate(false)
	}
	b.ReportAllocs()
	b.ResetTimer()
	for range b.N {
		for j, f := range []func(){
			func() { s.iterate(false) },
			func() {
				split(workers, data, func(lo, hi int) {
					for ; lo < hi; lo += 1 << 12 {
						part := data[lo:min(lo+1<<12, hi)]
						row.Best().Add(part, 0x1p-20, part)
					}
				})
			},
			func() { split(workers, data, func(lo, hi int) { copy(other[lo:hi], data[lo:hi]) }) },
		} {
			from := time.Now()
			f()
			best[j] = min(best[j], float64(time.Since(from).Nanoseconds())/float64(n))
		}
	}
	b.ReportMetric(best[0], "ns/voxel")
	b.ReportMetric(best[1], "update-ns/voxel")
	b.ReportMetric(best[2], "copy-ns/voxel")
	b.ReportMetric(best[0]/best[1], "ratio")
}

// split calls f for equal parts of s, at once.
func split(workers int, s []float32, f func(lo, hi int)) {
	var wg sync.WaitGroup
	for j := range workers {
		wg.Go(func() { f(len(s)*j/workers, len(s)*(j+1)/workers) })
	}
	wg.Wait()
}
