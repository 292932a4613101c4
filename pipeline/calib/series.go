package calib

import (
	"fmt"
	"math"
	"path/filepath"
	"time"
)

// Series is a calibration series: which frame files show what. File names
// are complete paths.
type Series struct {
	Path    string // the series file
	Station string

	Streak, Reference ArmSeries

	Coded, Open, Even []string // sweep off, even light; Even is the reference arm

	TargetStreak, TargetReference []string // sweep off, code open

	Direction string   // where later light lands on the raw streak sensor
	Delays    []Delay  // rising
	Still     []string // the spots with the sweep off; may be none

	Scale float64 // µm per window px; 0 unknown

	Window *Window // set by hand; nil to find it

	ValidFrom, ValidUntil time.Time // zero: no limit

	// Warnings names every part that is missing and what follows from doing
	// without it.
	Warnings []string
}

// ArmSeries is the part of a series about one camera.
type ArmSeries struct {
	Dark []string
	Flat [][2]string // equal-exposure pairs, rising

	Exposure   []float64 // of each pair, any unit; nil if not known
	Saturation float64   // ADU, set by hand; 0 to find it
}

// Delay is one delay of the sweep calibration.
type Delay struct {
	PS     float64
	Frames []string
}

type seriesFile struct {
	Station   string        `toml:"station"`
	Streak    armSeriesFile `toml:"streak"`
	Reference armSeriesFile `toml:"reference"`
	Code      struct {
		Coded     []string `toml:"coded"`
		Open      []string `toml:"open"`
		Reference []string `toml:"reference"`
	} `toml:"code"`
	Target struct {
		Streak    []string `toml:"streak"`
		Reference []string `toml:"reference"`
	} `toml:"target"`
	Sweep struct {
		Direction string      `toml:"direction"`
		Delays    []delayFile `toml:"delays"`
		Still     []string    `toml:"still"`
	} `toml:"sweep"`
	Scale struct {
		UmPerPx float64 `toml:"um_per_px"`
	} `toml:"scale"`
	Window   *Window `toml:"window"`
	Validity struct {
		From  time.Time `toml:"from"`
		Until time.Time `toml:"until"`
	} `toml:"validity"`
}

type armSeriesFile struct {
	Dark       []string   `toml:"dark"`
	Flat       [][]string `toml:"flat"`
	Exposure   []float64  `toml:"exposure"`
	Saturation float64    `toml:"saturation"`
}

type delayFile struct {
	PS     *float64 `toml:"ps"`
	Frames []string `toml:"frames"`
}

// ReadSeries reads a series file and finds the frame files it names. Faults
// are reported as file:line:col with what is wrong and what to write.
func ReadSeries(path string) (*Series, error) {
	text, err := readText(path)
	if err != nil {
		return nil, fmt.Errorf("read calibration series: %w", err)
	}
	var f seriesFile
	if err := decode(text, &f); err != nil {
		return nil, fmt.Errorf("read calibration series: %s:%w", path, err)
	}
	r := &reader{path: path, folder: filepath.Dir(path), text: string(text), role: map[string]string{}}
	s := r.series(&f)
	if r.err != nil {
		return nil, fmt.Errorf("read calibration series: %w", r.err)
	}
	return s, nil
}

func (r *reader) series(f *seriesFile) *Series {
	s := &Series{Path: r.path, Station: f.Station, Direction: f.Sweep.Direction,
		ValidFrom: f.Validity.From, ValidUntil: f.Validity.Until}
	if f.Station == "" {
		r.fail("", "station", "the station has no name", `write station = "bay-a" above the first table`)
	}
	s.Streak = r.arm("streak", &f.Streak)
	s.Reference = r.arm("reference", &f.Reference)
	const even = "take frames of even light with the sweep off"
	s.Coded = r.need("code", "coded", f.Code.Coded, even+", the code in place")
	s.Open = r.need("code", "open", f.Code.Open, even+", the code out")
	s.Even = r.files("code", "reference", f.Code.Reference)
	const target = "take frames of a target with structure, sweep off, code open"
	s.TargetStreak = r.need("target", "streak", f.Target.Streak, target)
	s.TargetReference = r.need("target", "reference", f.Target.Reference, target)
	r.sweep(s, f)
	s.Scale = f.Scale.UmPerPx
	if s.Scale < 0 || !finite(s.Scale) {
		r.fail("scale", "um_per_px", fmt.Sprintf("the scale is %g", s.Scale), "write the length in the scene that one streak pixel sees, in µm, or leave [scale] out")
	}
	if s.Window = f.Window; s.Window != nil && (s.Window.W < minWindow || s.Window.H < minWindow || s.Window.X < 0 || s.Window.Y < 0) {
		r.fail("window", "", fmt.Sprintf("the window is %d×%d px at (%d, %d)", s.Window.W, s.Window.H, s.Window.X, s.Window.Y),
			fmt.Sprintf("give x, y, w, h on the turned sensor, w and h at least %d, or leave [window] out to have it found", minWindow))
	}
	if !s.ValidUntil.IsZero() && !s.ValidFrom.Before(s.ValidUntil) {
		r.fail("validity", "until", "the bundle would end before it begins", "write until later than from, or leave it out")
	}
	s.Warnings = s.missing()
	return s
}

