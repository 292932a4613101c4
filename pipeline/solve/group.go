package solve

// group is a run of coarse times lo ≤ j < hi that one worker takes in order.
// Its sums are its own, so that no two workers add to one.
type group struct {
	lo, hi int
	from   int // first row of E it adds to, without padding
	rows   int // how many
	at     int // where they are in the workspace's streak
}

// desk is a worker's scratch.
type desk struct {
	plane  []float32 // a window plane
	rows   []float32 // my rows of W
	grad   []float32 // my·mx
	turned []float32 // for row.Lanes.Down
}

func (s *sieve) desk(worker int) desk {
	part := func(v []float32, n int) []float32 { return v[worker*n : (worker+1)*n] }
	return desk{plane: part(s.plane, s.h*s.w), rows: part(s.rows, s.by.m*s.w), grad: part(s.grad, s.by.m*s.bx.m), turned: part(s.turned, s.bx.line.DownWork())}
}

const (
	// groupMost is the most coarse times in a group: its part of E is
	// written and read once more when groups are added up, which with 4 is
	// little.
	groupMost = 4
	// groupShare is how many groups there should be at least, to give a few
	// workers equal shares.
	groupShare = 12
)

// share groups the coarse times. It depends on the shape alone, since sums are
// grouped by it.
func (s *sieve) share() (groups []group) {
	size := min(max(s.bt.m/groupShare, 1), groupMost)
	at := 0
	for lo := 0; lo < s.bt.m; lo += size {
		g := group{lo: lo, hi: min(lo+size, s.bt.m), at: at}
		first, last := s.t-1, 0
		for j := g.lo; j < g.hi; j++ {
			if n := len(s.bt.wt[j]); n > 0 {
				first, last = min(first, s.bt.lo[j]), max(last, s.bt.lo[j]+n-1)
			}
		}
		if first <= last {
			g.from, g.rows = first*s.step, (last-first)*s.step+s.h
		}
		at += g.rows * s.w
		groups = append(groups, g)
	}
	return groups
}

// part is what group g adds to E and to Σ_j.
func (s *sieve) part(g int) (streak, total []float32) {
	n := len(s.total)
	return s.streak[s.groups[g].at:][:s.groups[g].rows*s.w], s.totals[g*n : (g+1)*n]
}

// sweep is phase 1 for group g. The primal step of coarse time j reads the
// differences' duals of j − 1 as they were, so that their step follows it.
func (s *sieve) sweep(g int, d desk) {
	_, total := s.part(g)
	clear(total)
	lo, hi, top := s.groups[g].lo, s.groups[g].hi, 0
	for j := lo; j < hi; j++ {
		s.castBack(j, d, s.castS)
		s.primal(j, d.grad, total)
		if s.lambda > 0 && j > lo {
			s.inward(j - 1) // while its rows are in the cache
		}
		top = s.spreadOut(j, d, g, top)
	}
}

// show is what a sweep writes, for the coefficients as they are.
func (s *sieve) show(g int, d desk) {
	_, total := s.part(g)
	clear(total)
	n, top := len(total), 0
	for j := s.groups[g].lo; j < s.groups[g].hi; j++ {
		s.lanes.Add(total, s.bt.sum(j), s.bar[j*n:(j+1)*n])
		top = s.spreadOut(j, d, g, top)
	}
}

// castBack returns Byᵀ·(C∘Σ_k Bt[k][j]·cast[· + k·step])·Bx, my rows of mx, on
// the desk. Rows are summed down the columns as soon as the last they need is
// there, while they are in the cache.
func (s *sieve) castBack(j int, d desk, cast []float32) []float32 {
	w, code := s.w, s.m.Geometry().Code
	r := 0
	for y := range s.h {
		at := y * w
		s.lanes.FirMul(d.plane[at:at+w], s.bt.wt[j], cast, (y+s.pad+s.bt.lo[j]*s.step)*s.cols+s.pad, s.step*s.cols, code[at:at+w])
		for ; r < s.by.m && s.by.lo[r]+len(s.by.wt[r]) <= y+1; r++ {
			s.lanes.FirSet(d.rows[r*w:(r+1)*w], s.by.wt[r], d.plane, s.by.lo[r]*w, w)
		}
	}
	s.lanes.Down(s.bx.line, d.grad, d.rows, d.turned, s.by.m)
	return d.grad
}

