package daemon_test

import (
	"fmt"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"testing"
	"time"

	"unsheard/pipeline/rig"
	"unsheard/queue"
)

// packet is a Gaussian packet of light: it crosses the window in a straight
// line while it brightens and fades.
type packet struct {
	x, y, vx, vy float64 // px at t0, px/ps
	t0, sigma    float64 // ps
	size, total  float64 // px, photoelectrons
}

func (p packet) scene() rig.Scene {
	return rig.NewScene("packet", func(x, y, t float64) float64 {
		dx, dy, dt := x-p.x-p.vx*(t-p.t0), y-p.y-p.vy*(t-p.t0), (t-p.t0)/p.sigma
		return p.total / (2 * math.Pi * p.size * p.size) * math.Exp(-(dx*dx+dy*dy)/(2*p.size*p.size)) *
			math.Exp(-dt*dt/2) / (p.sigma * math.Sqrt(2*math.Pi))
	})
}

// The accuracy that a moving packet's numbers must have, as parts of their true
// values, with the calibration made from raw series alone.
const (
	speedWithin = 0.03
	widthWithin = 0.10
	lightWithin = 0.05
)

// fwhmPerSigma is 2√(2 ln 2), the full width at half maximum of a Gaussian of
// unit deviation.
var fwhmPerSigma = 2 * math.Sqrt(2*math.Ln2)

// TestEndToEndNumbers has frames written by another program (tifffile, in several ways)
// into watched folders and compares the results, read by h5py, silx and Octave,
// with what was put in.
func TestEndToEndNumbers(t *testing.T) {
	if testing.Short() {
		t.Skip("long: reconstructs shots at full size")
	}
	l := newLab(t, func() rig.Options { o := rig.Default(); o.Station = "bay-a"; return o }(), "")
	packets := []packet{
		{x: 31, y: 30, vx: 2.1, vy: 0.6, t0: 12, sigma: 4, size: 3, total: 250000},
		{x: 33, y: 31, vx: -1.6, vy: 1.4, t0: 12.5, sigma: 3.6, size: 2.6, total: 200000},
		{x: 32, y: 32, vx: -2, vy: -0.2, t0: 12, sigma: 3.5, size: 2.8, total: 200000},
	}
	raw := l.path("raw")
	if err := os.Mkdir(raw, 0o755); err != nil {
		t.Fatal(err)
	}
	page, stop := l.serve(t)
	for i, p := range packets {
		a, b, _ := l.station.Shoot(p.scene(), uint64(100+i))
		for name, im := range map[string]rig.Image{"S": a, "R": b} {
			if err := l.station.Save(im, filepath.Join(raw, fmt.Sprintf("%s_20260314T0900%02d.250000.tif", name, i))); err != nil {
				t.Fatal(err)
			}
		}
	}
	t.Logf("%s", python(t, "drop.py", raw, l.path("streak"), l.path("reference")))
	await(t, 120*time.Second, "three shots done", func() bool {
		return count(l.shots(t), queue.StateDone) == len(packets)
	})
	if code, body := get(t, page+"metrics"); code != 200 {
		t.Errorf("metrics = %d", code)
	} else {
		checkMetrics(t, body)
	}
	stop()
	for i, p := range packets {
		dir := l.path("streak", fmt.Sprintf("S_20260314T0900%02d.250000.shot", i))
		compare(t, dir, p, rig.Default().UmPerPx)
		t.Logf("%s", python(t, "open.py", dir))
	}
	octave(t, l.path("streak", "S_20260314T090000.250000.shot", "cube.nxs"))
}

func compare(t *testing.T, dir string, p packet, umPerPx float64) {
	t.Helper()
	m := readMetrics(t, dir)
	if m.Pass != "full" {
		t.Errorf("%s holds the %s pass of a shot that is done", dir, m.Pass)
	}
	speed := math.Hypot(p.vx, p.vy)
	for _, c := range []struct {
		name       string
		want, part float64
	}{
		{"speed", speed, speedWithin},
		{"speed_scene", speed * umPerPx * 1e6, speedWithin},
		{"fwhm", fwhmPerSigma * p.sigma, widthWithin},
		{"total_light", p.total, lightWithin},
	} {
		got := m.Quantities[c.name].Value
		t.Logf("%s %s: %.5g, put in %.5g (%+.2f %%)", filepath.Base(dir), c.name, got, c.want, 100*(got/c.want-1))
		if !(math.Abs(got/c.want-1) <= c.part) {
			t.Errorf("%s = %g, want %g within %g %%", c.name, got, c.want, 100*c.part)
		}
	}
	// The peak lies within the frame that it fell into (0.8 ps).
	if got := m.Quantities["peak_time"].Value; math.Abs(got-p.t0) > 0.8 {
		t.Errorf("peak_time = %g ps, want %g", got, p.t0)
	}
	if m.Verdict.Grade != "good" {
		t.Errorf("verdict %q of a clean shot", m.Verdict.Grade)
	}
}

// checkMetrics passes the scraped text to Prometheus' own checker.
func checkMetrics(t *testing.T, text string) {
	t.Helper()
	cmd := exec.Command("promtool", "check", "metrics")
	in, err := cmd.StdinPipe()
	if err != nil {
		t.Fatal(err)
	}
	go func() {
		defer in.Close()
		_, _ = in.Write([]byte(text))
	}()
	out, err := cmd.CombinedOutput()
	if err != nil {
		t.Errorf("promtool check metrics (Debian package prometheus): %v\n%s", err, out)
	}
}

// octave opens the cube with GNU Octave.
func octave(t *testing.T, file string) {
	t.Helper()
	script := fmt.Sprintf("s = load('%s'); c = s.entry.data.counts; t = s.entry.data.time; printf('%%d %%g\\n', numel(t), sum(c(:)));", file)
	out, err := exec.Command("octave", "--no-gui", "--quiet", "--eval", script).CombinedOutput()
	if err != nil {
		t.Fatalf("octave (Debian package octave): %v\n%s", err, out)
	}
	var n int
	var sum float64
	if _, err := fmt.Sscan(string(out), &n, &sum); err != nil || n < 16 || !(sum > 50000) {
		t.Errorf("octave read %q: %v", out, err)
	}
}
