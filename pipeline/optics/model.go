package optics

import (
	"fmt"
	"math"

	"unsheard/pipeline/solve/row"
)

// ErrShape is the panic value for a slice whose length does not fit the
// model.
const ErrShape = "optics: slice does not fit the shape"

// Geometry says everything about a station that equations (1) and (2) need.
type Geometry struct {
	// T, H, W are the cube's frames, rows and columns.
	T, H, W int

	// Step is the number of streak pixels the sweep moves per frame.
	// Default 1.
	Step int

	// Shift displaces the whole streak image along the sweep, in streak
	// pixels, as when the first frame does not land on a whole pixel.
	// Default 0.
	Shift float64

	// Code is the transmission of every window pixel, H·W, 0 to 1, as the
	// streak sensor would see it without blur.
	Code []float32

	// StreakBlur is the streak arm's point spread, window px. The smear of
	// one frame is added to it.
	StreakBlur Blur

	// StreakPad is how many pixels the streak plane reaches beyond the
	// sheared window on every side.
	StreakPad int

	// View brings window planes to the reference sensor; zero means the
	// reference camera sees the window exactly.
	View View

	// ReferenceBlur is the reference arm's point spread, reference px.
	ReferenceBlur Blur

	// Ratio is reference photoelectrons per streak photoelectron, for the
	// same scene with the code open. Default 1.
	Ratio float64

	// Scalar keeps all that works with the model to plain loops, which give
	// the same bits as the processor's vector code, several times slower.
	// Default off.
	Scalar bool
}

// Lanes returns the loops that the geometry asks for.
func (g *Geometry) Lanes() row.Lanes {
	if g.Scalar {
		return row.Lanes{}
	}
	return row.Best()
}

// Model is the operator of equations (1) and (2). It is immutable.
type Model struct {
	g          Geometry
	rows, cols int    // padded streak plane
	s, sT, r   Spread // r is symmetric, its own transpose
}

// NewModel checks a geometry and prepares its kernels.
func NewModel(g Geometry) (*Model, error) {
	if g.Step == 0 {
		g.Step = 1
	}
	if g.Ratio == 0 {
		g.Ratio = 1
	}
	if err := g.check(); err != nil {
		return nil, err
	}
	if g.View.fwd.start == nil {
		g.View = Identity(g.W, g.H)
	}
	g.View.fwd.lanes, g.View.adj.lanes = g.Lanes(), g.Lanes()
	m := &Model{g: g, rows: g.H + (g.T-1)*g.Step + 2*g.StreakPad, cols: g.W + 2*g.StreakPad}
	m.s = Spread{Rows: m.rows, Cols: m.cols, lanes: g.Lanes(), x: newKernel(g.StreakBlur.SigmaX, 0, 0),
		y: newKernel(g.StreakBlur.SigmaY, float64(g.Step), g.Shift)}
	m.sT = m.s.Transpose()
	m.r = Spread{Rows: g.View.Rect.H, Cols: g.View.Rect.W, lanes: g.Lanes(), x: newKernel(g.ReferenceBlur.SigmaX, 0, 0),
		y: newKernel(g.ReferenceBlur.SigmaY, 0, 0)}
	return m, nil
}

func (g *Geometry) check() error {
	if g.T <= 0 || g.H <= 0 || g.W <= 0 {
		return fmt.Errorf("geometry %d×%d×%d: sides must be positive", g.T, g.H, g.W)
	}
	if g.Step < 0 || g.StreakPad < 0 {
		return fmt.Errorf("geometry: step %d and pad %d must not be negative", g.Step, g.StreakPad)
	}
	if len(g.Code) != g.H*g.W {
		return fmt.Errorf("geometry: code of %d pixels for a window of %d×%d", len(g.Code), g.W, g.H)
	}
	for j, c := range g.Code {
		if !(c >= 0 && !math.IsInf(float64(c), 0)) {
			return fmt.Errorf("geometry: code at x %d, y %d is %g, must be a transmission: recalibrate the code", j%g.W, j/g.W, c)
		}
	}
	for name, s := range map[string]float64{"streak blur x": g.StreakBlur.SigmaX, "streak blur y": g.StreakBlur.SigmaY,
		"reference blur x": g.ReferenceBlur.SigmaX, "reference blur y": g.ReferenceBlur.SigmaY} {
		if !(s >= 0 && s <= maxSigma) {
			return fmt.Errorf("geometry: %s is %g px, must be 0 to %d", name, s, maxSigma)
		}
	}
	if !(g.Ratio > 0) || math.IsInf(g.Ratio, 0) {
		return fmt.Errorf("geometry: throughput ratio is %g, must be positive", g.Ratio)
	}
	if !(math.Abs(g.Shift) <= float64(g.Step)+1) {
		return fmt.Errorf("geometry: shift is %g px, must be within a step of 0", g.Shift)
	}
	if g.View.fwd.start != nil && (g.View.w != g.W || g.View.h != g.H) {
		return fmt.Errorf("geometry: view of a %d×%d window, cube has %d×%d", g.View.w, g.View.h, g.W, g.H)
	}
	return nil
}

