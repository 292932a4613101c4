package calib

import (
	"fmt"
	"math"
	"math/rand/v2"
	"path/filepath"
	"strings"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"
)

// TestTransfer films flats of known gain and compares the fit with
//
//   - the gain that was put in,
//   - the standard's formulas in NumPy: K is the slope through the origin of
//     σ_y² − σ_y.dark² against μ_y − μ_y.dark over 0 to 70 % of saturation, the
//     linearity error that of the line of least relative deviations over 5 %
//     to 95 % (EMVA 1288 R4 linear; as in the reference implementation at
//     github.com/EMVA1288/emva1288, emva1288/process/results.py, K and
//     linearity).
func TestTransfer(t *testing.T) {
	const w, h, gain, read, top = 90, 80, 1.7, 4.0, 3000.0
	rng := rand.New(rand.NewPCG(11, 0))
	film := func(light float64) []float32 {
		v := make([]float32, w*h)
		for i := range v {
			response := 1 + 0.02*math.Sin(float64(i))
			pe := 0.0
			if light > 0 {
				pe = distuv.Poisson{Lambda: light * response, Src: rng}.Rand()
			}
			v[i] = float32(math.Min(math.Round(100+(pe+read*rng.NormFloat64())/gain), top))
		}
		return v
	}
	dark := newPlane(w, h)
	for i := range dark.v {
		dark.v[i] = 100
	}
	tr := Transfer{DarkVar: read*read/gain/gain + 1.0/12, SigmaDarkVar: 0.02}
	exposures := []float64{0.1, 0.2, 0.4, 0.6, 0.8, 1, 1.4}
	for _, e := range exposures {
		l, err := pairLevel(film(4000*e), film(4000*e*1.01), dark, all(w*h), math.Sqrt(tr.DarkVar))
		if err != nil {
			t.Fatal(err)
		}
		l.Exposure = e * 1.005
		tr.Levels = append(tr.Levels, l)
	}
	if err := tr.fit(4095, 0); err != nil {
		t.Fatal(err)
	}
	within(t, "gain", 1/tr.K, gain, 0.02)
	if d := math.Abs(1/tr.K - gain); d > 4*tr.SigmaK/tr.K*gain {
		t.Errorf("gain %.4f is %.1f of its standard deviations off", 1/tr.K, d/(tr.SigmaK/tr.K*gain))
	}
	if math.Abs(tr.Saturation-top) > 15 {
		t.Errorf("saturation %g, want %g (%s)", tr.Saturation, top, tr.SaturationNote)
	}
	last := len(tr.Levels) - 1
	if tr.Levels[last].Used || !tr.Levels[0].Used || !tr.Levels[3].Used {
		t.Errorf("levels used: %+v", tr.Levels)
	}
	var rows, lin []string
	for _, l := range tr.Levels {
		if l.Used {
			rows = append(rows, fmt.Sprintf("%.17g %.17g %.17g", l.Mean, l.Var-tr.DarkVar, math.Hypot(l.Sigma, tr.SigmaDarkVar)))
		}
		if !l.full && l.Mean > 0.05*tr.Saturation && l.raw < 0.95*tr.Saturation {
			lin = append(lin, fmt.Sprintf("%.17g %.17g", l.Exposure, l.Mean))
		}
	}
	want := numbers(t, python(t, `
import sys, numpy as np
m, v, s = np.array([[float(x) for x in l.split()] for l in sys.argv[1].split(";")]).T
k = np.linalg.lstsq((m / s)[:, None], v / s, rcond=None)[0][0]
x, y = np.array([[float(q) for q in l.split()] for l in sys.argv[2].split(";")]).T
a = np.linalg.lstsq(np.c_[1 / y, x / y], np.ones_like(y), rcond=None)[0]
d = abs(y - a[0] - a[1] * x) / (a[0] + a[1] * x)
print(k, d.mean(), d.max())`, strings.Join(rows, ";"), strings.Join(lin, ";")))
	within(t, "K against NumPy", tr.K, want[0], 1e-4) // the weights follow K to 1e-6
	within(t, "linearity against NumPy", tr.Linearity, want[1], 1e-6)
	within(t, "largest deviation against NumPy", tr.LinearityMax, want[2], 1e-6)
	if tr.Linearity > 0.002 {
		t.Errorf("a linear camera has a linearity error of %.2g", tr.Linearity)
	}
}

