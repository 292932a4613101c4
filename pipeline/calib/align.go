package calib

import (
	"math"

	"gonum.org/v1/gonum/mat"
)

// aligner compares the streak target S with the reference target R seen
// through a map:
//
//	S(x, y) ≈ α · R(h(x, y)) · D⁻³ + β                                  (2)
//
// D is the denominator of the homography, so that D⁻³ is its Jacobian
// relative to the centre: flux is kept. Minimising the squares over the map,
// α and β is maximising the correlation of the two images (ECC: G. D.
// Evangelidis, E. Z. Psarakis, IEEE Trans. Pattern Anal. Mach. Intell. 30,
// 2008, 1858–1865); the steps are Gauss–Newton with Levenberg–Marquardt
// damping.
type aligner struct {
	s      plane  // blurred streak target, the inner part of the window
	use    []bool // pixels of s that count
	ox, oy int    // window position of pixel (0, 0) of s
	stride int

	r   spline
	rok []bool // reference pixels whose surroundings are good
	rw  int
	rh  int

	cx, cy, l float64 // normalised coordinates: X = (x − cx)/l
}

// pose is a map in normalised coordinates: u = (p0 + p1·X + p2·Y)/D,
// v = (p3 + p4·X + p5·Y)/D, D = 1 + p6·X + p7·Y.
type pose [8]float64

func (a *aligner) pose(h [9]float64) pose {
	n := [9]float64{a.l, 0, a.cx, 0, a.l, a.cy, 0, 0, 1}
	g := mul3(h, n)
	for i := range g {
		if i != 8 {
			g[i] /= g[8]
		}
	}
	return pose{g[2], g[0], g[1], g[5], g[3], g[4], g[6], g[7]}
}

func (a *aligner) homography(p pose) [9]float64 {
	g := [9]float64{p[1], p[2], p[0], p[4], p[5], p[3], p[6], p[7], 1}
	n := [9]float64{1 / a.l, 0, -a.cx / a.l, 0, 1 / a.l, -a.cy / a.l, 0, 0, 1}
	h := mul3(g, n)
	for i := range h {
		if i != 8 {
			h[i] /= h[8]
		}
	}
	h[8] = 1
	return h
}

func mul3(a, b [9]float64) (c [9]float64) {
	for i := range 3 {
		for j := range 3 {
			for k := range 3 {
				c[3*i+j] += a[3*i+k] * b[3*k+j]
			}
		}
	}
	return c
}

// sample is the model at one pixel.
type sample struct {
	s, r float64 // streak, reference · D⁻³
	d    [8]float64
	tile int
}

// tiles is how many parts a side is cut into for the uncertainty.
const tiles = 4

// visit calls f for every pixel that counts and is seen by the reference.
func (a *aligner) visit(p pose, f func(*sample)) {
	var t sample
	for y := 0; y < a.s.h; y += a.stride {
		for x := 0; x < a.s.w; x += a.stride {
			i := y*a.s.w + x
			if !a.use[i] {
				continue
			}
			X, Y := (float64(x+a.ox)-a.cx)/a.l, (float64(y+a.oy)-a.cy)/a.l
			d := 1 + p[6]*X + p[7]*Y
			u, v := (p[0]+p[1]*X+p[2]*Y)/d, (p[3]+p[4]*X+p[5]*Y)/d
			if !(d > 0.1) || !(u >= 1 && v >= 1 && u <= float64(a.rw-2) && v <= float64(a.rh-2)) ||
				!a.rok[int(v+0.5)*a.rw+int(u+0.5)] {
				continue
			}
			r, gx, gy := a.r.at(u, v)
			j := 1 / (d * d * d)
			t.s, t.r = a.s.v[i], r*j
			gx, gy = gx*j/d, gy*j/d
			w := -(gx*u + gy*v) - 3*r*j/d
			t.d = [8]float64{gx, gx * X, gx * Y, gy, gy * X, gy * Y, w * X, w * Y}
			t.tile = y*tiles/a.s.h*tiles + x*tiles/a.s.w
			f(&t)
		}
	}
}

// fit is the state after alignment.
type fit struct {
	p           pose
	alpha, beta float64
	sse         float64 // sum of squares
	n           int     // pixels
	rho         float64 // correlation coefficient
	signal      float64 // sum of squares of s about its mean
	ss          float64 // sum of squares of s
}

// measure finds α, β and the correlation for a given map.
func (a *aligner) measure(p pose) (f fit) {
	var n, s, r, ss, sr, rr float64
	a.visit(p, func(t *sample) {
		n++
		s += t.s
		r += t.r
		ss += t.s * t.s
		sr += t.s * t.r
		rr += t.r * t.r
	})
	f.p, f.n = p, int(n)
	if n < 16 {
		return f
	}
	css, csr, crr := ss-s*s/n, sr-s*r/n, rr-r*r/n
	if !(crr > 0) || !(css > 0) {
		return f
	}
	f.alpha = csr / crr
	f.beta = (s - f.alpha*r) / n
	f.sse = max(css-csr*csr/crr, 0)
	f.rho = csr / math.Sqrt(css*crr)
	f.signal, f.ss = css, ss
	return f
}

