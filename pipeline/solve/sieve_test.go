package solve

import (
	"context"
	"encoding/binary"
	"hash/fnv"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"unsheard/pipeline/optics"
	"unsheard/pipeline/solve/row"
)

// The centred cubic B-spline at its knots and halfway between is 2/3, 1/6, 0
// and 23/48, 1/48 (de Boor, A Practical Guide to Splines, chapter IX).
func TestCubicClosedForm(t *testing.T) {
	for _, c := range []struct{ u, want float64 }{{0, 2. / 3}, {.5, 23. / 48}, {-.5, 23. / 48}, {1, 1. / 6}, {1.5, 1. / 48}, {2, 0}, {-3, 0}} {
		if got := cubic(c.u); math.Abs(got-c.want) > 1e-15 {
			t.Errorf("at %g knots: %g, want %g", c.u, got, c.want)
		}
	}
}

var spacings = []float64{1, 1.25, 1.5, 2, 2.5, 3, 3.5, 4.5}

// Splines add up to 1, so do ones; with the knots' own positions as
// coefficients they give the straight line (Marsden's identity; de Boor,
// chapter IX), and a refit to other knots keeps both.
func TestPartitionOfUnity(t *testing.T) {
	for _, n := range []int{1, 2, 3, 7, 38, 64} {
		for _, h := range spacings {
			b := newBasis(n, h)
			one, line := make([]float32, b.m), make([]float32, b.m)
			for j := range one {
				one[j], line[j] = 1, float32(b.off+float64(j)*h)
			}
			got := make([]float32, n)
			row.Best().Up(b.line, got, one)
			for i, v := range got {
				if math.Abs(float64(v)-1) > 1e-6 {
					t.Errorf("n %d, h %g: splines add up to %g at %d", n, h, v, i)
				}
			}
			if n == 1 {
				continue
			}
			row.Best().Up(b.line, got, line)
			for i, v := range got {
				if math.Abs(float64(v)-float64(i)) > 1e-5*float64(n) {
					t.Errorf("n %d, h %g: line is %g at %d", n, h, v, i)
				}
			}
			fine := newBasis(n, h*.7)
			for j, row := range fine.refit(&b) {
				var sum, at float64
				for i, w := range row {
					sum += w
					at += w * (b.off + float64(i)*h)
				}
				// Knots beyond the old ones' span take the value at its end.
				want := min(max(fine.off+float64(j)*fine.h, b.off+h), b.off+float64(b.m-2)*h)
				if math.Abs(sum-1) > 1e-12 || math.Abs(at-want) > 1e-9 {
					t.Errorf("n %d, h %g: refit of 1 is %g, of the line %g at %g", n, h, sum, at, want)
				}
			}
		}
	}
}

// entries calls f with every entry of B that is not 0: voxel, coefficient,
// value.
func entries(s *sieve, f func(n, c int, v float64)) {
	at := func(b *basis, i, j int) float64 {
		if b.taps == 1 {
			return 1
		}
		return cubic((float64(i) - b.off - float64(j)*b.h) / b.h)
	}
	for n := range s.t * s.h * s.w {
		k, y, i := n/(s.h*s.w), n/s.w%s.h, n%s.w
		for j := range s.bt.m {
			vt := at(&s.bt, k, j)
			for r := 0; r < s.by.m && vt != 0; r++ {
				vy := vt * at(&s.by, y, r)
				for q := 0; q < s.bx.m && vy != 0; q++ {
					if v := vy * at(&s.bx, i, q); v != 0 {
						f(n, (j*s.by.m+r)*s.bx.m+q, v)
					}
				}
			}
		}
	}
}

// slow writes x = B·z by the definition, in float64.
func slow(s *sieve, z []float32) []float32 {
	x, out := make([]float64, s.t*s.h*s.w), make([]float32, s.t*s.h*s.w)
	entries(s, func(n, c int, v float64) { x[n] += v * float64(z[c]) })
	for n, v := range x {
		out[n] = float32(v)
	}
	return out
}

// transposed writes Bᵀ·x by the definition.
func transposed(s *sieve, x []float32) []float64 {
	out := make([]float64, len(s.z))
	entries(s, func(n, c int, v float64) { out[c] += v * float64(x[n]) })
	return out
}

var shapes = [][4]int{{1, 1, 1, 1}, {1, 9, 7, 1}, {6, 1, 5, 2}, {5, 7, 1, 1}, {7, 18, 5, 1}, {4, 11, 6, 3}}

