package calib

import (
	"fmt"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"testing"
)

// TestForeignStations calibrates series that NumPy and SciPy filmed: see
// testdata/station.py. Their flats are uneven by 3 % per pixel and their
// reference arms have few flats, so that registration and ratio are noisier
// than on a real bench.
func TestForeignStations(t *testing.T) {
	if testing.Short() {
		t.Skip("slow")
	}
	for _, seed := range []int{1, 2, 3} {
		t.Run(fmt.Sprint(seed), func(t *testing.T) {
			dir := t.TempDir()
			out, err := exec.Command("/usr/bin/python3", "testdata/station.py", dir, fmt.Sprint(seed)).CombinedOutput()
			if err != nil {
				t.Fatalf("/usr/bin/python3 with numpy, scipy and tifffile (Debian: python3-numpy python3-scipy python3-tifffile): %v\n%s", err, out)
			}
			text, err := os.ReadFile(filepath.Join(dir, "truth.txt"))
			if err != nil {
				t.Fatal(err)
			}
			v := numbers(t, string(text))
			b, _, err := calibrate(t, dir)
			if err != nil {
				t.Fatal(err)
			}
			if want := (Window{int(v[0]), int(v[1]), int(v[2]), int(v[3])}); b.Window != want {
				t.Fatalf("window %+v, want %+v", b.Window, want)
			}
			within(t, "streak blur x", b.Streak.OpticalX.Value, v[5], goalBlur)
			within(t, "streak blur y", b.Streak.OpticalY.Value, v[5], goalBlur)
			within(t, "reference blur x", b.Reference.OpticalX.Value, v[6], goalBlur)
			within(t, "reference blur y", b.Reference.OpticalY.Value, v[6], goalBlur)
			within(t, "ratio", b.Ratio.Value, v[7], goalRatio)
			within(t, "streak gain", b.Streak.Gain.Value, v[8], goalGain)
			within(t, "reference gain", b.Reference.Gain.Value, v[9], goalGain)
			var sum float64
			for i := range b.Window.W * b.Window.H {
				x, y := float64(i%b.Window.W), float64(i/b.Window.W)
				p, q := apply([9]float64(v[12:]), x, y)
				u, w := b.Point(x, y)
				sum += (u-p)*(u-p) + (w-q)*(w-q)
			}
			if rms := math.Sqrt(sum / float64(len(b.Code))); rms > goalRegistration {
				t.Errorf("registration is off by %.4f px rms (says %.4f)", rms, b.RegistrationResidual)
			}
			foreignSweep(t, b, v[4], v[10], v[11])
			code := loadNPY(t, filepath.Join(dir, "code.npy"))
			sum = 0
			for i, c := range code.v {
				sum += math.Pow(c-float64(b.Code[i]), 2)
			}
			if rms := math.Sqrt(sum / float64(len(code.v))); rms > 0.005 {
				t.Errorf("code is off by %.4f rms", rms)
			}
		})
	}
}

// foreignSweep compares with s(t) = (T−1)·((1−q)u + q·u²), u = t/span.
func foreignSweep(t *testing.T, b *Bundle, frames, span, q float64) {
	t.Helper()
	var sum float64
	const n = 100
	for i := range n {
		u := float64(i) / (n - 1)
		d := b.Sweep.At(u*span) - (frames-1)*((1-q)*u+q*u*u)
		sum += d * d / n
	}
	if rms := math.Sqrt(sum); rms > goalSweep {
		t.Errorf("sweep is off by %.4f px rms", rms)
	}
}
