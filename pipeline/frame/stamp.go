package frame

import (
	"errors"
	"fmt"
	"path/filepath"
	"strings"
	"time"
)

// Stamp is when a frame was taken, or which shot it belongs to.
type Stamp struct {
	// Time is zero if the frame tells a shot number only, or a shot number
	// and a date without the time of day.
	Time time.Time

	Shot    int64
	HasShot bool

	// Source is "name", "tag", "sidecar" or "mtime".
	Source string

	// Weak says that the time is the file's modification time: when the file
	// was written or copied, not when the frame was taken.
	Weak bool
}

// Stamper reads the stamps of one arm's frame files.
type Stamper struct {
	source  string
	pattern *pattern // for "name"
	loc     *time.Location
}

// NewStamper makes a Stamper of a pattern for file names (see the package
// comment) or of the word "tag", "sidecar" or "mtime". Times without a zone
// are in loc; nil means UTC. Where a clock is set back, as in autumn, a local
// time that comes twice is taken as one of the two: cameras are better set to
// UTC.
func NewStamper(spec string, loc *time.Location) (*Stamper, error) {
	if loc == nil {
		loc = time.UTC
	}
	switch spec {
	case "tag", "sidecar", "mtime":
		return &Stamper{source: spec, loc: loc}, nil
	}
	p, err := compile(spec)
	if err != nil {
		return nil, fmt.Errorf("stamp pattern %q: %w", spec, err)
	}
	return &Stamper{source: "name", pattern: p, loc: loc}, nil
}

// suffixes are the ends of frame file names when no pattern says more.
var suffixes = []string{".tif", ".tiff", ".png", ".fit", ".fits", ".fts", ".npy"}

// Match reports whether a file of this name belongs to the arm. Only the last
// element of name counts. Hidden files and names that programs give to
// unfinished files never match.
func (s *Stamper) Match(name string) bool {
	if name == "" || name[len(name)-1] == '/' || name[len(name)-1] == filepath.Separator {
		return false
	}
	base := filepath.Base(name)
	low := strings.ToLower(base)
	if strings.HasPrefix(base, ".") || strings.HasSuffix(low, ".tmp") ||
		strings.HasSuffix(low, ".part") || strings.HasSuffix(low, "~") {
		return false
	}
	if s.pattern != nil {
		return s.pattern.match(base) != nil
	}
	for _, x := range suffixes {
		if strings.HasSuffix(low, x) && len(low) > len(x) {
			return true
		}
	}
	return false
}

// Stamp reads the stamp of the frame file at path, whose modification time is
// mtime. It opens the file only for "tag", and then reads headers only.
//
// An error that wraps ErrTruncated, or for "sidecar" fs.ErrNotExist, may go
// away when the camera program has finished; ErrStamp stays.
func (s *Stamper) Stamp(path string, mtime time.Time) (Stamp, error) {
	st := Stamp{Source: s.source}
	var err error
	switch s.source {
	case "name":
		err = s.pattern.stamp(&st, filepath.Base(path), s.loc)
	case "tag":
		st.Time, err = s.tag(path)
	case "sidecar":
		err = readSidecar(&st, path, s.loc)
	case "mtime":
		st.Time, st.Weak = mtime, true
		if mtime.IsZero() {
			err = errors.New("the file system gives no modification time")
		}
	}
	if err != nil {
		return Stamp{}, fmt.Errorf("stamp frame %q: %w", path, err)
	}
	return st, nil
}

func (s *Stamper) tag(path string) (time.Time, error) {
	f, size, err := open(path)
	if err != nil {
		return time.Time{}, err
	}
	defer f.Close()
	lim := Limits{MaxBytes: 1 << 62} // pixels are not read
	return tagTime(newSource(f, size, lim), s.loc)
}
