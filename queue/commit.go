package queue

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"strings"
	"time"
)

// Decision is what was found out about unmatched frames, by frame ID.
type Decision struct {
	Pairs   []Pair
	Lone    []Lone
	Held    []Held
	Waiting []int64
}

// Pair says that two frames show the same event.
type Pair struct {
	Streak, Reference int64
	Gap               time.Duration // reference time minus streak time, clocks corrected
}

// Lone says that a frame's partner never came.
type Lone struct {
	Frame  int64
	Reason string
}

// Held says that some frames could be paired in more than one way.
type Held struct {
	Streak, Reference []int64
	Reason            string
}

// Report says what Commit or Retry did.
type Report struct {
	Shots   []int64   // shots whose jobs were queued
	Moved   int       // frames that became lone, held or waiting
	Refused []Refusal // what could not be done, and why; the rest was
}

// Refusal is one thing that could not be done.
type Refusal struct {
	Shot   int64 // 0: none yet
	Frame  int64 // 0: no single frame
	Reason string
}

// shotBatch is how many shots share a transaction.
const shotBatch = 100

// Commit writes a decision down. Each new pair becomes a shot with its jobs, to
// be worked with the calibration of that bundle: shot and jobs are committed
// together, in transactions of 100 shots. Frames that are matched already stay
// as they are; so committing the same decision twice does nothing, and a pair
// that would give a frame a second shot is refused.
func (s *Store) Commit(ctx context.Context, d Decision, bundleID string) (Report, error) {
	var rep Report
	err := batches(len(d.Pairs), func(i, j int) error { return s.commitPairs(ctx, d.Pairs[i:j], bundleID, &rep) })
	if err != nil {
		return rep, fmt.Errorf("commit pairs: %w", err)
	}
	moves := d.moves()
	err = batches(len(moves), func(i, j int) error { return s.commitMoves(ctx, moves[i:j], &rep) })
	if err != nil {
		return rep, fmt.Errorf("commit frames: %w", err)
	}
	return rep, nil
}

func batches(n int, do func(i, j int) error) error {
	for i := 0; i < n; i += shotBatch {
		if err := do(i, min(i+shotBatch, n)); err != nil {
			return err
		}
	}
	return nil
}

func (s *Store) commitPairs(ctx context.Context, pairs []Pair, bundle string, rep *Report) error {
	var shots []int64
	var refused []Refusal
	err := s.inTx(ctx, func(tx *sql.Tx) error {
		var jobs []jobArgs
		for _, p := range pairs {
			id, no, err := s.pair(ctx, tx, p, bundle)
			switch {
			case err != nil:
				return fmt.Errorf("frames %d and %d: %w", p.Streak, p.Reference, err)
			case no != "":
				refused = append(refused, Refusal{Frame: p.Streak, Shot: id, Reason: no})
			case id != 0:
				shots = append(shots, id)
				for _, pass := range s.o.first() {
					jobs = append(jobs, jobArgs{id, pass, bundle})
				}
			}
		}
		return s.enqueue(ctx, tx, jobs)
	})
	if err != nil {
		return err
	}
	rep.Shots, rep.Refused = append(rep.Shots, shots...), append(rep.Refused, refused...)
	if len(shots) > 0 {
		s.changed()
	}
	return nil
}

// pair makes a shot of two frames. It returns 0 if they are one already, and a
// reason if they must not be.
func (s *Store) pair(ctx context.Context, tx *sql.Tx, p Pair, bundle string) (shot int64, refuse string, err error) {
	st, err := frameByID(ctx, tx, p.Streak)
	if err != nil {
		return 0, "", err
	}
	re, err := frameByID(ctx, tx, p.Reference)
	if err != nil {
		return 0, "", err
	}
	for _, f := range []Frame{st, re} {
		if f.State != FrameMatched && f.State != FrameReplaced {
			continue
		}
		if st.ShotID == re.ShotID {
			return 0, "", nil
		}
		return f.ShotID, fmt.Sprintf("the %s frame %s belongs to shot %d already", f.Arm, f.Path, f.ShotID), nil
	}
	switch {
	case st.Arm != Streak || re.Arm != Reference:
		return 0, fmt.Sprintf("%s is of the %s arm, %s of the %s arm: a shot takes one of each", st.Path, st.Arm, re.Path, re.Arm), nil
	case st.Station != re.Station:
		return 0, fmt.Sprintf("%s is of station %q, %s of station %q", st.Path, st.Station, re.Path, re.Station), nil
	case st.State == FrameRejected:
		return 0, fmt.Sprintf("the streak frame %s was rejected: %s", st.Path, st.Reason), nil
	case re.State == FrameRejected:
		return 0, fmt.Sprintf("the reference frame %s was rejected: %s", re.Path, re.Reason), nil
	}
	shot, err = s.join(ctx, tx, st, re, p.Gap, bundle)
	return shot, "", err
}

