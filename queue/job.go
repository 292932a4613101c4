package queue

import (
	"context"
	"database/sql"
	"fmt"

	"github.com/riverqueue/river"
	"github.com/riverqueue/river/rivertype"
)

// jobArgs are the whole of a job's identity, and its unique key.
type jobArgs struct {
	Shot   int64  `json:"shot" river:"unique"`
	Pass   Pass   `json:"pass" river:"unique"`
	Bundle string `json:"bundle" river:"unique"`
}

// Kind names the one kind of job there is.
func (jobArgs) Kind() string { return "shot" }

// River's queues.
const (
	queueQuick   = "quick"
	queueFull    = "full"    // full and spread
	queueSuspect = "suspect" // what was running when a process died: first and alone
)

// riverAttempts is out of reach: when to give up is decided here, where an
// interruption and a pause do not count and a crash does.
const riverAttempts = 10000

func queueOf(p Pass) string {
	if p == Quick {
		return queueQuick
	}
	return queueFull
}

func priorityOf(p Pass) int {
	switch p {
	case Quick:
		return 1
	case Full:
		return 2
	default:
		return 4
	}
}

func insertOpts(p Pass) *river.InsertOpts {
	return &river.InsertOpts{
		MaxAttempts: riverAttempts,
		Priority:    priorityOf(p),
		Queue:       queueOf(p),
		UniqueOpts: river.UniqueOpts{ByArgs: true, ByState: []rivertype.JobState{
			rivertype.JobStateAvailable, rivertype.JobStatePending, rivertype.JobStateRunning,
			rivertype.JobStateRetryable, rivertype.JobStateScheduled,
		}},
	}
}

// enqueue makes or renews the rows of work for the passes of the shots, with
// their jobs. A job of the same shot, pass and bundle that is not finished is
// taken over as it is.
func (s *Store) enqueue(ctx context.Context, tx *sql.Tx, jobs []jobArgs) error {
	if len(jobs) == 0 {
		return nil
	}
	params := make([]river.InsertManyParams, len(jobs))
	for i, j := range jobs {
		params[i] = river.InsertManyParams{Args: j, InsertOpts: insertOpts(j.Pass)}
	}
	res, err := s.client.InsertManyTx(ctx, tx, params)
	if err != nil {
		return fmt.Errorf("queue jobs: %w", err)
	}
	now := ns(s.o.Clock())
	for i, j := range jobs {
		_, err := tx.ExecContext(ctx, `
			insert into work (shot_id, pass, bundle_id, job_id, state, tries, attempt_id, suspect, queued_ns, next_ns, reason)
			values (?, ?, ?, ?, 'queued', 0, 0, 0, ?, 0, '')
			on conflict (shot_id, pass) do update set
				bundle_id = excluded.bundle_id, job_id = excluded.job_id, state = excluded.state, tries = 0,
				attempt_id = 0, suspect = 0, queued_ns = excluded.queued_ns, next_ns = 0, reason = ''`,
			j.Shot, j.Pass, j.Bundle, res[i].Job.ID, now)
		if err != nil {
			return fmt.Errorf("queue the %s pass of shot %d: %w", j.Pass, j.Shot, err)
		}
	}
	return nil
}

// workRow is one pass over one shot.
type workRow struct {
	shot    int64
	pass    Pass
	bundle  string
	job     int64
	state   string
	tries   int
	attempt int64
	suspect bool
	reason  string
}

const workColumns = "shot_id, pass, bundle_id, job_id, state, tries, attempt_id, suspect, reason"

func (w *workRow) scan(scan func(...any) error) error {
	return scan(&w.shot, &w.pass, &w.bundle, &w.job, &w.state, &w.tries, &w.attempt, &w.suspect, &w.reason)
}

// worksOf lists the passes of a shot.
func worksOf(ctx context.Context, q querier, shot int64) ([]workRow, error) {
	return worksWhere(ctx, q, "shot_id = ?", shot)
}

func worksWhere(ctx context.Context, q querier, where string, args ...any) ([]workRow, error) {
	rows, err := q.QueryContext(ctx, "select "+workColumns+" from work where "+where, args...)
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	var out []workRow
	for rows.Next() {
		var w workRow
		if err := w.scan(rows.Scan); err != nil {
			return nil, err
		}
		out = append(out, w)
	}
	return out, rows.Err()
}

// settle sets the state of a shot from its passes.
func (s *Store) settle(ctx context.Context, tx *sql.Tx, shot int64) error {
	works, err := worksOf(ctx, tx, shot)
	if err != nil {
		return fmt.Errorf("settle shot %d: %w", shot, err)
	}
	state, reason, ok := derive(works)
	if !ok {
		return nil
	}
	_, err = tx.ExecContext(ctx, "update shot set state = ?, reason = ?, updated_ns = ? where id = ?",
		state, reason, ns(s.o.Clock()), shot)
	if err != nil {
		return fmt.Errorf("settle shot %d: %w", shot, err)
	}
	return nil
}

// derive says what state a shot's passes put it in; ok is false if it has none
// that decides.
func derive(works []workRow) (state State, reason string, ok bool) {
	var main *workRow
	running := false
	for i := range works {
		w := &works[i]
		if w.pass == Full || w.pass == Quick && main == nil {
			main = w
		}
		running = running || w.state == workRunning && w.pass != Spread
	}
	if main == nil {
		return "", "", false
	}
	switch main.state {
	case workDone:
		return StateDone, "", true
	case workQuarantined:
		return StateQuarantined, main.reason, true
	case workFailed:
		if !running {
			return StateFailed, main.reason, true
		}
	}
	if running {
		return StateRunning, "", true
	}
	return StatePaired, main.reason, true
}

// withdraw takes back every unfinished pass of a shot from River, leaving its
// rows of work as they are. It returns the jobs that are running, whose contexts
// the caller must cancel after the commit; their ends will fail at the fence.
func withdraw(ctx context.Context, tx *sql.Tx, works []workRow) (running []int64, err error) {
	for _, w := range works {
		if w.state == workRunning {
			running = append(running, w.job)
		}
		if err := retireJob(ctx, tx, w.job); err != nil {
			return nil, fmt.Errorf("take back the %s pass of shot %d: %w", w.pass, w.shot, err)
		}
	}
	return running, nil
}
