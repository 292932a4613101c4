package queuetest

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"time"

	"unsheard/queue"
)

func work(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{Host: "bench"})
	ids := b.shots(1, 9, "b1")
	w := &worker{}
	b.run(w, quickly())
	b.untilState(queue.StateDone, ids...)
	b.until("all quick looks", func() bool { return len(w.of(queue.Quick)) == len(ids) })
	for _, id := range ids {
		sh := b.wantState(id, queue.StateDone)
		if sh.Verdict != "good" || string(sh.Summary) != `{"pass":"full","bundle":"b1"}` || sh.ResultDir != sh.Name+".shot" ||
			sh.ShownPass != queue.Full || sh.ShownBundle != "b1" || sh.Finished.IsZero() || sh.Reason != "" {
			t.Errorf("shot came back as %+v", sh)
		}
		if got := b.outcomes(id, queue.Full); !slices.Equal(got, []string{queue.OutcomeDone}) {
			t.Errorf("attempts of shot %d: got %v, want one, done", id, got)
		}
	}
	task := w.of(queue.Full)[0]
	sh, attempts := b.shot(task.ShotID)
	if task.Station != "bay" || task.Name != sh.Name || task.StreakPath != sh.StreakPath || task.ReferencePath != sh.ReferencePath ||
		task.Bundle != "b1" || task.Attempt != 1 || task.Suspect {
		t.Errorf("task was %+v", task)
	}
	for _, a := range attempts {
		if a.Number != 1 || a.Bundle != "b1" || a.Host != "bench" || a.Started.IsZero() || a.Ended.Before(a.Started) || a.Error != "" {
			t.Errorf("attempt came back as %+v", a)
		}
		if a.Pass == queue.Full && a.ID != task.AttemptID {
			t.Errorf("attempt %d, the task said %d", a.ID, task.AttemptID)
		}
	}
	depth, err := b.QueueDepth(b.ctx)
	if err != nil || depth[queue.Full] != (queue.Depth{}) {
		t.Errorf("depth: got %v, %v, want nothing", depth, err)
	}
}

func quickOnly(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{Passes: []queue.Pass{queue.Quick}})
	id := b.shots(1, 2, "b1")[0]
	b.run(&worker{}, quickly())
	b.untilState(queue.StateDone, id)
	if sh, _ := b.shot(id); sh.ShownPass != queue.Quick || sh.Finished.IsZero() {
		t.Errorf("shot came back as %+v", sh)
	}
}

func spreadFollows(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{Passes: []queue.Pass{queue.Full, queue.Spread}})
	id := b.shots(1, 2, "b1")[0]
	var during queue.State
	w := &worker{act: func(ctx context.Context, t queue.Task) (queue.Outcome, error) {
		if t.Pass == queue.Full {
			return good(t), nil
		}
		sh, _, err := b.Shot(ctx, t.ShotID)
		during = sh.State
		return queue.Outcome{Summary: []byte(`{"sigma":1}`)}, err
	}}
	stop := b.run(w, quickly())
	b.until("the spread pass", func() bool { return slices.Equal(b.outcomes(id, queue.Spread), []string{queue.OutcomeDone}) })
	stop()
	sh := b.wantState(id, queue.StateDone)
	if during != queue.StateDone {
		t.Errorf("while the spread pass ran the shot was %s, want done", during)
	}
	if sh.Verdict != "good" || string(sh.Summary) != `{"sigma":1}` || sh.ResultDir == "" || sh.ShownPass != queue.Spread {
		t.Errorf("got %+v, want full's verdict with spread's summary", sh)
	}
}

