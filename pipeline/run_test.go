package pipeline

import (
	"context"
	"errors"
	"math"
	"os"
	"path/filepath"
	"slices"
	"testing"

	"unsheard/pipeline/calib"
	"unsheard/pipeline/frame"
	"unsheard/pipeline/rig"
)

// bench is a small simulated station with its bundle and one shot on disk.
type bench struct {
	station *rig.Station
	truth   rig.Truth
	job     Job
}

func newBench(t *testing.T, direction, scene string) bench {
	t.Helper()
	o := rig.Default()
	o.H, o.W, o.T, o.Span = 32, 32, 16, 12
	o.View.SensorW, o.View.SensorH = 60, 58
	o.Direction = direction
	st, err := rig.New(o)
	if err != nil {
		t.Fatal(err)
	}
	dir := t.TempDir()
	if err := st.WriteSeries(filepath.Join(dir, "series")); err != nil {
		t.Fatal(err)
	}
	s, err := calib.ReadSeries(filepath.Join(dir, "series", "series.toml"))
	if err != nil {
		t.Fatal(err)
	}
	b, _, err := calib.Calibrate(t.Context(), s, calib.Options{})
	if err != nil {
		t.Fatal(err)
	}
	if err := b.Save(filepath.Join(dir, "bundle")); err != nil {
		t.Fatal(err)
	}
	sc, err := st.Scene(scene, 1)
	if err != nil {
		t.Fatal(err)
	}
	a, r, truth := st.Shoot(sc, 2)
	j := Job{Shot: "S", Streak: filepath.Join(dir, "S.tif"), Reference: filepath.Join(dir, "R.tif"), Bundle: filepath.Join(dir, "bundle"), Workers: 2}
	for path, im := range map[string]rig.Image{j.Streak: a, j.Reference: r} {
		if err := st.Save(im, path); err != nil {
			t.Fatal(err)
		}
	}
	return bench{st, truth, j}
}

// psnr is 10·log10(peak²/mean squared error), peak being that of want.
func psnr(got, want []float32) float64 {
	var se, top float64
	for j, w := range want {
		d := float64(got[j] - w)
		se += d * d
		top = math.Max(top, float64(w))
	}
	return 10 * math.Log10(top*top*float64(len(want))/se)
}

// TestDirections reconstructs through calibrations from raw series with the
// sweep going each way. The measured values were 43 to 49 dB; 40 leaves room
// for another draw of the noise, and no mistake of turning comes near it.
func TestDirections(t *testing.T) {
	for _, d := range []string{"down", "up", "left", "right"} {
		t.Run(d, func(t *testing.T) {
			b := newBench(t, d, "flash")
			res, err := Run(t.Context(), b.job, nil)
			if err != nil {
				t.Fatal(err)
			}
			if err := res.Cube.Check(); err != nil {
				t.Fatal(err)
			}
			got := psnr(res.Cube.Data, b.truth.Cube(res.Cube.Edges))
			t.Logf("%s: %.1f dB, verdict %s", d, got, res.Report.Verdict.Grade)
			if got < 40 {
				t.Errorf("%.1f dB, want at least 40", got)
			}
			if g := res.Report.Verdict; g.Grade != "good" {
				t.Errorf("verdict %+v of a clean shot", g)
			}
		})
	}
}

func TestSameCubeForAnyWorkers(t *testing.T) {
	b := newBench(t, "down", "basin")
	var first []float32
	for _, n := range []int{1, 2, 5} {
		b.job.Workers = n
		res, err := Run(t.Context(), b.job, nil)
		if err != nil {
			t.Fatal(err)
		}
		if first == nil {
			first = res.Cube.Data
		} else if !slices.Equal(first, res.Cube.Data) {
			t.Errorf("%d workers give another cube than 1", n)
		}
	}
}

