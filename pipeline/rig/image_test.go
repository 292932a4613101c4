package rig

import (
	"bytes"
	"image"
	"os/exec"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"golang.org/x/image/tiff"
)

func number(t *testing.T, s string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// ramp is a small frame with every byte in use.
func ramp(w, h int) Image {
	im := Image{W: w, H: h, Pix: make([]uint16, w*h)}
	for i := range im.Pix {
		im.Pix[i] = uint16(i*2749 + 17)
	}
	return im
}

func TestTIFF(t *testing.T) {
	im := ramp(7, 5)
	im.Taken = time.Date(2026, 3, 4, 5, 6, 7, 89012000, time.UTC)
	var b bytes.Buffer
	if err := Encode(&b, im); err != nil {
		t.Fatal(err)
	}
	got, err := tiff.Decode(bytes.NewReader(b.Bytes()))
	if err != nil {
		t.Fatal(err)
	}
	g, ok := got.(*image.Gray16)
	if !ok || g.Bounds().Dx() != 7 || g.Bounds().Dy() != 5 {
		t.Fatalf("decoded as %T %v", got, got.Bounds())
	}
	for i, want := range im.Pix {
		if v := g.Gray16At(i%7, i/7).Y; v != want {
			t.Errorf("pixel %d: %d, want %d", i, v, want)
		}
	}
	path := filepath.Join(t.TempDir(), "a.tif")
	if err := Save(im, path); err != nil {
		t.Fatal(err)
	}
	out := python(t, `import sys, tifffile
f = tifffile.TiffFile(sys.argv[1]); p = f.pages[0]; a = p.asarray()
print(len(f.pages), a.shape, a.dtype, a[4, 6], p.tags["DateTime"].value, p.tags[37520].value)`, path)
	if want := "1 (5, 7) uint16 " + strconv.Itoa(int(im.Pix[34])) + " 2026:03:04 05:06:07 089012"; strings.TrimSpace(out) != want {
		t.Errorf("tifffile reads %q, want %q", strings.TrimSpace(out), want)
	}
	info, err := exec.Command("tiffinfo", path).CombinedOutput()
	if err != nil {
		t.Fatalf("need tiffinfo (apt package libtiff-tools): %v\n%s", err, info)
	}
	// SubSecTime is an Exif field; libtiff's own tools note it as unknown.
	if s := string(info); strings.Count(s, "Warning") != strings.Count(s, "tag 37520") || !strings.Contains(s, "Bits/Sample: 16") {
		t.Errorf("tiffinfo says\n%s", s)
	}
}

// TestRaw: turning a raw frame by 0, 180, 90 clockwise and 90 degrees counter
// clockwise for down, up, right and left gives the turned frame (NumPy's
// rot90 turns counter-clockwise).
func TestRaw(t *testing.T) {
	im := ramp(7, 5)
	for direction, quarter := range map[string]string{"down": "0", "up": "2", "right": "-1", "left": "1"} {
		path := filepath.Join(t.TempDir(), direction+".tif")
		if err := Save(im.raw(direction), path); err != nil {
			t.Fatal(err)
		}
		out := python(t, `import sys, numpy as np, tifffile
print(*np.rot90(tifffile.imread(sys.argv[1]), int(sys.argv[2])).ravel())`, path, quarter)
		var got []uint16
		for _, f := range strings.Fields(out) {
			got = append(got, uint16(number(t, f)))
		}
		if !slices.Equal(got, im.Pix) {
			t.Errorf("%s: turned back to %v, want %v", direction, got, im.Pix)
		}
	}
}

// TestUpright: the reference camera sees the scene as it lies on the raw
// streak sensor: a step towards later light in the window is a step in the
// sweep's direction on the reference sensor, but for the view's own turn.
func TestUpright(t *testing.T) {
	for direction, want := range map[string][2]float64{"down": {0, 1}, "up": {0, -1}, "right": {1, 0}, "left": {-1, 0}} {
		s := station(t, func(o *Options) { o.Direction = direction; o.View = View{Scale: 1, SensorW: 100, SensorH: 96} })
		m := s.Registration()
		x0, y0 := apply(m, 20, 20)
		x1, y1 := apply(m, 20, 21)
		near(t, direction+" dx", x1-x0, want[0], 1e-12)
		near(t, direction+" dy", y1-y0, want[1], 1e-12)
		cx, cy := apply(m, 31.5, 31.5)
		near(t, direction+" centre x", cx, 49.5, 1e-12)
		near(t, direction+" centre y", cy, 47.5, 1e-12)
	}
	plain := station(t, nil).Registration()
	mirrored := station(t, func(o *Options) { o.View.Mirror = true }).Registration()
	det := func(m [9]float64) float64 { return m[0]*m[4] - m[1]*m[3] }
	near(t, "area", det(plain), 1.06*1.06, 1e-12)
	near(t, "mirrored area", det(mirrored), -1.06*1.06, 1e-12)
}

func TestNPY(t *testing.T) {
	path := filepath.Join(t.TempDir(), "a.npy")
	s := station(t, small)
	if err := s.writeKnown(filepath.Dir(path)); err != nil {
		t.Fatal(err)
	}
	out := python(t, `import sys, numpy as np
a = np.load(sys.argv[1] + "/code.npy"); print(a.shape, a.dtype, "%.9g" % a[3, 5])`, filepath.Dir(path))
	want := "(24, 20) float32 " + strconv.FormatFloat(float64(s.Code()[3*20+5]), 'g', 9, 32)
	if strings.TrimSpace(out) != want {
		t.Errorf("NumPy reads %q, want %q", strings.TrimSpace(out), want)
	}
}