// join writes the shot of two frames that may be joined.
func (s *Store) join(ctx context.Context, tx *sql.Tx, st, re Frame, gap time.Duration, bundle string) (int64, error) {
	if re.ShotID != 0 {
		if err := s.dropOwn(ctx, tx, re.ShotID); err != nil {
			return 0, err
		}
	}
	shot, err := s.own(ctx, tx, st, StatePaired, "")
	if err != nil {
		return 0, err
	}
	now := ns(s.o.Clock())
	if _, err := tx.ExecContext(ctx, `
		update shot set reference_frame = ?, reference_path = ?, gap_ns = ?, state = 'paired', reason = '',
			bundle_id = ?, replaced = 0, updated_ns = ? where id = ?`,
		re.ID, re.Path, int64(gap), bundle, now, shot); err != nil {
		return 0, err
	}
	_, err = tx.ExecContext(ctx, "update frame set state = 'matched', reason = '', shot_id = ? where id in (?, ?)", shot, st.ID, re.ID)
	return shot, err
}

// own returns the shot of an unmatched frame, making it if there is none.
func (s *Store) own(ctx context.Context, tx *sql.Tx, f Frame, state State, reason string) (int64, error) {
	now := ns(s.o.Clock())
	if f.ShotID != 0 {
		_, err := tx.ExecContext(ctx, "update shot set state = ?, reason = ?, updated_ns = ? where id = ?", state, reason, now, f.ShotID)
		return f.ShotID, err
	}
	taken := ns(f.Stamp)
	if !f.HasTime {
		taken = ns(f.Seen)
	}
	name, err := nameFor(ctx, tx, f)
	if err != nil {
		return 0, err
	}
	frameColumn, pathColumn, otherPath := "streak_frame", "streak_path", "reference_path"
	if f.Arm == Reference {
		frameColumn, pathColumn, otherPath = "reference_frame", "reference_path", "streak_path"
	}
	var id int64
	err = tx.QueryRowContext(ctx, fmt.Sprintf(`
		insert into shot (station, name, taken_ns, %s, %s, %s, state, reason, created_ns, updated_ns)
		values (?, ?, ?, ?, ?, '', ?, ?, ?, ?) returning id`, frameColumn, pathColumn, otherPath),
		f.Station, name, taken, f.ID, f.Path, state, reason, now, now).Scan(&id)
	if err != nil {
		return 0, err
	}
	_, err = tx.ExecContext(ctx, "update frame set shot_id = ? where id = ?", id, f.ID)
	return id, err
}

// nameFor names a shot after its frame: the path without its ending, or the
// whole path if another streak frame differs only in the ending.
func nameFor(ctx context.Context, tx *sql.Tx, f Frame) (string, error) {
	name := stem(f.Path)
	if f.Arm == Reference {
		return name, nil
	}
	var n int
	err := tx.QueryRowContext(ctx, "select count(*) from shot where station = ? and name = ? and streak_frame is not null", f.Station, name).Scan(&n)
	if n > 0 {
		name = f.Path
	}
	return name, err
}

// stem cuts the ending off a path, with either kind of slash.
func stem(path string) string {
	dot := strings.LastIndexByte(path, '.')
	if dot <= strings.LastIndexAny(path, `/\`)+1 {
		return path
	}
	return path[:dot]
}

func frameByID(ctx context.Context, q querier, id int64) (Frame, error) {
	var f Frame
	err := f.scan(q.QueryRowContext(ctx, "select "+frameColumns+" from frame where id = ?", id).Scan)
	if errors.Is(err, sql.ErrNoRows) {
		return f, fmt.Errorf("there is no frame %d", id)
	}
	return f, err
}
