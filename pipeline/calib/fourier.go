package calib

import (
	"math"

	"gonum.org/v1/gonum/dsp/fourier"
)

// fft2 transforms w×h row-major planes in place. It is not safe for
// concurrent use.
type fft2 struct {
	w, h     int
	row, col *fourier.CmplxFFT
	line     []complex128
}

func newFFT2(w, h int) *fft2 {
	return &fft2{w, h, fourier.NewCmplxFFT(w), fourier.NewCmplxFFT(h), make([]complex128, h)}
}

func (f *fft2) forward(a []complex128) { f.run(a, f.row.Coefficients, f.col.Coefficients) }

// inverse is scaled so that it undoes forward.
func (f *fft2) inverse(a []complex128) {
	f.run(a, f.row.Sequence, f.col.Sequence)
	s := complex(1/float64(f.w*f.h), 0)
	for i := range a {
		a[i] *= s
	}
}

func (f *fft2) run(a []complex128, row, col func(dst, src []complex128) []complex128) {
	for y := range f.h {
		r := a[y*f.w : (y+1)*f.w]
		row(r, r)
	}
	for x := range f.w {
		for y := range f.h {
			f.line[y] = a[y*f.w+x]
		}
		col(f.line, f.line)
		for y := range f.h {
			a[y*f.w+x] = f.line[y]
		}
	}
}

// fastLength returns the smallest length ≥ n with factors 2, 3 and 5 only.
func fastLength(n int) int {
	for ; ; n++ {
		m := n
		for _, p := range []int{2, 3, 5} {
			for m%p == 0 {
				m /= p
			}
		}
		if m == 1 {
			return n
		}
	}
}

// covariance is a symmetric 2 × 2 matrix, px².
type covariance struct{ xx, xy, yy float64 }

// through returns J c Jᵀ for J = [[a b] [c d]].
func (c covariance) through(j [4]float64) covariance {
	a, b, d, e := j[0], j[1], j[2], j[3]
	return covariance{
		a*a*c.xx + 2*a*b*c.xy + b*b*c.yy,
		a*d*c.xx + (a*e+b*d)*c.xy + b*e*c.yy,
		d*d*c.xx + 2*d*e*c.xy + e*e*c.yy,
	}
}

// spectrum is an image's transform, kept to blur it by many covariances.
type spectrum struct {
	w, h, pad int
	f         *fft2
	a         []complex128
}

// newSpectrum transforms p with mirrored borders of pad pixels.
func newSpectrum(p plane, pad int) *spectrum {
	w, h := fastLength(p.w+2*pad), fastLength(p.h+2*pad)
	s := &spectrum{p.w, p.h, pad, newFFT2(w, h), make([]complex128, w*h)}
	for y := range h {
		for x := range w {
			s.a[y*w+x] = complex(p.at(mirrored(x-pad, p.w), mirrored(y-pad, p.h)), 0)
		}
	}
	s.f.forward(s.a)
	return s
}

// gain is the transfer function of a Gaussian of covariance c:
// exp(−2π² νᵀ c ν). c need not be positive definite (a small negative
// variance sharpens).
func (s *spectrum) blur(c covariance) plane {
	w, h := s.f.w, s.f.h
	b := make([]complex128, len(s.a))
	for y := range h {
		v := s.f.col.Freq(y)
		for x := range w {
			u := s.f.row.Freq(x)
			g := math.Exp(-2 * math.Pi * math.Pi * (c.xx*u*u + 2*c.xy*u*v + c.yy*v*v))
			b[y*w+x] = s.a[y*w+x] * complex(g, 0)
		}
	}
	s.f.inverse(b)
	p := newPlane(s.w, s.h)
	for y := range s.h {
		for x := range s.w {
			p.v[y*s.w+x] = real(b[(y+s.pad)*w+x+s.pad])
		}
	}
	return p
}

// noiseGain is the factor by which a blur of covariance c lowers the variance
// of white noise: the integral of its squared transfer function.
func (s *spectrum) noiseGain(c covariance) float64 {
	var sum float64
	for y := range s.f.h {
		v := s.f.col.Freq(y)
		for x := range s.f.w {
			u := s.f.row.Freq(x)
			sum += math.Exp(-4 * math.Pi * math.Pi * (c.xx*u*u + 2*c.xy*u*v + c.yy*v*v))
		}
	}
	return sum / float64(len(s.a))
}