func (r *reader) arm(name string, f *armSeriesFile) ArmSeries {
	a := ArmSeries{Saturation: f.Saturation, Exposure: f.Exposure}
	a.Dark = r.need(name, "dark", f.Dark, "take frames with the light blocked, at least two")
	for i, pair := range f.Flat {
		key := fmt.Sprintf("flat pair %d", i+1)
		if len(pair) != 2 {
			r.fail(name, "flat", fmt.Sprintf("%s names %d files", key, len(pair)), `write pairs of equal exposure: flat = [["a0.tif", "b0.tif"], ["a1.tif", "b1.tif"]]`)
			continue
		}
		var p [2]string
		for j := range pair {
			got := r.files(name, "flat", pair[j:j+1])
			if len(got) > 1 {
				r.fail(name, "flat", fmt.Sprintf("%s: %q matches %d files", key, pair[j], len(got)), "name one file each")
			}
			if len(got) > 0 {
				p[j] = got[0]
			}
		}
		a.Flat = append(a.Flat, p)
	}
	if a.Exposure != nil && len(a.Exposure) != len(a.Flat) {
		r.fail(name, "exposure", fmt.Sprintf("%d exposures for %d flat pairs", len(a.Exposure), len(a.Flat)), "write one exposure for each pair, in the same order")
	}
	for _, e := range a.Exposure {
		if !(e > 0) || math.IsInf(e, 0) {
			r.fail(name, "exposure", fmt.Sprintf("an exposure is %g", e), "write positive numbers in any one unit")
		}
	}
	if !(a.Saturation >= 0) || math.IsInf(a.Saturation, 0) {
		r.fail(name, "saturation", fmt.Sprintf("saturation is %g ADU", a.Saturation), "write the largest code the camera delivers, or leave it out")
	}
	return a
}

func (r *reader) sweep(s *Series, f *seriesFile) {
	switch s.Direction {
	case "down", "up", "left", "right":
	default:
		r.fail("sweep", "direction", fmt.Sprintf("direction is %q", s.Direction), `write where later light lands on the sensor: "down", "up", "left" or "right"`)
	}
	last := math.Inf(-1)
	for i, d := range f.Sweep.Delays {
		key := fmt.Sprintf("delay %d", i+1)
		if d.PS == nil || !finite(*d.PS) {
			r.fail("sweep", "delays", key+" has no time", "write { ps = 4.0, frames = [\"spot_004.tif\"] }")
			continue
		}
		if *d.PS <= last {
			r.fail("sweep", "delays", fmt.Sprintf("%s, %g ps, is not later than the one before, %g ps", key, *d.PS, last), "list the delays in rising order, each once; put frames of one delay into its frames list")
		}
		last = *d.PS
		if len(d.Frames) == 0 {
			r.fail("sweep", "delays", key+" names no frames", "write { ps = 4.0, frames = [\"spot_004.tif\"] }")
		}
		s.Delays = append(s.Delays, Delay{*d.PS, r.files("sweep", "delays", d.Frames)})
	}
	if len(f.Sweep.Delays) < 2 {
		r.fail("sweep", "delays", fmt.Sprintf("%d delays", len(f.Sweep.Delays)), "take spots at two delays at least, better ten over the whole span: without them there is no time axis")
	}
	s.Still = r.files("sweep", "still", f.Sweep.Still)
}

// missing says what the series does without.
func (s *Series) missing() (w []string) {
	add := func(missing bool, text string) {
		if missing {
			w = append(w, text)
		}
	}
	for _, a := range []struct {
		name string
		arm  *ArmSeries
	}{{"streak", &s.Streak}, {"reference", &s.Reference}} {
		add(len(a.arm.Flat) == 0, "["+a.name+"] flat is missing: the response of every pixel is taken as equal, dead pixels are not found, and the gain comes from repeated frames of the series or, failing those, is set to 1 pe/ADU")
		add(len(a.arm.Dark) == 1, "["+a.name+"] dark is a single frame: the read noise is found from its spatial variation and may be too large")
		add(len(a.arm.Flat) > 0 && a.arm.Exposure == nil, "["+a.name+"] exposure is missing: the linearity error cannot be found")
	}
	add(len(s.Even) == 0, "[code] reference is missing: the throughput ratio comes from the target frames alone")
	add(s.Scale == 0, "[scale] is missing: lengths and speeds are given in pixels only")
	add(len(s.Delays) == 2, "[sweep] has two delays only: the sweep is taken as even and its residual is not known")
	add(len(s.Still) == 0, "[sweep] still is missing: the displacement at 0 ps is taken as 0")
	return w
}