// store is B, and castBack and condense together are Bᵀ of the model's adjoint.
func TestSieveIsB(t *testing.T) {
	for _, d := range shapes {
		for _, h := range [][3]float64{{1, 1, 1}, {1.5, 2, 2}, {2.5, 4.5, 3}} {
			c := newCore(awkward(t, d[0], d[1], d[2], d[3]).Model, 2)
			s := c.sieve(h)
			rng := rand.New(rand.NewPCG(testSeed, 11))
			for j := range s.z {
				s.z[j] = rng.Float32()
			}
			x, want := make([]float32, c.t*c.h*c.w), slow(s, s.z)
			s.begin(s)
			s.store(x)
			for n, v := range want {
				if math.Abs(float64(v-x[n])) > 1e-5 {
					t.Fatalf("%v %v: voxel %d is %g, want %g", d, h, n, x[n], v)
				}
			}
			for j := range c.castS {
				c.castS[j] = rng.Float32() - .5
			}
			for j := range c.backR {
				c.backR[j] = rng.Float32() - .5
			}
			code := c.m.Geometry().Code
			for n := range x {
				k, y, i := n/(c.h*c.w), n/c.w%c.h, n%c.w
				x[n] = code[y*c.w+i]*c.castS[(y+k*c.step+c.pad)*c.cols+i+c.pad] + c.backR[y*c.w+i]
			}
			adj := transposed(s, x)
			s.condense(c.backR)
			for j := range s.bt.m {
				g := s.castBack(j, s.desk(0), c.castS)
				s.lanes.Add(g, s.bt.sum(j), s.back)
				for i, v := range g {
					if want := adj[j*len(g)+i]; math.Abs(float64(v)-want) > 1e-4 {
						t.Fatalf("%v %v: coefficient %d of time %d of the adjoint is %g, want %g", d, h, i, j, v, want)
					}
				}
			}
		}
	}
}

// plainSieve is the loop of sieve with whole cubes and B by its definition.
func plainSieve(s *sieve, steps int) []float64 {
	c := s.core
	mt, my, mx := s.bt.m, s.by.m, s.bx.m
	n := len(s.z)
	z, bar := make([]float64, n), make([]float32, n)
	duals := [3][]float64{make([]float64, n), make([]float64, n), make([]float64, n)}
	next := [3]int{1, mx, my * mx}
	alpha := [3]float64{1, 1, float64(s.alpha)}
	inside := func(j, a int) bool { return [3]bool{j%mx+1 < mx, j/mx%my+1 < my, j/(mx*my)+1 < mt}[a] }
	yS, yR := make([]float32, len(c.s.data)), make([]float32, len(c.r.data))
	eS, eR, adj := make([]float32, len(yS)), make([]float32, len(yR)), make([]float32, c.t*c.h*c.w)
	for range steps {
		c.m.Adjoint(adj, yS, yR)
		g := transposed(s, adj)
		for j := range z {
			for a, d := range duals {
				g[j] -= alpha[a] * d[j]
				if j >= next[a] && inside(j-next[a], a) {
					g[j] += alpha[a] * d[j-next[a]]
				}
			}
		}
		for j := range z {
			v := max(0, z[j]-float64(s.tau[j])*g[j])
			bar[j] = float32(2*v - z[j])
			z[j] += relax * (v - z[j])
		}
		for j := range z {
			var u [3]float64
			for a, d := range duals {
				u[a] = d[j]
				if inside(j, a) {
					u[a] += float64(s.sigma) * alpha[a] * float64(bar[j+next[a]]-bar[j])
				}
			}
			f := min(1, float64(s.lambda)/math.Max(1e-30, math.Sqrt(u[0]*u[0]+u[1]*u[1]+u[2]*u[2])))
			for a, d := range duals {
				d[j] += relax * (f*u[a] - d[j])
			}
		}
		c.m.Forward(eS, eR, slow(s, bar))
		for _, v := range []struct {
			a      *arm
			y, bar []float32
		}{{&c.s, yS, eS}, {&c.r, yR, eR}} {
			for j := range v.y {
				if v.a.vari[j] > 0 {
					u := (float64(v.y[j]) + float64(v.a.sigma[j])*float64(v.bar[j]-v.a.data[j])) / (1 + float64(v.a.sigma[j])*float64(v.a.vari[j]))
					v.y[j] += float32(relax * (u - float64(v.y[j])))
				}
			}
		}
	}
	return z
}

func preparedSieve(p Problem, workers int, h [3]float64, lambda float64) *sieve {
	c := newCore(p.Model, workers)
	c.s.set(p.Streak, p.StreakVar)
	c.r.set(p.Reference, p.ReferenceVar)
	s := c.sieve(h)
	s.begin(nil)
	sigma := typicalSigma(&c.s, &c.r)
	s.steps(sigma*sigma, sigma, lambda/sigma, .3)
	return s
}

func TestSieveIsThePlainLoop(t *testing.T) {
	for _, d := range shapes {
		h := [3]float64{1.5, 2, 2}
		for _, lambda := range []float64{0, .1} {
			p := awkward(t, d[0], d[1], d[2], d[3])
			s := preparedSieve(p, 2, h, lambda)
			for range 20 {
				s.iterate(false)
			}
			want := plainSieve(preparedSieve(p, 1, h, lambda), 20)
			var top, worst float64
			for j, v := range want {
				top = max(top, v)
				worst = max(worst, math.Abs(float64(s.z[j])-v))
			}
			if top == 0 || worst > plainTolerance*top {
				t.Errorf("%v λ %g: differs from the plain loop by %g of %g", d, lambda, worst, top)
			}
		}
	}
}

