package rig

import (
	"errors"
	"fmt"
	"math"
	"slices"
)

// Options describe a simulated station. [Default] and [Large] return
// complete sets; change single fields from there.
type Options struct {
	// Station is the name written into series.toml.
	Station string

	// H, W and T are the rows and columns of the window, in streak pixels,
	// and the number of frames the sweep spans.
	H, W, T int

	// Seed fixes everything random about the hardware: code pattern, flat,
	// dark pattern, hot and dead pixels.
	Seed uint64

	// Direction says where later light lands on the raw streak sensor:
	// down, up, left or right. All positions below are given in the turned
	// frame, in which later light lands further down.
	Direction string

	// WindowX and WindowY place the window's first pixel on the turned
	// streak sensor, px. Margin is the dark border kept right of the
	// window and below the last swept row, px.
	WindowX, WindowY, Margin int

	// NudgeX and NudgeY shift the code plane against the sensor's pixel
	// grid, px; 0 puts the window exactly on whole pixels.
	NudgeX, NudgeY float64

	// Span is the time, in ps, after which the sweep has moved T-1 pixels.
	// Quadratic and Cubic bend the sweep, as fractions of its length;
	// 0 and 0 make it even.
	Span, Quadratic, Cubic float64

	// Pitch is the side of one code element, in window pixels, CodeX and
	// CodeY shift the pattern against the window. Low and High are the
	// transmissions of closed and open elements.
	Pitch, CodeX, CodeY, Low, High float64

	// Streak and Reference describe the two cameras.
	Streak, Reference Sensor

	// Ratio is the throughput of the reference arm over that of the streak
	// arm with the code open.
	Ratio float64

	// View places the scene on the reference sensor.
	View View

	// Field is how far beyond the window the reference arm sees the scene,
	// window px; 0 means that one field stop serves both arms.
	Field int

	// Peak is the light of the brightest voxel of a shot, photoelectrons
	// per window pixel and frame.
	Peak float64

	// Tilt is the unevenness of the "even" light from edge to edge, a
	// fraction; 0 makes it perfectly even.
	Tilt float64

	// UmPerPx is the length in the scene that one window pixel sees, µm.
	UmPerPx float64
}

// View is the way from the upright window to the reference sensor: about the
// centres of both, mirror left-right, scale, turn, shift, then keystone.
type View struct {
	Turn             float64 // degrees, clockwise on the screen (x right, y down)
	Scale            float64 // reference px per window px
	X, Y             float64 // shift of the centre, reference px
	Mirror           bool    // left-right, as after an odd number of mirrors
	KeyX, KeyY       float64 // perspective terms, 1/px; 0 leaves an affine map
	SensorW, SensorH int     // size of the reference sensor, px
}

// Sensor describes one camera.
type Sensor struct {
	// SigmaX and SigmaY are the widths of the Gaussian blur on the sensor,
	// px, in the turned frame.
	SigmaX, SigmaY float64

	// Gain converts, photoelectrons per ADU. ReadNoise is in
	// photoelectrons rms.
	Gain, ReadNoise float64

	// Offset is the level without light, ADU; Pattern the rms of its fixed
	// pattern, ADU; Dark the dark signal per exposure, photoelectrons.
	Offset, Pattern, Dark float64

	// FullWell is where a pixel stops collecting, photoelectrons. Bits is
	// the range of the converter; codes stop at 2^Bits - 1.
	FullWell float64
	Bits     int

	// Bend is the relative loss of signal at full well of a slightly
	// nonlinear response; 0 is linear.
	Bend float64

	// Vignette is the relative loss of light in the corners, Speckle the
	// rms of the pixel to pixel response.
	Vignette, Speckle float64

	// Hot and Dead count the defective pixels.
	Hot, Dead int
}

