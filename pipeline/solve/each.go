package solve

import (
	"sync"
	"sync/atomic"
)

// each calls f(0) … f(n−1) on up to e.workers goroutines and returns when all
// have returned.
func (e *core) each(n int, f func(int)) {
	e.eachBy(n, func(_, j int) { f(j) })
}

// eachBy is each where f also learns which worker, 0 ≤ worker < max(1,
// e.workers), calls it; a worker makes one call at a time.
func (e *core) eachBy(n int, f func(worker, j int)) {
	if e.workers <= 1 || n <= 1 {
		for j := range n {
			f(0, j)
		}
		return
	}
	var next atomic.Int64
	work := func(worker int) {
		for j := int(next.Add(1)) - 1; j < n; j = int(next.Add(1)) - 1 {
			f(worker, j)
		}
	}
	var wg sync.WaitGroup
	for worker := range min(e.workers, n) - 1 {
		wg.Go(func() { work(worker + 1) })
	}
	work(0)
	wg.Wait()
}
