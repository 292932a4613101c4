package frame

import (
	"slices"
	"testing"
	"time"
)

func TestTurn(t *testing.T) {
	// 3×2:  1 2 3
	//       4 5 6
	f := &Frame{W: 3, H: 2, Pix: []float32{1, 2, 3, 4, 5, 6}, Format: "x", FullScale: 7, NonFinite: 1, Taken: time.Unix(9, 0)}
	for _, c := range []struct {
		direction string
		w, h      int
		want      []float32
	}{
		{"down", 3, 2, []float32{1, 2, 3, 4, 5, 6}},
		{"up", 3, 2, []float32{6, 5, 4, 3, 2, 1}},
		{"right", 2, 3, []float32{4, 1, 5, 2, 6, 3}}, // the right column 3 6 lands at the bottom
		{"left", 2, 3, []float32{3, 6, 2, 5, 1, 4}},  // the left column 1 4 lands at the bottom
	} {
		g, err := f.Turn(c.direction)
		if err != nil {
			t.Fatal(err)
		}
		if g.W != c.w || g.H != c.h || !slices.Equal(g.Pix, c.want) {
			t.Errorf("%s: %d×%d %v, want %d×%d %v", c.direction, g.W, g.H, g.Pix, c.w, c.h, c.want)
		}
		if g.FullScale != 7 || g.Format != "x" || g.NonFinite != 1 || !g.Taken.Equal(f.Taken) {
			t.Errorf("%s: lost what was known of the frame: %+v", c.direction, g)
		}
	}
	for _, bad := range []string{"", "Down", "north"} {
		if _, err := f.Turn(bad); err == nil {
			t.Errorf("direction %q: no error", bad)
		}
	}
}

// TestTurnBack: right and left undo each other, twice right is up.
func TestTurnBack(t *testing.T) {
	f := &Frame{W: 5, H: 3, Pix: make([]float32, 15)}
	for i := range f.Pix {
		f.Pix[i] = float32(i)
	}
	turn := func(f *Frame, ds ...string) *Frame {
		for _, d := range ds {
			var err error
			if f, err = f.Turn(d); err != nil {
				t.Fatal(err)
			}
		}
		return f
	}
	if !samePixels(turn(f, "right", "left"), f) || !samePixels(turn(f, "up", "up"), f) ||
		!samePixels(turn(f, "right", "right"), turn(f, "up")) {
		t.Error("turns do not compose")
	}
}
