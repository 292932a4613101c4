package calib

import (
	"fmt"
	"math"
)

// moved is one frame of the sweep calibration: light of a short moment,
// displaced.
type moved struct {
	ps    float64 // NaN for the still frames
	im    image
	shift float64 // px, relative to the first
	sigma float64 // px
	alpha float64 // brightness relative to the first
}

// Limits of the sweep calibration.
const (
	spotLeast  = 8.0 // brightest pixel of a delay, standard deviations of the noise
	shiftSide  = 160 // side of the reduced images of the coarse shift, px
	turnedPart = 0.5 // shift across over shift along from which the direction is wrong
	columns    = 96  // most columns in the fine fit
	knotGap    = 1.0 // distance of the knots of the common profile, px
	rounds     = 40
)

// coarseShift finds by how much b lies displaced against a, to about a pixel:
// the peak of the cross-correlation of the light above the noise.
func coarseShift(a, b image) (dx, dy float64) {
	f := 1
	for max(a.w, a.h)/f > shiftSide {
		f++
	}
	pa, pb := above(a, f), above(b, f)
	fw, fh := fastLength(2*pa.w), fastLength(2*pa.h)
	t := newFFT2(fw, fh)
	u, v := make([]complex128, fw*fh), make([]complex128, fw*fh)
	for y := range pa.h {
		for x := range pa.w {
			u[y*fw+x], v[y*fw+x] = complex(pa.at(x, y), 0), complex(pb.at(x, y), 0)
		}
	}
	t.forward(u)
	t.forward(v)
	for i := range u {
		u[i] = conj(u[i]) * v[i]
	}
	t.inverse(u)
	best := 0
	for i := range u {
		if real(u[i]) > real(u[best]) {
			best = i
		}
	}
	at := func(x, y int) float64 { return real(u[(y+fh)%fh*fw+(x+fw)%fw]) }
	x, y := best%fw, best/fw
	px, py := vertex(at(x-1, y), at(x, y), at(x+1, y)), vertex(at(x, y-1), at(x, y), at(x, y+1))
	if x > fw/2 {
		x -= fw
	}
	if y > fh/2 {
		y -= fh
	}
	return float64(f) * (float64(x) + px), float64(f) * (float64(y) + py)
}

// vertex is the place of the top of a parabola through three values.
func vertex(a, b, c float64) float64 {
	if d := a - 2*b + c; d < 0 {
		return max(-0.5, min(0.5, (a-c)/(2*d)))
	}
	return 0
}

// above is the light more than 4 standard deviations above the noise, its
// square root so that no single spot decides, in blocks of f pixels.
func above(a image, f int) plane {
	p := newPlane(a.w, a.h)
	for i, v := range a.v {
		if a.ok[i] && v > 4*math.Sqrt(a.vari[i]) {
			p.v[i] = math.Sqrt(v)
		}
	}
	q, _ := shrinkBy(p, all(len(p.v)), f)
	return q
}

// track finds the displacement of every frame relative to the first: coarse
// shifts from one to the next, then all together.
func track(frames []moved) error {
	for i := 1; i < len(frames); i++ {
		if math.IsNaN(frames[i].ps) {
			_, dy := coarseShift(frames[0].im, frames[i].im)
			frames[i].shift = dy
			continue
		}
		_, dy := coarseShift(frames[i-1].im, frames[i].im)
		frames[i].shift = frames[i-1].shift + dy
	}
	p := newProfile(frames)
	if len(p.cols) == 0 {
		return fmt.Errorf("no column shows light in every delay: use spots that stay on the sensor over the whole sweep")
	}
	return p.solve()
}

// profile is the common vertical profile of all frames in a set of columns:
// frame d shows α_d·F(y − s_d, x), F a cubic B-spline along y in every column.
type profile struct {
	frames []moved
	cols   []int
	from   float64 // y of the first knot, still coordinates
	n      int     // coefficients per column
	coef   [][]float64
}

func newProfile(frames []moved) *profile {
	p := &profile{frames: frames}
	p.cols = litColumns(frames)
	lo, hi := 0.0, 0.0
	for _, f := range frames {
		lo, hi = min(lo, -f.shift), max(hi, -f.shift)
	}
	p.from = math.Floor(lo) - 4
	p.n = int((float64(frames[0].im.h)+hi-p.from)/knotGap) + 10
	return p
}

// litColumns picks the brightest columns that show light in the frames.
func litColumns(frames []moved) (cols []int) {
	w, h := frames[0].im.w, frames[0].im.h
	score := make([]float64, w)
	for x := range w {
		for _, f := range frames {
			var s, v float64
			for y := range h {
				if i := y*w + x; f.im.ok[i] && f.im.v[i] > 4*math.Sqrt(f.im.vari[i]) {
					s += f.im.v[i]
					v += f.im.vari[i]
				}
			}
			if v > 0 {
				score[x] += s / math.Sqrt(v)
			}
		}
	}
	sorted := append([]float64(nil), score...)
	limit := 0.02 * quantile(sorted, 1)
	if w > columns {
		limit = max(limit, quantile(sorted, 1-columns/float64(w)))
	}
	for x, s := range score {
		if s > limit && s > 0 {
			cols = append(cols, x)
		}
	}
	return cols
}

