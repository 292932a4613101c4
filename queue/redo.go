package queue

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"slices"
)

// Retry queues shots again, under that bundle, whatever became of them before.
// A shot that is running under this same bundle is refused; one that is queued
// or running under another is taken out of that first. The last result stays
// until the new one replaces it.
func (s *Store) Retry(ctx context.Context, shotIDs []int64, bundleID string) (Report, error) {
	return s.retry(ctx, shotIDs, func(Shot) (string, string) { return bundleID, "" })
}

// Release queues quarantined shots again, under the bundle they had.
func (s *Store) Release(ctx context.Context, shotIDs []int64) (Report, error) {
	return s.retry(ctx, shotIDs, func(sh Shot) (string, string) {
		if sh.State != StateQuarantined {
			return "", fmt.Sprintf("shot %d is %s, not quarantined", sh.ID, sh.State)
		}
		return sh.BundleID, ""
	})
}

// retry asks bundle for each shot's bundle, or a reason to refuse.
func (s *Store) retry(ctx context.Context, ids []int64, bundle func(Shot) (string, string)) (Report, error) {
	var rep Report
	err := batches(len(ids), func(i, j int) error {
		var part Report
		var cancel []int64
		err := s.inTx(ctx, func(tx *sql.Tx) error {
			for _, id := range ids[i:j] {
				running, no, err := s.retryOne(ctx, tx, id, bundle)
				switch {
				case err != nil:
					return fmt.Errorf("queue shot %d again: %w", id, err)
				case no != "":
					part.Refused = append(part.Refused, Refusal{Shot: id, Reason: no})
				default:
					part.Shots, cancel = append(part.Shots, id), append(cancel, running...)
				}
			}
			return nil
		})
		if err != nil {
			return err
		}
		s.supersede(cancel)
		rep.Shots, rep.Refused = append(rep.Shots, part.Shots...), append(rep.Refused, part.Refused...)
		if len(part.Shots) > 0 {
			s.changed()
		}
		return nil
	})
	return rep, err
}

func (s *Store) retryOne(ctx context.Context, tx *sql.Tx, id int64, bundle func(Shot) (string, string)) (running []int64, refuse string, err error) {
	sh, err := shotWhere(ctx, tx, "id = ?", id)
	if errors.Is(err, ErrNotFound) {
		return nil, "there is no such shot", nil
	}
	if err != nil {
		return nil, "", err
	}
	if sh.Streak == 0 || sh.Reference == 0 {
		return nil, fmt.Sprintf("shot %s of station %s is %s: it has one frame only", sh.Name, sh.Station, sh.State), nil
	}
	b, refuse := bundle(sh)
	if refuse != "" {
		return nil, refuse, nil
	}
	works, err := worksOf(ctx, tx, id)
	if err != nil {
		return nil, "", err
	}
	for _, w := range works {
		if w.state == workRunning && w.bundle == b {
			return nil, fmt.Sprintf("shot %s of station %s is running under this bundle", sh.Name, sh.Station), nil
		}
	}
	running, err = withdraw(ctx, tx, works)
	if err != nil {
		return nil, "", err
	}
	return running, "", s.requeue(ctx, tx, sh, b)
}

// requeue starts a shot over whose old jobs have been withdrawn.
func (s *Store) requeue(ctx context.Context, tx *sql.Tx, sh Shot, bundle string) error {
	if _, err := tx.ExecContext(ctx, "delete from work where shot_id = ?", sh.ID); err != nil {
		return err
	}
	if _, err := tx.ExecContext(ctx, `
		update shot set state = 'paired', reason = '', bundle_id = ?, replaced = 0, shown_pass = '', updated_ns = ?
		where id = ?`, bundle, ns(s.o.Clock()), sh.ID); err != nil {
		return err
	}
	if err := refresh(ctx, tx, sh.ID); err != nil {
		return err
	}
	var jobs []jobArgs
	for _, pass := range s.o.first() {
		jobs = append(jobs, jobArgs{sh.ID, pass, bundle})
	}
	return s.enqueue(ctx, tx, jobs)
}

