package calib

import (
	"math"
	"math/rand/v2"
	"testing"

	"unsheard/pipeline/optics"
)

// disc is a disc with a soft rim, so that its image can be integrated by
// points.
type disc struct{ x, y, r, a float64 }

func scene(rng *rand.Rand, n int, w, h float64, least float64) []disc {
	d := make([]disc, n)
	for i := range d {
		d[i] = disc{(rng.Float64()*1.2 - 0.1) * w, (rng.Float64()*1.2 - 0.1) * h, least + 3*rng.Float64(), 0.3 + rng.Float64()}
	}
	return d
}

func brightness(d []disc, x, y float64) float64 {
	s := 0.1
	for _, c := range d {
		if math.Hypot(x-c.x, y-c.y) < c.r {
			s = c.a
		}
	}
	return s
}

// TestModelBlur films discs by brute force (6×6 points a pixel, blurred by a
// Gaussian in the reference camera's own pixels) and looks for the blur with
// which package optics comes closest.
func TestModelBlur(t *testing.T) {
	const w, h, fine = 48, 40, 6
	rng := rand.New(rand.NewPCG(7, 1))
	d := scene(rng, 60, w, h, 1.2)
	x := make([]float32, w*h)
	for i := range x {
		var s float64
		for b := range fine {
			for a := range fine {
				s += brightness(d, float64(i%w)+(float64(a)+0.5)/fine-0.5, float64(i/w)+(float64(b)+0.5)/fine-0.5)
			}
		}
		x[i] = float32(s / (fine * fine))
	}
	for _, scale := range []float64{0.75, 1.06, 1.35} {
		for _, sigma := range []float64{0.5, 0.8, 1.2} {
			sin, cos := math.Sincos(0.06)
			H := [9]float64{scale * cos, -scale * sin, 7, scale * sin, scale * cos, 5, 0, 0, 1}
			rw, rh := int(scale*w)+16, int(scale*h)+16
			inv := inverse3(H)
			pad := int(4*sigma) + 1
			big := newPlane((rw+2*pad)*fine, (rh+2*pad)*fine)
			for i := range big.v {
				u := (float64(i%big.w)+0.5)/fine - 0.5 - float64(pad)
				v := (float64(i/big.w)+0.5)/fine - 0.5 - float64(pad)
				px, py := apply(inv, u, v)
				big.v[i] = brightness(d, px, py) / (scale * scale)
			}
			k := gaussKernel(sigma * fine)
			big = convolve(big, k, k, mirror)
			r, _ := shrinkBy(big, all(len(big.v)), fine)
			view, err := optics.NewView(H, w, h, rw, rh, 2)
			if err != nil {
				t.Fatal(err)
			}
			miss := func(s float64) float64 {
				m, err := optics.NewModel(optics.Geometry{T: 1, H: h, W: w, Step: 1, Code: ones(w * h), View: view, ReferenceBlur: optics.Blur{SigmaX: s, SigmaY: s}, Ratio: 1})
				if err != nil {
					t.Fatal(err)
				}
				rows, cols := m.ReferenceShape()
				sr, sc := m.StreakShape()
				e := make([]float32, rows*cols)
				m.Forward(make([]float32, sr*sc), e, x)
				var sum float64
				for i := range e {
					cu, cv := view.Rect.X+i%cols, view.Rect.Y+i/cols
					px, py := apply(inv, float64(cu), float64(cv))
					if px < 6 || py < 6 || px > w-7 || py > h-7 {
						continue
					}
					dd := float64(e[i]) - r.at(cu+pad, cv+pad)
					sum += dd * dd
				}
				return sum
			}
			best, c := minimise(miss, 0, sigma+0.3, 0.005)
			got := modelBlur(sigma, 1/scale)
			// The scene decides a little which blur is best; the blur of the
			// optics itself leaves two to nine times as much.
			if m, o := miss(got), miss(sigma); m > 1.25*c || m > 0.6*o {
				t.Errorf("scale %.2f, σ %.2f: blur %.3f leaves %.3g, the best, %.3f, %.3g, that of the optics %.3g", scale, sigma, got, m, best, c, o)
			}
		}
	}
}
