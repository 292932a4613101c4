package solve

import (
	"math"
	"math/rand/v2"
	"testing"

	"unsheard/pipeline/optics"
)

// This file makes shots in continuous time without the package's model: the
// sweep moves in quarters of a pixel, the scene is a formula that is sampled
// at every quarter frame and at 2×2 points per pixel, point spreads are plain
// Gaussian sums on a grid twice as fine, and both arms get Poisson and read noise.

const (
	sceneSeed = 41
	quarters  = 4 // sweep steps per pixel
	fine      = 2 // points per pixel and axis
)

// movie is the light at time t (frames, 0 = start of frame 0) and window
// position x, y, per pixel² and frame, peak about 1.
type movie func(t, x, y float64) float64

func gauss(d2, s float64) float64 { return math.Exp(-d2 / (2 * s * s)) }

func movies(t, h, w int) map[string]movie {
	T, H, W := float64(t), float64(h), float64(w)
	return map[string]movie{
		"packet": func(t, x, y float64) float64 {
			cx, cy := W*(.2+.6*t/T), H*(.35+.3*t/T)
			return gauss((x-cx)*(x-cx)/1.8+(y-cy)*(y-cy), W/16)
		},
		"decay": func(t, x, y float64) float64 {
			var s float64
			for j := range 6 {
				f := float64(j)
				cx, cy := W*(.25+.5*math.Mod(f*.37+.1, 1)), H*(.2+.6*math.Mod(f*.61+.2, 1))
				start, life := T*(.1+.08*f), T*(.08+.05*f)
				if t > start {
					s += math.Exp(-(t-start)/life) * gauss((x-cx)*(x-cx)+(y-cy)*(y-cy), W/28)
				}
			}
			return s
		},
		"ring": func(t, x, y float64) float64 {
			d := math.Hypot(x-W/2, y-H/2) - W*(.08+.25*t/T)
			return gauss(d*d, W/40) * (1 - .5*t/T)
		},
	}
}

// station is the truth about a simulated station.
type station struct {
	t, h, w     int
	code        []float32
	sigmaS      float64 // px
	sigmaR      float64
	ratio       float64
	read        float64
	h9          [9]float64
	pad, margin int
	beyond      int // px that the scene goes on outside the window
}

func newStation(t, h, w int) station {
	rng := rand.New(rand.NewPCG(sceneSeed, 9))
	s := station{t: t, h: h, w: w, sigmaS: .8, sigmaR: .9, ratio: 1.2, read: 3, pad: 4, margin: 4}
	s.code = make([]float32, h*w)
	for y := 0; y < h; y += 2 {
		for x := 0; x < w; x += 2 {
			c := float32(rng.IntN(2))
			for _, o := range [][2]int{{0, 0}, {0, 1}, {1, 0}, {1, 1}} {
				if y+o[0] < h && x+o[1] < w {
					s.code[(y+o[0])*w+x+o[1]] = c
				}
			}
		}
	}
	sn, cs := math.Sincos(2 * math.Pi / 180)
	s.h9 = [9]float64{.97 * cs, -.97 * sn, 7.3, .97 * sn, .97 * cs, 5.6, 0, 0, 1}
	return s
}

func (s station) model(tb testing.TB) *optics.Model {
	tb.Helper()
	v, err := optics.NewView(s.h9, s.w, s.h, s.w+16, s.h+16, s.margin)
	if err != nil {
		tb.Fatal(err)
	}
	m, err := optics.NewModel(optics.Geometry{T: s.t, H: s.h, W: s.w, Code: s.code,
		StreakBlur: optics.Blur{SigmaX: s.sigmaS, SigmaY: s.sigmaS}, StreakPad: s.pad,
		View: v, ReferenceBlur: optics.Blur{SigmaX: s.sigmaR, SigmaY: s.sigmaR}, Ratio: s.ratio})
	if err != nil {
		tb.Fatal(err)
	}
	return m
}

// shot films a movie of the given peak (photoelectrons per voxel); it returns
// the problem and the true cube.
func (s station) shot(tb testing.TB, f movie, peak float64, seed uint64) (Problem, []float32) {
	tb.Helper()
	m := s.model(tb)
	rows, cols := m.StreakShape()
	rr, rc := m.ReferenceShape()
	v := m.Geometry().View
	truth := make([]float32, s.t*s.h*s.w)
	fw, fh := s.w*fine, s.h*fine
	out := s.beyond * fine
	streak := newFinePlane(rows*quarters, cols*fine, quarters, fine)
	still := newFinePlane(fh+2*out, fw+2*out, fine, fine)
	for q := range s.t * quarters {
		for py := -out; py < fh+out; py++ {
			for px := -out; px < fw+out; px++ {
				x, y := (float64(px)+.5)/fine-.5, (float64(py)+.5)/fine-.5
				l := peak * f((float64(q)+.5)/quarters, x, y) / (fine * fine * quarters)
				still.pix[(py+out)*still.cols+px+out] += l
				if px < 0 || py < 0 || px >= fw || py >= fh {
					continue
				}
				j := py/fine*s.w + px/fine
				truth[q/quarters*s.h*s.w+j] += float32(l)
				// Centre of the quarter: −3/8 … 3/8 px about the frame's own
				// displacement; a fine point is half a pixel, two quarters.
				c := float64(s.code[j]) * l / 2
				row := (py*quarters/fine + q) + s.pad*quarters
				for o := range 2 {
					// (q − 1.5)/4 px: rows of the fine plane are quarters, and
					// the −1.5 is undone when it is sampled.
					streak.pix[(row+o)*streak.cols+px+s.pad*fine] += c
				}
			}
		}
	}
	rng := rand.New(rand.NewPCG(sceneSeed, seed))
	p := Problem{Model: m}
	// A quarter q lands (q−1.5)/4 px below its frame; rows are q-quarters
	// down, so the plane is read 1.5 quarters lower.
	p.Streak, p.StreakVar = measure(streak.sample(rows, cols, s.sigmaS, 1.5/quarters), s.read, rng)
	ref := make([]float64, rr*rc)
	inv := invertAffine(s.h9)
	jac := math.Abs(inv[0]*inv[4] - inv[1]*inv[3])
	still.blur(s.sigmaR / math.Sqrt(s.h9[0]*s.h9[4]-s.h9[1]*s.h9[3]))
	for j := range ref {
		// The sensor pixel by 4×4 points.
		for a := range 16 {
			u := float64(v.Rect.X+j%rc) + (float64(a%4)+.5)/4 - .5
			w := float64(v.Rect.Y+j/rc) + (float64(a/4)+.5)/4 - .5
			ref[j] += s.ratio * jac * still.at(inv[0]*u+inv[1]*w+inv[2]+float64(s.beyond), inv[3]*u+inv[4]*w+inv[5]+float64(s.beyond)) / 16
		}
	}
	p.Reference, p.ReferenceVar = measure(ref, s.read, rng)
	p.StreakNoise = &Noise{Read: constant(len(p.Streak), s.read*s.read)}
	p.ReferenceNoise = &Noise{Read: constant(len(p.Reference), s.read*s.read)}
	return p, truth
}

