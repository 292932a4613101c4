// Package cube holds the reconstructed space-time cube of a shot with its
// axes and units.
//
// A cube x[k][y][i] has T frames of H rows and W columns on the window grid,
// stored row-major with time slowest: index (k·H + y)·W + i. Its values are
// photoelectrons per window pixel and frame as the streak arm would count
// them with the code open. The time axis need not be even: every frame
// carries its centre and both its edges in picoseconds.
package cube

import (
	"fmt"
	"math"
)

// Cube is one reconstruction.
type Cube struct {
	T, H, W int

	// Data holds the T·H·W values, photoelectrons.
	Data []float32

	// Errors holds one standard deviation of every value, or is nil while
	// no spread pass has run.
	Errors []float32

	// Time holds the T frame centres and Edges the T+1 frame limits, ps.
	Time, Edges []float64

	// Scale is the length in the scene that one window pixel sees, in
	// micrometres; 0 means unknown.
	Scale float64

	// Bin is the number of window pixels along x and y that one cube pixel
	// covers; 0 means 1.
	Bin int
}

// Pitch returns the window pixels per cube pixel, at least 1.
func (c *Cube) Pitch() float64 { return float64(max(1, c.Bin)) }

// Position returns the window position, in window pixels, of cube column or
// row j: the centre of the pixels it covers.
func (c *Cube) Position(j int) float64 { return (float64(j)+0.5)*c.Pitch() - 0.5 }

// New makes a cube of zeros. It panics if a side is not positive.
func New(t, h, w int) *Cube {
	if t <= 0 || h <= 0 || w <= 0 {
		panic(ErrShape)
	}
	return &Cube{T: t, H: h, W: w, Data: make([]float32, t*h*w),
		Time: make([]float64, t), Edges: make([]float64, t+1)}
}

// ErrShape is the panic value for a cube whose sides are not positive.
const ErrShape = "cube: side not positive"

// Frame returns frame k, a slice of H·W values that aliases the cube.
func (c *Cube) Frame(k int) []float32 { n := c.H * c.W; return c.Data[k*n : (k+1)*n] }

// At returns the value of frame k, row y, column i.
func (c *Cube) At(k, y, i int) float32 { return c.Data[(k*c.H+y)*c.W+i] }

// Duration returns the length of frame k in ps.
func (c *Cube) Duration(k int) float64 { return c.Edges[k+1] - c.Edges[k] }

// Sum returns the light of frame k in photoelectrons.
func (c *Cube) Sum(k int) float64 {
	var s float64
	for _, v := range c.Frame(k) {
		s += float64(v)
	}
	return s
}

// Total returns the light of the whole cube in photoelectrons.
func (c *Cube) Total() float64 {
	var s float64
	for k := range c.T {
		s += c.Sum(k)
	}
	return s
}

// Check reports the first inconsistency: a length that does not fit the
// sides, an axis that does not rise, or a value that is not finite.
func (c *Cube) Check() error {
	n := c.T * c.H * c.W
	switch {
	case c.T <= 0 || c.H <= 0 || c.W <= 0:
		return fmt.Errorf("cube %d×%d×%d: sides must be positive", c.T, c.H, c.W)
	case len(c.Data) != n:
		return fmt.Errorf("cube %d×%d×%d: %d values, want %d", c.T, c.H, c.W, len(c.Data), n)
	case c.Errors != nil && len(c.Errors) != n:
		return fmt.Errorf("cube %d×%d×%d: %d errors, want %d", c.T, c.H, c.W, len(c.Errors), n)
	case len(c.Time) != c.T || len(c.Edges) != c.T+1:
		return fmt.Errorf("cube of %d frames: %d times and %d edges", c.T, len(c.Time), len(c.Edges))
	}
	for k := range c.T {
		if !(c.Edges[k] < c.Time[k] && c.Time[k] < c.Edges[k+1]) {
			return fmt.Errorf("cube frame %d: time %g ps outside its edges %g to %g ps",
				k, c.Time[k], c.Edges[k], c.Edges[k+1])
		}
	}
	for j, v := range c.Data {
		if f := float64(v); math.IsNaN(f) || math.IsInf(f, 0) {
			return fmt.Errorf("cube value %d is %g", j, v)
		}
	}
	return nil
}
