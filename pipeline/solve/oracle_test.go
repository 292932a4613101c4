package solve

import (
	"bytes"
	"context"
	"encoding/json"
	"math"
	"math/rand/v2"
	"os/exec"
	"testing"

	"unsheard/pipeline/optics"
)

// python runs a script under Debian's interpreter with in as JSON on its
// standard input and decodes its standard output into out.
func python(t *testing.T, script string, in, out any) {
	t.Helper()
	data, err := json.Marshal(in)
	if err != nil {
		t.Fatal(err)
	}
	cmd := exec.Command("/usr/bin/python3", "-c", script)
	var stderr bytes.Buffer
	cmd.Stdin, cmd.Stderr = bytes.NewReader(data), &stderr
	got, err := cmd.Output()
	if err != nil {
		t.Fatalf("python3: %v (needs the packages python3-scipy and python3-skimage): %s", err, stderr.String())
	}
	if err := json.Unmarshal(got, out); err != nil {
		t.Fatalf("python3 wrote %q: %v", got, err)
	}
}

// dense returns the operator of p's usable pixels as rows, whitened, and the
// whitened data.
func dense(p Problem) (a [][]float64, b []float64) {
	g := p.Model.Geometry()
	n := g.T * g.H * g.W
	es, er, x := make([]float32, len(p.Streak)), make([]float32, len(p.Reference)), make([]float32, n)
	rows := make([][]float64, len(es)+len(er))
	for j := range rows {
		rows[j] = make([]float64, n)
	}
	for j := range n {
		x[j] = 1
		p.Model.Forward(es, er, x)
		x[j] = 0
		for r, v := range append(append([]float32(nil), es...), er...) {
			rows[r][j] = float64(v)
		}
	}
	data := append(append([]float32(nil), p.Streak...), p.Reference...)
	for r, v := range append(append([]float32(nil), p.StreakVar...), p.ReferenceVar...) {
		if v <= 0 {
			continue
		}
		s := 1 / math.Sqrt(float64(v))
		for j := range rows[r] {
			rows[r][j] *= s
		}
		a, b = append(a, rows[r]), append(b, float64(data[r])*s)
	}
	return a, b
}

// objective is (3) in float64, with the weight of Result.
func objective(a [][]float64, b []float64, x []float32, t, h, w int, weight, alpha float64) float64 {
	var sum float64
	for r, row := range a {
		d := -b[r]
		for j, v := range row {
			d += v * float64(x[j])
		}
		sum += d * d / 2
	}
	return sum + weight*variation(x, t, h, w, alpha)
}

func variation(x []float32, t, h, w int, alpha float64) (sum float64) {
	for j := range x {
		var d [3]float64
		if j%w+1 < w {
			d[0] = float64(x[j+1] - x[j])
		}
		if j/w%h+1 < h {
			d[1] = float64(x[j+w] - x[j])
		}
		if j/(w*h)+1 < t {
			d[2] = alpha * float64(x[j+h*w]-x[j])
		}
		sum += math.Sqrt(d[0]*d[0] + d[1]*d[1] + d[2]*d[2])
	}
	return sum
}

