package calib

import (
	"fmt"
	"math"
	"time"
)

// Quantity is a number with its standard uncertainty, unit and origin.
type Quantity struct {
	Value float64 `toml:"value"`
	Sigma float64 `toml:"sigma"` // one standard deviation; 0 where none is known
	Unit  string  `toml:"unit"`

	// Method says in one sentence how the number was found.
	Method string `toml:"method,omitempty"`
}

func (q Quantity) String() string {
	return fmt.Sprintf("%.4g ± %.2g %s", q.Value, q.Sigma, q.Unit)
}

// Window is the rectangle of the turned streak sensor where the code lands
// with the sweep off.
type Window struct {
	X int `toml:"x"`
	Y int `toml:"y"`
	W int `toml:"w"`
	H int `toml:"h"`
}

// Arm is one calibrated camera. The streak arm is described as turned, so
// that later light lands further down.
type Arm struct {
	W, H int

	Dark []float32 // ADU, mean dark frame
	Flat []float32 // relative response, mean 1 over the lit area
	Bad  []bool    // pixels that must not be used

	// DarkFrames is the number of frames averaged into Dark; 0 means many.
	DarkFrames int

	Gain       Quantity // pe/ADU
	ReadNoise  Quantity // pe rms of one frame, quantisation included
	Saturation Quantity // ADU as recorded, dark included; 0 means never
	Linearity  Quantity // mean relative deviation; Sigma < 0 means not found

	// BlurX and BlurY are the Gaussian blur for the forward model of
	// package optics, in pixels of this arm's own (turned) sensor. OpticalX
	// and OpticalY are the blur of the optics alone. The two differ where
	// the model's pixels blur by themselves: see doc.go.
	BlurX, BlurY       Quantity
	OpticalX, OpticalY Quantity

	// Floor is the part of the signal that the model cannot explain, rms.
	Floor float64
}

// Bundle is everything calibrated about a station.
type Bundle struct {
	Station   string
	ID        string // sha256 over the contents, set by Save and Load
	Direction string // sweep.direction of the raw streak frames

	Created, ValidFrom, ValidUntil time.Time // ValidFrom, ValidUntil zero: no limit

	Streak, Reference Arm

	Window Window
	Code   []float32 // Window.H × Window.W, 0 to 1, free of blur

	// Registration maps a window pixel (x, y) to the reference sensor:
	// row-major 3 × 3, last element 1.
	Registration         [9]float64
	RegistrationKind     string  // affine or homography
	RegistrationResidual float64 // px of the reference sensor, rms uncertainty over the window

	Ratio Quantity // reference pe per streak pe of the same scene, code open

	Sweep  Sweep
	First  float64 // s_0: displacement of frame 0, whole px
	Frames int     // T

	Scale Quantity // µm per window px; Value 0 means unknown

	Warnings []string

	report []byte // report.html, if Calibrate made one
}

// Point maps a window position to the reference sensor.
func (b *Bundle) Point(x, y float64) (u, v float64) { return apply(b.Registration, x, y) }

// Times returns the centres of the T frames, ps: s⁻¹(s_0 + k).
func (b *Bundle) Times() []float64 {
	t := make([]float64, b.Frames)
	for k := range t {
		t[k] = b.Sweep.Inverse(b.First + float64(k))
	}
	return t
}

// Edges returns the T+1 limits of the frames, ps: s⁻¹(s_0 + k − ½).
func (b *Bundle) Edges() []float64 {
	t := make([]float64, b.Frames+1)
	for k := range t {
		t[k] = b.Sweep.Inverse(b.First + float64(k) - 0.5)
	}
	return t
}

// Validate reports the first thing that makes the bundle unusable.
func (b *Bundle) Validate() error {
	for _, a := range []struct {
		name string
		arm  *Arm
	}{{"streak", &b.Streak}, {"reference", &b.Reference}} {
		if err := a.arm.validate(); err != nil {
			return fmt.Errorf("%s arm: %w", a.name, err)
		}
	}
	w := b.Window
	switch {
	case w.W <= 0 || w.H <= 0 || w.X < 0 || w.Y < 0 ||
		w.W > b.Streak.W-w.X || w.H > b.Streak.H-w.Y:
		return fmt.Errorf("window %d×%d at (%d, %d) does not lie on the %d×%d streak sensor",
			w.W, w.H, w.X, w.Y, b.Streak.W, b.Streak.H)
	case len(b.Code) != w.W*w.H:
		return fmt.Errorf("code has %d values, window %d×%d", len(b.Code), w.W, w.H)
	case !finite(b.Registration[:]...):
		return fmt.Errorf("registration is not finite")
	case b.Registration[8] == 0:
		return fmt.Errorf("registration ends in 0, expected 1")
	case !(b.Ratio.Value > 0) || math.IsInf(b.Ratio.Value, 0):
		return fmt.Errorf("throughput ratio is %g, expected a positive number", b.Ratio.Value)
	case b.Frames <= 0 || b.Frames > 1<<20:
		return fmt.Errorf("number of frames is %d", b.Frames)
	case !finite(b.First) || b.First != math.Round(b.First):
		return fmt.Errorf("first displacement is %g px, expected a whole number", b.First)
	}
	for i, c := range b.Code {
		if !(c >= 0 && c <= 1) {
			return fmt.Errorf("code value %d is %g, expected 0 to 1", i, c)
		}
	}
	return b.Sweep.validate()
}

func (a *Arm) validate() error {
	n := a.W * a.H
	switch {
	case a.W <= 0 || a.H <= 0 || a.W > 1<<20 || a.H > 1<<20:
		return fmt.Errorf("sensor is %d×%d", a.W, a.H)
	case len(a.Dark) != n || len(a.Flat) != n || len(a.Bad) != n:
		return fmt.Errorf("sensor is %d×%d but dark, flat and bad hold %d, %d and %d pixels",
			a.W, a.H, len(a.Dark), len(a.Flat), len(a.Bad))
	case !(a.Gain.Value > 0) || math.IsInf(a.Gain.Value, 0):
		return fmt.Errorf("gain is %g, expected a positive number", a.Gain.Value)
	case !(a.ReadNoise.Value >= 0) || math.IsInf(a.ReadNoise.Value, 0):
		return fmt.Errorf("read noise is %g", a.ReadNoise.Value)
	case !(a.BlurX.Value >= 0 && a.BlurY.Value >= 0 && a.BlurX.Value < 100 && a.BlurY.Value < 100):
		return fmt.Errorf("blur is %g × %g px", a.BlurX.Value, a.BlurY.Value)
	case !(a.Floor >= 0 && a.Floor <= 1):
		return fmt.Errorf("model-error floor is %g, expected 0 to 1", a.Floor)
	}
	for i, f := range a.Flat {
		if !a.Bad[i] && (!(f > 0) || math.IsInf(float64(f), 0) || math.IsNaN(float64(a.Dark[i]))) {
			return fmt.Errorf("pixel (%d, %d) has flat %g and dark %g but is not marked bad",
				i%a.W, i/a.W, f, a.Dark[i])
		}
	}
	return nil
}

func finite(v ...float64) bool {
	for _, x := range v {
		if math.IsNaN(x) || math.IsInf(x, 0) {
			return false
		}
	}
	return true
}

// apply maps (x, y) by the homography h.
func apply(h [9]float64, x, y float64) (u, v float64) {
	d := h[6]*x + h[7]*y + h[8]
	return (h[0]*x + h[1]*y + h[2]) / d, (h[3]*x + h[4]*y + h[5]) / d
}
