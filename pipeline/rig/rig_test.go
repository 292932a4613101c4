package rig

import (
	"go/parser"
	"go/token"
	"math"
	"os"
	"os/exec"
	"slices"
	"strconv"
	"strings"
	"testing"
)

// station builds a station from the default options after a change.
func station(t *testing.T, change func(*Options)) *Station {
	t.Helper()
	o := Default()
	if change != nil {
		change(&o)
	}
	s, err := New(o)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// small is a quick station of 24×20 pixels and 8 frames.
func small(o *Options) {
	o.H, o.W, o.T, o.Span = 24, 20, 8, 6.3
	o.View.SensorW, o.View.SensorH = 44, 46
}

// scene sets up a ready-made scene.
func scene(t *testing.T, s *Station, name string, seed uint64) Scene {
	t.Helper()
	c, err := s.Scene(name, seed)
	if err != nil {
		t.Fatal(err)
	}
	return c
}

// near fails the test unless got is within tol of want.
func near(t *testing.T, what string, got, want, tol float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tol) {
		t.Errorf("%s: got %.8g, want %.8g within %.2g", what, got, want, tol)
	}
}

func sum(v []float64) (s float64) {
	for _, x := range v {
		s += x
	}
	return s
}

// moments returns the centre and the variances of light on a sensor w wide.
func moments(v []float64, w int) (x, y, vx, vy float64) {
	s := sum(v)
	for i, p := range v {
		x += p * float64(i%w) / s
		y += p * float64(i/w) / s
	}
	for i, p := range v {
		dx, dy := float64(i%w)-x, float64(i/w)-y
		vx += p * dx * dx / s
		vy += p * dy * dy / s
	}
	return x, y, vx, vy
}

// python runs a check in Debian's Python and returns what it printed.
func python(t *testing.T, script string, args ...string) string {
	t.Helper()
	const py = "/usr/bin/python3"
	if _, err := os.Stat(py); err != nil {
		t.Fatal("need Debian's python3 with python3-numpy and python3-tifffile")
	}
	out, err := exec.Command(py, append([]string{"-c", script}, args...)...).CombinedOutput()
	if err != nil {
		t.Fatalf("python check: %v\n%s", err, out)
	}
	return string(out)
}

func TestImports(t *testing.T) {
	names, err := os.ReadDir(".")
	if err != nil {
		t.Fatal(err)
	}
	for _, n := range names {
		if !strings.HasSuffix(n.Name(), ".go") {
			continue
		}
		f, err := parser.ParseFile(token.NewFileSet(), n.Name(), nil, parser.ImportsOnly)
		if err != nil {
			t.Fatal(err)
		}
		for _, i := range f.Imports {
			p, _ := strconv.Unquote(i.Path.Value)
			first, _, _ := strings.Cut(p, "/")
			std := !strings.Contains(first, ".") && first != "unsheard" || p == "unsheard/pipeline/rig" // its own example
			if !std && !strings.HasPrefix(p, "gonum.org/v1/gonum/") && !strings.HasPrefix(p, "golang.org/x/image/") {
				t.Errorf("%s imports %s: only the standard library, gonum and x/image are allowed", n.Name(), p)
			}
		}
	}
}

func TestValidate(t *testing.T) {
	for _, c := range []struct {
		name   string
		change func(*Options)
		want   string
	}{
		{"window", func(o *Options) { o.W = 2 }, "window 2×64"},
		{"frames", func(o *Options) { o.T = 1 }, "T = 1"},
		{"direction", func(o *Options) { o.Direction = "north" }, `direction "north"`},
		{"span", func(o *Options) { o.Span = 0 }, "span 0 ps"},
		{"falling sweep", func(o *Options) { o.Quadratic = 1.2 }, "does not rise"},
		{"pitch", func(o *Options) { o.Pitch = 0.1 }, "code pitch 0.1"},
		{"contrast", func(o *Options) { o.Low = 0.99 }, "code transmissions"},
		{"blur", func(o *Options) { o.Reference.SigmaX = 0 }, "reference: blur 0"},
		{"bits", func(o *Options) { o.Streak.Bits = 18 }, "streak: 18 bits"},
	} {
		t.Run(c.name, func(t *testing.T) {
			o := Default()
			c.change(&o)
			_, err := New(o)
			if err == nil || !strings.Contains(err.Error(), c.want) {
				t.Errorf("got %v, want an error with %q", err, c.want)
			}
		})
	}
	o := Default()
	o.Pitch, o.Ratio = 0, 0
	if _, err := New(o); err == nil || !strings.Contains(err.Error(), "pitch") || !strings.Contains(err.Error(), "ratio") {
		t.Errorf("got %v, want both faults listed", err)
	}
	if _, err := New(Large()); err != nil {
		t.Error(err)
	}
}

func TestSweep(t *testing.T) {
	s := station(t, nil)
	near(t, "s(0)", s.At(0), 0, 0)
	near(t, "s(span)", s.At(24.8), 31, 1e-12)
	for _, px := range []float64{-0.5, 0, 0.3, 7, 19.2, 31, 31.5, 39.5, 41} {
		near(t, "s(s⁻¹(px))", s.At(s.Inverse(px)), px, 1e-10) // bisection leaves 1e-14 ps
	}
	for _, at := range []float64{0, 5, 24} {
		const h = 1e-4 // central difference: error h²·s‴/6 < 1e-10
		near(t, "rate", s.Rate(at), (s.At(at+h)-s.At(at-h))/(2*h), 1e-7)
	}
	if u := s.Rate(0) / s.Rate(24.8); math.Abs(u-1) < 0.02 {
		t.Errorf("rates at both ends agree to %.2g: the sweep should be uneven", u-1)
	}
	short := station(t, small)
	near(t, "short sweep beyond its gate", short.At(short.Inverse(15.5)), 15.5, 1e-10)
	e := s.Edges()
	if len(e) != 33 || !slices.IsSorted(e) {
		t.Errorf("edges %v: want 33 rising", e)
	}
	near(t, "first edge", s.At(e[0]), -0.5, 1e-10)
	near(t, "last edge", s.At(e[32]), 31.5, 1e-10)
	from, to := s.Gate()
	near(t, "gate opens", from, e[0], 1e-12)
	near(t, "gate closes", to, e[32], 1e-12)
}

func TestDeterminism(t *testing.T) {
	const seed = 7
	s, again := station(t, small), station(t, small)
	c := scene(t, s, "fork", seed)
	a, b, _ := s.Shoot(c, seed)
	a2, b2, _ := again.Shoot(scene(t, again, "fork", seed), seed)
	if !slices.Equal(a.Pix, a2.Pix) || !slices.Equal(b.Pix, b2.Pix) {
		t.Error("same seeds, different frames")
	}
	a3, b3, _ := s.Shoot(c, seed+1)
	if slices.Equal(a.Pix, a3.Pix) || slices.Equal(b.Pix, b3.Pix) {
		t.Error("another seed, same frames")
	}
	other := station(t, func(o *Options) { small(o); o.Seed++ })
	if slices.Equal(other.Code(), s.Code()) || slices.Equal(other.streak.flat, s.streak.flat) {
		t.Error("another station seed, same code or flat")
	}
	if slices.Equal(s.Code(), make([]float32, len(s.Code()))) {
		t.Error("code is empty")
	}
}
