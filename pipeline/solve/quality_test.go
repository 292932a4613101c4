package solve

import (
	"context"
	"math"
	"testing"

	"unsheard/pipeline/optics"
)

// least is the PSNR in dB that Auto must reach on the scenes of scene_test.go,
// 64×64×32 voxels, at 20, 200 and 2000 photoelectrons per voxel at the peak:
// what was measured (beside it) less 0.7 dB, since seeds move it by 0.3 dB.
var least = map[string][3]float64{
	"packet": {31.7, 39.0, 41.4}, // 32.4, 39.8, 42.2; total variation of voxels 26.0, 27.6, 28.4
	"decay":  {34.3, 36.1, 37.9}, // 35.1, 36.9, 38.7; 31.8, 33.5, 34.3
	"ring":   {19.1, 20.9, 21.8}, // 19.8, 21.6, 22.5; 18.3, 18.8, 19.0
}

func TestQuality(t *testing.T) {
	if testing.Short() {
		t.Skip("nine reconstructions")
	}
	s := newStation(32, 64, 64)
	for _, name := range names() {
		for level, peak := range []float64{20, 200, 2000} {
			p, truth := s.shot(t, movies(s.t, s.h, s.w)[name], peak, 1)
			r, err := Auto(context.Background(), p, Options{Workers: 2})
			if err != nil {
				t.Fatal(err)
			}
			got := psnr(r.X, truth)
			t.Logf("%-6s at %4g pe: %.2f dB, χ² %.3f streak, %.3f reference, λ %g, %d iterations, %s %v",
				name, peak, got, r.Chi2Streak, r.Chi2Reference, r.Lambda, r.Iterations, r.Status, r.Notes)
			if got < least[name][level] {
				t.Errorf("%s at %g pe (seed %d): %.2f dB, want at least %.2f", name, peak, sceneSeed, got, least[name][level])
			}
			if r.Spikes != 0 {
				t.Errorf("%s at %g pe: %d good pixels taken for spikes", name, peak, r.Spikes)
			}
			if r.Status != Converged {
				t.Errorf("%s at %g pe: %s after %d iterations", name, peak, r.Status, r.Iterations)
			}
			var light, want float64
			for j := range truth {
				light += float64(r.X[j])
				want += float64(truth[j])
			}
			// Counting and read noise over a few thousand pixels leave 2.5 %
			// at the lowest level, and positivity keeps only the upper half of
			// the noise in dark pixels.
			if limit := []float64{.08, .03, .02}[level]; math.Abs(light/want-1) > limit {
				t.Errorf("%s at %g pe: %.3f of the light", name, peak, light/want)
			}
		}
	}
}

// A wrong model is noticed, said, and not fitted.
func TestWrongModelIsNoticed(t *testing.T) {
	s := newStation(24, 48, 48)
	p, truth := s.shot(t, movies(s.t, s.h, s.w)["packet"], 2000, 1)
	right, err := Auto(context.Background(), p, Options{Workers: 2})
	if err != nil {
		t.Fatal(err)
	}
	wrong := s
	wrong.sigmaS, wrong.ratio = 1.2, s.ratio*1.05
	p.Model = wrong.model(t)
	r, err := Auto(context.Background(), p, Options{Workers: 2})
	if err != nil {
		t.Fatal(err)
	}
	t.Logf("right model %.2f dB, χ² %.2f; wrong model %.2f dB, χ² %.2f, λ %g: %q", psnr(right.X, truth), right.Chi2, psnr(r.X, truth), r.Chi2, r.Lambda, r.Notes)
	if len(right.Notes) != 0 {
		t.Errorf("right model: notes %q", right.Notes)
	}
	// Measured 3.5 dB; a fit to the model's error loses 18.
	if len(r.Notes) != 1 || r.Chi2 < 1.2 || psnr(r.X, truth) < psnr(right.X, truth)-6 {
		t.Errorf("wrong model: χ² %.2f, λ %g, notes %q", r.Chi2, r.Lambda, r.Notes)
	}
}

