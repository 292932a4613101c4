package measure

import (
	"math"
	"testing"

	"gonum.org/v1/gonum/stat"

	"unsheard/pipeline/cube"
)

// packet fills a cube with a Gaussian packet of light: deviation r in space
// and st in time, moving at (vx, vy) px/ps and brightest at t0, frames of dt ps.
func packet(t, h, w int, dt, x0, y0, vx, vy, r, t0, st, total float64) *cube.Cube {
	c := cube.New(t, h, w)
	for k := range t {
		c.Time[k] = (float64(k) + 0.5) * dt
		c.Edges[k] = float64(k) * dt
	}
	c.Edges[t] = float64(t) * dt
	for k := range t {
		// The frame holds the exact integral of the pulse over its length.
		g := 0.5 * (math.Erf((c.Edges[k+1]-t0)/st/math.Sqrt2) - math.Erf((c.Edges[k]-t0)/st/math.Sqrt2))
		cx, cy := x0+vx*c.Time[k], y0+vy*c.Time[k]
		for y := range h {
			for x := range w {
				dx, dy := float64(x)-cx, float64(y)-cy
				c.Data[(k*h+y)*w+x] = float32(total * g / (2 * math.Pi * r * r) * math.Exp(-(dx*dx+dy*dy)/(2*r*r)))
			}
		}
	}
	return c
}

func input(c *cube.Cube) Input {
	total := c.Total()
	arm := func(n string) Arm {
		return Arm{Name: n, Light: total / 2, LightSigma: math.Sqrt(total / 2), Lit: 100, Usable: 1000, Misfit: 1}
	}
	return Input{Cube: c, Streak: arm("streak"), Reference: arm("reference"), Expected: total / 2,
		Transmission: 0.5, Fit: Fit{Converged: true, Iterations: 100}}
}

func value(t *testing.T, r *Report, name string) float64 {
	t.Helper()
	q, ok := r.Quantities[name]
	if !ok {
		t.Fatalf("no quantity %q; notes: %v", name, r.Notes)
	}
	return q.Value
}

func near(t *testing.T, name string, got, want, tol float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tol) {
		t.Errorf("%s = %v, want %v ± %v", name, got, want, tol)
	}
}

// TestGaussianPulse checks the width of a Gaussian, FWHM = 2√(2 ln 2)·σ (for
// instance NIST Digital Library of Mathematical Functions 7.1 with the
// definition of the half width), and the 10–90 % rise of its flank,
// σ·(√(2 ln 10) − √(2 ln(10/9))), both closed forms.
func TestGaussianPulse(t *testing.T) {
	const sigma, t0, dt = 10.0, 41.3, 2.0
	c := packet(48, 24, 24, dt, 12, 12, 0, 0, 2, t0, sigma, 1e6)
	r, err := Measure(input(c))
	if err != nil {
		t.Fatal(err)
	}
	// A frame averages over dt: variances add, dt²/12 (box of width dt). The
	// remaining tolerance is that of linear interpolation between samples,
	// dt²/8·max|p''|/|p'| < dt²/(8σ) = 0.05 ps for each crossing.
	s := math.Sqrt(sigma*sigma + dt*dt/12)
	near(t, "peak_time", value(t, r, "peak_time"), t0, 0.02)
	near(t, "fwhm", value(t, r, "fwhm"), 2*math.Sqrt(2*math.Ln2)*s, 0.1)
	near(t, "rise", value(t, r, "rise_10_90"), s*(math.Sqrt(2*math.Log(10))-math.Sqrt(2*math.Log(10.0/9))), 0.15)
	near(t, "total_light", value(t, r, "total_light"), 1e6, 200)
}

