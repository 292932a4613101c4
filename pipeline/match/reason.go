package match

import (
	"fmt"
	"sort"
	"time"
)

const noStamp = "the frame has neither a usable time nor a shot number: pair it by hand, and check stamp in the configuration"

func repeated(n int64, s, r int) string {
	return fmt.Sprintf("shot number %d is carried by %s and %s, not all with a time: pair them by hand",
		n, many(s, streak), many(r, reference))
}

func dense(s, r int, within time.Duration) string {
	return fmt.Sprintf("%s and %s lie so close that one has more than %d within %v: make within smaller, or check whether a camera's clock stands still",
		many(s, streak), many(r, reference), MaxCandidates, within)
}

// reason says why a group is held.
func (g *group) reason(within time.Duration) string {
	var n [2]int
	for _, f := range g.frames {
		n[f.arm]++
	}
	return fmt.Sprintf("%s and %s are about equally near (likeliest gaps %v to %v, within %v): pair them by hand, or make within smaller",
		many(n[streak], streak), many(n[reference], reference), time.Duration(g.least), time.Duration(g.most), within)
}

func many(n, arm int) string {
	if n == 1 {
		return "1 " + armName[arm] + " frame"
	}
	return fmt.Sprintf("%d %s frames", n, armName[arm])
}

// why says what a lone frame lacks.
func (m *matcher) why(f *item) string {
	other := 1 - f.arm
	near := m.nearest(f, m.arms[other])
	switch {
	case f.HasShot && !f.HasTime:
		return fmt.Sprintf("no %s frame with shot number %d", armName[other], f.Shot)
	case near == nil:
		return fmt.Sprintf("no %s frame has come", armName[other])
	}
	gap := time.Duration(near.t - f.t)
	side := "later"
	if gap < 0 {
		gap, side = -gap, "earlier"
	}
	if int64(gap) <= m.within {
		if f.HasShot && near.HasShot && f.Shot != near.Shot {
			return fmt.Sprintf("the nearest %s frame, %v %s, carries shot number %d, not %d", armName[other], gap, side, near.Shot, f.Shot)
		}
		return fmt.Sprintf("the nearest %s frame, %v %s, belongs to another", armName[other], gap, side)
	}
	if f.HasShot && near.HasShot && f.Shot == near.Shot {
		return fmt.Sprintf("the %s frame with shot number %d is %v %s, more than %v: check the clocks", armName[other], f.Shot, gap, side, m.o.Within)
	}
	return fmt.Sprintf("no %s frame within %v; the nearest is %v %s", armName[other], m.o.Within, gap, side)
}

// nearest is the frame with a time closest to f, whatever became of it.
func (m *matcher) nearest(f *item, arm []*item) *item {
	n := sort.Search(len(arm), func(i int) bool { return !arm[i].HasTime })
	arm = arm[:n]
	i := sort.Search(n, func(i int) bool { return arm[i].t >= f.t })
	switch {
	case n == 0 || !f.HasTime:
		return nil
	case i == n || i > 0 && f.t-arm[i-1].t <= arm[i].t-f.t:
		return arm[i-1]
	}
	return arm[i]
}
