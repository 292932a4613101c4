package match

import (
	"reflect"
	"strings"
	"testing"
	"time"
)

var zero = time.Date(2026, 3, 1, 12, 0, 0, 0, time.UTC)

const ms = time.Millisecond

func at(d time.Duration) time.Time { return zero.Add(d) }

// timed is a frame with a time, seen a second later.
func timed(id int64, t time.Duration) Frame {
	return Frame{ID: id, Time: at(t), HasTime: true, Seen: at(t + time.Second)}
}

// shot is a frame with a time and a number.
func shot(id, n int64, t time.Duration) Frame {
	f := timed(id, t)
	f.Shot, f.HasShot = n, true
	return f
}

// counted is a frame with a number alone.
func counted(id, n int64) Frame {
	return Frame{ID: id, Shot: n, HasShot: true, Seen: at(time.Second)}
}

var usual = Options{Within: 5 * ms, Grace: 20 * time.Second}

func TestMatch(t *testing.T) {
	later := at(time.Hour)
	for _, c := range []struct {
		name       string
		s, r       []Frame
		now        time.Time
		pairs      []Pair
		lone, wait []int64
		held       []Held // reasons not compared
		reason     string // in the first lone or held
	}{
		{name: "nothing"},
		{name: "a pair at once", s: []Frame{timed(1, 0)}, r: []Frame{timed(2, 3*ms)}, now: at(time.Second),
			pairs: []Pair{{1, 2, 3 * ms}}},
		{name: "at the very edge", s: []Frame{timed(1, 0)}, r: []Frame{timed(2, -5*ms)}, pairs: []Pair{{1, 2, -5 * ms}}},
		{name: "beyond the edge", s: []Frame{timed(1, 0)}, r: []Frame{timed(2, 5*ms+1)}, lone: []int64{1, 2},
			reason: "no reference frame within 5ms; the nearest is 5.000001ms later"},
		{name: "waits", s: []Frame{timed(1, 0)}, now: at(21*time.Second - 1), wait: []int64{1}},
		{name: "waited enough", s: []Frame{timed(1, 0)}, now: at(21 * time.Second), lone: []int64{1},
			reason: "no reference frame has come"},
		{name: "clearly nearer", s: []Frame{timed(1, 0)}, r: []Frame{timed(2, -2*ms), timed(3, 1*ms)},
			pairs: []Pair{{1, 3, ms}}, lone: []int64{2}, reason: "the nearest streak frame, 2ms later, belongs to another"},
		{name: "about equally near", s: []Frame{timed(1, 0)}, r: []Frame{timed(2, -2*ms), timed(3, 2*ms+900*time.Microsecond)},
			held: []Held{{Streak: []int64{1}, Reference: []int64{2, 3}}}, reason: "1 streak frame and 2 reference frames are about equally near"},
		{name: "not held before its time", s: []Frame{timed(1, 0)}, r: []Frame{timed(2, -2*ms), timed(3, 2*ms)},
			now: at(20 * time.Second), wait: []int64{1, 2, 3}},
		{name: "a rival in a sure pair is none", s: []Frame{timed(1, 0), timed(4, -4*ms)}, r: []Frame{timed(2, -4*ms), timed(3, 4*ms)},
			pairs: []Pair{{1, 3, 4 * ms}, {4, 2, 0}}},
		{name: "swapped by noise", s: []Frame{timed(1, 0), timed(2, ms/2)}, r: []Frame{timed(3, 0), timed(4, ms/2)},
			held: []Held{{Streak: []int64{1, 2}, Reference: []int64{3, 4}}}},
		{name: "numbers decide", s: []Frame{shot(1, 7, 0), shot(2, 8, ms/2)}, r: []Frame{shot(3, 8, 0), shot(4, 7, ms/2)},
			pairs: []Pair{{1, 4, ms / 2}, {2, 3, -ms / 2}}},
		{name: "unequal numbers", s: []Frame{shot(1, 7, 0)}, r: []Frame{shot(2, 8, 0)}, lone: []int64{1, 2},
			reason: "the nearest reference frame, 0s later, carries shot number 8, not 7"},
		{name: "equal numbers, far apart", s: []Frame{shot(1, 7, 0)}, r: []Frame{shot(2, 7, time.Second)}, lone: []int64{1, 2},
			reason: "the reference frame with shot number 7 is 1s later, more than 5ms: check the clocks"},
		{name: "number alone", s: []Frame{counted(1, 7), counted(2, 8)}, r: []Frame{counted(3, 8), counted(4, 9)},
			pairs: []Pair{{2, 3, 0}}, lone: []int64{1, 4}, reason: "no reference frame with shot number 7"},
		{name: "number with time and number alone", s: []Frame{shot(1, 7, 0)}, r: []Frame{counted(2, 7)}, pairs: []Pair{{1, 2, 0}}},
		{name: "number on one side only", s: []Frame{shot(1, 7, 0)}, r: []Frame{timed(2, ms)}, pairs: []Pair{{1, 2, ms}}},
		{name: "counter began again", s: []Frame{shot(1, 1, 0), shot(2, 1, time.Hour)}, r: []Frame{shot(3, 1, time.Hour), shot(4, 1, 0)},
			pairs: []Pair{{1, 4, 0}, {2, 3, 0}}},
		{name: "number repeated without time", s: []Frame{counted(1, 7), counted(2, 7)}, r: []Frame{counted(3, 7)},
			held: []Held{{Streak: []int64{1, 2}, Reference: []int64{3}}}, reason: "shot number 7 is carried by 2 streak frames and 1 reference frame"},
		{name: "neither time nor number", s: []Frame{{ID: 1, Seen: later}}, held: []Held{{Streak: []int64{1}}}, reason: "neither a usable time nor a shot number"},
		{name: "absurd time", s: []Frame{{ID: 1, Seen: later, HasTime: true}}, held: []Held{{Streak: []int64{1}}}},
	} {
		t.Run(c.name, func(t *testing.T) {
			if c.now.IsZero() {
				c.now = at(2 * time.Hour)
			}
			got := Match(c.s, c.r, c.now, usual)
			var lone []int64
			reasons := ""
			for _, l := range got.Lone {
				lone = append(lone, l.ID)
				reasons += l.Reason + "\n"
			}
			for i := range got.Held {
				reasons = got.Held[i].Reason + "\n" + reasons
				got.Held[i].Reason = ""
			}
			if !reflect.DeepEqual(got.Pairs, c.pairs) || !reflect.DeepEqual(lone, c.lone) ||
				!reflect.DeepEqual(got.Held, c.held) || !reflect.DeepEqual(got.Waiting, c.wait) {
				t.Errorf("got pairs %v, lone %v, held %v, waiting %v; want %v, %v, %v, %v",
					got.Pairs, lone, got.Held, got.Waiting, c.pairs, c.lone, c.held, c.wait)
			}
			if !strings.HasPrefix(reasons, c.reason) && !strings.Contains(reasons, c.reason) {
				t.Errorf("reasons %q, want %q in them", reasons, c.reason)
			}
		})
	}
}

