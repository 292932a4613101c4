package calib

import (
	"context"
	"path/filepath"
	"testing"

	"unsheard/pipeline/rig"
)

func TestLookGain(t *testing.T) {
	for seed := range uint64(12) {
		o := rig.Default()
		o.Seed = seed + 5
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
		t.Logf("%+.3f %% of %.3f, %+.3f %% of %.3f", 100*(c.b.Streak.Gain.Value/o.Streak.Gain-1), 100*c.b.Streak.Gain.Sigma/o.Streak.Gain, 100*(c.b.Reference.Gain.Value/o.Reference.Gain-1), 100*c.b.Reference.Gain.Sigma/o.Reference.Gain)
	}
}
