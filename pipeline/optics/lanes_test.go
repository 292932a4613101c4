package optics

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"unsheard/pipeline/solve/row"
)

// TestScalarSameBits compares model and adjoint by vector and by plain loops.
func TestScalarSameBits(t *testing.T) {
	const seed = 20260302
	rng := rand.New(rand.NewPCG(seed, 1))
	random := func(n int) []float32 {
		v := make([]float32, n)
		for j := range v {
			v[j] = float32(rng.NormFloat64())
		}
		return v
	}
	for _, c := range []struct {
		t, h, w, step int
		sigma         float64
		hom           [9]float64
	}{
		{1, 1, 1, 1, 0, [9]float64{1, 0, 0, 0, 1, 0, 0, 0, 1}},
		{4, 17, 23, 1, .7, [9]float64{1.02, -.01, 3.3, .01, 1.02, 2.6, 0, 0, 1}},
		{3, 20, 70, 2, 1.3, [9]float64{.4, .3, 9, -.3, .4, 20, 1e-4, 0, 1}},
		{2, 9, 150, 1, 5, [9]float64{1.5, 0, 1, 0, 1.5, 1, 0, 1e-4, 1}},
		{2, 30, 40, 1, 30, [9]float64{0, 1, 3, -1, 0, 50, 0, 0, 1}}, // kernels longer than rows
	} {
		var want [3][]float32
		code, x := random(c.h*c.w), random(c.t*c.h*c.w)
		for j, v := range code {
			code[j] = min(max(v, -v), 1)
		}
		var e, r []float32
		for _, scalar := range []bool{true, false} {
			v, err := NewView(c.hom, c.w, c.h, 300, 300, 4)
			if err != nil {
				t.Fatal(err)
			}
			b := Blur{SigmaX: c.sigma, SigmaY: c.sigma}
			m, err := NewModel(Geometry{T: c.t, H: c.h, W: c.w, Step: c.step, Shift: .3, Code: code, StreakBlur: b, StreakPad: 5, View: v, ReferenceBlur: b, Ratio: .8, Scalar: scalar})
			if err != nil {
				t.Fatal(err)
			}
			rows, cols := m.StreakShape()
			rr, rc := m.ReferenceShape()
			got := [3][]float32{make([]float32, rows*cols), make([]float32, rr*rc), make([]float32, len(x))}
			m.Forward(got[0], got[1], x)
			if e == nil {
				e, r = random(rows*cols), random(rr*rc)
			}
			m.Adjoint(got[2], e, r)
			if want[0] == nil {
				want = got
				continue
			}
			for n, name := range []string{"streak", "reference", "adjoint"} {
				for j, w := range want[n] {
					if math.Float32bits(got[n][j]) != math.Float32bits(w) {
						t.Fatalf("%v seed %d: %s differs at %d: %g, plain loops give %g", c, seed, name, j, got[n][j], w)
					}
				}
			}
		}
	}
}

// TestEndsOfRows compares rows whose ends are padded with rows by the formula.
func TestEndsOfRows(t *testing.T) {
	rng := rand.New(rand.NewPCG(20260303, 1))
	for _, sigma := range []float64{.3, 1, 4, 9, 30} {
		for _, shift := range []float64{0, .4, -2} {
			k := newKernel(sigma, 1, shift)
			for _, n := range []int{1, 2, 5, 16, 61, 130, 300} {
				src, got, want := make([]float32, n), make([]float32, n), make([]float32, n)
				for j := range src {
					src[j] = rng.Float32() - .5
				}
				k.slowEnd(want, src, 0, n)
				for _, l := range []row.Lanes{{}, row.Best()} {
					k.convolve(got, src, l)
					if fmt.Sprint(got) != fmt.Sprint(want) {
						t.Errorf("σ %g, shift %g, %d samples, %s: not the sum of the taps", sigma, shift, n, l)
					}
				}
			}
		}
	}
}
