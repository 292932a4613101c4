package calib

import (
	"fmt"
	"math"
)

// SweepFit is how the sweep was found.
type SweepFit struct {
	Drift   float64 // px, shift across the sweep over its whole span
	Columns int
	Spots   plane // sum of all delays
	Degree  int
}

// turnTo says which way light really moved, given the direction the frames
// were turned from and the shift seen after turning. A turn by "right" is a
// quarter clockwise: what ran right runs down.
func turnTo(direction string, dx, dy float64) string {
	order := []string{"down", "left", "up", "right"} // each a quarter clockwise from the one before
	seen := "down"
	switch {
	case math.Abs(dx) > math.Abs(dy) && dx > 0:
		seen = "right"
	case math.Abs(dx) > math.Abs(dy):
		seen = "left"
	case dy < 0:
		seen = "up"
	}
	at := func(s string) int {
		for i, o := range order {
			if o == s {
				return i
			}
		}
		return 0
	}
	return order[(at(seen)+at(direction))%4]
}

// calibrateSweep finds the displacement of every delay and the curve through
// them.
func calibrateSweep(frames []moved, direction string, w Window) (*Sweep, *SweepFit, []string, error) {
	f := &SweepFit{Spots: newPlane(frames[0].im.w, frames[0].im.h)}
	for _, m := range frames {
		if err := bright(m); err != nil {
			return nil, nil, nil, err
		}
		if !math.IsNaN(m.ps) {
			for i, v := range m.im.v {
				f.Spots.v[i] += v
			}
		}
	}
	if err := checkDirection(frames, direction, f); err != nil {
		return nil, nil, nil, err
	}
	if err := track(frames); err != nil {
		return nil, nil, nil, err
	}
	var pts, still []SweepPoint
	for _, m := range frames {
		p := SweepPoint{m.ps, m.shift, max(m.sigma, shiftLeast)}
		if math.IsNaN(m.ps) {
			still = append(still, p)
		} else {
			pts = append(pts, p)
		}
	}
	s, err := fitSweep(pts)
	if err != nil {
		return nil, nil, nil, err
	}
	f.Degree = len(s.Coef) - 1
	warn := s.setOrigin(still)
	if math.Abs(f.Drift) > 0.5 && math.Abs(f.Drift) > 0.01*math.Abs(s.At(s.Last)-s.At(s.First)) {
		warn = append(warn, fmt.Sprintf("the spots also move %.1f px across the sweep: turn the camera until the sweep runs along its pixels", f.Drift))
	}
	if len(still) == 0 {
		warn = append(warn, outside(frames, s, w)...)
	}
	return s, f, warn, nil
}

func bright(m moved) error {
	top := 0.0
	for i, v := range m.im.v {
		if m.im.ok[i] {
			top = max(top, v/math.Sqrt(m.im.vari[i]))
		}
	}
	if top < spotLeast {
		return fmt.Errorf("the frames at %g ps are dark (their brightest pixel is %.1f times the noise): check the light and the delay", m.ps, top)
	}
	return nil
}

// checkDirection refuses a sweep that does not run down after turning. It
// needs the shift over the whole span, since single steps may be small.
func checkDirection(frames []moved, direction string, f *SweepFit) error {
	var dx, dy float64
	var last *moved
	for i := range frames {
		if math.IsNaN(frames[i].ps) {
			continue
		}
		if last != nil {
			x, y := coarseShift(last.im, frames[i].im)
			dx, dy = dx+x, dy+y
		}
		last = &frames[i]
	}
	f.Drift = dx
	if dy > math.Abs(dx)*turnedPart && dy > 1 {
		return nil
	}
	if math.Hypot(dx, dy) < 1 {
		return fmt.Errorf("the spots do not move: %.2f px from the first delay to the last; check that the sweep was on", math.Hypot(dx, dy))
	}
	return fmt.Errorf("[sweep] direction = %q, but with that the light moves %+.1f px across and %+.1f px down from the first delay to the last: write direction = %q",
		direction, dx, dy, turnTo(direction, dx, dy))
}

// outside warns if the light at 0 ps does not lie inside the window, where it
// must be if the displacement is 0 then.
func outside(frames []moved, s *Sweep, w Window) (warn []string) {
	best := 0
	for i, m := range frames {
		if math.Abs(m.ps) < math.Abs(frames[best].ps) {
			best = i
		}
	}
	m := frames[best]
	at := int(math.Round(s.At(m.ps)))
	var in, sum float64
	for y := range m.im.h {
		for x := range m.im.w {
			i := y*m.im.w + x
			if !m.im.ok[i] || m.im.v[i] < 4*math.Sqrt(m.im.vari[i]) {
				continue
			}
			sum += m.im.v[i]
			if x >= w.X-1 && x <= w.X+w.W && y-at >= w.Y-1 && y-at <= w.Y+w.H {
				in += m.im.v[i]
			}
		}
	}
	if in < 0.9*sum {
		warn = append(warn, fmt.Sprintf("at 0 ps %.0f %% of the spots' light lies outside the window: the displacement cannot be 0 then; take frames of the spots with the sweep off ([sweep] still)", 100*(1-in/sum)))
	}
	return warn
}