// TestCoarse has the quick look agree with the binned truth in its light and
// in where the light is.
func TestCoarse(t *testing.T) {
	b := newBench(t, "down", "flash")
	fine, err := Run(t.Context(), b.job, nil)
	if err != nil {
		t.Fatal(err)
	}
	b.job.Coarse = 2
	var stages []string
	res, err := Run(t.Context(), b.job, func(e Event) { stages = append(stages, e.Stage) })
	if err != nil {
		t.Fatal(err)
	}
	if res.Provenance.Pass != Quick {
		t.Errorf("pass %q, want %q", res.Provenance.Pass, Quick)
	}
	if want := []string{"bundle", "read", "reconstruct", "measure"}; !slices.Equal(stages, want) {
		t.Errorf("stages %v, want %v", stages, want)
	}
	c, f := res.Cube, fine.Cube
	if c.H != f.H/2 || c.W != f.W/2 || c.T != (f.T+1)/2 {
		t.Errorf("%d×%d×%d cube of a %d×%d×%d one", c.T, c.H, c.W, f.T, f.H, f.W)
	}
	if r := c.Total() / b.truth.Summary().Total; math.Abs(r-1) > 0.05 {
		t.Errorf("quick look has %.3f of the light", r)
	}
	if d := c.Edges[c.T] - f.Edges[f.T]; math.Abs(d) > f.Duration(f.T-1)*1.5 {
		t.Errorf("quick look ends %g ps off", d)
	}
	value := func(r *Result, name string) float64 { return r.Report.Quantities[name].Value }
	if q, p := value(res, "peak_time"), value(fine, "peak_time"); math.Abs(q-p) > c.Duration(0)/2 {
		t.Errorf("peak time: quick look %g ps, full %g", q, p)
	}
	// A quick look can be wider by the splines it is made of: the variance of
	// a cubic B-spline of spacing h is h²/3, here of one coarse frame.
	q, p := value(res, "fwhm"), value(fine, "fwhm")
	own := 2 * math.Sqrt(2*math.Ln2) * c.Duration(c.T/2) * quickSpacing[0] / math.Sqrt(3)
	if most := math.Hypot(p, own); q < 0.9*p || q > 1.1*most {
		t.Errorf("fwhm: quick look %g ps, full %g, with its splines at most %g", q, p, most)
	}
}

func TestErrors(t *testing.T) {
	b := newBench(t, "down", "flash")
	dir := t.TempDir()
	file := func(name string, w, h int) string {
		p := filepath.Join(dir, name)
		if err := b.station.Save(rig.Image{W: w, H: h, Pix: make([]uint16, w*h)}, p); err != nil {
			t.Fatal(err)
		}
		return p
	}
	text := filepath.Join(dir, "note.tif")
	if err := os.WriteFile(text, []byte("nothing to see"), 0o644); err != nil {
		t.Fatal(err)
	}
	cut := filepath.Join(dir, "cut.tif")
	whole, err := os.ReadFile(b.job.Streak)
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(cut, whole[:len(whole)/2], 0o644); err != nil {
		t.Fatal(err)
	}
	cases := []struct {
		name      string
		spoil     func(*Job)
		is        error
		permanent bool
	}{
		{"wrong shape", func(j *Job) { j.Streak = file("a.tif", 10, 10) }, ErrShape, true},
		{"wrong shape, reference", func(j *Job) { j.Reference = file("b.tif", 10, 10) }, ErrShape, true},
		{"no image", func(j *Job) { j.Reference = text }, frame.ErrFormat, true},
		{"truncated", func(j *Job) { j.Streak = cut }, frame.ErrTruncated, false},
		{"missing", func(j *Job) { j.Streak = filepath.Join(dir, "none.tif") }, os.ErrNotExist, false},
		{"no bundle", func(j *Job) { j.Bundle = dir }, os.ErrNotExist, false},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			j := b.job
			c.spoil(&j)
			_, err := Run(t.Context(), j, nil)
			if !errors.Is(err, c.is) || IsPermanent(err) != c.permanent {
				t.Errorf("error %v (permanent %v), want %v (%v)", err, IsPermanent(err), c.is, c.permanent)
			}
		})
	}
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	if _, err := Run(ctx, b.job, nil); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
}

// TestDarkAndSaturated has frames with no light and frames with too much: a
// defined answer with a reason.
func TestDarkAndSaturated(t *testing.T) {
	b := newBench(t, "down", "flash")
	for _, c := range []struct {
		fault rig.Fault
		code  string
	}{{rig.Saturated, "saturated_streak"}, {rig.Dim, "little_light"}} {
		sc, err := b.station.Scene("flash", 1)
		if err != nil {
			t.Fatal(err)
		}
		a, r, _ := b.station.ShootFault(sc, 3, c.fault)
		for path, im := range map[string]rig.Image{b.job.Streak: a, b.job.Reference: r} {
			if err := b.station.Save(im, path); err != nil {
				t.Fatal(err)
			}
		}
		res, err := Run(t.Context(), b.job, nil)
		if err != nil {
			t.Fatal(err)
		}
		var codes []string
		for _, r := range res.Report.Verdict.Reasons {
			codes = append(codes, r.Code)
		}
		t.Logf("%s: %s %v", c.fault, res.Report.Verdict.Grade, codes)
		if res.Report.Verdict.Grade == "good" || !slices.ContainsFunc(codes, func(s string) bool { return s == c.code || s == "no_light" }) {
			t.Errorf("%s: %s for %v, want %s", c.fault, res.Report.Verdict.Grade, codes, c.code)
		}
	}
}
