package export

import (
	"encoding/xml"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

const pillow = `
import sys
from PIL import Image
for p in sys.argv[1:]:
    im = Image.open(p)
    n = getattr(im, "n_frames", 1)
    for k in range(n):
        im.seek(k)
        im.load()
    print(n, im.size[0] > 300 and im.size[1] > 200)
`

// pictures shows the pictures to pngcheck, ImageMagick and Pillow, and parses
// the SVG.
func pictures(t *testing.T, dir string, frames int) {
	t.Helper()
	var paths []string
	for _, name := range []string{fileContact, fileArrival, fileResidual, fileMovie} {
		p := filepath.Join(dir, name)
		paths = append(paths, p)
		run(t, "pngcheck", "pngcheck", "-q", p)
		run(t, "imagemagick", "identify", "-regard-warnings", p)
	}
	// Pillow counts the still image, which is none of the frames.
	want := fmt.Sprintf("1 True\n1 True\n1 True\n%d True\n", frames+1)
	if got := run(t, "python3-pil", python, append([]string{"-c", pillow}, paths...)...); got != want {
		t.Errorf("Pillow says %q, want %q", got, want)
	}
	b, err := os.ReadFile(filepath.Join(dir, fileLight))
	if err != nil {
		t.Fatal(err)
	}
	for d := xml.NewDecoder(strings.NewReader(string(b))); ; {
		if _, err := d.Token(); err == io.EOF {
			break
		} else if err != nil {
			t.Fatalf("%s: %v", fileLight, err)
		}
	}
	for _, want := range []string{"time (ps)", "light (photoelectrons/ps)", "FWHM", "peak", "bay-a"} {
		if !strings.Contains(string(b), want) {
			t.Errorf("%s does not say %q", fileLight, want)
		}
	}
}

func TestTicks(t *testing.T) {
	for _, c := range []struct {
		lo, hi float64
		want   string
	}{{0, 38.6, "[0 10 20 30]"}, {-4, 4, "[−4 −2 0 2 4]"}, {0, 1, "[0.0 0.2 0.4 0.6 0.8 1.0]"},
		{-0.003, 0.0041, "[−0.003 −0.002 −0.001 0.000 0.001 0.002 0.003 0.004]"}, {12000, 52000, "[20000 30000 40000 50000]"}, {0, 0.07, "[0.00 0.01 0.02 0.03 0.04 0.05 0.06 0.07]"}} {
		if _, got := ticks(c.lo, c.hi); fmt.Sprint(got) != c.want {
			t.Errorf("%g to %g: %v, want %s", c.lo, c.hi, got, c.want)
		}
	}
}

// TestCeiling: one hot value in ten thousand does not set the scale, and the
// scale is within the bin width of 1 % above the value it stands for.
func TestCeiling(t *testing.T) {
	c := pulse(1, 100, 100, "full", "a").Cube
	for i := range c.Data {
		c.Data[i] = 1 + float32(i)/10000
	}
	c.Data[0] = 1e6
	hi, clipped := ceiling(c, []int{0})
	if !clipped || hi < 1.99 || hi > 2.02 {
		t.Errorf("top %g, clipped %v", hi, clipped)
	}
	clear(c.Data)
	if hi, clipped := ceiling(c, []int{0}); hi != 1 || clipped {
		t.Errorf("dark: %g %v", hi, clipped)
	}
}

// TestArrivals: two flashes at known times.
func TestArrivals(t *testing.T) {
	c := pulse(5, 1, 3, "full", "a").Cube
	clear(c.Data)
	c.Frame(1)[0], c.Frame(3)[0], c.Frame(4)[1] = 1, 1, 0.5
	p := arrivals(c)
	if want := float32((c.Time[1] + c.Time[3]) / 2); p.v[0] != want || p.v[1] != float32(c.Time[4]) || p.v[2] == p.v[2] {
		t.Errorf("%v, want %g %g NaN", p.v, want, c.Time[4])
	}
}
