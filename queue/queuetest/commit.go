package queuetest

import (
	"strings"
	"testing"
	"time"

	"unsheard/queue"
)

func pairsOnce(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{})
	ids := b.add(frame(queue.Streak, 1), frame(queue.Reference, 1))
	d := queue.Decision{Pairs: []queue.Pair{{Streak: ids[0], Reference: ids[1], Gap: -3 * time.Millisecond}}}
	rep := b.commit(d, "b1")
	if len(rep.Shots) != 1 {
		t.Fatalf("got %+v, want one shot", rep)
	}
	sh := b.wantState(rep.Shots[0], queue.StatePaired)
	if sh.Name != "streak/S_0001" || sh.Gap != -3*time.Millisecond || sh.BundleID != "b1" || !sh.Taken.Equal(day.Add(time.Minute)) ||
		sh.StreakPath != "streak/S_0001.tif" || sh.ReferencePath != "reference/R_0001.tif" || sh.Streak != ids[0] || sh.Reference != ids[1] {
		t.Errorf("shot came back as %+v", sh)
	}
	again := b.commit(d, "b2")
	if len(again.Shots) != 0 || len(again.Refused) != 0 {
		t.Errorf("same decision again: got %+v, want nothing done", again)
	}
	depth, err := b.QueueDepth(b.ctx)
	if err != nil {
		t.Fatal(err)
	}
	if depth[queue.Quick].Jobs != 1 || depth[queue.Full].Jobs != 1 || depth[queue.Spread].Jobs != 0 {
		t.Errorf("depth: got %v, want one quick, one full", depth)
	}
	if p, err := b.Pending(b.ctx, "bay", time.Time{}); err != nil || len(p) != 0 {
		t.Errorf("pending: got %v, %v, want none", p, err)
	}
}

func pairsRefused(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{})
	away := frame(queue.Reference, 9)
	away.Station = "annex"
	ids := b.add(frame(queue.Streak, 1), frame(queue.Reference, 1), frame(queue.Reference, 2), frame(queue.Streak, 3), away)
	b.commit(queue.Decision{Pairs: []queue.Pair{{Streak: ids[0], Reference: ids[1]}}}, "b1")
	for _, c := range []struct {
		name              string
		streak, reference int64
		want              string
	}{
		{"streak frame with a second shot", ids[0], ids[2], "belongs to shot"},
		{"reference frame with a second shot", ids[3], ids[1], "belongs to shot"},
		{"arms the wrong way round", ids[2], ids[3], "takes one of each"},
		{"two stations", ids[3], ids[4], "of station"},
	} {
		rep := b.commit(queue.Decision{Pairs: []queue.Pair{{Streak: c.streak, Reference: c.reference}}}, "b1")
		if len(rep.Shots) != 0 || len(rep.Refused) != 1 || !strings.Contains(rep.Refused[0].Reason, c.want) {
			t.Errorf("%s: got %+v, want it refused with %q", c.name, rep, c.want)
		}
	}
	if _, err := b.Commit(b.ctx, queue.Decision{Pairs: []queue.Pair{{Streak: 999, Reference: ids[2]}}}, "b1"); err == nil {
		t.Error("a pair with an unknown frame was taken")
	}
	all, err := b.Shots(b.ctx, queue.Filter{})
	if err != nil || len(all) != 1 {
		t.Errorf("shots: got %v, %v, want one", all, err)
	}
}

func unmatched(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{})
	ids := b.add(frame(queue.Streak, 1), frame(queue.Reference, 2), frame(queue.Streak, 3), frame(queue.Streak, 4), frame(queue.Reference, 5))
	waiting := queue.Decision{Waiting: ids}
	if rep := b.commit(waiting, ""); rep.Moved != 5 {
		t.Errorf("waiting: moved %d, want 5", rep.Moved)
	}
	if rep := b.commit(waiting, ""); rep.Moved != 0 {
		t.Errorf("waiting again: moved %d, want 0", rep.Moved)
	}
	wantCounts(b, map[queue.State]int{queue.StateWaiting: 5})
	d := queue.Decision{
		Lone: []queue.Lone{{Frame: ids[0], Reason: "no reference frame within 5 ms"}},
		Held: []queue.Held{{Streak: ids[2:4], Reference: ids[4:5], Reason: "two for one"}},
	}
	b.commit(d, "")
	if rep := b.commit(d, ""); rep.Moved != 0 {
		t.Errorf("same decision again: moved %d, want 0", rep.Moved)
	}
	wantCounts(b, map[queue.State]int{queue.StateWaiting: 1, queue.StateHeld: 2, queue.StateLone: 1})
	held, err := b.Shots(b.ctx, queue.Filter{States: []queue.State{queue.StateHeld}})
	if err != nil || len(held) != 2 || held[0].Reason != "two for one" {
		t.Errorf("held shots: got %+v, %v", held, err)
	}
	// A person decides; the second streak frame's partner never came.
	rep := b.commit(queue.Decision{
		Pairs: []queue.Pair{{Streak: ids[3], Reference: ids[4]}},
		Lone:  []queue.Lone{{Frame: ids[2], Reason: "its partner is another's"}},
	}, "b1")
	if len(rep.Shots) != 1 || rep.Shots[0] != held[0].ID {
		t.Errorf("pair of held frames: got %+v, want the held shot %d", rep, held[0].ID)
	}
	wantCounts(b, map[queue.State]int{queue.StateWaiting: 1, queue.StatePaired: 1, queue.StateLone: 2})
}