// priority: with one slot, no spread pass starts while a full one waits, not
// even one that was queued later; and quick looks do not wait for full passes
// at all.
func priority(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{Passes: []queue.Pass{queue.Quick, queue.Full, queue.Spread}})
	b.shots(1, 3, "b1")
	quick, second, more := make(chan struct{}), make(chan struct{}), make(chan struct{})
	var quicks, fulls atomic.Int32
	w := &worker{act: func(ctx context.Context, t queue.Task) (queue.Outcome, error) {
		var until chan struct{}
		switch {
		case t.Pass == queue.Quick && quicks.Add(1) == 2:
			close(quick)
		case t.Pass == queue.Full && fulls.Add(1) == 1:
			until = quick
		case t.Pass == queue.Full && fulls.Load() == 2: // the first shot's spread pass is queued
			close(second)
			until = more
		}
		if until != nil {
			select {
			case <-until:
			case <-ctx.Done():
				return queue.Outcome{}, ctx.Err()
			}
		}
		return good(t), nil
	}}
	o := quickly()
	o.Slots, o.QuickSlots = 1, 1
	b.run(w, o)
	<-second
	b.shots(3, 5, "b1")
	b.until("quick looks beside a full pass", func() bool { return len(w.of(queue.Quick)) == 4 })
	close(more)
	b.until("all spread passes", func() bool { return len(w.of(queue.Spread)) == 4 })
	var order []queue.Pass
	for _, task := range w.seen() {
		if task.Pass != queue.Quick {
			order = append(order, task.Pass)
		}
	}
	want := slices.Concat(slices.Repeat([]queue.Pass{queue.Full}, 4), slices.Repeat([]queue.Pass{queue.Spread}, 4))
	if !slices.Equal(order, want) {
		t.Errorf("order: got %v, want %v", order, want)
	}
}

func failOnce(t *testing.T, l Ledger) {
	b := open(t, l, onlyFull())
	id := b.shots(1, 2, "b1")[0]
	w := &worker{act: func(_ context.Context, t queue.Task) (queue.Outcome, error) {
		if t.Attempt == 1 {
			return queue.Outcome{}, errTest
		}
		return good(t), nil
	}}
	b.run(w, quickly())
	b.untilState(queue.StateDone, id)
	sh, attempts := b.shot(id)
	if len(attempts) != 2 || attempts[0].Outcome != queue.OutcomeFailed || attempts[0].Error != errTest.Error() ||
		attempts[1].Number != 2 || attempts[1].Outcome != queue.OutcomeDone || sh.Reason != "" {
		t.Errorf("got %+v with attempts %+v", sh, attempts)
	}
}

// longPause: a pause beyond River's own interval of five seconds goes another
// way inside River.
func longPause(t *testing.T, l Ledger) {
	if testing.Short() {
		t.Skip("it waits for a pause of six seconds")
	}
	b := open(t, l, onlyFull())
	id := b.shots(1, 2, "b1")[0]
	w := &worker{act: func(_ context.Context, t queue.Task) (queue.Outcome, error) {
		switch t.Attempt {
		case 1:
			return queue.Outcome{}, errTest
		default:
			return good(t), nil
		}
	}}
	o := quickly()
	o.Backoff = func(int) time.Duration { return 6 * time.Second }
	b.run(w, o)
	b.untilState(queue.StateFailed, id)
	if sh, _ := b.shot(id); sh.Reason != errTest.Error() {
		t.Errorf("reason: got %q, want %q", sh.Reason, errTest)
	}
	b.untilState(queue.StateDone, id)
}

func giveUp(t *testing.T, l Ledger) {
	o := onlyFull()
	o.MaxAttempts = 3
	b := open(t, l, o)
	id := b.shots(1, 2, "b1")[0]
	var mended atomic.Bool
	w := &worker{act: func(_ context.Context, t queue.Task) (queue.Outcome, error) {
		if mended.Load() {
			return good(t), nil
		}
		return queue.Outcome{}, errTest
	}}
	b.run(w, quickly())
	b.untilState(queue.StateQuarantined, id)
	sh, _ := b.shot(id)
	if !strings.Contains(sh.Reason, errTest.Error()) || !strings.Contains(sh.Reason, "3 attempts") {
		t.Errorf("reason: got %q, want the number of attempts and %q", sh.Reason, errTest)
	}
	want := []string{queue.OutcomeFailed, queue.OutcomeFailed, queue.OutcomeGivenUp}
	if got := b.outcomes(id, queue.Full); !slices.Equal(got, want) {
		t.Errorf("outcomes: got %v, want %v", got, want)
	}
	mended.Store(true)
	rep, err := b.Release(b.ctx, []int64{id, 999})
	if err != nil || len(rep.Shots) != 1 || len(rep.Refused) != 1 {
		t.Fatalf("release: got %+v, %v, want one shot, and the unknown one refused", rep, err)
	}
	b.untilState(queue.StateDone, id)
	if _, attempts := b.shot(id); attempts[3].Number != 1 {
		t.Errorf("after release the attempt's number is %d, want 1", attempts[3].Number)
	}
	if rep, err := b.Release(b.ctx, []int64{id}); err != nil || len(rep.Refused) != 1 {
		t.Errorf("release of a done shot: got %+v, %v, want it refused", rep, err)
	}
}

