package rig

import (
	"fmt"
	"math"
)

// blob returns a Gaussian of height a at (x, y), px, with its box.
func blob(x, y, sx, sy, a float64) (func(x, y float64) float64, box) {
	kx, ky := 1/(2*sx*sx), 1/(2*sy*sy)
	light := func(u, v float64) float64 {
		u, v = u-x, v-y
		return a * math.Exp(-u*u*kx-v*v*ky)
	}
	return light, box{x - tails*sx, y - tails*sy, x + tails*sx, y + tails*sy}
}

// basin is a packet of light that glides across a harbour basin, meets the
// quay and comes back: the packet and its mirror image behind the quay.
func basin(g stage) Scene {
	x0, wall, y := g.near(0.15, 0.2)*g.w, g.near(0.8, 0.05)*g.w, g.near(0.5, 0.2)*g.h
	speed := (wall - x0) / (g.near(0.58, 0.08) * g.span())
	sx, sy, back := 0.04*g.w, 0.055*g.h, 0.75
	soft := 1 / (0.5 * math.Sqrt2) // the quay's edge is half a pixel soft
	p := func(t float64) (func(x, y float64) float64, box) {
		d := speed * (t - g.from)
		out, b := blob(x0+d, y, sx, sy, 1)
		in, c := blob(2*wall-x0-d, y, sx, sy, back)
		return func(x, y float64) float64 {
			return (out(x, y) + in(x, y)) * math.Erfc((x-wall)*soft) / 2
		}, box{min(b.x0, c.x0), b.y0, wall + tails*0.5, b.y1}
	}
	return Scene{parts: []part{p}, Facts: []Fact{
		{"speed", speed, "px/ps"}, {"start_x", x0, "px"}, {"y", y, "px"}, {"start_time", g.from, "ps"},
		{"wall_x", wall, "px"}, {"wall_time", g.from + (wall-x0)/speed, "ps"}, {"reflected", back, "1"},
		{"sigma_x", sx, "px"}, {"sigma_y", sy, "px"}}}
}

// glow is a stand of reeds that light up one after the other and fade:
// (exp(-u/decay) - exp(-u/rise)), u the time since each began.
func glow(g stage) Scene {
	var c Scene
	for i, r := range [][4]float64{ // x, y, start, decay, as parts of the stage
		{0.2, 0.35, 0.08, 0.06}, {0.36, 0.6, 0.16, 0.09}, {0.52, 0.4, 0.12, 0.13}, {0.68, 0.65, 0.24, 0.1}, {0.84, 0.45, 0.3, 0.11}} {
		x, y := g.near(r[0], 0.04)*g.w, g.near(r[1], 0.06)*g.h
		start, decay := g.from+g.near(r[2], 0.2)*g.span(), g.near(r[3], 0.1)*g.span()
		rise, sx, sy, a := 0.02*g.span(), max(0.022*g.w, 1), 0.09*g.h, g.near(1, 0.15)
		c.parts = append(c.parts, func(t float64) (func(x, y float64) float64, box) {
			u := t - start
			if u <= 0 {
				return nil, box{}
			}
			return blob(x, y, sx, sy, a*(math.Exp(-u/decay)-math.Exp(-u/rise)))
		})
		for _, f := range []Fact{{"decay", decay, "ps"}, {"rise", rise, "ps"}, {"start_time", start, "ps"}, {"x", x, "px"}, {"y", y, "px"}} {
			f.Name = fmt.Sprintf("reed%d_%s", i+1, f.Name)
			c.Facts = append(c.Facts, f)
		}
	}
	return c
}

