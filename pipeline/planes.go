package pipeline

import (
	"fmt"
	"math"

	"unsheard/pipeline/calib"
	"unsheard/pipeline/frame"
	"unsheard/pipeline/measure"
	"unsheard/pipeline/optics"
)

// plane is one arm's corrected data over the part of its sensor that the model
// speaks of.
type plane struct {
	x, y, w, h int
	pe         []float32
	readVar    []float32 // photoelectrons² without light, not positive: masked
	slope      []float32 // variance per photoelectron
	vari       []float32 // readVar + slope·max(pe, 0)
	lit        int
	saturated  float64 // saturated over lit pixels of the whole frame
}

// correct turns a raw frame into photoelectrons and checks that it fits.
func correct(a *calib.Arm, name, path string, f *frame.Frame) (*calib.Corrected, error) {
	if f.W != a.W || f.H != a.H {
		return nil, fmt.Errorf("%w: %s frame %q is %d×%d pixels, the bundle was made for %d×%d: check the camera's region and binning, or recalibrate",
			ErrShape, name, path, f.W, f.H, a.W, a.H)
	}
	c, err := a.Correct(f)
	if err != nil {
		return nil, fmt.Errorf("correct %s frame %q: %w", name, path, err)
	}
	return c, nil
}

// streak cuts the streak plane out of a corrected frame.
func (s *station) streak(c *calib.Corrected) *plane {
	rows, cols := s.model.StreakShape()
	return cut(c, s.x0, s.y0, cols, rows, s.n)
}

// reference cuts the reference plane out of a corrected frame.
func (s *station) reference(c *calib.Corrected) *plane {
	r := s.model.Geometry().View.Rect
	return cut(c, r.X*s.n, r.Y*s.n, r.W, r.H, s.n)
}

func cut(c *calib.Corrected, x0, y0, cols, rows, n int) *plane {
	px := cols * rows
	p := &plane{x: x0, y: y0, w: cols, h: rows, saturated: c.SaturatedShare,
		pe: make([]float32, px), readVar: make([]float32, px), slope: make([]float32, px), vari: make([]float32, px)}
	optics.Bin(p.pe, p.readVar, c.PE, c.ReadVar, c.W, x0, y0, n, cols)
	optics.Bin(p.slope, p.vari, c.Slope, c.ReadVar, c.W, x0, y0, n, cols)
	for j, v := range p.readVar {
		if !(v > 0) {
			p.vari[j] = -1
			continue
		}
		p.slope[j] /= float32(n * n) // a sum over the block so far
		p.vari[j] = v + p.slope[j]*max(p.pe[j], 0)
		if float64(p.pe[j]) > litSigmas*math.Sqrt(float64(v)) {
			p.lit++
		}
	}
	return p
}

// litSigmas is how far above the read noise a pixel counts as lit: at five
// deviations a dark megapixel has 0.3 lit pixels by chance (normal tail 2.9e-7).
const litSigmas = 5

// arm sums up what is known of a plane after the fit.
func (p *plane) arm(name string, model []float32, misfit float64) measure.Arm {
	a := measure.Arm{Name: name, Lit: p.lit, SaturatedShare: p.saturated, Misfit: misfit}
	var light, vari float64
	for j, v := range p.vari {
		if !(v > 0) {
			light += float64(model[j]) // what a masked pixel must have seen
			continue
		}
		a.Usable++
		light += float64(p.pe[j])
		vari += float64(v)
	}
	a.Light, a.LightSigma = light, math.Sqrt(vari)
	return a
}

// expected returns the light that the streak arm must count if the reference
// frame is right: the reference image sampled at every window pixel, divided by
// the ratio, times the code. sigma is one deviation, of the counting and of the
// ratio.
func (s *station) expected(c *calib.Corrected) (light, sigma float64) {
	b := s.bundle
	h := b.Registration
	var vari float64
	for y := range b.Window.H {
		for x := range b.Window.W {
			fx, fy := float64(x), float64(y)
			d := h[6]*fx + h[7]*fy + h[8]
			u, v := (h[0]*fx+h[1]*fy+h[2])/d, (h[3]*fx+h[4]*fy+h[5])/d
			// Jacobian determinant of the homography: reference pixels
			// per window pixel.
			ux, uy := (h[0]-u*h[6])/d, (h[1]-u*h[7])/d
			vx, vy := (h[3]-v*h[6])/d, (h[4]-v*h[7])/d
			jac := math.Abs(ux*vy - uy*vx)
			pe, rv, ok := sample(c, u, v)
			if !ok {
				continue
			}
			t := float64(b.Code[y*b.Window.W+x]) * jac / b.Ratio.Value
			light += t * pe
			vari += t * t * (math.Max(pe, 0) + rv)
		}
	}
	return light, math.Hypot(math.Sqrt(vari), light*b.Ratio.Sigma/b.Ratio.Value)
}

// sample interpolates a corrected frame at (u, v) between its four neighbours,
// leaving masked ones out; rv is their mean read variance. ok is false outside
// the frame or where all four are masked.
func sample(c *calib.Corrected, u, v float64) (pe, rv float64, ok bool) {
	x0, y0 := int(math.Floor(u)), int(math.Floor(v))
	var sum float64
	for b := range 2 {
		for a := range 2 {
			x, y := x0+a, y0+b
			if x < 0 || y < 0 || x >= c.W || y >= c.H || !(c.ReadVar[y*c.W+x] > 0) {
				continue
			}
			w := (1 - math.Abs(u-float64(x))) * (1 - math.Abs(v-float64(y)))
			sum += w
			pe += w * float64(c.PE[y*c.W+x])
			rv += w * float64(c.ReadVar[y*c.W+x])
		}
	}
	if sum <= 1e-6 {
		return 0, 0, false
	}
	return pe / sum, rv / sum, true
}
