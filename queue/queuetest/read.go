package queuetest

import (
	"errors"
	"testing"
	"time"

	"unsheard/queue"
)

func listing(t *testing.T, l Ledger) {
	b := open(t, l, onlyFull())
	ids := b.shots(0, 25, "b1")
	same := frame(queue.Streak, 24) // taken at the same moment as another
	same.Path = "streak/again%_1.tif"
	b.commit(queue.Decision{Lone: []queue.Lone{{Frame: b.add(same)[0], Reason: "alone"}}}, "")
	var got []queue.Shot
	f := queue.Filter{Limit: 7}
	for range 10 {
		page, err := b.Shots(b.ctx, f)
		if err != nil {
			t.Fatal(err)
		}
		if len(page) == 0 {
			break
		}
		got = append(got, page...)
		f.Before = page[len(page)-1].Cursor()
	}
	if len(got) != 26 {
		t.Fatalf("pages hold %d shots, want 26", len(got))
	}
	for i := 1; i < len(got); i++ {
		a, c := got[i-1], got[i]
		if a.Taken.Before(c.Taken) || a.Taken.Equal(c.Taken) && a.ID <= c.ID {
			t.Errorf("shot %d (%v) is listed before %d (%v)", a.ID, a.Taken, c.ID, c.Taken)
		}
	}
	b.run(&worker{}, quickly())
	b.untilState(queue.StateDone, ids...)
	minute := func(i int) time.Time { return day.Add(time.Duration(i) * time.Minute) }
	for _, c := range []struct {
		name string
		f    queue.Filter
		want int
	}{
		{"all", queue.Filter{}, 26},
		{"limit", queue.Filter{Limit: 3}, 3},
		{"station", queue.Filter{Station: "bay"}, 26},
		{"other station", queue.Filter{Station: "annex"}, 0},
		{"done", queue.Filter{States: []queue.State{queue.StateDone}}, 25},
		{"lone", queue.Filter{States: []queue.State{queue.StateLone}}, 1},
		{"done or lone of a station", queue.Filter{Station: "bay", States: []queue.State{queue.StateDone, queue.StateLone}}, 26},
		{"good", queue.Filter{Verdict: "good"}, 25},
		{"unusable", queue.Filter{Verdict: "unusable"}, 0},
		{"since", queue.Filter{Since: minute(20)}, 6},
		{"until", queue.Filter{Until: minute(20)}, 20},
		{"between", queue.Filter{Since: minute(3), Until: minute(5), States: []queue.State{queue.StateDone}}, 2},
		{"text", queue.Filter{Text: "s_001"}, 10},
		{"text with signs", queue.Filter{Text: "%_"}, 1},
		{"text that is nowhere", queue.Filter{Text: `\`}, 0},
	} {
		page, err := b.Shots(b.ctx, c.f)
		if err != nil || len(page) != c.want {
			t.Errorf("%s: got %d shots, %v, want %d", c.name, len(page), err, c.want)
		}
	}
	if _, _, err := b.Shot(b.ctx, 999); !errors.Is(err, queue.ErrNotFound) {
		t.Errorf("unknown shot: got %v, want ErrNotFound", err)
	}
	if _, err := b.ShotNamed(b.ctx, "bay", "nothing"); !errors.Is(err, queue.ErrNotFound) {
		t.Errorf("unknown name: got %v, want ErrNotFound", err)
	}
}

func counts(t *testing.T, l Ledger) {
	now := day
	o := onlyFull()
	o.Clock = func() time.Time { return now }
	b := open(t, l, o)
	if _, ok, err := b.LastDone(b.ctx, ""); ok || err != nil {
		t.Errorf("last done of an empty ledger: got %v, %v", ok, err)
	}
	ids := b.shots(1, 4, "b1")
	now = day.Add(90 * time.Second)
	b.shots(4, 5, "b1")
	depth, err := b.QueueDepth(b.ctx)
	if want := (queue.Depth{Jobs: 4, Oldest: 90 * time.Second}); err != nil || depth[queue.Full] != want {
		t.Errorf("depth: got %v, %v, want %v", depth[queue.Full], err, want)
	}
	all, err := b.Counts(b.ctx, "")
	if err != nil || len(all) != len(queue.States()) || all[queue.StatePaired] != 4 {
		t.Errorf("counts: got %v, %v, want all states, 4 paired", all, err)
	}
	if annex, err := b.Counts(b.ctx, "annex"); err != nil || annex[queue.StatePaired] != 0 {
		t.Errorf("counts of another station: got %v, %v", annex, err)
	}
	if _, err := b.Quarantine(b.ctx, ids, "not today"); err != nil {
		t.Fatal(err)
	}
	stop := b.run(&worker{}, quickly())
	b.until("the last shot", func() bool { _, ok, _ := b.LastDone(b.ctx, "bay"); return ok })
	stop()
	last, _, err := b.LastDone(b.ctx, "")
	if err != nil || last.Name != "streak/S_0004" || !last.Finished.Equal(now) {
		t.Errorf("last done: got %q at %v, %v", last.Name, last.Finished, err)
	}
	if _, ok, err := b.LastDone(b.ctx, "annex"); ok || err != nil {
		t.Errorf("last done of another station: got %v, %v", ok, err)
	}
}

func changes(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{})
	c, stop := b.Changes()
	told := func() bool {
		select {
		case <-c:
			return true
		default:
			return false
		}
	}
	b.shots(1, 4, "b1")
	if !told() || told() {
		t.Error("several changes must be told, and once")
	}
	b.add(frame(queue.Streak, 1))
	if told() {
		t.Error("a known frame was told as a change")
	}
	stop()
	b.shots(5, 6, "b1")
	if told() {
		t.Error("told after stop")
	}
}

func readBeside(t *testing.T, l Ledger) {
	b := open(t, l, onlyFull())
	r, err := l.Read(b.ctx)
	if err != nil {
		t.Fatal(err)
	}
	defer func() {
		if err := r.Close(); err != nil {
			t.Error(err)
		}
	}()
	id := b.shots(1, 2, "b1")[0]
	sh, _, err := r.Shot(b.ctx, id)
	if err != nil || sh.State != queue.StatePaired {
		t.Errorf("beside: got %+v, %v, want what the store has just committed", sh, err)
	}
	b.run(&worker{}, quickly())
	b.untilState(queue.StateDone, id)
	all, err := r.Shots(b.ctx, queue.Filter{States: []queue.State{queue.StateDone}})
	if err != nil || len(all) != 1 {
		t.Errorf("beside: got %v, %v, want the done shot", all, err)
	}
}

func reopen(t *testing.T, l Ledger) {
	s, err := l.Open(t.Context(), onlyFull())
	if err != nil {
		t.Fatal(err)
	}
	b := &bench{t, s, t.Context()}
	ids := b.shots(1, 4, "b1")
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	r, err := l.Read(t.Context())
	if err != nil {
		t.Fatalf("read with no process beside: %v", err)
	}
	if n, err := r.Counts(t.Context(), ""); err != nil || n[queue.StatePaired] != 3 {
		t.Errorf("read with no process beside: got %v, %v, want 3 paired", n, err)
	}
	if err := r.Close(); err != nil {
		t.Error(err)
	}
	b = open(t, l, onlyFull())
	w := &worker{}
	b.run(w, quickly())
	b.untilState(queue.StateDone, ids...)
	for _, task := range w.seen() {
		if task.Suspect || task.Attempt != 1 {
			t.Errorf("after an orderly end: %+v, want no suspect, attempt 1", task)
		}
	}
}