func wantCounts(b *bench, want map[queue.State]int) {
	b.Helper()
	got, err := b.Counts(b.ctx, "bay")
	if err != nil {
		b.Fatal(err)
	}
	for _, s := range queue.States() {
		if got[s] != want[s] {
			b.Errorf("%d shots are %s, want %d", got[s], s, want[s])
		}
	}
}

func latePartner(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{})
	streak := b.add(frame(queue.Streak, 1))[0]
	b.commit(queue.Decision{Lone: []queue.Lone{{Frame: streak, Reason: "nobody came"}}}, "")
	reference := b.add(frame(queue.Reference, 1))[0]
	b.commit(queue.Decision{Waiting: []int64{reference}}, "")
	wantCounts(b, map[queue.State]int{queue.StateLone: 1, queue.StateWaiting: 1})

	pending, err := b.Pending(b.ctx, "bay", time.Time{})
	if err != nil || len(pending) != 2 || pending[0].State != queue.FrameLone {
		t.Errorf("pending: got %+v, %v, want the lone frame too", pending, err)
	}
	recent, err := b.Pending(b.ctx, "bay", time.Now().Add(time.Hour))
	if err != nil || len(recent) != 1 {
		t.Errorf("pending without old lone frames: got %+v, %v, want one", recent, err)
	}
	rep := b.commit(queue.Decision{Pairs: []queue.Pair{{Streak: streak, Reference: reference}}}, "b1")
	if len(rep.Shots) != 1 {
		t.Fatalf("got %+v, want one shot", rep)
	}
	wantCounts(b, map[queue.State]int{queue.StatePaired: 1})
	w := &worker{}
	b.run(w, quickly())
	b.untilState(queue.StateDone, rep.Shots[0])
}

func names(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{})
	paths := []string{"a/S1.tif", "b/S1.tif", "a/S1.png", `c\x.y\S1`, "S2.tar.gz", ".hidden"}
	want := []string{"a/S1", "b/S1", "a/S1.png", `c\x.y\S1`, "S2.tar", ".hidden"}
	var d queue.Decision
	for i, p := range paths {
		f := frame(queue.Streak, i)
		f.Path = p
		d.Waiting = append(d.Waiting, b.add(f)...)
	}
	b.commit(d, "")
	for i, name := range want {
		sh, err := b.ShotNamed(b.ctx, "bay", name)
		if err != nil || sh.StreakPath != paths[i] {
			t.Errorf("shot %q: got %q, %v, want %q", name, sh.StreakPath, err, paths[i])
		}
	}
}

func partByHand(t *testing.T, l Ledger) {
	b := open(t, l, queue.Options{})
	id := b.shots(1, 2, "b1")[0]
	stop := b.run(&worker{}, quickly())
	b.untilState(queue.StateDone, id)
	stop()
	was, _ := b.shot(id)
	rep, err := b.Part(b.ctx, []int64{id}, "the laser misfired")
	if err != nil || len(rep.Shots) != 1 {
		t.Fatalf("part: %+v, %v", rep, err)
	}
	sh := b.wantState(id, queue.StateHeld)
	if sh.Verdict != "" || sh.Reference != 0 || sh.Reason != "the laser misfired" {
		t.Errorf("parted shot: got %+v", sh)
	}
	wantCounts(b, map[queue.State]int{queue.StateHeld: 2})
	if p, err := b.Pending(b.ctx, "bay", time.Time{}); err != nil || len(p) != 0 {
		t.Errorf("pending: got %v, %v: what a hand parted must not be paired by itself", p, err)
	}
	if rep := b.commit(queue.Decision{Waiting: []int64{was.Streak}}, ""); rep.Moved != 0 || len(rep.Refused) != 1 {
		t.Errorf("moving a parted frame: got %+v, want it refused", rep)
	}
	other := b.add(frame(queue.Reference, 7))[0]
	again := b.commit(queue.Decision{Pairs: []queue.Pair{{Streak: was.Streak, Reference: other}}}, "b1")
	if len(again.Shots) != 1 || again.Shots[0] != id {
		t.Fatalf("pair by hand: got %+v, want shot %d", again, id)
	}
	w := &worker{}
	b.run(w, quickly())
	b.untilState(queue.StateDone, id)
	if got := w.of(queue.Full)[0].ReferencePath; got != "reference/R_0007.tif" {
		t.Errorf("worked with %q, want the other reference frame", got)
	}
	if got := b.outcomes(id, queue.Full); len(got) != 2 {
		t.Errorf("attempts: got %v, want the one before parting too", got)
	}
}

func manyPairs(t *testing.T, l Ledger) {
	b := open(t, l, onlyFull())
	const n = 250 // more than two transactions
	ids := b.shots(0, n, "b1")
	seen := map[int64]bool{}
	for _, id := range ids {
		seen[id] = true
	}
	if len(seen) != n {
		t.Errorf("got %d shots, want %d", len(seen), n)
	}
	depth, err := b.QueueDepth(b.ctx)
	if err != nil || depth[queue.Full].Jobs != n || depth[queue.Full].Oldest <= 0 {
		t.Errorf("depth: got %v, %v, want %d full", depth, err, n)
	}
}
