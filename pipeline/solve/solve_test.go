package solve

import (
	"context"
	"errors"
	"math"
	"strings"
	"testing"
)

func TestAwkwardShapes(t *testing.T) {
	for _, s := range [][4]int{{1, 1, 1, 1}, {1, 8, 9, 1}, {5, 1, 8, 1}, {5, 8, 1, 2}, {1, 1, 12, 3}, {9, 1, 1, 1}} {
		p := awkward(t, s[0], s[1], s[2], s[3])
		p.StreakNoise = &Noise{Read: constant(len(p.Streak), 9)}
		p.ReferenceNoise = &Noise{Read: constant(len(p.Reference), 9), Gain: constant(len(p.Reference), 1), Floor: .01}
		r, err := Auto(context.Background(), p, Options{MaxIter: 300})
		if err != nil {
			t.Fatalf("%v: %v", s, err)
		}
		var sum float64
		for _, v := range r.X {
			if math.IsNaN(float64(v)) || v < 0 {
				t.Fatalf("%v: cube holds %g", s, v)
			}
			sum += float64(v)
		}
		// The truth averages 125 per voxel; the smallest shapes have a
		// handful of pixels of 10 % noise each, some masked.
		if mean := sum / float64(len(r.X)); mean < 60 || mean > 200 {
			t.Errorf("%v: mean %g per voxel, true 125", s, mean)
		}
	}
}

func TestMaskedPixelsDoNotMatter(t *testing.T) {
	p := awkward(t, 4, 9, 8, 1)
	o := Options{MaxIter: 80, Tol: -1}
	want, err := Solve(context.Background(), p, nil, o)
	if err != nil {
		t.Fatal(err)
	}
	nan, inf := float32(math.NaN()), float32(math.Inf(1))
	n := 0
	for j, v := range p.StreakVar {
		if v <= 0 {
			p.Streak[j], p.StreakVar[j] = []float32{nan, inf, 1e30}[n%3], []float32{0, inf, nan}[n%3]
			n++
		}
	}
	got, err := Solve(context.Background(), p, nil, o)
	if err != nil {
		t.Fatal(err)
	}
	for j := range want.X {
		if got.X[j] != want.X[j] {
			t.Fatalf("what a masked pixel holds changes voxel %d from %g to %g", j, want.X[j], got.X[j])
		}
	}
	if got.UsedStreak != want.UsedStreak || got.NotFinite == 0 {
		t.Errorf("used %d, want %d; %d not finite", got.UsedStreak, want.UsedStreak, got.NotFinite)
	}
}

func TestNotFiniteIsMaskedAndCounted(t *testing.T) {
	p := awkward(t, 4, 9, 8, 1)
	p.Reference[0], p.ReferenceVar[0] = float32(math.NaN()), 5
	r, err := Auto(context.Background(), p, Options{MaxIter: 40})
	if err != nil {
		t.Fatal(err)
	}
	if r.NotFinite != 1 || len(r.Notes) == 0 || !strings.Contains(r.Notes[len(r.Notes)-1], "1 pixels are not finite") {
		t.Errorf("%d not finite, notes %q", r.NotFinite, r.Notes)
	}
	for j, v := range r.X {
		if math.IsNaN(float64(v)) {
			t.Fatalf("voxel %d is NaN", j)
		}
	}
}

func TestAllMasked(t *testing.T) {
	p := awkward(t, 2, 5, 5, 1)
	for _, v := range [][]float32{p.StreakVar, p.ReferenceVar} {
		for j := range v {
			v[j] = -1
		}
	}
	if _, err := Auto(context.Background(), p, Options{}); !errors.Is(err, ErrMasked) {
		t.Errorf("Auto: %v, want ErrMasked", err)
	}
	if _, err := Solve(context.Background(), p, nil, Options{}); !errors.Is(err, ErrMasked) {
		t.Errorf("Solve: %v, want ErrMasked", err)
	}
}

