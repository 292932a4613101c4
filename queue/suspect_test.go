package queue_test

import (
	"context"
	"errors"
	"path/filepath"
	"slices"
	"sync/atomic"
	"testing"
	"time"

	"unsheard/queue"
)

// Two of six shots were running when the process died. They run before the
// others, one after the other, with nothing beside them; one of them fails, but
// does not crash again, and goes back among the others.
func TestSuspects(t *testing.T) {
	path := filepath.Join(t.TempDir(), "ledger.db")
	o := queue.Options{Path: path, Passes: []queue.Pass{queue.Full}}
	s, err := queue.Open(t.Context(), o)
	if err != nil {
		t.Fatal(err)
	}
	const n = 6
	if err := enter(t.Context(), s, n); err != nil {
		t.Fatal(err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	// What a process leaves that dies with the last two shots in hand.
	change(t, path, `
		insert into attempt (id, shot_id, pass, bundle_id, number, started_ns, host)
			select shot_id, shot_id, pass, bundle_id, 1, 1, 'dead' from work where shot_id >= 5;
		update work set state = 'running', attempt_id = shot_id where shot_id >= 5;
		update shot set state = 'running' where id >= 5;
		update river_job set state = 'running', attempt = 1 where id in (select job_id from work where shot_id >= 5)`)
	s, err = queue.Open(t.Context(), o)
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	for id := range int64(n) {
		if sh, _, err := s.Shot(t.Context(), id+1); err != nil || sh.State != queue.StatePaired {
			t.Errorf("after the crash shot %d is %s, %v, want paired", id+1, sh.State, err)
		}
	}
	ctx, cancel := context.WithCancel(t.Context())
	defer cancel()
	var inside, ordinary, left atomic.Int32
	left.Store(n)
	w := queue.WorkerFunc(func(_ context.Context, task queue.Task) (queue.Outcome, error) {
		if others := inside.Add(1) - 1; task.Suspect && others > 0 {
			t.Errorf("suspect %d runs beside %d others", task.ShotID, others)
		}
		defer inside.Add(-1)
		if !task.Suspect {
			ordinary.Add(1)
		} else {
			if ordinary.Load() > 0 {
				t.Errorf("suspect %d runs after an ordinary job", task.ShotID)
			}
			time.Sleep(300 * time.Millisecond) // time for others to show up
			if beside := inside.Load(); beside > 1 {
				t.Errorf("%d jobs run beside suspect %d", beside-1, task.ShotID)
			}
			if task.ShotID == 5 {
				return queue.Outcome{}, errors.New("too dark")
			}
		}
		if left.Add(-1) == 0 {
			cancel()
		}
		return queue.Outcome{Verdict: "good"}, nil
	})
	if err := s.Run(ctx, w, queue.RunOptions{Slots: 3, Backoff: func(int) time.Duration { return time.Second }}); err != nil {
		t.Fatal(err)
	}
	for id, want := range map[int64][]string{
		1: {queue.OutcomeDone},
		5: {queue.OutcomeCrashed, queue.OutcomeFailed, queue.OutcomeDone},
		6: {queue.OutcomeCrashed, queue.OutcomeDone},
	} {
		sh, attempts, err := s.Shot(t.Context(), id)
		var got []string
		for i, a := range attempts {
			got = append(got, a.Outcome)
			if a.Number != i+1 {
				t.Errorf("shot %d: attempt %d has number %d: a crash counts", id, i+1, a.Number)
			}
		}
		if err != nil || sh.State != queue.StateDone || !slices.Equal(got, want) {
			t.Errorf("shot %d: %s, attempts %v, %v, want done, %v", id, sh.State, got, err, want)
		}
	}
}
