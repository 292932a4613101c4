package optics

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
)

const seed = 20260107 // of every random array in this file

func random(n int, rng *rand.Rand) []float32 {
	x := make([]float32, n)
	for j := range x {
		x[j] = rng.Float32()*2 - .5
	}
	return x
}

func code(n int, rng *rand.Rand) []float32 {
	c := make([]float32, n)
	for j := range c {
		c[j] = float32(rng.IntN(2))
	}
	return c
}

func dot(a, b []float32) float64 {
	var s float64
	for j := range a {
		s += float64(a[j]) * float64(b[j])
	}
	return s
}

func turned(deg, scale, dx, dy float64) [9]float64 {
	s, c := math.Sincos(deg * math.Pi / 180)
	return [9]float64{scale * c, -scale * s, dx, scale * s, scale * c, dy, 2e-4, -1e-4, 1}
}

func mustView(t testing.TB, h [9]float64, w, ht, rw, rh, margin int) View {
	t.Helper()
	v, err := NewView(h, w, ht, rw, rh, margin)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

func mustModel(t testing.TB, g Geometry) *Model {
	t.Helper()
	m, err := NewModel(g)
	if err != nil {
		t.Fatal(err)
	}
	return m
}

// shapes are awkward on purpose: sides of 1, steps, shifts, uneven pads.
func shapes(t testing.TB, rng *rand.Rand) map[string]Geometry {
	out := map[string]Geometry{}
	for _, s := range [][3]int{{1, 1, 1}, {1, 5, 7}, {6, 1, 5}, {5, 7, 1}, {3, 1, 1}, {4, 6, 5}, {7, 9, 8}} {
		for step := 1; step <= 3; step++ {
			T, H, W := s[0], s[1], s[2]
			g := Geometry{T: T, H: H, W: W, Step: step, Code: code(H*W, rng), StreakBlur: Blur{.7, .9}, StreakPad: step, Ratio: 1.3}
			out[fmt.Sprintf("%d×%d×%d step %d plain view", T, H, W, step)] = g
			g.View = mustView(t, turned(20, .8, 3, 2), W, H, 16, 15, 1)
			g.ReferenceBlur = Blur{1.1, 0}
			g.StreakBlur, g.Shift, g.StreakPad = Blur{0, 1.5}, -.4, 3
			out[fmt.Sprintf("%d×%d×%d step %d turned view", T, H, W, step)] = g
		}
	}
	return out
}

// adjointTolerance: float32 sums of at most a few hundred terms of size 1,
// relative to the sum of absolute products.
const adjointTolerance = 3e-6

func TestAdjoint(t *testing.T) {
	rng := rand.New(rand.NewPCG(seed, 1))
	for name, g := range shapes(t, rng) {
		m := mustModel(t, g)
		rows, cols := m.StreakShape()
		rr, rc := m.ReferenceShape()
		x := random(g.T*g.H*g.W, rng)
		ys, yr := random(rows*cols, rng), random(rr*rc, rng)
		es, er := make([]float32, len(ys)), make([]float32, len(yr))
		back := make([]float32, len(x))
		m.Forward(es, er, x)
		m.Adjoint(back, ys, yr)
		left, right := dot(es, ys)+dot(er, yr), dot(x, back)
		scale := math.Sqrt(dot(es, es)*dot(ys, ys)) + math.Sqrt(dot(er, er)*dot(yr, yr))
		if math.Abs(left-right) > adjointTolerance*scale {
			t.Errorf("%s (seed %d): ⟨Ax,y⟩ = %.9g, ⟨x,Aᵀy⟩ = %.9g, differ by more than %g", name, seed, left, right, adjointTolerance*scale)
		}
	}
}

// oracle is equations (1) and (2) as plain sums in float64: kernels by
// numerical integration of the definition, the view by its formula.
type oracle struct{ g Geometry }

// kernelAt integrates (box_l ∗ box ∗ box ∗ g_σ)(x) by the midpoint rule. For
// σ = 0 the tri function is sampled, which is the limit.
func kernelAt(x, sigma, l float64) float64 {
	tri := func(x float64) float64 { return max(0, 1-math.Abs(x)) }
	smooth := func(x float64) float64 {
		if sigma == 0 {
			return tri(x)
		}
		const n = 300
		var s float64
		for j := range n {
			u := (float64(j)+.5)/n*16 - 8
			s += tri(x-u*sigma) * math.Exp(-u*u/2) / math.Sqrt(2*math.Pi) * 16 / n
		}
		return s
	}
	if l == 0 {
		return smooth(x)
	}
	const n = 60
	var s float64
	for j := range n {
		s += smooth(x+((float64(j)+.5)/n-.5)*l) / n
	}
	return s
}

func (o oracle) forward(x []float32) (streak, reference []float64) {
	g := o.g
	rows, cols := g.H+(g.T-1)*g.Step+2*g.StreakPad, g.W+2*g.StreakPad
	plane := make([]float64, rows*cols)
	sum := make([]float64, g.H*g.W)
	for k := range g.T {
		for y := range g.H {
			for i := range g.W {
				v := float64(x[(k*g.H+y)*g.W+i])
				plane[(y+k*g.Step+g.StreakPad)*cols+i+g.StreakPad] += v * float64(g.Code[y*g.W+i])
				sum[y*g.W+i] += v
			}
		}
	}
	conv := func(in []float64, rows, cols int, b Blur, smear, shift float64) []float64 {
		ky, kx := map[int]float64{}, map[int]float64{}
		for j := -14; j <= 14; j++ {
			ky[j], kx[j] = kernelAt(float64(j)-shift, b.SigmaY, smear), kernelAt(float64(j), b.SigmaX, 0)
		}
		out := make([]float64, len(in))
		for r := range rows {
			for c := range cols {
				for q := range rows {
					for p := range cols {
						out[r*cols+c] += ky[r-q] * kx[c-p] * in[q*cols+p]
					}
				}
			}
		}
		return out
	}
	streak = conv(plane, rows, cols, g.StreakBlur, float64(g.Step), g.Shift)
	seen, r, c := sum, g.H, g.W
	if g.View.fwd.start != nil {
		seen, r, c = make([]float64, g.View.Rect.W*g.View.Rect.H), g.View.Rect.H, g.View.Rect.W
		for q := range seen {
			for j := g.View.fwd.start[q]; j < g.View.fwd.start[q+1]; j++ {
				seen[q] += float64(g.View.fwd.val[j]) * sum[g.View.fwd.col[j]]
			}
		}
	}
	reference = conv(seen, r, c, g.ReferenceBlur, 0, 0)
	for j := range reference {
		reference[j] *= g.Ratio
	}
	return streak, reference
}

// denseTolerance: kernels are cut at kernelTail per side in two directions and
// renormalised, so a value may move by a few kernelTail of the brightest light.
const denseTolerance = 1e-3

func TestForwardAgainstDirectSums(t *testing.T) {
	rng := rand.New(rand.NewPCG(seed, 2))
	for name, g := range shapes(t, rng) {
		m := mustModel(t, g)
		x := random(g.T*g.H*g.W, rng)
		rows, cols := m.StreakShape()
		rr, rc := m.ReferenceShape()
		es, er := make([]float32, rows*cols), make([]float32, rr*rc)
		m.Forward(es, er, x)
		ws, wr := oracle{g}.forward(x)
		for _, p := range []struct {
			arm  string
			got  []float32
			want []float64
		}{{"streak", es, ws}, {"reference", er, wr}} {
			var big float64
			for _, v := range p.want {
				big = max(big, math.Abs(v))
			}
			for j := range p.got {
				if math.Abs(float64(p.got[j])-p.want[j]) > denseTolerance*(big+1e-9) {
					t.Errorf("%s: %s pixel %d: got %g, want %g", name, p.arm, j, p.got[j], p.want[j])
					break
				}
			}
		}
	}
}

func TestKernel(t *testing.T) {
	if k := newKernel(0, 0, 0); !k.identity() {
		t.Errorf("no blur, no smear: %v, want the identity", k)
	}
	k := newKernel(0, 1, 0)
	for j, want := range []float32{1. / 8, 3. / 4, 1. / 8} {
		if len(k.w) != 3 || k.lo != -1 || k.w[j] != want {
			t.Fatalf("smear alone: %v, want [1/8 3/4 1/8] from -1", k)
		}
	}
	// Mean and variance of (4) in closed form: shift, and σ² + 1/6 + n²/12.
	// Sampling keeps both but for aliasing of order exp(−2π²σ²), here under
	// 1e-6, and the cut tails.
	for _, c := range []struct{ sigma, smear, shift float64 }{{1, 1, 0}, {1.3, 2, .5}, {2.2, 3, -1.25}} {
		k := newKernel(c.sigma, c.smear, c.shift)
		var sum, mean, vari float64
		for j, w := range k.w {
			sum += float64(w)
			mean += float64(w) * float64(k.lo+j)
		}
		for j, w := range k.w {
			d := float64(k.lo+j) - mean
			vari += float64(w) * d * d
		}
		want := c.sigma*c.sigma + 1./6 + c.smear*c.smear/12
		if math.Abs(sum-1) > 1e-6 || math.Abs(mean-c.shift) > 2e-3 || math.Abs(vari-want) > 5e-3*want {
			t.Errorf("%+v: sum %g, mean %g, variance %g; want 1, %g, %g", c, sum, mean, vari, c.shift, want)
		}
	}
}

// Keys 1981: interpolates (1 at 0, 0 at other integers), sums to 1, and
// reproduces quadratics (the paper proves third order for the six-point
// kernel's error term O(h⁴)).
func TestKeys(t *testing.T) {
	for j := range 4 {
		want := 0.
		if j == 0 {
			want = 1
		}
		if got := keys(float64(j)); math.Abs(got-want) > 1e-14 {
			t.Errorf("keys(%d) = %g, want %g", j, got, want)
		}
	}
	for s := 0.; s < 1; s += .0625 {
		for p := range 4 {
			var got float64
			for j := -3; j <= 3; j++ {
				got += math.Pow(float64(j), float64(p)) * keys(s-float64(j))
			}
			if want := math.Pow(s, float64(p)); math.Abs(got-want) > 1e-12 {
				t.Errorf("interpolating x^%d at %g: %g, want %g", p, s, got, want)
			}
		}
	}
}

func TestFluxIsKept(t *testing.T) {
	rng := rand.New(rand.NewPCG(seed, 3))
	const T, H, W = 5, 24, 26
	for _, scale := range []float64{.45, .7, 1, 1.4} {
		g := Geometry{T: T, H: H, W: W, Code: code(H*W, rng), StreakBlur: Blur{1, 1}, StreakPad: 6, ReferenceBlur: Blur{1, 1.2}, Ratio: .8,
			View: mustView(t, turned(9, scale, 30, 14), W, H, 96, 80, 8)}
		m := mustModel(t, g)
		// A smooth blob away from the edges.
		x := make([]float32, T*H*W)
		var all, coded float64
		for j := range x {
			y, i := float64(j/W%H), float64(j%W)
			x[j] = float32(100 * math.Exp(-((y-12)*(y-12)+(i-13)*(i-13))/18))
			all += float64(x[j])
			coded += float64(x[j]) * float64(g.Code[j%(H*W)])
		}
		rows, cols := m.StreakShape()
		rr, rc := m.ReferenceShape()
		es, er := make([]float32, rows*cols), make([]float32, rr*rc)
		m.Forward(es, er, x)
		var s, r float64
		for _, v := range es {
			s += float64(v)
		}
		for _, v := range er {
			r += float64(v)
		}
		// The midpoint sum over reference pixels of a blob this wide is
		// exact to 1e-3; the streak plane only loses cut tails.
		if math.Abs(s/coded-1) > 1e-4 || math.Abs(r/(.8*all)-1) > 2e-3 {
			t.Errorf("scale %g: streak keeps %.5f, reference %.5f of the light", scale, s/coded, r/(.8*all))
		}
	}
}

// A smooth picture is moved to where the homography says, at sub-pixel level.
func TestViewPlacesLight(t *testing.T) {
	const W, H = 40, 36
	h := turned(-7, .8, 9, 12)
	v := mustView(t, h, W, H, 64, 64, 4)
	src := make([]float32, W*H)
	for j := range src {
		x, y := float64(j%W)-17.3, float64(j/W)-19.6
		src[j] = float32(math.Exp(-(x*x + y*y) / 20))
	}
	dst := make([]float32, v.Rect.W*v.Rect.H)
	v.Apply(dst, src)
	var s, mx, my float64
	for j, q := range dst {
		s += float64(q)
		mx += float64(q) * float64(v.Rect.X+j%v.Rect.W)
		my += float64(q) * float64(v.Rect.Y+j/v.Rect.W)
	}
	wx, wy, _ := project(h, 17.3, 19.6)
	// The perspective terms move a blob's centroid by about its variance
	// times 2e-4 per pixel: under 0.02 px.
	if math.Hypot(mx/s-wx, my/s-wy) > .02 {
		t.Errorf("light lands at %.3f, %.3f; want %.3f, %.3f", mx/s, my/s, wx, wy)
	}
}

func TestCoverage(t *testing.T) {
	g := Geometry{T: 1, H: 28, W: 30, Code: make([]float32, 28*30), ReferenceBlur: Blur{1, 1}}
	g.View = mustView(t, turned(10, .6, 8, 4), 30, 28, 40, 40, 5)
	for name, c := range map[string][]float32{"view": g.View.Coverage(), "model": mustModel(t, g).Coverage()} {
		mid := c[g.View.Rect.H/2*g.View.Rect.W+g.View.Rect.W/2]
		if math.Abs(float64(mid)-1) > 1e-5 || math.Abs(float64(c[0])) > 1e-3 {
			t.Errorf("%s: coverage is %g in the middle and %g in the corner, want 1 and 0", name, mid, c[0])
		}
		for j, v := range c {
			if v < -.1 || v > 1.1 {
				t.Errorf("%s: coverage of pixel %d is %g", name, j, v)
			}
		}
	}
	// A sensor that ends inside the window sees only window.
	g.View = mustView(t, [9]float64{1, 0, -5, 0, 1, -5, 0, 0, 1}, 30, 28, 18, 16, 4)
	for j, v := range mustModel(t, g).Coverage() {
		if math.Abs(float64(v)-1) > 1e-5 {
			t.Errorf("inside: coverage of pixel %d is %g, want 1", j, v)
		}
	}
}

func TestSums(t *testing.T) {
	rng := rand.New(rand.NewPCG(seed, 4))
	g := Geometry{T: 3, H: 4, W: 5, Step: 2, Code: code(20, rng), StreakBlur: Blur{.8, .6}, StreakPad: 2, ReferenceBlur: Blur{.6, .6}, Ratio: 1.2}
	checkSums(t, g, 1)
	// With a view, the sums are those of the factors' absolute values: never
	// under the product's own, which is what the preconditioner needs, and
	// over them where the blur cancels lobes of the view's kernel. Keys'
	// kernel has Σ|keys| ≤ 1.375, so the rows stay under 1.375² times those
	// of a view without lobes (J ≤ 1.6 here), 3 frames, ratio 1.2.
	g.View = mustView(t, turned(15, .9, 4, 3), 5, 4, 12, 12, 2)
	checkSums(t, g, math.Inf(1))
	_, rr := sums(mustModel(t, g))
	for j, v := range rr {
		if v > 1.375*1.375*1.6*3*1.2 {
			t.Errorf("reference row sum %d: %g is more than the view can have", j, v)
		}
	}
}

func sums(m *Model) (rS, rR []float32) {
	rows, cols := m.StreakShape()
	rr, rc := m.ReferenceShape()
	rS, rR = make([]float32, rows*cols), make([]float32, rr*rc)
	m.RowSums(rS, rR)
	return rS, rR
}

// checkSums compares with sums over the columns of the operator; the result
// may exceed them by the factor slack.
func checkSums(t *testing.T, g Geometry, slack float64) {
	t.Helper()
	rng := rand.New(rand.NewPCG(seed, 6))
	m := mustModel(t, g)
	rs, rr := sums(m)
	nx := g.T * g.H * g.W
	wS, wR := make([]float32, len(rs)), make([]float32, len(rr))
	for j := range wS {
		wS[j] = rng.Float32()
	}
	for j := range wR {
		wR[j] = rng.Float32()
	}
	col := make([]float32, nx)
	m.ColumnSums(col, wS, wR)
	colWant, rsWant, rrWant := make([]float64, nx), make([]float64, len(rs)), make([]float64, len(rr))
	es, er, x := make([]float32, len(rs)), make([]float32, len(rr)), make([]float32, nx)
	for j := range nx {
		x[j] = 1
		m.Forward(es, er, x)
		x[j] = 0
		for r, v := range es {
			colWant[j] += math.Abs(float64(v)) * float64(wS[r])
			rsWant[r] += math.Abs(float64(v))
		}
		for r, v := range er {
			colWant[j] += math.Abs(float64(v)) * float64(wR[r])
			rrWant[r] += math.Abs(float64(v))
		}
	}
	check := func(name string, got []float32, want []float64) {
		t.Helper()
		for j := range got {
			if g, w := float64(got[j]), want[j]; g < w*(1-1e-5)-1e-6 || g > w*slack*(1+1e-5)+1e-6 {
				t.Errorf("%s sum %d: got %g, direct %g", name, j, g, w)
			}
		}
	}
	check("column", col, colWant)
	check("streak row", rs, rsWant)
	check("reference row", rr, rrWant)
}

// The coarse model of a scene that is even over coarse voxels, with a code
// that is too, is the binned fine model.
func TestCoarseIsBinned(t *testing.T) {
	rng := rand.New(rand.NewPCG(seed, 5))
	for _, n := range []int{2, 3} {
		const ct, ch, cw = 5, 12, 14
		cc := code(ch*cw, rng)
		g := Geometry{T: ct * n, H: ch * n, W: cw * n, Code: make([]float32, ch*cw*n*n), StreakBlur: Blur{1.5, 1.2}, StreakPad: 2 * n, ReferenceBlur: Blur{1, 1}, Ratio: 1}
		xc := random(ct*ch*cw, rng)
		x := make([]float32, g.T*g.H*g.W)
		for j := range x {
			k, y, i := j/(g.H*g.W)/n, j/g.W%g.H/n, j%g.W/n
			x[j] = xc[(k*ch+y)*cw+i] / float32(n*n*n)
		}
		for j := range g.Code {
			g.Code[j] = cc[j/g.W/n*cw+j%g.W/n]
		}
		c, err := g.Coarse(n)
		if err != nil {
			t.Fatal(err)
		}
		fine, crude := mustModel(t, g), mustModel(t, c)
		fr, fc := fine.StreakShape()
		cr, ccols := crude.StreakShape()
		es, er := make([]float32, fr*fc), make([]float32, g.H*g.W)
		cs, cref := make([]float32, cr*ccols), make([]float32, ch*cw)
		fine.Forward(es, er, x)
		crude.Forward(cs, cref, xc)
		bin := func(src []float32, w, x0, cols, size int) (dst, vari []float32) {
			ones := make([]float32, len(src))
			for j := range ones {
				ones[j] = 1
			}
			dst, vari = make([]float32, size), make([]float32, size)
			Bin(dst, vari, src, ones, w, x0, x0, n, cols)
			return dst, vari
		}
		bs, vs := bin(es, fc, g.StreakPad-n*c.StreakPad, ccols, len(cs))
		br, _ := bin(er, g.W, 0, cw, len(cref))
		// Boxes of n fine pixels, fine smears and fine sensor pixels add up to
		// the coarse ones exactly; only the cut of the kernels' tails differs.
		worst := func(got, want, v []float32) float64 {
			var d, top float64
			for j := range got {
				if v == nil || v[j] > 0 {
					d = max(d, math.Abs(float64(got[j]-want[j])))
					top = max(top, math.Abs(float64(want[j])))
				}
			}
			return d / top
		}
		s, r := worst(cs, bs, vs), worst(cref, br, nil)
		t.Logf("n = %d: streak differs by %.1e, reference by %.1e of the brightest", n, s, r)
		if s > 4*kernelTail || r > 4*kernelTail {
			t.Errorf("n = %d: coarse model differs from the binned fine one by %.3f (streak), %.3f (reference)", n, s, r)
		}
	}
}

func TestRefusals(t *testing.T) {
	ok := Geometry{T: 1, H: 2, W: 2, Code: []float32{1, 0, 1, 1}}
	if _, err := NewModel(ok); err != nil {
		t.Fatal(err)
	}
	for name, change := range map[string]func(*Geometry){
		"no frames":     func(g *Geometry) { g.T = 0 },
		"short code":    func(g *Geometry) { g.Code = g.Code[:3] },
		"code NaN":      func(g *Geometry) { g.Code = []float32{1, float32(math.NaN()), 1, 1} },
		"negative blur": func(g *Geometry) { g.StreakBlur.SigmaX = -1 },
		"ratio":         func(g *Geometry) { g.Ratio = -2 },
		"view":          func(g *Geometry) { g.View = Identity(3, 2) },
		"shift":         func(g *Geometry) { g.Shift = 9 },
	} {
		g := ok
		change(&g)
		if _, err := NewModel(g); err == nil {
			t.Errorf("%s: no error", name)
		}
	}
	for name, h := range map[string][9]float64{
		"singular": {1, 1, 0, 1, 1, 0, 0, 0, 1},
		"far away": {1, 0, 500, 0, 1, 0, 0, 0, 1},
		"infinity": {1, 0, 0, 0, 1, 0, -.2, 0, 1},
		"NaN":      {math.NaN(), 0, 0, 0, 1, 0, 0, 0, 1},
	} {
		if _, err := NewView(h, 10, 10, 20, 20, 2); err == nil {
			t.Errorf("%s registration: no error", name)
		}
	}
}

func TestSharpness(t *testing.T) {
	rng := rand.New(rand.NewPCG(seed, 8))
	m := mustModel(t, Geometry{T: 1, H: 9, W: 40, Code: make([]float32, 360), StreakBlur: Blur{.6, 0}, ReferenceBlur: Blur{1, 0}})
	s, r := m.Sharpness()
	// Smear alone is [1/8 3/4 1/8], so 3/4 over 1/4.
	if s[1] != 3 || !math.IsInf(r[1], 1) {
		t.Errorf("smear alone %g, no blur %g; want 3, +Inf", s[1], r[1])
	}
	x, y := make([]float32, 400), make([]float32, 400)
	var most float64
	for range 500 {
		for j := range x {
			x[j] = 0
			if rng.IntN(6) == 0 {
				x[j] = rng.Float32()
			}
		}
		m.s.x.convolve(y, x, m.s.lanes)
		for j := 1; j+1 < len(y); j++ {
			if y[j] > 0 {
				most = max(most, float64(y[j])/float64(y[j-1]+y[j+1]))
			}
		}
	}
	// 1e-6 is rounding; a lone point reaches the bound.
	if most > s[0]*(1+1e-6) || most < .99*s[0] {
		t.Errorf("random light reaches %.4f, bound %.4f", most, s[0])
	}
}
