package optics

import "unsheard/pipeline/solve/row"

// mul writes dst = S·src; dst has one entry per row. The matrix must be laid.
func (s *sparse) mul(dst, src []float32) { s.mulRange(dst, src, 0, len(dst)) }

func (s *sparse) mulRange(dst, src []float32, lo, hi int) { s.lanes.Mul(s.rows, dst, src, lo, hi) }

// laid lays the matrix out for the loops.
func (s sparse) laid(cols int, lanes row.Lanes) sparse {
	s.rows, s.lanes = row.NewSparse(s.start, s.col, s.val, cols), lanes
	return s
}

// transpose returns the transposed matrix; cols is the number of columns of
// s. Entries of a row are ordered by column, so results do not depend on how
// s was filled.
func (s *sparse) transpose(cols int) sparse {
	t := sparse{start: make([]int32, cols+1), col: make([]int32, len(s.col)), val: make([]float32, len(s.val))}
	for _, c := range s.col {
		t.start[c+1]++
	}
	for c := range cols {
		t.start[c+1] += t.start[c]
	}
	next := append([]int32(nil), t.start[:cols]...)
	for r := range len(s.start) - 1 {
		for j := s.start[r]; j < s.start[r+1]; j++ {
			k := next[s.col[j]]
			next[s.col[j]]++
			t.col[k], t.val[k] = int32(r), s.val[j]
		}
	}
	return t
}

// mulAbs is mul with the absolute values of the entries.
func (s *sparse) mulAbs(dst, src []float32) {
	for r := range dst {
		var sum float32
		for j := s.start[r]; j < s.start[r+1]; j++ {
			v := s.val[j]
			sum += float32(max(v, -v) * src[s.col[j]])
		}
		dst[r] = sum
	}
}

// Apply writes the view of the window plane src (H·W) to dst (Rect.H·Rect.W).
// dst and src must not overlap. It panics if a length does not fit.
func (v *View) Apply(dst, src []float32) {
	if len(dst) != v.Rect.W*v.Rect.H || len(src) != v.w*v.h {
		panic(ErrShape)
	}
	v.fwd.mul(dst, src)
}

// Adjoint writes the transposed operator of the reference plane src to the
// window plane dst.
func (v *View) Adjoint(dst, src []float32) {
	if len(src) != v.Rect.W*v.Rect.H || len(dst) != v.w*v.h {
		panic(ErrShape)
	}
	v.adj.mul(dst, src)
}

// ApplyRange is Apply for the entries lo ≤ j < hi of dst only.
func (v *View) ApplyRange(dst, src []float32, lo, hi int) { v.fwd.mulRange(dst, src, lo, hi) }

// AdjointRange is Adjoint for the entries lo ≤ j < hi of dst only.
func (v *View) AdjointRange(dst, src []float32, lo, hi int) { v.adj.mulRange(dst, src, lo, hi) }

// Coverage returns, for every pixel of the rectangle, how much of its
// interpolation falls inside the window: 1 inside, 0 for a pixel that sees
// nothing of the window. Where it is under 1, light of the scene outside the
// window may reach the pixel and is not modelled.
func (v *View) Coverage() []float32 {
	inv, err := invert(v.hom)
	if err != nil {
		panic(err) // NewView has checked it
	}
	det := inv[0]*(inv[4]*inv[8]-inv[5]*inv[7]) - inv[1]*(inv[3]*inv[8]-inv[5]*inv[6]) + inv[2]*(inv[3]*inv[7]-inv[4]*inv[6])
	ones := make([]float32, v.w*v.h)
	for j := range ones {
		ones[j] = 1
	}
	dst := make([]float32, v.Rect.W*v.Rect.H)
	v.fwd.mul(dst, ones)
	for j := range dst {
		_, _, d := project(inv, float64(v.Rect.X+j%v.Rect.W), float64(v.Rect.Y+j/v.Rect.W))
		jac := det / (d * d * d)
		dst[j] = float32(float64(dst[j]) / max(jac, -jac))
	}
	return dst
}
