package queue

import (
	"context"
	"database/sql"
	"fmt"
)

// move gives one unmatched frame another state. bare frames are part of another
// frame's shot to be and get no row of their own.
type move struct {
	frame  int64
	to     FrameState
	reason string
	bare   bool
}

func (d Decision) moves() []move {
	var out []move
	for _, l := range d.Lone {
		out = append(out, move{frame: l.Frame, to: FrameLone, reason: l.Reason})
	}
	for _, h := range d.Held {
		for _, id := range h.Streak {
			out = append(out, move{frame: id, to: FrameHeld, reason: h.Reason})
		}
		for _, id := range h.Reference {
			out = append(out, move{frame: id, to: FrameHeld, reason: h.Reason, bare: len(h.Streak) > 0})
		}
	}
	for _, id := range d.Waiting {
		out = append(out, move{frame: id, to: FrameWaiting})
	}
	return out
}

func (s *Store) commitMoves(ctx context.Context, moves []move, rep *Report) error {
	moved := 0
	var refused []Refusal
	err := s.inTx(ctx, func(tx *sql.Tx) error {
		for _, m := range moves {
			f, err := frameByID(ctx, tx, m.frame)
			if err != nil {
				return err
			}
			switch f.State {
			case FrameMatched, FrameReplaced, FrameRejected, FrameParted:
				refused = append(refused, Refusal{Frame: f.ID, Shot: f.ShotID,
					Reason: fmt.Sprintf("the %s frame %s is %s and cannot become %s", f.Arm, f.Path, f.State, m.to)})
				continue
			}
			if f.State == m.to && f.Reason == m.reason && (f.ShotID == 0) == m.bare {
				continue
			}
			if err := s.move(ctx, tx, f, m); err != nil {
				return fmt.Errorf("frame %d: %w", m.frame, err)
			}
			moved++
		}
		return nil
	})
	if err != nil {
		return err
	}
	rep.Moved, rep.Refused = rep.Moved+moved, append(rep.Refused, refused...)
	if moved > 0 {
		s.changed()
	}
	return nil
}

func (s *Store) move(ctx context.Context, tx *sql.Tx, f Frame, m move) error {
	_, err := tx.ExecContext(ctx, "update frame set state = ?, reason = ? where id = ?", m.to, m.reason, f.ID)
	if err != nil {
		return err
	}
	if m.bare {
		if f.ShotID == 0 {
			return nil
		}
		return s.dropOwn(ctx, tx, f.ShotID)
	}
	_, err = s.own(ctx, tx, f, State(m.to), m.reason) // the words are the same
	return err
}