// align improves p. free is 6 for an affine map, 8 for a homography.
func (a *aligner) align(p pose, free, steps int) fit {
	now := a.measure(p)
	lambda := 1e-3
	for range steps {
		eq := a.equations(now, free)
		moved := false
		for range 8 {
			q, move, ok := a.step(eq, now, free, lambda)
			if !ok {
				lambda *= 10
				continue
			}
			next := a.measure(q)
			if next.n*10 >= now.n*8 && next.rho > now.rho {
				done := move < 1e-5
				now, moved = next, !done
				lambda = max(lambda/5, 1e-9)
				break
			}
			lambda *= 6
		}
		if !moved {
			break
		}
	}
	return now
}

// equations gathers the linearised problem: the map's free parameters, α, β.
func (a *aligner) equations(f fit, free int) *normal {
	eq := newNormal(free + 2)
	row := make([]float64, free+2)
	a.visit(f.p, func(t *sample) {
		a.row(row, t, f, free)
		eq.add(row, t.s-f.alpha*t.r-f.beta, 1)
	})
	return eq
}

func (a *aligner) row(row []float64, t *sample, f fit, free int) {
	for i := range free {
		row[i] = f.alpha * t.d[i]
	}
	row[free], row[free+1] = t.r, 1
}

// step solves the damped equations; move is the largest displacement of a
// corner, reference px.
func (a *aligner) step(eq *normal, f fit, free int, lambda float64) (q pose, move float64, ok bool) {
	m := eq.matrix()
	for i := range eq.n {
		m.SetSym(i, i, m.At(i, i)*(1+lambda))
	}
	var chol mat.Cholesky
	if !chol.Factorize(m) {
		return q, 0, false
	}
	x := mat.NewVecDense(eq.n, nil)
	if chol.SolveVecTo(x, mat.NewVecDense(eq.n, eq.b)) != nil {
		return q, 0, false
	}
	q = f.p
	for i := range free {
		q[i] += x.AtVec(i)
	}
	if !finite(q[:]...) {
		return q, 0, false
	}
	for _, c := range [][2]float64{{-1, -1}, {1, -1}, {-1, 1}, {1, 1}} {
		u0, v0 := f.p.at(c[0], c[1])
		u1, v1 := q.at(c[0], c[1])
		move = max(move, math.Hypot(u1-u0, v1-v0))
	}
	return q, move, true
}

func (p pose) at(x, y float64) (u, v float64) {
	d := 1 + p[6]*x + p[7]*y
	return (p[0] + p[1]*x + p[2]*y) / d, (p[3] + p[4]*x + p[5]*y) / d
}

// uncertainty is the rms standard deviation of the mapped position over the
// window, reference px: the delete-one jackknife over tiles (B. Efron, The
// Jackknife, the Bootstrap and Other Resampling Plans, SIAM 1982, ch. 3), one
// Gauss–Newton step per tile. Tiles are larger than the blur, so that the
// correlation of neighbouring residuals is accounted for.
func (a *aligner) uncertainty(f fit, free int) float64 {
	whole := newNormal(free + 2)
	part := make([]*normal, tiles*tiles)
	for i := range part {
		part[i] = newNormal(free + 2)
	}
	row := make([]float64, free+2)
	a.visit(f.p, func(t *sample) {
		a.row(row, t, f, free)
		e := t.s - f.alpha*t.r - f.beta
		whole.add(row, e, 1)
		part[t.tile].add(row, e, 1)
	})
	var poses []pose
	for _, t := range part {
		if t.points == 0 {
			continue
		}
		whole.merge(t, -1)
		if q, _, ok := a.step(whole, f, free, 0); ok {
			poses = append(poses, q)
		}
		whole.merge(t, 1)
	}
	n := float64(len(poses))
	if n < 4 {
		return math.NaN()
	}
	var sum float64
	count := 0
	for y := -1.0; y <= 1; y += 0.25 {
		for x := -1.0; x <= 1; x += 0.25 {
			var mu, mv, s float64
			for _, p := range poses {
				u, v := p.at(x*float64(a.s.w)/2/a.l, y*float64(a.s.h)/2/a.l)
				mu += u / n
				mv += v / n
			}
			for _, p := range poses {
				u, v := p.at(x*float64(a.s.w)/2/a.l, y*float64(a.s.h)/2/a.l)
				s += (u-mu)*(u-mu) + (v-mv)*(v-mv)
			}
			sum += s * (n - 1) / n
			count++
		}
	}
	return math.Sqrt(sum / float64(count))
}