func permanent(t *testing.T, l Ledger) {
	b := open(t, l, onlyFull())
	id := b.shots(1, 2, "b1")[0]
	w := &worker{act: func(context.Context, queue.Task) (queue.Outcome, error) {
		return queue.Outcome{}, fmt.Errorf("read streak frame: %w", queue.Permanent(errTest))
	}}
	stop := b.run(w, quickly())
	b.untilState(queue.StateQuarantined, id)
	stop()
	if got := b.outcomes(id, queue.Full); !slices.Equal(got, []string{queue.OutcomeGivenUp}) {
		t.Errorf("outcomes: got %v, want one, given up", got)
	}
	odd := b.shots(2, 3, "b1")[0]
	w.act = func(context.Context, queue.Task) (queue.Outcome, error) {
		return queue.Outcome{Verdict: "good", Summary: []byte("{")}, nil
	}
	b.run(w, quickly())
	b.untilState(queue.StateQuarantined, odd)
	if queue.Permanent(nil) != nil || queue.Later(nil, time.Second) != nil {
		t.Error("no error became one")
	}
	if !errors.Is(queue.Permanent(errTest), errTest) || !errors.Is(queue.Later(errTest, 0), errTest) {
		t.Error("the cause is lost")
	}
}

func later(t *testing.T, l Ledger) {
	o := onlyFull()
	o.MaxAttempts = 2
	b := open(t, l, o)
	id := b.shots(1, 2, "b1")[0]
	var full atomic.Int32
	paused := make(chan queue.Shot, 10)
	w := &worker{act: func(_ context.Context, t queue.Task) (queue.Outcome, error) {
		if full.Add(1) <= 5 {
			return queue.Outcome{}, queue.Later(errors.New("disk full"), 20*time.Millisecond)
		}
		return good(t), nil
	}}
	changes, stop := b.Changes()
	defer stop()
	b.run(w, quickly())
	go func() {
		for range changes {
			if sh, _, err := b.Shot(b.ctx, id); err != nil || sh.State == queue.StateDone {
				return
			} else if sh.Reason != "" {
				select {
				case paused <- sh:
				default:
				}
			}
		}
	}()
	b.untilState(queue.StateDone, id)
	// Of pauses in a row the ledger keeps the last.
	want := []string{queue.OutcomeLater, queue.OutcomeDone}
	if got := b.outcomes(id, queue.Full); !slices.Equal(got, want) {
		t.Errorf("outcomes: got %v, want %v", got, want)
	}
	for _, task := range w.seen() {
		if task.Attempt != 1 {
			t.Errorf("a pause was counted: attempt %d", task.Attempt)
		}
	}
	select {
	case sh := <-paused:
		if sh.State != queue.StatePaired || sh.Reason != "disk full" {
			t.Errorf("while it paused the shot was %s (%s), want paired (disk full)", sh.State, sh.Reason)
		}
	default:
		t.Error("the shot was never seen pausing")
	}
}

func panics(t *testing.T, l Ledger) {
	b := open(t, l, onlyFull())
	ids := b.shots(1, 4, "b1")
	w := &worker{act: func(_ context.Context, t queue.Task) (queue.Outcome, error) {
		if t.ShotID == ids[1] {
			panic("index out of range")
		}
		return good(t), nil
	}}
	b.run(w, quickly())
	b.untilState(queue.StateDone, ids[0], ids[2])
	b.untilState(queue.StateQuarantined, ids[1])
	sh, attempts := b.shot(ids[1])
	if len(attempts) != 4 || !strings.Contains(attempts[0].Error, "goroutine") || !strings.HasSuffix(sh.Reason, "panic: index out of range") {
		t.Errorf("reason %q, %d attempts, first error %q: want the panic, 4 attempts, a stack", sh.Reason, len(attempts), attempts[0].Error)
	}
}

