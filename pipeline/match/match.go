package match

import (
	"cmp"
	"slices"
	"time"
)

// MaxCandidates is how many frames of the other arm may lie within the
// window of one frame. More means that Within is far too large or a camera's
// clock stands still; nothing can be paired by time then.
const MaxCandidates = 64

// Frame is one frame file. IDs must be unique over both arms together.
type Frame struct {
	ID int64

	// Time is when the frame was taken, by its own arm's clock.
	Time    time.Time
	HasTime bool

	// Shot is the shot number the frame carries.
	Shot    int64
	HasShot bool

	// Seen is when the frame's file was seen whole, by our clock.
	Seen time.Time
}

// Clock turns streak times into reference times, equation (1).
type Clock struct {
	// Offset is added to streak times. Default 0.
	Offset time.Duration

	// Drift is what the streak clock loses in each second since Epoch, in
	// seconds. Default 0; Epoch is used only with a drift.
	Drift float64
	Epoch time.Time
}

// Apply is the reference time of a streak time.
func (c Clock) Apply(t time.Time) time.Time {
	if c.Drift != 0 {
		t = t.Add(time.Duration(c.Drift * float64(t.Sub(c.Epoch)))) // (1)
	}
	return t.Add(c.Offset)
}

// Options says when frames belong together.
type Options struct {
	// Within is the largest |gap| of a pair; less than half the shortest
	// interval between shots. 0 pairs equal times only.
	Within time.Duration

	// Grace is how long after it was seen a frame waits for its partner.
	// 0 does not wait.
	Grace time.Duration

	// Clock relates the two arms' clocks. The zero value: they agree.
	Clock Clock
}

// Pair is one shot.
type Pair struct {
	Streak, Reference int64

	// Gap is reference time minus streak time on the reference clock; 0 if
	// the pair was found by number alone.
	Gap time.Duration
}

// Lone is a frame whose partner did not come.
type Lone struct {
	ID     int64
	Reason string
}

// Held is a group of frames that a person has to sort out.
type Held struct {
	Streak, Reference []int64
	Reason            string
}

// Result places every frame once: in a pair, lone, held or waiting. All
// lists are sorted by ID, Held by its least ID.
type Result struct {
	Pairs []Pair
	Lone  []Lone
	Held  []Held

	// Waiting holds the frames of both arms that may still find a partner.
	Waiting []int64

	// NextLook is the earliest time at which a waiting frame becomes lone
	// or held if no frame comes; zero if none waits.
	NextLook time.Time
}

// item is a frame at work.
type item struct {
	Frame
	arm    int // streak or reference
	t      int64
	placed bool
}

const (
	streak = iota
	reference
)

var armName = [2]string{"streak", "reference"}

// Match decides what can be decided about these frames at the time now.
func Match(streaks, references []Frame, now time.Time, o Options) Result {
	m := &matcher{o: o, now: now, within: int64(max(o.Within, 0))}
	m.arms[streak] = prepare(streaks, streak, o.Clock)
	m.arms[reference] = prepare(references, reference, Clock{})
	m.byNumber()
	m.byTime(open(m.arms[streak]), open(m.arms[reference]), func(s, r *item) bool {
		return !s.HasShot || !r.HasShot
	})
	m.rest()
	m.sort()
	return m.res
}

type matcher struct {
	o      Options
	now    time.Time
	within int64
	arms   [2][]*item // by time, then ID; frames without time last
	res    Result
}

// prepare sorts one arm's frames on the reference clock, in nanoseconds.
func prepare(frames []Frame, arm int, c Clock) []*item {
	items := make([]item, len(frames))
	out := make([]*item, len(frames))
	for i, f := range frames {
		if f.HasTime {
			f.Time = c.Apply(f.Time)
			f.HasTime = plausible(f.Time)
		}
		items[i] = item{Frame: f, arm: arm}
		if f.HasTime {
			items[i].t = f.Time.UnixNano()
		}
		out[i] = &items[i]
	}
	slices.SortFunc(out, func(a, b *item) int {
		if a.HasTime != b.HasTime {
			if a.HasTime {
				return -1
			}
			return 1
		}
		return cmp.Or(cmp.Compare(a.t, b.t), cmp.Compare(a.ID, b.ID))
	})
	return out
}

// plausible keeps differences of times far from overflow; a frame outside
// counts as without time.
func plausible(t time.Time) bool { return t.Year() >= 1900 && t.Year() <= 2200 }

// open lists the frames that have a time and no place yet.
func open(arm []*item) []*item {
	var out []*item
	for _, f := range arm {
		if f.HasTime && !f.placed {
			out = append(out, f)
		}
	}
	return out
}

func (m *matcher) pair(s, r *item) {
	s.placed, r.placed = true, true
	p := Pair{Streak: s.ID, Reference: r.ID}
	if s.HasTime && r.HasTime {
		p.Gap = time.Duration(r.t - s.t)
	}
	m.res.Pairs = append(m.res.Pairs, p)
}

// hold places a group: held if its youngest frame has waited long enough,
// waiting if not.
func (m *matcher) hold(group []*item, reason string) {
	var h Held
	var until time.Time
	for _, f := range group {
		f.placed = true
		if end := f.Seen.Add(m.o.Grace); end.After(until) {
			until = end
		}
		if f.arm == streak {
			h.Streak = append(h.Streak, f.ID)
		} else {
			h.Reference = append(h.Reference, f.ID)
		}
	}
	if m.now.Before(until) {
		m.wait(until, append(h.Streak, h.Reference...)...)
		return
	}
	h.Reason = reason
	slices.Sort(h.Streak)
	slices.Sort(h.Reference)
	m.res.Held = append(m.res.Held, h)
}

func (m *matcher) wait(until time.Time, ids ...int64) {
	m.res.Waiting = append(m.res.Waiting, ids...)
	if m.res.NextLook.IsZero() || until.Before(m.res.NextLook) {
		m.res.NextLook = until
	}
}

// rest places the frames that found neither partner nor rivals.
func (m *matcher) rest() {
	for arm := range m.arms {
		for _, f := range m.arms[arm] {
			end := f.Seen.Add(m.o.Grace)
			switch {
			case f.placed:
			case !f.HasTime && !f.HasShot:
				f.Seen = m.now.Add(-m.o.Grace) // no frame to come can help
				m.hold([]*item{f}, noStamp)
			case m.now.Before(end):
				m.wait(end, f.ID)
			default:
				m.res.Lone = append(m.res.Lone, Lone{ID: f.ID, Reason: m.why(f)})
			}
		}
	}
}

func (m *matcher) sort() {
	r := &m.res
	slices.SortFunc(r.Pairs, func(a, b Pair) int { return cmp.Compare(a.Streak, b.Streak) })
	slices.SortFunc(r.Lone, func(a, b Lone) int { return cmp.Compare(a.ID, b.ID) })
	slices.SortFunc(r.Held, func(a, b Held) int { return cmp.Compare(first(a), first(b)) })
	slices.Sort(r.Waiting)
}

func first(h Held) int64 {
	return slices.Min(append(slices.Clone(h.Streak), h.Reference...))
}
