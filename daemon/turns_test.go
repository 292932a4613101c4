package daemon

import (
	"context"
	"errors"
	"sync"
	"sync/atomic"
	"testing"
	"testing/synctest"
	"time"
)

// TestTurns has many passes over few shots: never two on one shot, and all get
// their turn.
func TestTurns(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		turns := newTurns()
		var on [3]atomic.Int32
		var wg sync.WaitGroup
		var done atomic.Int32
		for j := range 60 {
			wg.Go(func() {
				shot := int64(j % 3)
				end, err := turns.take(t.Context(), shot)
				if err != nil {
					t.Error(err)
					return
				}
				if on[shot].Add(1) != 1 {
					t.Errorf("two passes on shot %d", shot)
				}
				time.Sleep(time.Duration(j%7+1) * time.Millisecond)
				on[shot].Add(-1)
				done.Add(1)
				end()
			})
		}
		wg.Wait()
		if done.Load() != 60 || len(turns.busy) != 0 {
			t.Errorf("%d turns, %d still taken; want 60 and none", done.Load(), len(turns.busy))
		}
	})
}

func TestTurnsStop(t *testing.T) {
	turns := newTurns()
	end, err := turns.take(t.Context(), 7)
	if err != nil {
		t.Fatal(err)
	}
	defer end()
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	if _, err := turns.take(ctx, 7); !errors.Is(err, context.Canceled) {
		t.Errorf("waiting for a turn after the end: %v", err)
	}
}

// TestBudget checks that memory is never promised twice and that a need beyond
// the whole runs alone.
func TestBudget(t *testing.T) {
	b := newBudget(100)
	release, err := b.take(t.Context(), 1000)
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithTimeout(t.Context(), 20*time.Millisecond)
	defer cancel()
	if _, err := b.take(ctx, 1); err == nil {
		t.Error("memory was given beside a job that takes all of it")
	}
	release()
	if _, err := b.take(t.Context(), 100); err != nil {
		t.Error(err)
	}
}