// Default returns a station with a window of 64×64 pixels and 32 frames.
func Default() Options {
	return Options{
		Station: "rig", H: 64, W: 64, T: 32, Seed: 20260301, Direction: "down",
		WindowX: 17, WindowY: 13, Margin: 12,
		Span: 24.8, Quadratic: 0.06, Cubic: 0.03,
		Pitch: 2, Low: 0.02, High: 0.98,
		Streak: Sensor{SigmaX: 0.7, SigmaY: 0.75, Gain: 2, ReadNoise: 3, Offset: 210,
			Pattern: 1.5, Dark: 4, FullWell: 110000, Bits: 16,
			Vignette: 0.08, Speckle: 0.01, Hot: 9, Dead: 6},
		Reference: Sensor{SigmaX: 0.8, SigmaY: 0.8, Gain: 1.6, ReadNoise: 2.5, Offset: 320,
			Pattern: 2, Dark: 2, FullWell: 140000, Bits: 16,
			Vignette: 0.06, Speckle: 0.01, Hot: 7, Dead: 5},
		Ratio: 0.8,
		View:  View{Turn: 3.2, Scale: 1.06, X: 1.7, Y: -2.4, SensorW: 100, SensorH: 96},
		Peak:  200, Tilt: 0.02, UmPerPx: 12.5,
	}
}

// Large returns a station with a window of 128×128 pixels and 64 frames.
func Large() Options {
	o := Default()
	o.H, o.W, o.T = 128, 128, 64
	o.Span = 50.4
	o.View.SensorW, o.View.SensorH = 176, 168
	return o
}

// Validate lists every fault of the options.
func (o Options) Validate() error {
	var bad []error
	want := func(ok bool, format string, a ...any) {
		if !ok {
			bad = append(bad, fmt.Errorf(format, a...))
		}
	}
	want(o.H >= 4 && o.W >= 4 && o.H <= 4096 && o.W <= 4096, "window %d×%d: sides must be 4 to 4096 px", o.W, o.H)
	want(o.T >= 2 && o.T <= 4096, "T = %d: need 2 to 4096 frames", o.T)
	want(slices.Contains([]string{"down", "up", "left", "right"}, o.Direction),
		"direction %q: want down, up, left or right", o.Direction)
	want(o.WindowX >= 0 && o.WindowY >= 0 && o.Margin >= 0, "window at (%d, %d), margin %d: must not be negative",
		o.WindowX, o.WindowY, o.Margin)
	want(o.Span > 0, "span %g ps: must be positive", o.Span)
	want(o.Span <= 0 || o.curve().rises(), "sweep with quadratic %g and cubic %g does not rise everywhere", o.Quadratic, o.Cubic)
	want(o.Pitch >= 0.5, "code pitch %g px: must be at least 0.5", o.Pitch)
	want(0 <= o.Low && o.Low < o.High && o.High <= 1, "code transmissions %g and %g: want 0 ≤ low < high ≤ 1", o.Low, o.High)
	want(o.Ratio > 0, "throughput ratio %g: must be positive", o.Ratio)
	want(o.View.Scale > 0 && o.View.SensorW > 0 && o.View.SensorH > 0, "view: scale %g and sensor %d×%d must be positive",
		o.View.Scale, o.View.SensorW, o.View.SensorH)
	want(o.Field >= 0, "field %d px: must not be negative", o.Field)
	want(o.Peak > 0, "peak %g pe: must be positive", o.Peak)
	want(math.Abs(o.NudgeX) <= 1 && math.Abs(o.NudgeY) <= 1, "nudge (%g, %g) px: must be within one pixel", o.NudgeX, o.NudgeY)
	for _, c := range []struct {
		name string
		s    Sensor
	}{{"streak", o.Streak}, {"reference", o.Reference}} {
		s := c.s
		want(s.SigmaX > 0 && s.SigmaY > 0, "%s: blur %g, %g px: must be positive", c.name, s.SigmaX, s.SigmaY)
		want(s.Gain > 0 && s.ReadNoise >= 0 && s.FullWell > 0, "%s: gain %g, full well %g must be positive, read noise %g not negative",
			c.name, s.Gain, s.FullWell, s.ReadNoise)
		want(s.Bits >= 8 && s.Bits <= 16, "%s: %d bits: want 8 to 16", c.name, s.Bits)
		want(s.Hot >= 0 && s.Dead >= 0, "%s: %d hot and %d dead pixels: must not be negative", c.name, s.Hot, s.Dead)
	}
	if err := errors.Join(bad...); err != nil {
		return fmt.Errorf("simulated station: %w", err)
	}
	return nil
}
