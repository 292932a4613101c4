package row

// Sparse is a matrix by compressed rows, laid out for the loops as well. It is
// immutable.
type Sparse struct {
	start, col []int32
	val        []float32
	cols       int

	// Blocks of 8 rows. A block is a run of slots, slot[b] ≤ s < slot[b+1];
	// in a slot every row takes at most one entry, and these lie within 8
	// columns from base[s] on: row l takes column base[s] + pick[8s+l] times
	// w[8s+l], which is 0 for a row that has no entry there. Empty if the
	// matrix is too small.
	slot, base []int32
	pick       []uint8
	w          []float32
}

// NewSparse takes row r's entries from start[r] to start[r+1], of a matrix of
// cols columns. The slices are kept.
func NewSparse(start, col []int32, val []float32, cols int) *Sparse {
	s := &Sparse{start: start, col: col, val: val, cols: cols}
	rows := len(start) - 1
	if cols < lanes || rows < lanes {
		return s
	}
	s.slot = append(s.slot, 0)
	for r := 0; r+lanes <= rows; r += lanes {
		s.block(r)
		s.slot = append(s.slot, int32(len(s.base)))
	}
	return s
}

// block fills slots for 8 rows from r on. The next entry that lies furthest
// left decides where a slot begins; whichever row's next entry lies in reach
// goes along. So every row keeps the order of its entries.
func (s *Sparse) block(r int) {
	var next, end [lanes]int32
	for l := range lanes {
		next[l], end[l] = s.start[r+l], s.start[r+l+1]
	}
	for {
		base := int32(s.cols)
		for l := range lanes {
			if next[l] < end[l] {
				base = min(base, s.col[next[l]])
			}
		}
		if base == int32(s.cols) {
			return
		}
		base = min(base, int32(s.cols-lanes))
		s.base = append(s.base, base)
		for l := range lanes {
			pick, w := uint8(0), float32(0)
			if next[l] < end[l] && s.col[next[l]]-base < lanes {
				pick, w = uint8(s.col[next[l]]-base), s.val[next[l]]
				next[l]++
			}
			s.pick, s.w = append(s.pick, pick), append(s.w, w)
		}
	}
}

// Mul writes rows lo ≤ r < hi of S·src to dst, which has one element per row:
// dst[r] = 0 + Σ val·src[col] in the order of the entries. src must be finite:
// otherwise rows near by may become NaN in one version and not in the other.
func (l Lanes) Mul(s *Sparse, dst, src []float32, lo, hi int) {
	src = src[:s.cols]
	_ = dst[lo:hi]
	first, last := (lo+lanes-1)/lanes, min(hi/lanes, len(s.slot)-1)
	if !l.wide || first >= last {
		s.mul(dst, src, lo, hi)
		return
	}
	s.mul(dst, src, lo, first*lanes)
	if n := s.slot[first]; int(n) < len(s.base) {
		mulBlocks(&dst[first*lanes], last-first, &s.slot[first], &src[0], &s.base[n], &s.pick[lanes*n], &s.w[lanes*n])
	} else {
		clear(dst[first*lanes : last*lanes])
	}
	s.mul(dst, src, last*lanes, hi)
}

// mul is the plain Mul.
func (s *Sparse) mul(dst, src []float32, lo, hi int) {
	for r := lo; r < hi; r++ {
		a, b := s.start[r], s.start[r+1]
		col, val := s.col[a:b], s.val[a:b]
		val = val[:len(col)]
		var sum float32
		for j, c := range col {
			sum += float32(val[j] * src[c])
		}
		dst[r] = sum
	}
}
