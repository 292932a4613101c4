package calib

import (
	"context"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"

	"unsheard/pipeline/rig"
)

// swap exchanges two kinds of frames, by the prefixes of their files.
func swap(t *testing.T, dir, a, b string) {
	t.Helper()
	for _, p := range [][2]string{{a, "tmp_"}, {b, a}, {"tmp_", b}} {
		files, err := filepath.Glob(filepath.Join(dir, p[0]+"*.tif"))
		if err != nil || len(files) == 0 {
			t.Fatalf("no frames %s* (%v)", p[0], err)
		}
		for _, f := range files {
			if err := os.Rename(f, filepath.Join(dir, p[1]+strings.TrimPrefix(filepath.Base(f), p[0]))); err != nil {
				t.Fatal(err)
			}
		}
	}
}

// copyOver writes the first frame of one kind over all of another.
func copyOver(t *testing.T, dir, from, to string) {
	t.Helper()
	src, err := filepath.Glob(filepath.Join(dir, from+"*.tif"))
	if err != nil || len(src) == 0 {
		t.Fatalf("no frames %s*", from)
	}
	dst, err := filepath.Glob(filepath.Join(dir, to+"*.tif"))
	if err != nil || len(dst) == 0 {
		t.Fatalf("no frames %s*", to)
	}
	data, err := os.ReadFile(src[0])
	if err != nil {
		t.Fatal(err)
	}
	for _, f := range dst {
		if err := os.WriteFile(f, data, 0o644); err != nil {
			t.Fatal(err)
		}
	}
}

// station is a small one, so that many series can be spoiled.
func station() rig.Options {
	o := rig.Default()
	o.H, o.W, o.T = 40, 44, 14
	o.View.SensorW, o.View.SensorH = 72, 70
	return o
}

// onlyFlats keeps one pair of flats.
func onlyFlats(t *testing.T, dir, tag, level string) {
	t.Helper()
	path := filepath.Join(dir, "series.toml")
	text, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	re := regexp.MustCompile(`flat = \[\["flat_` + tag + `_0a.*`)
	if !re.Match(text) {
		t.Fatal("series.toml holds no flats")
	}
	text = re.ReplaceAll(text, []byte(`flat = [["flat_`+tag+`_`+level+`a.tif", "flat_`+tag+`_`+level+`b.tif"]]`))
	if err := os.WriteFile(path, text, 0o644); err != nil {
		t.Fatal(err)
	}
}

