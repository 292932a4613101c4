package calib

import (
	"context"
	"errors"
	"fmt"
	"math"

	"unsheard/pipeline/frame"
)

// stack is the average of frames of the same light.
type stack struct {
	w, h, n int
	mean    plane     // ADU
	vari    []float64 // ADU², temporal, n−1 degrees of freedom; 0 for one frame
	top     []float64 // ADU, the largest value of each pixel
	files   []string
	sums    []float64 // ADU, mean of each frame
	full    float64   // largest code of the file format; 0 for floats
}

// loader reads the frames of one arm and holds them to one shape.
type loader struct {
	ctx       context.Context
	arm       string
	direction string // "down" for the reference arm
	limits    frame.Limits
	w, h      int    // turned
	first     string // the file that set the shape
	full      float64
}

func (l *loader) frame(path string) (*frame.Frame, error) {
	if err := l.ctx.Err(); err != nil {
		return nil, err
	}
	f, err := frame.Read(path, l.limits)
	if err != nil {
		return nil, fmt.Errorf("read %s frame: %w", l.arm, err)
	}
	rawW, rawH := f.W, f.H
	if f, err = f.Turn(l.direction); err != nil {
		return nil, fmt.Errorf("turn %s frame %q: %w", l.arm, path, err)
	}
	if l.first == "" {
		l.w, l.h, l.first = f.W, f.H, path
	}
	if f.W != l.w || f.H != l.h {
		w, h := l.w, l.h
		if f.W == rawH && rawW != rawH {
			w, h = h, w
		}
		return nil, fmt.Errorf("%s frame %q is %d×%d px but %q is %d×%d: all frames of an arm need the same sensor area and binning; check that no frame of the other arm is listed here",
			l.arm, path, rawW, rawH, l.first, w, h)
	}
	if bad := notFinite(f.Pix); bad > len(f.Pix)/2 {
		return nil, fmt.Errorf("%s frame %q: %d of %d values are not numbers: take it again", l.arm, path, bad, len(f.Pix))
	}
	l.full = max(l.full, f.FullScale)
	return f, nil
}

func notFinite(v []float32) (n int) {
	for _, x := range v {
		if x != x || math.IsInf(float64(x), 0) {
			n++
		}
	}
	return n
}

// stack averages the named frames: B. P. Welford, Note on a method for
// calculating corrected sums of squares and products, Technometrics 4 (1962)
// 419–420.
func (l *loader) stack(paths []string) (*stack, error) {
	if len(paths) == 0 {
		return nil, errors.New("no frames")
	}
	var s *stack
	for _, p := range paths {
		f, err := l.frame(p)
		if err != nil {
			return nil, err
		}
		if s == nil {
			s = &stack{w: f.W, h: f.H, mean: newPlane(f.W, f.H), vari: make([]float64, f.W*f.H),
				top: make([]float64, f.W*f.H), files: paths}
			for i := range s.top {
				s.top[i] = math.Inf(-1)
			}
		}
		s.add(f.Pix)
	}
	for i := range s.vari {
		s.vari[i] /= float64(max(s.n-1, 1))
	}
	s.full = l.full
	return s, nil
}

func (s *stack) add(pix []float32) {
	s.n++
	var sum float64
	var count int
	for i, p := range pix {
		v := float64(p)
		d := v - s.mean.v[i]
		s.mean.v[i] += d / float64(s.n)
		s.vari[i] += d * (v - s.mean.v[i])
		s.top[i] = max(s.top[i], v)
		if !math.IsNaN(v) && !math.IsInf(v, 0) {
			sum += v
			count++
		}
	}
	s.sums = append(s.sums, sum/float64(max(count, 1)))
}

// image is a stack in photoelectrons: dark taken off, flat divided out.
type image struct {
	plane
	ok   []bool    // not bad, not saturated in any frame
	vari []float64 // pe², of the mean
	n    int
}

// correct turns a stack into photoelectrons.
func (a *Arm) correct(s *stack) image {
	im := image{newPlane(s.w, s.h), make([]bool, s.w*s.h), make([]float64, s.w*s.h), s.n}
	read2 := a.ReadNoise.Value * a.ReadNoise.Value
	dark2 := 0.0
	if a.DarkFrames > 0 {
		dark2 = read2 / float64(a.DarkFrames)
	}
	for i, v := range s.mean.v {
		flat := float64(a.Flat[i])
		pe := a.Gain.Value * (v - float64(a.Dark[i]))
		im.v[i] = pe / flat
		im.vari[i] = ((max(pe, 0)+read2)/float64(s.n) + dark2) / (flat * flat)
		im.ok[i] = !a.Bad[i] && finite(v) && (a.Saturation.Value <= 0 || s.top[i] < a.Saturation.Value)
		if !im.ok[i] {
			im.v[i] = 0
		}
	}
	return im
}
