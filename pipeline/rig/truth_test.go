package rig

import (
	"math"
	"testing"
)

// TestTruthClosedForm: the cube of a Gaussian flash is a product of normal
// probabilities over every voxel.
func TestTruthClosedForm(t *testing.T) {
	s := station(t, small)
	const total, x, y, w, when, length = 3000.0, 9.4, 12.7, 2.2, 3.1, 0.9
	truth := s.Truth(lamp(total, x, y, w, when, length))
	edges := s.Edges()
	edges[0] = -50 // the part before the gate must count as dark
	cube := truth.Cube(edges)
	edges[0] = truth.From
	p := func(i int, c float64) float64 { return phi((float64(i)+0.5-c)/w) - phi((float64(i)-0.5-c)/w) }
	for k := range s.o.T {
		pt := phi((edges[k+1]-when)/length) - phi((edges[k]-when)/length)
		for j := range s.o.H {
			for i := range s.o.W {
				want := total * pt * p(i, x) * p(j, y)
				// Gauss-Legendre with 3 points: error below 1e-5 of the top at
				// a width of 2.2 px; float32 keeps 6e-8.
				near(t, "voxel", float64(cube[(k*s.o.H+j)*s.o.W+i]), want, 1e-3)
			}
		}
	}
}

// TestPeak: the brightest voxel of the true cube has the light asked for.
func TestPeak(t *testing.T) {
	for _, peak := range []float64{20, 200, 2000} {
		s := station(t, func(o *Options) { small(o); o.Peak = peak })
		for _, name := range Scenes() {
			var top float32
			for _, v := range s.Truth(scene(t, s, name, 3)).Cube(s.Edges()) {
				top = max(top, v)
			}
			// The voxel is chosen by its middle, so a neighbour may win by little.
			if r := float64(top) / peak; r < 0.999 || r > 1.03 {
				t.Errorf("%s: brightest voxel %.1f pe, want %g", name, top, peak)
			}
		}
	}
}

// TestFacts checks the numbers a scene states against its light.
func TestFacts(t *testing.T) {
	for _, o := range []Options{Default(), Large()} {
		s, err := New(o)
		if err != nil {
			t.Fatal(err)
		}
		for seed := uint64(1); seed <= 3; seed++ {
			checkBasin(t, s, seed)
			checkFork(t, s, seed)
			checkFlash(t, s, seed)
			checkGlow(t, s, seed)
			checkRipple(t, s, seed)
			checkFront(t, s, seed)
		}
	}
}

// facts returns a lookup that fails the test for an unknown name.
func facts(t *testing.T, c Scene) func(string) float64 {
	return func(name string) float64 {
		t.Helper()
		v, ok := c.Fact(name)
		if !ok {
			t.Fatalf("%s has no fact %q", c.Name, name)
		}
		return v
	}
}

// speed returns the speed of the centroid between two times.
func speed(t Truth, a, b float64) float64 {
	x0, y0 := t.Centroid(a)
	x1, y1 := t.Centroid(b)
	return math.Hypot(x1-x0, y1-y0) / (b - a)
}

func checkBasin(t *testing.T, s *Station, seed uint64) {
	t.Helper()
	c := scene(t, s, "basin", seed)
	f, tr := facts(t, c), s.Truth(c)
	wall, start := f("wall_time"), f("start_time")
	calm := 6 * f("sigma_x") / f("speed") // closer to the wall both images count
	near(t, "basin speed out", speed(tr, start+0.3*(wall-start), wall-calm), f("speed"), 1e-3*f("speed"))
	near(t, "basin speed back", speed(tr, wall+calm, wall+calm+1.5), f("speed"), 1e-3*f("speed"))
	near(t, "basin reflection", tr.Rate(wall+calm)/tr.Rate(wall-calm), f("reflected"), 1e-3)
}

