package rig

import (
	"fmt"
	"math"
	"testing"
)

// lamp is a Gaussian flash: total pe, centre px, width px, time ps, length ps
// (rms).
func lamp(total, x, y, s, when, length float64) Scene {
	return NewScene("lamp", func(u, v, t float64) float64 {
		r2 := ((u-x)*(u-x) + (v-y)*(v-y)) / (s * s)
		q := (t - when) / length
		return total / (2 * math.Pi * s * s * length * math.Sqrt(2*math.Pi)) * math.Exp(-(r2+q*q)/2)
	})
}

// phi is the normal distribution function.
func phi(x float64) float64 { return math.Erfc(-x/math.Sqrt2) / 2 }

// TestFlux compares the light on both sensors with closed forms: a Gaussian
// behind each code element is a product of two normal probabilities.
func TestFlux(t *testing.T) {
	const total, x, y, width, when = 50000.0, 31.3, 29.8, 6.0, 12.0
	for _, c := range []struct {
		pitch, ox, oy, low, high float64
	}{{2, 0, 0, 0.02, 0.98}, {2.3, 0.7, -0.4, 0.02, 0.98}, {3, 0, 0, 0, 1}, {1, 0, 0, 0.1, 0.6}} {
		t.Run(fmt.Sprintf("pitch %g", c.pitch), func(t *testing.T) {
			s := station(t, func(o *Options) {
				o.Pitch, o.CodeX, o.CodeY, o.Low, o.High = c.pitch, c.ox, c.oy, c.low, c.high
			})
			streak, reference, _ := s.Expected(lamp(total, x, y, width, when, 1.5), None)
			var want float64
			for r := range s.pattern.rows {
				for q := range s.pattern.cols {
					px := func(i int, off float64) float64 { // element edge, clipped to the window, px
						return min(max(float64(i-spare)*c.pitch+off-0.5, -0.5), 63.5)
					}
					p := (phi((px(q+1, c.ox)-x)/width) - phi((px(q, c.ox)-x)/width)) *
						(phi((px(r+1, c.oy)-y)/width) - phi((px(r, c.oy)-y)/width))
					if s.pattern.open[r*s.pattern.cols+q] {
						want += total * p * c.high
					} else {
						want += total * p * c.low
					}
				}
			}
			// Taking the scene at cell centres leaves errors of second order at
			// code edges: 1/16/24/width² ≈ 1e-4; blurs are cut at 6σ (2e-9).
			near(t, "streak light", sum(streak), want, 2e-4*total)
			near(t, "reference light", sum(reference), s.o.Ratio*total, 2e-4*total)
		})
	}
}

// TestTwoQuadratures compares the light of a shot with that of the true cube,
// which is integrated by other rules.
func TestTwoQuadratures(t *testing.T) {
	s := station(t, nil)
	for _, name := range Scenes() {
		c := scene(t, s, name, 11)
		_, reference, truth := s.Expected(c, None)
		var cube float64
		for _, v := range truth.Cube(s.Edges()) {
			cube += float64(v)
		}
		near(t, name+": reference light over cube", sum(reference)/cube, s.o.Ratio, 5e-4*s.o.Ratio)
		near(t, name+": light curve over cube", truth.Summary().Total/cube, 1, 1e-3)
	}
}

// TestWidths: widths add in quadrature, and a pixel adds 1/12 (variance of a
// unit box).
func TestWidths(t *testing.T) {
	s := station(t, func(o *Options) {
		o.Streak.SigmaX, o.Streak.SigmaY, o.Reference.SigmaX, o.Reference.SigmaY = 0.7, 0.95, 0.8, 1.1
		o.View.Turn = 90 // exchanges the axes, keeps the view affine
	})
	const x, y, w = 30.4, 28.7, 1.9
	still := s.field(func(u, v float64) float64 {
		return 1000 * math.Exp(-((u-x)*(u-x)+(v-y)*(v-y))/(2*w*w))
	})
	streak, reference := s.views(still, nil)
	// Every cell is spread with its extent added (1/16/12 = 0.0052), which a
	// smooth scene sampled at cell centres does not need: that is the bound.
	const bound = 0.0055
	cx, cy, vx, vy := moments(streak, s.streak.w)
	near(t, "streak x", cx, 17+x, 1e-4)
	near(t, "streak y", cy, 13+y, 1e-4)
	near(t, "streak variance x", vx, w*w+0.7*0.7+1.0/12, bound)
	near(t, "streak variance y", vy, w*w+0.95*0.95+1.0/12, bound)
	cx, cy, vx, vy = moments(reference, s.reference.w)
	hx, hy := apply(s.Registration(), x, y)
	k := s.o.View.Scale * s.o.View.Scale
	near(t, "reference x", cx, hx, 1e-4)
	near(t, "reference y", cy, hy, 1e-4)
	near(t, "reference variance x", vx, k*w*w+0.8*0.8+1.0/12, bound*k)
	near(t, "reference variance y", vy, k*w*w+1.1*1.1+1.0/12, bound*k)
}