// maxSigma bounds a blur: beyond it a camera resolves nothing, px.
const maxSigma = 64

// Geometry returns the geometry the model was made from, defaults filled in.
func (m *Model) Geometry() Geometry { return m.g }

// StreakShape returns the sides of the padded streak plane. Its row r is the
// sensor row window.Y + s_0 + r − pad, its column c the sensor column
// window.X + c − pad.
func (m *Model) StreakShape() (rows, cols int) { return m.rows, m.cols }

// ReferenceShape returns the sides of the reference plane, the view's
// rectangle.
func (m *Model) ReferenceShape() (rows, cols int) { return m.g.View.Rect.H, m.g.View.Rect.W }

// Forward writes equations (1) and (2) for the cube x.
func (m *Model) Forward(streak, reference, x []float32) {
	m.checkSizes(streak, reference, x)
	plane, sum := make([]float32, len(streak)), make([]float32, m.g.H*m.g.W)
	m.shear(plane, x)
	m.BlurStreak(streak, make([]float32, len(streak)), plane)
	m.total(sum, x)
	m.Project(reference, make([]float32, len(reference)), sum)
}

// Adjoint writes the transpose of Forward: the cube that the two planes cast
// back.
func (m *Model) Adjoint(x, streak, reference []float32) {
	m.checkSizes(streak, reference, x)
	plane, back := make([]float32, len(streak)), make([]float32, m.g.H*m.g.W)
	m.BlurStreakAdjoint(plane, make([]float32, len(streak)), streak)
	m.Unproject(back, make([]float32, 2*len(reference)), reference)
	m.unshear(x, plane, back)
}

func (m *Model) checkSizes(streak, reference, x []float32) {
	if len(streak) != m.rows*m.cols || len(reference) != m.g.View.Rect.W*m.g.View.Rect.H || len(x) != m.g.T*m.g.H*m.g.W {
		panic(ErrShape)
	}
}

// shear is the sum inside (1) on the padded plane.
func (m *Model) shear(plane, x []float32) {
	clear(plane)
	g := &m.g
	for k := range g.T {
		for y := range g.H {
			in := x[(k*g.H+y)*g.W:][:g.W]
			code := g.Code[y*g.W:][:g.W]
			out := plane[(y+k*g.Step+g.StreakPad)*m.cols+g.StreakPad:][:g.W]
			for i, v := range in {
				out[i] += float32(code[i] * v)
			}
		}
	}
}

// total is the sum inside (2).
func (m *Model) total(sum, x []float32) {
	clear(sum)
	n := len(sum)
	for k := range m.g.T {
		for j, v := range x[k*n : (k+1)*n] {
			sum[j] += v
		}
	}
}

// unshear is the transpose of shear and total together.
func (m *Model) unshear(x, plane, back []float32) {
	g := &m.g
	for k := range g.T {
		for y := range g.H {
			out := x[(k*g.H+y)*g.W:][:g.W]
			code := g.Code[y*g.W:][:g.W]
			b := back[y*g.W:][:g.W]
			in := plane[(y+k*g.Step+g.StreakPad)*m.cols+g.StreakPad:][:g.W]
			for i := range out {
				out[i] = float32(code[i]*in[i]) + b[i]
			}
		}
	}
}

// Spreads returns the parts of the model for callers that share its work
// among goroutines: B_s, its transpose, and B_r, which is its own.
func (m *Model) Spreads() (streak, streakT, reference Spread) { return m.s, m.sT, m.r }

// BlurStreak writes B_s(src) to dst; all three are padded streak planes that
// do not overlap.
func (m *Model) BlurStreak(dst, tmp, src []float32) {
	m.s.apply(dst, tmp, src)
}

// BlurStreakAdjoint writes the transpose of BlurStreak.
func (m *Model) BlurStreakAdjoint(dst, tmp, src []float32) {
	m.sT.apply(dst, tmp, src)
}

// Project writes a·B_r(V(src)) of the window plane src to the reference plane
// dst. tmp has twice the length of a reference plane, or once; with once it
// allocates.
func (m *Model) Project(dst, tmp, src []float32) {
	n := len(dst)
	if len(tmp) < 2*n {
		tmp = make([]float32, 2*n)
	}
	m.g.View.Apply(tmp[:n], src)
	m.r.apply(dst, tmp[n:2*n], tmp[:n])
	scale(dst, float32(m.g.Ratio))
}

// Unproject writes the transpose of Project: the reference plane src cast
// back on the window plane dst. tmp as in Project.
func (m *Model) Unproject(dst, tmp, src []float32) {
	n := len(src)
	if len(tmp) < 2*n {
		tmp = make([]float32, 2*n)
	}
	m.r.apply(tmp[:n], tmp[n:2*n], src)
	m.g.View.Adjoint(dst, tmp[:n])
	scale(dst, float32(m.g.Ratio))
}

func scale(dst []float32, a float32) {
	for j := range dst {
		dst[j] *= a
	}
}