// TestPairFaults are pairs that are none.
func TestPairFaults(t *testing.T) {
	v := func(a float32) []float32 {
		p := make([]float32, 100)
		for i := range p {
			p[i] = a + float32(i%3)
		}
		return p
	}
	dark := newPlane(10, 10)
	for _, c := range []struct {
		a, b float32
		want string
	}{{100, 160, "equal exposures"}, {-5, -5, "brighter than the dark frames"}} {
		if _, err := pairLevel(v(c.a), v(c.b), dark, all(100), 1); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("levels %g and %g: %v, want %q", c.a, c.b, err, c.want)
		}
	}
	if _, err := pairLevel(v(1), v(1), dark, make([]bool, 100), 1); err == nil {
		t.Error("a pair without good pixels was accepted")
	}
}

// TestPlateau tells a pile at the top from an ordinary tail, whatever the
// width of the distribution.
func TestPlateau(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 2))
	for _, width := range []float64{3, 10, 30, 300} {
		v := make([]float64, 4000)
		cut := make([]float64, len(v))
		for i := range v {
			v[i] = 2000 + width*rng.NormFloat64()
			cut[i] = math.Min(v[i], 2000) + rng.NormFloat64()
		}
		if q := quantile(v, 0.999); plateauAt(v, q, 1.5) && width > 5 {
			t.Errorf("a distribution %g wide is called saturated", width)
		}
		if q := quantile(cut, 0.999); !plateauAt(cut, q, 1.5) {
			t.Errorf("a distribution %g wide, cut at its middle, is not called saturated", width)
		}
	}
}

// TestSweepFitNumPy compares curve and uncertainty with a weighted polynomial
// fit in NumPy (polyfit with cov="unscaled"), which works in powers of t.
func TestSweepFitNumPy(t *testing.T) {
	rng := rand.New(rand.NewPCG(6, 0))
	var pts []SweepPoint
	var text []string
	for i := range 12 {
		ps := -3 + 2.5*float64(i)
		s := 0.02 + 0.02*rng.Float64()
		p := SweepPoint{ps, 1.3*ps + 0.01*ps*ps - 1e-4*ps*ps*ps + s*0.5*rng.NormFloat64(), s}
		pts = append(pts, p)
		text = append(text, fmt.Sprintf("%.17g %.17g %.17g", p.PS, p.Px, p.Sigma))
	}
	for degree := 1; degree <= 5; degree++ {
		s := Sweep{First: pts[0].PS, Last: pts[len(pts)-1].PS, Coef: make([]float64, degree+1)}
		rss, ok := s.fit(pts)
		if !ok {
			t.Fatal("no fit")
		}
		s.OriginTime = math.NaN()
		out := numbers(t, python(t, `
import sys, numpy as np
x, y, s = np.array([[float(v) for v in l.split()] for l in sys.argv[1].split(";")]).T
c, v = np.polyfit(x, y, int(sys.argv[2]), w=1 / s, cov="unscaled")
print(sum(((y - np.polyval(c, x)) / s) ** 2))
for t in np.linspace(-3, 24.5, 7):
    p = t ** np.arange(len(c))[::-1]
    print(p @ c, np.sqrt(p @ v @ p))`, strings.Join(text, ";"), fmt.Sprint(degree)))
		within(t, "χ²", rss, out[0], 1e-6)
		wide := math.Sqrt(max(1, rss/float64(len(pts)-degree-1)))
		for i := range 7 {
			at := -3 + 27.5*float64(i)/6
			if got := s.At(at); math.Abs(got-out[1+2*i]) > 1e-7 {
				t.Errorf("degree %d: s(%g) = %.9g, NumPy %.9g", degree, at, got, out[1+2*i])
			}
			if got := s.Sigma(at); math.Abs(got/(wide*out[2+2*i])-1) > 1e-5 {
				t.Errorf("degree %d: σ(%g) = %.9g, NumPy %.9g", degree, at, got, wide*out[2+2*i])
			}
		}
	}
	s, err := fitSweep(pts)
	if err != nil {
		t.Fatal(err)
	}
	if d := len(s.Coef) - 1; d < 2 || d > 4 {
		t.Errorf("chose degree %d for a cubic with noise", d)
	}
	s.setOrigin(nil)
	checkCurve(t, s)
}

