package rig

import (
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
)

// Numbers of frames in a calibration series.
const (
	darkFrames   = 16
	evenFrames   = 8 // coded, open and reference
	targetFrames = 6
	delayFrames  = 2
)

// flatLevels are the exposures of the flat pairs, parts of the level at which
// the sensor is full; the last one is above it.
var flatLevels = []float64{0.02, 0.06, 0.14, 0.28, 0.45, 0.62, 0.8, 1.15}

// full returns the signal at which a sensor's codes stop rising,
// photoelectrons.
func (m *camera) full() float64 {
	return min(m.FullWell, (float64(int(1)<<m.Bits-1)-m.Sensor.Offset)*m.Gain)
}

// WriteSeries writes a complete calibration series, series.toml and its frame
// files, into dir. The directory is made if it is missing.
func (s *Station) WriteSeries(dir string) error {
	if err := os.MkdirAll(dir, 0o755); err != nil {
		return fmt.Errorf("write calibration series: %w", err)
	}
	w := writer{s: s, dir: dir, rng: rand.New(rand.NewPCG(s.o.Seed, streamSeries))}
	w.line("station = %q", s.o.Station)
	w.line("")
	w.arm("streak", "s", s.streak)
	w.arm("reference", "r", s.reference)
	w.even()
	w.target()
	w.delays()
	if s.o.UmPerPx > 0 {
		w.line("[scale]")
		w.line("um_per_px = %g", s.o.UmPerPx)
	}
	if w.err != nil {
		return fmt.Errorf("write calibration series: %w", w.err)
	}
	if err := os.WriteFile(filepath.Join(dir, "series.toml"), []byte(w.toml.String()), 0o644); err != nil {
		return fmt.Errorf("write calibration series: %w", err)
	}
	return nil
}

// writer writes one series and keeps the first error.
type writer struct {
	s    *Station
	dir  string
	rng  *rand.Rand
	toml strings.Builder
	err  error
}

func (w *writer) line(format string, a ...any) { fmt.Fprintf(&w.toml, format+"\n", a...) }

// frame films light once and saves it.
func (w *writer) frame(m *camera, light []float64, name string) {
	if w.err != nil {
		return
	}
	im := m.capture(light, w.rng)
	if m == w.s.streak {
		im = im.raw(w.s.o.Direction)
	}
	w.err = Save(im, filepath.Join(w.dir, name))
}

// frames films the same light n times as prefix_00.tif and so on.
func (w *writer) frames(m *camera, light []float64, prefix string, n int) {
	for i := range n {
		w.frame(m, light, fmt.Sprintf("%s_%02d.tif", prefix, i))
	}
}

// arm writes the dark frames and the flat pairs of one arm: even light on the
// whole sensor.
func (w *writer) arm(name, tag string, m *camera) {
	light := m.blank()
	w.frames(m, light, "dark_"+tag, darkFrames)
	pairs := make([]string, len(flatLevels))
	for k, part := range flatLevels {
		for i := range light {
			light[i] = part * m.full()
		}
		a, b := fmt.Sprintf("flat_%s_%da.tif", tag, k), fmt.Sprintf("flat_%s_%db.tif", tag, k)
		w.frame(m, light, a)
		w.frame(m, light, b)
		pairs[k] = fmt.Sprintf("[%q, %q]", a, b)
	}
	w.line("[%s]", name)
	w.line(`dark = ["dark_%s_*.tif"]`, tag)
	w.line("flat = [%s]", strings.Join(pairs, ", "))
	w.line("")
}

// field fills a plane of the whole field with light of the given function,
// photoelectrons per window pixel.
func (s *Station) field(light func(x, y float64) float64) plane {
	f := s.o.Field
	p := newPlane((s.o.H+2*f)*sub, (s.o.W+2*f)*sub, -float64(f), -float64(f))
	for r := range p.rows {
		for q := range p.cols {
			p.pe[r*p.cols+q] = light(p.x(q), p.y(r)) / (sub * sub)
		}
	}
	return p
}

// views returns the sweep-off light on both sensors.
func (s *Station) views(still plane, code []float64) (streak, reference []float64) {
	streak, reference = s.streak.blank(), s.reference.blank()
	s.project(streak, s.mask(still, code), 0, 1)
	s.splat(reference, still, s.o.Ratio, 1)
	return streak, reference
}

