package queue

import (
	"context"
	"errors"
	"fmt"
	"time"
)

// Counts returns how many shots are in each state, those with none included, of
// one station or, with "", of all.
func (r *Reader) Counts(ctx context.Context, station string) (map[State]int, error) {
	query, args := "select state, count(*) from shot group by state", []any(nil)
	if station != "" {
		query, args = "select state, count(*) from shot where station = ? group by state", []any{station}
	}
	rows, err := r.db.QueryContext(ctx, query, args...)
	if err != nil {
		return nil, fmt.Errorf("count shots: %w", err)
	}
	defer rows.Close()
	out := map[State]int{}
	for _, s := range States() {
		out[s] = 0
	}
	for rows.Next() {
		var s State
		var n int
		if err := rows.Scan(&s, &n); err != nil {
			return nil, fmt.Errorf("count shots: %w", err)
		}
		out[s] = n
	}
	return out, rows.Err()
}

// Depth is what there is to do for one pass.
type Depth struct {
	Jobs    int           // waiting, retries and pauses included
	Running int           // being worked on
	Oldest  time.Duration // since the longest waiting one was queued; 0: none waits
}

// QueueDepth returns what there is to do for each pass, those with nothing
// included.
func (r *Reader) QueueDepth(ctx context.Context) (map[Pass]Depth, error) {
	rows, err := r.db.QueryContext(ctx, `
		select state, pass, count(*), min(queued_ns) from work
		where state in ('queued', 'later', 'failed', 'running') group by state, pass`)
	if err != nil {
		return nil, fmt.Errorf("measure the queue: %w", err)
	}
	defer rows.Close()
	out := map[Pass]Depth{Quick: {}, Full: {}, Spread: {}}
	for rows.Next() {
		var state string
		var p Pass
		var n int
		var oldest int64
		if err := rows.Scan(&state, &p, &n, &oldest); err != nil {
			return nil, fmt.Errorf("measure the queue: %w", err)
		}
		d := out[p]
		if state == workRunning {
			d.Running = n
		} else {
			d.Jobs += n
			d.Oldest = max(d.Oldest, r.now().Sub(at(oldest)))
		}
		out[p] = d
	}
	return out, rows.Err()
}

// LastDone returns the shot that was finished last, of one station or, with "",
// of all; ok is false if none was.
func (r *Reader) LastDone(ctx context.Context, station string) (sh Shot, ok bool, err error) {
	sh, err = shotWhere(ctx, r.db, "done_ns > 0 and (? = '' or station = ?) order by done_ns desc, id desc limit 1", station, station)
	if errors.Is(err, ErrNotFound) {
		return sh, false, nil
	}
	if err != nil {
		return sh, false, fmt.Errorf("look up the last finished shot: %w", err)
	}
	return sh, true, nil
}
