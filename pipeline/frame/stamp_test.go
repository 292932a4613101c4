package frame

import (
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"
)

func utc(s string) time.Time {
	t, err := time.Parse(time.RFC3339, s)
	if err != nil {
		panic(err)
	}
	return t
}

// stampCases: want "" means that the name does not match or gives no date;
// "-" means no time but a shot.
var stampCases = []struct {
	pattern, name, want string
	shot                int64 // -1: none
}{
	{"S_%Y%m%dT%H%M%S.%f.tif", "S_20310506T070809.123456.tif", "2031-05-06T07:08:09.123456Z", -1},
	{"S_%Y%m%dT%H%M%S.%f.tif", "S_20310506T070809.5.tif", "2031-05-06T07:08:09.5Z", -1},
	{"S_%Y%m%dT%H%M%S.%f.tif", "S_20310506T070809.123456789.tif", "2031-05-06T07:08:09.123456789Z", -1},
	{"S_%Y%m%dT%H%M%S.%f.tif", "S_20310506T070809.1234567890.tif", "", -1},
	{"S_%Y%m%dT%H%M%S.%f.tif", "S_20310506T070809.tif", "", -1},
	{"S_%Y%m%dT%H%M%S.%f.tif", "xS_20310506T070809.1.tif", "", -1},
	{"S_%Y%m%dT%H%M%S.%f.tif", "S_20310506T070809.1.tiff", "", -1},
	{"S_%Y%m%dT%H%M%S.%f.tif", "s_20310506t070809.1.TIF", "2031-05-06T07:08:09.1Z", -1},
	{"S_%Y%m%dT%H%M%S.%f.tif", "S_20311306T070809.1.tif", "", -1},
	{"S_%Y%m%dT%H%M%S.%f.tif", "S_20310231T070809.1.tif", "", -1}, // matches, but no date
	{"S_%Y%m%dT%H%M%S%f.tif", "S_20310506T070809123.tif", "2031-05-06T07:08:09.123Z", -1},
	{"S_%Y%m%dT%H%M%S.tif", "S_2031056T070809.tif", "", -1}, // one digit short
	{"%Y-%m-%d %H-%M-%S.tif", "2031-5-6 7-8-9.tif", "2031-05-06T07:08:09Z", -1},
	{"%d%b%y_%H%M.png", "06May31_0708.png", "2031-05-06T07:08:00Z", -1},
	{"%d%b%y_%H%M.png", "06MAY99_0708.png", "1999-05-06T07:08:00Z", -1},
	{"%d%b%y_%H%M.png", "06May68_0708.png", "2068-05-06T07:08:00Z", -1},
	{"%d%b%y_%H%M.png", "06May69_0708.png", "1969-05-06T07:08:00Z", -1},
	{"%Y%j_%H%M%S.fits", "2032060_000000.fits", "2032-02-29T00:00:00Z", -1},
	{"%Y%j_%H%M%S.fits", "2031366_000000.fits", "", -1},
	{"%Y%j_%H%M%S.fits", "2032366_000000.fits", "2032-12-31T00:00:00Z", -1},
	{"%Y%j_%H%M%S.fits", "2032000_000000.fits", "", -1},
	{"r%s.npy", "r1936000000.npy", "2031-05-08T09:46:40Z", -1},
	{"r%s.%f.npy", "r1936000000.25.npy", "2031-05-08T09:46:40.25Z", -1},
	{"%Y%m%d%H%M%S%z.tif", "20310506070809+0530.tif", "2031-05-06T01:38:09Z", -1},
	{"%Y%m%d%H%M%S%z.tif", "20310506070809-03.tif", "2031-05-06T10:08:09Z", -1},
	{"%Y%m%d%H%M%S%z.tif", "20310506070809Z.tif", "2031-05-06T07:08:09Z", -1},
	{"shot{shot}_s.tif", "shot00017_s.tif", "-", 17},
	{"shot{shot}_s.tif", "shot_s.tif", "", -1},
	{"{*}{shot}.tif", "run12_0034.tif", "-", 34},
	{"{*}_{shot}_{*}.tif", "a_b_12_x_3.tif", "-", 12},
	{"{shot}{*}.tif", "1234567890123456789012.tif", "", -1},
	{"{shot}_%Y%m%d%H%M%S.tif", "5_20310506070809.tif", "2031-05-06T07:08:09Z", 5},
	{"{shot}_%Y%m%d.tif", "5_20310506.tif", "-", 5},
	{"{shot}_%Y%m%d.tif", "5_20310231.tif", "", -1},
	{"100%%_{shot}.tif", "100%_8.tif", "-", 8},
	{"a.b+c({shot}).tif", "a.b+c(3).tif", "-", 3},
	{"a.b+c({shot}).tif", "aXb+c(3).tif", "", -1},
	{"{*}", "x", "", -1},
}

