package queue

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"time"
)

// Change says what AddFrames found about a frame file.
type Change string

// What can have become of a frame file.
const (
	FrameNew     Change = "new"
	FrameSame    Change = "same"    // known, with this size and time: nothing was done
	FrameChanged Change = "changed" // other content under a known name, not matched yet: it is paired anew
	FrameStale   Change = "stale"   // other content under a name that a shot was made from: see Shot.Replaced
)

// Added is AddFrames' answer for one frame.
type Added struct {
	ID     int64
	Change Change
	ShotID int64 // of FrameStale: the shot that was made from the earlier content
}

// frameBatch is how many frames share a transaction.
const frameBatch = 1000

// AddFrames enters frame files into the ledger, or their new content, and
// answers for each in order. Adding the same content again does nothing, unless
// it was rejected and is not any more (the stamp's pattern was mended). It works in transactions of 1000 frames; after an error, add all again.
func (s *Store) AddFrames(ctx context.Context, frames []Frame) ([]Added, error) {
	out := make([]Added, 0, len(frames))
	for len(frames) > 0 {
		n := min(len(frames), frameBatch)
		var part []Added
		err := s.inTx(ctx, func(tx *sql.Tx) error {
			var err error
			part, err = s.addBatch(ctx, tx, frames[:n])
			return err
		})
		if err != nil {
			return out, err
		}
		out, frames = append(out, part...), frames[n:]
		for _, a := range part {
			if a.Change != FrameSame {
				s.changed()
				break
			}
		}
	}
	return out, nil
}

func (s *Store) addBatch(ctx context.Context, tx *sql.Tx, frames []Frame) ([]Added, error) {
	find, err := tx.PrepareContext(ctx,
		"select id, size, mtime_ns, state, coalesce(shot_id, 0) from frame where station = ? and arm = ? and path = ?")
	if err != nil {
		return nil, fmt.Errorf("add frames: %w", err)
	}
	defer find.Close()
	out := make([]Added, len(frames))
	for i, f := range frames {
		if f.Arm != Streak && f.Arm != Reference || f.Station == "" || f.Path == "" {
			return nil, fmt.Errorf("add frame %q of station %q: arm is %q: station, arm and path must be given", f.Path, f.Station, f.Arm)
		}
		var old Frame
		var mtime int64
		err := find.QueryRowContext(ctx, f.Station, f.Arm, f.Path).Scan(&old.ID, &old.Size, &mtime, &old.State, &old.ShotID)
		switch {
		case errors.Is(err, sql.ErrNoRows):
			out[i], err = s.insertFrame(ctx, tx, f)
		case err == nil && old.Size == f.Size && mtime == ns(f.ModTime) &&
			(old.State != FrameRejected || f.State == FrameRejected):
			out[i] = Added{ID: old.ID, Change: FrameSame, ShotID: old.ShotID}
		case err == nil:
			out[i], err = s.changeFrame(ctx, tx, old, f)
		}
		if err != nil {
			return nil, fmt.Errorf("add frame %q of station %q: %w", f.Path, f.Station, err)
		}
	}
	return out, nil
}

// entry is the state and reason with which a frame enters.
func entry(f Frame) (FrameState, string) {
	if f.State == FrameRejected {
		return FrameRejected, f.Reason
	}
	return FrameWaiting, ""
}

func (s *Store) insertFrame(ctx context.Context, tx *sql.Tx, f Frame) (Added, error) {
	state, reason := entry(f)
	var id int64
	err := tx.QueryRowContext(ctx, `
		insert into frame (station, arm, path, size, mtime_ns, stamp_ns, has_time, shot_no, has_shot,
			stamp_source, weak, state, reason, seen_ns)
		values (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?) returning id`,
		f.Station, f.Arm, f.Path, f.Size, ns(f.ModTime), ns(f.Stamp), f.HasTime, f.Shot, f.HasShot,
		f.StampSource, f.Weak, state, reason, ns(s.o.Clock())).Scan(&id)
	return Added{ID: id, Change: FrameNew}, err
}