func TestNextLook(t *testing.T) {
	s := []Frame{timed(1, 0), timed(2, time.Minute)}
	r := []Frame{timed(3, 30*time.Second), timed(4, time.Minute+2*ms), timed(5, time.Minute-2*ms)}
	res := Match(s, r, at(10*time.Second), usual)
	if want := at(21 * time.Second); !res.NextLook.Equal(want) {
		t.Errorf("next look %v, want %v", res.NextLook, want)
	}
	res = Match(s, r, at(51*time.Second), usual)
	if want := at(81*time.Second + 2*ms); !res.NextLook.Equal(want) || len(res.Lone) != 2 {
		t.Errorf("next look %v, want %v, when the youngest of the group has waited; %v", res.NextLook, want, res)
	}
	res = Match(s, r, res.NextLook, usual)
	if !res.NextLook.IsZero() || len(res.Held) != 1 {
		t.Errorf("%+v", res)
	}
}

func TestClock(t *testing.T) {
	// 1 s late after 1000 s at a drift of 1e-3, and 7 s ahead.
	o := usual
	o.Clock = Clock{Offset: -7 * time.Second, Drift: 1e-3, Epoch: zero}
	res := Match([]Frame{timed(1, 1000*time.Second)}, []Frame{timed(2, 994*time.Second+2*ms)}, at(2*time.Hour), o)
	if want := []Pair{{1, 2, 2 * ms}}; !reflect.DeepEqual(res.Pairs, want) {
		t.Errorf("got %+v, want %v", res, want)
	}
}

func TestStoppedClock(t *testing.T) {
	var s, r []Frame
	for i := range int64(MaxCandidates + 1) {
		s, r = append(s, timed(i, 0)), append(r, timed(1000+i, 0))
	}
	res := Match(append(s, timed(5000, time.Second)), append(r, timed(5001, time.Second)), at(time.Hour), usual)
	if len(res.Held) != 1 || len(res.Held[0].Streak) != MaxCandidates+1 || !strings.Contains(res.Held[0].Reason, "stands still") {
		t.Errorf("%+v", res.Held)
	}
	if want := []Pair{{5000, 5001, 0}}; !reflect.DeepEqual(res.Pairs, want) {
		t.Errorf("pairs %v, want %v", res.Pairs, want)
	}
}