// A cube of voxels that starts too smooth is let follow the data.
func TestTooSmoothIsNoticed(t *testing.T) {
	s := newStation(16, 48, 48)
	p, truth := s.shot(t, movies(s.t, s.h, s.w)["ring"], 2000, 1)
	o := Options{Workers: 2, Lambda: 6.4}
	c := newCore(p.Model, 2)
	c.s.set(p.Streak, p.StreakVar)
	c.r.set(p.Reference, p.ReferenceVar)
	a := &auto{c: c, p: &p, o: o.withDefaults(), res: &Result{Sigma: typicalSigma(&c.s, &c.r)}}
	c.finish(a.voxels(context.Background()), a.res, &p)
	r := a.res
	stuck, err := Solve(context.Background(), p, nil, o)
	if err != nil {
		t.Fatal(err)
	}
	t.Logf("λ from 6.4 to %g, χ² %.3f, %.2f dB (at 6.4: χ² %.3f, %.2f dB)", r.Lambda, r.Chi2, psnr(r.X, truth), stuck.Chi2, psnr(stuck.X, truth))
	if r.Lambda >= 6.4 || r.Chi2 > 1.1 || psnr(r.X, truth) < psnr(stuck.X, truth) {
		t.Errorf("λ %g, χ² %.3f", r.Lambda, r.Chi2)
	}
}

// Hits of single pixels are left out, and the cube is as good as without them.
func TestSpikes(t *testing.T) {
	s := newStation(16, 48, 48)
	p, truth := s.shot(t, movies(s.t, s.h, s.w)["packet"], 200, 1)
	o := Options{Workers: 2}
	clean, err := Auto(context.Background(), p, o)
	if err != nil {
		t.Fatal(err)
	}
	rows, cols := p.Model.StreakShape()
	rr, rc := p.Model.ReferenceShape()
	n := 0
	for j := range 8 {
		p.Streak[(rows/3+3*j)*cols+cols/5+4*j] += 3000
		p.Reference[(rr/4+3*j)*rc+rc/4+3*j] += 5000
		n += 2
	}
	p.Streak[7*cols+9] = -500
	n++
	hit, err := Auto(context.Background(), p, o)
	if err != nil {
		t.Fatal(err)
	}
	r, err := Solve(context.Background(), p, nil, o)
	if err != nil {
		t.Fatal(err)
	}
	t.Logf("clean %.2f dB, %d hits %.2f dB (%d left out), without leaving out %.2f dB", psnr(clean.X, truth), n, psnr(hit.X, truth), hit.Spikes, psnr(r.X, truth))
	if clean.Spikes != 0 || hit.Spikes != n || psnr(hit.X, truth) < psnr(clean.X, truth)-.2 {
		t.Errorf("clean: %d spikes, %.2f dB; with %d hits: %d spikes, %.2f dB", clean.Spikes, psnr(clean.X, truth), n, hit.Spikes, psnr(hit.X, truth))
	}
}

// points are the sharpest light there is, single pixels lit for a frame.
func points(t, x, y float64) float64 {
	px, py, k := int(x+.5), int(y+.5), int(t)
	if px%8 == 3 && py%8 == 4 && k%5 == (px/8+py/8)%5 {
		return 1
	}
	return 0
}

func TestPointsAreNoSpikes(t *testing.T) {
	s := newStation(16, 40, 40)
	for seed, peak := range []float64{20, 200, 2000, 20000} {
		p, _ := s.shot(t, points, peak, uint64(seed))
		r, err := Auto(context.Background(), p, Options{MaxIter: 20})
		if err != nil {
			t.Fatal(err)
		}
		if r.Spikes != 0 {
			t.Errorf("%g pe: %d points of light taken for spikes", peak, r.Spikes)
		}
	}
}

// What no spline can show is shown by voxels, and said.
func TestPointsAreVoxels(t *testing.T) {
	s := newStation(16, 40, 40)
	for _, peak := range []float64{200, 2000} {
		p, truth := s.shot(t, points, peak, 1)
		r, err := Auto(context.Background(), p, Options{Workers: 2})
		if err != nil {
			t.Fatal(err)
		}
		v, err := Solve(context.Background(), p, nil, Options{Workers: 2})
		if err != nil {
			t.Fatal(err)
		}
		t.Logf("%g pe: %.2f dB, χ² %.2f, voxels by themselves %.2f dB: %q", peak, psnr(r.X, truth), r.Chi2, psnr(v.X, truth), r.Notes)
		if r.Spacing != [3]float64{} || len(r.Notes) == 0 || psnr(r.X, truth) < psnr(v.X, truth)-.5 {
			t.Errorf("%g pe: spacing %v, %.2f dB, notes %q", peak, r.Spacing, psnr(r.X, truth), r.Notes)
		}
	}
}

