package export

import (
	"bytes"
	"context"
	"encoding/json"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"

	"unsheard/pipeline/cube"
	"unsheard/pipeline/measure"
)

// python is Debian's, where the apt packages live.
const python = "/usr/bin/python3"

// run executes an independent reader; a missing one is a failure.
func run(t *testing.T, apt, name string, args ...string) string {
	t.Helper()
	path, err := exec.LookPath(name)
	if err != nil {
		t.Fatalf("%s is needed: apt install %s", name, apt)
	}
	var out, serr bytes.Buffer
	cmd := exec.Command(path, args...)
	cmd.Stdout, cmd.Stderr = &out, &serr
	if err := cmd.Run(); err != nil {
		t.Fatalf("%s %v: %v\n%s%s", name, args, err, out.String(), serr.String())
	}
	return out.String()
}

// pulse is a shot of a Gaussian patch of light that crosses the window, with
// the numbers a measurement would report.
func pulse(n, h, w int, pass, bundle string) Result {
	c := cube.New(n, h, w)
	for k := range c.Edges {
		c.Edges[k] = -5 + 2.05*float64(k) + 0.004*float64(k*k)
	}
	for k := range c.T {
		c.Time[k] = (c.Edges[k] + c.Edges[k+1]) / 2
		a := 40 * math.Exp(-math.Pow((float64(k)-0.45*float64(n))/(0.16*float64(n)+0.1), 2)/2)
		x0, y0 := float64(w)*(0.1+0.8*float64(k)/float64(n)), float64(h)*(0.35+0.25*float64(k)/float64(n))
		for y := range h {
			for x := range w {
				d := (math.Pow(float64(x)-x0, 2) + math.Pow(float64(y)-y0, 2)) / math.Pow(0.09*float64(w), 2)
				if v := a * math.Exp(-d/2); v > 0.05 {
					c.Frame(k)[y*w+x] = float32(v)
				}
			}
		}
	}
	c.Scale = 12.5
	return Result{Shot: "S_20260611T101502.250", Station: "bay-a", Pass: pass, Bundle: bundle, Cube: c,
		Report: report(c), Frames: planes(n, h, w), Log: []byte("{\"stage\":\"read\"}\n{\"stage\":\"solve\"}\n"),
		Provenance: json.RawMessage(`{"program":"unsheard","version":"test","started":"2026-06-11T10:15:09Z",
			"taken":"2026-06-11T10:15:02.25Z","note":"µ 漢 😀"}`)}
}

func report(c *cube.Cube) *measure.Report {
	lc := measure.Curve{Name: "light", TimeUnit: "ps", Unit: "photoelectrons/ps", Time: c.Time}
	top := 0
	for k := range c.T {
		lc.Value = append(lc.Value, c.Sum(k)/c.Duration(k))
		lc.Sigma = append(lc.Sigma, 6*math.Sqrt(c.Sum(k))/c.Duration(k))
		if lc.Value[k] > lc.Value[top] {
			top = k
		}
	}
	s1, s2 := 0.21, 0.6
	r := &measure.Report{Curves: map[string]measure.Curve{"light": lc},
		Quantities: map[string]measure.Quantity{
			"peak_time":  {Value: c.Time[top], Unit: "ps", Sigma: &s1, Method: "parabola"},
			"peak_light": {Value: lc.Value[top], Unit: "photoelectrons/ps"},
			"odd":        {Value: math.NaN(), Unit: "1", Sigma: &s1},
		},
		Verdict: measure.Verdict{Grade: measure.Doubtful, Reasons: []measure.Reason{{Code: "saturated",
			Text: "streak frame saturated in 3.1 % of the lit pixels", Value: 0.031, Limit: 0.002, Remedy: "reduce light"}}},
		Track: &measure.Track{Time: []float64{1, 2}, X: []float64{1, math.Inf(1)}, Y: []float64{1, 2},
			SigmaX: []float64{1, 1}, SigmaY: []float64{1, 1}, Light: []float64{3, 4}},
		Notes: []string{"no rise time"}}
	if a, b, ok := halfway(lc, lc.Value[top]/2); ok {
		r.Quantities["fwhm"] = measure.Quantity{Value: b - a, Unit: "ps", Sigma: &s2}
	}
	return r
}

// planes are measured frames with noise about a smooth model, a masked corner
// and one bad patch.
func planes(n, h, w int) []FramePlane {
	r := rand.New(rand.NewPCG(1, 2))
	var out []FramePlane
	for _, f := range []FramePlane{{Arm: "streak", W: w, H: h + n - 1}, {Arm: "reference", W: w + 6, H: h + 6}} {
		for i := range f.W * f.H {
			x, y := float64(i%f.W)/float64(f.W), float64(i/f.W)/float64(f.H)
			m := 200*math.Exp(-8*(x-.5)*(x-.5)-8*(y-.5)*(y-.5)) + 4
			v := m + 4
			d := m + math.Sqrt(v)*r.NormFloat64()
			if x > .7 && x < .8 && y > .3 && y < .4 {
				d += 5 * math.Sqrt(v)
			}
			if x < .1 && y < .1 {
				v = -1
			}
			f.Measured, f.Model, f.Variance = append(f.Measured, float32(d)), append(f.Model, float32(m)), append(f.Variance, float32(v))
		}
		out = append(out, f)
	}
	return out
}

func publishTo(t *testing.T, dir string, r Result, o Options) {
	t.Helper()
	if err := Publish(context.Background(), dir, r, o); err != nil {
		t.Fatal(err)
	}
}

// listing returns the names in a folder, hidden ones too.
func listing(t *testing.T, dir string) string {
	t.Helper()
	list, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	var names []string
	for _, e := range list {
		names = append(names, e.Name())
	}
	return strings.Join(names, " ")
}

// whole fails unless dir is an unharmed result; it returns pass and bundle.
func whole(t *testing.T, dir string) identity {
	t.Helper()
	faults, err := Verify(dir)
	if err != nil || len(faults) > 0 {
		t.Fatalf("%s: %v %v", filepath.Base(dir), faults, err)
	}
	return identify(dir)
}