// primal is the primal step of coarse time j with the streak's gradient grad;
// it adds what j gives to Σ_j to total.
func (s *sieve) primal(j int, grad, total []float32) {
	mx, n := s.bx.m, len(grad)
	share := s.bt.sum(j)
	s.stats[j] = [3]float64{}
	for at := 0; at < n; at += mx {
		lo, g := j*n+at, grad[at:at+mx]
		s.lanes.Add(g, share, s.back[at:at+mx])
		if s.lambda > 0 {
			up, before := s.none, s.none
			if at > 0 {
				up = s.py[lo-mx : lo]
			}
			if j > 0 {
				before = s.pt[lo-n : lo-n+mx]
			}
			s.lanes.Diverge(g, s.px[lo:lo+mx], s.py[lo:lo+mx], up, s.pt[lo:lo+mx], before, s.alpha)
		}
		z, bar := s.z[lo:lo+mx], s.bar[lo:lo+mx]
		s.lanes.Project(z, bar, g, s.tau[lo:lo+mx], step)
		s.lanes.Add(total[at:at+mx], share, bar)
		if s.count {
			d, t, t2 := change(bar, z)
			s.stats[j][0] += d
			s.stats[j][1] += t
			s.stats[j][2] += t2
		}
	}
}

// upColumns writes the extrapolated coefficients' z_j·Bxᵀ, my rows of W, to the
// desk's rows.
func (s *sieve) upColumns(j int, d desk) {
	mx, w := s.bx.m, s.w
	for r := range s.by.m {
		s.lanes.Up(s.bx.line, d.rows[r*w:(r+1)*w], s.bar[(j*s.by.m+r)*mx:][:mx])
	}
}

// spreadOut adds what C∘P_j gives to the group's part of E, row by row behind
// the rows of the plane it needs. Of the part's rows the first top have been
// written before; it returns how many are now.
func (s *sieve) spreadOut(j int, d desk, g, top int) int {
	w, code := s.w, s.m.Geometry().Code
	s.upColumns(j, d)
	// Row y of the plane and E's row y + lo·step, which is row y + from of
	// the part.
	from := s.bt.lo[j]*s.step - s.groups[g].from
	streak, _ := s.part(g)
	for y := range s.h + max(0, len(s.bt.wt[j])-1)*s.step {
		if y < s.h {
			f, wt := s.by.weights(y)
			s.lanes.FirMul(d.plane[y*w:(y+1)*w], wt, d.rows, f*w, w, code[y*w:(y+1)*w])
		}
		for ; top < y+from; top++ {
			clear(streak[top*w : (top+1)*w])
		}
		s.streakRow(streak[(y+from)*w:(y+from+1)*w], j, d.plane, y, y+from == top)
		top = max(top, y+from+1)
	}
	return top
}

// streakRow adds Σ_k Bt[k][j]·plane[y − (k−lo)·step], for the k where it lies in
// the window, to a row of E, or sets a row that is new.
func (s *sieve) streakRow(dst []float32, j int, plane []float32, y int, fresh bool) {
	wt := s.bt.wt[j]
	first, last := 0, min(len(wt)-1, y/s.step)
	if over := y - s.h + 1; over > 0 {
		first = (over + s.step - 1) / s.step
	}
	switch {
	case first > last && fresh:
		clear(dst)
	case first > last:
	case fresh:
		s.lanes.FirSet(dst, wt[first:last+1], plane, (y-first*s.step)*s.w, -s.step*s.w)
	default:
		s.lanes.Fir(dst, wt[first:last+1], plane, (y-first*s.step)*s.w, -s.step*s.w)
	}
}

// gather adds the groups' parts of E up in rows of the streak plane, in the
// groups' order, and blurs them along rows.
func (s *sieve) gather(chunk int) {
	a := &s.s
	lo, hi := a.limits(chunk)
	clear(a.plane[lo*s.cols : hi*s.cols])
	for j, g := range s.groups {
		streak, _ := s.part(j)
		top := g.from + s.pad // the plane's row of the group's first
		for r := max(lo, top); r < min(hi, top+g.rows); r++ {
			s.lanes.Add(a.plane[r*s.cols+s.pad:][:s.w], 1, streak[(r-top)*s.w:][:s.w])
		}
	}
	a.spread.Along(a.tmp, a.plane, lo, hi)
}
