package solve

import (
	"context"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"unsheard/pipeline/optics"
)

const testSeed = 77 // of every random array in the tests of this package

// awkward is a small problem of the given shape with random code, blur, a
// turned view and some masked pixels.
func awkward(tb testing.TB, t, h, w, step int) Problem {
	tb.Helper()
	rng := rand.New(rand.NewPCG(testSeed, uint64(t*1000+h*100+w*10+step)))
	code := make([]float32, h*w)
	for j := range code {
		code[j] = rng.Float32()
	}
	v, err := optics.NewView([9]float64{.9, -.05, 3, .06, .95, 2, 0, 0, 1}, w, h, w+6, h+6, 2)
	if err != nil {
		tb.Fatal(err)
	}
	m, err := optics.NewModel(optics.Geometry{T: t, H: h, W: w, Step: step, Code: code, StreakBlur: optics.Blur{SigmaX: .6, SigmaY: .8},
		StreakPad: 2, View: v, ReferenceBlur: optics.Blur{SigmaX: .7, SigmaY: .5}, Ratio: .9})
	if err != nil {
		tb.Fatal(err)
	}
	truth := make([]float32, t*h*w)
	for j := range truth {
		truth[j] = 100 + 50*rng.Float32()
	}
	p := Problem{Model: m}
	rows, cols := m.StreakShape()
	rr, rc := m.ReferenceShape()
	p.Streak, p.Reference = make([]float32, rows*cols), make([]float32, rr*rc)
	m.Forward(p.Streak, p.Reference, truth)
	noise := func(x []float32) []float32 {
		vari := make([]float32, len(x))
		for j := range x {
			vari[j] = 9 + max(x[j], 0)
			x[j] += float32(math.Sqrt(float64(vari[j])) * rng.NormFloat64())
			if rng.IntN(17) == 0 {
				vari[j] = -1
			}
		}
		return vari
	}
	p.StreakVar, p.ReferenceVar = noise(p.Streak), noise(p.Reference)
	return p
}

// plain is the loop of engine without bands, fusion or rings: whole cubes, one
// step after the other, with float64 for everything but the state. It takes
// the step sizes of an engine.
type plain struct {
	e                    *engine
	x, p, q, r           []float32
	yS, yR, castS, backR []float32
}

func (s *plain) iterate() {
	e := s.e
	n := e.t * e.h * e.w
	at := func(k, y, i int) int { return (k*e.h+y)*e.w + i }
	bar := make([]float32, n)
	code := e.m.Geometry().Code
	get := func(v []float32, k, y, i int) float32 {
		if k < 0 || y < 0 || i < 0 {
			return 0
		}
		return v[at(k, y, i)]
	}
	for k := range e.t {
		for y := range e.h {
			for i := range e.w {
				j, c := at(k, y, i), code[y*e.w+i]
				m := (y+k*e.step+e.pad)*e.cols + i + e.pad
				g := float64(c)*float64(s.castS[m]) + float64(s.backR[y*e.w+i]) - float64(s.p[j]-get(s.p, k, y, i-1)) -
					float64(s.q[j]-get(s.q, k, y-1, i)) - float64(e.alpha)*float64(s.r[j]-get(s.r, k-1, y, i))
				old := float64(s.x[j])
				v := max(0, old-g/(float64(c)*float64(e.col[m])+float64(e.own[y*e.w+i])))
				bar[j] = float32(2*v - old)
				s.x[j] = float32(old + relax*(v-old))
			}
		}
	}
	for k := range e.t {
		for y := range e.h {
			for i := range e.w {
				j := at(k, y, i)
				var d [3]float64
				if i+1 < e.w {
					d[0] = float64(bar[at(k, y, i+1)] - bar[j])
				}
				if y+1 < e.h {
					d[1] = float64(bar[at(k, y+1, i)] - bar[j])
				}
				if k+1 < e.t {
					d[2] = float64(e.alpha) * float64(bar[at(k+1, y, i)]-bar[j])
				}
				u := [3]float64{float64(s.p[j]), float64(s.q[j]), float64(s.r[j])}
				old := u
				for a := range u {
					u[a] += float64(e.ball.Sigma) * d[a]
				}
				f := 1.0
				if l := math.Sqrt(u[0]*u[0] + u[1]*u[1] + u[2]*u[2]); l > float64(e.ball.Lambda) {
					f = float64(e.ball.Lambda) / l
				}
				s.p[j] = float32(old[0] + relax*(u[0]*f-old[0]))
				s.q[j] = float32(old[1] + relax*(u[1]*f-old[1]))
				s.r[j] = float32(old[2] + relax*(u[2]*f-old[2]))
			}
		}
	}
	eS, eR := make([]float32, len(s.yS)), make([]float32, len(s.yR))
	e.m.Forward(eS, eR, bar)
	for _, v := range []struct {
		a      *arm
		y, bar []float32
	}{{&e.s, s.yS, eS}, {&e.r, s.yR, eR}} {
		for j := range v.y {
			if v.a.vari[j] > 0 {
				u := (float64(v.y[j]) + float64(v.a.sigma[j])*float64(v.bar[j]-v.a.data[j])) / (1 + float64(v.a.sigma[j])*float64(v.a.vari[j]))
				v.y[j] += float32(relax * (u - float64(v.y[j])))
			}
		}
	}
	e.m.BlurStreakAdjoint(s.castS, make([]float32, len(s.castS)), s.yS)
	e.m.Unproject(s.backR, nil, s.yR)
}