// refresh notes that a shot is about to use its frames as they are now.
func refresh(ctx context.Context, tx *sql.Tx, shot int64) error {
	_, err := tx.ExecContext(ctx, "update frame set state = 'matched', reason = '' where shot_id = ? and state = 'replaced'", shot)
	return err
}

// Quarantine gives shots up by hand: they are not worked any more until they
// are released or queued again. Only shots that are not done can be.
func (s *Store) Quarantine(ctx context.Context, shotIDs []int64, reason string) (Report, error) {
	return s.stopShots(ctx, shotIDs, []State{StatePaired, StateRunning, StateFailed}, func(tx *sql.Tx, sh Shot) error {
		_, err := tx.ExecContext(ctx, `
			update work set state = 'quarantined', suspect = 0, reason = ?
			where shot_id = ? and state <> 'done'`, reason, sh.ID)
		if err != nil {
			return err
		}
		return s.settle(ctx, tx, sh.ID)
	})
}

// Part takes the two frames of a shot apart by hand. The shot keeps its streak
// frame and is held; the reference frame gets a held shot of its own. Neither
// is pending any more: only a Commit that names them pairs them again.
func (s *Store) Part(ctx context.Context, shotIDs []int64, reason string) (Report, error) {
	states := []State{StatePaired, StateRunning, StateFailed, StateDone, StateQuarantined}
	return s.stopShots(ctx, shotIDs, states, func(tx *sql.Tx, sh Shot) error {
		for _, q := range []string{
			"delete from work where shot_id = ?",
			`update shot set reference_frame = null, reference_path = '', gap_ns = 0, replaced = 0, verdict = '',
				summary = '', result_dir = '', shown_pass = '', shown_bundle = '', done_ns = 0 where id = ?`,
		} {
			if _, err := tx.ExecContext(ctx, q, sh.ID); err != nil {
				return err
			}
		}
		for _, id := range []int64{sh.Streak, sh.Reference} {
			f, err := frameByID(ctx, tx, id)
			if err != nil {
				return err
			}
			if f.Arm == Reference {
				f.ShotID = 0
			}
			if _, err := tx.ExecContext(ctx, "update frame set state = 'parted', reason = ? where id = ?", reason, id); err != nil {
				return err
			}
			if _, err := s.own(ctx, tx, f, StateHeld, reason); err != nil {
				return err
			}
		}
		return nil
	})
}

// stopShots withdraws the jobs of shots in one of the states and does something
// to each in the same transaction.
func (s *Store) stopShots(ctx context.Context, ids []int64, states []State, do func(*sql.Tx, Shot) error) (Report, error) {
	var rep Report
	for _, id := range ids {
		var running []int64
		refuse := ""
		err := s.inTx(ctx, func(tx *sql.Tx) error {
			sh, err := shotWhere(ctx, tx, "id = ?", id)
			if err != nil {
				return err
			}
			if !slices.Contains(states, sh.State) {
				refuse = fmt.Sprintf("shot %s of station %s is %s", sh.Name, sh.Station, sh.State)
				return nil
			}
			works, err := worksOf(ctx, tx, id)
			if err != nil {
				return err
			}
			if running, err = withdraw(ctx, tx, works); err != nil {
				return err
			}
			return do(tx, sh)
		})
		switch {
		case errors.Is(err, ErrNotFound):
			rep.Refused = append(rep.Refused, Refusal{Shot: id, Reason: "there is no such shot"})
		case err != nil:
			return rep, fmt.Errorf("stop shot %d: %w", id, err)
		case refuse != "":
			rep.Refused = append(rep.Refused, Refusal{Shot: id, Reason: refuse})
		default:
			rep.Shots = append(rep.Shots, id)
			s.supersede(running)
			s.changed()
		}
	}
	return rep, nil
}

// supersede cancels the contexts of jobs that have lost their shot.
func (s *Store) supersede(jobs []int64) {
	s.mu.Lock()
	defer s.mu.Unlock()
	for _, id := range jobs {
		if a, ok := s.active[id]; ok {
			a.cancel(errSuperseded)
		}
	}
}