// ripple is a ring that spreads from a dropped stone; its light per length of
// crest falls as the crest grows.
func ripple(g stage) Scene {
	x, y := g.near(0.5, 0.06)*g.w, g.near(0.5, 0.06)*g.h
	side := min(g.w, g.h)
	r0, speed, s := 0.08*side, g.near(0.32, 0.06)*side/g.span(), 0.032*side
	p := func(t float64) (func(x, y float64) float64, box) {
		r := r0 + speed*(t-g.from)
		if r <= 0 {
			return nil, box{}
		}
		k, e := 1/(2*s*s), r+tails*s
		return func(u, v float64) float64 {
			d := math.Hypot(u-x, v-y) - r
			return r0 / r * math.Exp(-d*d*k)
		}, box{x - e, y - e, x + e, y + e}
	}
	return Scene{parts: []part{p}, Facts: []Fact{{"speed", speed, "px/ps"}, {"x", x, "px"}, {"y", y, "px"},
		{"start_radius", r0, "px"}, {"start_time", g.from, "ps"}, {"sigma", s, "px"}}}
}

// fork is a packet that a splitter sends two ways.
func fork(g stage) Scene {
	x, y0, y1 := g.near(0.5, 0.08)*g.w, 0.14*g.h, g.near(0.4, 0.06)*g.h
	angle, left := g.near(38, 0.1)*math.Pi/180, g.near(0.55, 0.1)
	when := g.from + g.near(0.38, 0.06)*g.span()
	speed := (y1 - y0) / (when - g.from)
	s := 0.04 * min(g.w, g.h)
	way := func(side, share float64) part {
		return func(t float64) (func(x, y float64) float64, box) {
			d := speed * (t - when)
			if d < 0 {
				return blob(x, y1+d, s, s, share)
			}
			return blob(x+side*d*math.Sin(angle), y1+d*math.Cos(angle), s, s, share)
		}
	}
	return Scene{parts: []part{way(-1, left), way(1, 1-left)}, Facts: []Fact{{"speed", speed, "px/ps"},
		{"angle", angle * 180 / math.Pi, "deg"}, {"left_share", left, "1"}, {"split_time", when, "ps"},
		{"split_x", x, "px"}, {"split_y", y1, "px"}, {"sigma", s, "px"}}}
}

// front is a straight front of light that sweeps across a round opening.
func front(g stage) Scene {
	x, y, side := 0.5*(g.w-1), 0.5*(g.h-1), min(g.w, g.h)
	turn := g.near(25, 0.6) * math.Pi / 180
	sin, cos := math.Sincos(turn)
	speed, s, open := g.near(0.8, 0.06)*side/g.span(), 0.035*side, 0.36*side
	mid := (g.from + g.to) / 2
	p := func(t float64) (func(x, y float64) float64, box) {
		d, k, edge := speed*(t-mid), 1/(2*s*s), 1/(1.0*math.Sqrt2)
		e := open + tails
		return func(u, v float64) float64 {
			u, v = u-x, v-y
			a := u*cos + v*sin - d
			return math.Exp(-a*a*k) * math.Erfc((math.Hypot(u, v)-open)*edge) / 2
		}, box{x - e, y - e, x + e, y + e}
	}
	return Scene{parts: []part{p}, Facts: []Fact{{"speed", speed, "px/ps"}, {"angle", turn * 180 / math.Pi, "deg"},
		{"middle_time", mid, "ps"}, {"sigma", s, "px"}, {"opening_radius", open, "px"}}}
}

// flash is a lamp at rest that flashes once, Gaussian in space and time.
func flash(g stage) Scene {
	x, y := g.near(0.5, 0.1)*g.w, g.near(0.5, 0.1)*g.h
	s, fwhm := 0.07*min(g.w, g.h), g.near(0.2, 0.15)*g.span()
	when := g.from + g.near(0.5, 0.1)*g.span()
	k := 4 * math.Ln2 / (fwhm * fwhm)
	p := func(t float64) (func(x, y float64) float64, box) {
		u := t - when
		return blob(x, y, s, s, math.Exp(-u*u*k))
	}
	return Scene{parts: []part{p}, Facts: []Fact{{"fwhm", fwhm, "ps"}, {"peak_time", when, "ps"},
		{"x", x, "px"}, {"y", y, "px"}, {"sigma", s, "px"}}}
}
