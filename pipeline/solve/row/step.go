package row

import "math"

// Step holds the constants of a relaxed primal-dual step.
type Step struct {
	Rho  float32 // over-relaxation
	Tiny float32 // results under this in magnitude become 0; positive
}

func (s Step) flush(v float32) float32 {
	if u := math.Float32frombits(math.Float32bits(v) &^ (1 << 31)); u < s.Tiny {
		return 0
	}
	return v
}

// Project is the primal step for coefficients z with gradient g:
//
//	v = z − τ·g, or 0 unless v > tiny
//	bar = 2v − z;  z += ρ·(v − z)
func (l Lanes) Project(z, bar, g, tau []float32, s Step) {
	n := len(z)
	bar, g, tau = bar[:n], g[:n], tau[:n]
	if l.wide && n > 0 {
		projectRow(&z[0], &bar[0], &g[0], &tau[0], n, s.Rho, s.Tiny)
		return
	}
	for i, old := range z {
		v := old - float32(tau[i]*g[i])
		if !(v > s.Tiny) {
			v = 0
		}
		d := v - old
		z[i], bar[i] = s.flush(old+float32(s.Rho*d)), v+d
	}
}

// Diverge subtracts from g what the duals p, q and r of the differences along
// the row, down and in time cast back:
//
//	g −= (p[i] − p[i−1]) + (q − up) + α·(r − back), one after the other
//
// where p[−1] is 0, and up and back are q of the row above and r of the plane
// before.
func (l Lanes) Diverge(g, p, q, up, r, back []float32, alpha float32) {
	n := len(g)
	p, q, up, r, back = p[:n], q[:n], up[:n], r[:n], back[:n]
	if l.wide && n > 1 {
		divergePlain(g[:1], p, q, up, r, back, alpha)
		divergeRow(&g[1], &p[1], &p[0], &q[1], &up[1], &r[1], &back[1], n-1, alpha)
		return
	}
	divergePlain(g, p, q, up, r, back, alpha)
}

func divergePlain(g, p, q, up, r, back []float32, alpha float32) {
	n := len(g)
	p, q, up, r, back = p[:n], q[:n], up[:n], r[:n], back[:n]
	var left float32
	for i, v := range g {
		v -= p[i] - left
		left = p[i]
		v -= q[i] - up[i]
		g[i] = v - float32(alpha*(r[i]-back[i]))
	}
}

// Ball says how duals of differences step: u += σ·(difference), with σ·α in
// time, projected on |u| ≤ λ.
type Ball struct{ Sigma, Alpha, Lambda float32 }

// Dual is the dual step for a row b, where down and next are the row below and
// the one in the next plane:
//
//	u = (p,q,r) + σ·(b[i+1]−b, down−b, α·(next−b)), projected on |u| ≤ λ
//	(p,q,r) += ρ·(u − (p,q,r))
//
// The last element has no neighbour on the right; standing in for it itself it
// has a difference of 0. A row must not be empty.
func (l Lanes) Dual(p, q, r, b, down, next []float32, a Ball, s Step) {
	n := len(b)
	m := n - 1
	p, q, r, down, next = p[:n], q[:n], r[:n], down[:n], next[:n]
	if l.wide {
		dualRow(&p[0], &q[0], &r[0], &b[0], &down[0], &next[0], n, a.Sigma, a.Sigma*a.Alpha, a.Lambda, a.Lambda*a.Lambda, s.Rho, s.Tiny)
		return
	}
	dualPlain(p[:m], q[:m], r[:m], b[:m], b[1:], down[:m], next[:m], a, s)
	dualPlain(p[m:], q[m:], r[m:], b[m:], b[m:], down[m:], next[m:], a, s)
}

// dualPlain is Dual where ahead holds the right-hand neighbours of b.
func dualPlain(p, q, r, b, ahead, down, next []float32, a Ball, s Step) {
	n := len(b)
	p, q, r, ahead, down, next = p[:n], q[:n], r[:n], ahead[:n], down[:n], next[:n]
	sigmaT, limit := a.Sigma*a.Alpha, a.Lambda*a.Lambda
	for i, v := range b {
		p0, q0, r0 := p[i], q[i], r[i]
		u0 := p0 + float32(a.Sigma*(ahead[i]-v))
		u1 := q0 + float32(a.Sigma*(down[i]-v))
		u2 := r0 + float32(sigmaT*(next[i]-v))
		if m := float32(u0*u0) + float32(u1*u1) + float32(u2*u2); m > limit {
			f := a.Lambda / float32(math.Sqrt(float64(m)))
			u0, u1, u2 = float32(u0*f), float32(u1*f), float32(u2*f)
		}
		p[i] = s.flush(p0 + float32(s.Rho*(u0-p0)))
		q[i] = s.flush(q0 + float32(s.Rho*(u1-q0)))
		r[i] = s.flush(r0 + float32(s.Rho*(u2-r0)))
	}
}

// Data is a run of pixels of an arm: data with their variance, where what is
// not positive masks a pixel; the dual with its step sizes, σ and 1/(1 + σ·vari);
// the model at the extrapolated cube, bar, and at the relaxed one, now.
type Data struct{ Dual, Now, Bar, Data, Vari, Sigma, Inv []float32 }

// Fit relaxes the model and steps the dual of the pixels that are not masked:
//
//	b = scale·bar;  now += ρ·((b + now)/2 − now)
//	u = (dual + σ·(b − data))·inv;  dual += ρ·(u − dual)
func (l Lanes) Fit(d Data, scale float32, s Step) {
	n := len(d.Dual)
	dual, now, bar, data, vari, sigma, inv := d.Dual, d.Now[:n], d.Bar[:n], d.Data[:n], d.Vari[:n], d.Sigma[:n], d.Inv[:n]
	if l.wide && n > 0 {
		fitRow(&dual[0], &now[0], &bar[0], &data[0], &vari[0], &sigma[0], &inv[0], n, scale, s.Rho, s.Tiny)
		return
	}
	for j, old := range now {
		b := float32(bar[j] * scale)
		now[j] = old + float32(s.Rho*((b+old)/2-old))
		if !(vari[j] > 0) {
			continue
		}
		u := dual[j] + float32(sigma[j]*(b-data[j]))
		u = float32(u*inv[j]) - dual[j]
		dual[j] = s.flush(dual[j] + float32(s.Rho*u))
	}
}
