package export

import (
	"encoding/json"
	"errors"
	"fmt"
	"time"

	"unsheard/pipeline/cube"
	"unsheard/pipeline/measure"
)

// The files of a result folder.
const (
	fileCube     = "cube.nxs"
	fileMetrics  = "metrics.json"
	fileContact  = "contact.png"
	fileMovie    = "movie.png"
	fileLight    = "light.svg"
	fileArrival  = "arrival.png"
	fileResidual = "residual.png"
	fileLog      = "log.jsonl"
	versions     = "versions"
)

// quick is the pass that a finer one replaces without a trace.
const quick = "quick"

var (
	// ErrContent says that a result contradicts itself; trying again does
	// not help.
	ErrContent = errors.New("result is not fit to publish")
	// ErrPlace says that something that is not a result of ours stands at
	// the place to publish; trying again does not help.
	ErrPlace = errors.New("will not publish there")
)

// Result is everything known about one pass over one shot.
type Result struct {
	Shot    string // name of the shot
	Station string // may be empty
	Pass    string // quick, full or spread
	Bundle  string // identity of the calibration bundle

	Cube   *cube.Cube
	Report *measure.Report
	Frames []FramePlane

	// Provenance is a JSON object. The members program, version, started,
	// taken, streak.path and reference.path are read if they are there.
	Provenance json.RawMessage

	// Log is JSON, one object a line.
	Log []byte
}

// FramePlane is a measured frame beside what the cube predicts, photoelectrons
// per pixel, row-major. Variance that is not positive marks a masked pixel.
type FramePlane struct {
	Arm                       string
	W, H                      int
	Measured, Model, Variance []float32
}

// Options say how to publish.
type Options struct {
	// Attempt tells attempts apart in the names of partial folders; they are
	// unique without it. Default empty.
	Attempt string

	// Workers is the number of goroutines that compress. Default: one per
	// core that Go may use.
	Workers int

	// Bits is the number of mantissa bits kept in the cube; 10 halve its
	// size at a relative error below 5e-4. Default 0: all.
	Bits int

	// Warn hears of trouble that leaves the new result whole and in place,
	// as an older result that could not be filed yet. Default: nobody.
	Warn func(error)

	disk  *disk                                  // tests put faults in here
	now   func() time.Time                       // tests set the clock
	parts func(*Result, origin, *Options) []part // tests leave the pictures out
}

func (o *Options) fill() {
	if o.Warn == nil {
		o.Warn = func(error) {}
	}
	if o.disk == nil {
		o.disk = &realDisk
	}
	if o.now == nil {
		o.now = time.Now
	}
	if o.parts == nil {
		o.parts = parts
	}
}

// origin is the part of the provenance that is used here.
type origin struct {
	Program string  `json:"program"`
	Version string  `json:"version"`
	Started lenient `json:"started"`
	Taken   lenient `json:"taken"`
	Streak  struct {
		Path string `json:"path"`
	} `json:"streak"`
	Reference struct {
		Path string `json:"path"`
	} `json:"reference"`
}

// lenient is a time that stays zero where it cannot be read, so that the
// members beside it still are.
type lenient struct{ time.Time }

func (l *lenient) UnmarshalJSON(b []byte) error {
	if err := l.Time.UnmarshalJSON(b); err != nil {
		l.Time = time.Time{}
	}
	return nil
}

// check refuses a result that cannot be published.
func (r *Result) check() (o origin, err error) {
	bad := func(format string, args ...any) (origin, error) {
		return origin{}, fmt.Errorf("%w: "+format, append([]any{ErrContent}, args...)...)
	}
	switch {
	case r.Cube == nil:
		return bad("no cube")
	case r.Report == nil:
		return bad("no report")
	case r.Pass == "":
		return bad("no pass")
	}
	if err := r.Cube.Check(); err != nil {
		return bad("%w", err)
	}
	for _, f := range r.Frames {
		n := f.W * f.H
		if f.W <= 0 || f.H <= 0 || len(f.Measured) != n || !fits(f.Model, n) || !fits(f.Variance, n) {
			return bad("%s frame %d×%d has %d measured, %d model and %d variance values",
				f.Arm, f.W, f.H, len(f.Measured), len(f.Model), len(f.Variance))
		}
	}
	if r.Provenance == nil {
		return o, nil
	}
	var object map[string]json.RawMessage
	if err := json.Unmarshal(r.Provenance, &object); err != nil {
		return bad("provenance is no JSON object: %w", err)
	}
	// Other members than the expected ones are nobody's fault.
	_ = json.Unmarshal(r.Provenance, &o)
	return o, nil
}

func fits(v []float32, n int) bool { return v == nil || len(v) == n }