// TestLightSpeedFront checks the unit chain: a packet that crosses
// 299.792458 µm per ps moves at the speed of light of the SI.
func TestLightSpeedFront(t *testing.T) {
	const scale = 150.0 // µm per px
	v := 299.792458 / scale
	c := packet(20, 32, 64, 1, 10, 16, v, 0, 2.5, 10, 5, 1e6)
	c.Scale = scale
	r, err := Measure(input(c))
	if err != nil {
		t.Fatal(err)
	}
	// The patch threshold cuts a symmetric spot on the pixel grid; its
	// centroid is within a hundredth of a pixel, over a path of 40 px.
	near(t, "speed", value(t, r, "speed"), v, v*1e-3)
	near(t, "speed_scene", value(t, r, "speed_scene"), 299792458, 3e5)
	near(t, "speed_over_c", value(t, r, "speed_over_c"), 1, 1e-3)
	near(t, "direction", value(t, r, "direction"), 0, 0.1)
}

// TestSlope compares the fit with gonum's stat.LinearRegression and its
// deviation with the textbook formula s²/Sxx evaluated directly.
func TestSlope(t *testing.T) {
	x := []float64{1, 2, 3.5, 4, 6, 7.25}
	y := []float64{2.1, 3.9, 7.2, 7.9, 12.4, 14.2}
	w := []float64{1, 1, 1, 1, 1, 1}
	b, s := slope(x, y, w)
	a0, b0 := stat.LinearRegression(x, y, nil, false)
	var chi, xx float64
	for k := range x {
		chi += math.Pow(y[k]-a0-b0*x[k], 2)
		xx += math.Pow(x[k]-stat.Mean(x, nil), 2)
	}
	near(t, "slope", b, b0, 1e-12)
	near(t, "sigma", s, math.Sqrt(chi/4/xx), 1e-12)
}

func TestClippedPatchIsLeftOut(t *testing.T) {
	// The packet leaves the window on the right after about 15 frames.
	c := packet(30, 32, 32, 1, 4, 16, 1.6, 0, 2, 15, 1e3, 1e6)
	r, err := Measure(input(c))
	if err != nil {
		t.Fatal(err)
	}
	near(t, "speed", value(t, r, "speed"), 1.6, 0.03)
	for k, x := range r.Track.X {
		if x > 28 {
			t.Errorf("frame at %g ps: centroid %g kept although its patch is clipped", r.Track.Time[k], x)
		}
	}
}

// TestBounce has a packet thrown back by a wall: the speed is that of the way
// there, which is longer, and not the mean of both ways.
func TestBounce(t *testing.T) {
	const there, back = 2.0, -1.5
	c := packet(30, 32, 64, 1, 10, 16, there, 0, 2.5, 15, 1e3, 1e6)
	turn := packet(30, 32, 64, 1, 50-back*20.5, 16, back, 0, 2.5, 15, 1e3, 1e6)
	n := c.H * c.W
	copy(c.Data[20*n:], turn.Data[20*n:])
	r, err := Measure(input(c))
	if err != nil {
		t.Fatal(err)
	}
	near(t, "velocity_x", value(t, r, "velocity_x"), there, 0.02)
	if len(r.Notes) == 0 {
		t.Error("no note that the track bends")
	}
}

func TestNoLight(t *testing.T) {
	c := cube.New(3, 4, 4)
	for k := range 3 {
		c.Time[k], c.Edges[k+1] = float64(k)+0.5, float64(k+1)
	}
	in := Input{Cube: c, Streak: Arm{Name: "streak"}, Reference: Arm{Name: "reference"}, Fit: Fit{Converged: true}}
	r, err := Measure(in)
	if err != nil {
		t.Fatal(err)
	}
	if r.Verdict.Grade != Unusable || r.Verdict.Reasons[0].Code != "no_light" {
		t.Errorf("verdict = %+v, want unusable for no_light", r.Verdict)
	}
	if _, ok := r.Quantities["peak_time"]; ok {
		t.Error("a dark cube has a peak time")
	}
}

func TestMeasureRefusesBrokenCube(t *testing.T) {
	c := packet(4, 4, 4, 1, 2, 2, 0, 0, 1, 2, 1, 10)
	c.Data[5] = float32(math.NaN())
	if _, err := Measure(input(c)); err == nil {
		t.Error("a cube with NaN was measured")
	}
}

