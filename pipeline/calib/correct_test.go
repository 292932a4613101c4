package calib

import (
	"math"
	"strings"
	"testing"

	"unsheard/pipeline/frame"
)

// TestCorrect works the documented formulas by hand.
func TestCorrect(t *testing.T) {
	b := small()
	a := &b.Streak
	a.Flat[5] = 0.5
	f := &frame.Frame{W: a.W, H: a.H, Pix: make([]float32, a.W*a.H)}
	for i := range f.Pix {
		f.Pix[i] = 1100
	}
	f.Pix[0] = 4000 // at saturation
	f.Pix[1] = float32(math.NaN())
	f.Pix[2] = 90 // below dark (102): negative photoelectrons are kept
	c, err := a.Correct(f)
	if err != nil {
		t.Fatal(err)
	}
	if c.Saturated != 1 || c.Bad != 2 {
		t.Errorf("%d saturated and %d bad pixels, want 1 and 2", c.Saturated, c.Bad)
	}
	for _, i := range []int{0, 1, 3} {
		if c.Var[i] >= 0 || c.ReadVar[i] >= 0 {
			t.Errorf("pixel %d has variance %g, %g, want it masked", i, c.Var[i], c.ReadVar[i])
		}
	}
	read := 9 * (1 + 1.0/4)
	for _, w := range []struct {
		i            int
		pe, vari, rv float64
	}{
		{2, 2 * (90 - 102), read, read},
		{4, 2 * (1100 - 104), 2*(1100-104) + read, read},
		{5, 2 * (1100 - 105) / 0.5, (2*(1100-105) + read) / 0.25, read / 0.25},
	} {
		if !near5(c.PE[w.i], w.pe) || !near5(c.Var[w.i], w.vari) || !near5(c.ReadVar[w.i], w.rv) {
			t.Errorf("pixel %d: %g ± √%g (%g dark), want %g ± √%g (%g)", w.i, c.PE[w.i], c.Var[w.i], c.ReadVar[w.i], w.pe, w.vari, w.rv)
		}
		if v := float64(c.ReadVar[w.i]) + float64(c.Slope[w.i])*math.Max(float64(c.PE[w.i]), 0); !near5(c.Var[w.i], v) {
			t.Errorf("pixel %d: Var %g is not ReadVar + Slope·PE = %g", w.i, c.Var[w.i], v)
		}
	}
	for i := range c.PE {
		if !finite(float64(c.PE[i]), float64(c.Var[i]), float64(c.Slope[i])) {
			t.Fatalf("pixel %d is not finite", i)
		}
	}
	f.W, f.H = f.H, f.W
	if _, err := a.Correct(f); err == nil || !strings.Contains(err.Error(), "30×12") {
		t.Errorf("a frame of another shape: %v", err)
	}
}

func near5(got float32, want float64) bool {
	return math.Abs(float64(got)-want) <= 1e-5*math.Abs(want)
}