func constant(n int, v float64) []float32 {
	x := make([]float32, n)
	for j := range x {
		x[j] = float32(v)
	}
	return x
}

func invertAffine(h [9]float64) (a [9]float64) {
	d := h[0]*h[4] - h[1]*h[3]
	a[0], a[1], a[3], a[4] = h[4]/d, -h[1]/d, -h[3]/d, h[0]/d
	a[2], a[5] = -(a[0]*h[2] + a[1]*h[5]), -(a[3]*h[2] + a[4]*h[5])
	return a
}

// measure adds Poisson and read noise. The variance is the true one's plain
// estimate from the frame.
func measure(light []float64, read float64, rng *rand.Rand) (pe, vari []float32) {
	pe, vari = make([]float32, len(light)), make([]float32, len(light))
	for j, l := range light {
		v := poisson(l, rng) + read*rng.NormFloat64()
		pe[j], vari[j] = float32(v), float32(max(v, 0)+read*read)
	}
	return pe, vari
}

// poisson draws by multiplication (Knuth, TAOCP 2, 3.4.1) in chunks of 30,
// exact since Poisson variables add.
func poisson(l float64, rng *rand.Rand) float64 {
	n := 0.
	for l > 0 {
		part := min(l, 30)
		l -= part
		limit, p := math.Exp(-part), rng.Float64()
		for p > limit {
			n++
			p *= rng.Float64()
		}
	}
	return n
}

// finePlane is light on a grid of fy×fx points per pixel.
type finePlane struct {
	rows, cols, fy, fx int
	pix                []float64
}

func newFinePlane(rows, cols, fy, fx int) *finePlane {
	return &finePlane{rows: rows, cols: cols, fy: fy, fx: fx, pix: make([]float64, rows*cols)}
}

// blur convolves with a sampled Gaussian of sigma pixels.
func (p *finePlane) blur(sigma float64) {
	run := func(n, stride int, at int, f float64) {
		line := make([]float64, n)
		for j := range n {
			line[j] = p.pix[at+j*stride]
		}
		s := sigma * f
		reach := int(math.Ceil(5 * s))
		for j := range n {
			var sum, norm float64
			for o := -reach; o <= reach; o++ {
				g := gauss(float64(o*o), s)
				norm += g
				if j+o >= 0 && j+o < n {
					sum += g * line[j+o]
				}
			}
			p.pix[at+j*stride] = sum / norm
		}
	}
	for r := range p.rows {
		run(p.cols, 1, r*p.cols, float64(p.fx))
	}
	for c := range p.cols {
		run(p.rows, p.cols, c, float64(p.fy))
	}
}

// sample blurs and sums over pixels that lie down pixels lower.
func (p *finePlane) sample(rows, cols int, sigma, down float64) []float64 {
	p.blur(sigma)
	out := make([]float64, rows*cols)
	for r := range rows {
		for f := range p.fy {
			at := float64(r*p.fy+f) + down*float64(p.fy)
			lo := int(math.Floor(at))
			share := at - float64(lo)
			for c := range p.cols {
				for o, w := range []float64{1 - share, share} {
					if lo+o < p.rows {
						out[r*cols+c/p.fx] += w * p.pix[(lo+o)*p.cols+c]
					}
				}
			}
		}
	}
	return out
}

// at is the light per pixel² at a position, bilinear.
func (p *finePlane) at(x, y float64) float64 {
	x, y = (x+.5)*float64(p.fx)-.5, (y+.5)*float64(p.fy)-.5
	x0, y0 := int(math.Floor(x)), int(math.Floor(y))
	var s float64
	for a := range 2 {
		for b := range 2 {
			c, r := x0+a, y0+b
			if c < 0 || r < 0 || c >= p.cols || r >= p.rows {
				continue
			}
			s += (1 - math.Abs(x-float64(c))) * (1 - math.Abs(y-float64(r))) * p.pix[r*p.cols+c]
		}
	}
	return s * float64(p.fx*p.fy)
}

// psnr is against the true peak, dB.
func psnr(x, truth []float32) float64 {
	var mse, top float64
	for j := range x {
		d := float64(x[j] - truth[j])
		mse += d * d
		top = max(top, float64(truth[j]))
	}
	return 10 * math.Log10(top*top*float64(len(x))/mse)
}

func names() []string { return []string{"packet", "decay", "ring"} }
