package daemon

import (
	"context"
	"fmt"

	"golang.org/x/sync/semaphore"
)

// budget shares out memory between jobs.
type budget struct {
	total int64
	sem   *semaphore.Weighted
}

func newBudget(total int64) *budget { return &budget{total, semaphore.NewWeighted(total)} }

// take waits until need bytes are free and returns the function that gives
// them back. A need beyond the whole budget is cut to it: that job runs alone.
func (b *budget) take(ctx context.Context, need int64) (func(), error) {
	n := max(1, min(need, b.total))
	if err := b.sem.Acquire(ctx, n); err != nil {
		return nil, fmt.Errorf("wait for memory: %w", err)
	}
	return func() { b.sem.Release(n) }, nil
}
