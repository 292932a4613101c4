package calib

import (
	"context"
	"math"
	"math/rand/v2"
	"path/filepath"
	"testing"

	"unsheard/pipeline/rig"
)

func TestStress(t *testing.T) {
	rng := rand.New(rand.NewPCG(98, 4))
	for i := range 16 {
		o := rig.Default()
		o.Seed = rng.Uint64()
		o.Direction = []string{"down", "up", "left", "right"}[i%4]
		o.H, o.W = 40+8*rng.IntN(6), 40+8*rng.IntN(6)
		o.T = 16 + rng.IntN(24)
		o.WindowX, o.WindowY = rng.IntN(30)+6, rng.IntN(20)+6
		o.View.Turn = rng.Float64()*30 - 15
		o.View.Scale = 0.7 + 0.7*rng.Float64()
		o.View.Mirror = rng.IntN(2) == 1
		o.View.SensorW = int(float64(max(o.W, o.H))*o.View.Scale*1.35) + 10
		o.View.SensorH = o.View.SensorW - rng.IntN(8)
		o.View.X, o.View.Y = rng.Float64()*6-3, rng.Float64()*6-3
		if i%4 == 1 {
			o.View.SensorW += 60
			o.View.SensorH += 40
			o.View.X, o.View.Y = 24, -15
		}
		if i%4 == 3 {
			o.WindowX, o.WindowY, o.Margin = 0, 0, 0
		}
		if i%8 == 6 { // the reference sensor cuts corners
			o.View.SensorW = int(float64(max(o.W, o.H)) * o.View.Scale)
			o.View.SensorH = o.View.SensorW
		}
		o.Pitch = []float64{1, 2, 2, 3, 1.5}[rng.IntN(5)]
		o.Quadratic, o.Cubic = 0.2*rng.Float64()-0.1, 0.1*rng.Float64()-0.05
		o.Field = []int{0, 8, 20}[rng.IntN(3)]
		if i%5 == 4 {
			o.View.KeyX, o.View.KeyY = 2e-4, -1e-4
		}
		o.Streak.SigmaX, o.Streak.SigmaY = 0.4+0.8*rng.Float64(), 0.4+0.8*rng.Float64()
		o.Reference.SigmaX, o.Reference.SigmaY = 0.4+0.9*rng.Float64(), 0.4+0.9*rng.Float64()
		if i%3 == 2 { // few photons
			o.Streak.FullWell, o.Reference.FullWell = 9000, 9000
			o.Streak.Gain, o.Reference.Gain = 2, 2
			o.Streak.Bits, o.Reference.Bits = 12, 12
		}
		if i != 11 && i != 15 {
			continue
		}
		st, err := rig.New(o)
		if err != nil {
			t.Error(err)
			continue
		}
		dir := t.TempDir()
		st.WriteSeries(dir)
		s, err := ReadSeries(filepath.Join(dir, "series.toml"))
		if err != nil {
			t.Fatal(err)
		}
		b, r, err := Calibrate(context.Background(), s, Options{})
		t.Logf("%d: %s %dx%d turn %.1f scale %.2f mirror %v sensor %d pitch %g field %d key %g well %g", i, o.Direction, o.W, o.H, o.View.Turn, o.View.Scale, o.View.Mirror, o.View.SensorW, o.Pitch, o.Field, o.View.KeyX, o.Streak.FullWell)
		if err != nil {
			t.Errorf("%d: %v", i, err)
			continue
		}
		var e, n float64
		for k := range o.T {
			d := b.Sweep.At(st.Inverse(float64(k))) - float64(k)
			e += d * d
			n++
		}
		var rms float64
		for i, c := range st.Code() {
			if len(b.Code) == len(st.Code()) {
				rms += math.Pow(float64(c-b.Code[i]), 2)
			}
		}
		pc := func(q Quantity, w float64) float64 { return 100 * (q.Value/w - 1) }
		t.Logf("   gain %+.2f %+.2f %% ratio %+.2f %% blur %+.2f %+.2f ref %+.2f %+.2f %% reg %.4f (said %.4f, %s rho %.5f rival %.3f) sweep %.4f T %d/%d window ok %v code rms %.4f floor %.4f ref %.4f", pc(b.Streak.Gain, o.Streak.Gain), pc(b.Reference.Gain, o.Reference.Gain), pc(b.Ratio, o.Ratio),
			pc(b.Streak.OpticalX, o.Streak.SigmaX), pc(b.Streak.OpticalY, o.Streak.SigmaY), pc(b.Reference.OpticalX, o.Reference.SigmaX), pc(b.Reference.OpticalY, o.Reference.SigmaY),
			registrationError(st, b), b.RegistrationResidual, b.RegistrationKind, r.Register.Rho, r.Register.Rival, math.Sqrt(e/n), b.Frames, o.T, b.Window == Window{o.WindowX, o.WindowY, o.W, o.H}, math.Sqrt(rms/float64(len(b.Code))), b.Streak.Floor, b.Reference.Floor)
		for _, w := range b.Warnings {
			if w[0] != '[' {
				t.Log("   " + w)
			}
		}
	}
}