func prepared(tb testing.TB, p Problem, workers int, lambda float64) *engine {
	tb.Helper()
	e := newEngine(p.Model, workers)
	e.s.set(p.Streak, p.StreakVar)
	e.r.set(p.Reference, p.ReferenceVar)
	e.load(nil)
	sigma := typicalSigma(&e.s, &e.r)
	e.steps(sigma*sigma, sigma, lambda/sigma, .3)
	return e
}

// plainTolerance: after 30 iterations of float32 against float64 arithmetic,
// relative to values of about 100; rounding is 6e-8 per operation and the
// iteration is non-expansive, so errors add up to some 1e-5.
const plainTolerance = 1e-4

func TestEngineIsThePlainLoop(t *testing.T) {
	for _, s := range [][4]int{{1, 1, 1, 1}, {1, 9, 7, 1}, {6, 1, 5, 2}, {5, 7, 1, 1}, {7, 18, 5, 1}, {4, 37, 6, 3}, {2, 33, 9, 2}} {
		p := awkward(t, s[0], s[1], s[2], s[3])
		e := prepared(t, p, 1, .4)
		c := func(n int) []float32 { return make([]float32, n) }
		n := e.t * e.h * e.w
		o := &plain{e: prepared(t, p, 1, .4), x: c(n), p: c(n), q: c(n), r: c(n), yS: c(len(p.Streak)), yR: c(len(p.Reference)), castS: c(len(p.Streak)), backR: c(e.h * e.w)}
		for range 30 {
			e.iterate(false)
			o.iterate()
		}
		got := c(n)
		e.store(got)
		var top, worst float64
		for j, v := range o.x {
			v = max(v, 0)
			top = max(top, float64(v))
			worst = max(worst, math.Abs(float64(got[j]-v)))
		}
		if top == 0 || worst > plainTolerance*top {
			t.Errorf("%v: differs from the plain loop by %g of %g", s, worst, top)
		}
		// The recursion for E(x) follows the cube.
		es, er := c(len(p.Streak)), c(len(p.Reference))
		for j := range got { // the relaxed cube, before it is cut at 0
			got[j] = o.x[j]
		}
		e.m.Forward(es, er, got)
		for j := range es {
			if math.Abs(float64(es[j]-e.s.now[j])) > 1e-3*top {
				t.Errorf("%v: E(x) by recursion %g, directly %g", s, e.s.now[j], es[j])
				break
			}
		}
	}
}

func TestWorkersChangeNoBit(t *testing.T) {
	p := awkward(t, 6, 70, 21, 1)
	var want []float32
	for _, workers := range []int{1, 2, 3, 8} {
		r, err := Auto(context.Background(), p, Options{MaxIter: 60, Workers: workers})
		if err != nil {
			t.Fatal(err)
		}
		if want == nil {
			want = r.X
		} else if !slices.Equal(r.X, want) {
			t.Errorf("%d workers give other bits than one", workers)
		}
	}
}

func TestNoDenormals(t *testing.T) {
	p, _ := newStation(6, 20, 24).shot(t, movies(6, 20, 24)["packet"], 50, 3)
	e := prepared(t, p, 1, .4)
	for range 1500 {
		e.iterate(false)
	}
	for _, b := range e.bands {
		for name, v := range map[string][]float32{"x": b.x, "p": b.p, "q": b.q, "r": b.r} {
			for j, f := range v {
				if a := math.Abs(float64(f)); a != 0 && a < tiny/2 {
					t.Fatalf("%s[%d] is %g", name, j, f)
				}
			}
		}
	}
}
