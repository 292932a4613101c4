package rig

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"
)

// seriesCheck reads a series as an outsider would (Python's tomllib, NumPy
// and tifffile): every entry names existing frames of the right size, every
// frame is named, and the plain numbers come out. It prints key=value lines.
const seriesCheck = `
import sys, glob, os, tomllib
import numpy as np, tifffile
d, sw, sh, rw, rh = sys.argv[1], *map(int, sys.argv[2:6])
toml = tomllib.load(open(os.path.join(d, "series.toml"), "rb"))
used = set()
def load(pattern, w, h):
    names = sorted(glob.glob(os.path.join(d, pattern)))
    assert names, "no file for " + pattern
    used.update(names)
    a = [tifffile.imread(n) for n in names]
    for n, i in zip(names, a):
        assert i.shape == (h, w) and i.dtype == np.uint16, (n, i.shape, i.dtype)
    return np.array(a, float)
def every(patterns, w, h):
    return np.concatenate([load(p, w, h) for p in patterns])
for arm, w, h in ("streak", sw, sh), ("reference", rw, rh):
    dark = every(toml[arm]["dark"], w, h)
    means, slopes = [], []
    floor = np.median((dark[0] - dark[1])**2) / 2 / 0.4549
    for pair in toml[arm]["flat"]:
        a, b = (load(p, w, h)[0] for p in pair)
        net = (a + b) / 2 - dark.mean(0)
        good = net < 0.9 * 65535
        means.append(net.mean())
        slopes.append(((a - b)**2 / 2).mean() / net.mean())
    assert all(np.diff(means) > 0), means
    print(arm + "_gain=%.6f" % (1 / slopes[3]))
    print(arm + "_last=%.3f" % np.mean(a >= a.max() * 0.985))
    print(arm + "_dark=%.4f" % np.median(dark))
dark = every(toml["streak"]["dark"], sw, sh).mean(0)
coded = every(toml["code"]["coded"], sw, sh).mean(0) - dark
opened = every(toml["code"]["open"], sw, sh).mean(0) - dark
every(toml["code"]["reference"], rw, rh)
every(toml["target"]["streak"], sw, sh)
every(toml["target"]["reference"], rw, rh)
lit = opened > opened.max() / 2
ys, xs = np.nonzero(lit)
# Dead pixels inside the window do not move its limits, hot ones outside do not reach half.
print("window=%d,%d,%d,%d" % (xs.min(), ys.min(), xs.max() - xs.min() + 1, ys.max() - ys.min() + 1))
print("open_part=%.4f" % (coded[lit].sum() / opened[lit].sum()))
print("direction=" + toml["sweep"]["direction"])
rows = []
for s in toml["sweep"]["delays"]:
    assert isinstance(s["ps"], float), s
    f = every(s["frames"], sw, sh).mean(0) - dark
    rows.append((s["ps"], f))
print("delays=%d" % len(rows))
for ps, f in rows[0], rows[-1]:
    # The brightest spot, alone.
    y, x = np.unravel_index(np.argmax(f), f.shape)
    yy, xx = np.mgrid[y-6:y+7, x-6:x+7]
    g = f[y-6:y+7, x-6:x+7]
    print("spot=%.6f,%.4f,%.4f" % (ps, (g * xx).sum() / g.sum(), (g * yy).sum() / g.sum()))
print("scale=%g" % toml["scale"]["um_per_px"])
rest = set(glob.glob(os.path.join(d, "*.tif"))) - used
assert not rest, rest
print("files=%d" % len(used))
`