func TestVerdict(t *testing.T) {
	c := packet(16, 16, 16, 1, 8, 8, 0, 0, 2, 8, 2, 1e5)
	cases := []struct {
		name  string
		spoil func(*Input)
		grade string
		code  string
	}{
		{"clean", func(*Input) {}, Good, ""},
		{"few saturated", func(in *Input) { in.Streak.SaturatedShare = 0.031 }, Doubtful, "saturated_streak"},
		{"many saturated", func(in *Input) { in.Reference.SaturatedShare = 0.2 }, Unusable, "saturated_reference"},
		{"faint", func(in *Input) { in.Streak.Lit, in.Streak.Light, in.Expected = 1000, 2500, 2500 }, Doubtful, "little_light"},
		{"dark", func(in *Input) { in.Streak.Lit = 0 }, Unusable, "no_light"},
		{"arms", func(in *Input) { in.Expected = in.Streak.Light / 1.14 }, Doubtful, "arms_disagree"},
		{"other event", func(in *Input) { in.Expected = in.Streak.Light / 2 }, Unusable, "arms_disagree"},
		{"misfit", func(in *Input) { in.Streak.Misfit = 2 }, Doubtful, "misfit_streak"},
		{"misfit reference", func(in *Input) { in.Reference.Misfit = 9 }, Unusable, "misfit_reference"},
		{"late", func(in *Input) { in.OutsideSpan = 0.2 }, Doubtful, "outside_span"},
		{"limit", func(in *Input) { in.Fit.Converged = false }, Doubtful, "not_converged"},
		{"quick look", func(in *Input) { in.Quick, in.Streak.Misfit, in.Fit.Converged, in.OutsideSpan = true, 9, false, 0.4 }, Good, ""},
		{"quick look, saturated", func(in *Input) { in.Quick, in.Streak.SaturatedShare = true, 0.031 }, Doubtful, "saturated_streak"},
		{"extra", func(in *Input) { in.Extra = []Reason{{Code: "weak_stamp"}} }, Doubtful, "weak_stamp"},
	}
	for _, tc := range cases {
		t.Run(tc.name, func(t *testing.T) {
			in := input(c)
			tc.spoil(&in)
			r, err := Measure(in)
			if err != nil {
				t.Fatal(err)
			}
			if r.Verdict.Grade != tc.grade {
				t.Errorf("grade = %s %+v, want %s", r.Verdict.Grade, r.Verdict.Reasons, tc.grade)
			}
			switch {
			case tc.code == "" && len(r.Verdict.Reasons) != 0:
				t.Errorf("reasons = %+v, want none", r.Verdict.Reasons)
			case tc.code != "" && (len(r.Verdict.Reasons) != 1 || r.Verdict.Reasons[0].Code != tc.code):
				t.Errorf("reasons = %+v, want only %s", r.Verdict.Reasons, tc.code)
			}
		})
	}
}

func TestFaintShotIsNotBlamedForItsNoise(t *testing.T) {
	in := input(packet(16, 16, 16, 1, 8, 8, 0, 0, 2, 8, 2, 1e5))
	in.Expected, in.ExpectedSigma = in.Streak.Light/1.2, in.Streak.Light/10
	r, err := Measure(in)
	if err != nil {
		t.Fatal(err)
	}
	if r.Verdict.Grade != Good {
		t.Errorf("a difference of two deviations gives %+v", r.Verdict)
	}
}

func TestShapeWithoutFlanks(t *testing.T) {
	p := Shape([]float64{0, 1, 2, 3}, []float64{8, 9, 10, 9.5})
	if !math.IsNaN(p.Width) || !math.IsNaN(p.Rise) {
		t.Errorf("width %v and rise %v of a curve that never falls to half, want NaN", p.Width, p.Rise)
	}
	one := Shape([]float64{5}, []float64{3})
	if one.Peak != 5 || !math.IsNaN(one.Width) {
		t.Errorf("one sample: %+v", one)
	}
}
