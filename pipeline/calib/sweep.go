package calib

import (
	"fmt"
	"math"
)

// Sweep is the displacement s(t) of the deflection in streak pixels, a
// polynomial in Legendre functions over the calibrated span:
//
//	s(t) = Σ_j c_j P_j(u) − shift,   u = (2t − First − Last)/(Last − First)
//
// Outside the span it goes on as a straight line with the rate of the end it
// leaves; [Sweep.Inside] tells. It must rise with time.
type Sweep struct {
	Coef       []float64 // px, Legendre coefficients, offset to the origin included
	Covariance []float64 // px², len(Coef)², of s(t) − s(origin); nil where unknown

	First, Last float64 // ps, calibrated span

	Residual   float64 // ps, rms of the measured delays about the curve
	ResidualPx float64 // px, the same along the sweep

	// Origin says what displacement 0 is.
	Origin string

	// OriginTime is where the displacement is 0 by definition, ps, or NaN if
	// it was measured against frames with the sweep off.
	OriginTime float64

	Points []SweepPoint // what was measured
}

// SweepPoint is the measured displacement at one delay.
type SweepPoint struct {
	PS    float64 `toml:"ps"`
	Px    float64 `toml:"px"`
	Sigma float64 `toml:"sigma"`
}

// legendre fills p with P_j(u) and d with dP_j/du. Bonnet's recursion;
// Abramowitz & Stegun 22.7.10 and 22.8.5 in the form that holds at u = ±1.
func legendre(p, d []float64, u float64) {
	for j := range p {
		switch j {
		case 0:
			p[0], d[0] = 1, 0
		case 1:
			p[1], d[1] = u, 1
		default:
			f := float64(j)
			p[j] = ((2*f-1)*u*p[j-1] - (f-1)*p[j-2]) / f
			d[j] = d[j-2] + (2*f-1)*p[j-1]
		}
	}
}

// basis returns the value and time derivative of every basis function at t,
// continued linearly outside the span.
func (s *Sweep) basis(t float64) (p, d []float64) {
	n := len(s.Coef)
	p, d = make([]float64, n), make([]float64, n)
	half := (s.Last - s.First) / 2
	u := (t - s.First - half) / half
	c := max(-1, min(1, u))
	legendre(p, d, c)
	for j := range p {
		p[j] += (u - c) * d[j]
		d[j] /= half
	}
	return p, d
}

// At returns the displacement at t ps, px.
func (s *Sweep) At(t float64) float64 {
	p, _ := s.basis(t)
	return dot(p, s.Coef)
}

// Rate returns ds/dt at t ps, px/ps.
func (s *Sweep) Rate(t float64) float64 {
	_, d := s.basis(t)
	return dot(d, s.Coef)
}

// Inside reports whether t lies in the calibrated span.
func (s *Sweep) Inside(t float64) bool { return t >= s.First && t <= s.Last }

// Sigma returns the standard uncertainty of s(t) relative to the origin, px;
// 0 where it is not known.
func (s *Sweep) Sigma(t float64) float64 {
	n := len(s.Coef)
	if len(s.Covariance) != n*n {
		return 0
	}
	p, _ := s.basis(t)
	if finite(s.OriginTime) {
		q, _ := s.basis(s.OriginTime)
		for j := range p {
			p[j] -= q[j]
		}
	}
	var v float64
	for i := range n {
		for j := range n {
			v += p[i] * p[j] * s.Covariance[i*n+j]
		}
	}
	return math.Sqrt(max(v, 0))
}

// TimeSigma returns the standard uncertainty of the time axis at t, ps.
func (s *Sweep) TimeSigma(t float64) float64 { return s.Sigma(t) / s.Rate(t) }

// Inverse returns the time at which the displacement is px, ps. It brackets
// the root and takes Newton steps inside the bracket, bisecting where they
// leave it.
func (s *Sweep) Inverse(px float64) float64 {
	lo, hi := s.First, s.Last
	sl, sh := s.At(lo), s.At(hi)
	switch {
	case px <= sl:
		return lo + (px-sl)/s.Rate(lo)
	case px >= sh:
		return hi + (px-sh)/s.Rate(hi)
	}
	t := lo + (hi-lo)*(px-sl)/(sh-sl)
	for range 100 {
		f := s.At(t) - px
		if f == 0 {
			break
		}
		if f > 0 {
			hi = t
		} else {
			lo = t
		}
		n := t - f/s.Rate(t)
		if !(n > lo && n < hi) {
			n = (lo + hi) / 2
		}
		if math.Abs(n-t) <= 1e-13*(s.Last-s.First) {
			return n
		}
		t = n
	}
	return t
}

// monotoneSteps is how finely a curve is searched for a turning point. A
// polynomial of degree 7 has at most 6 turning points in rate over the span;
// 400 steps leave no dip longer than 0.3 % of it unseen.
const monotoneSteps = 400

// rises reports whether the rate is positive over the whole span.
func (s *Sweep) rises() bool {
	for i := range monotoneSteps + 1 {
		t := s.First + (s.Last-s.First)*float64(i)/monotoneSteps
		if !(s.Rate(t) > 0) {
			return false
		}
	}
	return true
}

func (s *Sweep) validate() error {
	switch {
	case len(s.Coef) < 2 || len(s.Coef) > 32 || !finite(s.Coef...):
		return fmt.Errorf("sweep has %d coefficients, expected 2 to 32 finite ones", len(s.Coef))
	case !finite(s.First, s.Last) || !(s.Last > s.First):
		return fmt.Errorf("sweep is calibrated from %g to %g ps", s.First, s.Last)
	case !s.rises():
		return fmt.Errorf("sweep does not rise from %g to %g ps", s.First, s.Last)
	}
	return nil
}

func dot(a, b []float64) (s float64) {
	for i := range a {
		s += a[i] * b[i]
	}
	return s
}