// checkCurve holds a curve to what its comments promise.
func checkCurve(t *testing.T, s *Sweep) {
	t.Helper()
	if math.Abs(s.At(0)) > 1e-12 || s.Sigma(0) > 1e-9 {
		t.Errorf("s(0) = %g ± %g", s.At(0), s.Sigma(0))
	}
	span := s.Last - s.First
	for u := -0.5; u <= 1.5; u += 0.01 {
		at := s.First + u*span
		if back := s.Inverse(s.At(at)); math.Abs(back-at) > 1e-9*span {
			t.Errorf("inverse of s(%g) is %g", at, back)
		}
		const e = 1e-5
		if d := (s.At(at+e) - s.At(at-e)) / (2 * e); math.Abs(d-s.Rate(at)) > 1e-5*math.Abs(d) {
			t.Errorf("rate at %g is %g, differences say %g", at, s.Rate(at), d)
		}
		if s.Inside(at) != (u >= 0 && u <= 1) && math.Abs(u) > 1e-9 && math.Abs(u-1) > 1e-9 {
			t.Errorf("inside at %g: %v", at, s.Inside(at))
		}
	}
	// Straight outside.
	if a, b := s.Rate(s.Last+span), s.Rate(s.Last); a != b {
		t.Errorf("rate past the end is %g, at the end %g", a, b)
	}
}

// TestSweepFew: with few delays the known uncertainties decide.
func TestSweepFew(t *testing.T) {
	at := func(n int, bend float64) (p []SweepPoint) {
		for i := range n {
			x := 30 * float64(i) / float64(n-1)
			p = append(p, SweepPoint{x, x + bend*x*(30-x)/30, 0.01})
		}
		return p
	}
	for _, c := range []struct {
		n      int
		bend   float64
		degree int
	}{{2, 0.3, 1}, {3, 0, 1}, {3, 0.2, 2}, {5, 0, 1}, {5, 0.2, 2}, {7, 0.2, 2}} {
		s, err := fitSweep(at(c.n, c.bend))
		if err != nil {
			t.Fatal(err)
		}
		if d := len(s.Coef) - 1; d != c.degree {
			t.Errorf("%d delays, bend %g: degree %d, want %d", c.n, c.bend, d, c.degree)
		}
	}
	falling := []SweepPoint{{0, 0, 0.01}, {1, -1, 0.01}, {2, -2, 0.01}}
	if _, err := fitSweep(falling); err == nil || !strings.Contains(err.Error(), "does not rise") {
		t.Errorf("a falling sweep: %v", err)
	}
}

// TestFrameGrid works the documented rule by hand.
func TestFrameGrid(t *testing.T) {
	line := func(first, last, rate float64) *Sweep {
		s := &Sweep{First: first, Last: last, Coef: []float64{rate * (first + last) / 2, rate * (last - first) / 2}}
		for i := range 5 {
			p := first + (last-first)*float64(i)/4
			s.Points = append(s.Points, SweepPoint{p, rate * p, 0.01})
		}
		return s
	}
	for _, c := range []struct {
		s      *Sweep
		w      Window
		rows   int
		first  float64
		frames int
		warned bool
	}{
		{line(0, 20, 1), Window{0, 5, 8, 10}, 100, 0, 26, false},
		{line(0, 20, 1), Window{0, 5, 8, 10}, 39, 0, 25, false}, // rows 5 … 5+10+25−2 = 38
		{line(0, 20, 1), Window{0, 5, 8, 10}, 30, 0, 16, true},
		{line(0.3, 20.3, 1), Window{0, 5, 8, 10}, 100, 1, 25, false},
		{line(0.03, 20.03, 1), Window{0, 5, 8, 10}, 100, 0, 26, false},
		{line(-8, 20, 1), Window{0, 5, 8, 10}, 100, -5, 33, false}, // earlier light would miss the sensor
	} {
		first, frames, warn, err := c.s.frameGrid(c.w, c.rows)
		if err != nil || first != c.first || frames != c.frames || (len(warn) > 0) != c.warned {
			t.Errorf("%g to %g ps on %d rows: first %g, %d frames, warned %q, %v; want %g, %d, %v", c.s.First, c.s.Last, c.rows, first, frames, warn, err, c.first, c.frames, c.warned)
		}
	}
	if _, _, _, err := line(0, 20, 1).frameGrid(Window{0, 5, 8, 10}, 15); err == nil {
		t.Error("a window at the last row was accepted")
	}
}