// Without total variation and with positivity not felt, (3) is a least-squares
// problem: scipy.sparse.linalg.lsmr (Fong & Saunders 2011).
func TestLeastSquaresAgainstSciPy(t *testing.T) {
	// A shape without blur and with few rows is well conditioned, and noise of
	// 0.3 photoelectrons, far under what the variances say, keeps the
	// solution clear of 0.
	const T, H, W = 2, 3, 9
	rng := rand.New(rand.NewPCG(testSeed, 4))
	code, truth := make([]float32, H*W), make([]float32, T*H*W)
	for j := range code {
		code[j] = .2 + .8*rng.Float32()
	}
	for j := range truth {
		truth[j] = 100 + 50*rng.Float32()
	}
	m, err := optics.NewModel(optics.Geometry{T: T, H: H, W: W, Code: code, StreakPad: 1})
	if err != nil {
		t.Fatal(err)
	}
	rows, cols := m.StreakShape()
	p := Problem{Model: m, Streak: make([]float32, rows*cols), StreakVar: make([]float32, rows*cols),
		Reference: make([]float32, H*W), ReferenceVar: make([]float32, H*W)}
	m.Forward(p.Streak, p.Reference, truth)
	for _, d := range [][2][]float32{{p.Streak, p.StreakVar}, {p.Reference, p.ReferenceVar}} {
		for j := range d[0] {
			d[1][j] = 9 + d[0][j]
			d[0][j] += float32(.3 * rng.NormFloat64())
		}
	}
	a, b := dense(p)
	var want struct{ X []float64 }
	python(t, `
import json, sys, numpy as np
from scipy.sparse.linalg import lsmr
d = json.load(sys.stdin)
x = lsmr(np.array(d["A"]), np.array(d["b"]), atol=1e-13, btol=1e-13, conlim=0, maxiter=100000)[0]
json.dump({"X": x.tolist()}, sys.stdout)`, map[string]any{"A": a, "b": b}, &want)
	for _, v := range want.X {
		if v <= 0 {
			t.Fatalf("seed %d: the oracle's solution is not positive, positivity would be felt", testSeed)
		}
	}
	r, err := Solve(context.Background(), p, nil, Options{Lambda: -1, MaxIter: 30000, Tol: -1})
	if err != nil {
		t.Fatal(err)
	}
	// The problem's condition number is a few hundred and rounding in float32
	// 6e-8: the cube agrees to 1e-3 of its mean of 125, the objective to 1e-5.
	x32 := make([]float32, len(want.X))
	for j, v := range want.X {
		x32[j] = float32(v)
		if math.Abs(float64(r.X[j])-v) > .125 {
			t.Errorf("voxel %d: %g, SciPy %g", j, r.X[j], v)
		}
	}
	got, best := objective(a, b, r.X, T, H, W, 0, 0), objective(a, b, x32, T, H, W, 0, 0)
	if math.Abs(got-best) > 1e-5*best {
		t.Errorf("½χ² is %.8g, SciPy reaches %.8g", got, best)
	}
}

// A single frame seen by an ideal reference camera alone is the denoising
// problem of Rudin, Osher & Fatemi 1992; scikit-image solves it by Chambolle's
// 2004 algorithm, min ½‖u−f‖² + weight·TV(u).
func TestDenoisingAgainstScikitImage(t *testing.T) {
	const h, w, sigma = 20, 25, 10
	rng := rand.New(rand.NewPCG(testSeed, 5))
	m, err := optics.NewModel(optics.Geometry{T: 1, H: h, W: w, Code: make([]float32, h*w)})
	if err != nil {
		t.Fatal(err)
	}
	rows, cols := m.StreakShape()
	p := Problem{Model: m, Streak: make([]float32, rows*cols), StreakVar: make([]float32, rows*cols),
		Reference: make([]float32, h*w), ReferenceVar: constant(h*w, sigma*sigma)}
	for j := range p.Reference {
		v := 60.
		if math.Hypot(float64(j%w)-14, float64(j/w)-10) < 7 {
			v = 200
		}
		p.Reference[j] = float32(v + sigma*rng.NormFloat64())
	}
	for _, lambda := range []float64{.3, 1, 2} {
		var want struct{ U []float64 }
		python(t, `
import json, sys, numpy as np
from skimage.restoration import denoise_tv_chambolle
d = json.load(sys.stdin)
f = np.array(d["f"], dtype=float).reshape(d["h"], d["w"])
u = denoise_tv_chambolle(f, weight=d["weight"], eps=1e-14, max_num_iter=2000)
json.dump({"U": u.ravel().tolist()}, sys.stdout)`, map[string]any{"f": p.Reference, "h": h, "w": w, "weight": lambda * sigma}, &want)
		r, err := Solve(context.Background(), p, nil, Options{Lambda: lambda, MaxIter: 8000, Tol: -1})
		if err != nil {
			t.Fatal(err)
		}
		if math.Abs(r.Sigma-sigma) > 1e-6 {
			t.Fatalf("sigma is %g, want %d", r.Sigma, sigma)
		}
		value := func(x []float32) float64 {
			s := lambda * sigma * variation(x, 1, h, w, 0)
			for j, v := range x {
				d := float64(v - p.Reference[j])
				s += d * d / 2
			}
			return s
		}
		u := make([]float32, h*w)
		var worst float64
		for j, v := range want.U {
			u[j] = float32(v)
			worst = max(worst, math.Abs(v-float64(r.X[j])))
		}
		got, best := value(r.X), value(u)
		t.Logf("λ %g: objective %.8g, scikit-image %.8g, images differ by at most %.3g pe", lambda, got, best, worst)
		// The last digits come slowly: a flat patch still slopes by some
		// 1e-3 pe per pixel, which total variation counts in full. 1e-4 of
		// the objective, and images to a hundredth of the noise.
		if math.Abs(got-best) > 1e-4*best || worst > .01*sigma {
			t.Errorf("λ %g: objective %.8g, scikit-image %.8g; images differ by %.3g", lambda, got, best, worst)
		}
	}
}

