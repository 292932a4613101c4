package queue

import (
	"context"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"

	"go.uber.org/zap"
	"go.uber.org/zap/zaptest/observer"
)

// A ledger that cannot grow while an attempt ends keeps the result until it
// can: the job is neither lost nor done again.
func TestLedgerFullWhenWorkEnds(t *testing.T) {
	core, logs := observer.New(zap.ErrorLevel)
	s, err := Open(t.Context(), Options{Path: filepath.Join(t.TempDir(), "ledger.db"), Passes: []Pass{Full}, Logger: zap.New(core)})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	id := onePair(t, s)
	ctx, cancel := context.WithCancel(t.Context())
	defer cancel()
	calls := 0
	w := WorkerFunc(func(context.Context, Task) (Outcome, error) {
		calls++
		limitPages(t, s, 0)
		long := `"` + strings.Repeat("x", 1<<20) + `"` // needs new pages
		return Outcome{Verdict: "good", Summary: []byte(long)}, nil
	})
	done := make(chan error, 1)
	go func() { done <- s.Run(ctx, w, RunOptions{SoftStop: -1}) }()
	wait(t, "the fault to be logged", func() bool {
		return logs.FilterMessageSnippet("cannot write the ledger").Len() > 1
	})
	if sh, _, err := s.Shot(ctx, id); err != nil || sh.State != StateRunning {
		t.Errorf("while the ledger is full the shot is %s, %v, want running", sh.State, err)
	}
	limitPages(t, s, 1<<30)
	wait(t, "the shot to be done", func() bool {
		sh, _, err := s.Shot(ctx, id)
		return err == nil && sh.State == StateDone
	})
	cancel()
	if err := <-done; err != nil {
		t.Error(err)
	}
	if calls != 1 {
		t.Errorf("the shot was worked %d times, want 1", calls)
	}
}

// limitPages makes SQLite answer "database or disk is full" beyond n pages.
func limitPages(t *testing.T, s *Store, n int) {
	t.Helper()
	if n == 0 {
		if err := s.db.QueryRow("pragma page_count").Scan(&n); err != nil {
			t.Error(err)
		}
	}
	if _, err := s.db.Exec("pragma max_page_count = " + strconv.Itoa(n)); err != nil {
		t.Error(err)
	}
}

func onePair(t *testing.T, s *Store) (shot int64) {
	t.Helper()
	added, err := s.AddFrames(t.Context(), []Frame{
		{Station: "bay", Arm: Streak, Path: "s.tif"}, {Station: "bay", Arm: Reference, Path: "r.tif"}})
	if err != nil {
		t.Fatal(err)
	}
	rep, err := s.Commit(t.Context(), Decision{Pairs: []Pair{{Streak: added[0].ID, Reference: added[1].ID}}}, "b1")
	if err != nil || len(rep.Shots) != 1 {
		t.Fatal(rep, err)
	}
	return rep.Shots[0]
}

func wait(t *testing.T, what string, cond func() bool) {
	t.Helper()
	for limit := time.Now().Add(time.Minute); !cond(); time.Sleep(10 * time.Millisecond) {
		if time.Now().After(limit) {
			t.Fatalf("waited in vain for %s", what)
		}
	}
}

// An attempt whose job was given to another attempt meanwhile finds the fence
// closed: nothing of its result is used.
func TestFence(t *testing.T) {
	s, err := Open(t.Context(), Options{Path: filepath.Join(t.TempDir(), "ledger.db"), Passes: []Pass{Full}})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	id := onePair(t, s)
	ctx, cancel := context.WithCancel(t.Context())
	defer cancel()
	w := WorkerFunc(func(_ context.Context, task Task) (Outcome, error) {
		if task.Attempt == 1 {
			// What another host that took the job over would have written.
			if _, err := s.db.Exec("update work set attempt_id = attempt_id + 1000, tries = 1 where shot_id = ?", id); err != nil {
				t.Error(err)
			}
			return Outcome{Verdict: "stale"}, nil
		}
		return Outcome{Verdict: "good"}, nil
	})
	done := make(chan error, 1)
	go func() { done <- s.Run(ctx, w, RunOptions{SoftStop: -1}) }()
	wait(t, "the end of the attempt", func() bool {
		_, a, err := s.Shot(ctx, id)
		return err == nil && len(a) == 1 && a[0].Outcome == OutcomeDropped
	})
	sh, _, err := s.Shot(ctx, id)
	if err != nil || sh.Verdict != "" || sh.State != StateRunning {
		t.Errorf("got %+v, %v, want no verdict and the shot left to the other attempt", sh, err)
	}
	cancel()
	if err := <-done; err != nil {
		t.Error(err)
	}
}

func TestBackoff(t *testing.T) {
	for i, want := range []time.Duration{2 * time.Second, 2 * time.Second, 8 * time.Second, 30 * time.Second, 2 * time.Minute, 2 * time.Minute} {
		if got := backoff(i); got != want {
			t.Errorf("backoff(%d) = %v, want %v", i, got, want)
		}
	}
}