func timeout(t *testing.T, l Ledger) {
	o := onlyFull()
	o.MaxAttempts = 1
	b := open(t, l, o)
	id := b.shots(1, 2, "b1")[0]
	w := &worker{act: func(ctx context.Context, _ queue.Task) (queue.Outcome, error) {
		<-ctx.Done()
		return queue.Outcome{}, ctx.Err()
	}}
	ro := quickly()
	ro.Timeout = 20 * time.Millisecond
	b.run(w, ro)
	b.untilState(queue.StateQuarantined, id)
	if sh, _ := b.shot(id); !strings.Contains(sh.Reason, "it took longer than 20ms") {
		t.Errorf("reason: got %q", sh.Reason)
	}
}

// started is a worker that says when it starts and waits to be let go.
func started() (w *worker, begun chan queue.Task, release chan struct{}) {
	begun, release = make(chan queue.Task, 100), make(chan struct{})
	return &worker{act: func(ctx context.Context, t queue.Task) (queue.Outcome, error) {
		begun <- t
		select {
		case <-ctx.Done():
			return queue.Outcome{}, fmt.Errorf("child process: signal: killed")
		case <-release:
			return good(t), nil
		}
	}}, begun, release
}

func softStop(t *testing.T, l Ledger) {
	b := open(t, l, onlyFull())
	ids := b.shots(1, 4, "b1")
	w, begun, release := started()
	o := quickly()
	o.Slots, o.SoftStop = 1, patience
	stop := b.run(w, o)
	<-begun
	var wg sync.WaitGroup
	wg.Go(stop)
	time.AfterFunc(200*time.Millisecond, func() { close(release) })
	wg.Wait()
	b.wantState(ids[0], queue.StateDone)
	for _, id := range ids[1:] {
		b.wantState(id, queue.StatePaired)
	}
	if n := len(w.seen()); n != 1 {
		t.Errorf("%d shots were started, want 1: a stopping service takes up nothing", n)
	}
}

func hardStop(t *testing.T, l Ledger) {
	o := onlyFull()
	o.MaxAttempts = 1 // so that an interruption that counted would quarantine
	b := open(t, l, o)
	id := b.shots(1, 2, "b1")[0]
	for range 3 {
		w, begun, _ := started()
		stop := b.run(w, quickly())
		<-begun
		b.wantState(id, queue.StateRunning)
		stop()
		sh := b.wantState(id, queue.StatePaired)
		if !strings.Contains(sh.Reason, "interrupted") {
			t.Errorf("reason: got %q, want that it was interrupted", sh.Reason)
		}
	}
	w := &worker{}
	b.run(w, quickly())
	b.untilState(queue.StateDone, id)
	if task := w.seen()[0]; task.Attempt != 1 || task.Suspect {
		t.Errorf("after three interruptions: %+v, want attempt 1, no suspect", task)
	}
	want := append(slices.Repeat([]string{queue.OutcomeInterrupted}, 3), queue.OutcomeDone)
	if got := b.outcomes(id, queue.Full); !slices.Equal(got, want) {
		t.Errorf("outcomes: got %v, want %v", got, want)
	}
}

func runTwice(t *testing.T, l Ledger) {
	b := open(t, l, onlyFull())
	ended, cancel := context.WithCancel(b.ctx)
	cancel()
	if err := b.Store.Run(ended, &worker{}, quickly()); err != nil {
		t.Errorf("run that was stopped before its start: %v", err)
	}
	id := b.shots(1, 2, "b1")[0]
	w, begun, release := started()
	stop := b.run(w, quickly())
	<-begun
	if err := b.Store.Run(b.ctx, w, quickly()); !errors.Is(err, queue.ErrRunning) {
		t.Errorf("second run: got %v, want ErrRunning", err)
	}
	close(release)
	b.untilState(queue.StateDone, id)
	stop()
	next := b.shots(2, 3, "b1")[0]
	b.run(w, quickly())
	b.untilState(queue.StateDone, next)
}