// TestEdges fits edges made by the closed form, also between pixels.
func TestEdges(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 3))
	for _, c := range []struct{ sx, sy, shift float64 }{{0.4, 0.7, 0}, {0.7, 1.3, 0.3}, {1, 0.5, -0.45}, {2, 1.5, 0}} {
		im := image{newPlane(60, 50), all(3000), make([]float64, 3000), 1}
		for i := range im.v {
			x, y := float64(i%60), float64(i/60)
			fx := edgeSpread(x-(11.5+c.shift), c.sx) - edgeSpread(x-(43.5+c.shift), c.sx)
			fy := edgeSpread(y-(9.5+c.shift), c.sy) - edgeSpread(y-(37.5+c.shift), c.sy)
			v := 20000 * fx * fy * (1 + 0.002*x)
			im.vari[i] = v + 9
			im.v[i] = v + math.Sqrt(im.vari[i])*rng.NormFloat64()
		}
		w, _, err := findWindow(im)
		if err != nil {
			t.Fatal(err)
		}
		if want := (Window{12, 10, 32, 28}); w != want {
			t.Errorf("shift %g: window %+v, want %+v", c.shift, w, want)
		}
		ex, ey := fitEdges(im, w, true), fitEdges(im, w, false)
		within(t, "blur x", ex.sigma, c.sx, 0.02)
		within(t, "blur y", ey.sigma, c.sy, 0.02)
		if math.Abs(ex.side[0]-c.shift) > 0.02 || math.Abs(ex.side[1]+c.shift) > 0.02 {
			t.Errorf("sides lie at %g and %g inwards, want %g and %g", ex.side[0], ex.side[1], c.shift, -c.shift)
		}
	}
}

// TestRegisterSciKit registers pictures that scikit-image warped: an
// independent interpolation (order 5) and convention of maps.
func TestRegisterSciKit(t *testing.T) {
	for _, c := range []struct {
		name                string
		turn, scale, mirror float64
		dx, dy, key         float64
	}{
		{"turned and small", 14, 0.72, 1, 3.4, -2.2, 0},
		{"mirrored and large", -13, 1.38, -1, -5.7, 4.1, 0},
		{"upside down", 178, 1.1, 1, 0.3, 0.6, 0},
		{"keystone", 5, 1, 1, 1.5, 0.5, 4e-4},
	} {
		t.Run(c.name, func(t *testing.T) {
			dir := t.TempDir()
			h := numbers(t, python(t, `
import sys, numpy as np
from scipy.ndimage import gaussian_filter
from skimage.transform import warp, ProjectiveTransform
turn, scale, mirror, dx, dy, key = [float(v) for v in sys.argv[2:]]
rng = np.random.default_rng(42)
W, H, RW, RH = 60, 52, 110, 104
big = gaussian_filter(rng.random((240, 240)), 1.6)
big = (big - big.min()) / (big.max() - big.min()) * 9000 + 500
to = lambda x, y: np.array([[1, 0, x], [0, 1, y], [0, 0, 1.0]])
a = np.deg2rad(turn)
lin = np.array([[scale * np.cos(a) * mirror, -scale * np.sin(a), 0], [scale * np.sin(a) * mirror, scale * np.cos(a), 0], [key, -key / 2, 1]])
h = to(RW / 2 + dx, RH / 2 + dy) @ lin @ to(-(W - 1) / 2, -(H - 1) / 2)
h /= h[2, 2]
# window pixel (x, y) is big pixel (x + 90, y + 94)
s = big[94:94 + H, 90:90 + W]
r = warp(big, ProjectiveTransform(to(90, 94) @ np.linalg.inv(h)), output_shape=(RH, RW), order=5, mode="reflect", preserve_range=True)
# flux: light per reference pixel falls with the Jacobian
y, x = np.mgrid[0:RH, 0:RW]
g = np.linalg.inv(h); g /= g[2, 2]
d = g[2, 0] * x + g[2, 1] * y + 1
r = r * abs(np.linalg.det(g) / d ** 3)
np.save(sys.argv[1] + "/s.npy", (s + rng.normal(0, np.sqrt(s) / 3)).astype("f4"))
np.save(sys.argv[1] + "/r.npy", (r + rng.normal(0, np.sqrt(r) / 3)).astype("f4"))
print(*h.ravel())`, dir, fmt.Sprint(c.turn), fmt.Sprint(c.scale), fmt.Sprint(c.mirror), fmt.Sprint(c.dx), fmt.Sprint(c.dy), fmt.Sprint(c.key)))
			s, r := counted(loadNPY(t, filepath.Join(dir, "s.npy"))), counted(loadNPY(t, filepath.Join(dir, "r.npy")))
			// Pictures without blur of their own: both arms see samples.
			f, _, err := register(t.Context(), s, r, [2]float64{0.3, 0.3})
			if err != nil {
				t.Fatal(err)
			}
			var sum float64
			for i := range s.w * s.h {
				x, y := float64(i%s.w), float64(i/s.w)
				u, v := apply([9]float64(h), x, y)
				p, q := apply(f.H, x, y)
				sum += (u-p)*(u-p) + (v-q)*(v-q)
			}
			if rms := math.Sqrt(sum / float64(s.w*s.h)); rms > goalRegistration {
				t.Errorf("off by %.4f px rms (says %.4f, %s, correlation %.5f)", rms, f.Residual, f.Kind, f.Rho)
			}
			if want := c.key != 0; (f.Kind == "homography") != want {
				t.Errorf("called %s", f.Kind)
			}
			// Both were made from one picture, so the ratio of light is 1.
			ratio, _, _ := flux(s, r, f.H, 6)
			within(t, "ratio", ratio, 1, 0.003)
		})
	}
}

