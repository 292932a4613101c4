package calib

import (
	"context"
	"math"
	"path/filepath"
	"testing"
	"time"

	"unsheard/pipeline/rig"
)

// calibrated makes a bundle from a simulated station's own series.
func calibrated(t *testing.T, o rig.Options) (*rig.Station, *Bundle, *Report) {
	t.Helper()
	st, err := rig.New(o)
	if err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	if err := st.WriteSeries(dir); err != nil {
		t.Fatal(err)
	}
	s, err := ReadSeries(filepath.Join(dir, "series.toml"))
	if err != nil {
		t.Fatal(err)
	}
	at := time.Now()
	b, r, err := Calibrate(context.Background(), s, Options{Progress: func(s string) { t.Logf("%s after %v", s, time.Since(at)) }})
	if err != nil {
		t.Fatal(err)
	}
	return st, b, r
}

func TestLook(t *testing.T) {
	o := rig.Default()
	st, b, r := calibrated(t, o)
	look(t, st, b, r)
	b.Save("/tmp/calib-look")
}

func look(t *testing.T, st *rig.Station, b *Bundle, r *Report) {
	o := st.Options()
	p := func(name string, got Quantity, want float64) {
		t.Logf("%-22s %v want %.4f (%+.2f %%) %s", name, got, want, 100*(got.Value/want-1), got.Method)
	}
	p("streak gain", b.Streak.Gain, o.Streak.Gain)
	p("ref gain", b.Reference.Gain, o.Reference.Gain)
	p("streak read", b.Streak.ReadNoise, o.Streak.ReadNoise)
	p("ref read", b.Reference.ReadNoise, o.Reference.ReadNoise)
	p("streak sat", b.Streak.Saturation, o.Streak.FullWell/o.Streak.Gain+o.Streak.Offset)
	p("blur x", b.Streak.BlurX, o.Streak.SigmaX)
	p("blur y", b.Streak.BlurY, o.Streak.SigmaY)
	for i := range 2 {
		p("  edge", r.Code.Edge[i], 1)
		p("  code", r.Code.Inner[i], 1)
	}
	p("ref optical x", b.Reference.OpticalX, o.Reference.SigmaX)
	p("ref optical y", b.Reference.OpticalY, o.Reference.SigmaY)
	p("ref model x", b.Reference.BlurX, o.Reference.SigmaX)
	p("ratio", b.Ratio, o.Ratio)
	p("target ratio", r.TargetRatio, o.Ratio)
	t.Logf("window %+v want %d %d %d %d", b.Window, o.WindowX, o.WindowY, o.W, o.H)
	t.Logf("code: lo %.4f hi %.4f pitch %.2f %.2f excess %.4f chi2 %.2f two %v floor %.4f", r.Code.Low, r.Code.High, r.Code.PitchX, r.Code.PitchY, r.Code.Excess, r.Code.Chi2, r.Code.TwoLevel, r.Code.floor)
	var rms float64
	truth := st.Code()
	for i, c := range truth {
		rms += math.Pow(float64(c-b.Code[i]), 2)
	}
	t.Logf("code rms error %.5f", math.Sqrt(rms/float64(len(truth))))
	t.Logf("registration %s rho %.6f residual %.4f true error %.4f px, floor %.4f rival %.4f", b.RegistrationKind, r.Register.Rho, b.RegistrationResidual, registrationError(st, b), r.Register.Floor, r.Register.Rival)
	var e, n float64
	for k := range st.Options().T {
		s := float64(k)
		d := b.Sweep.At(st.Inverse(s)) - s
		e += d * d
		n++
	}
	t.Logf("sweep rms %.4f px degree %d residual %.4f px %.4f ps sigma(end) %.4f T %d first %g", math.Sqrt(e/n), r.Sweep.Degree, b.Sweep.ResidualPx, b.Sweep.Residual, b.Sweep.Sigma(b.Sweep.Last), b.Frames, b.First)
	t.Logf("defects streak %+v ref %+v flat noise %.4f %.4f floors %.4f %.4f", r.Streak.Defects, r.Reference.Defects, r.Streak.FlatNoise, r.Reference.FlatNoise, b.Streak.Floor, b.Reference.Floor)
	for _, l := range r.Streak.Transfer.Levels {
		t.Logf("  level %.0f var %.1f ± %.1f used %v %s", l.Mean, l.Var, l.Sigma, l.Used, l.Note)
	}
	for _, w := range b.Warnings {
		t.Log("warning: " + w)
	}
}

// registrationError is the rms distance over the window between the true and
// the found map, reference px.
func registrationError(st *rig.Station, b *Bundle) float64 {
	var sum float64
	n := 0
	for y := range b.Window.H {
		for x := range b.Window.W {
			u, v := apply(st.Registration(), float64(x), float64(y))
			p, q := b.Point(float64(x), float64(y))
			sum += (u-p)*(u-p) + (v-q)*(v-q)
			n++
		}
	}
	return math.Sqrt(sum / float64(n))
}