// Frames of read noise alone, and of nothing at all, are dark; a spot of a few
// times the read noise is not.
func TestDark(t *testing.T) {
	s := newStation(8, 32, 32)
	none := func(t, x, y float64) float64 { return 0 }
	for seed := range uint64(20) {
		p, _ := s.shot(t, none, 1, 100+seed)
		r, err := Auto(context.Background(), p, Options{})
		if err != nil {
			t.Fatal(err)
		}
		for _, v := range r.X {
			if v != 0 {
				t.Fatalf("seed %d: light in the dark, %g", seed, v)
			}
		}
		if len(r.Notes) != 1 || !strings.Contains(r.Notes[0], "neither arm shows light") {
			t.Errorf("seed %d: notes %q", seed, r.Notes)
		}
	}
	p, _ := s.shot(t, none, 1, 99)
	clear(p.Streak)
	clear(p.Reference)
	if r, err := Auto(context.Background(), p, Options{}); err != nil || r.Iterations != 0 {
		t.Errorf("frames of zeros: %v, %d iterations", err, r.Iterations)
	}
	p, truth := s.shot(t, movies(8, 32, 32)["decay"], 12, 1)
	r, err := Auto(context.Background(), p, Options{})
	if err != nil {
		t.Fatal(err)
	}
	var got, want float64
	for j := range truth {
		got += float64(r.X[j])
		want += float64(truth[j])
	}
	if got < .7*want || got > 1.3*want {
		t.Errorf("faint spots: %g photoelectrons, true %g", got, want)
	}
}

type count struct{ n, last int }

func (c *count) Record(p Progress) { c.n++; c.last = p.Iteration }

func TestStatus(t *testing.T) {
	p := awkward(t, 4, 9, 8, 1)
	var c count
	r, err := Solve(context.Background(), p, nil, Options{MaxIter: 35, Tol: -1, Recorder: &c})
	if err != nil || r.Status != Limit || r.Iterations != 35 || c.n != 4 || c.last != 35 || len(r.Trajectory) != 4 {
		t.Errorf("limit: %v, %+v, %+v", err, r.Status, c)
	}
	r, err = Solve(context.Background(), p, nil, Options{MaxIter: 5000})
	if err != nil || r.Status != Converged || r.Iterations >= 5000 {
		t.Errorf("converged: %v, %s after %d", err, r.Status, r.Iterations)
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	for name, f := range map[string]func() (*Result, error){
		"Solve": func() (*Result, error) { return Solve(ctx, p, nil, Options{}) },
		"Auto":  func() (*Result, error) { return Auto(ctx, p, Options{}) },
	} {
		if r, err := f(); err != nil || r.Status != Cancelled || r.Iterations != 0 || len(r.X) != 4*9*8 {
			t.Errorf("%s cancelled: %v, %+v", name, err, r)
		}
	}
}

// A variance from the model is free of the bias of a variance from counts: the
// light of a weak, wide scene comes out right.
func TestVarianceFromModel(t *testing.T) {
	const T, H, W, level = 6, 24, 24, 1.5
	s := newStation(T, H, W)
	s.read = 1
	wide := func(t, x, y float64) float64 { return gauss((x-12)*(x-12)+(y-12)*(y-12), 5) }
	p, truth := s.shot(t, wide, level, 1)
	var want float64
	for _, v := range truth {
		want += float64(v)
	}
	sum := func(x []float32) (s float64) {
		for _, v := range x {
			s += float64(v)
		}
		return s / want
	}
	counts, err := Solve(context.Background(), p, nil, Options{MaxIter: 400})
	if err != nil {
		t.Fatal(err)
	}
	model, err := Auto(context.Background(), p, Options{MaxIter: 400})
	if err != nil {
		t.Fatal(err)
	}
	t.Logf("light found: %.3f with weights from counts, %.3f with weights from the model", sum(counts.X), sum(model.X))
	if b := math.Abs(sum(model.X) - 1); b > .02 || b > math.Abs(sum(counts.X)-1) {
		t.Errorf("light found: %.3f with weights from counts, %.3f with weights from the model; want 1 within 0.02", sum(counts.X), sum(model.X))
	}
}
