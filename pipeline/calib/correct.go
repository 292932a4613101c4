package calib

import (
	"fmt"
	"math"

	"unsheard/pipeline/frame"
)

// Corrected is a frame in photoelectrons. With f the flat, g the gain and r
// the read noise of the arm,
//
//	PE  = g·(ADU − dark)/f
//	Var = (max(g·(ADU − dark), 0) + r²·(1 + 1/n)) / f²
//
// where n is the number of dark frames. ReadVar is the part of Var without
// light, and Slope = 1/f the variance per corrected photoelectron, so that a
// solver may put its own estimate of the light in:
//
//	Var = ReadVar + Slope·max(PE, 0)
//
// Var and ReadVar are −1 where the pixel is bad, saturated or not finite; PE
// is 0 there unless the pixel saturates.
type Corrected struct {
	W, H int

	PE, Var, ReadVar, Slope []float32

	Saturated int // pixels at or above Arm.Saturation, bad ones not counted
	Bad       int // bad pixels of the arm and values that are not finite

	// SaturatedShare is Saturated over the lit good pixels: those above five
	// standard deviations of the read noise.
	SaturatedShare float64
}

// litSigma is how far above the read noise a pixel counts as lit: of a
// million dark pixels less than one passes 5 σ.
const litSigma = 5

// Correct turns a frame into photoelectrons. A streak frame must have been
// turned already (frame.Turn with Bundle.Direction).
func (a *Arm) Correct(f *frame.Frame) (*Corrected, error) {
	if f.W != a.W || f.H != a.H {
		return nil, fmt.Errorf("frame is %d×%d px, the bundle was made for %d×%d: use the sensor area and binning of the calibration, or calibrate again",
			f.W, f.H, a.W, a.H)
	}
	if len(f.Pix) != a.W*a.H || a.validate() != nil {
		return nil, fmt.Errorf("calibration of the arm: %w", a.validate())
	}
	n := a.W * a.H
	c := &Corrected{W: a.W, H: a.H, PE: make([]float32, n), Var: make([]float32, n),
		ReadVar: make([]float32, n), Slope: make([]float32, n)}
	gain, read := a.Gain.Value, a.ReadNoise.Value
	read2 := read * read
	if a.DarkFrames > 0 {
		read2 *= 1 + 1/float64(a.DarkFrames)
	}
	top := a.Saturation.Value
	if !(top > 0) {
		top = math.Inf(1)
	}
	lit := 0
	for i, adu := range f.Pix {
		v := float64(adu)
		if a.Bad[i] || math.IsNaN(v) || math.IsInf(v, 0) {
			c.Bad++
			c.Var[i], c.ReadVar[i], c.Slope[i] = -1, -1, 1
			continue
		}
		flat := float64(a.Flat[i])
		pe := gain * (v - float64(a.Dark[i]))
		c.PE[i] = float32(pe / flat)
		c.Slope[i] = float32(1 / flat)
		if pe > litSigma*read {
			lit++
		}
		if v >= top {
			c.Saturated++
			c.Var[i], c.ReadVar[i] = -1, -1
			continue
		}
		c.ReadVar[i] = float32(read2 / (flat * flat))
		c.Var[i] = float32((read2 + max(pe, 0)) / (flat * flat))
	}
	if c.Saturated > 0 {
		c.SaturatedShare = float64(c.Saturated) / float64(max(lit, c.Saturated))
	}
	return c, nil
}
