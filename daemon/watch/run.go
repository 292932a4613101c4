package watch

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"time"

	"github.com/fsnotify/fsnotify"
	"go.uber.org/zap"
)

const (
	// trickle is how many settled files are looked at again after each
	// listing.
	trickle = 256

	// firstRetry is the pause after the folder was found missing; it
	// doubles up to Rescan.
	firstRetry = 250 * time.Millisecond

	// farewell is how long Run waits for an unfinished task when ctx ends.
	farewell = 2 * time.Second
)

// run is one call of Run; Run's goroutine owns it.
type run struct {
	w      *Watcher
	ears   *ears
	pulse  *pulse
	settle *settler
	ready  []File // settled, not sent yet

	fresh  []string            // names to ask for
	queued map[string]struct{} // the same, as a set
	dirs   []string            // new sub-folders to list
	names  []string            // accepted names of the last full listing
	turn   int                 // where trickle goes on in names

	busy     bool
	results  chan result
	nextScan time.Time
	misses   int
}

// Run watches until ctx ends and returns nil then. It sends on out, which
// it does not close. A watcher runs once at a time.
func (w *Watcher) Run(ctx context.Context, out chan<- File) error {
	w.mu.Lock()
	if w.runs {
		w.mu.Unlock()
		return ErrRunning
	}
	w.runs = true
	w.mu.Unlock()
	defer func() {
		w.mu.Lock()
		w.runs = false
		w.mu.Unlock()
	}()
	s := &run{
		w: w, pulse: &pulse{start: time.Now()}, settle: newSettler(w.o.Quiet, w.o.Longest),
		queued: map[string]struct{}{}, results: make(chan result, 1), nextScan: time.Now(),
	}
	var err error
	if s.ears, err = w.hear(); err != nil {
		w.o.Logger.Warn("no notifications, the folder is listed only", zap.Error(err))
	}
	defer s.ears.close(farewell)
	s.loop(ctx, out)
	return nil
}

func (s *run) loop(ctx context.Context, out chan<- File) {
	timer := time.NewTimer(0)
	defer timer.Stop()
	events, faults := s.ears.events(), s.ears.errors()
	for {
		s.begin()
		s.checkStuck()
		timer.Reset(time.Until(s.wake()))
		var to chan<- File
		var first File
		if len(s.ready) > 0 {
			to, first = out, s.ready[0]
		}
		select {
		case <-ctx.Done():
			s.leave()
			return
		case to <- first:
			s.ready = s.ready[1:]
			s.w.o.Metrics.file(s.w.o.Station, s.w.o.Arm)
		case r := <-s.results:
			s.busy = false
			s.take(ctx, r)
		case e, ok := <-events:
			if !ok {
				events = nil
				break
			}
			s.hint(e)
		case err, ok := <-faults:
			if !ok {
				faults = nil
				break
			}
			s.w.o.Logger.Debug("notifications lost, listing the folder", zap.Error(err))
			s.scanSoon()
		case <-timer.C:
		}
	}
}

// scanSoon brings the next listing forward, but leaves the disk as much time
// as the last one took.
func (s *run) scanSoon() {
	state := s.w.State()
	soon := state.LastScan.Add(state.ScanTime)
	if now := time.Now(); soon.Before(now) {
		soon = now
	}
	if soon.Before(s.nextScan) {
		s.nextScan = soon
	}
}

// begin starts the next task if there is one and none is running.
func (s *run) begin() {
	if s.busy {
		return
	}
	now := time.Now()
	var t task
	switch {
	case !now.Before(s.nextScan):
		t.full = true
		s.dirs = nil
	case s.misses > 0: // the folder is away: first find it again
		return
	case len(s.dirs) > 0:
		t.dirs, s.dirs = s.dirs, nil
	default:
		t.names = s.settle.due(now, chunk)
		if n := min(len(s.fresh), chunk-len(t.names)); n > 0 {
			for _, rel := range s.fresh[:n] {
				delete(s.queued, rel)
			}
			t.names = append(t.names, s.fresh[:n]...)
			s.fresh = s.fresh[n:]
		}
		if len(t.names) == 0 {
			return
		}
	}
	s.busy = true
	s.pulse.last.Store(int64(time.Since(s.pulse.start)))
	w := &worker{folder: s.w.o.Folder, depth: s.w.o.Depth, open: s.w.open, ears: s.ears, pulse: s.pulse}
	results := s.results
	go func() { results <- w.do(t) }()
}

// wake is when something is to be done even if nothing happens.
func (s *run) wake() time.Time {
	if s.busy {
		return time.Now().Add(s.w.o.Stuck / 4)
	}
	at := s.nextScan
	if look := s.settle.next(); s.misses == 0 && !look.IsZero() && look.Before(at) {
		at = look
	}
	return at
}

// checkStuck says stuck if no disk call returned for too long.
func (s *run) checkStuck() {
	if !s.busy {
		return
	}
	silent := s.pulse.silent()
	if silent < max(s.w.o.Stuck, 5*time.Duration(s.pulse.slowest.Load())) {
		return
	}
	s.w.update(func(st *State) {
		st.Condition = Stuck
		st.Err = fmt.Errorf("the disk has not answered for %v: check the share and the network", silent.Round(time.Second))
	})
}

