package queue

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"slices"
	"strings"
	"time"

	"github.com/riverqueue/river"
	"go.uber.org/zap"
)

// errFence says that an attempt ended after it had lost its job.
var errFence = errors.New("the attempt has lost its job")

// end is what an attempt's end changes.
type end struct {
	outcome string
	work    string        // new state of the pass
	reason  string        // for a person to read
	counts  bool          // it uses up an attempt
	pause   time.Duration // before the next one
	tell    error         // for River
}

// finish writes an attempt's end into the ledger and tells River.
func (r *runner) finish(ctx context.Context, job *river.Job[jobArgs], t Task, out Outcome, err error) error {
	if errors.Is(context.Cause(ctx), errSuperseded) {
		return r.drop(ctx, t, OutcomeSuperseded)
	}
	e := end{outcome: OutcomeDone, work: workDone}
	if err != nil {
		e = r.judge(ctx, t, err)
	}
	err = r.s.persist(ctx, func(keep context.Context, tx *sql.Tx) error {
		return r.s.conclude(keep, tx, job, t, e, out)
	})
	switch {
	case errors.Is(err, errFence):
		return r.drop(ctx, t, OutcomeDropped)
	case err != nil:
		// River's row still runs. If River cannot be told either, the job is
		// rescued later or recovered at the next Open; its attempt stays open.
		r.s.log().Error("could not write the end of an attempt", fields(t, err)...)
		return err
	}
	r.s.metrics.attempt(t.Pass, e.outcome)
	r.s.changed()
	return e.tell
}

func fields(t Task, err error) []zap.Field {
	return []zap.Field{zap.Int64("shot", t.ShotID), zap.String("station", t.Station), zap.String("name", t.Name),
		zap.String("pass", string(t.Pass)), zap.Int("attempt", t.Attempt), zap.Error(err)}
}

// judge decides what an error means.
func (r *runner) judge(ctx context.Context, t Task, err error) end {
	var later laterError
	var permanent permanentError
	text := err.Error()
	switch {
	case errors.Is(ctx.Err(), context.Canceled): // Run is stopping; whatever the error says, this is why
		return end{outcome: OutcomeInterrupted, work: workQueued, reason: "interrupted: the service was stopped",
			tell: fmt.Errorf("interrupted: %w", context.Canceled)}
	case errors.As(err, &later):
		// Many shots can wait for the same share: the worker, which knows
		// what is amiss, says so once.
		r.s.log().Debug("a shot must wait", append(fields(t, err), zap.Duration("pause", later.after))...)
		return end{outcome: OutcomeLater, work: workLater, reason: firstLine(text), pause: later.after,
			tell: river.JobSnooze(later.after)}
	case errors.As(err, &permanent):
		r.s.log().Error("gave a pass up", fields(t, err)...)
		return end{outcome: OutcomeGivenUp, work: workQuarantined, reason: firstLine(text), counts: true, tell: river.JobCancel(err)}
	case t.Attempt >= r.s.o.MaxAttempts:
		r.s.log().Error("gave a pass up", fields(t, err)...)
		return end{outcome: OutcomeGivenUp, work: workQuarantined, counts: true, tell: river.JobCancel(err),
			reason: fmt.Sprintf("given up after %d attempts: %s", t.Attempt, firstLine(text))}
	}
	r.s.log().Warn("an attempt failed", fields(t, err)...)
	return end{outcome: OutcomeFailed, work: workFailed, reason: firstLine(text), counts: true, pause: r.o.Backoff(t.Attempt), tell: err}
}

func firstLine(text string) string {
	line, _, _ := strings.Cut(text, "\n")
	return clip(line, maxReason)
}

// conclude is the transaction at an attempt's end. The fence is its second
// statement: no row, no result.
func (s *Store) conclude(ctx context.Context, tx *sql.Tx, job *river.Job[jobArgs], t Task, e end, out Outcome) error {
	now := s.o.Clock()
	if _, err := tx.ExecContext(ctx, "update attempt set ended_ns = ?, outcome = ?, error = ? where id = ? and ended_ns = 0",
		ns(now), e.outcome, errorText(e), t.AttemptID); err != nil {
		return err
	}
	next := int64(0)
	if e.pause > 0 {
		next = ns(now.Add(e.pause))
	}
	tries := 0
	if e.counts {
		tries = 1
	}
	suspect := t.Suspect && e.outcome == OutcomeInterrupted
	n, err := exec(ctx, tx, `
		update work set state = ?, reason = ?, tries = tries + ?, next_ns = ?, suspect = ?
		where shot_id = ? and pass = ? and job_id = ? and attempt_id = ? and state = 'running'`,
		e.work, e.reason, tries, next, suspect, t.ShotID, t.Pass, job.ID, t.AttemptID)
	if err != nil {
		return err
	}
	if n == 0 {
		return errFence
	}
	if t.Suspect && !suspect {
		if err := moveJob(ctx, tx, job.ID, queueOf(t.Pass)); err != nil {
			return err
		}
	}
	switch e.outcome {
	case OutcomeDone:
		if err := s.deliver(ctx, tx, job, t, out); err != nil {
			return err
		}
	case OutcomeLater:
		if err := foldPauses(ctx, tx, t); err != nil {
			return err
		}
	case OutcomeFailed:
		s.mu.Lock()
		s.next[job.ID] = time.Now().Add(e.pause) // River's clock, not ours
		s.mu.Unlock()
	}
	return s.settle(ctx, tx, t.ShotID)
}

