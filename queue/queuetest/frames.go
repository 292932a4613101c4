package queuetest

import (
	"testing"
	"time"

	"unsheard/queue"
)

func framesOnce(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{})
	f := frame(queue.Streak, 1)
	first := b.add(f, frame(queue.Streak, 2), frame(queue.Reference, 1))
	again, err := b.AddFrames(b.ctx, []queue.Frame{f})
	if err != nil {
		t.Fatal(err)
	}
	if again[0].ID != first[0] || again[0].Change != queue.FrameSame {
		t.Errorf("same frame again: got %+v, want ID %d, same", again[0], first[0])
	}
	known, err := b.Known(b.ctx, "bay", queue.Streak)
	if err != nil {
		t.Fatal(err)
	}
	if len(known) != 2 || known[f.Path].Size != f.Size || !known[f.Path].ModTime.Equal(f.ModTime) {
		t.Errorf("known: got %v, want 2 with %q as added", known, f.Path)
	}
	pending, err := b.Pending(b.ctx, "bay", time.Time{})
	if err != nil {
		t.Fatal(err)
	}
	if len(pending) != 3 {
		t.Fatalf("pending: got %d, want 3", len(pending))
	}
	got := pending[0]
	if got.ID != first[0] || !got.Stamp.Equal(f.Stamp) || got.Shot != 1 || !got.HasShot || !got.HasTime ||
		got.StampSource != "name" || got.State != queue.FrameWaiting || got.Seen.IsZero() {
		t.Errorf("frame came back as %+v", got)
	}
	other, err := b.Pending(b.ctx, "annex", time.Time{})
	if err != nil || len(other) != 0 {
		t.Errorf("pending of another station: got %v, %v, want none", other, err)
	}
	if _, err := b.AddFrames(b.ctx, []queue.Frame{{Station: "bay", Path: "x"}}); err == nil {
		t.Error("a frame without an arm was taken")
	}
}

func framesChanged(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{})
	shot := b.shots(1, 2, "b1")[0]
	lone := b.add(frame(queue.Streak, 2))[0]
	b.commit(queue.Decision{Lone: []queue.Lone{{Frame: lone, Reason: "nobody came"}}}, "b1")

	matched, unmatched := frame(queue.Streak, 1), frame(queue.Streak, 2)
	matched.Size++
	unmatched.ModTime = unmatched.ModTime.Add(time.Nanosecond)
	got, err := b.AddFrames(b.ctx, []queue.Frame{matched, unmatched})
	if err != nil {
		t.Fatal(err)
	}
	if got[0].Change != queue.FrameStale || got[0].ShotID != shot {
		t.Errorf("changed after it was matched: got %+v, want stale, shot %d", got[0], shot)
	}
	if got[1].Change != queue.FrameChanged || got[1].ID != lone {
		t.Errorf("changed before it was matched: got %+v, want changed, ID %d", got[1], lone)
	}
	if sh, _ := b.shot(shot); !sh.Replaced || sh.State != queue.StatePaired {
		t.Errorf("its shot: replaced %v, state %s, want true, paired", sh.Replaced, sh.State)
	}
	replaced, err := b.Frames(b.ctx, "bay", queue.FrameReplaced, 10)
	if err != nil || len(replaced) != 1 || replaced[0].Reason == "" || replaced[0].Size != matched.Size {
		t.Errorf("replaced frames: got %+v, %v", replaced, err)
	}
	pending, err := b.Pending(b.ctx, "bay", time.Now().Add(time.Hour))
	if err != nil || len(pending) != 1 || pending[0].ID != lone {
		t.Errorf("pending: got %+v, %v, want the changed lone frame, waiting again", pending, err)
	}
}

func framesRejected(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{})
	bad := frame(queue.Streak, 1)
	bad.State, bad.Reason = queue.FrameRejected, "the name holds no time"
	ids := b.add(bad, frame(queue.Reference, 1))
	if p, err := b.Pending(b.ctx, "bay", time.Time{}); err != nil || len(p) != 1 {
		t.Errorf("pending: got %v, %v, want the reference frame only", p, err)
	}
	got, err := b.Frames(b.ctx, "bay", queue.FrameRejected, 10)
	if err != nil || len(got) != 1 || got[0].Reason != bad.Reason {
		t.Errorf("rejected: got %v, %v", got, err)
	}
	rep := b.commit(queue.Decision{Pairs: []queue.Pair{{Streak: ids[0], Reference: ids[1]}}}, "b1")
	if len(rep.Shots) != 0 || len(rep.Refused) != 1 {
		t.Errorf("pair with a rejected frame: got %+v, want it refused", rep)
	}
	if known, err := b.Known(b.ctx, "bay", queue.Streak); err != nil || len(known) != 0 {
		t.Errorf("known: got %v, %v, want it left out, so that it is looked at again", known, err)
	}
	if again, err := b.AddFrames(b.ctx, []queue.Frame{bad}); err != nil || again[0].Change != queue.FrameSame {
		t.Errorf("rejected again: got %v, %v, want same", again, err)
	}
	if again, err := b.AddFrames(b.ctx, []queue.Frame{frame(queue.Streak, 1)}); err != nil || again[0].Change != queue.FrameChanged {
		t.Errorf("taken after all: got %v, %v, want changed", again, err)
	}
	rep = b.commit(queue.Decision{Pairs: []queue.Pair{{Streak: ids[0], Reference: ids[1]}}}, "b1")
	if len(rep.Shots) != 1 {
		t.Errorf("pair with the frame that was taken after all: got %+v", rep)
	}
}
