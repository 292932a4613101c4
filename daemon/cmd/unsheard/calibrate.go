package main

import (
	"fmt"

	"github.com/spf13/cobra"

	"unsheard/daemon"
)

func calibrateCommand() *cobra.Command {
	var series, out string
	var asJSON bool
	c := &cobra.Command{
		Use:   "calibrate",
		Short: "make a calibration bundle from raw series",
		Long: `Reads the raw frames that series.toml lists (dark, flat, code, target, sweep
delays) and writes a bundle: a folder with bundle.toml (every number with its
uncertainty and how it was found), arrays as .npy and report.html. An existing
bundle is never changed: give each one a folder of its own. Warnings name what
the series lack and what follows from it.`,
		Example: `  unsheard calibrate --series monday/series.toml --out bundles/bay-a/monday`,
		Args:    cobra.NoArgs,
		RunE: func(cmd *cobra.Command, _ []string) error {
			b, err := daemon.Calibrate(cmd.Context(), series, out)
			if err != nil {
				return err
			}
			w := cmd.OutOrStdout()
			if asJSON {
				if err := printJSON(w, daemon.BundleFacts(b, out)); err != nil {
					return err
				}
			} else {
				daemon.DescribeBundle(w, b, out)
			}
			return nil
		},
	}
	c.Flags().StringVar(&series, "series", "", "series.toml, which lists the raw frames")
	c.Flags().StringVar(&out, "out", "", "bundle folder to make")
	c.Flags().BoolVar(&asJSON, "json", false, "print the numbers as JSON")
	require(c, "series", "out")
	return c
}

func childCommand() *cobra.Command {
	return &cobra.Command{
		Use:    daemon.ChildCommand,
		Short:  "work on one shot for the service (not for use by hand)",
		Hidden: true,
		Args:   cobra.NoArgs,
		RunE: func(cmd *cobra.Command, _ []string) error {
			if err := daemon.Child(cmd.Context(), cmd.InOrStdin(), cmd.OutOrStdout()); err != nil {
				return fmt.Errorf("worker process: %w", err)
			}
			return nil
		},
	}
}
