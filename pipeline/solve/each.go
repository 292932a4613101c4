package solve

import (
	"sync"
	"sync/atomic"
)

// each calls f(0) … f(n−1) on up to e.workers goroutines and returns when all
// have returned.
func (e *core) each(n int, f func(int)) {
	if e.workers <= 1 || n <= 1 {
		for j := range n {
			f(j)
		}
		return
	}
	var next atomic.Int64
	work := func() {
		for j := int(next.Add(1)) - 1; j < n; j = int(next.Add(1)) - 1 {
			f(j)
		}
	}
	var wg sync.WaitGroup
	for range min(e.workers, n) - 1 {
		wg.Go(work)
	}
	work()
	wg.Wait()
}