// TestDisplacement: a flash lands s(t) lower, spread by the sweep's speed.
func TestDisplacement(t *testing.T) {
	for _, nudge := range []float64{0, 0.37} {
		s := station(t, func(o *Options) { o.NudgeX, o.NudgeY = -nudge, nudge })
		open := make([]float64, len(s.code))
		for i := range open {
			open[i] = 1
		}
		const x, y, w, length = 30.4, 28.7, 1.9, 0.6
		for _, when := range []float64{3, 11.7, 21} {
			swept, _ := s.expose(lamp(1000, x, y, w, when, length), s.gate(), open)
			light := s.streak.blank()
			s.project(light, swept, 0, 1)
			cx, cy, vx, vy := moments(light, s.streak.w)
			// Mean of s over the flash: s + s″·length²/2.
			const h = 0.01
			bend := (s.Rate(when+h) - s.Rate(when-h)) / (2 * h)
			near(t, "x", cx, 17+x-nudge, 1e-4)
			near(t, "y", cy, 13+y+nudge+s.At(when)+bend*length*length/2, 1e-4)
			near(t, "variance x", vx, w*w+0.7*0.7+1.0/12, 0.0055)
			v := s.Rate(when) * length
			near(t, "variance y", vy, w*w+0.75*0.75+1.0/12+v*v, 0.0055)
		}
	}
}

// TestEven: rows that every moment of the sweep covers see the light of the
// whole gate.
func TestEven(t *testing.T) {
	s := station(t, nil)
	c := NewScene("even", func(x, y, t float64) float64 { return 40 })
	swept, _ := s.expose(c, s.gate(), onesLike(s.code))
	light := s.streak.blank()
	s.project(light, swept, 0, 1)
	from, to := s.Gate()
	for _, row := range []int{40, 50, 60} { // window row + s is inside 0..63 for all s
		near(t, "pixel in the plateau", light[(13+row)*s.streak.w+17+30], 40*(to-from), 1e-6*40*(to-from))
	}
	near(t, "all light", sum(light), 40*64*64*(to-from), 1e-6*40*64*64*(to-from))
}

func onesLike(v []float64) []float64 {
	one := make([]float64, len(v))
	for i := range one {
		one[i] = 1
	}
	return one
}

// TestSlowReference compares equations (2) and (3) with a plain sum on a grid
// twice as fine in place and four times in time, each moment displaced by
// s(t) itself, the code looked up point by point.
func TestSlowReference(t *testing.T) {
	s := station(t, func(o *Options) {
		o.H, o.W, o.T, o.Span, o.Pitch, o.CodeX = 9, 8, 4, 2.2, 1.625, 0.375 // edges on eighths of a pixel
		o.WindowX, o.WindowY, o.Margin = 7, 5, 6
		o.View.SensorW, o.View.SensorH, o.View.KeyX = 20, 22, 2e-3
	})
	c := NewScene("drift", func(x, y, t float64) float64 {
		dx, dy := x-2-1.1*t, y-6+0.7*t
		return 500 * math.Exp(-(dx*dx+dy*dy)/(2*1.6*1.6))
	})
	streak, reference, _ := s.Expected(c, None)
	wantS, wantR := slowModel(s, c)
	var top, worst float64
	for i, v := range wantS {
		top, worst = max(top, v), max(worst, math.Abs(v-streak[i]))
	}
	// The quarter-pixel grid is good to about h²/24 of the curvature at blur
	// scale, (1/16)/24/0.5 ≈ 0.5 %, and as much again along the sweep.
	near(t, "streak, worst pixel over brightest", worst/top, 0, 0.01)
	top, worst = 0, 0
	for i, v := range wantR {
		top, worst = max(top, v), max(worst, math.Abs(v-reference[i]))
	}
	near(t, "reference, worst pixel over brightest", worst/top, 0, 0.01)
}

func slowModel(s *Station, c Scene) (streak, reference []float64) {
	const n, m = 8, 16 // cells per pixel, moments per pixel of sweep
	streak, reference = s.streak.blank(), s.reference.blank()
	o := s.o
	deposit := func(dst []float64, w, h int, x, y, sx, sy, v float64) {
		var px [14]float64
		i0 := max(int(x-6), 0)
		for i := range px {
			c := float64(i0+i) - x
			px[i] = phi((c+0.5)/sx) - phi((c-0.5)/sx)
		}
		for j := max(int(y-6), 0); j < min(int(y+8), h); j++ {
			c := float64(j) - y
			py := v * (phi((c+0.5)/sy) - phi((c-0.5)/sy))
			for i := i0; i < min(i0+len(px), w); i++ {
				dst[j*w+i] += py * px[i-i0]
			}
		}
	}
	for k := range o.T * m {
		a, b := s.Inverse(-0.5+float64(k)/m), s.Inverse(-0.5+float64(k+1)/m)
		at := (a + b) / 2
		for r := range o.H * n {
			y := (float64(r)+0.5)/n - 0.5
			for q := range o.W * n {
				x := (float64(q)+0.5)/n - 0.5
				v := c.Light(x, y, at) * (b - a) / (n * n)
				ex := int(math.Floor((x+0.5-o.CodeX)/o.Pitch)) + spare
				ey := int(math.Floor((y+0.5-o.CodeY)/o.Pitch)) + spare
				trans := o.Low
				if s.pattern.open[ey*s.pattern.cols+ex] {
					trans = o.High
				}
				deposit(streak, s.streak.w, s.streak.h, float64(o.WindowX)+x, float64(o.WindowY)+y+s.At(at),
					o.Streak.SigmaX, o.Streak.SigmaY, v*trans)
				hx, hy := apply(s.Registration(), x, y)
				deposit(reference, s.reference.w, s.reference.h, hx, hy,
					o.Reference.SigmaX, o.Reference.SigmaY, v*o.Ratio)
			}
		}
	}
	return streak, reference
}
