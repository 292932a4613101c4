package pipeline

import (
	"fmt"
	"math"

	"unsheard/pipeline/calib"
	"unsheard/pipeline/cube"
	"unsheard/pipeline/optics"
)

// guard is the least number of fine frames added before and after the span.
const guard = 2

// station is a bundle made ready for one grid: the model, and where its
// planes lie on the sensors.
type station struct {
	bundle *calib.Bundle
	model  *optics.Model
	n      int // binning
	lead   int // guard frames before the span, on this grid
	frames int // frames of the span, on this grid
	x0, y0 int // fine sensor pixel of the streak plane's corner
	first  float64
}

// newStation builds the model for cubes n times coarser than the window, with
// guard frames or without.
func newStation(b *calib.Bundle, n int, guarded bool) (*station, error) {
	fineLead := n * ((guard + n - 1) / n)
	if b.Frames == 1 || !guarded {
		fineLead = 0 // a single frame has no neighbours to tell apart
	}
	span := (b.Frames + n - 1) / n
	s := &station{bundle: b, n: n, lead: fineLead / n, frames: span, first: b.First}
	start := b.First - float64(fineLead)
	base := math.Round(start)
	view, err := optics.NewView(b.Registration, b.Window.W, b.Window.H, b.Reference.W, b.Reference.H, viewMargin(b))
	if err != nil {
		return nil, fmt.Errorf("bundle %s: %w", b.ID, err)
	}
	fine := optics.Geometry{
		T: n*span + 2*fineLead, H: b.Window.H, W: b.Window.W, Step: 1, Shift: start - base, Code: b.Code,
		StreakBlur:    optics.Blur{SigmaX: b.Streak.BlurX.Value, SigmaY: b.Streak.BlurY.Value},
		StreakPad:     n * reach(math.Max(b.Streak.BlurX.Value, b.Streak.BlurY.Value)),
		View:          view,
		ReferenceBlur: optics.Blur{SigmaX: b.Reference.BlurX.Value, SigmaY: b.Reference.BlurY.Value},
		Ratio:         b.Ratio.Value,
	}
	g, err := fine.Coarse(n)
	if err != nil {
		return nil, fmt.Errorf("bundle %s: %w", b.ID, err)
	}
	if s.model, err = optics.NewModel(g); err != nil {
		return nil, fmt.Errorf("bundle %s: %w", b.ID, err)
	}
	s.x0 = b.Window.X - n*g.StreakPad
	s.y0 = b.Window.Y + int(base) - n*g.StreakPad
	return s, nil
}

// reach is how far a blur carries light that matters, in pixels: four
// deviations and the pixel's own width.
func reach(sigma float64) int { return int(math.Ceil(4*sigma)) + 1 }

func viewMargin(b *calib.Bundle) int {
	return reach(math.Max(b.Reference.BlurX.Value, b.Reference.BlurY.Value))
}

// cube cuts the guard frames off x and gives it its axes. It also returns the
// share of the light in the guard frames.
func (s *station) cube(x []float32) (*cube.Cube, float64) {
	g := s.model.Geometry()
	plane := g.H * g.W
	c := cube.New(s.frames, g.H, g.W)
	copy(c.Data, x[s.lead*plane:(s.lead+s.frames)*plane])
	c.Scale = s.bundle.Scale.Value
	c.Bin = s.n
	for k := range s.frames + 1 {
		c.Edges[k] = s.bundle.Sweep.Inverse(s.first + float64(k*s.n) - 0.5)
	}
	for k := range s.frames {
		c.Time[k] = s.bundle.Sweep.Inverse(s.first + float64(k*s.n) + float64(s.n-1)/2)
	}
	inside, all := c.Total(), 0.0
	for _, v := range x {
		all += float64(v)
	}
	if all <= 0 {
		return c, 0
	}
	return c, 1 - inside/all
}
