package calib

import (
	"context"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"unsheard/pipeline/rig"
)

// write films the calibration series of a simulated station.
func write(t testing.TB, o rig.Options) (*rig.Station, string) {
	t.Helper()
	st, err := rig.New(o)
	if err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	if err := st.WriteSeries(dir); err != nil {
		t.Fatal(err)
	}
	return st, dir
}

// calibrate reads and calibrates the series in dir.
func calibrate(t testing.TB, dir string) (*Bundle, *Report, error) {
	t.Helper()
	s, err := ReadSeries(filepath.Join(dir, "series.toml"))
	if err != nil {
		return nil, nil, err
	}
	return Calibrate(context.Background(), s, Options{})
}

// registrationError is the rms distance over the window between the true and
// the found map, reference px.
func registrationError(st *rig.Station, b *Bundle) float64 {
	var sum float64
	for i := range b.Window.W * b.Window.H {
		x, y := float64(i%b.Window.W), float64(i/b.Window.W)
		u, v := apply(st.Registration(), x, y)
		p, q := b.Point(x, y)
		sum += (u-p)*(u-p) + (v-q)*(v-q)
	}
	return math.Sqrt(sum / float64(b.Window.W*b.Window.H))
}

// stations are simulated stations of many kinds. Their model is finer than
// the pixels and shares no code with this package.
var stations = []struct {
	name   string
	change func(*rig.Options)
	code   float64 // largest rms error of the code; 0: not on the pixel grid, not compared
}{
	{"plain", func(o *rig.Options) {}, 0.002},
	{"turned, small, mirrored", func(o *rig.Options) {
		o.Direction = "up"
		o.View.Turn, o.View.Scale, o.View.Mirror = -15, 0.7, true
		o.View.SensorW, o.View.SensorH = 84, 80
		o.Field = 8
	}, 0.002},
	{"turned, large, right, one-pixel code", func(o *rig.Options) {
		o.Direction = "right"
		o.W, o.H = 56, 48
		o.View.Turn, o.View.Scale, o.View.X, o.View.Y = 15, 1.4, 11, -9
		o.View.SensorW, o.View.SensorH = 130, 120
		o.Pitch, o.Field = 1, 20
	}, 0.002},
	{"keystone, left, strong sweep, code off the grid", func(o *rig.Options) {
		o.Direction = "left"
		o.View.Turn, o.View.KeyX, o.View.KeyY = 6, 3e-4, -2e-4
		o.Quadratic, o.Cubic = 0.15, 0.06
		o.Pitch, o.CodeX, o.CodeY, o.Field = 2.7, 0.4, -0.3, 12
	}, 0},
	{"few photons, shifted far", func(o *rig.Options) {
		o.Streak.FullWell, o.Reference.FullWell = 9000, 9000
		o.Streak.Bits, o.Reference.Bits = 12, 12
		o.View.SensorW, o.View.SensorH, o.View.X, o.View.Y = 150, 140, 28, -22
		o.Streak.SigmaX, o.Streak.SigmaY = 1.1, 0.5
	}, 0.005},
	{"window fills the sensor", func(o *rig.Options) {
		o.WindowX, o.WindowY, o.Margin = 0, 0, 0
		o.View.SensorW, o.View.SensorH = 64, 64 // cuts the corners
		o.View.Scale = 1
	}, 0.003},
}

// Goals. Blur, registration and time axis leave a margin of several times
// what is seen; gain and ratio are limited by the number of pixels of these
// small sensors: 1 % is twice their standard deviation.
const (
	goalRegistration = 0.05 // px rms
	goalSweep        = 0.1  // px rms
	goalBlur         = 0.05
	goalGain         = 0.02
	goalRatio        = 0.02 // two gains enter
)

func TestStations(t *testing.T) {
	for _, c := range stations {
		t.Run(c.name, func(t *testing.T) {
			o := rig.Default()
			c.change(&o)
			st, dir := write(t, o)
			b, r, err := calibrate(t, dir)
			if err != nil {
				t.Fatal(err)
			}
			within(t, "streak gain", b.Streak.Gain.Value, o.Streak.Gain, goalGain)
			within(t, "reference gain", b.Reference.Gain.Value, o.Reference.Gain, goalGain)
			within(t, "ratio", b.Ratio.Value, o.Ratio, goalRatio)
			within(t, "streak blur x", b.Streak.OpticalX.Value, o.Streak.SigmaX, goalBlur)
			within(t, "streak blur y", b.Streak.OpticalY.Value, o.Streak.SigmaY, goalBlur)
			within(t, "reference blur x", b.Reference.OpticalX.Value, o.Reference.SigmaX, goalBlur)
			within(t, "reference blur y", b.Reference.OpticalY.Value, o.Reference.SigmaY, goalBlur)
			checkNoise(t, "streak", &b.Streak, o.Streak)
			checkNoise(t, "reference", &b.Reference, o.Reference)
			checkPixels(t, "streak", &b.Streak, st.Streak())
			checkPixels(t, "reference", &b.Reference, st.Reference())
			if want := (Window{o.WindowX, o.WindowY, o.W, o.H}); b.Window != want {
				t.Fatalf("window %+v, want %+v", b.Window, want)
			}
			if e := registrationError(st, b); e > goalRegistration || e > 4*b.RegistrationResidual {
				t.Errorf("registration is off by %.4f px rms and says %.4f", e, b.RegistrationResidual)
			}
			if want := o.View.KeyX != 0; (b.RegistrationKind == "homography") != want {
				t.Errorf("registration is called %s", b.RegistrationKind)
			}
			checkSweep(t, st, b)
			checkCode(t, st, b, r, c.code)
		})
	}
}

