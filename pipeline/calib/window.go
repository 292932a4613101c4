package calib

import (
	"fmt"
	"math"
)

// minWindow is the smallest side of a window, px: under it neither the blur
// nor the registration can be found.
const minWindow = 8

// Limits by which open frames are judged.
const (
	litInside  = 0.97 // part of a window that must be lit
	darkSigma  = 8    // noises by which the plateau must stand out
	litOutside = 0.02 // light outside, relative to the window's pixels, that is warned about
)

// findWindow finds the rectangle in which the open frames are lit: the pixels
// above half of the plateau near each side. A step blurred symmetrically
// passes half its height where it stands, whatever the blur.
func findWindow(open image) (Window, float64, error) {
	level := plateau(open)
	if !(level > darkSigma*open.noise()) {
		return Window{}, 0, fmt.Errorf("the open frames are dark: check that the light was on and the sweep off")
	}
	lit := func(x, y int) bool {
		i := y*open.w + x
		return open.ok[i] && open.v[i] > level/2
	}
	var w Window
	w.Y, w.H = run(counts(open.h, open.w, func(y, x int) bool { return lit(x, y) }))
	w.X, w.W = run(counts(open.w, w.H, func(x, y int) bool { return lit(x, w.Y+y) }))
	for range 2 {
		if w.W >= minWindow && w.H >= minWindow {
			w = refine(open, w, level)
		}
	}
	if w.W < minWindow || w.H < minWindow {
		return w, 0, fmt.Errorf("the lit part of the open frames is %d×%d px, expected at least %d×%d: check the light, or set [window] by hand", w.W, w.H, minWindow, minWindow)
	}
	inside, outside, good := 0, 0, 0
	for y := range open.h {
		for x := range open.w {
			in := x >= w.X && x < w.X+w.W && y >= w.Y && y < w.Y+w.H
			if in && open.ok[y*open.w+x] {
				good++
			}
			if lit(x, y) {
				if in {
					inside++
				} else {
					outside++
				}
			}
		}
	}
	if float64(inside) < litInside*float64(good) {
		return w, 0, fmt.Errorf("the lit part of the open frames is no rectangle: only %.0f %% of %d×%d px at (%d, %d) are lit: check that the code is out and the sweep off, or set [window] by hand",
			100*float64(inside)/float64(good), w.W, w.H, w.X, w.Y)
	}
	if w.W == open.w && w.H == open.h {
		return w, 0, fmt.Errorf("the open frames are lit all over the sensor: the code's window must end inside it; check that they come from the streak arm with the sweep off, or set [window] by hand")
	}
	return w, float64(outside) / float64(good), nil
}

// plateau is the brightness of the lit part: the median of the pixels above
// half of the bright end.
func plateau(im image) float64 {
	var v []float64
	for i, x := range im.v {
		if im.ok[i] {
			v = append(v, x)
		}
	}
	top := quantile(v, 0.995)
	i := 0
	for i < len(v) && v[i] <= top/2 {
		i++
	}
	return median(v[i:])
}

// noise is the rms standard deviation of the good pixels.
func (im image) noise() float64 {
	var s float64
	n := 0
	for i, ok := range im.ok {
		if ok {
			s += im.vari[i]
			n++
		}
	}
	return math.Sqrt(s / float64(max(n, 1)))
}

// Overhang: a line outside the window is lit if a fifth of its pixels reach a
// quarter of the bright end inside.
const (
	overhangMost  = 3 // px
	overhangShare = 0.2
	overhangLevel = 0.25
)

// overhang is how far the light of frames with the sweep off reaches beyond
// the window, px: the count of lit lines on the worst side. Frames of the
// other arm, or with the sweep on, hang over.
func overhang(im image, w Window) int {
	in := im.crop(w)
	var v []float64
	for i, ok := range in.ok {
		if ok {
			v = append(v, in.v[i])
		}
	}
	if len(v) == 0 {
		return 0
	}
	limit := overhangLevel * quantile(v, 0.9)
	lit := func(x, y int) bool { return im.ok[y*im.w+x] && im.v[y*im.w+x] > limit }
	rows := counts(im.h, w.W, func(y, x int) bool { return lit(w.X+x, y) })
	cols := counts(im.w, w.H, func(x, y int) bool { return lit(x, w.Y+y) })
	reach := func(c []int, n, from, step int) (k int) {
		for i := from; i >= 0 && i < len(c) && float64(c[i]) >= overhangShare*float64(n); i += step {
			k++
		}
		return k
	}
	return max(reach(rows, w.W, w.Y-1, -1), reach(rows, w.W, w.Y+w.H, 1), reach(cols, w.H, w.X-1, -1), reach(cols, w.H, w.X+w.W, 1))
}

// counts returns for each of n lines how many of its m pixels are lit.
func counts(n, m int, lit func(i, j int) bool) []int {
	c := make([]int, n)
	for i := range c {
		for j := range m {
			if lit(i, j) {
				c[i]++
			}
		}
	}
	return c
}

// run returns the longest run of lines with at least half the largest count.
func run(c []int) (from, n int) {
	top := 0
	for _, v := range c {
		top = max(top, v)
	}
	start := -1
	for i := 0; i <= len(c); i++ {
		on := i < len(c) && top > 0 && 2*c[i] >= top
		if on && start < 0 {
			start = i
		}
		if !on && start >= 0 {
			if i-start > n {
				from, n = start, i-start
			}
			start = -1
		}
	}
	return from, n
}

// refine moves each side to where the profile across it passes half of the
// plateau just inside.
func refine(open image, w Window, level float64) Window {
	x0, x1 := side(across(open, w, true), w.X, w.X+w.W, level)
	y0, y1 := side(across(open, w, false), w.Y, w.Y+w.H, level)
	return Window{x0, y0, x1 - x0, y1 - y0}
}

// across is the median across the window's other direction.
func across(im image, w Window, alongX bool) []float64 {
	n, a, b := im.h, w.X, w.X+w.W
	if alongX {
		n, a, b = im.w, w.Y, w.Y+w.H
	}
	p := make([]float64, n)
	buf := make([]float64, 0, b-a)
	for i := range p {
		buf = buf[:0]
		for j := a; j < b; j++ {
			k := i*im.w + j
			if alongX {
				k = j*im.w + i
			}
			if im.ok[k] {
				buf = append(buf, im.v[k])
			}
		}
		if p[i] = median(buf); !finite(p[i]) {
			p[i] = 0
		}
	}
	return p
}

func side(p []float64, from, to int, level float64) (int, int) {
	mid := (from + to) / 2
	near := func(a, b int) float64 { // plateau of the profile inside a side
		a, b = max(a, 0), min(b, len(p))
		if v := median(append([]float64(nil), p[a:b]...)); v > level/4 {
			return v
		}
		return level
	}
	l, r := near(from+2, min(from+9, mid+1)), near(max(to-9, mid), to-2)
	for from = max(0, from-4); from < mid && p[from] < l/2; {
		from++
	}
	for to = min(len(p), to+4); to > mid+1 && p[to-1] < r/2; {
		to--
	}
	return from, to
}
