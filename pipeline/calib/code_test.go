package calib

import (
	"context"
	"math"
	"path/filepath"
	"testing"
	"time"

	"unsheard/pipeline/rig"
)

func TestLookCode(t *testing.T) {
	for name, change := range map[string]func(*rig.Options){
		"blur1.2": func(o *rig.Options) { o.Pitch = 1; o.Streak.SigmaX = 1.2; o.Streak.SigmaY = 1.2 },
		"blur.9":  func(o *rig.Options) { o.Pitch = 1; o.Streak.SigmaX = .9; o.Streak.SigmaY = .9 },
		"dim":     func(o *rig.Options) { o.Pitch = 1; o.Streak.FullWell = 9000; o.Streak.Bits = 12 },
		"dim.9": func(o *rig.Options) {
			o.Pitch = 1
			o.Streak.FullWell = 9000
			o.Streak.Bits = 12
			o.Streak.SigmaX = .9
			o.Streak.SigmaY = .9
		},
		"dim1.2": func(o *rig.Options) {
			o.Pitch = 1
			o.Streak.FullWell = 9000
			o.Streak.Bits = 12
			o.Streak.SigmaX = 1.2
			o.Streak.SigmaY = 1.2
		},
	} {
		o := rig.Default()
		change(&o)
		st, _ := rig.New(o)
		dir := t.TempDir()
		st.WriteSeries(dir)
		s, err := ReadSeries(filepath.Join(dir, "series.toml"))
		if err != nil {
			t.Fatal(err)
		}
		c := &calibration{ctx: context.Background(), s: s, r: &Report{}, b: &Bundle{}}
		c.streak = &loader{ctx: c.ctx, arm: "streak", direction: s.Direction}
		c.reference = &loader{ctx: c.ctx, arm: "reference", direction: "down"}
		if err := c.arms(); err != nil {
			t.Fatal(err)
		}
		at := time.Now()
		if err := c.code(); err != nil {
			t.Error(name, err)
			continue
		}
		var rms float64
		truth := st.Code()
		for i, v := range truth {
			rms += math.Pow(float64(v-c.b.Code[i]), 2)
		}
		r := c.r.Code
		t.Logf("%s: %v code rms error %.5f lo %.4f hi %.4f pitch %.4f %.4f excess %.4f chi2 %.2f two %v floor %.4f", name, time.Since(at), math.Sqrt(rms/float64(len(truth))), r.Low, r.High, r.PitchX, r.PitchY, r.Excess, r.Chi2, r.TwoLevel, r.floor)
		t.Logf("    optical %.4f %.4f", c.b.Streak.OpticalX.Value, c.b.Streak.OpticalY.Value)
		t.Logf("    blur %v %v want %v %v", c.b.Streak.BlurX, c.b.Streak.BlurY, o.Streak.SigmaX, o.Streak.SigmaY)
		t.Logf("    edge %v %v  code %v %v window %v", r.Edge[0], r.Edge[1], r.Inner[0], r.Inner[1], c.b.Window)
		for _, w := range c.b.Warnings {
			t.Log("    " + w)
		}
	}
}
