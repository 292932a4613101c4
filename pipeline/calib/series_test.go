package calib

import (
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
)

// good is a complete series over files a to z of an empty folder.
const good = `station = "bay-a"
[streak]
dark = ["sub/d_*.tif"]
flat = [["f0a.tif", "f0b.tif"], ["f1a.tif", "f1b.tif"]]
exposure = [1.0, 2.0]
[reference]
dark = ['sub\r_0.tif', 'sub\r_1.tif']
flat = [["g0a.tif", "g0b.tif"]]
exposure = [1]
[code]
coded = ["c.tif"]
open = ["o.tif"]
reference = ["e.tif"]
[target]
streak = ["ts.tif"]
reference = ["tr.tif"]
[sweep]
direction = "left"
delays = [{ ps = 0.0, frames = ["s0.tif"] }, { ps = 4, frames = ["s4.tif"] }, { ps = 8, frames = ["s8a.tif", "s8b.tif"] }]
still = ["s.tif"]
[scale]
um_per_px = 12.5
[window]
x = 3
y = 4
w = 20
h = 30
[validity]
from = 2026-03-01T00:00:00Z
`

var goodFiles = []string{"sub/d_1.tif", "sub/d_0.tif", "sub/r_0.tif", "sub/r_1.tif", "f0a.tif", "f0b.tif", "f1a.tif", "f1b.tif",
	"g0a.tif", "g0b.tif", "c.tif", "o.tif", "e.tif", "ts.tif", "tr.tif", "s0.tif", "s4.tif", "s8a.tif", "s8b.tif", "s.tif"}

