package match

import "slices"

// edge is a candidate pair: indices into the two lists, and |gap|.
type edge struct {
	s, r int
	gap  int64
}

// clusters cuts two sorted lists where nothing on the left can be a
// candidate for anything on the right: at steps of more than within.
func clusters(s, r []*item, within int64, do func(s, r []*item)) {
	for len(s) > 0 && len(r) > 0 {
		i, j := 0, 0
		var last int64
		for i < len(s) || j < len(r) {
			fromS := j == len(r) || i < len(s) && s[i].t <= r[j].t
			t := int64(0)
			if fromS {
				t = s[i].t
			} else {
				t = r[j].t
			}
			if i+j > 0 && t-last > within {
				break
			}
			last = t
			if fromS {
				i++
			} else {
				j++
			}
		}
		if i > 0 && j > 0 {
			do(s[:i], r[:j])
		}
		s, r = s[i:], r[j:]
	}
}

// candidates lists the edges of a cluster by streak, then reference index.
// It gives up if a frame has more than MaxCandidates.
func candidates(s, r []*item, within int64, allow func(s, r *item) bool) (edges []edge, ok bool) {
	lo := 0
	perR := make([]int, len(r))
	for i := range s {
		for lo < len(r) && r[lo].t < s[i].t-within {
			lo++
		}
		for j := lo; j < len(r) && r[j].t <= s[i].t+within; j++ {
			perR[j]++
			if j-lo >= MaxCandidates || perR[j] > MaxCandidates {
				return nil, false
			}
			if allow(s[i], r[j]) {
				edges = append(edges, edge{i, j, max(r[j].t-s[i].t, s[i].t-r[j].t)})
			}
		}
	}
	return edges, true
}

// chain picks the edges that increase in both indices and maximise (2). It
// returns their indices, in order.
//
// The plain recurrence is best(e) = w(e) + max over e' with s' < s, r' < r of
// best(e'); the tree holds, for every reference index, the best chain that
// ends at or before it.
func chain(edges []edge, references int, within int64) []int {
	best := make([]int64, len(edges))
	back := make([]int, len(edges))
	tree := make([]int, references+1) // edge index + 1, 0: none
	top := -1
	for from := 0; from < len(edges); {
		to := from
		for ; to < len(edges) && edges[to].s == edges[from].s; to++ {
			e := edges[to]
			back[to] = -1
			best[to] = within - e.gap + 1 // 1 ns more, so that a pair at |gap| = Within counts
			for k := e.r; k > 0; k -= k & -k {
				if p := tree[k] - 1; p >= 0 && (back[to] < 0 || best[p] > best[back[to]]) {
					back[to] = p
				}
			}
			if back[to] >= 0 {
				best[to] += best[back[to]]
			}
			if top < 0 || best[to] > best[top] {
				top = to
			}
		}
		for ; from < to; from++ { // after the whole row, so that a frame is used once
			for k := edges[from].r + 1; k <= references; k += k & -k {
				if p := tree[k] - 1; p < 0 || best[from] > best[p] {
					tree[k] = from + 1
				}
			}
		}
	}
	var out []int
	for e := top; e >= 0; e = back[e] {
		out = append(out, e)
	}
	slices.Reverse(out)
	return out
}
