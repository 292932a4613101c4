package main

import (
	"fmt"

	"github.com/spf13/cobra"

	"unsheard/config"
	"unsheard/daemon"
)

func checkCommand() *cobra.Command {
	var path string
	var asJSON bool
	c := &cobra.Command{
		Use:   "check",
		Short: "find what would go wrong tonight",
		Long: `Looks at the configuration, the folders, the latest frames, the bundles, the disk,
the memory and the page's address, and says of each finding what to do about it.

Exit code 1 says that something needs mending.`,
		Example: `  unsheard check --config unsheard.toml`,
		Args:    cobra.NoArgs,
		RunE: func(cmd *cobra.Command, _ []string) error {
			cfg, err := config.Load(path)
			if err != nil {
				return err
			}
			found := daemon.Check(cmd.Context(), cfg)
			w, bad := cmd.OutOrStdout(), 0
			for _, f := range found {
				if !f.OK {
					bad++
				}
			}
			if asJSON {
				err = printJSON(w, struct {
					OK       bool             `json:"ok"`
					Findings []daemon.Finding `json:"findings"`
				}{bad == 0, found})
			} else {
				for _, f := range found {
					fmt.Fprintln(w, findingLine(f))
				}
				fmt.Fprintf(w, "%d of %d findings need mending\n", bad, len(found))
			}
			if err == nil && bad > 0 {
				return errBad
			}
			return err
		},
	}
	c.Flags().StringVar(&path, "config", "unsheard.toml", "configuration file")
	c.Flags().BoolVar(&asJSON, "json", false, "print the findings as JSON")
	return c
}

func findingLine(f daemon.Finding) string {
	name := f.What
	if f.Station != "" {
		name = f.Station + ": " + name
	}
	if f.OK {
		return fmt.Sprintf("ok    %s: %s", name, f.Detail)
	}
	return fmt.Sprintf("MEND  %s: %s\n      -> %s", name, f.Detail, f.Remedy)
}