// The quick look: the same frames binned, the same method on the coarse model.
func TestCoarse(t *testing.T) {
	s := newStation(32, 64, 64)
	p, truth := s.shot(t, movies(s.t, s.h, s.w)["packet"], 200, 1)
	for _, n := range []int{2, 4} {
		q, small := coarse(t, p, truth, n)
		r, err := Auto(context.Background(), q, Options{Workers: 2})
		if err != nil {
			t.Fatal(err)
		}
		var light, want float64
		for j := range small {
			light += float64(r.X[j])
			want += float64(small[j])
		}
		got := psnr(r.X, small)
		t.Logf("%d times coarser: %.2f dB, light %.3f, χ² %.2f, %d iterations %q", n, got, light/want, r.Chi2, r.Iterations, r.Notes)
		// Measured 37.8 and 29.2 dB. Code elements are 2 pixels, so at 4 the
		// code is mostly washed out.
		if least := map[int]float64{2: 36.8, 4: 28.2}[n]; got < least || math.Abs(light/want-1) > .03 {
			t.Errorf("%d times coarser: %.2f dB, want %.1f; %.3f of the light", n, got, least, light/want)
		}
	}
}

func coarse(tb testing.TB, p Problem, truth []float32, n int) (Problem, []float32) {
	tb.Helper()
	g := p.Model.Geometry()
	c, err := g.Coarse(n)
	if err != nil {
		tb.Fatal(err)
	}
	m, err := optics.NewModel(c)
	if err != nil {
		tb.Fatal(err)
	}
	rows, cols := m.StreakShape()
	rr, rc := m.ReferenceShape()
	f := func(n int) []float32 { return make([]float32, n) }
	q := Problem{Model: m, Streak: f(rows * cols), StreakVar: f(rows * cols), Reference: f(rr * rc), ReferenceVar: f(rr * rc),
		StreakNoise: &Noise{Read: f(rows * cols)}, ReferenceNoise: &Noise{Read: f(rr * rc)}}
	_, fineCols := p.Model.StreakShape()
	at := g.StreakPad - n*c.StreakPad
	optics.Bin(q.StreakNoise.Read, q.StreakVar, p.Streak, p.StreakNoise.Read, fineCols, at, at, n, cols)
	copy(q.StreakNoise.Read, q.StreakVar)
	optics.Bin(q.Streak, q.StreakVar, p.Streak, p.StreakVar, fineCols, at, at, n, cols)
	// The fine rectangle starts anywhere; pixels of the coarse one that it
	// does not wholly hold are masked.
	x0, y0 := c.View.Rect.X*n-g.View.Rect.X, c.View.Rect.Y*n-g.View.Rect.Y
	optics.Bin(q.ReferenceNoise.Read, q.ReferenceVar, p.Reference, p.ReferenceNoise.Read, g.View.Rect.W, x0, y0, n, rc)
	copy(q.ReferenceNoise.Read, q.ReferenceVar)
	optics.Bin(q.Reference, q.ReferenceVar, p.Reference, p.ReferenceVar, g.View.Rect.W, x0, y0, n, rc)
	small := f(c.T * c.H * c.W)
	for j, v := range truth {
		k, y, i := j/(g.H*g.W)/n, j/g.W%g.H/n, j%g.W/n
		small[(k*c.H+y)*c.W+i] += v
	}
	return q, small
}

// A bright scene that goes on outside the window does not spoil the inside.
func TestSceneBeyondTheWindow(t *testing.T) {
	s := newStation(16, 48, 48)
	s.beyond = 10
	wide := func(t, x, y float64) float64 {
		return (.6 + .3*math.Sin(t/3+x/10)) * gauss((x-20)*(x-20)+(y-25)*(y-25), 20)
	}
	p, truth := s.shot(t, wide, 500, 1)
	r, err := Auto(context.Background(), p, Options{Workers: 2})
	if err != nil {
		t.Fatal(err)
	}
	got := psnr(r.X, truth)
	// The same with edge pixels trusted.
	for j, n := range r.ReferenceVar {
		if n > 0 {
			p.ReferenceVar[j] = max(r.ReferenceModel[j], 0) + float32(s.read*s.read)
		}
	}
	copy(p.StreakVar, r.StreakVar)
	trusting, err := Solve(context.Background(), p, nil, Options{Workers: 2})
	if err != nil {
		t.Fatal(err)
	}
	t.Logf("%.2f dB, χ² %.2f streak, %.2f reference; with edge pixels trusted %.2f dB, χ² %.2f, %.2f",
		got, r.Chi2Streak, r.Chi2Reference, psnr(trusting.X, truth), trusting.Chi2Streak, trusting.Chi2Reference)
	if got < psnr(trusting.X, truth)+1 || r.Chi2Reference > 1.5 {
		t.Errorf("%.2f dB, reference χ² %.2f", got, r.Chi2Reference)
	}
}
