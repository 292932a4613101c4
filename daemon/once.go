package daemon

import (
	"context"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"time"

	"unsheard/pipeline"
	"unsheard/pipeline/calib"
)

// handTag marks the attempts of commands run by hand in temporary names.
const handTag = "byhand"

// Reconstruct runs one job now and publishes its result folder.
func Reconstruct(ctx context.Context, job pipeline.Job, out string) (*pipeline.Result, error) {
	dir, err := calib.Find(job.Bundle, time.Time{}) // named by hand: the validity is the caller's business
	if err != nil {
		return nil, err
	}
	job.Bundle = dir
	log := &journal{}
	res, err := pipeline.Run(ctx, job, log.stage)
	if err != nil {
		return nil, err
	}
	if out, err = filepath.Abs(out); err != nil {
		return nil, err
	}
	if err := os.MkdirAll(filepath.Dir(out), 0o755); err != nil {
		return nil, fmt.Errorf("make the folder of the result: %w", err)
	}
	return res, Publish(ctx, out, fmt.Sprintf("%s-%d", handTag, os.Getpid()), res, log.bytes())
}

// Calibrate makes a bundle from a series and writes it to out.
func Calibrate(ctx context.Context, series, out string) (*calib.Bundle, error) {
	s, err := calib.ReadSeries(series)
	if err != nil {
		return nil, err
	}
	if err := calib.Vacant(out); err != nil {
		return nil, err // before the work, not after it
	}
	b, _, err := calib.Calibrate(ctx, s, calib.Options{})
	if err != nil {
		return nil, err
	}
	if err := os.MkdirAll(filepath.Dir(filepath.Clean(out)), 0o755); err != nil {
		return nil, fmt.Errorf("make the folder of the bundle: %w", err)
	}
	return b, b.Save(out)
}

// Fact is one number of a bundle.
type Fact struct {
	Name  string  `json:"name"`
	Value float64 `json:"value"`
	Sigma float64 `json:"sigma"`
	Unit  string  `json:"unit"`
}

// Facts is what a calibration found, in short.
type Facts struct {
	Out      string       `json:"out"`
	ID       string       `json:"id"`
	Window   calib.Window `json:"window"`
	Frames   int          `json:"frames"`
	Numbers  []Fact       `json:"numbers"`
	Warnings []string     `json:"warnings"`
}

// BundleFacts lists the numbers of a bundle.
func BundleFacts(b *calib.Bundle, out string) Facts {
	f := Facts{Out: out, ID: b.ID, Window: b.Window, Frames: b.Frames, Warnings: b.Warnings}
	add := func(name string, q calib.Quantity) {
		f.Numbers = append(f.Numbers, Fact{name, q.Value, q.Sigma, q.Unit})
	}
	for _, a := range []struct {
		name string
		arm  *calib.Arm
	}{{"streak", &b.Streak}, {"reference", &b.Reference}} {
		add(a.name+" gain", a.arm.Gain)
		add(a.name+" read noise", a.arm.ReadNoise)
		add(a.name+" saturation", a.arm.Saturation)
		add(a.name+" blur x", a.arm.BlurX)
		add(a.name+" blur y", a.arm.BlurY)
		f.Numbers = append(f.Numbers, Fact{a.name + " model-error floor", a.arm.Floor, 0, "1"})
	}
	add("throughput ratio", b.Ratio)
	add("scale", b.Scale)
	f.Numbers = append(f.Numbers,
		Fact{"registration uncertainty", b.RegistrationResidual, 0, "px"},
		Fact{"sweep from", b.Sweep.First, 0, "ps"}, Fact{"sweep to", b.Sweep.Last, 0, "ps"},
		Fact{"sweep residual", b.Sweep.Residual, 0, "ps"},
		Fact{"sweep rate at the middle", b.Sweep.Rate((b.Sweep.First + b.Sweep.Last) / 2), 0, "px/ps"})
	return f
}

// DescribeBundle prints what a calibration found.
func DescribeBundle(w io.Writer, b *calib.Bundle, out string) {
	f := BundleFacts(b, out)
	fmt.Fprintf(w, "bundle %.12s of station %s: window %d×%d px at (%d, %d), %d frames\n",
		f.ID, b.Station, f.Window.W, f.Window.H, f.Window.X, f.Window.Y, f.Frames)
	for _, n := range f.Numbers {
		line := fmt.Sprintf("  %-28s %.5g", n.Name, n.Value)
		if n.Sigma > 0 {
			line += fmt.Sprintf(" ± %.2g", n.Sigma)
		}
		fmt.Fprintf(w, "%s %s\n", line, n.Unit)
	}
	for _, s := range f.Warnings {
		fmt.Fprintf(w, "  warning: %s\n", s)
	}
	fmt.Fprintf(w, "written to %s; look at %s\n", out, filepath.Join(out, "report.html"))
}
