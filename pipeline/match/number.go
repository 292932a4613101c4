package match

import (
	"maps"
	"slices"
)

// byNumber pairs the frames of which both carry a shot number. A number may
// occur more than once, as when a counter begins again: times tell those
// apart.
func (m *matcher) byNumber() {
	groups := map[int64]*[2][]*item{}
	for arm := range m.arms {
		for _, f := range m.arms[arm] {
			if !f.HasShot {
				continue
			}
			if groups[f.Shot] == nil {
				groups[f.Shot] = &[2][]*item{}
			}
			g := groups[f.Shot]
			g[arm] = append(g[arm], f)
		}
	}
	for _, n := range slices.Sorted(maps.Keys(groups)) {
		g := groups[n]
		if len(g[streak]) == 0 || len(g[reference]) == 0 {
			continue
		}
		m.byTime(open(g[streak]), open(g[reference]), func(s, r *item) bool { return true })
		m.numberAlone(n, g)
	}
}

// numberAlone pairs what is left of one number when a time is missing. Two
// frames that both have a time are not left to it: they are too far apart.
func (m *matcher) numberAlone(n int64, g *[2][]*item) {
	var left [2][]*item
	timeless := 0
	for arm := range g {
		for _, f := range g[arm] {
			if f.placed {
				continue
			}
			left[arm] = append(left[arm], f)
			if !f.HasTime {
				timeless++
			}
		}
	}
	s, r := left[streak], left[reference]
	switch {
	case timeless == 0 || len(s) == 0 || len(r) == 0:
	case len(s) == 1 && len(r) == 1:
		m.pair(s[0], r[0])
	default:
		m.hold(append(slices.Clone(s), r...), repeated(n, len(s), len(r)))
	}
}
