// Package queuetest holds the tests that every engine of package queue must
// pass: it says what a ledger promises, whatever stores it.
package queuetest

import (
	"context"
	"errors"
	"fmt"
	"sync"
	"testing"
	"time"

	"unsheard/queue"
)

// Ledger is one ledger on the engine under test, empty at first.
type Ledger struct {
	// Open opens it with these options, the location filled in.
	Open func(ctx context.Context, o queue.Options) (*queue.Store, error)
	// Read opens it for reading beside the process that holds it.
	Read func(ctx context.Context) (*queue.Reader, error)
}

// Run runs all tests. fresh makes a new, empty ledger for one test.
func Run(t *testing.T, fresh func(t *testing.T) Ledger) {
	for _, c := range []struct {
		name string
		test func(*testing.T, Ledger)
	}{
		{"frames are added once", framesOnce},
		{"changed frames", framesChanged},
		{"rejected frames", framesRejected},
		{"pairs become shots once", pairsOnce},
		{"pairs that must not be", pairsRefused},
		{"waiting, held and lone", unmatched},
		{"late partner", latePartner},
		{"names", names},
		{"part and pair by hand", partByHand},
		{"many pairs", manyPairs},
		{"work", work},
		{"quick look alone decides without a full pass", quickOnly},
		{"spread follows full", spreadFollows},
		{"priority", priority},
		{"failure, pause, success", failOnce},
		{"long pause", longPause},
		{"quarantine after the last attempt, release", giveUp},
		{"permanent failure", permanent},
		{"later", later},
		{"panic", panics},
		{"timeout", timeout},
		{"soft stop", softStop},
		{"hard stop", hardStop},
		{"run twice, stop before start", runTwice},
		{"redo under the same bundle", redoSame},
		{"redo under another bundle", redoOther},
		{"redo while running", redoRunning},
		{"redo takes the replaced frame", redoReplaced},
		{"quarantine by hand while running", quarantineRunning},
		{"part while running", partRunning},
		{"listing", listing},
		{"counts, depth, last done", counts},
		{"changes", changes},
		{"reader beside a store", readBeside},
		{"reopen keeps everything", reopen},
	} {
		t.Run(c.name, func(t *testing.T) { c.test(t, fresh(t)) })
	}
}

// patience is how long a test waits for what must come; it does not measure.
const patience = 60 * time.Second

// bench is an open ledger with what tests need.
type bench struct {
	*testing.T
	*queue.Store
	ctx context.Context
}

func open(t *testing.T, l Ledger, o queue.Options) *bench {
	t.Helper()
	s, err := l.Open(t.Context(), o)
	if err != nil {
		t.Fatalf("open: %v", err)
	}
	t.Cleanup(func() {
		if err := s.Close(); err != nil {
			t.Errorf("close: %v", err)
		}
	})
	return &bench{t, s, t.Context()}
}

var day = time.Date(2026, 3, 9, 10, 0, 0, 0, time.UTC)

// frame makes the frame file number i of an arm of station "bay".
func frame(arm queue.Arm, i int) queue.Frame {
	taken := day.Add(time.Duration(i) * time.Minute)
	return queue.Frame{Station: "bay", Arm: arm, Path: fmt.Sprintf("%s/%c_%04d.tif", arm, arm[0]-32, i), Size: 1000,
		ModTime: taken.Add(time.Second), Stamp: taken, HasTime: true, Shot: int64(i), HasShot: true, StampSource: "name"}
}

func (b *bench) add(frames ...queue.Frame) []int64 {
	b.Helper()
	added, err := b.AddFrames(b.ctx, frames)
	if err != nil {
		b.Fatalf("add frames: %v", err)
	}
	ids := make([]int64, len(added))
	for i, a := range added {
		ids[i] = a.ID
	}
	return ids
}

// shots adds the frames of shots number i to j-1, pairs them and returns the
// shots' IDs.
func (b *bench) shots(i, j int, bundle string) []int64 {
	b.Helper()
	var frames []queue.Frame
	for k := i; k < j; k++ {
		frames = append(frames, frame(queue.Streak, k), frame(queue.Reference, k))
	}
	ids := b.add(frames...)
	var d queue.Decision
	for k := 0; k < len(ids); k += 2 {
		d.Pairs = append(d.Pairs, queue.Pair{Streak: ids[k], Reference: ids[k+1], Gap: time.Millisecond})
	}
	rep := b.commit(d, bundle)
	if len(rep.Shots) != j-i || len(rep.Refused) != 0 {
		b.Fatalf("commit %d pairs: got shots %v, refused %v", j-i, rep.Shots, rep.Refused)
	}
	return rep.Shots
}

