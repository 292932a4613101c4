package main

import (
	"fmt"
	"os"
	"path/filepath"
	"time"

	"github.com/spf13/cobra"
	"github.com/spf13/pflag"
	"go.uber.org/zap"
	"go.uber.org/zap/zapcore"

	"unsheard/config"
	"unsheard/daemon"
)

func simulationFlags(f *pflag.FlagSet, s *daemon.Simulation) {
	f.IntVar(&s.Shots, "shots", s.Shots, "number of shots; 0: see above")
	f.DurationVar(&s.Every, "every", s.Every, "time between shots; 0s: as fast as possible")
	f.Float64Var(&s.FaultRate, "faults", s.FaultRate, "part of the shots with a fault, 0 to 1")
	f.Float64Var(&s.Light, "light", 0, "photoelectrons in the brightest voxel; 0: 200")
	f.BoolVar(&s.Large, "large", false, "128×128 px and 64 frames instead of 64×64 and 32")
	f.Uint64Var(&s.Seed, "seed", 1, "fixes everything random")
}

func simulateCommand() *cobra.Command {
	s := daemon.Simulation{Shots: 12}
	c := &cobra.Command{
		Use:   "simulate",
		Short: "write a simulated station's series and campaign to folders",
		Long: `Writes below --out: series/ (a calibration series with series.toml), drop/streak and
drop/reference (the frames of a campaign), truth/ (what really happened, one JSON
file a shot) and unsheard.toml, a configuration that fits. With --shots 0 only the
series and the configuration are written.`,
		Example: `  unsheard simulate --out sim --shots 20 --faults 0.2
  unsheard calibrate --series sim/series/series.toml --out sim/bundles/basin/first
  unsheard watch --config sim/unsheard.toml`,
		Args: cobra.NoArgs,
		RunE: func(cmd *cobra.Command, _ []string) error {
			s.Log = cmd.OutOrStdout()
			return daemon.Simulate(cmd.Context(), s)
		},
	}
	c.Flags().StringVar(&s.Dir, "out", "", "folder to write to")
	simulationFlags(c.Flags(), &s)
	c.Flags().StringVar(&s.Direction, "direction", "down", "where later light lands: down, up, left or right")
	c.Flags().BoolVar(&s.Cubes, "cubes", false, "also write the true cubes, as .npy")
	require(c, "out")
	return c
}

func demoCommand() *cobra.Command {
	d := daemon.Demo{Simulation: daemon.Simulation{Every: 2 * time.Second, FaultRate: 0.2}}
	c := &cobra.Command{
		Use:   "demo",
		Short: "a simulated station feeding a real service: the whole job at once",
		Long: `Simulates a station that films light in a small water basin: it takes its
calibration series, calibrates, and then drops a shot every two seconds into two
folders, now and then with a fault. A real service watches them; its page is on
this computer only. Everything is in a temporary folder that is kept. Runs until
Ctrl-C.`,
		Example: `  unsheard demo
  go run ./daemon/cmd/unsheard demo`,
		Args: cobra.NoArgs,
		RunE: func(cmd *cobra.Command, _ []string) error {
			d.Log = cmd.OutOrStdout()
			if d.Dir == "" {
				dir, err := os.MkdirTemp("", "unsheard-demo-")
				if err != nil {
					return fmt.Errorf("demo: %w", err)
				}
				d.Dir = dir
			}
			lc := config.Log{File: filepath.Join(d.Dir, "state", "unsheard.log"), Level: zapcore.WarnLevel.String(), MaxSize: 20e6, Keep: 1}
			logger, done, err := newLogger(&lc, cmd.ErrOrStderr())
			if err != nil {
				return err
			}
			defer done()
			d.Logger = logger.Named("demo").WithOptions(zap.WithCaller(false))
			if err := daemon.RunDemo(cmd.Context(), d); err != nil {
				return err
			}
			fmt.Fprintf(cmd.OutOrStdout(), "\nstopped; everything is kept in %s\n", d.Dir)
			return nil
		},
	}
	c.Flags().StringVar(&d.Dir, "dir", "", "folder for everything; default: a new temporary one")
	c.Flags().StringVar(&d.Listen, "listen", "127.0.0.1:8787", "address of the page; port 0 takes a free one")
	simulationFlags(c.Flags(), &d.Simulation)
	return c
}