// changeFrame enters new content of a known file. A shot made from the old
// content keeps its result and is marked; what was not matched starts over.
func (s *Store) changeFrame(ctx context.Context, tx *sql.Tx, old, f Frame) (Added, error) {
	state, reason := entry(f)
	change := FrameChanged
	matched := old.State == FrameMatched || old.State == FrameReplaced
	if matched {
		state, change = FrameReplaced, FrameStale
		reason = "the file changed after it was matched"
	}
	now := ns(s.o.Clock())
	_, err := tx.ExecContext(ctx, `
		update frame set size = ?, mtime_ns = ?, stamp_ns = ?, has_time = ?, shot_no = ?, has_shot = ?,
			stamp_source = ?, weak = ?, state = ?, reason = ?, seen_ns = ? where id = ?`,
		f.Size, ns(f.ModTime), ns(f.Stamp), f.HasTime, f.Shot, f.HasShot,
		f.StampSource, f.Weak, state, reason, now, old.ID)
	if err != nil {
		return Added{}, err
	}
	added := Added{ID: old.ID, Change: change, ShotID: old.ShotID}
	switch {
	case matched:
		_, err = tx.ExecContext(ctx, "update shot set replaced = 1, updated_ns = ? where id = ?", now, old.ShotID)
	case old.ShotID != 0:
		added.ShotID = 0
		err = s.dropOwn(ctx, tx, old.ShotID)
	}
	return added, err
}

// dropOwn removes the row of a shot that consists of one unmatched frame.
func (s *Store) dropOwn(ctx context.Context, tx *sql.Tx, shot int64) error {
	if _, err := tx.ExecContext(ctx, "update frame set shot_id = null where shot_id = ?", shot); err != nil {
		return err
	}
	_, err := tx.ExecContext(ctx, "delete from shot where id = ? and (streak_frame is null or reference_frame is null)", shot)
	return err
}

// Print is what tells one content of a file from another.
type Print struct {
	Size    int64
	ModTime time.Time
}

// Known returns the frame files of an arm that need not be looked at again, by
// path: all but the rejected ones, which another configuration may take.
func (r *Reader) Known(ctx context.Context, station string, arm Arm) (map[string]Print, error) {
	rows, err := r.db.QueryContext(ctx, "select path, size, mtime_ns from frame where station = ? and arm = ? and state <> 'rejected'", station, arm)
	if err != nil {
		return nil, fmt.Errorf("list the frames known of station %q: %w", station, err)
	}
	defer rows.Close()
	out := map[string]Print{}
	for rows.Next() {
		var path string
		var p Print
		var mtime int64
		if err := rows.Scan(&path, &p.Size, &mtime); err != nil {
			return nil, fmt.Errorf("list the frames known of station %q: %w", station, err)
		}
		p.ModTime = at(mtime)
		out[path] = p
	}
	return out, rows.Err()
}

// Pending returns the frames of both arms that could still find a partner:
// waiting and held ones, and lone ones seen since loneSince (a partner may come
// late). Rejected and parted frames are not among them.
func (r *Reader) Pending(ctx context.Context, station string, loneSince time.Time) ([]Frame, error) {
	return r.frames(ctx, `station = ? and (state in ('waiting', 'held') or state = 'lone' and seen_ns >= ?)
		order by seen_ns, id`, station, ns(loneSince))
}

// Frames returns the frames of a station in one state, newest first, at most
// limit of them.
func (r *Reader) Frames(ctx context.Context, station string, state FrameState, limit int) ([]Frame, error) {
	return r.frames(ctx, "station = ? and state = ? order by seen_ns desc, id desc limit ?", station, state, limit)
}

const frameColumns = `id, station, arm, path, size, mtime_ns, stamp_ns, has_time, shot_no, has_shot,
	stamp_source, weak, state, reason, coalesce(shot_id, 0), seen_ns`

func (f *Frame) scan(scan func(...any) error) error {
	var mtime, stamp, seen int64
	err := scan(&f.ID, &f.Station, &f.Arm, &f.Path, &f.Size, &mtime, &stamp, &f.HasTime, &f.Shot, &f.HasShot,
		&f.StampSource, &f.Weak, &f.State, &f.Reason, &f.ShotID, &seen)
	f.ModTime, f.Stamp, f.Seen = at(mtime), at(stamp), at(seen)
	return err
}

func (r *Reader) frames(ctx context.Context, where string, args ...any) ([]Frame, error) {
	rows, err := r.db.QueryContext(ctx, "select "+frameColumns+" from frame where "+where, args...)
	if err != nil {
		return nil, fmt.Errorf("list frames: %w", err)
	}
	defer rows.Close()
	var out []Frame
	for rows.Next() {
		var f Frame
		if err := f.scan(rows.Scan); err != nil {
			return nil, fmt.Errorf("list frames: %w", err)
		}
		out = append(out, f)
	}
	return out, rows.Err()
}
