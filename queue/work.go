package queue

import (
	"context"
	"database/sql"
	"encoding/json"
	"errors"
	"fmt"
	"runtime/debug"
	"time"

	"github.com/riverqueue/river"
	"go.uber.org/zap"
)

// busyPause is how long a job waits for a superseded attempt to return.
const busyPause = 200 * time.Millisecond

// Work does one job of River's. Its error is for River alone: what happened is
// in the ledger before it returns.
func (r *runner) Work(ctx context.Context, job *river.Job[jobArgs]) error {
	ctx, cancel := context.WithCancelCause(ctx)
	defer cancel(nil)
	task, err := r.s.claim(ctx, job, cancel)
	switch {
	case errors.Is(err, errStale):
		return river.JobCancel(err)
	case errors.Is(err, errBusy):
		return river.JobSnooze(busyPause)
	case err != nil:
		if ctx.Err() == nil {
			r.s.log().Error("could not start a job; it will be tried again", zap.Int64("shot", job.Args.Shot),
				zap.String("pass", string(job.Args.Pass)), zap.Error(err))
		}
		return err
	}
	defer r.s.letGo(job.ID)
	out, err := r.do(ctx, task)
	return r.finish(ctx, job, task, out, err)
}

// do calls the worker, with a limit of time and a catch for panics.
func (r *runner) do(ctx context.Context, t Task) (out Outcome, err error) {
	if r.o.Timeout > 0 {
		var cancel context.CancelFunc
		ctx, cancel = context.WithTimeoutCause(ctx, r.o.Timeout, fmt.Errorf("it took longer than %v", r.o.Timeout))
		defer cancel()
	}
	defer func() {
		if p := recover(); p != nil {
			err = fmt.Errorf("panic: %v\n%s", p, debug.Stack())
			return
		}
		switch {
		case err != nil && errors.Is(ctx.Err(), context.DeadlineExceeded):
			err = fmt.Errorf("%w: %w", context.Cause(ctx), err)
		case err == nil && len(out.Summary) > 0 && !json.Valid(out.Summary):
			err = Permanent(errors.New("the worker's summary is not JSON: this is a fault of the program"))
		}
	}()
	return r.w.Do(ctx, t)
}

// claim starts an attempt: one transaction writes the attempt and makes the
// shot running. It refuses jobs that lost their shot (errStale) and waits for
// attempts of the same pass that have not returned yet (errBusy).
func (s *Store) claim(ctx context.Context, job *river.Job[jobArgs], cancel context.CancelCauseFunc) (Task, error) {
	a := job.Args
	if !s.take(job.ID, activeJob{a.Shot, a.Pass, cancel}) {
		return Task{}, errBusy
	}
	var t Task
	err := s.persist(ctx, func(ctx context.Context, tx *sql.Tx) error {
		works, err := worksWhere(ctx, tx, "shot_id = ? and pass = ? and job_id = ?", a.Shot, a.Pass, job.ID)
		if err != nil {
			return err
		}
		if len(works) == 0 || works[0].state == workDone || works[0].state == workQuarantined {
			return errStale
		}
		t, err = s.begin(ctx, tx, works[0])
		return err
	})
	if err != nil {
		s.letGo(job.ID)
		return t, err
	}
	s.changed()
	return t, nil
}

func (s *Store) begin(ctx context.Context, tx *sql.Tx, w workRow) (Task, error) {
	sh, err := shotWhere(ctx, tx, "id = ?", w.shot)
	if err != nil {
		return Task{}, err
	}
	now := ns(s.o.Clock())
	// An attempt of this pass that is still open lost its end: the ledger could
	// not be written when it returned.
	if w.attempt != 0 {
		if _, err := tx.ExecContext(ctx, "update attempt set ended_ns = ?, outcome = ? where id = ? and ended_ns = 0",
			now, OutcomeDropped, w.attempt); err != nil {
			return Task{}, err
		}
	}
	t := Task{ShotID: sh.ID, Station: sh.Station, Name: sh.Name, StreakPath: sh.StreakPath,
		ReferencePath: sh.ReferencePath, Taken: sh.Taken, Pass: w.pass, Bundle: w.bundle, Attempt: w.tries + 1, Suspect: w.suspect}
	if err := tx.QueryRowContext(ctx, "select exists (select 1 from frame where id in (?, ?) and weak)",
		sh.Streak, sh.Reference).Scan(&t.Weak); err != nil {
		return Task{}, err
	}
	err = tx.QueryRowContext(ctx, `
		insert into attempt (shot_id, pass, bundle_id, number, started_ns, host) values (?, ?, ?, ?, ?, ?) returning id`,
		w.shot, w.pass, w.bundle, t.Attempt, now, s.o.Host).Scan(&t.AttemptID)
	if err != nil {
		return Task{}, err
	}
	if _, err := tx.ExecContext(ctx, `
		update work set state = 'running', attempt_id = ?, next_ns = 0, reason = '' where shot_id = ? and pass = ?`,
		t.AttemptID, w.shot, w.pass); err != nil {
		return Task{}, err
	}
	if sh.Replaced && sh.ShownPass == "" { // not worked on yet: it takes the files as they are now
		if _, err := tx.ExecContext(ctx, "update shot set replaced = 0 where id = ?", sh.ID); err != nil {
			return Task{}, err
		}
		if err := refresh(ctx, tx, sh.ID); err != nil {
			return Task{}, err
		}
	}
	return t, s.settle(ctx, tx, sh.ID)
}

// take enters a job among the active ones, unless another job of the same pass
// over the same shot is there.
func (s *Store) take(job int64, a activeJob) bool {
	s.mu.Lock()
	defer s.mu.Unlock()
	for _, b := range s.active {
		if b.shot == a.shot && b.pass == a.pass {
			return false
		}
	}
	s.active[job] = a
	return true
}

func (s *Store) letGo(job int64) {
	s.mu.Lock()
	defer s.mu.Unlock()
	delete(s.active, job)
}