func checkFork(t *testing.T, s *Station, seed uint64) {
	t.Helper()
	c := scene(t, s, "fork", seed)
	f, tr := facts(t, c), s.Truth(c)
	when, a := f("split_time"), f("angle")*math.Pi/180
	near(t, "fork speed in", speed(tr, when-3, when-0.5), f("speed"), 2e-3*f("speed"))
	x0, y0 := tr.Centroid(when + 0.5)
	x1, y1 := tr.Centroid(when + 4)
	near(t, "fork down", (y1-y0)/3.5, f("speed")*math.Cos(a), 1e-3*f("speed"))
	near(t, "fork sideways", (x1-x0)/3.5, f("speed")*math.Sin(a)*(1-2*f("left_share")), 1e-3*f("speed"))
}

func checkFlash(t *testing.T, s *Station, seed uint64) {
	t.Helper()
	c := scene(t, s, "flash", seed)
	f, tr := facts(t, c), s.Truth(c)
	sum := tr.Summary()
	// Light curve sampled in 256 steps and crossed linearly.
	near(t, "flash FWHM", sum.FWHM, f("fwhm"), 2e-3*f("fwhm"))
	near(t, "flash time", sum.PeakTime, f("peak_time"), (tr.To-tr.From)/fine)
	x, y := tr.Centroid(f("peak_time"))
	near(t, "flash x", x, f("x"), 1e-3)
	near(t, "flash y", y, f("y"), 1e-3)
}

func checkGlow(t *testing.T, s *Station, seed uint64) {
	t.Helper()
	c := scene(t, s, "glow", seed)
	f := facts(t, c)
	x, y, decay := f("reed3_x"), f("reed3_y"), f("reed3_decay")
	from := f("reed3_start_time") + 8*f("reed3_rise")
	// After 8 rise times the rise adds below e⁻⁶ of the light here.
	got := math.Log(c.Light(x, y, from)/c.Light(x, y, from+2*decay)) / 2
	near(t, "glow decay", got, 1, 3e-3)
}

func checkRipple(t *testing.T, s *Station, seed uint64) {
	t.Helper()
	c := scene(t, s, "ripple", seed)
	f := facts(t, c)
	crest := func(at float64) float64 { // radius of the brightest place on a ray
		var best, r float64
		for d := 0.0; d < 0.5*float64(s.o.W); d += 0.01 {
			if v := c.Light(f("x")+d, f("y"), at); v > best {
				best, r = v, d
			}
		}
		return r
	}
	near(t, "ripple radius", crest(4), f("start_radius")+f("speed")*(4-f("start_time")), 0.02)
	near(t, "ripple speed", (crest(20)-crest(4))/16, f("speed"), 0.02/16)
}

func checkFront(t *testing.T, s *Station, seed uint64) {
	t.Helper()
	c := scene(t, s, "front", seed)
	f := facts(t, c)
	a := f("angle") * math.Pi / 180
	cx, cy := float64(s.o.W-1)/2, float64(s.o.H-1)/2
	when := func(d float64) float64 { // time of the brightest light d px along
		var best, at float64
		for u := -10.0; u < 10; u += 0.01 {
			x := cx + d*math.Cos(a)
			if v := c.Light(x, cy+d*math.Sin(a), f("middle_time")+u); v > best {
				best, at = v, u
			}
		}
		return at
	}
	near(t, "front speed", 6/(when(3)-when(-3)), f("speed"), 0.02*f("speed"))
}

func TestSceneNames(t *testing.T) {
	s := station(t, small)
	if _, err := s.Scene("volcano", 1); err == nil {
		t.Error("unknown scene accepted")
	}
	for _, name := range Scenes() {
		a, b := scene(t, s, name, 1), scene(t, s, name, 2)
		if a.Facts[0] == b.Facts[0] {
			t.Errorf("%s: seeds 1 and 2 give the same %s", name, a.Facts[0].Name)
		}
		for _, f := range a.Facts {
			if f.Unit == "" || f.Name == "" || math.IsNaN(f.Value) {
				t.Errorf("%s: fact %+v", name, f)
			}
		}
	}
}
