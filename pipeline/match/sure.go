package match

// byTime pairs two sorted lists of frames with times.
func (m *matcher) byTime(s, r []*item, allow func(s, r *item) bool) {
	clusters(s, r, m.within, func(s, r []*item) {
		if len(s) == 1 && len(r) == 1 { // nearly always
			if allow(s[0], r[0]) {
				m.pair(s[0], r[0])
			}
			return
		}
		edges, ok := candidates(s, r, m.within, allow)
		if !ok {
			m.hold(append(append([]*item{}, s...), r...), dense(len(s), len(r), m.o.Within))
			return
		}
		m.settle(s, r, edges)
	})
}

// settle gives the sure pairs of one cluster and holds the doubtful ones.
func (m *matcher) settle(s, r []*item, edges []edge) {
	d := newDoubt(s, r, edges, chain(edges, len(r), m.within), m.within/5)
	for _, p := range d.sure() {
		m.pair(s[p.s], r[p.r])
	}
	for _, g := range d.groups() {
		m.hold(g.frames, g.reason(m.o.Within))
	}
}

// doubt knows the rivals of every chosen pair. Nodes number the frames of
// the cluster, streaks first.
type doubt struct {
	frames []*item
	chosen []edge
	pairOf []int   // node -> index of its chosen pair, -1: none
	rivals [][]int // pair -> nodes that are rivals to it
	blocks [][]int // node -> pairs to which it is a rival
	done   []bool  // pair is sure
	offset int     // node of reference 0
}

// newDoubt finds the rivals: other candidates of a frame in a chosen pair
// whose |gap| is not at least margin larger.
func newDoubt(s, r []*item, edges []edge, chosen []int, margin int64) *doubt {
	n := len(s) + len(r)
	d := &doubt{frames: append(append([]*item{}, s...), r...), pairOf: make([]int, n),
		rivals: make([][]int, len(chosen)), blocks: make([][]int, n), done: make([]bool, len(chosen)), offset: len(s)}
	for i := range d.pairOf {
		d.pairOf[i] = -1
	}
	for p, e := range chosen {
		d.chosen = append(d.chosen, edges[e])
		d.pairOf[edges[e].s], d.pairOf[d.offset+edges[e].r] = p, p
	}
	for _, e := range edges {
		a, b := e.s, d.offset+e.r
		d.rival(a, b, e.gap, margin)
		d.rival(b, a, e.gap, margin)
	}
	return d
}

// rival notes node x as a rival to the pair of node of, if it is one.
func (d *doubt) rival(of, x int, gap, margin int64) {
	p := d.pairOf[of]
	if p < 0 || p == d.pairOf[x] || gap-d.chosen[p].gap >= margin {
		return
	}
	d.rivals[p] = append(d.rivals[p], x)
	d.blocks[x] = append(d.blocks[x], p)
}

// sure lists the pairs whose rivals are all in sure pairs.
func (d *doubt) sure() []edge {
	var out []edge
	var work []int
	count := make([]int, len(d.chosen))
	for p := range d.chosen {
		count[p] = len(d.rivals[p])
		if count[p] == 0 {
			work = append(work, p)
		}
	}
	for len(work) > 0 {
		p := work[0]
		work = work[1:]
		d.done[p] = true
		e := d.chosen[p]
		out = append(out, e)
		for _, x := range [2]int{e.s, d.offset + e.r} {
			for _, q := range d.blocks[x] {
				if count[q]--; count[q] == 0 {
					work = append(work, q)
				}
			}
		}
	}
	return out
}

// group is frames that cannot be told apart, with the smallest and the
// largest |gap| among their doubtful pairs.
type group struct {
	frames      []*item
	least, most int64
}

// groups joins the doubtful pairs with the rivals that are not in sure ones.
func (d *doubt) groups() []*group {
	root := make([]int, len(d.frames))
	for i := range root {
		root[i] = i
	}
	find := func(i int) int {
		for root[i] != i {
			root[i] = root[root[i]]
			i = root[i]
		}
		return i
	}
	in := make([]bool, len(d.frames))
	join := func(a, b int) {
		in[a], in[b] = true, true
		root[find(b)] = find(a)
	}
	for p, e := range d.chosen {
		if d.done[p] {
			continue
		}
		join(e.s, d.offset+e.r)
		for _, x := range d.rivals[p] {
			if q := d.pairOf[x]; q < 0 || !d.done[q] {
				join(e.s, x)
			}
		}
	}
	return d.collect(in, find)
}

func (d *doubt) collect(in []bool, find func(int) int) []*group {
	byRoot := map[int]*group{}
	var out []*group
	for i, f := range d.frames {
		if !in[i] {
			continue
		}
		g := byRoot[find(i)]
		if g == nil {
			g = &group{least: -1}
			byRoot[find(i)] = g
			out = append(out, g)
		}
		g.frames = append(g.frames, f)
		if p := d.pairOf[i]; p >= 0 {
			gap := d.chosen[p].gap
			if g.least < 0 || gap < g.least {
				g.least = gap
			}
			g.most = max(g.most, gap)
		}
	}
	return out
}
