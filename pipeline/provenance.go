package pipeline

import (
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"io"
	"os"
	"runtime"
	"runtime/debug"
	"time"

	"unsheard/pipeline/frame"
)

// Version is the program's version, set when it is built.
var Version = "development"

// Source names a file that went into a result.
type Source struct {
	Path   string `json:"path"`
	Bytes  int64  `json:"bytes"`
	SHA256 string `json:"sha256"`
}

// Provenance says where a result comes from: enough to make it again.
type Provenance struct {
	Program  string             `json:"program"`
	Version  string             `json:"version"`
	Build    string             `json:"build,omitempty"` // revision, if it was built from one
	Go       string             `json:"go"`
	Platform string             `json:"platform"`
	Host     string             `json:"host"`
	Started  time.Time          `json:"started"`
	Stages   map[string]float64 `json:"stages_seconds"`

	Shot    string     `json:"shot"`
	Station string     `json:"station,omitempty"`
	Taken   *time.Time `json:"taken,omitempty"`
	Pass    string     `json:"pass"`
	Coarse  int        `json:"coarse"`

	Streak       Source `json:"streak"`
	Reference    Source `json:"reference"`
	BundleID     string `json:"bundle_id"`
	BundleFolder string `json:"bundle_folder"`

	Solver Solver `json:"solver"`
}

// Solver records how the reconstruction ended.
type Solver struct {
	Method     string  `json:"method"`
	Status     string  `json:"status"`
	Iterations int     `json:"iterations"`
	Lambda     float64 `json:"lambda"`
	Alpha      float64 `json:"alpha"`
	// Spacing of the spline knots along time, y and x, in frames and cube
	// pixels; 0 where the cube is the voxels' own.
	Spacing      [3]float64 `json:"spacing"`
	Misfit       float64    `json:"misfit_streak"`
	MisfitOther  float64    `json:"misfit_reference"`
	Note         string     `json:"note,omitempty"`
	GuardFrames  int        `json:"guard_frames"`
	OutsideShare float64    `json:"outside_share"`
}

func newProvenance(j *Job) Provenance {
	host, err := os.Hostname()
	if err != nil {
		host = "unknown"
	}
	p := Provenance{Program: "unsheard", Version: Version, Go: runtime.Version(),
		Platform: runtime.GOOS + "/" + runtime.GOARCH, Host: host, Started: time.Now().UTC(),
		Stages: map[string]float64{}, Shot: j.Shot, Station: j.Station, Pass: j.Pass, Coarse: j.Coarse}
	if !j.Taken.IsZero() {
		t := j.Taken.UTC()
		p.Taken = &t
	}
	if info, ok := debug.ReadBuildInfo(); ok {
		for _, s := range info.Settings {
			if s.Key == "vcs.revision" {
				p.Build = s.Value
			}
		}
	}
	return p
}

// read decodes a frame file and hashes it through the same open file. A file
// that changes meanwhile is an error: the hash would not be that of the pixels.
func read(path string, lim frame.Limits) (*frame.Frame, Source, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, Source{}, fmt.Errorf("read frame: %w", err)
	}
	defer f.Close()
	before, err := f.Stat()
	if err != nil {
		return nil, Source{}, fmt.Errorf("read frame: %w", err)
	}
	fr, err := frame.Decode(f, before.Size(), path, lim)
	if err != nil {
		return nil, Source{}, err
	}
	h := sha256.New()
	n, err := io.Copy(h, f)
	if err != nil {
		return nil, Source{}, fmt.Errorf("read frame %q: %w", path, err)
	}
	after, err := f.Stat()
	if err != nil {
		return nil, Source{}, fmt.Errorf("read frame: %w", err)
	}
	if n != before.Size() || after.Size() != n || !after.ModTime().Equal(before.ModTime()) {
		return nil, Source{}, fmt.Errorf("read frame %q: the file changed while it was read: wait until the camera program has finished writing", path)
	}
	return fr, Source{Path: path, Bytes: n, SHA256: hex.EncodeToString(h.Sum(nil))}, nil
}
