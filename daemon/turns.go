package daemon

import (
	"context"
	"sync"
)

// turns lets one pass at a time work on a shot. Two passes that publish at the
// same moment could each find no result of the other, and a quick look would
// then replace the full cube.
type turns struct {
	mu   sync.Mutex // guards busy
	busy map[int64]chan struct{}
}

func newTurns() *turns { return &turns{busy: map[int64]chan struct{}{}} }

// take waits until no other pass works on the shot and returns the function
// that ends the turn, or the context's error.
func (t *turns) take(ctx context.Context, shot int64) (func(), error) {
	for {
		t.mu.Lock()
		other, ok := t.busy[shot]
		if !ok {
			mine := make(chan struct{})
			t.busy[shot] = mine
			t.mu.Unlock()
			return func() {
				t.mu.Lock()
				delete(t.busy, shot)
				t.mu.Unlock()
				close(mine)
			}, nil
		}
		t.mu.Unlock()
		select {
		case <-other:
		case <-ctx.Done():
			return nil, context.Cause(ctx)
		}
	}
}
