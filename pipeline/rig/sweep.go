package rig

// curve is the sweep s(t) = n·(u + q·(u²−u) + c·(u³−u)), u = t/span: it
// passes 0 at t = 0 and n pixels at t = span.
type curve struct{ n, span, q, c float64 }

func (o Options) curve() curve {
	return curve{n: float64(o.T - 1), span: o.Span, q: o.Quadratic, c: o.Cubic}
}

func (s curve) at(t float64) float64 {
	u := t / s.span
	return s.n * (u + s.q*(u*u-u) + s.c*(u*u*u-u))
}

// rate is ds/dt in px per ps.
func (s curve) rate(t float64) float64 {
	u := t / s.span
	return s.n / s.span * (1 + s.q*(2*u-1) + s.c*(3*u*u-1))
}

// reach is how far before and after the span, in spans, the curve must rise
// and can be inverted: as far as light outside the gate goes, and some more.
func (s curve) reach() float64 { return (beyond+2)/s.n + 0.1 }

// rises reports whether the curve rises at every time that can be asked for.
func (s curve) rises() bool {
	reach := s.reach()
	for i := range 401 {
		if s.rate(s.span*(-reach+(1+2*reach)*float64(i)/400)) <= 0 {
			return false
		}
	}
	return true
}

// inverse finds t with s(t) = px by bisection, to the last bit of t; beyond
// its reach it returns the end.
func (s curve) inverse(px float64) float64 {
	reach := s.reach()
	lo, hi := -reach*s.span, (1+reach)*s.span
	for range 60 {
		if m := (lo + hi) / 2; s.at(m) < px {
			lo = m
		} else {
			hi = m
		}
	}
	return (lo + hi) / 2
}

// At returns the displacement of light arriving at t (ps), in streak pixels.
func (s *Station) At(t float64) float64 { return s.sweep.at(t) }

// Rate returns the speed of the sweep at t (ps), px per ps.
func (s *Station) Rate(t float64) float64 { return s.sweep.rate(t) }

// Inverse returns the time (ps) at which light is displaced by px.
func (s *Station) Inverse(px float64) float64 { return s.sweep.inverse(px) }

// Edges returns the T+1 limits (ps) of the station's frames: frame k is
// centred where the sweep has moved k pixels and lasts while it moves one.
func (s *Station) Edges() []float64 {
	e := make([]float64, s.o.T+1)
	for k := range e {
		e[k] = s.sweep.inverse(float64(k) - 0.5)
	}
	return e
}
