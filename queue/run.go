package queue

import (
	"context"
	"encoding/json"
	"fmt"
	"time"

	"github.com/riverqueue/river"
	"go.uber.org/zap"
)

// Worker works on shots. It must be safe for concurrent use.
type Worker interface {
	// Do works one pass over one shot and publishes the result before it
	// returns: what it returns is committed at once. It may be called again
	// for the same task after a crash, so publishing must bear repetition. It
	// must return soon after ctx ends. An error means that the pass is tried
	// again after a pause, unless it is made by Permanent or Later. A panic is
	// an error like any other.
	Do(ctx context.Context, t Task) (Outcome, error)
}

// WorkerFunc makes a Worker of a function.
type WorkerFunc func(ctx context.Context, t Task) (Outcome, error)

// Do calls f.
func (f WorkerFunc) Do(ctx context.Context, t Task) (Outcome, error) { return f(ctx, t) }

// Task is one attempt at one pass over one shot.
type Task struct {
	ShotID        int64
	Station       string
	Name          string
	StreakPath    string // as AddFrames was given it
	ReferencePath string
	Taken         time.Time // as in Shot
	Weak          bool      // one of its frames has a weak stamp
	Pass          Pass
	Bundle        string
	Attempt       int   // 1 for the first
	AttemptID     int64 // unique in the ledger: for temporary names
	Suspect       bool  // it was running when a process died; nothing runs beside it
}

// Outcome is the result of a task, as the ledger keeps it for pages and tables.
type Outcome struct {
	Verdict   string          // empty: the last pass's stays (for Spread)
	Summary   json.RawMessage // small; nil: the last pass's stays
	ResultDir string          // empty: the last pass's stays
}

// intervals at which River looks for jobs. At its default of a second, slots
// stand idle between short jobs.
const (
	fetchCooldown = 10 * time.Millisecond
	fetchPoll     = 100 * time.Millisecond
)

// Run works the queue with w until ctx ends; it blocks. First it works the
// suspects of a crash, one at a time and alone, then everything.
//
// When ctx ends, Run takes up no further jobs, lets running ones finish for
// SoftStop, then cancels their contexts, and returns when they have returned. A
// job cancelled so goes back untouched: it is no attempt.
func (s *Store) Run(ctx context.Context, w Worker, o RunOptions) error {
	if !s.working.CompareAndSwap(false, true) {
		return ErrRunning
	}
	defer s.working.Store(false)
	r := &runner{s: s, w: w, o: o.fill()}
	suspects, err := s.suspects(ctx)
	if err != nil {
		return quiet(ctx, err)
	}
	if suspects > 0 {
		s.log().Info("first, and alone, what was running when the service died", zap.Int("suspects", suspects))
		alone := map[string]river.QueueConfig{queueSuspect: {MaxWorkers: 1}}
		if err := r.work(ctx, alone, s.noSuspects); err != nil {
			return err
		}
	}
	all := map[string]river.QueueConfig{
		queueQuick: {MaxWorkers: r.o.QuickSlots},
		queueFull:  {MaxWorkers: r.o.Slots},
	}
	return r.work(ctx, all, func(ctx context.Context) error { <-ctx.Done(); return nil })
}

// quiet turns the end of ctx into no error.
func quiet(ctx context.Context, err error) error {
	if ctx.Err() != nil {
		return nil
	}
	return err
}

type runner struct {
	river.WorkerDefaults[jobArgs]
	s *Store
	w Worker
	o RunOptions
}

// work runs River on those queues until wait returns, or ctx ends.
func (r *runner) work(ctx context.Context, queues map[string]river.QueueConfig, wait func(context.Context) error) error {
	if ctx.Err() != nil {
		return nil
	}
	ctx, stop := context.WithCancel(ctx)
	defer stop()
	workers := river.NewWorkers()
	river.AddWorker(workers, r)
	timeout, rescue := time.Duration(-1), 1000*time.Hour
	if r.o.Timeout > 0 {
		// River's own limits lie behind ours: backstops only.
		timeout = r.o.Timeout + time.Minute
		rescue = timeout + time.Minute
	}
	client, err := river.NewClient(driverOf(r.s.db), &river.Config{
		FetchCooldown:        fetchCooldown,
		FetchPollInterval:    fetchPoll,
		JobTimeout:           timeout,
		RescueStuckJobsAfter: rescue,
		Logger:               slogTo(r.s.log()),
		PollOnly:             true,
		Queues:               queues,
		SoftStopTimeout:      r.o.SoftStop,
		Workers:              workers,
	})
	if err != nil {
		return fmt.Errorf("set up the workers: %w", err)
	}
	if err := client.Start(ctx); err != nil {
		return quiet(ctx, fmt.Errorf("start the workers: %w", err))
	}
	stopped := client.Stopped()
	err = wait(ctx)
	stop()
	<-stopped
	return quiet(ctx, err)
}

func (s *Store) suspects(ctx context.Context) (int, error) {
	var n int
	err := s.Reader.db.QueryRowContext(ctx, "select count(*) from work where suspect = 1").Scan(&n)
	if err != nil {
		return 0, fmt.Errorf("count suspects: %w", err)
	}
	return n, nil
}

// noSuspects returns when the last suspect has been tried.
func (s *Store) noSuspects(ctx context.Context) error {
	changes, stop := s.Changes()
	defer stop()
	for {
		n, err := s.suspects(ctx)
		if err != nil || n == 0 {
			return err
		}
		select {
		case <-ctx.Done():
			return nil
		case <-changes:
		}
	}
}

// NextRetry tells River when to try a job again.
func (r *runner) NextRetry(job *river.Job[jobArgs]) time.Time {
	r.s.mu.Lock()
	defer r.s.mu.Unlock()
	now := time.Now()
	next, ok := r.s.next[job.ID]
	delete(r.s.next, job.ID)
	switch {
	case !ok: // the ledger could not be reached: soon
		return now.Add(time.Second)
	case next.Before(now):
		return now
	}
	return next
}
