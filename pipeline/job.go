package pipeline

import (
	"errors"
	"fmt"
	"time"

	"unsheard/pipeline/cube"
	"unsheard/pipeline/frame"
	"unsheard/pipeline/measure"
	"unsheard/pipeline/solve"
)

// The passes over a shot.
const (
	Quick = "quick" // coarse and fast
	Full  = "full"  // full resolution
)

// Job is one pass over one shot.
type Job struct {
	Shot    string    `json:"shot"`    // name, the streak frame's stem
	Station string    `json:"station"` // "" outside a service
	Taken   time.Time `json:"taken"`   // by the streak camera's clock; zero: unknown

	Streak    string `json:"streak"`    // frame file
	Reference string `json:"reference"` // frame file
	Bundle    string `json:"bundle"`    // folder of one bundle

	// Pass names the pass in the result. Default Full, or Quick with Coarse
	// above 1.
	Pass string `json:"pass"`

	// Coarse is the number of window pixels, and of sweep pixels, that one
	// cube pixel and frame cover. Default 1.
	Coarse int `json:"coarse"`

	// Workers is the number of goroutines. The cube does not depend on it.
	// Default: the processors.
	Workers int `json:"workers"`

	// Limits bound the frames that are read.
	Limits frame.Limits `json:"limits"`

	// Extra holds reasons for doubt that were found before the shot was
	// read.
	Extra []measure.Reason `json:"extra,omitempty"`
}

func (j *Job) fill() error {
	if j.Coarse == 0 {
		j.Coarse = 1
	}
	if j.Coarse < 1 || j.Coarse > 16 {
		return fmt.Errorf("coarse factor %d: must be 1 to 16", j.Coarse)
	}
	if j.Pass == "" {
		j.Pass = Full
		if j.Coarse > 1 {
			j.Pass = Quick
		}
	}
	if j.Streak == "" || j.Reference == "" || j.Bundle == "" {
		return errors.New("a job needs a streak frame, a reference frame and a bundle")
	}
	return nil
}

// Plane is a measured frame beside what the cube predicts for it, over the
// part of the sensor that the model speaks of.
type Plane struct {
	Arm             string
	X, Y, W, H      int // place on the (turned, binned) sensor
	Measured, Model []float32
	Variance        []float32 // photoelectrons²; not positive: masked
}

// Result is everything a pass found.
type Result struct {
	Cube       *cube.Cube
	Report     *measure.Report
	Planes     []Plane
	Provenance Provenance
}

// ErrShape reports a frame whose size does not fit the bundle.
var ErrShape = errors.New("frame does not fit the bundle")

// IsPermanent reports whether another try is pointless.
func IsPermanent(err error) bool {
	for _, e := range []error{ErrShape, frame.ErrFormat, frame.ErrTooLarge, frame.ErrEmpty, solve.ErrMasked} {
		if errors.Is(err, e) {
			return true
		}
	}
	return false
}

// Bytes estimates the peak memory of a pass over a cube of t frames of h rows
// and w columns from frames of px pixels in all: 80 bytes a voxel (the cube and
// the trials among which the spacing of the splines is chosen, as they lie in a
// collected heap), 40 a frame pixel, and a fixed part. Measured peaks of the
// process were 62 MB for 34 frames of 64×64 and 136 MB for 66 of 128×128.
func Bytes(t, h, w, px int) int64 {
	const fixed = 56 << 20
	return fixed + 80*int64(t)*int64(h)*int64(w) + 40*int64(px)
}
