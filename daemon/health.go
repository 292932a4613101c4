package daemon

import (
	"context"
	"errors"
	"fmt"
	"time"

	"unsheard/daemon/watch"
	"unsheard/daemon/web"
)

// Changed tells the page that something changed.
func (s *source) Changed() <-chan struct{} { return s.changes }

// Ready returns the checks that decide whether work gets done.
func (s *source) Ready(ctx context.Context) []web.Check {
	var out []web.Check
	add := func(name string, err error) {
		c := web.Check{Name: name, OK: err == nil}
		if err != nil {
			c.Detail = err.Error()
		}
		out = append(out, c)
	}
	_, err := s.store.Counts(ctx, "")
	add("ledger", err)
	err = nil
	if !s.working.Load() {
		err = errors.New("no job is started: the service is starting or stopping")
	}
	add("workers", err)
	for i, in := range s.intakes {
		c := &s.config.Station[i]
		for j := range in.arms {
			w := in.arms[j].watcher.State()
			err = nil
			if w.Condition != watch.OK {
				err = fmt.Errorf("%s is %s: %v", w.Folder, w.Condition, w.Err)
			}
			add("folder "+c.Name+" "+string(in.arms[j].name), err)
		}
		_, err = s.bundles.at(c.Bundle, time.Now())
		add("bundle "+c.Name, err)
		add("disk "+c.Name, s.worker.room(s.worker.places[c.Name]))
	}
	return out
}

// heartbeat is how often the main loop shows that it turns.
const heartbeat = time.Second

// Alive reports a main loop that has stopped turning.
func (s *source) Alive(context.Context) error {
	if d := time.Since(time.Unix(0, s.beat.Load())); d > 10*heartbeat {
		return fmt.Errorf("the main loop has not turned for %v", d.Round(time.Second))
	}
	return nil
}

// pulse keeps the heart beating until ctx ends.
func (s *source) pulse(ctx context.Context) error {
	t := time.NewTicker(heartbeat)
	defer t.Stop()
	for {
		s.beat.Store(time.Now().UnixNano())
		select {
		case <-ctx.Done():
			return nil
		case <-t.C:
		}
	}
}