// level is a comfortable exposure for both arms, photoelectrons per pixel.
func (s *Station) level() float64 {
	perPixel := s.o.Ratio / (s.o.View.Scale * s.o.View.Scale)
	return 0.55 * min(s.streak.full(), s.reference.full()/perPixel)
}

// even writes the code with and without the pattern, in even light.
func (w *writer) even() {
	s, level := w.s, w.s.level()
	half := float64(s.o.W) / 2
	still := s.field(func(x, y float64) float64 { return level * (1 + s.o.Tilt*(x-half)/(2*half)) })
	coded, reference := s.views(still, s.code)
	open, _ := s.views(still, nil)
	w.frames(s.streak, coded, "code", evenFrames)
	w.frames(s.streak, open, "open", evenFrames)
	w.frames(s.reference, reference, "even_r", evenFrames)
	w.line("[code]")
	w.line(`coded = ["code_*.tif"]`)
	w.line(`open = ["open_*.tif"]`)
	w.line(`reference = ["even_r_*.tif"]`)
	w.line("")
}

// target writes a structured target seen by both arms, code removed.
func (w *writer) target() {
	s, level := w.s, w.s.level()
	card := newCard(s.o)
	streak, reference := s.views(s.field(func(x, y float64) float64 { return level * card.at(x, y) }), nil)
	w.frames(s.streak, streak, "target_s", targetFrames)
	w.frames(s.reference, reference, "target_r", targetFrames)
	w.line("[target]")
	w.line(`streak = ["target_s_*.tif"]`)
	w.line(`reference = ["target_r_*.tif"]`)
	w.line("")
}

// Delays returns the delays of the sweep series (ps): even steps from 0 to
// the time at which the sweep has moved T-1 pixels, about one every second
// frame.
func (s *Station) Delays() []float64 {
	n := max(s.o.T/2, 4)
	d := make([]float64, n+1)
	for i := range d {
		d[i] = math.Round(1e6*s.o.Span*float64(i)/float64(n)) / 1e6
	}
	return d
}

// pulse is the rms length of the delay pulses, ps.
const pulse = 0.05

// Spots returns the places (window px) of the spots of the sweep series.
func (s *Station) Spots() [][2]float64 {
	w, h := float64(s.o.W), float64(s.o.H)
	return [][2]float64{{0.17 * w, 0.27 * h}, {0.39 * w, 0.71 * h}, {0.61 * w, 0.44 * h}, {0.83 * w, 0.62 * h}}
}

// spot is the width of the spots of the sweep series, px.
const spot = 1.3

// delays writes short pulses at known delays, sweep on, code removed. A pulse
// is three moments, the Gauss-Hermite rule that keeps its mean and variance
// (Abramowitz & Stegun, table 25.10, n = 3).
func (w *writer) delays() {
	s := w.s
	still := s.field(func(x, y float64) float64 {
		var sum float64
		for i, p := range s.Spots() {
			f, _ := blob(p[0], p[1], spot, spot, 0.5*s.streak.full()*(1-0.1*float64(i)))
			sum += f(x, y)
		}
		return sum
	})
	var list []string
	for _, d := range s.Delays() {
		light := s.streak.blank()
		for _, m := range [][2]float64{{-math.Sqrt(3), 1.0 / 6}, {0, 4.0 / 6}, {math.Sqrt(3), 1.0 / 6}} {
			p := s.mask(still, nil)
			for i := range p.pe {
				p.pe[i] *= m[1]
			}
			s.project(light, p, s.At(d+m[0]*pulse), 1)
		}
		prefix := fmt.Sprintf("spot_%07d", int(math.Round(d*1000)))
		names := make([]string, delayFrames)
		for i := range names {
			names[i] = fmt.Sprintf("%q", fmt.Sprintf("%s_%02d.tif", prefix, i))
		}
		w.frames(s.streak, light, prefix, delayFrames)
		list = append(list, fmt.Sprintf("  { ps = %s, frames = [%s] },", decimal(d), strings.Join(names, ", ")))
	}
	w.line("[sweep]")
	w.line("direction = %q", s.o.Direction)
	w.line("delays = [\n%s\n]", strings.Join(list, "\n"))
	w.line("")
}

// decimal writes a TOML float, with a point even for whole numbers.
func decimal(v float64) string {
	t := fmt.Sprintf("%.6f", v)
	t = strings.TrimRight(t, "0")
	if strings.HasSuffix(t, ".") {
		t += "0"
	}
	return t
}