func TestSieveWorkersChangeNoBit(t *testing.T) {
	p := awkward(t, 9, 40, 21, 1)
	var want []float32
	for _, workers := range []int{1, 2, 3, 8} {
		s := preparedSieve(p, workers, [3]float64{1.5, 2, 2}, .1)
		for range 40 {
			s.iterate(true)
		}
		if want == nil {
			want = s.z
		} else if !slices.Equal(s.z, want) {
			t.Errorf("%d workers give other bits than one", workers)
		}
	}
}

// The vector loops give the bits of the plain ones through whole solves, model
// and all.
func TestLanesChangeNoBit(t *testing.T) {
	for _, d := range [][4]int{{9, 40, 37, 1}, {13, 24, 64, 1}, {5, 9, 101, 2}, {1, 30, 20, 1}, {30, 3, 12, 1}} {
		for _, h := range [][3]float64{{1, 1, 1}, {1.5, 2, 2}, {2, 3, 3}, {3, 4.5, 4.5}} {
			var want *sieve
			for _, scalar := range []bool{true, false} {
				s := preparedSieve(scalarly(t, awkward(t, d[0], d[1], d[2], d[3]), scalar), 2, h, .1)
				for range 40 {
					s.iterate(true)
				}
				if want == nil {
					want = s
				} else if !slices.Equal(s.z, want.z) || !slices.Equal(s.core.s.dual, want.core.s.dual) || !slices.Equal(s.core.r.now, want.core.r.now) || s.core.s.chi2 != want.core.s.chi2 {
					t.Errorf("%v %v: %v loops give other bits than plain ones", d, h, s.lanes)
				}
			}
		}
	}
}

// scalarly is the problem with plain loops, or with the best.
func scalarly(t testing.TB, p Problem, scalar bool) Problem {
	t.Helper()
	g := p.Model.Geometry()
	g.Scalar = scalar
	m, err := optics.NewModel(g)
	if err != nil {
		t.Fatal(err)
	}
	p.Model = m
	return p
}

// TestLanesSameHash compares the bits of all that a whole reconstruction
// returns, with splines and on voxels.
func TestLanesSameHash(t *testing.T) {
	s := newStation(12, 30, 41)
	p, _ := s.shot(t, func(t, x, y float64) float64 { return gauss((x-12-t)*(x-12-t)+(y-14)*(y-14), 3) }, 200, 1)
	for name, solve := range map[string]func(context.Context, Problem, []float32, Options) (*Result, error){
		"Auto":  func(ctx context.Context, p Problem, _ []float32, o Options) (*Result, error) { return Auto(ctx, p, o) },
		"Solve": Solve,
	} {
		var want uint64
		for _, workers := range []int{1, 3} {
			for _, scalar := range []bool{true, false} {
				r, err := solve(context.Background(), scalarly(t, p, scalar), nil, Options{Workers: workers, MaxIter: 120})
				if err != nil {
					t.Fatal(err)
				}
				got := hashOf(r.X, r.StreakModel, r.ReferenceModel, r.StreakVar, r.ReferenceVar)
				if want == 0 {
					want = got
				} else if got != want {
					t.Errorf("%s, %d workers, scalar %v: hash %x, want %x", name, workers, scalar, got, want)
				}
			}
		}
	}
}

// hashOf is FNV-1a of the bits.
func hashOf(parts ...[]float32) uint64 {
	h := fnv.New64a()
	for _, p := range parts {
		_ = binary.Write(h, binary.LittleEndian, p) // a hash takes all
	}
	return h.Sum64()
}

func TestSieveAllocatesNothing(t *testing.T) {
	s := preparedSieve(awkward(t, 9, 20, 21, 1), 1, [3]float64{1.5, 2, 2}, .1)
	s.iterate(true)
	if n := testing.AllocsPerRun(5, func() { s.iterate(true) }); n > 0 {
		t.Errorf("%g allocations per iteration", n)
	}
}

// A sharper scene gets knots that are closer, at every level of light.
func TestSpacingFollowsTheScene(t *testing.T) {
	s := newStation(16, 40, 40)
	blob := func(size float64) movie {
		return func(t, x, y float64) float64 {
			cx, cy := 12+t, 22-.5*t
			return gauss((x-cx)*(x-cx)+(y-cy)*(y-cy), size)
		}
	}
	for _, peak := range []float64{200, 2000} {
		last := math.Inf(1)
		for _, size := range []float64{6, 2.5, 1.2} {
			p, truth := s.shot(t, blob(size), peak, 1)
			r, err := Auto(context.Background(), p, Options{Workers: 2})
			if err != nil {
				t.Fatal(err)
			}
			t.Logf("%g pe, size %g px: spacing %v, λ %g, %.2f dB", peak, size, r.Spacing, r.Lambda, psnr(r.X, truth))
			if r.Spacing[1] > last {
				t.Errorf("%g pe: a blob of %g px gets wider knots, %g px, than a larger one", peak, size, r.Spacing[1])
			}
			last = r.Spacing[1]
		}
		if last > 2 {
			t.Errorf("%g pe: knots %g px apart for a blob of 1.2 px", peak, last)
		}
	}
}