// TestRefusals spoils a good series in one way each; the error names the
// file or key and the remedy.
func TestRefusals(t *testing.T) {
	same := station() // both sensors of one shape, so that size tells nothing
	same.View.SensorW, same.View.SensorH = same.WindowX+same.W+same.Margin, same.WindowY+same.H+same.T+same.Margin
	for _, c := range []struct {
		name  string
		o     rig.Options
		spoil func(t *testing.T, dir string)
		want  []string
	}{
		{"arms swapped in the target", station(), func(t *testing.T, dir string) { swap(t, dir, "target_s_", "target_r_") },
			[]string{"target_s_00.tif", "same sensor area"}},
		{"arms of one shape swapped in the open frames", same, func(t *testing.T, dir string) { swap(t, dir, "open_", "even_r_") },
			[]string{"open_00.tif", "other arm"}},
		{"arms of one shape swapped in the target", same, func(t *testing.T, dir string) { swap(t, dir, "target_s_", "target_r_") },
			[]string{"target_s_00.tif", "other arm"}},
		{"coded and open swapped", station(), func(t *testing.T, dir string) { swap(t, dir, "code_", "open_") },
			[]string{"open_00.tif", "no rectangle"}},
		{"code not in place", station(), func(t *testing.T, dir string) { copyOver(t, dir, "open_", "code_") },
			[]string{"code_00.tif", "not in place"}},
		{"only saturated flats", station(), func(t *testing.T, dir string) { onlyFlats(t, dir, "s", "7") },
			[]string{"streak arm", "saturated", "70 %"}},
		{"dark flats", station(), func(t *testing.T, dir string) {
			copyOver(t, dir, "dark_r_", "flat_r_2a")
			copyOver(t, dir, "dark_r_01", "flat_r_2b")
		},
			[]string{"flat_r_2a.tif", "light was on"}},
		{"one picture twice", station(), func(t *testing.T, dir string) { copyOver(t, dir, "flat_r_2a", "flat_r_2b") },
			[]string{"flat_r_2b.tif", "same picture"}},
		{"unequal pair", station(), func(t *testing.T, dir string) { copyOver(t, dir, "flat_r_3a", "flat_r_2b") },
			[]string{"flat_r_2b.tif", "equal exposures"}},
		{"target without structure", station(), func(t *testing.T, dir string) {
			copyOver(t, dir, "open_", "target_s_")
			copyOver(t, dir, "even_r_", "target_r_")
		}, []string{"target", "structure"}},
		{"two different targets", station(), func(t *testing.T, dir string) { copyOver(t, dir, "even_r_", "target_r_") },
			[]string{"target"}},
		{"saturated target", station(), func(t *testing.T, dir string) { copyOver(t, dir, "flat_s_7a", "target_s_") },
			[]string{"target_s_00.tif", "saturated in", "reduce the light"}},
		{"direction up", station(), func(t *testing.T, dir string) { edit(t, dir, `direction = "down"`, `direction = "up"`) },
			[]string{`write direction = "down"`}},
		{"sweep off", station(), func(t *testing.T, dir string) { copyOver(t, dir, "spot_0000000", "spot_") },
			[]string{"do not move", "sweep was on"}},
		{"a dark delay", station(), func(t *testing.T, dir string) { copyOver(t, dir, "dark_s_", "spot_0000000") },
			[]string{"0 ps", "dark"}},
		{"open frames dark", station(), func(t *testing.T, dir string) { copyOver(t, dir, "dark_s_", "open_") },
			[]string{"open_00.tif"}},
		{"open frames lit all over", station(), func(t *testing.T, dir string) { copyOver(t, dir, "flat_s_3a", "open_") },
			[]string{"open_00.tif", "all over the sensor"}},
		{"even light missing in the reference arm", station(), func(t *testing.T, dir string) { copyOver(t, dir, "dark_r_", "even_r_") },
			[]string{"even_r_00.tif", "dark"}},
		{"no picture", station(), func(t *testing.T, dir string) {
			if err := os.WriteFile(filepath.Join(dir, "dark_s_03.tif"), []byte("II*\x00"), 0o644); err != nil {
				t.Fatal(err)
			}
		}, []string{"dark_s_03.tif"}},
		{"window by hand off the sensor", station(), func(t *testing.T, dir string) {
			edit(t, dir, "[scale]", "[window]\nx = 60\ny = 0\nw = 40\nh = 40\n[scale]")
		},
			[]string{"[window]", "does not lie"}},
	} {
		t.Run(c.name, func(t *testing.T) {
			_, dir := write(t, c.o)
			c.spoil(t, dir)
			b, _, err := calibrate(t, dir)
			if err == nil {
				t.Fatalf("was accepted: registration ± %g, ratio %v, warnings %q", b.RegistrationResidual, b.Ratio, b.Warnings)
			}
			t.Log(err)
			for _, w := range c.want {
				if !strings.Contains(err.Error(), w) {
					t.Errorf("error %q does not hold %q", err, w)
				}
			}
		})
	}
}

// TestDirection writes every wrong direction and expects to be told the right
// one.
func TestDirection(t *testing.T) {
	for _, right := range []string{"down", "left"} {
		o := station()
		o.Direction = right
		_, dir := write(t, o)
		s, err := ReadSeries(filepath.Join(dir, "series.toml"))
		if err != nil {
			t.Fatal(err)
		}
		for _, wrong := range []string{"down", "up", "left", "right"} {
			if wrong == right {
				continue
			}
			// The window is known, so that only the sweep can object.
			l := &loader{ctx: context.Background(), arm: "streak", direction: wrong}
			a, _, err := measureArm(l, &s.Streak, nil)
			if err != nil {
				t.Fatal(err)
			}
			c := &calibration{ctx: l.ctx, s: s, b: &Bundle{Streak: *a}, r: &Report{}, streak: l}
			s.Direction = wrong
			err = c.sweep()
			if err == nil || !strings.Contains(err.Error(), `write direction = "`+right+`"`) {
				t.Errorf("true %s, written %s: %v", right, wrong, err)
			}
		}
	}
}

// TestCancel stops at once.
func TestCancel(t *testing.T) {
	_, dir := write(t, station())
	s, err := ReadSeries(filepath.Join(dir, "series.toml"))
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if _, _, err := Calibrate(ctx, s, Options{}); err == nil || !strings.Contains(err.Error(), context.Canceled.Error()) {
		t.Errorf("cancelled: %v", err)
	}
}