func TestSeries(t *testing.T) {
	for _, direction := range []string{"down", "up", "left", "right"} {
		t.Run(direction, func(t *testing.T) {
			s := station(t, func(o *Options) { o.Direction = direction; o.Streak.Hot, o.Streak.Dead = 0, 0 })
			dir := filepath.Join(t.TempDir(), "series")
			if err := s.WriteSeries(dir); err != nil {
				t.Fatal(err)
			}
			// Turned: window at (17, 13), 64×64, sensor 93×121.
			w, h, x, y := "93", "121", "17", "13"
			var dx, dy float64
			switch direction {
			case "down":
				dy = 31
			case "up":
				x, y, dy = "12", "44", -31 // 93-17-64, 121-13-64
			case "right":
				w, h, x, y, dx = "121", "93", "13", "12", 31
			case "left":
				w, h, x, y, dx = "121", "93", "44", "17", -31
			}
			out := python(t, seriesCheck, dir, w, h, "100", "96")
			got := map[string][]string{}
			for _, line := range strings.Fields(out) {
				k, v, _ := strings.Cut(line, "=")
				got[k] = append(got[k], v)
			}
			one := func(k, want string) {
				t.Helper()
				if len(got[k]) != 1 || got[k][0] != want {
					t.Errorf("%s: got %v, want %s", k, got[k], want)
				}
			}
			one("window", x+","+y+",64,64")
			one("direction", direction)
			one("delays", "17")
			one("scale", "12.5")
			// 2·(16 dark + 16 flat) + 3·8 code + 2·6 target + 17·2 delays
			one("files", "134")
			near(t, "streak gain", number(t, got["streak_gain"][0]), 2, 0.08) // 5·√(2/11253)·2 and 1 % of flat spread
			near(t, "reference gain", number(t, got["reference_gain"][0]), 1.6, 0.07)
			near(t, "streak dark", number(t, got["streak_dark"][0]), 212, 0.5)
			near(t, "reference dark", number(t, got["reference_dark"][0]), 321, 0.5)
			for _, arm := range []string{"streak", "reference"} {
				if v := number(t, got[arm+"_last"][0]); v < 0.9 {
					t.Errorf("%s: only %.0f %% of the last flat is full", arm, 100*v)
				}
			}
			var code float64
			for _, v := range s.Code() {
				code += float64(v) / float64(len(s.Code()))
			}
			near(t, "open part of the code", number(t, got["open_part"][0]), code, 0.01)
			a, b := strings.Split(got["spot"][0], ","), strings.Split(got["spot"][1], ",")
			near(t, "first delay", number(t, a[0]), 0, 0)
			near(t, "last delay", number(t, b[0]), s.o.Span, 0)
			near(t, "spots move right by", number(t, b[1])-number(t, a[1]), dx, 0.03) // 1 % of speckle moves a spot of 1.5 px by about 0.005
			near(t, "spots move down by", number(t, b[2])-number(t, a[2]), dy, 0.03)
		})
	}
}

func TestSeriesFails(t *testing.T) {
	s := station(t, small)
	file := filepath.Join(t.TempDir(), "taken")
	if err := os.WriteFile(file, nil, 0o644); err != nil {
		t.Fatal(err)
	}
	if err := s.WriteSeries(file); err == nil || !strings.Contains(err.Error(), "write calibration series") {
		t.Errorf("got %v, want an error that says what failed", err)
	}
	if err := Save(Image{W: 1, H: 1, Pix: []uint16{1}}, filepath.Join(file, "a.tif")); err == nil {
		t.Error("saved under a file")
	}
}

func TestName(t *testing.T) {
	at := time.Date(2026, 3, 4, 5, 6, 7, 89012345, time.FixedZone("", 3600))
	for _, c := range []struct{ pattern, want string }{
		{"S_%Y%m%dT%H%M%S.%f.tif", "S_20260304T040607.089012.tif"},
		{"shot{shot}_%j%%.tif", "shot42_063%.tif"},
		{"plain.tif", "plain.tif"},
	} {
		got, err := Name(c.pattern, at, 42)
		if err != nil || got != c.want {
			t.Errorf("Name(%q) = %q, %v, want %q", c.pattern, got, err, c.want)
		}
	}
	for _, bad := range []string{"S_%Q.tif", "S_%"} {
		if _, err := Name(bad, at, 1); err == nil {
			t.Errorf("pattern %q accepted", bad)
		}
	}
	// Python's own strptime reads the name back.
	got := python(t, `import datetime as d, sys
print(d.datetime.strptime(sys.argv[1], "S_%Y%m%dT%H%M%S.%f.tif").isoformat())`, "S_20260304T040607.089012.tif")
	if strings.TrimSpace(got) != "2026-03-04T04:06:07.089012" {
		t.Errorf("strptime reads %s", got)
	}
}
