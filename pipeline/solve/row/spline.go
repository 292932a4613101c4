package row

// lanes is the number of rows Down works on at once.
const lanes = 8

// Spline is B along rows: n samples as sums of taps out of m coefficients each,
// laid out for the loops. It is immutable.
type Spline struct {
	n, m, taps int
	first      []int     // first coefficient of a sample
	w          []float32 // taps weights per sample
	lo, count  []int32   // of a coefficient: first sample, number of samples
	wt         []float32 // its weights, one coefficient after the other
	at         []int     // where in wt

	// Blocks of 8 samples, see upBlocks. The last one lies over the one
	// before it where n is no multiple of 8. Empty if the row is too short.
	place, pick []int32
	block       []float32
}

// upTaps is the number of coefficients per sample that the blocks are made
// for: those of a cubic.
const upTaps = 4

// NewSpline takes, of every sample, the first coefficient and taps weights,
// and, of every coefficient, the first sample and all weights. Knots closer than
// samples, where first grows by more than 1, are for the plain loops.
func NewSpline(taps int, first []int, w []float32, lo []int, wt [][]float32) *Spline {
	s := &Spline{n: len(first), m: len(lo), taps: taps, first: first, w: w}
	for j, v := range wt {
		s.at = append(s.at, len(s.wt))
		s.lo, s.count = append(s.lo, int32(lo[j])), append(s.count, int32(len(v)))
		s.wt = append(s.wt, v...)
	}
	// A block reads 8 coefficients from base to base+3 on.
	if taps != upTaps || s.n < lanes || s.m < lanes+upTaps-1 {
		return s
	}
	for i := 0; i < s.n; i += lanes {
		d := min(i, s.n-lanes)
		base := min(first[d], s.m-lanes-upTaps+1)
		s.place = append(s.place, int32(d), int32(base))
		for _, f := range first[d : d+lanes] {
			if f-base >= lanes {
				s.place, s.pick, s.block = nil, nil, nil
				return s
			}
			s.pick = append(s.pick, int32(f-base))
		}
		for a := range upTaps {
			for l := range lanes {
				s.block = append(s.block, w[upTaps*(d+l)+a])
			}
		}
	}
	return s
}

// Up writes B·src: dst has n samples, src m coefficients.
func (l Lanes) Up(s *Spline, dst, src []float32) {
	dst, src = dst[:s.n], src[:s.m]
	if blocks := len(s.pick) / lanes; l.wide && blocks > 0 {
		upBlocks(&dst[0], &src[0], blocks, &s.place[0], &s.pick[0], &s.block[0])
		return
	}
	if s.taps != upTaps {
		for i, f := range s.first {
			var v float32
			for a, w := range s.w[s.taps*i : s.taps*(i+1)] {
				v += float32(w * src[f+a])
			}
			dst[i] = v
		}
		return
	}
	for i, f := range s.first {
		c, w := src[f:f+4:f+4], s.w[4*i:4*i+4:4*i+4]
		dst[i] = float32(w[0]*c[0]) + float32(w[1]*c[1]) + float32(w[2]*c[2]) + float32(w[3]*c[3])
	}
}

// DownWork is the length of the work that Down needs.
func (s *Spline) DownWork() int { return lanes * (s.n + s.m) }

// Down writes Bᵀ·src for rows at a time: dst has rows of m coefficients, src
// as many of n samples. work is scratch of DownWork.
func (l Lanes) Down(s *Spline, dst, src, work []float32, rows int) {
	dst, src = dst[:rows*s.m], src[:rows*s.n]
	if !l.wide || rows < lanes || s.n < lanes || s.m < lanes {
		for r := range rows {
			s.down(dst[r*s.m:(r+1)*s.m], src[r*s.n:(r+1)*s.n])
		}
		return
	}
	in, out := work[:lanes*s.n], work[lanes*s.n:][:lanes*s.m]
	for r := 0; r < rows; r += lanes {
		r := min(r, rows-lanes) // the last block lies over the one before
		turnIn(in, src[r*s.n:(r+lanes)*s.n], s.n)
		down8(&out[0], &in[0], s.m, &s.lo[0], &s.count[0], &s.wt[0])
		turnOut(dst[r*s.m:(r+lanes)*s.m], out, s.m)
	}
}

// down is Down for one row.
func (s *Spline) down(dst, src []float32) {
	for j, at := range s.at {
		n := int(s.count[j])
		in, w := src[s.lo[j]:][:n], s.wt[at:][:n]
		var v float32
		for i, c := range w {
			v += float32(c * in[i])
		}
		dst[j] = v
	}
}

// turnIn writes 8 rows of n as n rows of 8; the last tile may lie over the one
// before it.
func turnIn(dst, src []float32, n int) {
	_ = dst[lanes*n-1]
	turnTiles(&dst[0], 4*lanes, 4*lanes*lanes, &src[0], 4*n, 4*lanes, n/lanes)
	if n%lanes != 0 {
		turnTiles(&dst[lanes*(n-lanes)], 4*lanes, 0, &src[n-lanes], 4*n, 0, 1)
	}
}

// turnOut writes n rows of 8 as 8 rows of n.
func turnOut(dst, src []float32, n int) {
	_ = dst[lanes*n-1]
	turnTiles(&dst[0], 4*n, 4*lanes, &src[0], 4*lanes, 4*lanes*lanes, n/lanes)
	if n%lanes != 0 {
		turnTiles(&dst[n-lanes], 4*n, 0, &src[lanes*(n-lanes)], 4*lanes, 0, 1)
	}
}