func seriesFolder(t testing.TB, text string) string {
	t.Helper()
	dir := t.TempDir()
	for _, f := range goodFiles {
		if err := os.MkdirAll(filepath.Join(dir, filepath.Dir(f)), 0o755); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(dir, f), []byte("x"), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	path := filepath.Join(dir, "series.toml")
	if err := os.WriteFile(path, []byte(text), 0o644); err != nil {
		t.Fatal(err)
	}
	return path
}

func TestReadSeries(t *testing.T) {
	path := seriesFolder(t, good)
	s, err := ReadSeries(path)
	if err != nil {
		t.Fatal(err)
	}
	dir := filepath.Dir(path)
	if want := []string{filepath.Join(dir, "sub", "d_0.tif"), filepath.Join(dir, "sub", "d_1.tif")}; !slices.Equal(s.Streak.Dark, want) {
		t.Errorf("streak dark %q, want %q", s.Streak.Dark, want)
	}
	if want := []string{filepath.Join(dir, "sub", "r_0.tif"), filepath.Join(dir, "sub", "r_1.tif")}; !slices.Equal(s.Reference.Dark, want) {
		t.Errorf("reference dark %q, want %q", s.Reference.Dark, want)
	}
	if len(s.Streak.Flat) != 2 || s.Streak.Flat[1][1] != filepath.Join(dir, "f1b.tif") {
		t.Errorf("streak flat %q", s.Streak.Flat)
	}
	if len(s.Delays) != 3 || s.Delays[1].PS != 4 || len(s.Delays[2].Frames) != 2 {
		t.Errorf("delays %+v", s.Delays)
	}
	if s.Direction != "left" || s.Scale != 12.5 || *s.Window != (Window{3, 4, 20, 30}) || s.ValidFrom.Year() != 2026 || len(s.Still) != 1 {
		t.Errorf("series %+v", s)
	}
	if len(s.Warnings) != 0 {
		t.Errorf("a complete series is warned about: %q", s.Warnings)
	}
}

// TestSeriesFaults holds every mistake to file:line:col, what is wrong and
// what to do.
func TestSeriesFaults(t *testing.T) {
	for _, c := range []struct{ name, old, new, place, want string }{
		{"unknown key", "um_per_px", "um_px", ":22:1:", "unknown key"},
		{"unknown table", "[validity]", "[valid]", ":", "unknown key"},
		{"not TOML", "[target]", "[target", ":14:", "expected"},
		{"wrong type", `direction = "left"`, `direction = 3`, ":18:", "string"},
		{"back slash in double quotes", `'sub\r_0.tif'`, `"sub\p_0.tif"`, ":7:", "single quotes"},
		{"no station", `station = "bay-a"`, ``, ":", "no name"},
		{"no dark", `dark = ["sub/d_*.tif"]`, ``, ":2:1:", "light blocked"},
		{"pattern finds nothing", `c.tif`, `x*.tif`, ":11:1:", `no file matches "x*.tif"`},
		{"bad pattern", `c.tif`, `c[.tif`, ":11:1:", "syntax error in pattern"},
		{"empty name", `"c.tif"`, `""`, ":11:1:", "empty file name"},
		{"lone flat", `["f1a.tif", "f1b.tif"]`, `["f1a.tif"]`, ":4:1:", "pairs of equal exposure"},
		{"pair of patterns", `["f1a.tif", "f1b.tif"]`, `["f1*.tif", "f0b.tif"]`, ":4:1:", "matches 2 files"},
		{"exposures", `exposure = [1.0, 2.0]`, `exposure = [1.0]`, ":5:1:", "one exposure for each pair"},
		{"negative exposure", `exposure = [1.0, 2.0]`, `exposure = [1.0, -2.0]`, ":5:1:", "positive"},
		{"one file, two roles", `open = ["o.tif"]`, `open = ["c.tif"]`, ":12:1:", "also listed under code.coded"},
		{"no target", `streak = ["ts.tif"]`, ``, ":14:1:", "target with structure"},
		{"direction", `"left"`, `"sideways"`, ":18:1:", `"down", "up", "left" or "right"`},
		{"delays fall", `ps = 8`, `ps = 3`, ":19:1:", "not later than the one before"},
		{"delay without time", `{ ps = 4, frames`, `{ frames`, ":19:1:", "has no time"},
		{"delay without frames", `frames = ["s4.tif"]`, `frames = []`, ":19:1:", "names no frames"},
		{"one delay", `{ ps = 4, frames = ["s4.tif"] }, { ps = 8, frames = ["s8a.tif", "s8b.tif"] }`, ``, ":19:1:", "two delays at least"},
		{"negative scale", `12.5`, `-1.0`, ":22:1:", "leave [scale] out"},
		{"small window", `w = 20`, `w = 2`, ":23:1:", "at least 8"},
		{"ends before it begins", `from = 2026-03-01T00:00:00Z`, "from = 2026-03-01T00:00:00Z\nuntil = 2026-02-01T00:00:00Z", ":30:1:", "later than from"},
	} {
		t.Run(c.name, func(t *testing.T) {
			if !strings.Contains(good, c.old) {
				t.Fatalf("the series holds no %q", c.old)
			}
			path := seriesFolder(t, strings.Replace(good, c.old, c.new, 1))
			_, err := ReadSeries(path)
			if err == nil {
				t.Fatal("was accepted")
			}
			if !strings.Contains(err.Error(), path+c.place) || !strings.Contains(err.Error(), c.want) {
				t.Errorf("error %q should hold %q and %q", err, "series.toml"+c.place, c.want)
			}
		})
	}
}

// TestMissingParts names what is missing and what follows.
func TestMissingParts(t *testing.T) {
	text := good
	for _, cut := range []string{
		"flat = [[\"f0a.tif\", \"f0b.tif\"], [\"f1a.tif\", \"f1b.tif\"]]\nexposure = [1.0, 2.0]\n", `, 'sub\r_1.tif'`, "exposure = [1]\n",
		"reference = [\"e.tif\"]\n", "[scale]\num_per_px = 12.5\n", "still = [\"s.tif\"]\n",
	} {
		if !strings.Contains(text, cut) {
			t.Fatalf("the series holds no %q", cut)
		}
		text = strings.Replace(text, cut, "", 1)
	}
	s, err := ReadSeries(seriesFolder(t, text))
	if err != nil {
		t.Fatal(err)
	}
	all := strings.Join(s.Warnings, "\n")
	for _, want := range []string{"[streak] flat is missing", "[reference] dark is a single frame", "[reference] exposure is missing",
		"[code] reference is missing", "[scale] is missing", "[sweep] still is missing"} {
		if !strings.Contains(all, want) {
			t.Errorf("warnings %q do not hold %q", s.Warnings, want)
		}
	}
}

func FuzzReadSeries(f *testing.F) {
	f.Add(good)
	f.Add("station = 'x'\n[streak]\ndark = ['..\\..\\*']\n")
	f.Add("[sweep]\ndelays = [{ps = nan}, {ps = inf}]\n")
	dir := filepath.Dir(seriesFolder(f, good))
	f.Fuzz(func(t *testing.T, text string) {
		if len(text) > 1<<16 || strings.ContainsAny(text, "*?") { // patterns would walk the machine
			return
		}
		path := filepath.Join(dir, "fuzz.toml")
		if err := os.WriteFile(path, []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
		s, err := ReadSeries(path)
		if err != nil {
			if !strings.Contains(err.Error(), "fuzz.toml:") {
				t.Errorf("error does not name the place: %v", err)
			}
			return
		}
		if s.Station == "" || len(s.Delays) < 2 || len(s.Streak.Dark) == 0 || len(s.TargetReference) == 0 {
			t.Errorf("accepted an incomplete series: %+v", s)
		}
	})
}