// leave waits a little for the running task.
func (s *run) leave() {
	if !s.busy {
		return
	}
	select {
	case <-s.results:
	case <-time.After(farewell):
		s.w.o.Logger.Warn("left an unanswered disk call behind")
	}
}

// hint takes up a notification.
func (s *run) hint(e fsnotify.Event) {
	rel, ok := relative(s.w.o.Folder, e.Name)
	switch {
	case !ok || rel == "." || hidden(rel):
		if rel == "." {
			s.scanSoon()
		}
	case s.settle.pending[rel] != nil: // it has an appointment
	case s.w.o.Accept(rel) || e.Has(fsnotify.Create) && level(rel) < s.w.o.Depth:
		s.ask(rel) // what is not a file that matters may be a new folder
	}
}

// ask queues a name for a look.
func (s *run) ask(rel string) {
	if _, ok := s.queued[rel]; !ok {
		s.queued[rel] = struct{}{}
		s.fresh = append(s.fresh, rel)
	}
}

// take uses the result of a task.
func (s *run) take(ctx context.Context, r result) {
	if r.err != nil {
		s.failed(r)
		return
	}
	for _, l := range r.looks {
		s.look(l)
	}
	if r.full {
		s.scanned(r)
	}
	for _, rel := range r.listed {
		if ctx.Err() != nil {
			return
		}
		if s.w.o.Accept(rel) {
			s.admit(rel)
		}
	}
	s.w.update(func(st *State) {
		st.Unsettled = len(s.settle.pending) + len(s.fresh)
		if st.Condition == Stuck {
			st.Condition, st.Err = OK, nil
		}
	})
}

// scanned closes a full listing.
func (s *run) scanned(r result) {
	took := r.ended.Sub(r.begun)
	s.misses = 0
	s.nextScan = r.ended.Add(max(s.w.o.Rescan, took))
	s.w.o.Metrics.scanned(took)
	listed := map[string]struct{}{}
	s.names = s.names[:0]
	for _, rel := range r.listed {
		if s.w.o.Accept(rel) {
			s.names = append(s.names, rel)
			listed[rel] = struct{}{}
		}
	}
	if r.partial == nil {
		s.settle.absent(listed, r.begun)
	}
	for range min(trickle, len(s.names)) {
		s.turn = (s.turn + 1) % len(s.names)
		if rel := s.names[s.turn]; s.settle.pending[rel] == nil && s.settle.knows(rel) {
			s.ask(rel)
		}
	}
	before := s.w.State()
	s.w.update(func(st *State) {
		st.LastScan, st.ScanTime, st.Files = r.ended, took, len(s.names)
		st.Polling = r.deaf != nil
		st.Condition, st.Err = OK, nil
		if r.partial != nil {
			st.Condition, st.Err = Failing, r.partial
		}
	})
	if r.deaf != nil && !before.Polling {
		s.w.o.Logger.Warn("no notifications for a folder, it is listed only", zap.Error(r.deaf))
	}
}

// admit takes up a listed name: a new one is looked at, unless an earlier
// run has settled it.
func (s *run) admit(rel string) {
	if s.settle.knows(rel) || s.recall(rel) {
		return
	}
	s.ask(rel)
}

// recall asks whether an earlier run has settled a file.
func (s *run) recall(rel string) bool {
	size, mod, ok := s.w.o.Known(rel)
	if ok {
		s.settle.remember(rel, content{size, mod})
	}
	return ok
}

// look uses what the disk said about one name.
func (s *run) look(l look) {
	switch {
	case errors.Is(l.err, fs.ErrNotExist):
		s.settle.vanish(l.rel)
		return
	case l.err != nil:
		s.settle.retry(l.rel, l.after)
		return
	case l.info.IsDir():
		s.settle.vanish(l.rel)
		if level(l.rel) < s.w.o.Depth {
			s.dirs = append(s.dirs, l.rel)
		}
		return
	case !l.info.Mode().IsRegular() || !s.w.o.Accept(l.rel):
		s.settle.vanish(l.rel)
		return
	}
	if !s.settle.knows(l.rel) {
		s.recall(l.rel)
	}
	c := content{l.info.Size(), l.info.ModTime()}
	if s.settle.observe(l.rel, c, l.before, l.after) {
		s.ready = append(s.ready, File{Path: s.w.path(l.rel), Rel: l.rel, Size: c.size, ModTime: c.mod})
	}
}

// failed notes that the folder could not be read and when to try again.
func (s *run) failed(r result) {
	for _, rel := range r.names {
		s.settle.retry(rel, r.ended)
		if s.settle.pending[rel] == nil {
			s.ask(rel)
		}
	}
	pause := s.w.o.Rescan
	if s.misses < 16 {
		pause = min(pause, firstRetry<<s.misses)
	}
	s.misses++
	s.nextScan = r.ended.Add(pause)
	s.w.update(func(st *State) {
		st.Condition, st.Err = Failing, fmt.Errorf("read folder: %w", r.err)
		if errors.Is(r.err, fs.ErrNotExist) {
			st.Condition, st.Err = Missing, fmt.Errorf("the folder is not there: %w", r.err)
		}
	})
}