// TestSparse does without every optional part, with warnings, and still comes
// out right where it can.
func TestSparse(t *testing.T) {
	o := station()
	o.Direction = "right"
	st, dir := write(t, o)
	path := filepath.Join(dir, "series.toml")
	text, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	for _, cut := range []string{`flat = .*\n`, `reference = \["even_r_.*\n`, `\[scale\]\num_per_px.*\n`} {
		re := regexp.MustCompile(cut)
		if !re.Match(text) {
			t.Fatalf("series.toml holds no %s", cut)
		}
		text = re.ReplaceAll(text, nil)
	}
	if err := os.WriteFile(path, text, 0o644); err != nil {
		t.Fatal(err)
	}
	b, _, err := calibrate(t, dir)
	if err != nil {
		t.Fatal(err)
	}
	// Without flats the gain rests on the window's pixels alone.
	within(t, "streak gain", b.Streak.Gain.Value, o.Streak.Gain, 0.03)
	within(t, "reference gain", b.Reference.Gain.Value, o.Reference.Gain, 0.04)
	within(t, "ratio", b.Ratio.Value, o.Ratio, 0.07) // gains, and flats of up to 8 %
	// Pixels that answer unequally (1 % rms) pass for detail of the target.
	if e := registrationError(st, b); e > 2*goalRegistration {
		t.Errorf("registration is off by %.4f px rms", e)
	}
	if b.Scale.Value != 0 || len(b.Warnings) < 4 {
		t.Errorf("scale %v, warnings %q", b.Scale, b.Warnings)
	}
}

// TestStill: frames of the spots with the sweep off give the displacement an
// absolute origin.
func TestStill(t *testing.T) {
	o := station()
	_, dir := write(t, o)
	// The first delay of the rig is at displacement 0: it serves as the still
	// frame, and the delays that remain begin later.
	path := filepath.Join(dir, "series.toml")
	text, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	re := regexp.MustCompile(`  \{ ps = 0\.0, frames = (\[.*\]) \},\n`)
	m := re.FindSubmatch(text)
	if m == nil {
		t.Fatalf("no delay at 0 in %s", text)
	}
	text = re.ReplaceAll(text, nil)
	text = append([]byte(strings.Replace(string(text), "direction =", "still = "+string(m[1])+"\ndirection =", 1)), '\n')
	if err := os.WriteFile(path, text, 0o644); err != nil {
		t.Fatal(err)
	}
	b, _, err := calibrate(t, dir)
	if err != nil {
		t.Fatal(err)
	}
	st, err := rig.New(o)
	if err != nil {
		t.Fatal(err)
	}
	for k := 2; k < o.T; k++ {
		if d := b.Sweep.At(st.Inverse(float64(k))) - float64(k); d > 0.03 || d < -0.03 {
			t.Errorf("s at displacement %d is off by %.4f px", k, d)
		}
	}
	if !strings.Contains(b.Sweep.Origin, "measured") {
		t.Errorf("origin %q", b.Sweep.Origin)
	}
	if b.Sweep.Sigma(b.Sweep.First) <= 0 {
		t.Error("an origin that was measured has no uncertainty")
	}
}

// TestReport: the page holds every part and no reference to elsewhere.
func TestReport(t *testing.T) {
	_, dir := write(t, station())
	b, r, err := calibrate(t, dir)
	if err != nil {
		t.Fatal(err)
	}
	page, err := r.HTML(b)
	if err != nil {
		t.Fatal(err)
	}
	s := string(page)
	for _, want := range []string{"Registration", "Throughput ratio", "Streak arm", "Reference arm", "pe/ADU", "data:image/png;base64,"} {
		if !strings.Contains(s, want) {
			t.Errorf("the page holds no %q", want)
		}
	}
	if n := strings.Count(s, "<svg"); n != 4 {
		t.Errorf("the page holds %d plots, want 4", n)
	}
	for _, bad := range []string{"<script", `src="http`, `href="http`, "ZgotmplZ", "NaN"} {
		if strings.Contains(s, bad) {
			t.Errorf("the page holds %q", bad)
		}
	}
	out := filepath.Join(t.TempDir(), "b")
	if err := b.Save(out); err != nil {
		t.Fatal(err)
	}
	saved, err := os.ReadFile(filepath.Join(out, reportName))
	if err != nil || string(saved) != s {
		t.Errorf("the saved page differs (%v)", err)
	}
	if got, err := Load(out); err != nil || got.ID != b.ID {
		t.Errorf("load after save: %v", err)
	}
}
