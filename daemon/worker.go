package daemon

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path"
	"runtime"
	"sync/atomic"
	"time"

	"go.uber.org/zap"

	"unsheard/config"
	"unsheard/pipeline"
	"unsheard/pipeline/measure"
	"unsheard/queue"
)

// worker does the queue's tasks in child processes.
type worker struct {
	work     config.Work
	keepFree int64
	places   map[string]place  // by station
	folders  map[string]string // bundle folder by station
	bundles  *bundles
	budget   *budget
	turns    *turns
	trouble  *trouble
	child    child
	logger   *zap.Logger
	running  atomic.Int64
	waiting  func() int // passes in the queue
	metrics  *metrics
	perShot  atomic.Int64 // usual time of a full pass, ns
}

// The pauses before a task is tried again when the fault is not the shot's.
const (
	pausePlace  = 20 * time.Second
	pauseBundle = 30 * time.Second
)

// Do runs one pass over one shot.
func (w *worker) Do(ctx context.Context, t queue.Task) (queue.Outcome, error) {
	p, ok := w.places[t.Station]
	if !ok {
		return queue.Outcome{}, queue.Later(fmt.Errorf("station %q is not in the configuration any more: add it again, or give the shot up", t.Station), pauseBundle)
	}
	b, err := w.bundle(t)
	w.trouble.note(t.Station, "bundle", err)
	if err != nil {
		return queue.Outcome{}, queue.Later(err, pauseBundle)
	}
	out := p.result(t.StreakPath, t.ReferencePath)
	err = w.room(p)
	w.trouble.note(t.Station, "place", err)
	if err != nil {
		return queue.Outcome{}, queue.Later(err, pausePlace)
	}
	coarse := 1
	if t.Pass == queue.Quick {
		coarse = max(2, w.work.Coarse)
	}
	// The turn comes before the memory: whoever holds memory waits for nobody.
	endTurn, err := w.turns.take(ctx, t.ShotID)
	if err != nil {
		return queue.Outcome{}, err
	}
	defer endTurn()
	need := pipeline.Bytes(b.T/coarse+1, b.H/coarse+1, b.W/coarse+1, b.Pixels)
	release, err := w.budget.take(ctx, need)
	if err != nil {
		return queue.Outcome{}, err
	}
	defer release()
	w.running.Add(1)
	defer w.running.Add(-1)
	threads := w.threads(t)
	job := pipeline.Job{Shot: path.Base(stem(t.StreakPath)), Station: t.Station, Taken: t.Taken,
		Streak: p.streakFile(t.StreakPath), Reference: p.referenceFile(t.ReferencePath),
		Bundle: b.Dir, Pass: string(t.Pass), Coarse: coarse, Workers: threads, Extra: w.doubts(t, b)}
	began := time.Now()
	a, err := w.child.do(ctx, task{Job: job, Out: out, Attempt: fmt.Sprintf("%d-%s-%d", t.ShotID, t.Pass, t.Attempt)}, threads, need)
	w.metrics.pass(string(t.Pass), time.Since(began), err == nil && a.Error == "")
	if err != nil {
		return queue.Outcome{}, fmt.Errorf("shot %s: %w", t.Name, err)
	}
	if a.Error != "" {
		if a.Place {
			w.trouble.note(t.Station, "publishing", errors.New(a.Error))
		}
		return queue.Outcome{}, w.fault(a)
	}
	w.trouble.note(t.Station, "publishing", nil)
	if t.Pass == queue.Full {
		w.perShot.Store(int64(time.Since(began)))
	}
	return queue.Outcome{Verdict: a.Verdict, Summary: a.Summary, ResultDir: out}, nil
}

// fault tells the queue what to do about a child's error.
func (w *worker) fault(a answer) error {
	err := errors.New(a.Error)
	switch {
	case a.Place:
		return queue.Later(fmt.Errorf("%w: the shot waits until its result can be written", err), pausePlace)
	case a.Permanent:
		return queue.Permanent(err)
	}
	return err
}

// bundle returns the bundle that a task names, or else the one valid when the
// shot was taken.
func (w *worker) bundle(t queue.Task) (bundleInfo, error) {
	dir := w.folders[t.Station]
	if t.Bundle != "" {
		return w.bundles.byID(dir, t.Bundle)
	}
	return w.bundles.at(dir, t.Taken)
}

// room reports a place that is away or full before a job is started for
// nothing. What is away must not be made anew: that would be the empty folder
// under the place where a share is mounted.
func (w *worker) room(p place) error {
	if _, err := os.Stat(p.root); err != nil {
		return fmt.Errorf("the results' place is away: %w: it is taken up again by itself", err)
	}
	if w.keepFree <= 0 {
		return nil
	}
	n, err := free(p.root)
	if err != nil {
		return fmt.Errorf("results' place %q: %w", p.root, err)
	}
	if n < w.keepFree {
		return fmt.Errorf("only %.3g GB free at %q, disk.keep_free asks for %v: make room, or lower it",
			float64(n)/1e9, p.root, config.Size(w.keepFree))
	}
	return nil
}

// threads shares the processors between the jobs that could run now: all of
// them for a lone shot, one each when many wait. A quick look takes them all,
// it is short.
func (w *worker) threads(t queue.Task) int {
	cpus := runtime.NumCPU()
	if t.Suspect || t.Pass == queue.Quick {
		return cpus
	}
	jobs := int(w.running.Load()) + w.waiting()
	return max(1, cpus/max(1, jobs))
}

// doubts are reasons for doubt that the service knows and the frames do not
// show.
func (w *worker) doubts(t queue.Task, b bundleInfo) []measure.Reason {
	var out []measure.Reason
	if t.Weak {
		out = append(out, measure.Reason{Code: "weak_stamp", Unit: "1", Text: "paired by file modification times, which the copying computer sets",
			Remedy: "let the camera programs write times or shot numbers into the file names"})
	}
	if !b.ValidUntil.IsZero() && t.Taken.After(b.ValidUntil) {
		out = append(out, measure.Reason{Code: "bundle_expired", Unit: "h", Value: t.Taken.Sub(b.ValidUntil).Hours(),
			Text:   "the bundle's validity had ended when the shot was taken",
			Remedy: "take a new calibration series"})
	}
	return out
}
