package rig

import (
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
)

// Scene is light as a continuous function of place and time.
type Scene struct {
	Name string

	// Facts are the numbers the scene was built from.
	Facts []Fact

	gain  float64 // factor on all parts
	parts []part
}

// Fact is one known number of a scene.
type Fact struct {
	Name  string  `json:"name"`
	Value float64 `json:"value"`
	Unit  string  `json:"unit"`
}

// part is one source of light: at time t (ps) it gives the light as a
// function of place, photoelectrons per px² and ps, and the box outside which
// there is none worth counting. A nil function means dark.
type part func(t float64) (light func(x, y float64) float64, b box)

// box is a rectangle in window pixels.
type box struct{ x0, y0, x1, y1 float64 }

func (b box) holds(x, y float64) bool { return b.x0 <= x && x <= b.x1 && b.y0 <= y && y <= b.y1 }

var everywhere = box{math.Inf(-1), math.Inf(-1), math.Inf(1), math.Inf(1)}

// NewScene makes a scene of a function of the caller's, photoelectrons per
// window pixel area and ps at (x, y) window px and t ps. It must not be
// negative.
func NewScene(name string, light func(x, y, t float64) float64, facts ...Fact) Scene {
	return Scene{Name: name, Facts: facts, gain: 1, parts: []part{
		func(t float64) (func(x, y float64) float64, box) {
			return func(x, y float64) float64 { return light(x, y, t) }, everywhere
		}}}
}

// Light returns the scene at (x, y), window px, and t, ps: photoelectrons per
// window pixel area and ps as the streak arm counts them with the code open.
func (c Scene) Light(x, y, t float64) float64 {
	var sum float64
	for _, p := range c.parts {
		if f, b := p(t); f != nil && b.holds(x, y) {
			sum += f(x, y)
		}
	}
	return c.gain * sum
}

// Scaled returns the scene with all light multiplied by k.
func (c Scene) Scaled(k float64) Scene {
	c.gain *= k
	return c
}

// with returns the scene with further parts, in its own units of light.
func (c Scene) with(p ...part) Scene {
	c.parts = append(append([]part(nil), c.parts...), p...)
	return c
}

// Fact returns a known number by name.
func (c Scene) Fact(name string) (float64, bool) {
	for _, f := range c.Facts {
		if f.Name == name {
			return f.Value, true
		}
	}
	return 0, false
}

// span2 is a rectangle of cells, half open.
type span2 struct{ x0, y0, x1, y1 int }

// sample adds the scene at time t, times weight, to the cells of step, which
// must be dark, and returns the rectangle of cells it touched.
func (c Scene) sample(step plane, t, weight float64) span2 {
	lit := span2{step.cols, step.rows, 0, 0}
	for _, p := range c.parts {
		f, b := p(t)
		if f == nil {
			continue
		}
		x0, x1 := cells(b.x0, b.x1, step.x0, step.cols)
		y0, y1 := cells(b.y0, b.y1, step.y0, step.rows)
		if x0 >= x1 || y0 >= y1 {
			continue
		}
		lit = span2{min(lit.x0, x0), min(lit.y0, y0), max(lit.x1, x1), max(lit.y1, y1)}
		k := c.gain * weight
		for r := y0; r < y1; r++ {
			y := step.y(r)
			row := step.pe[r*step.cols : (r+1)*step.cols]
			for q := x0; q < x1; q++ {
				row[q] += k * f(step.x(q), y)
			}
		}
	}
	return lit
}

// cells returns the cells 0..n-1 whose centres lie between a and b, px.
func cells(a, b, origin float64, n int) (lo, hi int) {
	first := (a - origin + 0.5) * sub
	last := (b - origin + 0.5) * sub
	return int(min(max(math.Floor(first), 0), float64(n))), int(max(min(math.Ceil(last), float64(n)), 0))
}

// stage is what a scene is set up in: the window and the open gate.
type stage struct {
	w, h     float64 // px
	from, to float64 // ps
	rng      *rand.Rand
}

func (g stage) span() float64 { return g.to - g.from }

// near returns v moved at random by up to part of it either way.
func (g stage) near(v, part float64) float64 { return v * (1 + part*(2*g.rng.Float64()-1)) }

// scenes lists the scenes by name.
var scenes = []struct {
	name string
	make func(stage) Scene
}{
	{"basin", basin}, {"glow", glow}, {"ripple", ripple}, {"fork", fork}, {"front", front}, {"flash", flash},
}

// Scenes returns the names of the ready-made scenes.
func Scenes() []string {
	names := make([]string, len(scenes))
	for i, s := range scenes {
		names[i] = s.name
	}
	return names
}

// Scene sets up a ready-made scene for this station. The seed varies its
// numbers by some percent; Options.Peak sets its light.
func (s *Station) Scene(name string, seed uint64) (Scene, error) {
	from, to := s.Gate()
	for i, c := range scenes {
		if c.name != name {
			continue
		}
		g := stage{w: float64(s.o.W), h: float64(s.o.H), from: from, to: to,
			rng: rand.New(rand.NewPCG(seed, streamScene<<8+uint64(i)))}
		made := c.make(g)
		made.Name, made.gain = name, 1
		return made.Scaled(s.o.Peak / s.brightest(made)), nil
	}
	return Scene{}, fmt.Errorf("no scene %q: there are %s", name, strings.Join(Scenes(), ", "))
}

// brightest returns the light of the brightest voxel, photoelectrons: the
// voxel brightest along its middle, integrated.
func (s *Station) brightest(c Scene) float64 {
	edges := s.Edges()
	var best, from, to float64
	var at int
	centre := make([]float64, s.o.H*s.o.W)
	for k := range s.o.T {
		clear(centre)
		dt := (edges[k+1] - edges[k]) / sub
		for j := range sub {
			c.centres(centre, s.o.W, s.o.H, edges[k]+(float64(j)+0.5)*dt)
		}
		for i, v := range centre {
			if v *= dt; v > best {
				best, at, from, to = v, i, edges[k], edges[k+1]
			}
		}
	}
	if best == 0 {
		panic(ErrDark)
	}
	return c.voxel(at%s.o.W, at/s.o.W, from, to, 2)
}

// centres adds the scene at the centres of the window's pixels to dst.
func (c Scene) centres(dst []float64, w, h int, t float64) {
	for _, p := range c.parts {
		f, b := p(t)
		if f == nil {
			continue
		}
		x0, x1 := pixels(b.x0, b.x1, w)
		y0, y1 := pixels(b.y0, b.y1, h)
		for y := y0; y < y1; y++ {
			for x := x0; x < x1; x++ {
				dst[y*w+x] += c.gain * f(float64(x), float64(y))
			}
		}
	}
}

// ErrDark is the panic value for a ready-made scene without light.
const ErrDark = "rig: scene without light"
