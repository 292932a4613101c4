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
// coefficients, with plain and with vector loops, on one core and on two, in
// one run with what the machine does at best with 32 bytes per voxel: updating
// 16 in place, and copying 16. Times are the shortest of the run, since other
// work on the machine only ever adds; ratio is that of the iteration to the
// update on one core, speedup that of one core to two.
func BenchmarkSieve(b *testing.B) {
	for _, shape := range [][3]int{{32, 64, 64}, {64, 128, 128}, {128, 256, 256}} {
		p := benchProblem(b, shape[0], shape[1], shape[2])
		for _, spacing := range [][3]float64{{1.5, 2, 2}, {2, 3, 3}} {
			for _, scalar := range []bool{true, false} {
				p := scalarly(b, p, scalar)
				g := p.Model.Geometry()
				b.Run(fmt.Sprintf("%dx%dx%d/%v/%s", shape[1], shape[2], shape[0], spacing, g.Lanes()), func(b *testing.B) {
					benchSieve(b, p, spacing)
				})
			}
		}
	}
}

func benchSieve(b *testing.B, p Problem, spacing [3]float64) {
	one, two := preparedSieve(p, 1, spacing, .1), preparedSieve(p, 2, spacing, .1)
	n := one.t * one.h * one.w
	data, other := make([]float32, 4*n), make([]float32, 4*n)
	update := func(lo, hi int) {
		for ; lo < hi; lo += 1 << 12 {
			part := data[lo:min(lo+1<<12, hi)]
			row.Best().Add(part, 0x1p-20, part)
		}
	}
	for range 3 {
		one.iterate(false)
		two.iterate(false)
	}
	runs := []struct {
		unit string
		f    func()
		best float64
	}{
		{unit: "ns/voxel", f: func() { one.iterate(false) }},
		{unit: "2-cores-ns/voxel", f: func() { two.iterate(false) }},
		{unit: "update-ns/voxel", f: func() { split(1, data, update) }},
		{unit: "2-cores-update-ns/voxel", f: func() { split(2, data, update) }},
		{unit: "copy-ns/voxel", f: func() { copy(other, data) }},
	}
	b.ResetTimer()
	for j := range runs {
		runs[j].best = math.Inf(1)
	}
	for range b.N {
		for j := range runs {
			from := time.Now()
			runs[j].f()
			runs[j].best = min(runs[j].best, float64(time.Since(from).Nanoseconds())/float64(n))
		}
	}
	for _, r := range runs {
		b.ReportMetric(r.best, r.unit)
	}
	b.ReportMetric(runs[0].best/runs[2].best, "ratio")
	b.ReportMetric(runs[0].best/runs[1].best, "speedup")
}

// split calls f for equal parts of s, at once.
func split(workers int, s []float32, f func(lo, hi int)) {
	var wg sync.WaitGroup
	for j := range workers {
		wg.Go(func() { f(len(s)*j/workers, len(s)*(j+1)/workers) })
	}
	wg.Wait()
}
