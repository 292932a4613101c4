package queuetest

import (
	"context"
	"slices"
	"sync/atomic"
	"testing"
	"time"

	"unsheard/queue"
)

func (b *bench) retry(bundle string, ids ...int64) queue.Report {
	b.Helper()
	rep, err := b.Retry(b.ctx, ids, bundle)
	if err != nil {
		b.Fatalf("retry: %v", err)
	}
	return rep
}

func redoSame(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{})
	id := b.shots(1, 2, "b1")[0]
	w := &worker{}
	b.run(w, quickly())
	for n := 1; n <= 3; n++ {
		b.untilState(queue.StateDone, id)
		b.until("both passes", func() bool { return len(w.of(queue.Quick)) == n && len(w.of(queue.Full)) == n })
		b.until("the end of both", func() bool {
			return len(b.outcomes(id, queue.Quick)) == n && !slices.Contains(b.outcomes(id, queue.Quick), "")
		})
		if n < 3 {
			if rep := b.retry("b1", id); len(rep.Shots) != 1 {
				t.Fatalf("redo: got %+v, want one shot", rep)
			}
		}
	}
	lone := b.add(frame(queue.Streak, 5))[0]
	b.commit(queue.Decision{Waiting: []int64{lone}}, "")
	waiting, err := b.Shots(b.ctx, queue.Filter{States: []queue.State{queue.StateWaiting}})
	if err != nil || len(waiting) != 1 {
		t.Fatal(waiting, err)
	}
	if rep := b.retry("b1", waiting[0].ID); len(rep.Refused) != 1 {
		t.Errorf("redo of half a shot: got %+v, want it refused", rep)
	}
}

func redoOther(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{})
	ids := b.shots(1, 4, "b1")
	w := &worker{}
	stop := b.run(w, quickly())
	b.untilState(queue.StateDone, ids...)
	stop()
	b.retry("b2", ids...)
	for _, id := range ids {
		sh := b.wantState(id, queue.StatePaired)
		if sh.Verdict != "good" || sh.ShownBundle != "b1" || sh.BundleID != "b2" {
			t.Errorf("queued again: got %+v, want the old result to stay", sh)
		}
	}
	b.retry("b3", ids...) // before b2 was begun: b2 is not wanted any more
	w2 := &worker{}
	b.run(w2, quickly())
	b.untilState(queue.StateDone, ids...)
	for _, task := range w2.seen() {
		if task.Bundle != "b3" {
			t.Errorf("worked under %q, want b3 only", task.Bundle)
		}
	}
	for _, id := range ids {
		if sh, _ := b.shot(id); sh.ShownBundle != "b3" {
			t.Errorf("result of bundle %q is shown, want b3", sh.ShownBundle)
		}
	}
}

func redoRunning(t *testing.T, l Ledger) {
	b := open(t, l, onlyFull())
	id := b.shots(1, 2, "b1")[0]
	begun := make(chan queue.Task, 10)
	var returned atomic.Bool
	w := &worker{act: func(ctx context.Context, task queue.Task) (queue.Outcome, error) {
		begun <- task
		if task.Bundle == "b1" {
			<-ctx.Done() // and slow and deaf to it: it claims success
			time.Sleep(500 * time.Millisecond)
			returned.Store(true)
		} else if !returned.Load() {
			t.Error("two attempts at one pass of one shot run at once")
		}
		return good(task), nil
	}}
	b.run(w, quickly())
	<-begun
	if rep := b.retry("b1", id); len(rep.Refused) != 1 {
		t.Errorf("redo while running under the same bundle: got %+v, want it refused", rep)
	}
	if rep := b.retry("b2", id); len(rep.Shots) != 1 {
		t.Errorf("redo while running under another bundle: got %+v", rep)
	}
	b.untilState(queue.StateDone, id)
	if sh, _ := b.shot(id); sh.ShownBundle != "b2" {
		t.Errorf("result of bundle %q is shown, want b2", sh.ShownBundle)
	}
	if got, want := b.outcomes(id, queue.Full), []string{queue.OutcomeSuperseded, queue.OutcomeDone}; !slices.Equal(got, want) {
		t.Errorf("outcomes: got %v, want %v", got, want)
	}
}

func redoReplaced(t *testing.T, l Ledger) {
	b := open(t, l, onlyFull())
	id := b.shots(1, 2, "b1")[0]
	b.run(&worker{}, quickly())
	b.untilState(queue.StateDone, id)
	f := frame(queue.Reference, 1)
	f.Size += 5
	b.add(f)
	if sh := b.wantState(id, queue.StateDone); !sh.Replaced {
		t.Error("the shot is not marked as made from a file that changed")
	}
	b.retry("b1", id)
	b.untilState(queue.StateDone, id)
	if sh, _ := b.shot(id); sh.Replaced {
		t.Error("the mark stays after a redo")
	}
	if fs, err := b.Frames(b.ctx, "bay", queue.FrameReplaced, 10); err != nil || len(fs) != 0 {
		t.Errorf("replaced frames: got %v, %v, want none", fs, err)
	}
}

func quarantineRunning(t *testing.T, l Ledger) {
	b := open(t, l, onlyFull())
	ids := b.shots(1, 3, "b1")
	w, begun, release := started()
	o := quickly()
	o.Slots = 1
	b.run(w, o)
	<-begun
	rep, err := b.Quarantine(b.ctx, append(ids, 999), "eats all memory")
	if err != nil || len(rep.Shots) != 2 || len(rep.Refused) != 1 {
		t.Fatalf("quarantine: got %+v, %v, want the running and the queued shot", rep, err)
	}
	b.until("the attempt's end", func() bool {
		return slices.Equal(b.outcomes(ids[0], queue.Full), []string{queue.OutcomeSuperseded})
	})
	for _, id := range ids {
		if sh := b.wantState(id, queue.StateQuarantined); sh.Reason != "eats all memory" {
			t.Errorf("reason: got %q", sh.Reason)
		}
	}
	close(release)
	other := b.shots(5, 6, "b1")[0] // comes after the two, had they been left in the queue
	b.untilState(queue.StateDone, other)
	for _, id := range ids {
		b.wantState(id, queue.StateQuarantined)
	}
	if rep, err := b.Release(b.ctx, ids); err != nil || len(rep.Shots) != 2 {
		t.Fatalf("release: got %+v, %v", rep, err)
	}
	b.untilState(queue.StateDone, ids...)
	if rep, err := b.Quarantine(b.ctx, ids[:1], "too late"); err != nil || len(rep.Refused) != 1 {
		t.Errorf("quarantine of a done shot: got %+v, %v, want it refused", rep, err)
	}
}

func partRunning(t *testing.T, l Ledger) {
	b := open(t, l, onlyFull())
	id := b.shots(1, 2, "b1")[0]
	w, begun, _ := started()
	b.run(w, quickly())
	<-begun
	if rep, err := b.Part(b.ctx, []int64{id}, "wrong partner"); err != nil || len(rep.Shots) != 1 {
		t.Fatalf("part: %+v, %v", rep, err)
	}
	b.until("the attempt's end", func() bool {
		return slices.Equal(b.outcomes(id, queue.Full), []string{queue.OutcomeSuperseded})
	})
	b.wantState(id, queue.StateHeld)
}
