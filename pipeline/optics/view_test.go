package optics

import (
	"math"
	"testing"
)

// inverse solves hom(p) = (u, v) by Newton's method from the middle of the
// window, with derivatives by differences; jac is |∂p/∂(u,v)|.
func inverse(h [9]float64, u, v, x, y float64) (px, py, jac float64) {
	const d = 1e-4
	for range 50 {
		fx, fy, _ := project(h, x, y)
		ax, ay, _ := project(h, x+d, y)
		bx, by, _ := project(h, x, y+d)
		a, b, c, e := (ax-fx)/d, (bx-fx)/d, (ay-fy)/d, (by-fy)/d
		det := a*e - b*c
		x, y = x+(e*(u-fx)-b*(v-fy))/det, y+(a*(v-fy)-c*(u-fx))/det
		jac = 1 / math.Abs(det)
	}
	return x, y, jac
}

// Six-point cubic convolution is exact for cubics, so where it does not reach
// out of the window (5) must give J·f(p) for a polynomial f, with p and J found
// another way.
func TestViewOfPolynomials(t *testing.T) {
	const W, H = 22, 19
	f := func(x, y float64) float64 {
		return 3 + .3*x - .2*y + .02*x*y + .01*x*x - .005*y*y + 1e-3*x*x*x - 5e-4*x*y*y
	}
	for _, h := range [][9]float64{turned(0, 1, 4, 3), turned(12, 1.3, 9, 2), turned(-150, 1.1, 40, 38)} {
		v := mustView(t, h, W, H, 64, 64, 2)
		src := make([]float32, W*H)
		for j := range src {
			src[j] = float32(f(float64(j%W), float64(j/W)))
		}
		dst := make([]float32, v.Rect.W*v.Rect.H)
		v.Apply(dst, src)
		n := 0
		for j, got := range dst {
			u, w := float64(v.Rect.X+j%v.Rect.W), float64(v.Rect.Y+j/v.Rect.W)
			x, y, jac := inverse(h, u, w, W/2, H/2)
			if !(x >= 2 && y >= 2 && x <= W-3 && y <= H-3) {
				continue
			}
			n++
			// float32 weights and sums of values up to 15: 36·6e-8·15, and
			// derivatives by differences good to 1e-4 of J.
			if want := jac * f(x, y); math.Abs(float64(got)-want) > 2e-4*(1+math.Abs(want)) {
				t.Fatalf("%v: sensor pixel %g, %g sees %g, want %g", h, u, w, got, want)
			}
		}
		if n < 100 {
			t.Errorf("%v: only %d pixels compared", h, n)
		}
	}
}

// A sensor pixel r window pixels wide averages: of x² it sees p² plus r²−1
// over 12, the variance its box has beyond a window pixel's.
func TestViewAveragesLargePixels(t *testing.T) {
	const W, H = 60, 50
	for _, r := range []float64{1.2, 2, 3.3} {
		v := mustView(t, [9]float64{1 / r, 0, 2.3, 0, 1 / r, 1.7, 0, 0, 1}, W, H, 80, 80, 0)
		src := make([]float32, W*H)
		for j := range src {
			x := float64(j%W) - 30
			src[j] = float32(x * x)
		}
		dst := make([]float32, v.Rect.W*v.Rect.H)
		v.Apply(dst, src)
		u, w := int(30/r+2.3), int(25/r+1.7)
		x := (float64(u)-2.3)*r - 30
		want := r * r * (x*x + (r*r-1)/12)
		if got := float64(dst[(w-v.Rect.Y)*v.Rect.W+u-v.Rect.X]); math.Abs(got-want) > 1e-3*want {
			t.Errorf("r = %g: sees %g, want %g", r, got, want)
		}
	}
}