// weights returns the B-spline index and weights of row y in a frame.
func (p *profile) weights(y int, shift float64) (k int, w, d [4]float64, ok bool) {
	u := (float64(y) - shift - p.from) / knotGap
	k = int(math.Floor(u))
	w, d = bspline(u - float64(k))
	return k, w, d, k >= 1 && k+3 < p.n
}

// solve alternates between the profile and the displacements.
func (p *profile) solve() error {
	for i := range p.frames {
		p.frames[i].alpha = 1
	}
	for range rounds {
		if err := p.shape(); err != nil {
			return err
		}
		move, err := p.displace()
		if err != nil {
			return err
		}
		if move < 1e-4 {
			break
		}
	}
	return nil
}

// ridge keeps coefficients without data at 0: relative to one full pixel.
const ridge = 1e-6

// shape finds F for the present displacements: one banded system, the same
// for every column, except where pixels are masked, which the present F
// fills.
func (p *profile) shape() error {
	band := newBanded(p.n)
	for _, f := range p.frames {
		for y := range f.im.h {
			if k, w, _, ok := p.weights(y, f.shift); ok {
				for i := range 4 {
					for j := range i + 1 {
						band.a[(k+i-1)*4+i-j] += f.alpha * f.alpha * w[i] * w[j]
					}
				}
			}
		}
	}
	for i := range p.n {
		band.a[i*4] += ridge
	}
	if !band.factor() {
		return fmt.Errorf("the common profile of the spots cannot be found")
	}
	old := p.coef
	p.coef = make([][]float64, len(p.cols))
	for c, x := range p.cols {
		b := make([]float64, p.n)
		for _, f := range p.frames {
			for y := range f.im.h {
				k, w, _, ok := p.weights(y, f.shift)
				if !ok {
					continue
				}
				i := y*f.im.w + x
				v := f.im.v[i]
				if !f.im.ok[i] {
					if v = 0; old != nil {
						for j := range 4 {
							v += f.alpha * w[j] * old[c][k-1+j]
						}
					}
				}
				for j := range 4 {
					b[k-1+j] += f.alpha * w[j] * v
				}
			}
		}
		band.solve(b)
		p.coef[c] = b
	}
	return nil
}

// displace moves every frame by one Gauss–Newton step against the profile,
// the first one stays. It returns the largest move.
func (p *profile) displace() (move float64, err error) {
	steps := make([]float64, len(p.frames))
	for d := range p.frames {
		f := &p.frames[d]
		eq := newNormal(2)
		for c, x := range p.cols {
			for y := range f.im.h {
				k, w, g, ok := p.weights(y, f.shift)
				i := y*f.im.w + x
				if !ok || !f.im.ok[i] {
					continue
				}
				var v, s float64
				for j := range 4 {
					v += w[j] * p.coef[c][k-1+j]
					s += g[j] * p.coef[c][k-1+j]
				}
				doubt := spotDoubt * v
				eq.add([]float64{-f.alpha * s / knotGap, v}, f.im.v[i]-f.alpha*v, 1/(f.im.vari[i]+doubt*doubt))
			}
		}
		s, inv, ok := eq.solve()
		if !ok || !(inv.At(0, 0) > 0) {
			return 0, fmt.Errorf("the displacement at %g ps cannot be found: its frames show no light that moves with the others", f.ps)
		}
		red := max(1, eq.chi2(s)/float64(max(eq.points-2, 1)))
		f.sigma = math.Sqrt(inv.At(0, 0) * red)
		steps[d] = max(-0.5, min(0.5, s[0]))
		f.alpha = max(f.alpha+s[1], 1e-3)
	}
	for d := range p.frames {
		s := steps[d] - steps[0]
		p.frames[d].shift += s
		move = max(move, math.Abs(s))
	}
	a := p.frames[0].alpha
	for d := range p.frames {
		p.frames[d].alpha /= a
	}
	return move, nil
}

// spotDoubt is the relative error of the common profile that is allowed for.
const spotDoubt = 0.01

// banded is a symmetric positive matrix with three bands below the diagonal:
// a[4i + k] = A[i][i−k].
type banded struct {
	n int
	a []float64
}

func newBanded(n int) *banded { return &banded{n, make([]float64, 4*n)} }

// factor overwrites the matrix with its Cholesky factor.
func (b *banded) factor() bool {
	for i := range b.n {
		for k := min(3, i); k >= 0; k-- {
			j := i - k
			s := b.a[4*i+k]
			for m := max(0, i-3, j-3); m < j; m++ {
				s -= b.a[4*i+i-m] * b.a[4*j+j-m]
			}
			if k > 0 {
				b.a[4*i+k] = s / b.a[4*j]
			} else if s > 0 {
				b.a[4*i] = math.Sqrt(s)
			} else {
				return false
			}
		}
	}
	return true
}

// solve overwrites v with the solution.
func (b *banded) solve(v []float64) {
	for i := range b.n {
		for k := 1; k <= min(3, i); k++ {
			v[i] -= b.a[4*i+k] * v[i-k]
		}
		v[i] /= b.a[4*i]
	}
	for i := b.n - 1; i >= 0; i-- {
		for k := 1; k <= 3 && i+k < b.n; k++ {
			v[i] -= b.a[4*(i+k)+k] * v[i+k]
		}
		v[i] /= b.a[4*i]
	}
}
