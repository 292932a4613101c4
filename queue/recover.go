package queue

import (
	"context"
	"database/sql"
	"errors"
	"fmt"

	"go.uber.org/zap"
)

const crashText = "the service ended while it worked on this shot"

// recover puts in order what a process left that did not come to its end, in
// one transaction: see "What survives a crash" in the package comment.
func (s *Store) recover(ctx context.Context) error {
	return s.inTx(ctx, func(tx *sql.Tx) error {
		n, err := resetRunning(ctx, tx)
		if err != nil {
			return err
		}
		if _, err := tx.ExecContext(ctx,
			"update attempt set ended_ns = ?, outcome = ?, error = ? where ended_ns = 0",
			ns(s.o.Clock()), OutcomeCrashed, crashText); err != nil {
			return fmt.Errorf("end open attempts: %w", err)
		}
		works, err := worksWhere(ctx, tx, "state = 'running'")
		if err != nil {
			return fmt.Errorf("find running work: %w", err)
		}
		for _, w := range works {
			if err := s.suspect(ctx, tx, w); err != nil {
				return fmt.Errorf("take up the %s pass of shot %d again: %w", w.pass, w.shot, err)
			}
		}
		if n > 0 || len(works) > 0 {
			s.log().Warn("the last run ended while it worked",
				zap.Int64("jobs_given_back", n), zap.Int("suspects", len(works)))
		}
		return s.requeueLost(ctx, tx)
	})
}

// suspect counts a crash against a pass. It runs next and alone, or not again.
func (s *Store) suspect(ctx context.Context, tx *sql.Tx, w workRow) error {
	w.tries++
	if w.tries >= s.o.MaxAttempts {
		reason := fmt.Sprintf("given up after %d attempts: %s", w.tries, crashText)
		if err := retireJob(ctx, tx, w.job); err != nil {
			return err
		}
		if _, err := tx.ExecContext(ctx, `
			update work set state = 'quarantined', tries = ?, suspect = 0, reason = ?
			where shot_id = ? and pass = ?`, w.tries, reason, w.shot, w.pass); err != nil {
			return err
		}
		return s.settle(ctx, tx, w.shot)
	}
	if err := moveJob(ctx, tx, w.job, queueSuspect); err != nil {
		return err
	}
	if _, err := tx.ExecContext(ctx, `
		update work set state = 'queued', tries = ?, suspect = 1, reason = ?
		where shot_id = ? and pass = ?`, w.tries, crashText, w.shot, w.pass); err != nil {
		return err
	}
	return s.settle(ctx, tx, w.shot)
}

// requeueLost queues again what waits in the ledger but not in River.
func (s *Store) requeueLost(ctx context.Context, tx *sql.Tx) error {
	rows, err := tx.QueryContext(ctx, lostJobs)
	if err != nil {
		return fmt.Errorf("compare ledger and jobs: %w", err)
	}
	defer rows.Close()
	var jobs []jobArgs
	for rows.Next() {
		var j jobArgs
		if err := rows.Scan(&j.Shot, &j.Pass, &j.Bundle); err != nil {
			return err
		}
		jobs = append(jobs, j)
	}
	if err := errors.Join(rows.Err(), rows.Close()); err != nil {
		return fmt.Errorf("compare ledger and jobs: %w", err)
	}
	if len(jobs) > 0 {
		s.log().Warn("jobs were missing and are queued again", zap.Int("jobs", len(jobs)))
	}
	return s.enqueue(ctx, tx, jobs)
}