func TestStampName(t *testing.T) {
	for _, c := range stampCases {
		s, err := NewStamper(c.pattern, time.UTC)
		if c.pattern == "{*}" {
			if err == nil {
				t.Errorf("pattern %q: no error", c.pattern)
			}
			continue
		}
		if err != nil {
			t.Errorf("pattern %q: %v", c.pattern, err)
			continue
		}
		path := filepath.Join("some", "folder", c.name)
		got, err := s.Stamp(path, time.Unix(1, 0))
		if c.want == "" {
			if !errors.Is(err, ErrStamp) || !strings.Contains(err.Error(), c.name) {
				t.Errorf("pattern %q, name %q: %+v, %v, want ErrStamp", c.pattern, c.name, got, err)
			}
			continue
		}
		if err != nil {
			t.Error(err)
			continue
		}
		if !s.Match(path) {
			t.Errorf("pattern %q does not match %q", c.pattern, c.name)
		}
		want := Stamp{Source: "name"}
		if c.want != "-" {
			want.Time = utc(c.want)
		}
		if c.shot >= 0 {
			want.Shot, want.HasShot = c.shot, true
		}
		if !got.Time.Equal(want.Time) || got.Shot != want.Shot || got.HasShot != want.HasShot || got.Source != "name" || got.Weak {
			t.Errorf("pattern %q, name %q: %+v, want %+v", c.pattern, c.name, got, want)
		}
	}
}

func TestPatternMistakes(t *testing.T) {
	for _, c := range []struct{ pattern, word string }{
		{"", "empty"},
		{"S.tif", "needs a date"},
		{"tags", "needs a date"},
		{"S_%H%M%S.tif", "%H needs %d or %j"},
		{"S_%Y%m%d.tif", "no time of day"},
		{"S_%Y%m%d_%M.tif", "%M needs %H"},
		{"S_%Y%m%d_%H%S.tif", "%S needs %M"},
		{"S_%Y%m%d_%H%M.%f.tif", "%f needs %S or %s"},
		{"S_%m%d_%H%M%S.tif", "%d needs %Y or %y"},
		{"S_%Y%d_%H%M%S.tif", "%d needs %m or %b"},
		{"S_%H%M%S_{shot}.tif", "%H needs"},
		{"S_%Q.tif", `"%Q" at character 3`},
		{"S_%", `"%" at character 3`},
		{"S_%é.tif", `"%é" at character 3`},
		{"S_{number}.tif", `"{number}" at character 3`},
		{"S_{shot.tif", `"{shot.tif" at character 3`},
		{"%Y%m%d%H%M%S_%Y.tif", "%Y comes twice"},
		{"{shot}{shot}", "{shot} comes twice"},
		{"%Y%y%m%d_%H", "contradict"},
		{"%Y%j%m%d_%H", "contradict"},
		{"%s_%Y%m%d", "contradict"},
		{"%Y%m%d%H%M%S.%f{shot}.tif", "%f has any number of digits"},
		{"{shot}%Y%m%d%H.tif", "{shot} has any number of digits"},
		{"{shot}7.tif", "{shot} has any number of digits"},
		{"{*}{*}{shot}", "one is enough"},
		{`D:\drop\{shot}.tif`, "folder"},
		{"sub/{shot}.tif", "folder"},
		{"{shot}" + strings.Repeat("x", 300), "longer"},
	} {
		_, err := NewStamper(c.pattern, nil)
		if err == nil || !strings.Contains(err.Error(), c.word) {
			t.Errorf("pattern %q: error %v, want one with %q", c.pattern, err, c.word)
		}
	}
}

// TestStampZone: a time without a zone is in the given location, summer time
// included; one with a zone is not.
func TestStampZone(t *testing.T) {
	loc, err := time.LoadLocation("Europe/Berlin")
	if err != nil {
		t.Fatal(err)
	}
	for pattern, want := range map[string]string{
		"%Y%m%d%H%M%S": "2031-07-06T05:08:09Z", "%Y%m%d%H%M%S%z": "2031-07-06T03:08:09Z"} {
		s, err := NewStamper(pattern, loc)
		if err != nil {
			t.Fatal(err)
		}
		name := "20310706070809"
		if strings.HasSuffix(pattern, "%z") {
			name += "+0400"
		}
		got, err := s.Stamp(name, time.Time{})
		if err != nil || !got.Time.Equal(utc(want)) {
			t.Errorf("%s: %v (%v), want %s", pattern, got.Time, err, want)
		}
	}
}

