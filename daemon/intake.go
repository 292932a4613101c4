package daemon

import (
	"context"
	"errors"
	"fmt"
	"path"
	"sync/atomic"
	"time"

	"go.uber.org/zap"
	"golang.org/x/sync/errgroup"

	"unsheard/config"
	"unsheard/daemon/watch"
	"unsheard/pipeline/frame"
	"unsheard/pipeline/match"
	"unsheard/queue"
)

// intake takes in the frames of one station: from both drop folders into the
// ledger, and from there into pairs. One goroutine stamps the files of each
// arm; one more writes them down in batches and pairs them.
//
// The ledger is the memory: what is pending is read from it after each batch,
// so a restart anywhere goes on where it was, and committing a decision twice
// does nothing.
type intake struct {
	name    string
	arms    [2]arm
	options match.Options
	late    time.Duration // how long a lone frame can still find its partner
	store   *queue.Store
	logger  *zap.Logger
}

// arm is one drop folder with its way to read a stamp.
type arm struct {
	name    queue.Arm
	watcher *watch.Watcher
	stamper *frame.Stamper
	last    atomic.Int64 // when a file was taken in, unix ns; 0: not yet
}

const (
	// batchFiles and batchTime bound how many frames share a transaction and
	// how long the first of them waits for company.
	batchFiles = 1000
	batchTime  = 20 * time.Millisecond

	// lateness is how long after it was seen a lone frame still takes part in
	// pairing.
	lateness = 24 * time.Hour

	// errorPause is how long intake waits after the ledger refused it.
	errorPause = 2 * time.Second
)

func newIntake(ctx context.Context, s *config.Station, store *queue.Store, wm *watch.Metrics, logger *zap.Logger) (*intake, error) {
	in := &intake{name: s.Name, store: store, late: lateness, logger: logger.With(zap.String("station", s.Name)),
		options: match.Options{Within: s.Pair.Within.Std(), Grace: s.Pair.Grace.Std()}}
	for i, c := range []struct {
		name queue.Arm
		arm  *config.Arm
	}{{queue.Streak, &s.Streak}, {queue.Reference, &s.Reference}} {
		st, err := frame.NewStamper(c.arm.Stamp, c.arm.Location())
		if err != nil {
			return nil, fmt.Errorf("station %s, %s.stamp: %w", s.Name, c.name, err)
		}
		known, err := store.Known(ctx, s.Name, c.name)
		if err != nil {
			return nil, err
		}
		w, err := watch.New(watch.Options{Station: s.Name, Arm: string(c.name), Folder: c.arm.Folder,
			Accept: func(rel string) bool { return st.Match(path.Base(rel)) },
			Known: func(rel string) (int64, time.Time, bool) {
				p, ok := known[rel]
				return p.Size, p.ModTime, ok
			},
			Quiet: c.arm.Quiet.Std(), Rescan: c.arm.Rescan.Std(), Depth: c.arm.Depth,
			Logger: in.logger, Metrics: wm})
		if err != nil {
			return nil, err
		}
		in.arms[i].name, in.arms[i].watcher, in.arms[i].stamper = c.name, w, st
	}
	return in, nil
}

// run takes in frames until ctx ends.
func (in *intake) run(ctx context.Context) error {
	frames := make(chan queue.Frame)
	g, ctx := errgroup.WithContext(ctx)
	for i := range in.arms {
		a := &in.arms[i]
		files := make(chan watch.File)
		g.Go(func() error { return quiet(a.watcher.Run(ctx, files)) })
		g.Go(func() error { return in.stamp(ctx, a, files, frames) })
	}
	g.Go(func() error { return in.pair(ctx, frames) })
	return g.Wait()
}

// quiet hides the error of a part that was told to stop.
func quiet(err error) error {
	if errors.Is(err, context.Canceled) {
		return nil
	}
	return err
}

// stamp reads the stamp of each file of an arm.
func (in *intake) stamp(ctx context.Context, a *arm, files <-chan watch.File, out chan<- queue.Frame) error {
	for {
		var f watch.File
		select {
		case <-ctx.Done():
			return nil
		case f = <-files:
		}
		a.last.Store(time.Now().UnixNano())
		q := queue.Frame{Station: in.name, Arm: a.name, Path: f.Rel, Size: f.Size, ModTime: f.ModTime}
		s, err := a.stamper.Stamp(f.Path, f.ModTime)
		if err != nil {
			q.State, q.Reason = queue.FrameRejected, err.Error()
			in.logger.Warn("frame without a stamp", zap.String("file", f.Path), zap.Error(err))
		} else {
			q.Stamp, q.HasTime = s.Time, !s.Time.IsZero()
			q.Shot, q.HasShot = s.Shot, s.HasShot
			q.StampSource, q.Weak = s.Source, s.Weak
		}
		select {
		case <-ctx.Done():
			return nil
		case out <- q:
		}
	}
}

