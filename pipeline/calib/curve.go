package calib

import (
	"fmt"
	"math"
)

// Limits of the curve through the delays.
const (
	degreeMost  = 7
	shiftLeast  = 0.005 // px, uncertainty below which no displacement is believed
	originSlack = 0.02  // spans by which 0 ps may lie outside the delays unremarked
)

// fitSweep puts a polynomial through the displacements: degree 1 to 7 among
// those that rise over the whole span, points weighted by 1/σ². From eight
// delays up the corrected Akaike information criterion chooses (C. M.
// Hurvich, C.-L. Tsai, Biometrika 76, 1989, 297–307); with fewer it has too
// little to go by, and χ² + 2k with the known uncertainties does.
func fitSweep(pts []SweepPoint) (*Sweep, error) {
	n := len(pts)
	if n < 2 {
		return nil, fmt.Errorf("%d delays: at least two are needed", n)
	}
	var best *Sweep
	bestScore := math.Inf(1)
	for degree := 1; degree <= min(degreeMost, n-1); degree++ {
		if degree > 2 && n-degree-1 < 1 { // no curve with turns through every point
			break
		}
		s := &Sweep{First: pts[0].PS, Last: pts[n-1].PS, Coef: make([]float64, degree+1), Points: pts}
		rss, ok := s.fit(pts)
		if !ok || !s.rises() {
			continue
		}
		if score := degreeScore(rss, n, degree); score < bestScore {
			best, bestScore = s, score
		}
	}
	if best == nil {
		return nil, fmt.Errorf("the displacement does not rise with the delay from %g to %g ps: check the delays and their frames", pts[0].PS, pts[n-1].PS)
	}
	best.spreadOf(pts)
	return best, nil
}

// aiccFrom is the number of delays from which the scatter itself tells how
// good the points are.
const aiccFrom = 8

func degreeScore(rss float64, n, degree int) float64 {
	if n < aiccFrom {
		return rss + 2*float64(degree+1)
	}
	k, m := float64(degree+2), float64(n) // coefficients and the variance
	if m <= k+1 {
		return math.Inf(1)
	}
	return m*math.Log(max(rss/m, 1e-12)) + 2*k + 2*k*(k+1)/(m-k-1)
}

// fit solves for the coefficients and their covariance; rss is Σ r²/σ².
func (s *Sweep) fit(pts []SweepPoint) (rss float64, ok bool) {
	eq := newNormal(len(s.Coef))
	for _, p := range pts {
		row, _ := s.basis(p.PS)
		eq.add(row, p.Px, 1/(p.Sigma*p.Sigma))
	}
	c, inv, ok := eq.solve()
	if !ok {
		return 0, false
	}
	copy(s.Coef, c)
	rss = eq.chi2(c)
	dof := len(pts) - len(c)
	wide := 1.0
	if dof > 0 {
		wide = max(1, rss/float64(dof))
	}
	s.Covariance = make([]float64, len(c)*len(c))
	for i := range c {
		for j := range c {
			s.Covariance[i*len(c)+j] = wide * inv.At(i, j)
		}
	}
	return rss, true
}

// spreadOf sets the residuals: root of the sum of squares over the degrees of
// freedom.
func (s *Sweep) spreadOf(pts []SweepPoint) {
	var px, ps float64
	for _, p := range pts {
		e := p.Px - s.At(p.PS)
		px += e * e
		e /= s.Rate(p.PS)
		ps += e * e
	}
	dof := float64(max(len(pts)-len(s.Coef), 1))
	s.ResidualPx, s.Residual = math.Sqrt(px/dof), math.Sqrt(ps/dof)
}

// setOrigin moves the curve so that displacement 0 is where the spots stand
// with the sweep off, if still frames give it, else at 0 ps.
func (s *Sweep) setOrigin(still []SweepPoint) (warn []string) {
	var shift float64
	if len(still) > 0 {
		for _, p := range still {
			shift += p.Px / float64(len(still))
		}
		s.OriginTime = math.NaN()
		s.Origin = "measured against frames of the spots with the sweep off"
		// The still frame's own error moves the whole curve.
		s.Covariance[0] += still[0].Sigma * still[0].Sigma
	} else {
		shift = s.At(0)
		s.OriginTime = 0
		s.Origin = "taken as 0 at 0 ps"
		slack := originSlack * (s.Last - s.First)
		if s.First > slack || s.Last < -slack {
			warn = append(warn, fmt.Sprintf("the sweep's origin, 0 ps, lies outside the calibrated delays, %g to %g ps: it is found by going on in a straight line; take a delay at 0 ps, or frames of the spots with the sweep off ([sweep] still)", s.First, s.Last))
		}
	}
	s.Coef[0] -= shift
	s.Points = append([]SweepPoint(nil), s.Points...)
	for i := range s.Points {
		s.Points[i].Px -= shift
	}
	return warn
}

// firstSlack is how far the first delay may lie past a whole pixel for that
// pixel to be the first frame, px.
const firstSlack = 0.05

// frameGrid chooses the displacement s_0 of frame 0 and the number of frames
// T. s_0 is the first whole pixel not before the first delay (a twentieth of
// a pixel is let pass, since frames are a pixel wide). T covers the calibrated
// delays and one delay spacing more at the late end, in a straight line, as
// far as the sensor reaches:
//
//	T = ⌊s(last) + (s(last) − s(last−1)) − s_0⌋ + 1
//	window.Y + s_0 + H + T − 2 ≤ sensor rows − 1
func (s *Sweep) frameGrid(w Window, rows int) (first float64, frames int, warn []string, err error) {
	first = math.Ceil(s.At(s.First)-firstSlack) + 0 // + 0 turns −0 into 0
	if up := -float64(w.Y) - first; up > 0 {        // earlier light would land above the sensor
		first += up
	}
	n := len(s.Points)
	end := s.At(s.Last)
	if n > 1 {
		end += s.At(s.Last) - s.At(s.Points[n-2].PS)
	}
	frames = int(math.Floor(end-first+1e-6)) + 1
	room := rows + 1 - w.Y - int(first) - w.H
	if inside := int(math.Floor(s.At(s.Last) - first)); room < inside {
		warn = append(warn, fmt.Sprintf("the swept window leaves the sensor before the last delay: %d of %d frames fit; move the window up or sweep less far", max(room, 0), inside+1))
	}
	if frames = min(frames, room); frames < 2 {
		return 0, 0, warn, fmt.Errorf("only %d frames of the sweep fit on the sensor: the window begins at row %d of %d and is %d high", max(frames, 0), w.Y, rows, w.H)
	}
	return first, frames, warn, nil
}