// counted is a picture with the noise that the script above puts in.
func counted(p plane) image {
	im := image{p, all(len(p.v)), make([]float64, len(p.v)), 1}
	for i, v := range p.v {
		im.vari[i] = max(v, 1) / 9
	}
	return im
}

// TestTrackSpots moves spots of one pixel, hardly blurred, by quarter pixels:
// the coarsest sampling a station may have.
func TestTrackSpots(t *testing.T) {
	rng := rand.New(rand.NewPCG(8, 8))
	for _, sigma := range []float64{0.45, 0.8, 1.5} {
		var frames []moved
		want := func(i int) float64 { return 1.75*float64(i) + 0.02*float64(i*i) }
		for i := range 14 {
			im := image{newPlane(24, 60), all(24 * 60), make([]float64, 24*60), 1}
			for k := range im.v {
				x, y := float64(k%24), float64(k/24)
				v := 0.0
				for _, s := range [][3]float64{{5, 6, 4000}, {12, 10, 9000}, {18, 3, 6000}} {
					cy := s[1] + want(i)
					v += s[2] * (edgeSpread(x-s[0]+0.5, sigma) - edgeSpread(x-s[0]-0.5, sigma)) * (edgeSpread(y-cy+0.5, sigma) - edgeSpread(y-cy-0.5, sigma))
				}
				im.vari[k] = v + 9
				im.v[k] = v*(1+0.1*math.Sin(float64(i))) + math.Sqrt(im.vari[k])*rng.NormFloat64()
			}
			for range 3 { // dead pixels
				im.ok[rng.IntN(len(im.ok))] = false
			}
			frames = append(frames, moved{ps: float64(i), im: im})
		}
		if err := track(frames); err != nil {
			t.Fatal(err)
		}
		var sum float64
		for i, f := range frames {
			d := f.shift - want(i)
			sum += d * d
		}
		if rms := math.Sqrt(sum / float64(len(frames))); rms > 0.03 {
			t.Errorf("σ %g: displacements are off by %.4f px rms", sigma, rms)
		}
	}
}

// TestTurnTo goes through all sixteen pairs of a direction written and a
// direction meant: light that moves in direction meant, turned as if it moved
// in direction written, must lead back to meant.
func TestTurnTo(t *testing.T) {
	step := map[string][2]float64{"down": {0, 9}, "up": {0, -9}, "left": {-9, 0}, "right": {9, 0}}
	// The turns of package frame: up is half a turn, right a quarter
	// clockwise, left a quarter counter-clockwise (x right, y down).
	turn := map[string]func(x, y float64) (float64, float64){
		"down":  func(x, y float64) (float64, float64) { return x, y },
		"up":    func(x, y float64) (float64, float64) { return -x, -y },
		"right": func(x, y float64) (float64, float64) { return -y, x },
		"left":  func(x, y float64) (float64, float64) { return y, -x },
	}
	for written, f := range turn {
		for meant, d := range step {
			x, y := f(d[0], d[1])
			if got := turnTo(written, x, y); got != meant {
				t.Errorf("written %s, moving %s: suggests %s", written, meant, got)
			}
		}
	}
}