func TestMatch(t *testing.T) {
	for _, spec := range []string{"tag", "sidecar", "mtime"} {
		s, err := NewStamper(spec, nil)
		if err != nil {
			t.Fatal(err)
		}
		for name, want := range map[string]bool{
			"a.tif": true, "a.TIFF": true, "b/c.png": true, "x.fit": true, "x.FITS": true, "x.fts": true, "x.npy": true,
			"a.tif/": false, ".tif": false, ".a.tif": false, "a.tif.tmp": false, "a.tif.PART": false, "a.tif~": false,
			"a.json": false, "a.jpg": false, "a": false, "": false, "a.tif.json": false, "..": false, "a.shot": false,
		} {
			if got := s.Match(name); got != want {
				t.Errorf("%s: Match(%q) = %v, want %v", spec, name, got, want)
			}
		}
	}
	s, err := NewStamper("{*}{shot}{*}", nil)
	if err != nil {
		t.Fatal(err)
	}
	for name, want := range map[string]bool{"a1b": true, "d/a1": true, ".a1": false, "a1.tmp": false, "a1.part": false, "a1~": false, "a1/": false, "a": false} {
		if got := s.Match(name); got != want {
			t.Errorf("pattern: Match(%q) = %v, want %v", name, got, want)
		}
	}
}

var sidecarCases = []struct {
	text, want string // as in stampCases
	shot       int64
	err        error
}{
	{`{"time": "2031-05-06T07:08:09.123456789Z", "shot": 12}`, "2031-05-06T07:08:09.123456789Z", 12, nil},
	{`{"time": "2031-05-06T07:08:09+02:00"}`, "2031-05-06T05:08:09Z", -1, nil},
	{`{"time": "2031-05-06T07:08:09.5"}`, "2031-05-06T06:08:09.5Z", -1, nil}, // in the given zone, +01:00
	{"\xef\xbb\xbf" + `{"shot": 0, "energy": 3.2, "time": null}`, "-", 0, nil},
	{`{"shot": -1}`, "", -1, ErrStamp},
	{`{"shot": 1.5}`, "", -1, ErrStamp},
	{`{"shot": "x"}`, "", -1, ErrStamp},
	{`{"time": 1936000000}`, "", -1, ErrStamp},
	{`{"time": "yesterday"}`, "", -1, ErrStamp},
	{`{}`, "", -1, ErrStamp},
	{`[]`, "", -1, ErrStamp},
	{`{"shot": 1} {"shot": 2}`, "", -1, ErrStamp},
	{``, "", -1, ErrTruncated},
	{`{"shot": 1, "time": "2031-05-`, "", -1, ErrTruncated},
	{`{"shot": 99999999999999999999}`, "", -1, ErrStamp},
}

func TestSidecar(t *testing.T) {
	dir := t.TempDir()
	s, err := NewStamper("sidecar", time.FixedZone("x", 3600))
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range sidecarCases {
		if err := os.WriteFile(filepath.Join(dir, "f.json"), []byte(c.text), 0o600); err != nil {
			t.Fatal(err)
		}
		got, err := s.Stamp(filepath.Join(dir, "f.tif"), time.Time{})
		if c.err != nil {
			if !errors.Is(err, c.err) || !strings.Contains(err.Error(), "f.json") {
				t.Errorf("%s: error %v, want %v naming the sidecar", c.text, err, c.err)
			}
			continue
		}
		want := Stamp{}
		if c.want != "-" {
			want.Time = utc(c.want)
		}
		if err != nil || !got.Time.Equal(want.Time) || got.HasShot != (c.shot >= 0) || got.HasShot && got.Shot != c.shot || got.Source != "sidecar" {
			t.Errorf("%s: %+v (%v), want %s, shot %d", c.text, got, err, c.want, c.shot)
		}
	}
	if _, err := s.Stamp(filepath.Join(dir, "g.tif"), time.Time{}); !errors.Is(err, fs.ErrNotExist) || !strings.Contains(err.Error(), "g.tif.json") {
		t.Errorf("no sidecar: %v", err)
	}
	if err := os.WriteFile(filepath.Join(dir, "f.tif.json"), []byte(`{"shot": 77}`), 0o600); err != nil {
		t.Fatal(err)
	}
	if got, err := s.Stamp(filepath.Join(dir, "f.tif"), time.Time{}); err != nil || got.Shot != 77 {
		t.Errorf("the sidecar of the full name goes first: %+v, %v", got, err)
	}
	if err := os.WriteFile(filepath.Join(dir, "h.json"), make([]byte, maxSidecar+1), 0o600); err != nil {
		t.Fatal(err)
	}
	if _, err := s.Stamp(filepath.Join(dir, "h.tif"), time.Time{}); err == nil {
		t.Error("a huge sidecar is read")
	}
}

func TestStampMtime(t *testing.T) {
	s, err := NewStamper("mtime", nil)
	if err != nil {
		t.Fatal(err)
	}
	at := utc("2031-05-06T07:08:09Z")
	got, err := s.Stamp("nowhere/a.tif", at)
	if want := (Stamp{Time: at, Source: "mtime", Weak: true}); err != nil || got != want {
		t.Errorf("%+v (%v), want %+v", got, err, want)
	}
	if _, err := s.Stamp("a.tif", time.Time{}); err == nil {
		t.Error("a zero time passes")
	}
}
