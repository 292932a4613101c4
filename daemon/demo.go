package daemon

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"
	"time"

	"go.uber.org/zap"
	"golang.org/x/sync/errgroup"

	"unsheard/config"
	"unsheard/pipeline/rig"
)

// Simulation says what a simulated station writes.
type Simulation struct {
	Dir       string        // folder for everything
	Shots     int           // 0: until the context ends
	Every     time.Duration // between shots; 0: as fast as possible
	FaultRate float64       // part of the shots with a fault
	Light     float64       // photoelectrons of the brightest voxel; 0: the station's default
	Large     bool          // 128×128 px and 64 frames instead of 64×64 and 32
	Direction string        // of the sweep; "": down
	Seed      uint64
	Cubes     bool // also write the true cubes
	Log       io.Writer
}

// The parts of a simulation's folder.
const (
	simSeries  = "series"
	simDrop    = "drop"
	simTruth   = "truth"
	simBundles = "bundles"
)

func (s *Simulation) station() (*rig.Station, error) {
	o := rig.Default()
	if s.Large {
		o = rig.Large()
	}
	o.Station = "basin"
	if s.Light > 0 {
		o.Peak = s.Light
	}
	if s.Direction != "" {
		o.Direction = s.Direction
	}
	if s.Seed != 0 {
		o.Seed = s.Seed
	}
	return rig.New(o)
}

func (s *Simulation) campaign() rig.Campaign {
	return rig.Campaign{Streak: filepath.Join(s.Dir, simDrop, "streak"), Reference: filepath.Join(s.Dir, simDrop, "reference"),
		Truth: filepath.Join(s.Dir, simTruth), Shots: s.Shots, Every: s.Every, FaultRate: s.FaultRate, Seed: s.Seed + 1, Cubes: s.Cubes}
}

func (s *Simulation) say(format string, a ...any) {
	if s.Log != nil {
		fmt.Fprintf(s.Log, format+"\n", a...)
	}
}

// Simulate writes a calibration series, a configuration that fits and a
// campaign to the drop folders.
func Simulate(ctx context.Context, s Simulation) error {
	st, err := s.begin(ctx)
	if err != nil {
		return err
	}
	if s.Shots <= 0 {
		return nil
	}
	s.say("writing %d shots to %s, what really happened to %s", s.Shots, filepath.Join(s.Dir, simDrop), filepath.Join(s.Dir, simTruth))
	return st.WriteCampaign(ctx, s.campaign(), nil)
}

// begin writes the series and the configuration.
func (s *Simulation) begin(ctx context.Context) (*rig.Station, error) {
	st, err := s.station()
	if err != nil {
		return nil, err
	}
	if err := os.MkdirAll(s.Dir, 0o755); err != nil {
		return nil, fmt.Errorf("simulate: %w", err)
	}
	for _, part := range []string{simSeries, simDrop, simTruth} {
		if exists(filepath.Join(s.Dir, part)) {
			return nil, fmt.Errorf("simulate: %q holds a simulation already: name an empty folder", s.Dir)
		}
	}
	s.say("taking the calibration series of a simulated station (%s)", filepath.Join(s.Dir, simSeries))
	if err := st.WriteSeries(filepath.Join(s.Dir, simSeries)); err != nil {
		return nil, err
	}
	for _, arm := range []string{"streak", "reference"} {
		if err := os.MkdirAll(filepath.Join(s.Dir, simDrop, arm), 0o755); err != nil {
			return nil, fmt.Errorf("simulate: %w", err)
		}
	}
	return st, os.WriteFile(filepath.Join(s.Dir, "unsheard.toml"), []byte(s.settings("127.0.0.1:8787")), 0o644)
}

// settings is a configuration for the simulated station.
func (s *Simulation) settings(listen string) string {
	return strings.Join([]string{
		"# A simulated station. Make its bundle first:",
		"#   unsheard calibrate --series series/series.toml --out bundles/basin/first",
		"[campaign]", `name  = "basin"`, `state = "state"`, "",
		"[[station]]", `name   = "basin"`, `bundle = "bundles/basin"`, "",
		"[station.streak]", `folder = "drop/streak"`, `stamp  = "S_%Y%m%dT%H%M%S.%f.tif"`, `quiet  = "300ms"`, "",
		"[station.reference]", `folder = "drop/reference"`, `stamp  = "R_%Y%m%dT%H%M%S.%f.tif"`, `quiet  = "300ms"`, "",
		"[station.pair]", `within = "5ms"`, `grace  = "10s"`, "",
		"[page]", `listen = "` + listen + `"`, "",
	}, "\n")
}

// Demo options.
type Demo struct {
	Simulation
	Listen string // address of the page
	Logger *zap.Logger

	// Executable as in Options.
	Executable string

	// Started as in Options.
	Started func(page string)
}

// RunDemo simulates a station that feeds a real service, until ctx ends.
func RunDemo(ctx context.Context, d Demo) error {
	st, err := d.begin(ctx)
	if err != nil {
		return err
	}
	d.say("calibrating from the raw series")
	b, err := Calibrate(ctx, filepath.Join(d.Dir, simSeries, "series.toml"), filepath.Join(d.Dir, simBundles, "basin", "first"))
	if err != nil {
		return err
	}
	d.say("  window %d×%d px, %d frames, throughput ratio %v, registration within %.2g px", b.Window.W, b.Window.H, b.Frames, b.Ratio, b.RegistrationResidual)
	path := filepath.Join(d.Dir, "unsheard.toml")
	if err := os.WriteFile(path, []byte(d.settings(d.Listen)), 0o644); err != nil {
		return fmt.Errorf("demo: %w", err)
	}
	c, err := config.Load(path)
	if err != nil {
		return err
	}
	ctx, stop := context.WithCancel(ctx)
	defer stop()
	svc, err := New(ctx, Options{Config: c, Logger: d.Logger, Executable: d.Executable, Started: func(page string) {
		d.say("\n  page     %s\n  results  %s\n  truth    %s\n\nA shot every %v; some have a fault. Stop with Ctrl-C.\n",
			page, filepath.Join(d.Dir, simDrop, "streak"), filepath.Join(d.Dir, simTruth), d.Every)
		if d.Started != nil {
			d.Started(page)
		}
	}})
	if err != nil {
		return err
	}
	g, gctx := errgroup.WithContext(ctx)
	g.Go(func() error { return svc.Run(gctx) })
	g.Go(func() error {
		err := st.WriteCampaign(gctx, d.campaign(), func(r rig.Record) {
			note := ""
			if r.Fault != "" {
				note = ", fault: " + string(r.Fault)
			}
			d.say("shot %d: %s%s", r.Shot, r.Scene, note)
		})
		if errors.Is(err, context.Canceled) {
			return nil
		}
		return err
	})
	return g.Wait()
}