func within(t *testing.T, name string, got, want, part float64) {
	t.Helper()
	if !(math.Abs(got-want) <= part*math.Abs(want)) {
		t.Errorf("%s %.5g, want %.5g within %g %%", name, got, want, 100*part)
	}
}

// checkNoise: the dark signal's own photon noise and the rounding to whole
// ADU (variance 1/12) belong to the noise of a frame.
func checkNoise(t *testing.T, name string, a *Arm, s rig.Sensor) {
	t.Helper()
	want := math.Sqrt(s.ReadNoise*s.ReadNoise + s.Dark + s.Gain*s.Gain/12)
	within(t, name+" read noise", a.ReadNoise.Value, want, 0.03)
	top := min(s.FullWell/s.Gain+s.Offset, float64(int(1)<<s.Bits-1))
	within(t, name+" saturation", a.Saturation.Value, top, 0.005)
}

// checkPixels: every defective pixel is found, hardly any good one is lost,
// and the flat is right to within its stated noise (the wells are shallow in
// one station: 1 %).
func checkPixels(t *testing.T, name string, a *Arm, c rig.Camera) {
	t.Helper()
	lost := 0
	var sq, mean float64
	n := 0
	for i, bad := range a.Bad {
		defect := c.Hot[i] || c.Dead[i]
		switch {
		case defect && !bad:
			t.Errorf("%s pixel (%d, %d) is hot or dead but was not found", name, i%a.W, i/a.W)
		case bad && !defect:
			lost++
		case !bad:
			d := float64(a.Flat[i])/c.Flat[i] - 1
			mean += d
			sq += d * d
			n++
		}
	}
	if lost > len(a.Bad)/1000 {
		t.Errorf("%s: %d good pixels were marked bad", name, lost)
	}
	mean /= float64(n)
	if rms := math.Sqrt(sq/float64(n) - mean*mean); rms > 0.01 {
		t.Errorf("%s flat is off by %.2f %% rms", name, 100*rms)
	}
}

func checkSweep(t *testing.T, st *rig.Station, b *Bundle) {
	t.Helper()
	frames := st.Options().T
	var sum float64
	for k := range frames {
		d := b.Sweep.At(st.Inverse(float64(k))) - float64(k)
		sum += d * d
	}
	if rms := math.Sqrt(sum / float64(frames)); rms > goalSweep {
		t.Errorf("sweep is off by %.4f px rms", rms)
	}
	if b.First != 0 {
		t.Errorf("first frame is displaced by %g px, want 0", b.First)
	}
	if over := b.Frames - frames; over < 0 || over > 2 {
		t.Errorf("%d frames, the station films %d and its delays are about two frames apart", b.Frames, frames)
	}
}

func checkCode(t *testing.T, st *rig.Station, b *Bundle, r *Report, limit float64) {
	t.Helper()
	if b.Streak.Floor > 0.03 {
		t.Errorf("the code leaves %.1f %% of the signal unexplained", 100*b.Streak.Floor)
	}
	within(t, "pitch x", r.Code.PitchX, st.Options().Pitch, 0.001)
	within(t, "pitch y", r.Code.PitchY, st.Options().Pitch, 0.001)
	if limit == 0 {
		limit = 0.03 // averages over pixels, restored for a model of whole pixels
	}
	var sum float64
	for i, c := range st.Code() {
		sum += math.Pow(float64(c-b.Code[i]), 2)
	}
	if rms := math.Sqrt(sum / float64(len(b.Code))); rms > limit {
		t.Errorf("code is off by %.4f rms, want %.4f", rms, limit)
	}
}

// TestLargeStation is the size of an ordinary camera binned down.
func TestLargeStation(t *testing.T) {
	if testing.Short() {
		t.Skip("slow")
	}
	o := rig.Large()
	st, dir := write(t, o)
	b, _, err := calibrate(t, dir)
	if err != nil {
		t.Fatal(err)
	}
	if e := registrationError(st, b); e > goalRegistration {
		t.Errorf("registration is off by %.4f px rms", e)
	}
	checkSweep(t, st, b)
	within(t, "ratio", b.Ratio.Value, o.Ratio, goalRatio)
}

// edit replaces text in the series file of dir.
func edit(t testing.TB, dir string, pairs ...string) {
	t.Helper()
	path := filepath.Join(dir, "series.toml")
	text, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	s := string(text)
	for i := 0; i < len(pairs); i += 2 {
		if !strings.Contains(s, pairs[i]) {
			t.Fatalf("series.toml holds no %q:\n%s", pairs[i], s)
		}
		s = strings.Replace(s, pairs[i], pairs[i+1], 1)
	}
	if err := os.WriteFile(path, []byte(s), 0o644); err != nil {
		t.Fatal(err)
	}
}