// foldPauses keeps only the last of pauses that follow each other: a share that
// is away all night must not fill the ledger.
func foldPauses(ctx context.Context, tx *sql.Tx, t Task) error {
	_, err := tx.ExecContext(ctx, `
		delete from attempt where shot_id = ? and pass = ? and outcome = 'later' and id < ? and id > coalesce(
			(select max(id) from attempt where shot_id = ? and pass = ? and outcome <> 'later' and id < ?), 0)`,
		t.ShotID, t.Pass, t.AttemptID, t.ShotID, t.Pass, t.AttemptID)
	return err
}

func errorText(e end) string {
	if e.outcome == OutcomeDone {
		return ""
	}
	if e.tell != nil && (e.outcome == OutcomeFailed || e.outcome == OutcomeGivenUp) {
		return clip(e.tell.Error(), maxError)
	}
	return e.reason
}

// What the ledger keeps of an error, in bytes: a stack, but no core dump.
const (
	maxError  = 16 << 10
	maxReason = 500
)

func clip(text string, n int) string {
	if len(text) <= n {
		return text
	}
	return strings.ToValidUTF8(text[:n], "") + " …"
}

// deliver writes a result into the shot, queues the pass that follows, and
// marks the job as done.
func (s *Store) deliver(ctx context.Context, tx *sql.Tx, job *river.Job[jobArgs], t Task, out Outcome) error {
	sh, err := shotWhere(ctx, tx, "id = ?", t.ShotID)
	if err != nil {
		return err
	}
	if rank(t.Pass) >= rank(sh.ShownPass) {
		_, err := tx.ExecContext(ctx, `
			update shot set verdict = case when ? = '' then verdict else ? end,
				summary = case when ? = '' then summary else ? end,
				result_dir = case when ? = '' then result_dir else ? end,
				shown_pass = ?, shown_bundle = ? where id = ?`,
			out.Verdict, out.Verdict, string(out.Summary), string(out.Summary), out.ResultDir, out.ResultDir,
			t.Pass, t.Bundle, t.ShotID)
		if err != nil {
			return fmt.Errorf("write the result of shot %d: %w", t.ShotID, err)
		}
	}
	if t.Pass == Full || t.Pass == Quick && !slices.Contains(s.o.Passes, Full) {
		if _, err := tx.ExecContext(ctx, "update shot set done_ns = ? where id = ?", ns(s.o.Clock()), t.ShotID); err != nil {
			return err
		}
	}
	if t.Pass == Full && slices.Contains(s.o.Passes, Spread) {
		if err := s.enqueue(ctx, tx, []jobArgs{{t.ShotID, Spread, t.Bundle}}); err != nil {
			return err
		}
	}
	err = completeTx(ctx, tx, job)
	if errors.Is(err, river.ErrNotFound) {
		return errFence
	}
	return err
}

// rank orders the passes by whose result is shown.
func rank(p Pass) int { return slices.Index([]Pass{"", Quick, Full, Spread}, p) }

// drop notes that an attempt came to nothing because the job was taken away.
func (r *runner) drop(ctx context.Context, t Task, outcome string) error {
	r.s.log().Warn("an attempt's end was not used", append(fields(t, errFence), zap.String("outcome", outcome))...)
	err := r.s.persist(ctx, func(keep context.Context, tx *sql.Tx) error {
		_, err := tx.ExecContext(keep, "update attempt set ended_ns = ?, outcome = ? where id = ? and ended_ns = 0",
			ns(r.s.o.Clock()), outcome, t.AttemptID)
		return err
	})
	if err != nil {
		r.s.log().Error("could not write the end of an attempt", fields(t, err)...)
	}
	r.s.metrics.attempt(t.Pass, outcome)
	r.s.changed()
	return river.JobCancel(errStale)
}

// Pauses between tries to write the ledger, and how many tries are left once
// Run is stopping.
const (
	firstWait = 200 * time.Millisecond
	longWait  = 10 * time.Second
	lastTries = 3
)

// persist runs a transaction that must not be lost because the disk is full or
// away: it tries until it can, holding its slot, since without a ledger no other
// job could start either. Other faults it returns at once. It does not end with
// ctx, so that what was done is kept, but then it tries only a little longer. do
// gets a context that does not end with ctx.
func (s *Store) persist(ctx context.Context, do func(context.Context, *sql.Tx) error) error {
	keep := context.WithoutCancel(ctx)
	wait := firstWait
	for late := 0; ; {
		err := s.inTx(keep, func(tx *sql.Tx) error { return do(keep, tx) })
		if err == nil || !passing(err) {
			return err
		}
		if ctx.Err() != nil {
			if late++; late >= lastTries {
				return err
			}
			time.Sleep(firstWait)
			continue
		}
		s.log().Error("cannot write the ledger; trying again", zap.Duration("pause", wait), zap.Error(err))
		select {
		case <-ctx.Done():
		case <-time.After(wait):
		}
		wait = min(2*wait, longWait)
	}
}
