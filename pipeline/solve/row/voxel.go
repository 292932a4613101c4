package row

// Slope writes what the data give to the gradient of a row of voxels and to its
// step: g = code·cast + back, t = code·col + own.
func (l Lanes) Slope(g, t, code, cast, back, col, own []float32) {
	n := len(g)
	t, code, cast, back, col, own = t[:n], code[:n], cast[:n], back[:n], col[:n], own[:n]
	if l.wide && n > 0 {
		slopeRow(&g[0], &t[0], &code[0], &cast[0], &back[0], &col[0], &own[0], n)
		return
	}
	for i, c := range code {
		g[i] = float32(c*cast[i]) + back[i]
		t[i] = float32(c*col[i]) + own[i]
	}
}

// Descend is the primal step for a row of voxels with gradient g and inverse
// step t, and what it gives to the planes of both arms:
//
//	v = x − g/t, or 0 unless v > tiny
//	bar = 2v − x;  x += ρ·(v − x)
//	streak += code·bar;  sum += bar
func (l Lanes) Descend(x, bar, g, t, code, streak, sum []float32, s Step) {
	n := len(x)
	bar, g, t, code, streak, sum = bar[:n], g[:n], t[:n], code[:n], streak[:n], sum[:n]
	if l.wide && n > 0 {
		descendRow(&x[0], &bar[0], &g[0], &t[0], &code[0], &streak[0], &sum[0], n, s.Rho, s.Tiny)
		return
	}
	for i, old := range x {
		v := old - g[i]/t[i]
		if !(v > s.Tiny) {
			v = 0
		}
		d := v - old
		e := v + d
		x[i], bar[i] = s.flush(old+float32(s.Rho*d)), e
		streak[i] += float32(code[i] * e)
		sum[i] += e
	}
}