func (b *bench) commit(d queue.Decision, bundle string) queue.Report {
	b.Helper()
	rep, err := b.Commit(b.ctx, d, bundle)
	if err != nil {
		b.Fatalf("commit: %v", err)
	}
	return rep
}

func (b *bench) shot(id int64) (queue.Shot, []queue.Attempt) {
	b.Helper()
	sh, attempts, err := b.Shot(b.ctx, id)
	if err != nil {
		b.Fatal(err)
	}
	return sh, attempts
}

func (b *bench) wantState(id int64, want queue.State) queue.Shot {
	b.Helper()
	sh, attempts := b.shot(id)
	if sh.State != want {
		b.Fatalf("shot %d: state %s (%s), want %s; attempts %+v", id, sh.State, sh.Reason, want, attempts)
	}
	return sh
}

// outcomes lists how the attempts of one pass of a shot ended.
func (b *bench) outcomes(id int64, pass queue.Pass) []string {
	b.Helper()
	_, attempts := b.shot(id)
	var out []string
	for _, a := range attempts {
		if a.Pass == pass {
			out = append(out, a.Outcome)
		}
	}
	return out
}

// until waits until cond holds.
func (b *bench) until(what string, cond func() bool) {
	b.Helper()
	changes, stop := b.Changes()
	defer stop()
	limit := time.After(patience)
	for !cond() {
		select {
		case <-changes:
		case <-time.After(100 * time.Millisecond): // what cond looks at need not be in the ledger
		case <-limit:
			all, _ := b.Counts(b.ctx, "")
			b.Fatalf("waited in vain for: %s; shots are %v", what, all)
		}
	}
}

func (b *bench) untilState(want queue.State, ids ...int64) {
	b.Helper()
	b.until(fmt.Sprintf("%d shots %s", len(ids), want), func() bool {
		for _, id := range ids {
			sh, _, err := b.Shot(context.WithoutCancel(b.ctx), id)
			if err != nil || sh.State != want {
				return false
			}
		}
		return true
	})
}

// quickly keeps tests short: no pause, no soft stop.
func quickly() queue.RunOptions {
	return queue.RunOptions{Slots: 2, QuickSlots: 2, SoftStop: -1,
		Backoff: func(int) time.Duration { return time.Millisecond }}
}

// run starts Run; stop ends it and waits for it.
func (b *bench) run(w queue.Worker, o queue.RunOptions) (stop func()) {
	b.Helper()
	ctx, cancel := context.WithCancel(b.ctx)
	done := make(chan error, 1)
	go func() { done <- b.Store.Run(ctx, w, o) }()
	stop = sync.OnceFunc(func() {
		cancel()
		select {
		case err := <-done:
			if err != nil {
				b.Errorf("run: %v", err)
			}
		case <-time.After(patience):
			b.Errorf("run did not return")
		}
	})
	b.Cleanup(stop)
	return stop
}

// worker counts its calls and does what act says, or else succeeds.
type worker struct {
	act func(ctx context.Context, t queue.Task) (queue.Outcome, error)

	mu    sync.Mutex
	tasks []queue.Task // guarded by mu
}

func (w *worker) Do(ctx context.Context, t queue.Task) (queue.Outcome, error) {
	w.mu.Lock()
	w.tasks = append(w.tasks, t)
	w.mu.Unlock()
	if w.act == nil {
		return good(t), nil
	}
	return w.act(ctx, t)
}

func (w *worker) seen() []queue.Task {
	w.mu.Lock()
	defer w.mu.Unlock()
	return append([]queue.Task(nil), w.tasks...)
}

// of lists the tasks of one pass.
func (w *worker) of(pass queue.Pass) (out []queue.Task) {
	for _, t := range w.seen() {
		if t.Pass == pass {
			out = append(out, t)
		}
	}
	return out
}

func good(t queue.Task) queue.Outcome {
	return queue.Outcome{Verdict: "good", ResultDir: t.Name + ".shot",
		Summary: []byte(fmt.Sprintf(`{"pass":%q,"bundle":%q}`, t.Pass, t.Bundle))}
}

var errTest = errors.New("no light on the sensor")

// onlyFull makes the simplest shots: one pass.
func onlyFull() queue.Options { return queue.Options{Passes: []queue.Pass{queue.Full}} }