// The adjoint is the gradient of ½χ²: central differences, which are exact for
// a quadratic but for rounding.
func TestGradientByDifferences(t *testing.T) {
	p := awkward(t, 3, 5, 6, 2)
	a, b := dense(p)
	g := p.Model.Geometry()
	rng := rand.New(rand.NewPCG(testSeed, 6))
	x := make([]float32, g.T*g.H*g.W)
	for j := range x {
		x[j] = 100 * rng.Float32()
	}
	es, er := make([]float32, len(p.Streak)), make([]float32, len(p.Reference))
	p.Model.Forward(es, er, x)
	for _, v := range []struct{ m, data, vari []float32 }{{es, p.Streak, p.StreakVar}, {er, p.Reference, p.ReferenceVar}} {
		for j := range v.m {
			if v.vari[j] > 0 {
				v.m[j] = (v.m[j] - v.data[j]) / v.vari[j]
			} else {
				v.m[j] = 0
			}
		}
	}
	grad := make([]float32, len(x))
	p.Model.Adjoint(grad, es, er)
	for j := range x {
		old := x[j]
		x[j] = old + 8
		up := objective(a, b, x, g.T, g.H, g.W, 0, 0)
		x[j] = old - 8
		down := objective(a, b, x, g.T, g.H, g.W, 0, 0)
		x[j] = old
		if want := (up - down) / 16; math.Abs(want-float64(grad[j])) > 1e-3*(1+math.Abs(want)) {
			t.Errorf("voxel %d: gradient %g, by differences %g", j, grad[j], want)
		}
	}
}

// (3) is convex, so a minimum is one that no feasible change improves.
func TestNothingNearbyIsBetter(t *testing.T) {
	p := awkward(t, 3, 6, 7, 1)
	a, b := dense(p)
	r, err := Solve(context.Background(), p, nil, Options{Lambda: .5, MaxIter: 20000, Tol: -1})
	if err != nil {
		t.Fatal(err)
	}
	f := func(x []float32) float64 { return objective(a, b, x, 3, 6, 7, r.Lambda/r.Sigma, r.Alpha) }
	best := f(r.X)
	rng := rand.New(rand.NewPCG(testSeed, 7))
	x := make([]float32, len(r.X))
	for trial := range 300 {
		size := math.Pow(10, -1+3*rng.Float64())
		smooth := rng.Float64()
		var walk float64
		for j, v := range r.X {
			walk = smooth*walk + rng.NormFloat64()
			x[j] = max(0, v+float32(size*walk))
		}
		// 1e-7 of the objective is the rounding of a cube in float32.
		if got := f(x); got < best*(1-1e-7) {
			t.Errorf("seed %d, trial %d of size %.2g: objective falls from %.9g to %.9g", testSeed, trial, size, best, got)
		}
	}
}

func TestDiscrepancyRisesWithLambda(t *testing.T) {
	p, _ := newStation(6, 16, 16).shot(t, movies(6, 16, 16)["packet"], 100, 4)
	last := 0.
	for _, lambda := range []float64{-1, .1, .3, 1, 3, 10} {
		r, err := Solve(context.Background(), p, nil, Options{Lambda: lambda, MaxIter: 1000, Tol: -1})
		if err != nil {
			t.Fatal(err)
		}
		// χ² of the minimiser cannot fall with λ; 1e-4 for the solver.
		if r.Chi2 < last*(1-1e-4) {
			t.Errorf("λ %g: χ² %g, less than %g at the smaller λ", lambda, r.Chi2, last)
		}
		last = r.Chi2
	}
}
