package calib

import (
	"bytes"
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"

	"unsheard/pipeline/frame"
	"unsheard/pipeline/optics"
)

// python runs a script with NumPy and SciPy; its arguments follow. Debian:
// python3-numpy, python3-scipy, python3-skimage.
func python(t testing.TB, script string, args ...string) string {
	t.Helper()
	cmd := exec.Command("/usr/bin/python3", append([]string{"-c", script}, args...)...)
	var stderr bytes.Buffer
	cmd.Stderr = &stderr
	out, err := cmd.Output()
	if err != nil {
		t.Fatalf("/usr/bin/python3 with numpy, scipy and scikit-image (Debian: python3-numpy python3-scipy python3-skimage): %v\n%s", err, stderr.String())
	}
	return string(out)
}

// numbers reads white-space separated floats.
func numbers(t testing.TB, s string) (v []float64) {
	t.Helper()
	for _, w := range strings.Fields(s) {
		var x float64
		if _, err := fmt.Sscan(w, &x); err != nil {
			t.Fatalf("python printed %q: %v", w, err)
		}
		v = append(v, x)
	}
	return v
}

func saveNPY(t testing.TB, path string, p plane) {
	t.Helper()
	v := make([]float32, len(p.v))
	for i, x := range p.v {
		v[i] = float32(x)
	}
	var b bytes.Buffer
	if err := frame.WriteNPY(&b, []int{p.h, p.w}, v); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(path, b.Bytes(), 0o644); err != nil {
		t.Fatal(err)
	}
}

func loadNPY(t testing.TB, path string) plane {
	t.Helper()
	data, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	shape, v, err := frame.ReadNPY(bytes.NewReader(data), int64(len(data)), frame.Limits{})
	if err != nil {
		t.Fatal(err)
	}
	return wide(shape[1], shape[0], v)
}

func noisePlane(w, h int, seed uint64) plane {
	rng := rand.New(rand.NewPCG(seed, 0))
	p := newPlane(w, h)
	for i := range p.v {
		p.v[i] = rng.NormFloat64()
	}
	return p
}

// TestSplineSciPy compares with scipy.ndimage.map_coordinates(order=3,
// mode="mirror"), an independent cubic B-spline.
func TestSplineSciPy(t *testing.T) {
	for _, size := range [][2]int{{17, 12}, {1, 9}, {5, 2}, {40, 40}} {
		p := noisePlane(size[0], size[1], 3)
		path := filepath.Join(t.TempDir(), "p.npy")
		saveNPY(t, path, p)
		for i, v := range p.v {
			p.v[i] = float64(float32(v))
		}
		rng := rand.New(rand.NewPCG(4, 0))
		var at []string
		var x, y []float64
		for range 50 {
			x = append(x, rng.Float64()*float64(size[0]-1))
			y = append(y, rng.Float64()*float64(size[1]-1))
			at = append(at, fmt.Sprintf("%.17g,%.17g", y[len(y)-1], x[len(x)-1]))
		}
		want := numbers(t, python(t, `
import sys, numpy as np
from scipy.ndimage import map_coordinates
p = np.load(sys.argv[1]).astype(float)
at = np.array([[float(v) for v in s.split(",")] for s in sys.argv[2].split(";")]).T
print(*map_coordinates(p, at, order=3, mode="mirror"))`, path, strings.Join(at, ";")))
		s := newSpline(p)
		for i, w := range want {
			got, gx, gy := s.at(x[i], y[i])
			if math.Abs(got-w) > 1e-9 { // rounding of a few hundred float64 operations
				t.Errorf("%v at (%g, %g): %.12g, SciPy %.12g", size, x[i], y[i], got, w)
			}
			const e = 1e-6
			a, _, _ := s.at(x[i]+e, y[i])
			b, _, _ := s.at(x[i]-e, y[i])
			c, _, _ := s.at(x[i], y[i]+e)
			d, _, _ := s.at(x[i], y[i]-e)
			if math.Abs((a-b)/(2*e)-gx) > 1e-5 || math.Abs((c-d)/(2*e)-gy) > 1e-5 {
				t.Errorf("%v at (%g, %g): gradient %g, %g against differences %g, %g", size, x[i], y[i], gx, gy, (a-b)/(2*e), (c-d)/(2*e))
			}
		}
	}
}

// TestFourier compares with the defining sum.
func TestFourier(t *testing.T) {
	const w, h = 6, 5
	p := noisePlane(w, h, 1)
	a := make([]complex128, w*h)
	for i, v := range p.v {
		a[i] = complex(v, 0)
	}
	f := newFFT2(w, h)
	f.forward(a)
	for v := range h {
		for u := range w {
			var s complex128
			for y := range h {
				for x := range w {
					s += complex(p.at(x, y), 0) * cmplx.Exp(complex(0, -2*math.Pi*(float64(u*x)/w+float64(v*y)/h)))
				}
			}
			if cmplx.Abs(s-a[v*w+u]) > 1e-12*float64(w*h) {
				t.Errorf("coefficient (%d, %d): %v, want %v", u, v, a[v*w+u], s)
			}
		}
	}
	f.inverse(a)
	for i, v := range p.v {
		if cmplx.Abs(a[i]-complex(v, 0)) > 1e-13 {
			t.Fatalf("round trip changed value %d: %v, want %g", i, a[i], v)
		}
	}
	for n, want := range map[int]int{1: 1, 7: 8, 11: 12, 13: 15, 97: 100, 121: 125} {
		if got := fastLength(n); got != want {
			t.Errorf("fast length of %d is %d, want %d", n, got, want)
		}
	}
}