// pair writes frames down and pairs what has no partner yet, after every batch
// and whenever a waiting frame's time is up.
func (in *intake) pair(ctx context.Context, frames <-chan queue.Frame) error {
	wake := time.NewTimer(0)
	defer wake.Stop()
	for {
		var first []queue.Frame
		select {
		case <-ctx.Done():
			return nil
		case <-wake.C:
		case f := <-frames:
			first = []queue.Frame{f}
		}
		batch := collect(ctx, first, frames)
		for {
			next, err := in.commit(ctx, batch)
			if ctx.Err() != nil {
				return nil // what was not written down is met again at the next start
			}
			if err == nil {
				wake.Reset(next)
				break
			}
			// The frames must not be lost, so this goes on until it works.
			in.logger.Error("cannot write frames into the ledger", zap.Error(err))
			select {
			case <-ctx.Done():
				return nil
			case <-time.After(errorPause):
			}
		}
	}
}

// collect adds to a batch what comes within a moment.
func collect(ctx context.Context, batch []queue.Frame, frames <-chan queue.Frame) []queue.Frame {
	if len(batch) == 0 {
		return batch
	}
	end := time.NewTimer(batchTime)
	defer end.Stop()
	for len(batch) < batchFiles {
		select {
		case f := <-frames:
			batch = append(batch, f)
		case <-end.C:
			return batch
		case <-ctx.Done():
			return batch
		}
	}
	return batch
}

// idle is the longest time between two looks at the pending frames.
const idle = time.Minute

// commit enters a batch, pairs what is pending and returns how long to wait
// before the next look.
func (in *intake) commit(ctx context.Context, batch []queue.Frame) (time.Duration, error) {
	if len(batch) > 0 {
		added, err := in.store.AddFrames(ctx, batch)
		if err != nil {
			return 0, err
		}
		if err := in.replaced(ctx, batch, added); err != nil {
			return 0, err
		}
	}
	now := time.Now()
	pending, err := in.store.Pending(ctx, in.name, now.Add(-in.late))
	if err != nil {
		return 0, err
	}
	if len(pending) == 0 {
		return idle, nil
	}
	streak, reference := sides(pending)
	res := match.Match(streak, reference, now, in.options)
	rep, err := in.store.Commit(ctx, decide(res), "")
	if err != nil {
		return 0, err
	}
	for _, r := range rep.Refused {
		in.logger.Warn("pairing refused", zap.Int64("frame", r.Frame), zap.String("reason", r.Reason))
	}
	return wait(res.NextLook, now), nil
}

// replaced looks at frames that changed after a shot was made from them: a shot
// that had been given up is tried again with the new file, any other keeps its
// result and is marked.
func (in *intake) replaced(ctx context.Context, batch []queue.Frame, added []queue.Added) error {
	var again []int64
	for i, a := range added {
		if a.Change != queue.FrameStale {
			continue
		}
		in.logger.Warn("a frame was replaced after its shot had run", zap.String("file", batch[i].Path), zap.Int64("shot", a.ShotID))
		sh, _, err := in.store.Shot(ctx, a.ShotID)
		if err != nil {
			return err
		}
		if sh.State == queue.StateQuarantined {
			again = append(again, a.ShotID)
		}
	}
	if len(again) == 0 {
		return nil
	}
	_, err := in.store.Retry(ctx, again, "")
	return err
}

func wait(next, now time.Time) time.Duration {
	if next.IsZero() {
		return idle
	}
	return min(max(next.Sub(now), 10*time.Millisecond), idle)
}

// sides turns ledger frames into what match reads.
func sides(pending []queue.Frame) (streak, reference []match.Frame) {
	for _, f := range pending {
		m := match.Frame{ID: f.ID, Time: f.Stamp, HasTime: f.HasTime, Shot: f.Shot, HasShot: f.HasShot, Seen: f.Seen}
		if f.Arm == queue.Streak {
			streak = append(streak, m)
		} else {
			reference = append(reference, m)
		}
	}
	return streak, reference
}

// decide turns match's answer into the ledger's words.
func decide(r match.Result) queue.Decision {
	d := queue.Decision{Waiting: r.Waiting}
	for _, p := range r.Pairs {
		d.Pairs = append(d.Pairs, queue.Pair{Streak: p.Streak, Reference: p.Reference, Gap: p.Gap})
	}
	for _, l := range r.Lone {
		d.Lone = append(d.Lone, queue.Lone{Frame: l.ID, Reason: l.Reason})
	}
	for _, h := range r.Held {
		d.Held = append(d.Held, queue.Held{Streak: h.Streak, Reference: h.Reference, Reason: h.Reason})
	}
	return d
}
