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

// illumination is the even light inside the window, without the blur of its
// sides: a polynomial of total degree 0 to 4, chosen by the Bayesian
// information criterion (G. Schwarz, Ann. Stat. 6, 1978, 461–464) on the
// pixels further than margin from the sides, plus the smoothed rest where
// that is more than noise.
func illumination(open image, margin int) plane {
	w, h := open.w, open.h
	var in []int
	for y := min(margin, h/3); y < h-min(margin, h/3); y++ {
		for x := min(margin, w/3); x < w-min(margin, w/3); x++ {
			if i := y*w + x; open.ok[i] {
				in = append(in, i)
			}
		}
	}
	row := func(i, degree int) []float64 {
		return terms(2*float64(i%w)/float64(max(w-1, 1))-1, 2*float64(i/w)/float64(max(h-1, 1))-1, degree)
	}
	best, bestBIC := []float64(nil), math.Inf(1)
	bestDegree := 0
	for degree := 0; degree <= 4; degree++ {
		k := (degree + 1) * (degree + 2) / 2
		if len(in) < 10*k {
			break
		}
		eq := newNormal(k)
		for _, i := range in {
			eq.add(row(i, degree), open.v[i], 1/open.vari[i])
		}
		c, _, ok := eq.solve()
		if !ok {
			break
		}
		if bic := eq.chi2(c) + float64(k)*math.Log(float64(len(in))); bic < bestBIC {
			best, bestBIC, bestDegree = c, bic, degree
		}
	}
	l := newPlane(w, h)
	for i := range l.v {
		l.v[i] = dot(row(i, bestDegree), best)
	}
	addRest(l, open, in)
	return l
}

// unevenLeast is the unevenness beyond the polynomial, relative rms, that is
// taken for light rather than noise of the flat.
const unevenLeast = 0.004

func addRest(l plane, open image, in []int) {
	ok := make([]bool, len(l.v))
	rest := newPlane(l.w, l.h)
	var excess, level float64
	for _, i := range in {
		ok[i] = true
		rest.v[i] = open.v[i] - l.v[i]
		excess += rest.v[i]*rest.v[i] - open.vari[i]
		level += l.v[i]
	}
	n := float64(len(in))
	if level /= n; excess/n < (unevenLeast*level)*(unevenLeast*level) {
		return
	}
	soft, weight := smooth(rest, ok, 2)
	for i := range l.v {
		if weight.v[i] > 0.05 {
			l.v[i] += soft.v[i]
		}
	}
}

// terms lists the products of Legendre polynomials in x and y up to a total
// degree.
func terms(x, y float64, degree int) []float64 {
	n := degree + 1
	px, py, d := make([]float64, n), make([]float64, n), make([]float64, n)
	legendre(px, d, x)
	legendre(py, d, y)
	var t []float64
	for j := range n {
		for i := 0; i+j <= degree; i++ {
			t = append(t, px[i]*py[j])
		}
	}
	return t
}
