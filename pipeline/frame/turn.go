package frame

import "fmt"

// Turn returns the frame rotated so that what ran in the given direction on
// the sensor runs down: "up" is half a turn, "right" a quarter turn
// clockwise, "left" a quarter turn counter-clockwise, never mirrored. "down"
// returns f itself; the other frames share nothing with f.
func (f *Frame) Turn(direction string) (*Frame, error) {
	g := *f
	var to func(x, y int) int // index in g of pixel (x, y) of f
	switch direction {
	case "down":
		return f, nil
	case "up":
		to = func(x, y int) int { return (f.H-1-y)*f.W + f.W - 1 - x }
	case "right":
		g.W, g.H = f.H, f.W
		to = func(x, y int) int { return x*f.H + f.H - 1 - y }
	case "left":
		g.W, g.H = f.H, f.W
		to = func(x, y int) int { return (f.W-1-x)*f.H + y }
	default:
		return nil, fmt.Errorf("turn frame: unknown direction %q, want down, up, left or right", direction)
	}
	g.Pix = make([]float32, len(f.Pix))
	for y := range f.H {
		for x, v := range f.Pix[y*f.W : (y+1)*f.W] {
			g.Pix[to(x, y)] = v
		}
	}
	return &g, nil
}
