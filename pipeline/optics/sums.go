package optics

// ColumnSums writes, for every voxel, the sum over all pixels of the absolute
// entries of the operator times the pixel weights wS (streak plane) and wR
// (reference plane), both not negative.
func (m *Model) ColumnSums(dst, wS, wR []float32) {
	m.checkSizes(wS, wR, dst)
	plane := make([]float32, len(wS))
	back := make([]float32, m.g.H*m.g.W)
	m.BlurStreakAdjoint(plane, make([]float32, len(wS)), wS)
	m.UnprojectAbs(back, wR)
	m.unshear(dst, plane, back)
}

// UnprojectAbs is Unproject with the absolute values of the entries. It
// allocates.
func (m *Model) UnprojectAbs(dst, src []float32) {
	n := len(src)
	tmp := make([]float32, 2*n)
	m.r.apply(tmp[:n], tmp[n:], src)
	m.g.View.adj.mulAbs(dst, tmp[:n])
	scale(dst, float32(m.g.Ratio))
}

// RowSums writes, for every pixel of both planes, the sum over all voxels of
// the absolute entries of the operator: the model's answer to a cube of ones
// if the view had no negative lobes.
func (m *Model) RowSums(rS, rR []float32) {
	g := &m.g
	if len(rS) != m.rows*m.cols || len(rR) != g.View.Rect.W*g.View.Rect.H {
		panic(ErrShape)
	}
	plane := make([]float32, len(rS))
	for k := range g.T {
		for y := range g.H {
			out := plane[(y+k*g.Step+g.StreakPad)*m.cols+g.StreakPad:][:g.W]
			for i, c := range g.Code[y*g.W:][:g.W] {
				out[i] += c
			}
		}
	}
	m.BlurStreak(rS, make([]float32, len(rS)), plane)
	depth := make([]float32, g.H*g.W)
	for j := range depth {
		depth[j] = float32(g.T)
	}
	tmp := make([]float32, 2*len(rR))
	g.View.fwd.mulAbs(tmp[:len(rR)], depth)
	m.r.apply(rR, tmp[len(rR):], tmp[:len(rR)])
	scale(rR, float32(g.Ratio))
}

// Sharpness returns, for each arm along x and y, the most that a pixel may
// exceed the sum of its two neighbours, as a factor: whatever the scene, light
// is not negative and the blur spreads it, so that with the arm's kernel K
//
//	E[j] ≤ max_n K[n]/(K[n−1] + K[n+1]) · (E[j−1] + E[j+1]).
//
// It is +Inf along an axis without blur.
func (m *Model) Sharpness() (streak, reference [2]float64) {
	return [2]float64{m.s.x.sharpness(), m.s.y.sharpness()}, [2]float64{m.r.x.sharpness(), m.r.y.sharpness()}
}

func (k kernel) sharpness() float64 {
	at := func(n int) float64 {
		if n < 0 || n >= len(k.w) {
			return 0
		}
		return float64(k.w[n])
	}
	var most float64
	for n := range k.w {
		most = max(most, at(n)/(at(n-1)+at(n+1)))
	}
	return most
}

// Coverage returns, for every reference pixel, the share of the scene it sees
// that lies inside the window, blur included: 1 inside, 0 for a pixel that
// sees nothing of the window, and within some per cent of 1 near the edge
// inside, where the interpolation reaches out. Where it is not 1, light of the
// scene outside the window reaches the pixel and is not modelled.
func (m *Model) Coverage() []float32 {
	c := m.g.View.Coverage()
	if m.r.x.identity() && m.r.y.identity() {
		return c
	}
	// The sensor's own edge must not look like the window's: divide by the
	// blur of a plane of ones.
	n := len(c)
	out, tmp, ones := make([]float32, n), make([]float32, n), make([]float32, n)
	for j := range ones {
		ones[j] = 1
	}
	m.r.apply(out, tmp, c)
	m.r.apply(c, tmp, ones)
	for j := range out {
		out[j] /= c[j]
	}
	return out
}
