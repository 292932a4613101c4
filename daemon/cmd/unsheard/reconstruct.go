package main

import (
	"encoding/json"
	"fmt"
	"io"
	"path/filepath"
	"slices"
	"strings"

	"github.com/spf13/cobra"

	"unsheard/daemon"
	"unsheard/pipeline"
	"unsheard/pipeline/measure"
)

func reconstructCommand() *cobra.Command {
	var job pipeline.Job
	var out string
	var asJSON bool
	c := &cobra.Command{
		Use:   "reconstruct",
		Short: "reconstruct one pair of frames now, without the service",
		Long: `Reconstructs one shot from its two frame files and writes the result folder
--out: cube.nxs, metrics.json and pictures. An earlier result there is kept under
versions/. The frame files are only read.

Exit code 1 says that the shot is unusable.`,
		Example: `  unsheard reconstruct --bundle bundles/bay-a/monday --streak S_0001.tif \
      --reference R_0001.tif --out S_0001.shot`,
		Args: cobra.NoArgs,
		RunE: func(cmd *cobra.Command, _ []string) error {
			name := filepath.Base(job.Streak)
			job.Shot = strings.TrimSuffix(name, filepath.Ext(name))
			res, err := daemon.Reconstruct(cmd.Context(), job, out)
			if err != nil {
				return err
			}
			if err := printResult(cmd.OutOrStdout(), res, out, asJSON); err != nil {
				return err
			}
			if res.Report.Verdict.Grade == measure.Unusable {
				return errBad
			}
			return nil
		},
	}
	f := c.Flags()
	f.StringVar(&job.Bundle, "bundle", "", "calibration bundle (folder)")
	f.StringVar(&job.Streak, "streak", "", "streak frame file")
	f.StringVar(&job.Reference, "reference", "", "reference frame file")
	f.StringVar(&out, "out", "", "result folder to write")
	f.IntVar(&job.Coarse, "coarse", 1, "take N×N pixels and N frames together: faster, coarser")
	f.IntVar(&job.Workers, "workers", 0, "processors to use; 0: all (the cube does not depend on it)")
	f.BoolVar(&asJSON, "json", false, "print the numbers as JSON")
	require(c, "bundle", "streak", "reference", "out")
	return c
}

// require marks flags that must be given.
func require(c *cobra.Command, names ...string) {
	for _, n := range names {
		if err := c.MarkFlagRequired(n); err != nil {
			panic(err) // the flag does not exist: a mistake in this file
		}
	}
}

func printResult(w io.Writer, res *pipeline.Result, dir string, asJSON bool) error {
	if asJSON {
		return printJSON(w, struct {
			Out        string                      `json:"out"`
			Verdict    measure.Verdict             `json:"verdict"`
			Quantities map[string]measure.Quantity `json:"quantities"`
			Notes      []string                    `json:"notes,omitempty"`
			Solver     pipeline.Solver             `json:"solver"`
		}{dir, res.Report.Verdict, res.Report.Quantities, res.Report.Notes, res.Provenance.Solver})
	}
	fmt.Fprintf(w, "%s: %s\n", res.Provenance.Shot, res.Report.Verdict.Grade)
	for _, r := range res.Report.Verdict.Reasons {
		fmt.Fprintf(w, "  - %s: %s\n", r.Text, r.Remedy)
	}
	names := make([]string, 0, len(res.Report.Quantities))
	for n := range res.Report.Quantities {
		names = append(names, n)
	}
	slices.Sort(names)
	for _, n := range names {
		q := res.Report.Quantities[n]
		line := fmt.Sprintf("  %-20s %.6g", n, q.Value)
		if q.Sigma != nil {
			line += fmt.Sprintf(" ± %.2g", *q.Sigma)
		}
		fmt.Fprintf(w, "%s %s\n", line, q.Unit)
	}
	for _, n := range res.Report.Notes {
		fmt.Fprintf(w, "  note: %s\n", n)
	}
	s := res.Provenance.Solver
	fmt.Fprintf(w, "  solver: %s after %d iterations, lambda %.3g; %.2f s in all\n", s.Status, s.Iterations, s.Lambda, res.Seconds())
	fmt.Fprintf(w, "results in %s\n", dir)
	return nil
}

func printJSON(w io.Writer, v any) error {
	e := json.NewEncoder(w)
	e.SetIndent("", "  ")
	return e.Encode(v)
}
