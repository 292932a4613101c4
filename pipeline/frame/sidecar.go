package frame

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"path/filepath"
	"strconv"
	"strings"
	"time"
)

// maxSidecar bounds the JSON file beside a frame.
const maxSidecar = 1 << 16

// readSidecar reads the JSON file beside the frame at path: frame.tif.json,
// or else frame.json.
func readSidecar(st *Stamp, path string, loc *time.Location) error {
	names := []string{path + ".json", strings.TrimSuffix(path, filepath.Ext(path)) + ".json"}
	for _, name := range names {
		f, size, err := open(name)
		if errors.Is(err, fs.ErrNotExist) {
			continue
		}
		if err != nil {
			return fmt.Errorf("sidecar %q: %w", name, err)
		}
		defer f.Close()
		if size > maxSidecar {
			return fmt.Errorf("sidecar %q: %d bytes, want at most %d", name, size, maxSidecar)
		}
		b, err := io.ReadAll(io.LimitReader(f, maxSidecar))
		if err == nil {
			err = parseSidecar(st, b, loc)
		}
		if err != nil {
			return fmt.Errorf("sidecar %q: %w", name, err)
		}
		return nil
	}
	return fmt.Errorf("no sidecar %q or %q beside it: %w", filepath.Base(names[0]), filepath.Base(names[1]), fs.ErrNotExist)
}

// parseSidecar reads {"time": "2031-05-06T07:08:09.123456Z", "shot": 17}, of
// which one may be missing; other keys are left alone.
func parseSidecar(st *Stamp, b []byte, loc *time.Location) error {
	b = bytes.TrimPrefix(b, []byte("\xef\xbb\xbf")) // Windows editors begin so
	var v struct {
		Time *string      `json:"time"`
		Shot *json.Number `json:"shot"`
	}
	dec := json.NewDecoder(bytes.NewReader(b))
	if err := dec.Decode(&v); err != nil {
		if errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF) {
			return fmt.Errorf("%w: the JSON text ends early; wait until it is written", ErrTruncated)
		}
		return fmt.Errorf(`%w: %v; want {"time": "2031-05-06T07:08:09.123Z", "shot": 17}`, ErrStamp, err)
	}
	if _, err := dec.Token(); !errors.Is(err, io.EOF) {
		return fmt.Errorf("%w: something follows the JSON object", ErrStamp)
	}
	if v.Time == nil && v.Shot == nil {
		return fmt.Errorf(`%w: neither "time" nor "shot" in it`, ErrStamp)
	}
	if v.Time != nil {
		t, err := iso(*v.Time, loc)
		if err != nil {
			return fmt.Errorf(`%w: "time" is %q, want RFC 3339 such as "2031-05-06T07:08:09.123Z"`, ErrStamp, *v.Time)
		}
		st.Time = t
	}
	if v.Shot != nil {
		n, err := strconv.ParseInt(v.Shot.String(), 10, 64)
		if err != nil || n < 0 {
			return fmt.Errorf(`%w: "shot" is %s, want a whole number`, ErrStamp, v.Shot)
		}
		st.Shot, st.HasShot = n, true
	}
	return nil
}

// iso reads RFC 3339; without a zone the time is in loc.
func iso(s string, loc *time.Location) (time.Time, error) {
	t, err := time.Parse(time.RFC3339, s)
	if err == nil {
		return t, nil
	}
	return time.ParseInLocation("2006-01-02T15:04:05", s, loc)
}