// TestSpectrumBlur compares an upright covariance with SciPy's Gaussian
// filter under the same mirrored border.
func TestSpectrumBlur(t *testing.T) {
	p := noisePlane(30, 22, 8)
	dir := t.TempDir()
	saveNPY(t, filepath.Join(dir, "p.npy"), p)
	python(t, `
import sys, numpy as np
from scipy.ndimage import gaussian_filter
p = np.load(sys.argv[1] + "/p.npy").astype(float)
np.save(sys.argv[1] + "/q.npy", gaussian_filter(p, (1.5, 2.0), mode="reflect", truncate=6))`, dir)
	want := loadNPY(t, filepath.Join(dir, "q.npy"))
	got := newSpectrum(p, 16).blur(covariance{4, 0, 2.25})
	for i := range want.v {
		// The filter samples its Gaussian, which differs from the transfer
		// function by aliasing of exp(−2π²σ²/4) = 1.5e-5 at σ = 1.5.
		if math.Abs(got.v[i]-want.v[i]) > 1e-4 {
			t.Fatalf("pixel %d: %g, SciPy %g", i, got.v[i], want.v[i])
		}
	}
	// Variance of white noise after a Gaussian of covariance c: 1/(4π √det c).
	c := covariance{3, 0.5, 2}
	if g, want := newSpectrum(p, 16).noiseGain(c), 1/(4*math.Pi*math.Sqrt(3*2-0.25)); math.Abs(g/want-1) > 1e-3 {
		t.Errorf("noise gain %g, want %g", g, want)
	}
}

// TestEdgeSpread integrates a blurred step over a pixel numerically, and
// compares the pixel kernel with what package optics does to a single pixel.
func TestEdgeSpread(t *testing.T) {
	for _, sigma := range []float64{0.01, 0.3, 0.7, 2} {
		for _, u := range []float64{-2, -0.5, 0, 0.3, 1.7} {
			const n = 20000
			var s float64
			for i := range n {
				s += math.Erfc(-(u-0.5+(float64(i)+0.5)/n)/(sigma*math.Sqrt2)) / 2 / n
			}
			if got := edgeSpread(u, sigma); math.Abs(got-s) > 1e-6 { // midpoint rule, n = 20000
				t.Errorf("edgeSpread(%g, %g) = %g, want %g", u, sigma, got, s)
			}
		}
	}
	const n = 31
	code := make([]float32, n)
	code[n/2] = 1
	m, err := optics.NewModel(optics.Geometry{T: 1, H: 1, W: n, Step: 1, Code: code, StreakBlur: optics.Blur{SigmaX: 0.8}, StreakPad: 2})
	if err != nil {
		t.Fatal(err)
	}
	rows, cols := m.StreakShape()
	rr, rc := m.ReferenceShape()
	e := make([]float32, rows*cols)
	m.Forward(e, make([]float32, rr*rc), ones32(n))
	k := pixelKernel(0.8)
	for i, want := range k {
		var got float64
		for r := range rows {
			got += float64(e[r*cols+2+n/2+i-len(k)/2])
		}
		if math.Abs(got-want) > 3e-4 { // package optics cuts tails of 1e-4
			t.Errorf("kernel at %d: optics %g, ours %g", i-len(k)/2, got, want)
		}
	}
}

func ones32(n int) []float32 { return ones(n) }

// TestNormal compares weighted least squares with numpy.linalg.lstsq.
func TestNormal(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 0))
	eq := newNormal(3)
	var text []string
	for range 12 {
		row := []float64{1, rng.NormFloat64(), rng.NormFloat64()}
		y, w := rng.NormFloat64(), rng.Float64()+0.1
		eq.add(row, y, w)
		text = append(text, fmt.Sprintf("%.17g %.17g %.17g %.17g %.17g", row[0], row[1], row[2], y, w))
	}
	want := numbers(t, python(t, `
import sys, numpy as np
a = np.array([[float(v) for v in l.split()] for l in sys.argv[1].split(";")])
s = np.sqrt(a[:, 4])[:, None]
c, r, *_ = np.linalg.lstsq(a[:, :3] * s, a[:, 3] * s[:, 0], rcond=None)
print(*c, r[0], *np.linalg.inv((a[:, :3] * s).T @ (a[:, :3] * s)).ravel())`, strings.Join(text, ";")))
	c, inv, ok := eq.solve()
	if !ok {
		t.Fatal("singular")
	}
	got := append(append([]float64(nil), c...), eq.chi2(c))
	for i := range 3 {
		for j := range 3 {
			got = append(got, inv.At(i, j))
		}
	}
	for i := range want {
		if math.Abs(got[i]-want[i]) > 1e-10 {
			t.Errorf("value %d: %g, NumPy %g", i, got[i], want[i])
		}
	}
}

// TestRobust checks median, quantile and spread against their definitions.
func TestRobust(t *testing.T) {
	if m := median([]float64{5, 1, 4, 2}); m != 3 {
		t.Errorf("median %g, want 3", m)
	}
	if !math.IsNaN(median(nil)) {
		t.Error("the median of nothing is a number")
	}
	if q := quantile([]float64{3, 1, 2, 5, 4}, 0.25); q != 2 {
		t.Errorf("quartile %g, want 2", q)
	}
	rng := rand.New(rand.NewPCG(9, 0))
	v := make([]float64, 20001)
	for i := range v {
		v[i] = 10 + 2*rng.NormFloat64()
	}
	for i := range 2000 { // a tenth of outliers
		v[i] = 1e6
	}
	c, s := spread(v)
	// A tenth on one side moves the median by 0.14 σ and widens the deviation
	// by 16 %: exact quantiles of the mixture.
	if math.Abs(c-10.28) > 0.06 || math.Abs(s-2.32) > 0.1 {
		t.Errorf("spread says %g ± %g, want 10.28 ± 2.32", c, s)
	}
}
